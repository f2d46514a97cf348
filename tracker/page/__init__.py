"""The inspection page, on this machine only."""

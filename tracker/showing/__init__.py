"""Results made visible: overlay, plots, reports."""

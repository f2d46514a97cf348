"""Many recordings: a term's worth."""

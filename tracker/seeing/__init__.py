"""Recording in, tracks out."""

"""Tracks in, droplets out."""

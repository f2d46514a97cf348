"""Recordings of charged oil droplets in, tables of speed, radius and charge out."""

__all__: list[str] = []

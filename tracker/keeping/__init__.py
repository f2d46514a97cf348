"""The result folder: tables, provenance, decisions."""

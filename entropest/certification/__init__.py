"""Bounds that a referee can re-check."""

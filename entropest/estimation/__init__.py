"""Estimates of entropies and divergences with intervals."""

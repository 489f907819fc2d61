"""Fluxes to standard magnitudes: zero points, colour, extinction, verdicts."""

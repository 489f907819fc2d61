"""Pixels to fluxes: apertures, sky, noise, growth curve, stamps."""

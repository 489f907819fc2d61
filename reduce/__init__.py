"""Photometry reduction and distances for standard candles; usable from a script without the terminal app."""

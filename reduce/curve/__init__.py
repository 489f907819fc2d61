"""Frames to nights: nightly points and limits."""

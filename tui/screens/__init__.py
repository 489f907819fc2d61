"""Screens of the app, one module each."""

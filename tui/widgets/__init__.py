"""Widgets of the app: chart, preview, step line."""

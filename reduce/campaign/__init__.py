"""The one door for app, commands and scripts: create, open, reduce, curve, distance, decide, undo, export."""

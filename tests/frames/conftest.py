"""Lets the files of this folder import frame_files."""

"""From a file on disk to a trusted frame."""

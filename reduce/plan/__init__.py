"""What to observe next."""

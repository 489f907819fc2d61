"""What to observe: the night's sky, exposures, and what each would add to the distance."""

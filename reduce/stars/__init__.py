"""Finding stars in an image: detection, centroid, width."""

"""Places on the sky: positions, proper motion, separations, sky cells."""

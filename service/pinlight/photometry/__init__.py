"""Bands, colour systems and extinction."""

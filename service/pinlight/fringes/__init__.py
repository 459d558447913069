"""Fringes: visibility, sensitivity, noise, companions."""

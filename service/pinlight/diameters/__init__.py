"""Angular diameters: relations, prediction, limb darkening, oblateness."""

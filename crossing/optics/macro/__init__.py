"""The macro lens beyond one place: mass profiles, maps of lens models, their critical curves and merging images."""

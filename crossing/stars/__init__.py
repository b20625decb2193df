"""Stars as sources: photospheres, limb darkening, extinction."""

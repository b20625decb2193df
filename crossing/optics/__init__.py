"""Closed forms of lensing: scales, motion, the local macro lens, fold and point-lens magnification."""

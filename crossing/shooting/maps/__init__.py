"""Magnification maps: made, kept, convolved, summarised, drawn."""

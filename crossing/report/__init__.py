"""Figures and texts of results: reads them, computes nothing."""

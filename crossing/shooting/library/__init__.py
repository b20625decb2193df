"""Ensembles of tracks that are kept on disk."""

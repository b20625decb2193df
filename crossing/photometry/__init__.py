"""Observed light curves: tables in and out, bands, fluxes, limits and flags."""

from crossing.photometry.flags import FLAGS, RowFlag, flag_bit, flag_names
from crossing.photometry.lightcurve import LevelGroup, LightCurve
from crossing.photometry.merge import merge_lightcurves
from crossing.photometry.reader import read_lightcurve, read_photometry

__all__ = [
    "FLAGS",
    "LevelGroup",
    "LightCurve",
    "RowFlag",
    "flag_bit",
    "flag_names",
    "merge_lightcurves",
    "read_lightcurve",
    "read_photometry",
]

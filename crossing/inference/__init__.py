"""Light-curve models, their fits and evidences."""

from crossing.inference.estimates import Estimate
from crossing.inference.fit import MODELS, fit_crossing
from crossing.inference.priors import FitPriors
from crossing.inference.result import FLAGS, CrossingFit

__all__ = ["FLAGS", "MODELS", "CrossingFit", "Estimate", "FitPriors", "fit_crossing"]

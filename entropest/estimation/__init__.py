"""Estimates of entropies and divergences with intervals."""

from entropest.estimation.estimate import estimate
from entropest.estimation.estimators import ESTIMATORS, Continuation, Corrected, Estimator, PlugIn
from entropest.estimation.many import ManyEstimates, estimate_many
from entropest.estimation.posterior import HilbertSchmidtPosterior
from entropest.estimation.posterior_estimators import AveragedPosterior, PosteriorMean, SplitPosterior
from entropest.estimation.result import Estimate

__all__ = [
    "ESTIMATORS",
    "AveragedPosterior",
    "Continuation",
    "Corrected",
    "Estimate",
    "Estimator",
    "HilbertSchmidtPosterior",
    "ManyEstimates",
    "PlugIn",
    "PosteriorMean",
    "SplitPosterior",
    "estimate",
    "estimate_many",
]

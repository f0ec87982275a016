"""Estimates of entropies and divergences with intervals."""

from entropest.estimation.estimate import estimate
from entropest.estimation.estimators import ESTIMATORS, Continuation, Corrected, Estimator, PlugIn
from entropest.estimation.result import Estimate

__all__ = ["ESTIMATORS", "Continuation", "Corrected", "Estimate", "Estimator", "PlugIn", "estimate"]

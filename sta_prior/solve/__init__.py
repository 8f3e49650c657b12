"""Estimators: frame-wise least squares and maximum a posteriori, and the trial they are told as."""

from sta_prior.solve.trajectory_posterior import CONSTANTS
from sta_prior.solve.trial import DEFAULT_ESTIMATOR, ESTIMATORS, WITH_PRIOR, solve

__all__ = ["CONSTANTS", "DEFAULT_ESTIMATOR", "ESTIMATORS", "WITH_PRIOR", "solve"]

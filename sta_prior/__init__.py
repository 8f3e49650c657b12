"""Bayesian compensation of soft-tissue artifact in marker-based motion capture.

Public names; conventions: docs/conventions.md.
"""

import sta_prior.compiled  # noqa: F401  (before anything compiled is imported)
from sta_prior.pairs import pair
from sta_prior.prior import Prior, learn, load_prior
from sta_prior.solve import solve
from sta_prior.study import Study, Subject, Trial, read_study

__all__ = [
    "Prior",
    "Study",
    "Subject",
    "Trial",
    "learn",
    "load_prior",
    "pair",
    "read_study",
    "solve",
]

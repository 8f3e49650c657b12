"""Artifact priors: what they hand the solver, the families, learning and validation."""

from sta_prior.prior.base import Binding, Prior
from sta_prior.prior.examine import examine
from sta_prior.prior.families import DEFAULT_FAMILY, known_families
from sta_prior.prior.files import load_prior
from sta_prior.prior.interface import Artifact, IsotropicArtifact, Moments
from sta_prior.prior.learning import learn

__all__ = [
    "DEFAULT_FAMILY",
    "Artifact",
    "Binding",
    "IsotropicArtifact",
    "Moments",
    "Prior",
    "examine",
    "known_families",
    "learn",
    "load_prior",
]

"""What every prior hands the solver, and all that the solver knows of priors.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.time_scales import TimeScales


@dataclass(frozen=True)
class Moments:
    """Artifact of one segment at F frames, n outputs (three per marker), in the bone frame.

    Attributes
    ----------
    mean : shape (F, n), m
    mean_derivative : shape (F, n, joints, 3), m/rad
    features : shape (F, K)
        Design of the trial-constant unknowns: K vectors of n values, ``features ⊗ 1``.
    covariance : shape (F, n, n), m²
        Of the whole artifact about its mean: trial-constant unknowns and residual together.
    """

    mean: FloatArray
    mean_derivative: FloatArray
    features: FloatArray
    covariance: FloatArray


class Artifact(Protocol):
    """Artifact of one segment in one trial, whatever the family behind it.

    Attributes
    ----------
    residual : shape (n, n), m²
        Covariance of what the trial-constant unknowns do not explain.
    time_constant : s
        Decay time of the residual's correlation; the slowest where there are two. An artifact with two has
        ``time_scales`` besides (see time_scales_of).
    constant_covariance : shape (K·n, K·n), m²
        Of the trial-constant unknowns, feature-major.
    """

    @property
    def residual(self) -> FloatArray:
        """Residual covariance, shape (n, n), m²."""

    @property
    def time_constant(self) -> float:
        """Decay time of the residual's correlation, s."""

    @property
    def constant_covariance(self) -> FloatArray:
        """Covariance of the trial-constant unknowns, shape (K·n, K·n), m²."""

    def moments(self, angles: FloatArray) -> Moments:
        """Moments at joint angles of shape (F, joints, 3), rad."""


def time_scales_of(artifact: Artifact) -> TimeScales:
    """Correlation of a residual over time: the artifact's ``time_scales``, or its one ``time_constant``."""
    own = getattr(artifact, "time_scales", None)
    return own if isinstance(own, TimeScales) else TimeScales.single(artifact.time_constant)


@dataclass(frozen=True)
class IsotropicArtifact:
    """Zero mean and one independent SD for every output: least squares in the form of a prior.

    outputs: n; sd: m.
    """

    outputs: int
    sd: float
    time_constant: float = 0.0

    @property
    def residual(self) -> FloatArray:
        """Residual covariance, shape (n, n), m²."""
        return self.sd**2 * np.eye(self.outputs)

    @property
    def constant_covariance(self) -> FloatArray:
        """No trial-constant unknowns: shape (0, 0)."""
        return np.zeros((0, 0))

    def moments(self, angles: FloatArray) -> Moments:
        """Moments at joint angles of shape (F, joints, 3), rad: the same at every angle."""
        frames, joints, _ = angles.shape
        return Moments(
            mean=np.zeros((frames, self.outputs)),
            mean_derivative=np.zeros((frames, self.outputs, joints, 3)),
            features=np.zeros((frames, 0)),
            covariance=np.broadcast_to(self.residual, (frames, self.outputs, self.outputs)),
        )

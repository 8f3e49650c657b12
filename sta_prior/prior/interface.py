"""What every prior hands the solver, and all that the solver knows of priors.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.gaussian import nearest_psd
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


@dataclass(frozen=True)
class Design:
    """Artifact of one segment at F frames as the smoother takes it: trial-constant unknowns kept apart.

    Attributes
    ----------
    mean, mean_derivative, features : as Moments has them
    feature_derivative : shape (F, K, joints, 3), 1/rad
    growth : shape (F, n, n), m²
        What the covariance has beyond the trial-constant unknowns' and the residual's; None where nothing.
    """

    mean: FloatArray
    mean_derivative: FloatArray
    features: FloatArray
    feature_derivative: FloatArray
    growth: FloatArray | None


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


_STEP = 1e-5
_NO_GROWTH = 1e-3


def design_of(artifact: Artifact, angles: FloatArray) -> Design:
    """Design at joint angles (F, joints, 3) rad: the artifact's own, else made from its moments.

    Where it offers none, the features are differentiated by central differences, and what its covariance has
    beyond Z P Zᵀ and the residual counts as growth.
    """
    own = getattr(artifact, "design", None)
    if own is not None:
        found: Design = own(angles)
        return found
    moments = artifact.moments(angles)
    joints = angles.shape[1]
    slopes = np.zeros((*moments.features.shape, joints, 3))
    for joint in range(joints) if moments.features.shape[1] else ():
        for column in range(3):
            step = np.zeros((joints, 3))
            step[joint, column] = _STEP
            change = artifact.moments(angles + step).features - artifact.moments(angles - step).features
            slopes[..., joint, column] = change / (2.0 * _STEP)
    n, count = moments.mean.shape[1], moments.features.shape[1]
    beyond = moments.covariance - artifact.residual
    if count:
        spread = artifact.constant_covariance.reshape(count, n, count, n)
        beyond = beyond - np.einsum(
            "fk,kalb,fl->fab", moments.features, spread, moments.features, optimize=True
        )
    least = _NO_GROWTH * float(np.trace(artifact.residual))
    grown = np.einsum("faa->fa", beyond).sum(axis=1) > least
    growth = np.where(grown[:, None, None], beyond, 0.0) if grown.any() else None
    if growth is not None:
        growth = nearest_psd(growth)
    return Design(moments.mean, moments.mean_derivative, moments.features, slopes, growth)


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

"""Artifact of one segment in one trial, for families that are linear in features of the angles.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.basis import Basis
from sta_prior.prior.hierarchy import Weights
from sta_prior.prior.interface import Design, Moments
from sta_prior.prior.time_scales import TimeScales

GROWTH_LENGTH = 0.25
"""Angle beyond the training data over which the spread grows by the magnitude prior's, rad: about 14°.

From docs/extrapolation.md: at 0.5 the SD of solved angles hardly grew before 85°."""


@dataclass(frozen=True)
class FeatureArtifact:
    """Belief about weights of features, plus a residual.

    weights: belief about the trial's weights, K features × n outputs; residual: (n, n) m²;
    time_scales: of the residual; reference: (joints, 3) rad; magnitude: (n, n) m², what the covariance gains
    far beyond the training data.
    """

    basis: Basis
    weights: Weights
    residual: FloatArray
    time_scales: TimeScales
    reference: FloatArray
    magnitude: FloatArray

    @property
    def time_constant(self) -> float:
        """Slowest decay time of the residual's correlation, s."""
        return self.time_scales.slowest

    @property
    def constant_covariance(self) -> FloatArray:
        """Covariance of the trial-constant unknowns, shape (K·n, K·n), m²."""
        return self.weights.covariance

    def _growth(self, angles: FloatArray) -> FloatArray | None:
        """What the covariance gains beyond the training data, (F, n, n) m²; None where nothing."""
        excess = self.basis.excess(angles)
        if not (excess > 0.0).any():
            return None
        growth = 1.0 - np.exp(-0.5 * (excess / GROWTH_LENGTH) ** 2)
        return np.asarray(growth[:, None, None] * self.magnitude)

    def design(self, angles: FloatArray) -> Design:
        """Mean, features and their derivatives at the angles, shape (frames, joints, 3) rad."""
        features, slopes = self.basis.values(angles, self.reference), self.basis.derivatives(angles)
        return Design(
            mean=features @ self.weights.mean,
            mean_derivative=np.einsum("fkjd,kn->fnjd", slopes, self.weights.mean, optimize=True),
            features=features,
            feature_derivative=slopes,
            growth=self._growth(angles),
        )

    def moments(self, angles: FloatArray) -> Moments:
        """Mean, its derivative and covariance at the angles, shape (frames, joints, 3) rad."""
        features = self.basis.values(angles, self.reference)
        count, n = self.weights.mean.shape
        # Products of two features, each pair once, against the covariance folded alike: one small product of
        # matrices, and no array of frames by weights.
        first, second = np.triu_indices(count)
        spread = self.weights.covariance.reshape(count, n, count, n).transpose(0, 2, 1, 3)
        folded = spread[first, second] + np.where((first < second)[:, None, None], spread[second, first], 0.0)
        products = features[:, first] * features[:, second]
        covariance = (products @ folded.reshape(first.size, n * n)).reshape(-1, n, n) + self.residual
        growth = self._growth(angles)
        if growth is not None:
            covariance = covariance + growth
        derivative = np.einsum("fkjd,kn->fnjd", self.basis.derivatives(angles), self.weights.mean)
        return Moments(
            mean=features @ self.weights.mean,
            mean_derivative=derivative,
            features=features,
            covariance=covariance,
        )

"""Markers that a prior does not know, beside those that it does.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.checks import FloatArray, IntArray
from sta_prior.prior.interface import Artifact, Design, Moments, design_of, time_scales_of
from sta_prior.prior.time_scales import TimeScales


@dataclass(frozen=True)
class Augmented:
    """Two independent artifacts on one segment: known outputs from a prior, the others of published size.

    known, others: artifacts; at_known, at_others: positions of their outputs among the n of the trial.
    """

    known: Artifact
    others: Artifact
    at_known: IntArray
    at_others: IntArray

    @property
    def _n(self) -> int:
        return self.at_known.size + self.at_others.size

    def _joined(self, known: FloatArray, others: FloatArray) -> FloatArray:
        """Block matrix of two covariances, (..., n, n)."""
        result = np.zeros((*known.shape[:-2], self._n, self._n))
        result[..., self.at_known[:, None], self.at_known] = known
        result[..., self.at_others[:, None], self.at_others] = others
        return result

    @property
    def residual(self) -> FloatArray:
        """Residual covariance, shape (n, n), m²."""
        return self._joined(self.known.residual, self.others.residual)

    @property
    def time_constant(self) -> float:
        """Slowest decay time of the residual's correlation, s: the known markers'."""
        return self.known.time_constant

    @property
    def time_scales(self) -> TimeScales:
        """Correlation of the residual over time: the known markers'."""
        return time_scales_of(self.known)

    @property
    def constant_covariance(self) -> FloatArray:
        """Covariance of the trial-constant unknowns, (K·n, K·n) m², features of both one after the other."""
        blocks = []
        for artifact, at in ((self.known, self.at_known), (self.others, self.at_others)):
            inner = artifact.constant_covariance
            count = inner.shape[0] // at.size
            places = (self._n * np.arange(count)[:, None] + at).reshape(-1)
            full = np.zeros((count * self._n, count * self._n))
            full[np.ix_(places, places)] = inner
            blocks.append(full)
        size = sum(block.shape[0] for block in blocks)
        result = np.zeros((size, size))
        first = blocks[0].shape[0]
        result[:first, :first], result[first:, first:] = blocks
        return result

    def design(self, angles: FloatArray) -> Design:
        """Design at joint angles of shape (F, joints, 3), rad."""
        known, others = design_of(self.known, angles), design_of(self.others, angles)
        frames, joints, _ = angles.shape
        mean = np.zeros((frames, self._n))
        derivative = np.zeros((frames, self._n, joints, 3))
        for at, part in ((self.at_known, known), (self.at_others, others)):
            mean[:, at] = part.mean
            derivative[:, at] = part.mean_derivative
        growth = None
        if known.growth is not None or others.growth is not None:
            nothing = [np.zeros((frames, at.size, at.size)) for at in (self.at_known, self.at_others)]
            parts = (known.growth, others.growth)
            growth = self._joined(
                *(zero if part is None else part for part, zero in zip(parts, nothing, strict=True))
            )
        return Design(
            mean=mean,
            mean_derivative=derivative,
            features=np.concatenate([known.features, others.features], axis=1),
            feature_derivative=np.concatenate([known.feature_derivative, others.feature_derivative], axis=1),
            growth=growth,
        )

    def moments(self, angles: FloatArray) -> Moments:
        """Moments at joint angles of shape (F, joints, 3), rad."""
        known, others = self.known.moments(angles), self.others.moments(angles)
        frames, joints, _ = angles.shape
        mean = np.zeros((frames, self._n))
        derivative = np.zeros((frames, self._n, joints, 3))
        for at, part in ((self.at_known, known), (self.at_others, others)):
            mean[:, at] = part.mean
            derivative[:, at] = part.mean_derivative
        return Moments(
            mean=mean,
            mean_derivative=derivative,
            features=np.concatenate([known.features, others.features], axis=1),
            covariance=self._joined(known.covariance, others.covariance),
        )

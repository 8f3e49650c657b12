"""Trial-constant unknowns of a segment's artifact, reduced to the few modes that the trial can feel.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

A prior gives K·n weights with a covariance P; over a trial's own angles most of their directions move no
marker by a hundredth of a millimetre. The weights are written w = w̄ + V u, u ~ N(0, 1), with the modes V
that do; the covariance of what is left out joins the residual.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.gaussian import nearest_psd, symmetrise
from sta_prior.prior.interface import Artifact, Design, Moments

NEGLIGIBLE = 2e-4
"""RMS displacement per output below which all that is left out together may stay, m."""


@dataclass(frozen=True)
class ConstantModes:
    """Modes of the trial-constant unknowns.

    modes: V, (K, n, c) m, for u of unit variance; rest: (n, n) m², mean covariance of what is left out.
    """

    modes: FloatArray
    rest: FloatArray


@dataclass(frozen=True)
class Lumped:
    """An artifact whose trial-constant unknowns count as residual: for trials solved without constants.

    inner: the artifact itself.
    """

    inner: Artifact

    @property
    def residual(self) -> FloatArray:
        """Residual covariance, shape (n, n), m²."""
        return self.inner.residual

    @property
    def time_constant(self) -> float:
        """Decay time of the residual's correlation, s."""
        return self.inner.time_constant

    @property
    def constant_covariance(self) -> FloatArray:
        """No trial-constant unknowns: shape (0, 0)."""
        return np.zeros((0, 0))

    def moments(self, angles: FloatArray) -> Moments:
        """Moments at joint angles of shape (F, joints, 3), rad."""
        found = self.inner.moments(angles)
        return replace(found, features=found.features[:, :0])

    def design(self, angles: FloatArray) -> Design:
        """Design at joint angles of shape (F, joints, 3), rad: all of the covariance beyond r is growth."""
        found = self.inner.moments(angles)
        return Design(
            mean=found.mean,
            mean_derivative=found.mean_derivative,
            features=found.features[:, :0],
            feature_derivative=np.zeros((angles.shape[0], 0, *angles.shape[1:])),
            growth=nearest_psd(found.covariance - self.inner.residual),
        )


def reduce_constants(covariance: FloatArray, features: FloatArray, outputs: int) -> ConstantModes:
    """Keep the modes of the trial-constant unknowns that the trial can feel.

    Parameters
    ----------
    covariance : shape (K·n, K·n), m², feature-major
    features : shape (F, K), at the trial's angles
    outputs : n
    """
    count = features.shape[1]
    if count == 0 or covariance.size == 0:
        return ConstantModes(np.zeros((count, outputs, 0)), np.zeros((outputs, outputs)))
    values, vectors = np.linalg.eigh(symmetrise(covariance))
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    gram = features.T @ features / features.shape[0]
    root = root.reshape(count, outputs, -1)
    felt = np.einsum("kl,lnb->knb", gram, root).reshape(count * outputs, -1)
    size, turn = np.linalg.eigh(symmetrise(root.reshape(count * outputs, -1).T @ felt))
    size = np.maximum(size, 0.0)
    # From the smallest: as many as together stay negligible.
    kept = np.cumsum(size) > outputs * NEGLIGIBLE**2
    every = np.einsum("knb,bc->knc", root, turn)
    rest = every[..., ~kept]
    mean = np.einsum("knc,kl,lmc->nm", rest, gram, rest, optimize=True)
    return ConstantModes(np.ascontiguousarray(every[..., kept]), symmetrise(mean))

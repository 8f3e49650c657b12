"""Chains of correlated residuals, whitened along time: what a trajectory problem's terms are made of.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: solve/trajectory.py.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.checks import BoolArray, FloatArray, IntArray
from sta_prior.prior.time_scales import TimeScales
from sta_prior.solve import span_kernels as kernels


@dataclass(frozen=True)
class Rows:
    """A chain of correlated residuals over the frames of a span and one to either side.

    residual: (F, n) e; jacobian: (F, n, m) in the first m unknowns of the frame; through: (F, n, m), the part
    of it that the prior's mean makes, 0 for a joint; features, modes: (F, K) and (K, n, k), whose product is
    −∂e/∂u for the constants at ``at``; hidden: (F, n), outputs that do not feel them; decay: (F,) ρ towards
    the frame before, 0 where the chain begins; whiteners: (U, n, n), L with L Q Lᵀ = 1 for the innovations'
    covariance Q; which: (F,), the frame's, −1 for no rows.
    """

    residual: FloatArray
    jacobian: FloatArray
    through: FloatArray | None
    features: FloatArray
    modes: FloatArray
    hidden: BoolArray
    at: slice
    decay: FloatArray
    whiteners: FloatArray
    which: IntArray

    @property
    def white(self) -> FloatArray:
        """Whitened innovations, (F, n)."""
        result = np.empty_like(self.residual)
        kernels.innovations(self.residual, self.decay, self.whiteners, self.which, result)
        return result

    def whitened(self) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Innovations (F, n), their derivatives in the frame's unknowns, in those before, in the constants.

        The first frame of the rows has nothing before it here and counts as the beginning of a chain.
        """
        now, past = self.derivatives(self.jacobian)
        return self.white, now, past, self.moved

    def derivatives(self, jacobian: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Whitened derivatives (F, n, m) in the frame's unknowns and, sign turned, in those before."""
        factor = self.whiteners[self.which] * (self.which >= 0)[:, None, None]
        past = np.zeros_like(jacobian)
        past[1:] = self.decay[1:, None, None] * (factor[1:] @ jacobian[:-1])
        return factor @ jacobian, past

    @property
    def alike(self) -> bool:
        """Whether all frames have one whitener and nothing is hidden."""
        return bool((self.which == self.which[0]).all() and self.which[0] >= 0 and not self.hidden.any())

    @property
    def flat_shape(self) -> tuple[int, int]:
        """Modes as a matrix: features by outputs and constants."""
        features, outputs, constants = self.modes.shape
        return features, outputs * constants

    @property
    def prewhitened(self) -> FloatArray:
        """Features less those of the frame before, (F, K)."""
        result = self.features.copy()
        result[1:] -= self.decay[1:, None] * self.features[:-1]
        return result

    def turned(self, kind: int) -> FloatArray:
        """Modes whitened, with the sign of a derivative, (K, n·k)."""
        turned: FloatArray = (-self.whiteners[kind] @ self.modes).reshape(self.flat_shape)
        return turned

    @property
    def moved(self) -> FloatArray:
        """Derivative of the whitened innovations in the constants, (F, n, k)."""
        if self.alike:
            turned = self.turned(int(self.which[0]))
            return (self.prewhitened @ turned).reshape(self.features.shape[0], *self.modes.shape[1:])
        factor = self.whiteners[self.which] * (self.which >= 0)[:, None, None]
        felt = self.features @ self.modes.reshape(self.flat_shape)
        felt = felt.reshape(self.features.shape[0], *self.modes.shape[1:])
        felt[self.hidden] = 0.0
        felt[1:] -= self.decay[1:, None, None] * felt[:-1].copy()
        return -factor @ felt


def fast_part(scales: TimeScales, step: float) -> tuple[float, float]:
    """Share of a residual's variance that decays fast, and the white variance that stands for it.

    Only the slowest part is prewhitened. A fast one is taken as white noise with the same sum over all lags,
    s(1 + ρ)/(1 − ρ): to a motion that is slow beside it that is all it is.
    """
    if scales.constants.size < 2:
        return 0.0, 0.0
    decay = np.exp(-step / scales.constants[1:])
    share = scales.shares[1:]
    return float(share.sum()), float((share * (1.0 + decay) / (1.0 - decay)).sum())


def whitener(covariance: FloatArray) -> FloatArray:
    """Factor L with L C Lᵀ = 1, lower triangular, shape (..., n, n)."""
    factor = np.linalg.cholesky(covariance)
    identity = np.broadcast_to(np.eye(covariance.shape[-1]), covariance.shape)
    return np.asarray(np.linalg.solve(factor, identity))

"""Exact Gaussian processes over flexion angles, jointly for all markers of a segment.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

N frames of n outputs have the covariance ``K ⊗ M + W ⊗ Σ``: K of the angles, M and Σ of the outputs, W
diagonal. A change of outputs that makes Σ the unit matrix and M diagonal splits it into n independent
processes that share one eigendecomposition of K, so nothing of size N·n is ever built.

References
----------
Dawid (1981), Biometrika 68, 265–274 (matrix-normal law; from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from sklearn.gaussian_process.kernels import RBF, ConstantKernel, DotProduct, Kernel

from sta_prior.checks import FloatArray, IntArray
from sta_prior.gaussian import symmetrise
from sta_prior.prior.artifact import GROWTH_LENGTH
from sta_prior.prior.interface import Moments
from sta_prior.prior.time_scales import TimeScales

FLEXION = 0
SMALLEST_DIRECTION = 1e-9
"""Part of the largest variance below which a direction of the inducing angles is dropped."""


@dataclass(frozen=True)
class AngleKernel:
    """Covariance of the artifact over flexion angles: squared exponential plus linear trend.

    scale: (D,) rad, unit of the angles of D joints; lengths: (D,) rad; wave, trend: variances of the two
    parts. It is taken as differences to the reference, so the artifact vanishes there.
    """

    scale: FloatArray
    lengths: FloatArray
    wave: float
    trend: float

    @property
    def kernel(self) -> Kernel:
        """The same for scikit-learn, for angles in units of ``scale``."""
        return sklearn_kernel(self.wave, self.lengths / self.scale, self.trend)

    def gram(self, x: FloatArray, x0: FloatArray, y: FloatArray, y0: FloatArray) -> FloatArray:
        """Covariance of f(x) − f(x0) with f(y) − f(y0), shapes (P, D) and (Q, D) to (P, Q)."""
        kernel, scale = self.kernel, self.scale
        x, x0, y, y0 = x / scale, x0 / scale, y / scale, y0 / scale
        result: FloatArray = kernel(x, y) - kernel(x, y0) - kernel(x0, y) + kernel(x0, y0)
        return result

    def variance(self, x: FloatArray, x0: FloatArray) -> FloatArray:
        """Variance of f(x) − f(x0), shape (P,)."""
        step = (x - x0) / self.lengths
        apart = (x - x0) / self.scale
        wave = -2.0 * np.expm1(-0.5 * np.einsum("pd,pd->p", step, step))
        return np.asarray(self.wave * wave + self.trend * np.einsum("pd,pd->p", apart, apart))

    def slopes(self, x: FloatArray, y: FloatArray, y0: FloatArray) -> FloatArray:
        """Derivative of ``gram`` in x, shape (P, Q, D), 1/rad."""

        def wave_slope(at: FloatArray) -> FloatArray:
            apart = (x[:, None] - at) / self.lengths
            value = np.exp(-0.5 * np.einsum("pqd,pqd->pq", apart, apart))
            return np.asarray(-apart / self.lengths * value[..., None])

        trend = self.trend * (y - y0) / self.scale**2
        return self.wave * (wave_slope(y) - wave_slope(y0)) + trend


def sklearn_kernel(wave: float, lengths: FloatArray, trend: float) -> Kernel:
    """Squared exponential plus linear trend; theta is (log wave, log lengths), the trend is fixed."""
    return ConstantKernel(wave) * RBF(lengths) + ConstantKernel(trend, "fixed") * DotProduct(0.0, "fixed")


def inducing_angles(
    kernel: AngleKernel, angles: FloatArray, reference: FloatArray, reach: FloatArray, most: int = 20
) -> FloatArray:
    """Flexion angles that carry the process over its reach, greedily by what is left of the variance.

    Parameters
    ----------
    kernel : covariance over flexion
    angles : shape (N, D), rad, candidates; a grid over the reach is added
    reference : shape (D,), rad
    reach : shape (D, 2), rad
    most : largest number

    Returns
    -------
    shape (K, D), rad: until 1e-5 of the largest variance is left.
    """
    depth = reach.shape[0]
    grid = np.meshgrid(*(np.linspace(low, high, {1: 25, 2: 9}.get(depth, 4)) for low, high in reach))
    candidates = np.concatenate([np.stack([axis.ravel() for axis in grid], axis=-1), angles])
    there = np.broadcast_to(reference, candidates.shape)
    left = kernel.variance(candidates, there)
    largest, rows = float(left.max()), np.zeros((0, left.size))
    chosen: list[int] = []
    while len(chosen) < most and float(left.max()) > 1e-5 * largest:
        pick = int(np.argmax(left))
        chosen.append(pick)
        at, at_reference = candidates[pick : pick + 1], there[pick : pick + 1]
        row = kernel.gram(at, at_reference, candidates, there)[0] - rows[:, pick] @ rows
        row = row / np.sqrt(left[pick])
        rows = np.vstack([rows, row])
        left = np.maximum(left - row**2, 0.0)
    return candidates[chosen]


@dataclass(frozen=True)
class JointGaussian:
    """Observations with covariance K ⊗ M + W ⊗ Σ, split into independent outputs.

    Attributes
    ----------
    eigenvalues : shape (N,), of W^−½ K W^−½
    rotation : shape (N, N), W^−½ times its eigenvectors
    spread : shape (n,), variance of each split output in units of its noise
    back : shape (n, n), m, split outputs to outputs
    scores : shape (N, n), observations in both rotated bases
    log_noise : log determinant of W ⊗ Σ
    """

    eigenvalues: FloatArray
    rotation: FloatArray
    spread: FloatArray
    back: FloatArray
    scores: FloatArray
    log_noise: float

    @property
    def gain(self) -> FloatArray:
        """Spread over total variance of every score, shape (N, n)."""
        return self.spread / (1.0 + np.outer(self.eigenvalues, self.spread))

    def log_likelihood(self) -> float:
        """Log density of the observations, nats."""
        total = 1.0 + np.outer(self.eigenvalues, self.spread)
        quadratic = float((self.scores**2 / total).sum())
        constant = self.log_noise + total.size * math.log(2.0 * math.pi)
        return -0.5 * (float(np.log(total).sum()) + quadratic + constant)

    def gram_slope(self) -> FloatArray:
        """Derivative of the log density by the entries of K, shape (N, N)."""
        total = 1.0 + np.outer(self.eigenvalues, self.spread)
        weighted = self.scores / total * np.sqrt(self.spread)
        inner = weighted @ weighted.T - np.diag((self.spread / total).sum(axis=1))
        return np.asarray(0.5 * self.rotation @ inner @ self.rotation.T)

    def mean(self, cross: FloatArray) -> FloatArray:
        """Posterior mean of P targets of covariance ``cross`` (P, N) with the frames, (P, n) m."""
        result: FloatArray = cross @ self.coefficients
        return result

    @cached_property
    def coefficients(self) -> FloatArray:
        """Weight of every frame in a posterior mean, shape (N, n), m."""
        result: FloatArray = self.rotation @ (self.gain * self.scores) @ self.back
        return result

    def variances(self, cross: FloatArray, prior: FloatArray) -> FloatArray:
        """Posterior covariance of each of P targets, ``cross`` (P, N), ``prior`` (P,), to (P, n, n) m²."""
        taken = (cross @ self.rotation) ** 2 @ self.gain
        left = self.spread * np.maximum(prior[:, None] - taken, 0.0)
        return np.asarray(np.einsum("pa,ai,aj->pij", left, self.back, self.back, optimize=True))

    def joint_covariance(self, cross: FloatArray, prior: FloatArray) -> FloatArray:
        """Posterior covariance of P targets together, target-major: (P·n, P·n) m²; prior is (P, P)."""
        rotated = cross @ self.rotation
        taken = np.einsum("pi,ia,qi->apq", rotated, self.gain, rotated, optimize=True)
        left = self.spread[:, None, None] * (prior - taken)
        full = np.einsum("apq,ai,aj->piqj", left, self.back, self.back, optimize=True)
        size = prior.shape[0] * self.back.shape[0]
        return symmetrise(full.reshape(size, size))


def joint_gaussian(
    gram: FloatArray,
    noise: FloatArray,
    outputs: FloatArray,
    residual: FloatArray,
    observations: FloatArray,
) -> JointGaussian:
    """Split observations of covariance K ⊗ M + W ⊗ Σ.

    Parameters
    ----------
    gram : shape (N, N), K
    noise : shape (N,), diagonal of W
    outputs, residual : shape (n, n), m², M and Σ
    observations : shape (N, n), m
    """
    root = 1.0 / np.sqrt(noise)
    eigenvalues, vectors = np.linalg.eigh(symmetrise(gram * np.outer(root, root)))
    rotation = root[:, None] * vectors
    return _split(np.maximum(eigenvalues, 0.0), rotation, rotation.T @ observations, outputs, residual)


def with_outputs(gaussian: JointGaussian, outputs: FloatArray, residual: FloatArray) -> JointGaussian:
    """The same frames under another M and Σ, (n, n) m² each; the eigendecomposition of K is kept."""
    rotated = gaussian.scores @ gaussian.back
    return _split(gaussian.eigenvalues, gaussian.rotation, rotated, outputs, residual)


def _split(
    eigenvalues: FloatArray,
    rotation: FloatArray,
    rotated: FloatArray,
    outputs: FloatArray,
    residual: FloatArray,
) -> JointGaussian:
    factor = np.linalg.cholesky(residual)
    inverse = np.linalg.solve(factor, np.eye(factor.shape[0]))
    spread, axes = np.linalg.eigh(symmetrise(inverse @ outputs @ inverse.T))
    count, n = rotated.shape
    # The columns of the rotation are orthonormal but for W^−½.
    log_noise = -n * float(np.log(np.einsum("ij,ij->i", rotation, rotation)).sum())
    return JointGaussian(
        eigenvalues=eigenvalues,
        rotation=rotation,
        spread=np.maximum(spread, 0.0),
        back=axes.T @ factor.T,
        scores=rotated @ inverse.T @ axes,
        log_noise=log_noise + 2.0 * count * float(np.log(np.diag(factor)).sum()),
    )


@dataclass(frozen=True)
class ExactArtifact:
    """Artifact of one segment in one trial from an exact Gaussian process.

    Attributes
    ----------
    kernel, gaussian : covariance over angles; training frames
    angles, references : shape (N, D), rad, flexion of the training frames and at their references
    share : shape (N,), covariance with each frame as a multiple of the kernel's
    variance : the trial's own variance as a multiple of the kernel's
    offset_share : shape (N,), covariance of each frame with what the trial adds to the reference
    offset : its variance
    reference : shape (D,), rad, flexion at the trial's reference
    adjacent : shape (D,), positions of the joints in the angle array
    reach : shape (D, 2), rad, lowest and highest flexion of the training frames
    inducing : shape (K, D), rad, angles whose values make up the trial-constant unknowns
    residual : shape (n, n), m²
    time_scales : of the residual
    magnitude : shape (n, n), m², what the covariance gains far beyond the training data
    inflation : factor on the variance of all that is constant in a trial

    Notes
    -----
    Beyond the training data the angles are held at its edge and the covariance grows towards
    ``magnitude``: the process by itself would fall back to its mean there. ``covariance`` is that of the
    exact process; the trial-constant unknowns are its values at the inducing angles, from which those at
    other angles follow but for a small rest.
    """

    kernel: AngleKernel
    gaussian: JointGaussian
    angles: FloatArray
    references: FloatArray
    share: FloatArray
    variance: float
    offset_share: FloatArray
    offset: float
    reference: FloatArray
    adjacent: IntArray
    reach: FloatArray
    inducing: FloatArray
    residual: FloatArray
    time_scales: TimeScales
    magnitude: FloatArray
    inflation: float = 1.0

    @property
    def time_constant(self) -> float:
        """Slowest decay time of the residual's correlation, s."""
        return self.time_scales.slowest

    def _cross(self, x: FloatArray) -> FloatArray:
        """Covariance with the training frames of the artifact at flexion x (P, D), offset left out."""
        there = np.broadcast_to(self.reference, x.shape)
        return self.kernel.gram(x, there, self.angles, self.references) * self.share

    @cached_property
    def _root(self) -> FloatArray:
        """Inverse root of the kernel at the inducing angles, (directions, K)."""
        there = np.broadcast_to(self.reference, self.inducing.shape)
        values, vectors = np.linalg.eigh(self.kernel.gram(self.inducing, there, self.inducing, there))
        keep = values > SMALLEST_DIRECTION * max(float(values[-1]), 1e-12)
        return np.asarray((vectors[:, keep] / np.sqrt(values[keep])).T)

    @cached_property
    def constant_covariance(self) -> FloatArray:
        """Covariance of the trial-constant unknowns, (K·n, K·n) m²: the offset first, then directions."""
        cross = np.vstack([self.offset_share, self._root @ self._cross(self.inducing)])
        prior = np.full(cross.shape[0], self.variance)
        prior[0] = self.offset
        return self.inflation * self.gaussian.joint_covariance(cross, np.diag(prior))

    def _features(self, x: FloatArray) -> FloatArray:
        there = np.broadcast_to(self.reference, x.shape)
        at = np.broadcast_to(self.reference, self.inducing.shape)
        directions = self.kernel.gram(x, there, self.inducing, at) @ self._root.T
        return np.column_stack([np.ones(x.shape[0]), directions])

    def moments(self, angles: FloatArray) -> Moments:
        """Mean, its derivative and covariance at the angles, shape (frames, joints, 3) rad."""
        frames, joints, _ = angles.shape
        asked = angles[:, self.adjacent, FLEXION]
        x = np.clip(asked, self.reach[:, 0], self.reach[:, 1])
        cross = self._cross(x) + self.offset_share
        prior = self.variance * self.kernel.variance(x, self.reference) + self.offset
        covariance = self.inflation * self.gaussian.variances(cross, prior) + self.residual
        excess = np.sqrt(np.einsum("fd,fd->f", asked - x, asked - x))
        if (excess > 0.0).any():
            growth = -np.expm1(-0.5 * (excess / GROWTH_LENGTH) ** 2)
            covariance = covariance + growth[:, None, None] * self.magnitude
        slopes = self.kernel.slopes(x, self.angles, self.references) * self.share[:, None]
        derivative = np.zeros((frames, self.residual.shape[0], joints, 3))
        # At the edge a held angle no longer moves the mean.
        inside = (asked == x)[:, None, :]
        derivative[:, :, self.adjacent, FLEXION] = inside * np.einsum(
            "fid,in->fnd", slopes, self.gaussian.coefficients, optimize=True
        )
        return Moments(
            mean=self.gaussian.mean(cross),
            mean_derivative=derivative,
            features=self._features(x),
            covariance=covariance,
        )

"""Features of the joint angles: a constant, a low-order trend, and Hilbert-space waves.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

Features are differences to the reference posture, ``z(q) = φ(q) − φ(q₀)``, so that the
population's mean artifact is zero there by construction. The first feature is the constant 1: it
has no population weight and carries what a trial adds to the reference (a static trial that was
itself a little displaced, muscles at another tone).

Families differ in what they put into a basis (see linear_basis, reduced_rank_basis); learning and
solving do not.

References
----------
Solin & Särkkä (2020), Stat Comput, doi 10.1007/s11222-019-09886-w (Hilbert-space basis).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.hilbert import Covariance, basis_functions, basis_slopes, spectral_density

SMALLEST_POWER = 0.02
"""Angles that move less than this about the reference, rad, say little about the artifact."""


SOFT_EDGE = 0.03
"""Angle over which features come to rest beyond the training data, rad: less than two degrees."""


@dataclass(frozen=True)
class Term:
    """One power of one joint angle: joint and dof are positions in the angle array."""

    joint: int
    dof: int
    power: int


@dataclass(frozen=True)
class Wave:
    """Hilbert-space basis of a one-dimensional Gaussian process over one joint angle.

    joint, dof: positions in the angle array; centre, limit: rad, the functions live on
    centre ± limit; length: rad; count: functions; scale: unitless, makes their joint mean square
    over the training frames 1 when every weight has unit variance.
    """

    joint: int
    dof: int
    centre: float
    limit: float
    length: float
    count: int
    kind: Covariance = "squared-exponential"
    scale: float = 1.0

    @property
    def weights(self) -> FloatArray:
        """Square root of the prior variance of each function, shape (count,)."""
        frequency = np.asarray(0.5 * np.pi * np.arange(1, self.count + 1) / self.limit, dtype=np.float64)
        return np.asarray(self.scale * np.sqrt(spectral_density(frequency, self.length, self.kind)))

    def values(self, angles: FloatArray) -> FloatArray:
        """Weighted functions at angles of any shape, (..., count)."""
        return basis_functions(angles - self.centre, self.limit, self.count) * self.weights

    def slopes(self, angles: FloatArray) -> FloatArray:
        """Their derivatives, (..., count), 1/rad."""
        return basis_slopes(angles - self.centre, self.limit, self.count) * self.weights


@dataclass(frozen=True)
class Reach:
    """Range of one input in the training frames, rad; beyond it features stay at its edge.

    joint, dof: its place; kind: "angle", "tilt" or "angular-velocity".
    """

    joint: int
    dof: int
    low: float
    high: float
    kind: str = "angle"


@dataclass(frozen=True)
class Basis:
    """The constant, mixtures of powers of joint angles, and waves.

    Attributes
    ----------
    terms : powers of joint angles
    mixing : shape (terms, terms), unit rad^−power by column
        Trend features are mixing · raw terms. The mixing of a learned basis makes them
        orthonormal over the training frames, so that shrinking a covariance between features
        towards its diagonal means what it says: flexion and its square by themselves are nearly
        one and the same.
    waves : Gaussian-process deviations from the trend
    reaches : angles that are held at the edge of the training data; none holds nothing
    """

    terms: tuple[Term, ...]
    mixing: FloatArray
    waves: tuple[Wave, ...] = ()
    reaches: tuple[Reach, ...] = ()

    @property
    def size(self) -> int:
        """Number of features, the constant included."""
        return 1 + len(self.terms) + sum(wave.count for wave in self.waves)

    def _beyond(self, angles: FloatArray) -> FloatArray:
        """Signed distance of each angle beyond its reach, shape (frames, joints, 3), rad; 0 inside."""
        result = np.zeros(angles.shape)
        for reach in self.reaches:
            column = angles[:, reach.joint, reach.dof]
            result[:, reach.joint, reach.dof] = column - np.clip(column, reach.low, reach.high)
        return result

    def held(self, angles: FloatArray) -> FloatArray:
        """Angles, shape (frames, joints, 3), held at the edge of the training data.

        They come to rest SOFT_EDGE beyond it, without a kink: an iteration whose answer lies on a kink would
        jump from side to side for ever.
        """
        if not self.reaches:
            return angles
        beyond = self._beyond(angles)
        return np.asarray(
            angles - beyond - SOFT_EDGE * np.sign(beyond) * np.expm1(-np.abs(beyond) / SOFT_EDGE)
        )

    def excess(self, angles: FloatArray) -> FloatArray:
        """How far the angles lie beyond the training data, shape (frames,), rad."""
        beyond = self._beyond(angles)
        return np.asarray(np.sqrt(np.einsum("fjd,fjd->f", beyond, beyond)))

    def _raw(self, angles: FloatArray) -> FloatArray:
        columns = [angles[:, term.joint, term.dof] ** term.power for term in self.terms]
        return np.stack(columns, axis=-1) if columns else np.zeros((angles.shape[0], 0))

    def raw(self, angles: FloatArray, reference: FloatArray) -> FloatArray:
        """Differences of the powers to the reference, shape (frames, terms), rad^power."""
        return self._raw(angles) - self._raw(reference[None])

    def values(self, angles: FloatArray, reference: FloatArray) -> FloatArray:
        """Features at the given angles.

        Parameters
        ----------
        angles : shape (frames, joints, 3), rad
        reference : shape (joints, 3), rad, angles of the reference posture

        Returns
        -------
        shape (frames, features), unitless
        """
        here, there = self.held(angles), self.held(reference[None])
        parts = [np.ones((angles.shape[0], 1)), (self._raw(here) - self._raw(there)) @ self.mixing.T]
        for wave in self.waves:
            at = (wave.joint, wave.dof)
            parts.append(wave.values(here[:, *at]) - wave.values(there[:, *at]))
        return np.concatenate(parts, axis=1)

    def derivatives(self, angles: FloatArray) -> FloatArray:
        """Derivative of the features in the angles, shape (frames, features, joints, 3), 1/rad."""
        here = self.held(angles)
        frames, joints, _ = angles.shape
        raw = np.zeros((frames, len(self.terms), joints, 3))
        for column, term in enumerate(self.terms):
            value = here[:, term.joint, term.dof]
            raw[:, column, term.joint, term.dof] = term.power * value ** (term.power - 1)
        result = np.zeros((frames, self.size, joints, 3))
        first = 1 + len(self.terms)
        result[:, 1:first] = np.einsum("kt,ftjd->fkjd", self.mixing, raw)
        for wave in self.waves:
            last = first + wave.count
            result[:, first:last, wave.joint, wave.dof] = wave.slopes(here[:, wave.joint, wave.dof])
            first = last
        # Beyond the edge a held angle moves the features less and less.
        slope = np.exp(-np.abs(self._beyond(angles)) / SOFT_EDGE)
        return np.asarray(result * slope[:, None])

    @property
    def relative_variance(self) -> FloatArray:
        """Prior variance of each feature's weight against the mean square displacement, (features,).

        A feature of unit mean square each for the constant and the trend; the waves of one angle together
        have unit mean square and a share of WAVE_SHARE.
        """
        waves = sum(wave.count for wave in self.waves)
        return np.concatenate([np.ones(1 + len(self.terms)), np.full(waves, WAVE_SHARE)])

    @property
    def total_relative_variance(self) -> float:
        """Prior mean square of all features together, in the same unit."""
        return 1.0 + len(self.terms) + WAVE_SHARE * len(self.waves)


WAVE_SHARE = 0.25
"""Prior variance that Gaussian-process deviations have against a term of the trend."""


def orthonormal(basis: Basis, angles: list[FloatArray], references: list[FloatArray]) -> Basis:
    """The same basis, its trend mixed to be orthonormal and its waves scaled to unit mean square.

    Parameters
    ----------
    basis : terms, waves and reaches; mixing and scales are replaced
    angles : of each trial, shape (frames, joints, 3), rad
    references : of each trial, shape (joints, 3), rad

    Notes
    -----
    Gram-Schmidt in the order of the terms, through the Cholesky factor of their Gram matrix; the
    constant stays out, for it has no population weight. A term that hardly moves is kept at the
    scale of SMALLEST_POWER instead of being blown up.
    """
    raw = np.concatenate([basis.raw(q, q0) for q, q0 in zip(angles, references, strict=True)])
    gram = raw.T @ raw / raw.shape[0] + SMALLEST_POWER**2 * np.eye(len(basis.terms))
    mixing: FloatArray = np.asarray(
        np.linalg.solve(np.linalg.cholesky(gram), np.eye(len(basis.terms))), dtype=np.float64
    )
    waves = []
    for wave in basis.waves:
        plain = replace(wave, scale=1.0)
        power = [
            (plain.values(q[:, wave.joint, wave.dof]) - plain.values(q0[wave.joint, wave.dof])) ** 2
            for q, q0 in zip(angles, references, strict=True)
        ]
        mean_square = float(np.concatenate(power).sum(axis=1).mean())
        waves.append(replace(wave, scale=1.0 / np.sqrt(max(mean_square, SMALLEST_POWER**2))))
    return replace(basis, mixing=mixing, waves=tuple(waves))

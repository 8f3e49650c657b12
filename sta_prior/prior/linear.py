"""The ``linear`` family: low-order terms in the adjacent joint angles.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

Features are differences to the reference posture, ``z(q) = φ(q) − φ(q₀)``, so that the
population's mean artifact is zero there by construction. The first feature is the constant 1: it
has no population weight and carries what a trial adds to the reference (a static trial that was
itself a little displaced, muscles at another tone).

References
----------
Bonci et al. (2014), J Biomech 47, doi 10.1016/j.jbiomech.2014.04.029 (thigh artifact linear in hip
and knee angles, by subject and marker). Tsai et al. (2009) found it nonlinear in knee flexion:
hence the square.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.hierarchy import Weights
from sta_prior.prior.interface import Moments

FLEXION = 0
SMALLEST_POWER = 0.02
"""Angles that move less than this about the reference, rad, say little about the artifact."""


@dataclass(frozen=True)
class Term:
    """One power of one joint angle: joint and dof are positions in the angle array."""

    joint: int
    dof: int
    power: int


@dataclass(frozen=True)
class Basis:
    """The constant, and mixtures of powers of joint angles as differences to the reference posture.

    Attributes
    ----------
    terms : powers of joint angles
    mixing : shape (terms, terms), unit rad^−power by column
        Features after the constant are mixing · raw terms. The mixing of a learned basis makes
        them orthonormal over the training frames, so that shrinking a covariance between features
        towards its diagonal means what it says: flexion and its square by themselves are nearly
        one and the same.
    """

    terms: tuple[Term, ...]
    mixing: FloatArray

    @property
    def size(self) -> int:
        """Number of features, the constant included."""
        return len(self.terms) + 1

    def raw(self, angles: FloatArray, reference: FloatArray) -> FloatArray:
        """Differences of the powers to the reference, shape (frames, terms), rad^power."""
        columns = [
            angles[:, term.joint, term.dof] ** term.power - reference[term.joint, term.dof] ** term.power
            for term in self.terms
        ]
        return np.stack(columns, axis=-1) if columns else np.zeros((angles.shape[0], 0))

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
        mixed = self.raw(angles, reference) @ self.mixing.T
        return np.concatenate([np.ones((angles.shape[0], 1)), mixed], axis=1)

    def derivatives(self, angles: FloatArray) -> FloatArray:
        """Derivative of the features in the angles, shape (frames, features, joints, 3), 1/rad."""
        frames, joints, _ = angles.shape
        raw = np.zeros((frames, len(self.terms), joints, 3))
        for column, term in enumerate(self.terms):
            here = angles[:, term.joint, term.dof]
            raw[:, column, term.joint, term.dof] = term.power * here ** (term.power - 1)
        result = np.zeros((frames, self.size, joints, 3))
        result[:, 1:] = np.einsum("kt,ftjd->fkjd", self.mixing, raw)
        return result


def orthonormal(basis: Basis, angles: list[FloatArray], references: list[FloatArray]) -> Basis:
    """The same terms, mixed to be orthonormal over training frames.

    Parameters
    ----------
    basis : terms; its mixing is replaced
    angles : of each trial, shape (frames, joints, 3), rad
    references : of each trial, shape (joints, 3), rad

    Notes
    -----
    Gram-Schmidt in the order of the terms, through the Cholesky factor of their Gram matrix; the
    constant stays out, for it has no population weight. A term that hardly moves is kept at the
    scale of SMALLEST_POWER instead of being blown up.
    """
    raw = np.concatenate([basis.raw(q, q0) for q, q0 in zip(angles, references, strict=True)])
    gram = raw.T @ raw / raw.shape[0]
    gram = gram + SMALLEST_POWER**2 * np.eye(gram.shape[0])
    factor = np.linalg.cholesky(gram)
    mixing: FloatArray = np.asarray(np.linalg.solve(factor, np.eye(gram.shape[0])), dtype=np.float64)
    return Basis(basis.terms, mixing)


def linear_basis(adjacent_joints: tuple[int, ...]) -> Basis:
    """Terms of the ``linear`` family for one segment: flexion and its square at every adjacent joint.

    The two other angles of a joint are left out on purpose. Skin markers corrupt them most, they move
    little, and artifact regressed on the very angle that it corrupts can end up worse than the
    rigid fit; what depends on them stays in the residual.

    Parameters
    ----------
    adjacent_joints : positions of the joints that touch the segment
    """
    terms = tuple(Term(joint, FLEXION, power) for joint in adjacent_joints for power in (1, 2))
    return Basis(terms, np.eye(len(terms)))


@dataclass(frozen=True)
class LinearArtifact:
    """Artifact of one segment in one trial under the linear family.

    weights: belief about the trial's weights, K features × n outputs; residual: (n, n) m²;
    time_constant: s; reference: (joints, 3) rad.
    """

    basis: Basis
    weights: Weights
    residual: FloatArray
    time_constant: float
    reference: FloatArray

    @property
    def constant_covariance(self) -> FloatArray:
        """Covariance of the trial-constant unknowns, shape (K·n, K·n), m²."""
        return self.weights.covariance

    def moments(self, angles: FloatArray) -> Moments:
        """Mean, its derivative and covariance at the angles, shape (frames, joints, 3) rad."""
        features = self.basis.values(angles, self.reference)
        count, n = self.weights.mean.shape
        spread = self.weights.covariance.reshape(count, n, count, n)
        # Two small contractions instead of one einsum over four indices: 20 times faster.
        inner = np.tensordot(features, spread, axes=(1, 0))
        constant = np.einsum("fl,falb->fab", features, inner)
        derivative = np.einsum("fkjd,kn->fnjd", self.basis.derivatives(angles), self.weights.mean)
        return Moments(
            mean=features @ self.weights.mean,
            mean_derivative=derivative,
            features=features,
            covariance=constant + self.residual,
        )

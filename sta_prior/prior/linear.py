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
MANY_SUBJECTS = 3


@dataclass(frozen=True)
class Term:
    """One power of one joint angle: joint and dof are positions in the angle array."""

    joint: int
    dof: int
    power: int


@dataclass(frozen=True)
class Basis:
    """The constant followed by powers of joint angles as differences to the reference posture."""

    terms: tuple[Term, ...]

    @property
    def size(self) -> int:
        """Number of features, the constant included."""
        return len(self.terms) + 1

    def values(self, angles: FloatArray, reference: FloatArray) -> FloatArray:
        """Features at the given angles.

        Parameters
        ----------
        angles : shape (frames, joints, 3), rad
        reference : shape (joints, 3), rad, angles of the reference posture

        Returns
        -------
        shape (frames, features), rad^power
        """
        result = np.ones((angles.shape[0], self.size))
        for column, term in enumerate(self.terms, start=1):
            here = angles[:, term.joint, term.dof]
            result[:, column] = here**term.power - reference[term.joint, term.dof] ** term.power
        return result

    def derivatives(self, angles: FloatArray) -> FloatArray:
        """Derivative of the features in the angles, shape (frames, features, joints, 3)."""
        frames, joints, _ = angles.shape
        result = np.zeros((frames, self.size, joints, 3))
        for column, term in enumerate(self.terms, start=1):
            here = angles[:, term.joint, term.dof]
            result[:, column, term.joint, term.dof] = term.power * here ** (term.power - 1)
        return result


def linear_basis(adjacent_joints: tuple[int, ...], subjects: int) -> Basis:
    """Terms of the ``linear`` family for one segment.

    Flexion and its square at every adjacent joint; the two other angles from three subjects on.
    With fewer, the prior is one subject's own, and artifact regressed on a small range of the
    very angles that it corrupts can end up worse than the rigid fit, so they are left out.

    Parameters
    ----------
    adjacent_joints : positions of the joints that touch the segment
    subjects : how many subjects the prior learns from
    """
    terms = []
    for joint in adjacent_joints:
        terms += [Term(joint, FLEXION, 1), Term(joint, FLEXION, 2)]
        if subjects >= MANY_SUBJECTS:
            terms += [Term(joint, 1, 1), Term(joint, 2, 1)]
    return Basis(tuple(terms))


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

"""The ``linear`` family: low-order terms in the adjacent joint angles.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

References
----------
Bonci et al. (2014), J Biomech 47, doi 10.1016/j.jbiomech.2014.04.029 (thigh artifact linear in hip
and knee angles, by subject and marker). Tsai et al. (2009) found it nonlinear in knee flexion:
hence the square.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.basis import Basis, Reach, Term
from sta_prior.prior.inputs import Driver

FLEXION = 0


def linear_basis(adjacent_joints: tuple[int, ...], extra: Sequence[Driver] = ()) -> Basis:
    """Terms of the ``linear`` family for one segment: flexion and its square at every adjacent joint.

    The two other angles of a joint are left out on purpose. Skin markers corrupt them most, they move
    little, and artifact regressed on the very angle that it corrupts can end up worse than the
    rigid fit; what depends on them stays in the residual.

    Parameters
    ----------
    adjacent_joints : positions of the joints that touch the segment
    extra : other inputs
    """
    terms = tuple(
        Term(at.row, at.column, power) for at in drivers(adjacent_joints, extra) for power in at.powers
    )
    return Basis(terms, np.eye(len(terms)))


def drivers(adjacent_joints: Sequence[int], extra: Sequence[Driver] = ()) -> tuple[Driver, ...]:
    """Flexion of every adjacent joint, then the other inputs."""
    return (*(Driver(joint, FLEXION, (1, 2), True) for joint in adjacent_joints), *extra)


def reaches_of(
    adjacent_joints: tuple[int, ...],
    angles: Sequence[FloatArray],
    references: Sequence[FloatArray],
    extra: Sequence[Driver] = (),
) -> tuple[Reach, ...]:
    """Range of every input over the training frames and reference postures.

    Parameters
    ----------
    adjacent_joints : positions of the joints that touch the segment
    angles : of each training trial, shape (frames, joints, 3), rad
    references : of each training trial, shape (joints, 3), rad
    extra : other inputs
    """
    reaches = []
    for at in drivers(adjacent_joints, extra):
        still = np.array([q[at.row, at.column] for q in references])
        every = np.concatenate([*(q[:, at.row, at.column] for q in angles), still])
        reaches.append(Reach(at.row, at.column, float(every.min()), float(every.max()), at.kind))
    return tuple(reaches)

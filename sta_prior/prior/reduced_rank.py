"""The ``reduced-rank-gp`` family: a low-order trend plus Gaussian-process deviations.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

Trend and deviation both: a polynomial by itself explodes beyond its data, a stationary process
falls back to its mean there and turns over-confident. Beyond the training data the features are
held at its edge, and the spread grows towards that of the ``magnitude`` prior.

References
----------
Solin & Särkkä (2020), Stat Comput, doi 10.1007/s11222-019-09886-w (Hilbert-space approximation).
Riutort-Mayol et al. (2023), Stat Comput, doi 10.1007/s11222-022-10167-2 (how many functions).
"""

from __future__ import annotations

import math

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.basis import Basis, Reach, Term, Wave
from sta_prior.prior.hilbert import boundary_factor

FLEXION = 0
LENGTH = 0.5
"""Length scale of the deviations, rad: about 30° of flexion."""

SMALLEST_HALF_RANGE = 0.1
FEWEST, MOST = 4, 12


def reduced_rank_basis(
    adjacent_joints: tuple[int, ...],
    angles: list[FloatArray],
    references: list[FloatArray],
    length: float = LENGTH,
) -> Basis:
    """Trend and waves in the flexion of every adjacent joint, held at the edge of the training data.

    Parameters
    ----------
    adjacent_joints : positions of the joints that touch the segment
    angles : of each training trial, shape (frames, joints, 3), rad
    references : of each training trial, shape (joints, 3), rad
    length : length scale of the deviations, rad
    """
    terms = tuple(Term(joint, FLEXION, power) for joint in adjacent_joints for power in (1, 2))
    waves, reaches = [], []
    for joint in adjacent_joints:
        seen = np.concatenate(
            [*(q[:, joint, FLEXION] for q in angles), [q[joint, FLEXION] for q in references]]
        )
        low, high = float(seen.min()), float(seen.max())
        half = max(0.5 * (high - low), SMALLEST_HALF_RANGE)
        limit = half * boundary_factor(half, length, "squared-exponential")
        # Riutort-Mayol et al.: m = 1.75 c S/ℓ functions (from memory) for a squared exponential.
        count = int(np.clip(math.ceil(1.75 * limit / length), FEWEST, MOST))
        waves.append(Wave(joint, FLEXION, 0.5 * (low + high), limit, length, count))
        reaches.append(Reach(joint, FLEXION, low, high))
    return Basis(terms, np.eye(len(terms)), tuple(waves), tuple(reaches))

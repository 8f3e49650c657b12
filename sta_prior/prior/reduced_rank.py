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
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.basis import Basis, Wave
from sta_prior.prior.hilbert import boundary_factor
from sta_prior.prior.inputs import Driver
from sta_prior.prior.linear import drivers, linear_basis, reaches_of

LENGTH = 0.5
"""Length scale of the deviations, rad: about 30° of flexion."""

SMALLEST_HALF_RANGE = 0.1
FEWEST, MOST = 4, 12


def reduced_rank_basis(
    adjacent_joints: tuple[int, ...],
    angles: list[FloatArray],
    references: list[FloatArray],
    extra: Sequence[Driver] = (),
    length: float = LENGTH,
) -> Basis:
    """Trend and waves in every input, flexion first, held at the edge of the training data.

    Parameters
    ----------
    adjacent_joints : positions of the joints that touch the segment
    angles : of each training trial, shape (frames, joints, 3), rad
    references : of each training trial, shape (joints, 3), rad
    extra : other inputs
    length : length scale of the deviations, rad
    """
    plain = linear_basis(adjacent_joints, extra)
    reaches, waves = reaches_of(adjacent_joints, angles, references, extra), []
    for at, reach in zip(drivers(adjacent_joints, extra), reaches, strict=True):
        if not at.wave:
            continue
        low, high = reach.low, reach.high
        half = max(0.5 * (high - low), SMALLEST_HALF_RANGE)
        limit = half * boundary_factor(half, length, "squared-exponential")
        # Riutort-Mayol et al.: m = 1.75 c S/ℓ functions (from memory) for a squared exponential.
        count = int(np.clip(math.ceil(1.75 * limit / length), FEWEST, MOST))
        waves.append(Wave(at.row, at.column, 0.5 * (low + high), limit, length, count))
    return replace(plain, waves=tuple(waves), reaches=reaches)

"""Motion prior: white noise on the acceleration or the jerk of a rigid motion.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

A segment's state at a frame is its pose T (lab ← bone) and its rates along its own axes: velocity ϖ with
T⁻¹dT/dt = ϖ, and for white noise on jerk its derivative α too. From one frame to the next, with
ξ = Log(T⁻¹T′), the local state (ξ, J_r(ξ)⁻¹ϖ′, …) is that of a chain of integrators driven by white noise:

    e = (ξ, J_r(ξ)⁻¹ϖ′, J_r(ξ)⁻¹α′) − Φ(Δ)·(0, ϖ, α),   e ~ N(0, Q(Δ) ⊗ diag(density)).

References
----------
Barfoot, Tong & Särkkä (2014), Robotics: Science and Systems X, doi 10.15607/RSS.2014.X.001; Anderson &
Barfoot (2015), IROS, doi 10.1109/IROS.2015.7353368 (the prior on rigid motions; both from memory).
Bar-Shalom, Li & Kirubarajan (2001), Estimation with Applications to Tracking and Navigation, ch. 6 (Q, from
memory); discretised by filterpy.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from filterpy.common import Q_continuous_white_noise

from sta_prior import se3
from sta_prior.checks import FloatArray

HORIZONS = (0.1, 0.15, 0.2, 0.25, 0.3)
"""Stretches of time over which the density is matched, s. Matched on single steps it comes out some twenty
times too small, and intervals with it."""

FEWEST_CHANGES = 10
"""Pairs of moves that a horizon must show."""

UNKNOWN_DENSITY = np.repeat([100.0, 30.0], 3)
"""Density where the motion is not seen for long enough to tell, rad²/s³ and m²/s³: that of brisk walking
(from the invented couriers; no source)."""

SMALLEST_DENSITY = np.repeat([1e-2, 1e-3], 3)
"""Least density for noise on acceleration, rad²/s³ and m²/s³: a subject who stands still."""

JERK_TIME = 0.1
"""Noise on jerk: its density over that on acceleration is 1/JERK_TIME², s⁻²."""


@dataclass(frozen=True)
class MotionPrior:
    """Motion prior of one segment.

    order: 2 for white noise on acceleration (pose and velocity), 3 on jerk; step: Δ, s; density: (6,)
    rad²/s³, m²/s³ (times 1/s² for jerk), about and along the bone's axes.
    """

    order: int
    step: float
    density: FloatArray

    @cached_property
    def transition(self) -> FloatArray:
        """Φ of one component, (order, order)."""
        result = np.eye(self.order)
        for row in range(self.order):
            for column in range(row + 1, self.order):
                result[row, column] = self.step ** (column - row) / math.factorial(column - row)
        return result

    @cached_property
    def precision(self) -> FloatArray:
        """Inverse of Q of one component for unit density, (order, order)."""
        noise = np.asarray(Q_continuous_white_noise(dim=self.order, dt=self.step), dtype=np.float64)
        return np.asarray(np.linalg.inv(noise))


def estimate_density(poses: FloatArray, step: float) -> FloatArray:
    """Density of white noise on acceleration, (6,) rad²/s³ and m²/s³, from a first look at the motion.

    Parameters
    ----------
    poses : shape (F, 4, 4), lab ← bone, of one segment; NaN where unknown
    step : s

    Notes
    -----
    Two successive moves over a horizon h differ by N(0, 2h³/3 · density) under the prior. Of the horizons
    up to 0.3 s the largest answer is taken: smooth motion is no white noise, and a density matched to
    short steps would claim that it is known beforehand.
    """
    found, told = np.array(SMALLEST_DENSITY), False
    for horizon in HORIZONS:
        lag = round(horizon / step)
        if lag < 1 or 2 * lag >= poses.shape[0]:
            continue
        move = se3.log(se3.inverse(poses[:-lag]) @ poses[lag:])
        change = move[lag:] - move[:-lag]
        change = change[np.isfinite(change).all(axis=1)]
        if change.shape[0] >= FEWEST_CHANGES:
            told = True
            found = np.maximum(found, (change**2).mean(axis=0) / (2.0 / 3.0 * (lag * step) ** 3))
    return found if told else np.maximum(found, UNKNOWN_DENSITY)


def make_motion(poses: FloatArray, step: float, order: int = 2) -> MotionPrior:
    """Motion prior of one segment, its density estimated from a first look, poses (F, 4, 4)."""
    density = estimate_density(poses, step)
    return MotionPrior(order, step, density if order == 2 else density / JERK_TIME**2)


def first_rates(poses: FloatArray, step: float, order: int) -> FloatArray:
    """Rates to begin the iteration from, (F, order − 1, 6): differences of the poses, (F, 4, 4)."""
    rates = np.zeros((poses.shape[0], order - 1, 6))
    if poses.shape[0] < 2:
        return rates
    move = se3.log(se3.inverse(poses[:-1]) @ poses[1:]) / step
    rates[:-1, 0] += 0.5 * move
    rates[1:, 0] += 0.5 * move
    rates[[0, -1], 0] *= 2.0
    if order == 3:
        rates[:, 1] = np.gradient(rates[:, 0], step, axis=0)
    return rates

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

import numpy as np
from filterpy.common import Q_continuous_white_noise

from sta_prior import se3
from sta_prior.checks import FloatArray

HORIZONS = (0.1, 0.15, 0.2, 0.25, 0.3)
"""Stretches of time over which the density is matched, s. Matched on single steps it comes out some twenty
times too small, and intervals with it."""

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

    @property
    def transition(self) -> FloatArray:
        """Φ of one component, (order, order)."""
        result = np.eye(self.order)
        for row in range(self.order):
            for column in range(row + 1, self.order):
                result[row, column] = self.step ** (column - row) / math.factorial(column - row)
        return result

    @property
    def noise(self) -> FloatArray:
        """Q of one component for unit density, (order, order)."""
        return np.asarray(Q_continuous_white_noise(dim=self.order, dt=self.step), dtype=np.float64)

    @property
    def precision(self) -> FloatArray:
        """Inverse covariance of e, (6·order, 6·order), component by component within each derivative."""
        return np.asarray(np.kron(np.linalg.inv(self.noise), np.diag(1.0 / self.density)))


def bracket(tangent: FloatArray) -> FloatArray:
    """Matrix ad(ξ) of the Lie bracket of rigid motions, shape (..., 6, 6)."""
    result = np.zeros((*tangent.shape, 6))
    rotation = se3.skew(tangent[..., :3])
    result[..., :3, :3] = rotation
    result[..., 3:, 3:] = rotation
    result[..., 3:, :3] = se3.skew(tangent[..., 3:])
    return result


@dataclass(frozen=True)
class MotionTerm:
    """Innovations of one segment over F − 1 steps and their derivatives in its own state.

    residual: (F − 1, 6·order); before, after: (F − 1, 6·order, 6·order), derivative in the state at the
    step's start and end (pose, velocity, …).
    """

    residual: FloatArray
    before: FloatArray
    after: FloatArray


def motion_term(prior: MotionPrior, poses: FloatArray, rates: FloatArray) -> MotionTerm:
    """Innovations at given states.

    Parameters
    ----------
    prior : of the segment
    poses : shape (F, 4, 4), lab ← bone
    rates : shape (F, order − 1, 6), rad/s, m/s (and rad/s², m/s²), bone axes
    """
    order = prior.order
    step = se3.log(se3.inverse(poses[:-1]) @ poses[1:])
    right = se3.right_jacobian_inverse(step)
    left = se3.left_jacobian_inverse(step)
    count = step.shape[0]
    local = np.zeros((count, order, 6))
    local[:, 0] = step
    local[:, 1:] = np.einsum("fab,fkb->fka", right, rates[1:])
    start = np.concatenate([np.zeros((count, 1, 6)), rates[:-1]], axis=1)
    transition = prior.transition
    residual = local - np.einsum("ij,fja->fia", transition, start)
    before = np.zeros((count, order, 6, order, 6))
    after = np.zeros_like(before)
    before[:, 0, :, 0] = -left
    after[:, 0, :, 0] = right
    for row in range(order):
        for column in range(1, order):
            before[:, row, :, column] -= transition[row, column] * np.eye(6)
    for row in range(1, order):
        after[:, row, :, row] = right
        # J_r(ξ)⁻¹ ≈ 1 + ad(ξ)/2: over one step the rest is below rounding of what moves.
        half = -0.5 * bracket(rates[1:, row - 1])
        before[:, row, :, 0] += -half @ left
        after[:, row, :, 0] += half @ right
    size = 6 * order
    return MotionTerm(
        residual.reshape(count, size), before.reshape(count, size, size), after.reshape(count, size, size)
    )


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
    found = np.array(SMALLEST_DENSITY)
    for horizon in HORIZONS:
        lag = round(horizon / step)
        if lag < 1 or 2 * lag >= poses.shape[0]:
            continue
        move = se3.log(se3.inverse(poses[:-lag]) @ poses[lag:])
        change = move[lag:] - move[:-lag]
        change = change[np.isfinite(change).all(axis=1)]
        if change.shape[0]:
            found = np.maximum(found, (change**2).mean(axis=0) / (2.0 / 3.0 * (lag * step) ** 3))
    return found


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

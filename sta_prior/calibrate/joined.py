"""Motion of two segments that a soft joint holds together, drawn from the model, nearly.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

The model's density is a product: the motion priors of both segments times the joint's law of travel, which
no simulation from the first frame to the last can draw. Here every whitened residual F of the product gets a
standard normal ε, and |F(x) − ε|² is made least. Where F is linear that is a draw from the density
exp(−½|F(x)|²); where it bends the draw is approximate. What it costs: docs/calibration.md.

References
----------
Bardsley, Solonen, Haario & Laine (2014), SIAM J Sci Comput 36, A1895–A1910, doi 10.1137/140964023 (randomise,
then optimise; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import cho_solve_banded, cholesky_banded

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.solve.motion import MotionPrior
from sta_prior.solve.terms import JointProblem, joint_travel
from sta_prior.solve.trajectory import JOINT_TIME, OFFSET_SHARE

POSES, STATES = 12, 24
"""Unknowns of a frame: poses of both segments, then their velocities."""

HELD = 1e13
"""Precision that keeps the start where it was drawn: the thigh's pose and velocity, the shank's rotation and
angular velocity. The model says nothing about these."""

TOLERANCE, MAXIMUM_ITERATIONS, SHORTEST = 1e-6, 40, 1e-3


@dataclass(frozen=True)
class _Rows:
    """Whitened residuals and their derivatives: of steps (F − 1, 24) and of the joint (F, 3)."""

    step: FloatArray
    step_past: FloatArray
    step_now: FloatArray
    joint: FloatArray
    joint_past: FloatArray
    joint_now: FloatArray
    joint_offset: FloatArray


def _adjoint_algebra(rates: FloatArray) -> FloatArray:
    """ad(ϖ), (..., 6, 6)."""
    result = np.zeros((*rates.shape, 6))
    result[..., :3, :3] = result[..., 3:, 3:] = se3.skew(rates[..., :3])
    result[..., 3:, :3] = se3.skew(rates[..., 3:])
    return result


def _rows(
    motions: list[MotionPrior],
    joint: JointProblem,
    poses: FloatArray,
    rates: FloatArray,
    offset: FloatArray,
) -> _Rows:
    count = poses.shape[0]
    step, past, now = (np.zeros((count - 1, STATES, *own)) for own in ((), (STATES,), (STATES,)))
    for index, motion in enumerate(motions):
        pose, rate = poses[:, index], rates[:, index]
        tangent = se3.log(se3.inverse(pose[:-1]) @ pose[1:])
        right, left = se3.right_jacobian_inverse(tangent), se3.left_jacobian_inverse(tangent)
        turn = 0.5 * _adjoint_algebra(rate[1:])
        residual = np.concatenate(
            [tangent - motion.step * rate[:-1], np.einsum("fij,fj->fi", right, rate[1:]) - rate[:-1]], axis=1
        )
        before, after = np.zeros((2, count - 1, 12, 12))
        before[:, :6, :6], before[:, 6:, :6] = -left, turn @ left
        before[:, :6, 6:], before[:, 6:, 6:] = -motion.step * np.eye(6), -np.eye(6)
        after[:, :6, :6], after[:, 6:, :6], after[:, 6:, 6:] = right, -turn @ right, right
        root = np.linalg.cholesky(motion.precision).T
        whitener = np.kron(root, np.diag(motion.density**-0.5))
        own = slice(12 * index, 12 * index + 12)
        columns = np.concatenate([6 * index + np.arange(6), POSES + 6 * index + np.arange(6)])
        step[:, own] = residual @ whitener.T
        past[:, own, columns] = whitener @ before
        now[:, own, columns] = whitener @ after
    travel, slope = joint_travel(joint, poses)
    decay = float(np.exp(-motions[0].step / JOINT_TIME))
    constant, moving = np.sqrt(OFFSET_SHARE) * joint.travel_sd, np.sqrt(1.0 - OFFSET_SHARE) * joint.travel_sd
    scale = np.full(count, 1.0 / (moving * np.sqrt(1.0 - decay**2)))
    scale[0] = 1.0 / moving
    away = travel - constant * offset
    innovation, moved = away.copy(), np.full(count, -constant * (1.0 - decay))
    innovation[1:] -= decay * away[:-1]
    moved[0] = -constant
    joint_now, joint_past = np.zeros((2, count, 3, STATES))
    joint_now[..., :POSES] = slope
    joint_past[1:, :, :POSES] = -decay * slope[:-1]
    return _Rows(
        *(step, past, now),
        scale[:, None] * innovation,
        scale[:, None, None] * joint_past,
        scale[:, None, None] * joint_now,
        scale * moved,
    )


def _turned(matrix: FloatArray) -> FloatArray:
    return np.swapaxes(matrix, -1, -2)


def _banded(diagonal: FloatArray, lower: FloatArray) -> FloatArray:
    """Block tridiagonal matrix in the lower banded form of LAPACK, (2·24, 24·F)."""
    count = diagonal.shape[0]
    both = np.zeros((count, 2 * STATES, STATES))
    both[:, :STATES] = diagonal
    both[:-1, STATES:] = lower
    result = np.zeros((2 * STATES, count * STATES))
    for column in range(STATES):
        result[: 2 * STATES - column, column::STATES] = both[:, column:, column].T
    return result


def join_motions(
    rng: np.random.Generator,
    motions: list[MotionPrior],
    joint: JointProblem,
    poses: FloatArray,
    rates: FloatArray,
) -> FloatArray:
    """Draw a motion of two segments from the product of their motion priors and the joint's law.

    Parameters
    ----------
    rng : of the draw
    motions : of both segments, white noise on acceleration
    joint : with a finite travel_sd
    poses, rates : shapes (F, 2, 4, 4) and (F, 2, 6), motions to begin from; their start stays

    Returns
    -------
    Poses, shape (F, 2, 4, 4), lab ← bone.
    """
    return draw_joined(rng, motions, joint, poses, rates)[0]


def draw_joined(
    rng: np.random.Generator,
    motions: list[MotionPrior],
    joint: JointProblem,
    poses: FloatArray,
    rates: FloatArray,
) -> tuple[FloatArray, float]:
    """As `join_motions`; also the logarithm of density over proposal, to first order, up to a constant."""
    count = poses.shape[0]
    drawn_step, drawn_joint = rng.standard_normal((count - 1, STATES)), rng.standard_normal((count, 3))
    drawn_offset = rng.standard_normal(3)
    poses, rates = _attached(joint, poses, rates, motions[0].step)
    offset = np.zeros(3)
    held = np.zeros(STATES)
    held[[*range(9), *range(POSES, POSES + 9)]] = HELD

    def misfit(rows: _Rows, at: FloatArray) -> float:
        parts = (rows.step - drawn_step, rows.joint - drawn_joint, at - drawn_offset)
        return float(sum((part**2).sum() for part in parts))

    rows = _rows(motions, joint, poses, rates, offset)
    value = misfit(rows, offset)
    for _ in range(MAXIMUM_ITERATIONS):
        system = _System(rows, held)
        change, shift = system.solve(
            rows, rows.step - drawn_step, rows.joint - drawn_joint, offset - drawn_offset
        )
        length = 1.0
        while True:
            ahead = poses @ se3.exp(length * change[:, :POSES].reshape(-1, 2, 6))
            faster = rates + length * change[:, POSES:].reshape(-1, 2, 6)
            further = offset + length * shift
            there = _rows(motions, joint, ahead, faster, further)
            found = misfit(there, further)
            if found <= value * (1.0 + 1e-10) or length < SHORTEST:
                break
            length *= 0.5
        poses, rates, offset, rows, value = ahead, faster, further, there, found
        if np.abs(change).max() < TOLERANCE:
            break
    system = _System(rows, held)
    whole = float((rows.step**2).sum() + (rows.joint**2).sum() + (offset**2).sum())
    change, shift = system.solve(rows, rows.step, rows.joint, offset)
    inside = system.inside(rows, rows.step, rows.joint, offset, change, shift)
    return poses, -0.5 * (whole - inside) - 0.5 * system.log_determinant


class _System:
    """Normal equations of the rows, factored."""

    def __init__(self, rows: _Rows, held: FloatArray) -> None:
        count = rows.joint.shape[0]
        diagonal = _turned(rows.joint_now) @ rows.joint_now
        diagonal[1:] += _turned(rows.step_now) @ rows.step_now
        diagonal[:-1] += _turned(rows.step_past) @ rows.step_past
        diagonal[:-1] += _turned(rows.joint_past[1:]) @ rows.joint_past[1:]
        diagonal[0] += np.diag(held)
        lower = _turned(rows.step_now) @ rows.step_past + _turned(rows.joint_now[1:]) @ rows.joint_past[1:]
        self._factor = cholesky_banded(_banded(diagonal, lower), lower=True, check_finite=False)
        coupling = _turned(rows.joint_now) * rows.joint_offset[:, None, None]
        coupling[:-1] += _turned(rows.joint_past[1:]) * rows.joint_offset[1:, None, None]
        self._coupling = coupling.reshape(count * STATES, 3)
        self._responses = cho_solve_banded((self._factor, True), self._coupling, check_finite=False)
        self._rest = (1.0 + (rows.joint_offset**2).sum()) * np.eye(3) - self._coupling.T @ self._responses

    @property
    def log_determinant(self) -> float:
        """Of the whole matrix."""
        return float(2.0 * np.log(self._factor[0]).sum() + np.linalg.slogdet(self._rest)[1])

    def _pull(
        self, rows: _Rows, step: FloatArray, joint: FloatArray, offset: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Jᵀ of residuals."""
        pull = np.einsum("fnx,fn->fx", rows.joint_now, joint)
        pull[1:] += np.einsum("fnx,fn->fx", rows.step_now, step)
        pull[:-1] += np.einsum("fnx,fn->fx", rows.step_past, step)
        pull[:-1] += np.einsum("fnx,fn->fx", rows.joint_past[1:], joint[1:])
        return pull.reshape(-1), rows.joint_offset @ joint + offset

    def solve(
        self, rows: _Rows, step: FloatArray, joint: FloatArray, offset: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Gauss-Newton step of the states (F, 24) and of the offset (3,) for residuals."""
        pull, own = self._pull(rows, step, joint, offset)
        alone = cho_solve_banded((self._factor, True), pull, check_finite=False)
        shift = -np.linalg.solve(self._rest, own - self._coupling.T @ alone)
        return (-(alone + self._responses @ shift)).reshape(-1, STATES), shift

    def inside(
        self,
        rows: _Rows,
        step: FloatArray,
        joint: FloatArray,
        offset: FloatArray,
        change: FloatArray,
        shift: FloatArray,
    ) -> float:
        """Squared length of the residuals within what the unknowns can reach; of a solved step."""
        pull, own = self._pull(rows, step, joint, offset)
        return -float(pull @ change.reshape(-1) + own @ shift)


def _attached(
    joint: JointProblem, poses: FloatArray, rates: FloatArray, step: float
) -> tuple[FloatArray, FloatArray]:
    """The distal segment moved to where its joint centre meets the proximal one, with velocities to match."""
    poses, rates = poses.copy(), rates.copy()
    centre = se3.transform_points(poses[:, 0], joint.centre_proximal[None])[:, 0]
    poses[:, 1, :3, 3] = centre - poses[:, 1, :3, :3] @ joint.centre_distal
    move = se3.log(se3.inverse(poses[:-1, 1]) @ poses[1:, 1]) / step
    rates[1:-1, 1, 3:] = 0.5 * (move[1:] + move[:-1])[:, 3:]
    rates[0, 1, 3:], rates[-1, 1, 3:] = move[0, 3:], move[-1, 3:]
    return poses, rates

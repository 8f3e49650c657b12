"""Other ways to the smoother's answer, for its benchmark: a general solver, an unscented Kalman smoother."""

from __future__ import annotations

import time
from dataclasses import dataclass

import numpy as np
from filterpy.kalman import MerweScaledSigmaPoints, UnscentedKalmanFilter
from scipy.linalg import block_diag
from scipy.sparse import coo_matrix, csr_matrix, hstack, identity, vstack
from smoother_trial import MARKER_SD, Trial

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.solve.spans import TrajectorySystem
from sta_prior.solve.trajectory import RATE_SD, HiddenOutputs, Trajectory, TrajectoryProblem, moved


@dataclass(frozen=True)
class Residuals:
    """The objective as whitened residuals of a step away from a state, for a general solver."""

    problem: TrajectoryProblem
    hidden: HiddenOutputs
    state: Trajectory
    bound: float

    def at(self, unknowns: FloatArray) -> Trajectory:
        """State after a step, (T·p + c,)."""
        ends = self.problem.frames * self.problem.moving
        change = unknowns[:ends].reshape(self.problem.frames, -1)
        return moved(self.problem, self.state, change, unknowns[ends:])

    def motion(self, state: Trajectory, index: int) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Innovations of a segment's motion, whitened, and their derivatives in the two states."""
        prior = self.problem.motions[index]
        poses, rates = state.poses[:, index], state.rates[:, index, 0]
        tangent = se3.log(se3.inverse(poses[:-1]) @ poses[1:])
        right, left = se3.right_jacobian_inverse(tangent), se3.left_jacobian_inverse(tangent)
        half = np.zeros((len(tangent), 6, 6))
        half[:, :3, :3] = half[:, 3:, 3:] = -0.5 * se3.skew(rates[1:, :3])
        half[:, 3:, :3] = -0.5 * se3.skew(rates[1:, 3:])
        after, before = np.zeros((len(tangent), 12, 12)), np.zeros((len(tangent), 12, 12))
        after[:, :6, :6] = after[:, 6:, 6:] = right
        after[:, 6:, :6], before[:, 6:, :6] = half @ right, -half @ left
        before[:, :6, :6] = -left
        before[:, :6, 6:] = -prior.step * np.eye(6)
        before[:, 6:, 6:] = -np.eye(6)
        arrived = np.concatenate([tangent, np.einsum("fab,fb->fa", right, rates[1:])], axis=1)
        residual = arrived - np.concatenate([prior.step * rates[:-1], rates[:-1]], axis=1)
        white = np.kron(np.linalg.cholesky(prior.precision).T, np.diag(prior.density**-0.5))
        return residual @ white.T, white @ before, white @ after

    def __call__(self, unknowns: FloatArray) -> FloatArray:
        """All residuals."""
        state = self.at(unknowns)
        system = TrajectorySystem(self.problem, state, self.hidden)
        parts = [rows.white.reshape(-1) for rows in system.rows(system.part(0, self.problem.frames))]
        for index in range(len(self.problem.motions)):
            parts += [self.motion(state, index)[0].reshape(-1), state.rates[0, index, 0] / RATE_SD]
        return np.concatenate([np.concatenate(parts) / np.sqrt(self.bound), state.constants])

    def jacobian(self, unknowns: FloatArray) -> csr_matrix:
        """Their derivatives, sparse."""
        problem, state = self.problem, self.at(unknowns)
        frames, size, constants = problem.frames, problem.moving, problem.constants
        # A step of the unknowns turns a pose that is already turned by some.
        turn = se3.right_jacobian(
            unknowns[: frames * size].reshape(frames, -1)[:, : problem.poses].reshape(-1, 6)
        )
        turned = np.zeros((frames, size, size))
        turned[:, np.arange(size), np.arange(size)] = 1.0
        for index, block in enumerate(turn.reshape(frames, -1, 6, 6).swapaxes(0, 1)):
            own = slice(6 * index, 6 * index + 6)
            turned[:, own, own] = block
        system = TrajectorySystem(problem, state, self.hidden)
        blocks = []
        for rows in system.rows(system.part(0, frames)):
            _, now, past, fan = rows.whitened()
            at = np.arange(problem.poses)
            count = now.shape[1]
            here = (now @ turned[:, : problem.poses, : problem.poses], 0, at)
            before = (-past[1:] @ turned[:-1, : problem.poses, : problem.poses], 1, at)
            wide = scattered(frames * count, frames * size + constants, [here, before], size)
            at_rows, at_columns = np.indices((frames * count, fan.shape[2]))
            columns = at_columns + frames * size + rows.at.start
            fans = coo_matrix((fan.reshape(-1), (at_rows.reshape(-1), columns.reshape(-1))), shape=wide.shape)
            blocks.append(wide + fans)
        for index in range(len(problem.motions)):
            at = problem.state(index, 0)
            _, before_, after_ = self.motion(state, index)
            now_, past_ = after_ @ turned[1:, at[:, None], at], before_ @ turned[:-1, at[:, None], at]
            first = np.zeros((1, 6, 6))
            first[0] = np.diag(1.0 / RATE_SD)
            width = frames * size + constants
            blocks.append(scattered((frames - 1) * 12, width, [(now_, -1, at), (past_, 0, at)], size))
            blocks.append(scattered(6, width, [(first, 0, at[6:])], size))
        states = csr_matrix(vstack(blocks)) / np.sqrt(self.bound)
        own = hstack([coo_matrix((constants, frames * size)), identity(constants)])
        return csr_matrix(vstack([states, own]))


def scattered(
    height: int, width: int, parts: list[tuple[FloatArray, int, FloatArray]], size: int
) -> coo_matrix:
    """Blocks (f, n, m), the last of them in the last rows, some frames behind them, in columns of a frame."""
    data, at_rows, at_columns = [], [], []
    for block, behind, columns in parts:
        count, rows, _ = block.shape
        first = height // rows - count
        frame = np.arange(count)[:, None, None]
        row_at = (first + frame) * rows + np.arange(rows)[:, None] + 0 * columns
        column_at = (first + frame - behind) * size + columns + 0 * np.arange(rows)[:, None]
        data.append(block.reshape(-1))
        at_rows.append(row_at.reshape(-1))
        at_columns.append(column_at.reshape(-1))
    where = (np.concatenate(at_rows), np.concatenate(at_columns))
    return coo_matrix((np.concatenate(data), where), shape=(height, width))


def turned_by(vector: FloatArray) -> FloatArray:
    """Rotation by a vector, (3, 3): for one, without checks."""
    angle = float(np.sqrt(vector @ vector))
    cross = np.array(
        [[0.0, -vector[2], vector[1]], [vector[2], 0.0, -vector[0]], [-vector[1], vector[0], 0.0]]
    )
    if angle < 1e-8:
        return np.eye(3) + cross
    return np.eye(3) + np.sin(angle) / angle * cross + (1.0 - np.cos(angle)) / angle**2 * (cross @ cross)


def unscented(trial: Trial, frames: int, constants: int, residuals: int) -> tuple[int, float]:
    """Unknowns, and seconds a frame, of filterpy's unscented Kalman filter and smoother.

    A pose is a turn and a shift from the first frame's; velocities are along the lab's axes. constants,
    residuals: how many of them are unknowns, all or none.
    """
    problem = trial.problem
    first, moving = trial.start[0], problem.moving
    last = moving + constants
    size = last + residuals
    slices = problem.constant_slices
    decay = problem.decay(0)

    def ahead(state: FloatArray, step_: float) -> FloatArray:
        result = state.copy()
        result[:12] += step_ * state[12:24]
        result[last:] *= decay
        return result

    def seen(state: FloatArray) -> FloatArray:
        rotations = [turned_by(state[6 * i : 6 * i + 3]) @ first[i, :3, :3] for i in range(2)]
        between = rotations[0].T @ rotations[1]
        flexion, turn = np.arctan2(-between[0, 1], between[1, 1]), np.arctan2(-between[2, 0], between[2, 2])
        angles = np.array([[[-flexion, between[2, 1], turn]]])
        points = []
        for i, segment in enumerate(problem.segments):
            artifact, n = segment.artifact, segment.reference.size
            features = artifact.basis.values(angles, artifact.reference)[0]
            shift = features @ artifact.weights.mean
            if constants:
                shift = shift + features @ (problem.modes[i].modes @ state[moving:last][slices[i]])
            if residuals:
                shift = shift + state[last:][n * i : n * i + n]
            place = (segment.reference + shift.reshape(-1, 3)) @ rotations[i].T
            points.append(place + first[i, :3, 3] + state[6 * i + 3 : 6 * i + 6])
        return np.concatenate(points).reshape(-1)

    measured = np.concatenate([s.points[:frames] for s in problem.segments], axis=1).reshape(frames, -1)
    points = MerweScaledSigmaPoints(size, alpha=0.1, beta=2.0, kappa=0.0)
    task = UnscentedKalmanFilter(size, measured.shape[1], problem.step, seen, ahead, points)
    spread = block_diag(*(segment.artifact.residual for segment in problem.segments))
    task.Q = 1e-12 * np.eye(size)
    for i, motion in enumerate(problem.motions):
        at = problem.state(i, 0)
        task.Q[np.ix_(at, at)] += np.kron(np.linalg.inv(motion.precision), np.diag(motion.density))
    task.P = np.diag(np.concatenate([np.full(12, 1e-3), np.ones(size - 12)]))
    task.R = MARKER_SD**2 * np.eye(len(spread))
    if residuals:
        task.Q[last:, last:] += (1.0 - decay**2) * spread
        task.P[last:, last:] = spread
    else:
        task.R += spread
    began = time.process_time()
    means, covariances = task.batch_filter(measured)
    task.rts_smoother(means, covariances)
    return size, (time.process_time() - began) / frames

"""Spans of a trajectory problem against its formulas written out row by row in NumPy over the whole trial.

The formulas are those of solve/trajectory.py and solve/motion.py; no outside source.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from made_problems import made_artifact, made_problem, random_covariance

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.prior.basis import Reach
from sta_prior.prior.interface import design_of
from sta_prior.prior.time_scales import TimeScales
from sta_prior.rigid import marker_jacobian
from sta_prior.solve.motion import MotionPrior
from sta_prior.solve.motion_kernels import step_jacobians
from sta_prior.solve.smoother import begin, make_problem
from sta_prior.solve.spans import ANCHOR, WHOLE_ANCHOR, SpanMemory, TrajectorySystem
from sta_prior.solve.terms import BALL_JOINT_SD, angles_and_jacobians, drive, joint_travel
from sta_prior.solve.trajectory import (
    JOINT_TIME,
    OFFSET_SHARE,
    RATE_SD,
    HiddenOutputs,
    Trajectory,
    TrajectoryProblem,
    moved,
    place_hidden,
)

FRAMES, SEGMENTS, MARKERS = 40, 3, 11
STEP, MARKER_SD = 0.01, 0.0005


@dataclass
class Dense:
    """Whitened rows over all unknowns of a trial, frames first, then the constants."""

    size: int
    unknowns: int
    residuals: list[FloatArray]
    rows: list[FloatArray]

    def add(self, residual: FloatArray, *parts: tuple[int, FloatArray]) -> None:
        """Rows that are zero but for matrices from some columns on."""
        row = np.zeros((residual.size, self.unknowns))
        for first, matrix in parts:
            row[:, first : first + matrix.shape[1]] += matrix
        self.residuals.append(residual)
        self.rows.append(row)


def root(covariance: FloatArray) -> FloatArray:
    """L with L C Lᵀ = 1."""
    return np.asarray(np.linalg.inv(np.linalg.cholesky(covariance)))


def add_chain(
    dense: Dense,
    first: int,
    residual: FloatArray,
    jacobian: FloatArray,
    constant: FloatArray,
    decay: FloatArray,
    factor: list[FloatArray | None],
) -> None:
    """Innovations e_t − ρe_{t−1} of a chain; no factor where there are no rows."""
    for frame in range(len(residual)):
        white = factor[frame]
        if white is None:
            continue
        change, moving = residual[frame].copy(), constant[frame].copy()
        parts = [(frame * dense.size, white @ jacobian[frame])]
        if decay[frame] > 0.0:
            change -= decay[frame] * residual[frame - 1]
            moving -= decay[frame] * constant[frame - 1]
            parts.append(((frame - 1) * dense.size, -decay[frame] * white @ jacobian[frame - 1]))
        dense.add(white @ change, *parts, (first, white @ moving))


def add_markers(
    dense: Dense,
    problem: TrajectoryProblem,
    state: Trajectory,
    hidden: HiddenOutputs,
    index: int,
    expected: bool,
) -> None:
    segment, modes = problem.segments[index], problem.modes[index]
    at = problem.constant_slices[index]
    poses = state.poses
    inputs, slope = drive(segment, poses, *angles_and_jacobians(problem.joints, poses))
    design = design_of(segment.artifact, inputs)
    weights = modes.modes @ state.constants[at]
    frames, n = design.mean.shape
    jacobian = np.zeros((frames, n, dense.size))
    residual, constant = np.zeros((frames, n)), np.zeros((frames, n, weights.size and at.stop - at.start))
    factor: list[FloatArray | None] = []
    decay = np.where(hidden.restart[index], 0.0, problem.decay(index))
    for frame in range(frames):
        own = poses[frame, segment.index]
        mean = design.mean[frame] + design.features[frame] @ weights
        bend = design.mean_derivative[frame] + np.einsum(
            "kjd,kn->njd", design.feature_derivative[frame], weights
        )
        seen = (segment.points[frame] - own[:3, 3]) @ own[:3, :3]
        place = segment.reference + design.mean[frame].reshape(-1, 3) if expected else seen
        residual[frame] = (seen - segment.reference).reshape(-1) - mean
        jacobian[frame, :, : problem.poses] = -np.einsum("njd,jdx->nx", bend, slope[frame])
        pose = slice(6 * segment.index, 6 * segment.index + 6)
        jacobian[frame, :, pose] -= marker_jacobian(place)
        constant[frame] = -np.einsum("k,knc->nc", design.features[frame], modes.modes)
        for output, slot in enumerate(hidden.column[index][frame]):
            if slot >= 0:
                jacobian[frame, output] = constant[frame, output] = 0.0
                jacobian[frame, output, problem.poses + slot] = 1.0
                residual[frame, output] = state.hidden[frame, slot]
        spread = segment.artifact.residual + modes.rest
        if design.growth is not None:
            spread = spread + design.growth[frame]
        share = decay[frame] ** 2
        white = root((1.0 - share) * spread + (1.0 + share) * problem.marker_sd**2 * np.eye(n))
        factor.append(white if hidden.active[index][frame] else None)
    add_chain(dense, frames * dense.size + at.start, residual, jacobian, constant, decay, factor)


def add_joint(dense: Dense, problem: TrajectoryProblem, state: Trajectory, index: int) -> None:
    joint, own = problem.joints[index], problem.joint_slices[index]
    assert own is not None
    sd = max(joint.travel_sd, BALL_JOINT_SD)
    travel, slope = joint_travel(joint, state.poses)
    offset = np.sqrt(OFFSET_SHARE) * sd
    decay = np.full(len(travel), np.exp(-problem.step / JOINT_TIME))
    decay[0] = 0.0
    left = sd * np.sqrt((1.0 - OFFSET_SHARE) * (1.0 - decay**2))
    constant = np.tile(-offset * np.eye(3), (len(travel), 1, 1))
    residual = travel - offset * state.constants[own]
    factor: list[FloatArray | None] = [np.eye(3) / sd for sd in left]
    add_chain(dense, len(travel) * dense.size + own.start, residual, slope, constant, decay, factor)


def bracket(tangent: FloatArray) -> FloatArray:
    """ad(ξ), 6×6."""
    result = np.zeros((6, 6))
    result[:3, :3] = result[3:, 3:] = se3.skew(tangent[:3])
    result[3:, :3] = se3.skew(tangent[3:])
    return result


def add_motion(
    dense: Dense,
    prior: MotionPrior,
    problem: TrajectoryProblem,
    state: Trajectory,
    index: int,
    expected: bool,
) -> None:
    order, frames = prior.order, problem.frames
    noise = np.kron(np.linalg.inv(prior.precision), np.diag(prior.density))
    white = root(0.5 * (noise + noise.T))
    transition = np.kron(prior.transition, np.eye(6))
    columns = problem.state(index, state.hidden.shape[1])
    for frame in range(frames - 1):
        tangent = se3.log(se3.inverse(state.poses[frame, index]) @ state.poses[frame + 1, index])
        right, left = se3.right_jacobian_inverse(tangent), se3.left_jacobian_inverse(tangent)
        rates, later = state.rates[frame, index], state.rates[frame + 1, index]
        arrived = np.concatenate([tangent, *(right @ rate for rate in later)])
        residual = arrived - transition @ np.concatenate([np.zeros(6), *rates])
        after = np.kron(np.eye(order), right)
        before = -transition
        before[:6, :6] = -left
        for k, rate in enumerate(later):
            block = slice(6 * k + 6, 6 * k + 12)
            # Of J_r(ξ)⁻¹w in ξ, from its series 1 + ad(ξ)/2 + ad(ξ)²/12.
            bend = -0.5 * bracket(rate)
            bend -= (bracket(bracket(tangent) @ rate) + bracket(tangent) @ bracket(rate)) / 12.0
            after[block, :6] = bend @ right
            before[block, :6] = -bend @ left
        if expected:
            for k in range(order):
                block = slice(6 * k, 6 * k + 6)
                before[block, :6] -= bracket(residual[block])
        row = np.zeros((6 * order, 2 * dense.size))
        row[:, columns], row[:, dense.size + columns] = white @ before, white @ after
        dense.add(white @ residual, (frame * dense.size, row))


def whole(
    problem: TrajectoryProblem, state: Trajectory, hidden: HiddenOutputs, expected: bool
) -> tuple[FloatArray, FloatArray, float, int]:
    """Information and gradient over everything, cost, and unknowns of a frame."""
    size = problem.moving + hidden.count
    dense = Dense(size, problem.frames * size + problem.constants, [], [])
    for index in range(len(problem.segments)):
        add_markers(dense, problem, state, hidden, index, expected)
    for index in range(len(problem.joints)):
        add_joint(dense, problem, state, index)
    for index, motion in enumerate(problem.motions):
        add_motion(dense, motion, problem, state, index, expected)
        sd = np.concatenate([RATE_SD, 50.0 * RATE_SD])[: 6 * (problem.order - 1)]
        rates = problem.state(index, hidden.count)[6:]
        row = np.zeros((sd.size, size))
        row[np.arange(sd.size), rates] = 1.0 / sd
        dense.add(state.rates[0, index].reshape(-1) / sd, (0, row))
    rows, residual = np.concatenate(dense.rows), np.concatenate(dense.residuals)
    information = rows.T @ rows
    for frame in range(problem.frames):
        first = frame * size
        for pose in range(problem.poses):
            information[first + pose, first + pose] += min(ANCHOR, WHOLE_ANCHOR / problem.frames)
        used = {slot for column in hidden.column for slot in column[frame] if slot >= 0}
        for slot in set(range(hidden.count)) - used:
            information[first + problem.poses + slot, first + problem.poses + slot] = 1.0
    return information, rows.T @ residual, 0.5 * float(residual @ residual), size


def made_trial(order: int, growing: bool) -> tuple[TrajectoryProblem, Trajectory, HiddenOutputs]:
    """Large steps, hidden markers, a segment out of view for long and one for a little, at any state."""
    rng = np.random.default_rng(5)
    away = np.zeros((FRAMES, MARKERS), dtype=bool)
    away[12, 1] = away[12:15, 5] = away[13, 2] = True
    away[20:30, :4] = away[:2, 4:8] = away[20:23, 8:] = True
    artifacts = [made_artifact(rng, 4, [0]), made_artifact(rng, 4, [0, 1]), made_artifact(rng, 3, [1])]
    artifacts[0] = replace(artifacts[0], time_scales=TimeScales.single(0.01))
    if growing:
        basis = replace(artifacts[2].basis, reaches=(Reach(1, 0, 0.2, 0.6),))
        artifacts[2] = replace(artifacts[2], basis=basis, magnitude=random_covariance(rng, 9, 0.005))
    made = made_problem(6, SEGMENTS, FRAMES, hidden=away, artifacts=artifacts)
    problem = make_problem(made.segments, made.joints, made.poses, STEP, MARKER_SD, order)
    # As weak as the markers: else it would hide them in a comparison of sums.
    motions = [replace(motion, density=1e5 * motion.density) for motion in problem.motions]
    problem = replace(problem, motions=motions)
    hidden = place_hidden(problem)
    change = 0.01 * rng.standard_normal((FRAMES, problem.moving + hidden.count))
    state = begin(problem, hidden, made.poses)
    return problem, moved(problem, state, change, rng.standard_normal(problem.constants)), hidden


@pytest.mark.parametrize("expected", [False, True])
@pytest.mark.parametrize("growing", [False, True])
@pytest.mark.parametrize("order", [2, 3])
def test_spans_are_the_rows_squared(order: int, growing: bool, expected: bool) -> None:
    problem, state, hidden = made_trial(order, growing)
    assert hidden.restart[0][30]
    assert hidden.count == 9
    information, gradient, cost, size = whole(problem, state, hidden, expected)
    corner = FRAMES * size
    system = TrajectorySystem(problem, state, hidden, expected)
    for length in (FRAMES, 7, 2, 1):
        system.cost = 0.0
        constants, pull = np.zeros((problem.constants, problem.constants)), np.zeros(problem.constants)
        alike = 0
        for start in range(0, FRAMES, length):
            stop = min(start + length, FRAMES)
            alike += sum(rows.alike for rows in system.rows(system.part(start, stop)))
            span = system(start, stop)
            for frame in range(start, stop):
                own = slice(frame * size, (frame + 1) * size)
                later = slice(own.stop, own.stop + size)
                close(span.diagonal[frame - start], information[own, own])
                close(span.coupling[frame - start], information[own, corner:])
                close(span.gradient[frame - start], gradient[own])
                if frame + 1 < FRAMES:
                    close(span.lower[frame - start], information[later, own])
            assert span.constants_information is not None
            assert span.constants_gradient is not None
            constants += span.constants_information
            pull += span.constants_gradient
        # Both ways to the constants are used, but in one span for all.
        assert (alike > 0) == (length < FRAMES)
        close(constants, information[corner:, corner:])
        close(pull, gradient[corner:])
        assert abs(system.cost - cost) < 1e-11 * cost


def close(got: FloatArray, wanted: FloatArray) -> None:
    np.testing.assert_allclose(got, wanted, rtol=1e-10, atol=1e-11 * np.abs(wanted).max())


def test_a_step_has_the_tangent_and_jacobians_of_rigid_motions() -> None:
    """From no rotation at all to just short of half a turn; the general routines are tested elsewhere."""
    rng = np.random.default_rng(2)
    left, right, work = np.zeros((6, 6)), np.zeros((6, 6)), np.empty((9, 3, 3))
    for angle in (0.0, 1e-12, 1e-6, 1e-3, 0.1, 0.49, 0.51, 2.0, 3.1415):
        for axis in (*np.eye(3), *rng.standard_normal((6, 3))):
            tangent, found = 0.2 * rng.standard_normal(6), np.empty(6)
            tangent[:3] = angle * axis / np.linalg.norm(axis)
            earlier = se3.exp(rng.standard_normal(6))
            step_jacobians(earlier, earlier @ se3.exp(tangent), found, left, right, work)
            np.testing.assert_allclose(found, tangent, rtol=0, atol=1e-12)
            np.testing.assert_allclose(left, se3.left_jacobian_inverse(tangent), rtol=0, atol=1e-12)
            np.testing.assert_allclose(right, se3.right_jacobian_inverse(tangent), rtol=0, atol=1e-12)


def test_memory_of_a_span_is_given_again_only_when_nobody_holds_it() -> None:
    memory = SpanMemory()
    first = memory(4, 3, 2)
    address = first.diagonal.ctypes.data
    kept = first.lower[1:, 2]
    kept[:] = 7.0
    second, third = memory(4, 3, 2), memory(4, 3, 2)
    second.lower[:] = third.lower[:] = 1.0
    assert (kept == 7.0).all()
    del first, second, third
    # A view of a view still holds it.
    assert memory(4, 3, 2).diagonal.ctypes.data != address
    assert (kept == 7.0).all()
    other = memory(4, 3, 2)
    place = other.diagonal.ctypes.data
    other.coupling[:] = 5.0
    del other
    again = memory(3, 3, 2)
    assert again.diagonal.ctypes.data == place
    assert all((array == 0.0).all() for array in again if array is not None)

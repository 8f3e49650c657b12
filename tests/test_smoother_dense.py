"""What the smoother reports against dense algebra on the whole information, on small trials."""

from __future__ import annotations

import functools
import itertools
from dataclasses import dataclass, replace

import numpy as np
import pytest
from differences import central_difference
from made_trajectories import MadeTrial, angles_of, dense_system, made_trial, motion_only

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.prior.interface import design_of
from sta_prior.solve.chain import bounded_constants, factor
from sta_prior.solve.chain_marginals import marginals
from sta_prior.solve.posterior import SOURCES, FrameSolution
from sta_prior.solve.smoother import Smoothed, smooth
from sta_prior.solve.spans import TrajectorySystem
from sta_prior.solve.terms import drive, joint_travel
from sta_prior.solve.trajectory import JOINT_TIME, OFFSET_SHARE, place_hidden
from sta_prior.solve.trajectory_posterior import describe_trajectory

FRAMES = 8


@dataclass(frozen=True)
class Case:
    """A smoothed trial, what is reported of it, and its covariance by dense algebra.

    known: A⁻¹; response: A⁻¹B; constants: S⁻¹; information: dense, all without the constants' prior.
    """

    trial: MadeTrial
    smoothed: Smoothed
    reported: FrameSolution
    information: FloatArray
    states: int
    covariance: FloatArray
    cross: FloatArray
    constants: FloatArray

    @property
    def width(self) -> int:
        """Unknowns of a frame."""
        return self.states // self.frames

    @property
    def tolerance(self) -> float:
        """Ten orders of magnitude between rates and poses with noise on jerk cost a digit."""
        return 1e-8 if self.smoothed.problem.order == 2 else 1e-7

    @property
    def frames(self) -> int:
        return self.smoothed.problem.frames

    def of_frame(self, frame: int) -> slice:
        """Pose unknowns of a frame among all."""
        return slice(frame * self.width, frame * self.width + self.smoothed.problem.poses)

    def whole(self) -> FloatArray:
        """Covariance of all unknowns, constants last."""
        return np.block([[self.covariance, self.cross], [self.cross.T, self.constants]])


def hidden_markers(count: int) -> np.ndarray:
    """Some markers hidden in some frames, all of the shank's in two."""
    hidden = np.zeros((FRAMES, 8 if count == 2 else 11), dtype=bool)
    hidden[0, 2] = hidden[2:4, 1] = hidden[6, 5] = True
    hidden[3:5, 4:8] = True
    return hidden


def inverted(matrix: FloatArray) -> FloatArray:
    """Inverse, scaled to a unit diagonal first and refined once in long numbers: rates and poses differ by
    ten orders of magnitude.
    """
    scale = 1.0 / np.sqrt(np.diag(matrix))
    scaled = (matrix * scale[:, None] * scale).astype(np.longdouble)
    found = np.linalg.inv(scaled.astype(np.float64)).astype(np.longdouble)
    found = found + found @ (np.eye(len(matrix)) - scaled @ found)
    return np.asarray(found * scale[:, None] * scale, dtype=np.float64)


@functools.cache
def solve(count: int, constant_time: float, order: int = 2) -> Case:
    trial = made_trial(30 + count, count, FRAMES, hidden=hidden_markers(count))
    problem = trial.problem(order)
    # A trial this short tells no density.
    density = np.full(6, 40.0 if order == 2 else 4e3)
    problem = replace(problem, motions=[replace(motion, density=density) for motion in problem.motions])
    smoothed = smooth(problem, trial.poses, constant_time)
    information, _ = dense_system(TrajectorySystem(problem, smoothed.state, smoothed.hidden, expected=True))
    n = len(information) - problem.constants
    known = inverted(information[:n, :n])
    response = known @ information[:n, n:]
    bound = max(1.0, FRAMES * problem.step / constant_time)
    reduced = information[n:, n:] - information[n:, :n] @ response
    constants = np.linalg.inv(np.eye(problem.constants) + reduced / bound)
    return Case(
        trial=trial,
        smoothed=smoothed,
        reported=describe_trajectory(smoothed),
        information=information,
        states=n,
        covariance=known + response @ constants @ response.T,
        cross=-response @ constants,
        constants=constants,
    )


@pytest.fixture(scope="module", params=[(2, 1.0, 2), (3, 1.0, 2), (2, 0.02, 2), (2, 1.0, 3)], ids=str)
def case(request: pytest.FixtureRequest) -> Case:
    return solve(*request.param)


def close(got: FloatArray, wanted: FloatArray, tolerance: float = 1e-8) -> None:
    """Relative to the largest value."""
    np.testing.assert_allclose(got, wanted, rtol=0, atol=tolerance * np.nanmax(np.abs(wanted)))


def test_without_a_bound_the_covariance_is_the_inverse_of_the_whole_information() -> None:
    case = solve(2, 1.0)
    whole = case.information.copy()
    whole[case.states :, case.states :] += np.eye(len(case.constants))
    close(case.whole(), inverted(whole), 1e-8)


def test_covariance_of_all_poses_of_a_frame(case: Case) -> None:
    wanted = np.array([case.covariance[own, own] for own in map(case.of_frame, range(FRAMES))])
    assert case.reported.determined.all()
    close(case.reported.covariance, wanted, case.tolerance)
    size = np.sqrt(np.einsum("fxx->fx", wanted))
    ratio = np.sqrt(np.einsum("fxx->fx", case.reported.covariance)) / size
    np.testing.assert_allclose(ratio, 1.0, atol=case.tolerance)


def test_covariance_with_the_next_frame_and_with_the_constants(case: Case) -> None:
    smoothed, poses = case.smoothed, case.smoothed.problem.poses
    told = marginals(smoothed.factor, smoothed.constants, poses, lagged=True, with_constants=True)
    assert told.lagged is not None
    assert told.with_constants is not None
    places = [case.of_frame(frame) for frame in range(FRAMES)]
    close(told.with_constants, np.array([case.cross[own] for own in places]), case.tolerance)
    pairs = itertools.pairwise(places)
    close(told.lagged, np.array([case.covariance[own, after] for own, after in pairs]), case.tolerance)
    close(smoothed.constants.covariance, case.constants, case.tolerance)


def along(case: Case, function: object, frame: int) -> FloatArray:
    """SD of a function of one frame's poses (S, 4, 4), by central differences and dense covariance."""
    poses = case.smoothed.state.poses[frame]

    def stepped(step: FloatArray) -> FloatArray:
        ahead = poses @ se3.exp(step.reshape(-1, 6))
        return np.asarray(function(ahead[None]))  # type: ignore[operator]

    slope = central_difference(stepped, case.smoothed.problem.poses)
    own = case.of_frame(frame)
    return np.asarray(np.sqrt(np.einsum("ax,xy,ay->a", slope, case.covariance[own, own], slope)))


def test_sd_of_angles_and_of_the_joint_centres_travel(case: Case) -> None:
    joints = case.trial.joints
    for frame in range(FRAMES):
        wanted = along(case, lambda poses: angles_of(joints, poses).ravel(), frame)
        np.testing.assert_allclose(case.reported.angle_sd[frame].ravel(), wanted, rtol=1e-7)
        for index, joint in enumerate(joints):
            wanted = along(case, lambda poses, joint=joint: joint_travel(joint, poses)[0].ravel(), frame)
            np.testing.assert_allclose(case.reported.travel_sd[frame, index], wanted, rtol=1e-7)


def test_artifact_and_its_sd_at_seen_and_hidden_markers(case: Case) -> None:
    """d = T⁻¹y − a less what the instrument adds where seen, μ(q) + Z(q)Vu + r where hidden: differences of
    the definition in poses, hidden outputs and constants, against the dense covariance.
    """
    smoothed, problem, state = case.smoothed, case.smoothed.problem, case.smoothed.state
    whole, size, count = case.whole(), case.width, smoothed.hidden.count
    for index, segment in enumerate(problem.segments):
        modes, at = problem.modes[index].modes, problem.constant_slices[index]
        for frame in range(FRAMES):
            column = smoothed.hidden.column[index][frame]
            seen = column < 0
            points = segment.points[frame]

            def displacement(
                step: FloatArray,
                *,
                frame: int = frame,
                segment=segment,
                column=column,
                seen=seen,
                points=points,
                modes=modes,
                at=at,
            ) -> FloatArray:
                poses = state.poses[[frame]] @ se3.exp(step[: problem.poses].reshape(-1, 6))
                constants = state.constants[at] + step[problem.poses + count :][at]
                rest = state.hidden[frame] + step[problem.poses : problem.poses + count]
                angles = angles_of(problem.joints, poses)
                inputs, _ = drive(segment, poses, angles, np.zeros((1, *angles.shape[1:], problem.poses)))
                design = design_of(segment.artifact, inputs)
                expected = (design.mean + design.features @ (modes @ constants))[0]
                bone = se3.transform_points(se3.inverse(poses[0, segment.index]), points) - segment.reference
                return np.where(seen, np.nan_to_num(bone.ravel()), expected + rest[np.maximum(column, 0)])

            leading = problem.poses + count
            slope = central_difference(displacement, leading + problem.constants)
            # The information has the markers where the prior expects them.
            first = 6 * segment.index
            mean = design_of(segment.artifact, angles_of(problem.joints, state.poses[[frame]])).mean[0]
            place = segment.reference + mean.reshape(-1, 3)
            lever = np.concatenate([se3.skew(place), np.broadcast_to(-np.eye(3), (len(place), 3, 3))], axis=2)
            slope[np.ix_(seen, np.arange(first, first + 6))] = lever.reshape(-1, 6)[seen]
            own = np.r_[frame * size : frame * size + leading, case.states : len(whole)]
            variance = np.einsum("ax,xy,ay->a", slope, whole[np.ix_(own, own)], slope)
            spread = np.diag(segment.artifact.residual + problem.modes[index].rest)
            noise = problem.marker_sd**2
            variance += np.where(seen, noise * spread / (spread + noise), 0.0)
            got = case.reported.artifact_sd[index][frame]
            np.testing.assert_allclose(got, np.sqrt(variance), rtol=1e-6)
            wanted = displacement(np.zeros(leading + problem.constants))
            np.testing.assert_allclose(case.reported.artifact[index][frame], wanted, atol=1e-12)


# --- information shares -----------------------------------------------------------------------------


def test_shares_sum_to_one(case: Case) -> None:
    np.testing.assert_allclose(case.reported.share.sum(axis=-1), 1.0, rtol=0, atol=1e-9)


def motion_information(case: Case) -> FloatArray:
    """Of the motion priors alone, with the anchor: (states, states)."""
    problem, state = motion_only(case.smoothed.problem, case.smoothed.state)
    information, _ = dense_system(TrajectorySystem(problem, state, place_hidden(problem), expected=True))
    columns = np.concatenate(
        [problem.state(index, case.smoothed.hidden.count) for index in range(len(problem.segments))]
    )
    own = np.concatenate([problem.state(index, 0) for index in range(len(problem.segments))])
    from_place = (problem.moving * np.arange(FRAMES)[:, None] + own).ravel()
    to_place = (case.width * np.arange(FRAMES)[:, None] + columns).ravel()
    result = np.zeros((case.states, case.states))
    result[np.ix_(to_place, to_place)] = information[np.ix_(from_place, from_place)]
    return result


def joint_information(case: Case) -> tuple[FloatArray, FloatArray]:
    """Of the joints alone in states, and between states and constants, by the full covariance in time."""
    problem, state = case.smoothed.problem, case.smoothed.state
    own, mixed = np.zeros((case.states, case.states)), np.zeros((case.states, problem.constants))
    times = problem.step * np.arange(FRAMES)
    memory = np.exp(-np.abs(times[:, None] - times) / JOINT_TIME)
    for joint, at in zip(problem.joints, problem.joint_slices, strict=True):
        assert at is not None
        _, slope = joint_travel(joint, state.poses)
        rows = np.zeros((FRAMES, 3, case.states))
        for frame in range(FRAMES):
            rows[frame, :, case.of_frame(frame)] = slope[frame]
        covariance = np.kron((1.0 - OFFSET_SHARE) * joint.travel_sd**2 * memory, np.eye(3))
        flat = rows.reshape(3 * FRAMES, case.states)
        weighed = np.linalg.solve(covariance, flat)
        own += flat.T @ weighed
        offset = -np.sqrt(OFFSET_SHARE) * joint.travel_sd * np.tile(np.eye(3), (FRAMES, 1))
        mixed[:, at] += weighed.T @ offset
    return own, mixed


def share_of(case: Case, own: FloatArray, mixed: FloatArray | None = None) -> FloatArray:
    """diag(C Λ) over the poses, (F, S, 6); Λ of states, and between constants and states."""
    product = np.einsum("xy,yx->x", case.covariance, own)
    if mixed is not None:
        product = product + np.einsum("xc,xc->x", case.cross, mixed)
    return np.stack([product[case.of_frame(frame)] for frame in range(FRAMES)]).reshape(FRAMES, -1, 6)


def test_share_of_motion_is_that_of_its_information(case: Case) -> None:
    wanted = share_of(case, motion_information(case))
    assert 0.05 < wanted.mean() < 0.95
    # With noise on jerk it is this product that loses digits, of terms of 10¹⁰: not what is reported.
    tolerance = 1e-8 if case.smoothed.problem.order == 2 else 2e-5
    got = case.reported.share[..., SOURCES.index("motion")]
    np.testing.assert_allclose(got, wanted, rtol=0, atol=tolerance)


def test_share_of_the_joints_is_that_of_their_information(case: Case) -> None:
    wanted = share_of(case, *joint_information(case))
    assert 0.02 < wanted.mean() < 0.9
    got = case.reported.share[..., SOURCES.index("joint")]
    np.testing.assert_allclose(got, wanted, rtol=0, atol=case.tolerance)


# --- spans ------------------------------------------------------------------------------------------


@pytest.mark.parametrize("span", [1, 3, 5])
def test_nothing_that_is_reported_depends_on_the_spans(span: int) -> None:
    case = solve(3, 1.0)
    smoothed = case.smoothed
    system = TrajectorySystem(smoothed.problem, smoothed.state, smoothed.hidden, expected=True)
    for memory in (0.0, 3e8):
        again = factor(system, FRAMES, span=span, memory=memory)
        constants = bounded_constants(again, smoothed.constants.bound)
        reported = describe_trajectory(replace(smoothed, factor=again, constants=constants))
        for name in ("covariance", "angle_sd", "travel_sd", "share", "poses", "angles", "conflict"):
            got, wanted = getattr(reported, name), getattr(case.reported, name)
            close(got, wanted, 1e-10)
        for got, wanted in zip(reported.artifact_sd, case.reported.artifact_sd, strict=True):
            close(got, wanted, 1e-10)

"""What a smoothed trial must not depend on, and trials that leave something open."""

from __future__ import annotations

import importlib
from dataclasses import dataclass, replace

import numpy as np
import pytest
from made_problems import made_artifact
from made_trajectories import MadeTrial, made_trial, only_markers, permuted, scaled

from sta_prior import se3
from sta_prior.checks import BoolArray, FloatArray
from sta_prior.prior.interface import IsotropicArtifact
from sta_prior.solve.frame import bridge, first_look, solve_frames
from sta_prior.solve.posterior import FrameSolution
from sta_prior.solve.smoother import Smoothed, smooth
from sta_prior.solve.trajectory import RATE_SD
from sta_prior.solve.trajectory_posterior import describe_trajectory

# By name: the package's own `solve` is the function.
SPANS_MODULE = importlib.import_module("sta_prior.solve.spans")

SAME = ("angles", "angle_sd", "travel", "travel_sd", "covariance", "share", "conflict")


@dataclass(frozen=True)
class Solved:
    smoothed: Smoothed
    reported: FrameSolution


def solve(trial: MadeTrial, order: int = 2) -> Solved:
    """From a first look at the markers, as for any trial."""
    look = bridge(first_look(trial.segments, trial.poses.shape[1])[0], trial.joints)
    smoothed = smooth(trial.problem(order, look), look)
    return Solved(smoothed, describe_trajectory(smoothed))


def some_hidden(frames: int) -> BoolArray:
    hidden = np.zeros((frames, 8), dtype=bool)
    hidden[4:9, 1] = hidden[20:23, 6] = hidden[30:33, 4:] = True
    return hidden


def base(frames: int = 40) -> MadeTrial:
    return made_trial(81, 2, frames, hidden=some_hidden(frames))


@pytest.fixture(scope="module")
def solved() -> Solved:
    return solve(base())


def same(got: FrameSolution, wanted: FrameSolution, names: tuple[str, ...], tolerance: float) -> None:
    for name in names:
        value = getattr(wanted, name)
        size = np.nanmax(np.abs(value))
        np.testing.assert_allclose(getattr(got, name), value, rtol=0, atol=tolerance * size, err_msg=name)


def pose_error(first: FloatArray, second: FloatArray) -> float:
    return float(np.nanmax(np.abs(se3.relative_difference(first, second))))


def test_the_laboratorys_frame_moves_the_poses_and_nothing_else(solved: Solved) -> None:
    """A lab turned and shifted by metres: poses move along; angles, intervals and shares stay. What is left
    is where the iteration stops.
    """
    move = se3.exp(np.array([1.2, -0.7, 0.4, 3.0, -2.0, 5.0]))
    trial = base()
    segments = [replace(s, points=se3.transform_points(move, s.points)) for s in trial.segments]
    elsewhere = solve(replace(trial, segments=segments, poses=move @ trial.poses))
    assert pose_error(elsewhere.reported.poses, move @ solved.reported.poses) < 1e-8
    same(elsewhere.reported, solved.reported, SAME, 1e-7)
    for name in ("angles", "angle_sd"):
        got, wanted = getattr(elsewhere.reported, name), getattr(solved.reported, name)
        np.testing.assert_allclose(got, wanted, rtol=0, atol=1e-8)


def test_the_order_of_the_markers_moves_nothing(solved: Solved) -> None:
    orders = ([2, 0, 3, 1], [3, 1, 0, 2])
    trial = base()
    segments = [permuted(s, order) for s, order in zip(trial.segments, orders, strict=True)]
    other = solve(replace(trial, segments=segments))
    assert pose_error(other.reported.poses, solved.reported.poses) < 1e-8
    same(other.reported, solved.reported, SAME, 1e-7)
    for index, order in enumerate(orders):
        at = (3 * np.array(order)[:, None] + np.arange(3)).ravel()
        for name in ("artifact", "artifact_sd"):
            got, wanted = getattr(other.reported, name)[index], getattr(solved.reported, name)[index][:, at]
            np.testing.assert_allclose(got, wanted, rtol=0, atol=1e-9)


def test_the_same_trial_gives_the_same_numbers_bit_for_bit(solved: Solved) -> None:
    again = solve(base())
    for name in ("poses", *SAME):
        np.testing.assert_array_equal(getattr(again.reported, name), getattr(solved.reported, name))
    np.testing.assert_array_equal(again.smoothed.state.constants, solved.smoothed.state.constants)
    assert again.reported.iterations == solved.reported.iterations


def test_a_larger_world_gives_larger_lengths_and_the_same_angles(
    solved: Solved, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Every length, noise and density times a factor, as if in another unit: no length is hidden in the
    solver but the first rates' spread, scaled here, the anchor's, and the tolerance.
    """
    factor = 4.0
    monkeypatch.setattr(SPANS_MODULE, "RATE_SD", RATE_SD * np.repeat([1.0, factor], 3))
    problem, state = scaled(solved.smoothed.problem, solved.smoothed.state, factor)
    smoothed = smooth(problem, state.poses)
    reported = describe_trajectory(smoothed)
    wanted = solved.reported
    assert np.abs(reported.angles - wanted.angles).max() < 1e-6
    np.testing.assert_allclose(reported.travel, factor * wanted.travel, rtol=0, atol=1e-6)
    np.testing.assert_allclose(reported.angle_sd, wanted.angle_sd, rtol=1e-5)
    np.testing.assert_allclose(reported.travel_sd, factor * wanted.travel_sd, rtol=1e-5)
    np.testing.assert_allclose(reported.share, wanted.share, rtol=0, atol=1e-4)


# --- what is left open ------------------------------------------------------------------------------


def unmoved_by_angles(frames: int = 40) -> MadeTrial:
    """As the base, with artifact that no angle drives: nothing but markers tells the poses."""
    rng = np.random.default_rng(86)
    artifacts = [made_artifact(rng, 4, []) for _ in range(2)]
    return made_trial(81, 2, frames, hidden=some_hidden(frames), artifacts=artifacts)


def loose(trial: MadeTrial) -> MadeTrial:
    """Without the joint."""
    return replace(trial, joints=[replace(joint, travel_sd=np.inf) for joint in trial.joints])


def axis_of(segment_reference: FloatArray) -> FloatArray:
    """Unit vector along the line through two markers, bone frame."""
    line: FloatArray = segment_reference[1] - segment_reference[0]
    return line / np.linalg.norm(line)


def widest(covariance: FloatArray) -> FloatArray:
    """Direction of rotation in which poses (F, 6, 6) are least known, (F, 3)."""
    _, vectors = np.linalg.eigh(covariance[:, :3, :3])
    return np.asarray(vectors[..., -1])


def test_two_markers_leave_the_turn_about_their_line_open_to_the_joint() -> None:
    """Without a joint the segment is not determined; with it, it is, at the price of the joint's travel."""
    trial = only_markers(unmoved_by_angles(), 1, [0, 3])
    problem = trial.problem()
    free = describe_trajectory(smooth(replace(problem, joints=loose(trial).joints), trial.poses))
    assert free.determined[:, 0].all()
    assert not free.determined[:, 1].any()
    assert np.isnan(free.poses[:, 1]).all()
    assert np.isnan(free.angles).all()
    line = axis_of(trial.segments[1].reference)
    # Within 6°: the innovations of its motion seem to tell a little of how the axes lie.
    assert np.abs(widest(free.covariance[:, 6:, 6:]) @ line).min() > np.cos(np.radians(6.0))
    held = describe_trajectory(smooth(problem, trial.poses))
    assert held.determined.all()
    np.testing.assert_allclose(held.share.sum(axis=-1), 1.0, atol=1e-9)


@pytest.mark.parametrize("spread", [1e-9, 1e-3])
def test_markers_on_a_line_leave_the_turn_about_it_open(spread: float) -> None:
    """Artifact moves them off the line by millimetres; that must not count as width of the cluster."""
    trial = unmoved_by_angles()
    line = np.array([[0.02, -0.1, 0.01], [0.02, -0.2, 0.01], [0.02, -0.25, 0.01], [0.02, -0.32, 0.01]])
    rng = np.random.default_rng(82)
    reference = line + spread * rng.standard_normal(line.shape)
    thigh = trial.segments[0]
    points = thigh.points + np.einsum("fab,mb->fma", trial.poses[:, 0, :3, :3], reference - thigh.reference)
    segments = [replace(thigh, points=points, reference=reference), trial.segments[1]]
    free = loose(replace(trial, segments=segments))
    reported = describe_trajectory(smooth(free.problem(), free.poses))
    assert not reported.determined[:, 0].any()
    assert reported.determined[:, 1].all()
    assert np.abs(widest(reported.covariance[:, :6, :6])[:, 1]).min() > 0.99


def test_one_marker_says_where_and_not_how() -> None:
    trial = loose(only_markers(unmoved_by_angles(), 1, [0]))
    reported = describe_trajectory(smooth(trial.problem(), trial.poses))
    assert not reported.determined[:, 1].any()
    assert reported.determined[:, 0].all()
    assert np.isnan(reported.artifact[1]).all()


def test_a_hidden_segment_is_bridged_by_its_neighbours_and_its_motion() -> None:
    """The shank of three out of view for 0.1 s: it hangs between knee and ankle and goes on as it went. The
    truth lies within its intervals, wider than where it is seen, and widest in the turn about its long axis.
    """
    hidden = np.zeros((30, 11), dtype=bool)
    hidden[10:20, 4:8] = True
    trial, shown = made_trial(83, 3, 30, hidden=hidden, cycle=2.0), made_trial(83, 3, 30, cycle=2.0)
    reported, wanted = solve(trial).reported, solve(shown).reported
    assert reported.determined.all()
    sd, seen_sd = (
        np.sqrt(np.einsum("fxx->fx", r.covariance)).reshape(30, 3, 6)[10:20, 1] for r in (reported, wanted)
    )
    # Each at its own optimum: by a little in what the neighbours tell as well.
    assert (sd > 0.99 * seen_sd).all()
    assert (sd[:, 1] > seen_sd[:, 1]).all()
    assert (sd[:, :3].argmax(axis=1) == 1).all()
    error = se3.relative_difference(reported.poses, trial.poses)
    assert np.abs(error[10:20, 1] / sd).max() < 3.5
    assert np.isnan(reported.conflict[10:20, 1]).all()
    assert np.isfinite(reported.artifact[1]).all()
    assert np.isfinite(reported.artifact_sd[1]).all()


def test_a_hidden_marker_is_predicted_with_its_interval(solved: Solved) -> None:
    """Less surely than where it is seen, and near where it was."""
    shown, hidden = made_trial(81, 2, 40), some_hidden(40)[:, 1]
    thigh = shown.segments[0]
    truth = se3.transform_points(se3.inverse(shown.poses[:, 0]), thigh.points) - thigh.reference
    here, there = solved.reported, solve(shown).reported
    sd, seen_sd = (r.artifact_sd[0].reshape(40, 4, 3)[hidden, 1] for r in (here, there))
    error = here.artifact[0].reshape(40, 4, 3)[hidden, 1] - truth[hidden, 1]
    assert np.abs(error / sd).max() < 3.5
    assert (sd > seen_sd).all()


# --- short trials -----------------------------------------------------------------------------------


@pytest.mark.parametrize("frames", [1, 2, 3, 9])
def test_trials_shorter_than_any_horizon_are_solved(frames: int) -> None:
    trial = made_trial(84, 2, frames)
    found = solve(trial)
    if frames < 4:
        assert found.smoothed.stop_reason.startswith("step below")
    assert found.reported.determined.all()
    assert np.isfinite(found.reported.angle_sd).all()
    np.testing.assert_allclose(found.reported.share.sum(axis=-1), 1.0, atol=1e-9)


def test_a_single_frame_is_the_frame_wise_estimate_with_its_constants() -> None:
    """One frame: no motion, the residual and the constants together are the prior's whole covariance, and
    the joint's two parts are its travel: nearly the frame-wise solver's optimum and intervals. Deviations
    that are estimated rather than integrated out bend the mean a little.
    """
    trial = made_trial(85, 2, 1)
    smoothed = solve(trial).reported
    alone = solve_frames(trial.segments, trial.joints, trial.poses, trial.marker_sd)
    sd = np.sqrt(np.einsum("fxx->fx", alone.covariance)).reshape(1, 2, 6)
    difference = se3.relative_difference(smoothed.poses, alone.poses)
    assert np.abs(difference / sd).max() < 0.2
    np.testing.assert_allclose(smoothed.angle_sd, alone.angle_sd, rtol=0.2)


def test_without_features_there_are_no_constants() -> None:
    """Least squares in the form of a prior, and a joint that constrains nothing: no constants at all."""
    trial = loose(base())
    segments = [replace(s, artifact=IsotropicArtifact(12, 0.005, 0.1)) for s in trial.segments]
    found = solve(replace(trial, segments=segments))
    assert found.smoothed.problem.constants == 0
    assert found.reported.determined.all()

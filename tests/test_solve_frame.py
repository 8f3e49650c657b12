"""Frame-wise optimum: against another optimiser, its limits, hidden data, and the iteration itself."""

from __future__ import annotations

import importlib
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pytest
from made_problems import (
    CENTRES,
    CLUSTERS,
    Problem,
    away,
    chain_poses,
    made_angles,
    made_artifact,
    made_joints,
    made_problem,
)
from scipy.optimize import least_squares

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.interface import Artifact, IsotropicArtifact
from sta_prior.rigid import fit_rigid
from sta_prior.solve.frame import MARKER_SD, bridge, first_look, solve_frames
from sta_prior.solve.posterior import FrameSolution
from sta_prior.solve.terms import SegmentProblem, angles_and_jacobians, joint_travel

# By name: the package's own `solve` is the function.
FRAME_MODULE = importlib.import_module("sta_prior.solve.frame")


def solved(problem: Problem, start: FloatArray | None = None, marker_sd: float = MARKER_SD) -> FrameSolution:
    poses, _ = first_look(problem.segments, len(problem.segments))
    start = bridge(poses, problem.joints) if start is None else start
    return solve_frames(problem.segments, problem.joints, start, marker_sd)


def pose_error(first: FloatArray, second: FloatArray) -> float:
    return float(np.nanmax(np.abs(se3.relative_difference(first, second)), initial=0.0))


def some_frames(problem: Problem, frames: Sequence[int] | slice) -> Problem:
    segments = [replace(segment, points=segment.points[frames]) for segment in problem.segments]
    displacement = [moved[frames] for moved in problem.displacement]
    return Problem(segments, problem.joints, problem.poses[frames], displacement)


def with_artifact(problem: Problem, artifacts: Sequence[Artifact]) -> Problem:
    segments = [replace(s, artifact=a) for s, a in zip(problem.segments, artifacts, strict=True)]
    return replace(problem, segments=segments)


def optimum_elsewhere(problem: Problem, at: FloatArray, start: FloatArray) -> FloatArray:
    """Minimum of the whitened cost of one frame by SciPy, with the covariance held at given poses."""
    angles, _ = angles_and_jacobians(problem.joints, at)
    factors = []
    for segment in problem.segments:
        seen = np.flatnonzero(np.isfinite(segment.points.reshape(-1)))
        covariance = segment.artifact.moments(angles).covariance[0][np.ix_(seen, seen)]
        factors.append((seen, np.linalg.cholesky(covariance + MARKER_SD**2 * np.eye(seen.size))))

    def whitened(step: FloatArray) -> FloatArray:
        poses = start @ se3.exp(step.reshape(1, -1, 6))
        now, _ = angles_and_jacobians(problem.joints, poses)
        rows = []
        for segment, (seen, factor) in zip(problem.segments, factors, strict=True):
            rotation, position = poses[0, segment.index, :3, :3], poses[0, segment.index, :3, 3]
            bone = (segment.points[0] - position) @ rotation
            error = (bone - segment.reference).reshape(-1) - segment.artifact.moments(now).mean[0]
            rows.append(np.linalg.solve(factor, error[seen]))
        rows += [joint_travel(joint, poses)[0][0] / joint.travel_sd for joint in problem.joints]
        return np.concatenate(rows)

    size = 6 * start.shape[1]
    scale = np.tile([0.05, 0.05, 0.05, 0.01, 0.01, 0.01], size // 6)
    found = least_squares(
        whitened,
        np.zeros(size),
        jac="3-point",
        method="lm",
        x_scale=scale,
        ftol=1e-15,
        xtol=1e-15,
        gtol=1e-15,
    )
    best: FloatArray = start @ se3.exp(found.x.reshape(1, -1, 6))
    return best


@pytest.mark.parametrize("count", [2, 3])
def test_optimum_is_that_of_another_optimiser_with_the_covariance_held_there(count: int) -> None:
    hidden = np.zeros((6, 8 if count == 2 else 11), dtype=bool)
    hidden[3, 1] = hidden[4, 5] = hidden[5, 0] = True
    problem = made_problem(20 + count, count, 6, hidden=hidden)
    result = solved(problem)
    assert result.determined.all()
    assert pose_error(result.poses, first_look(problem.segments, count)[0]) > 0.02
    for frame in range(6):
        here = result.poses[[frame]]
        start = away(np.random.default_rng(frame), here, 4.0, 0.010)
        other = optimum_elsewhere(some_frames(problem, [frame]), here, start)
        assert pose_error(here, other) < 1e-7


@pytest.mark.parametrize("sd", [0.001, 0.01, 0.02])
def test_wide_isotropic_prior_without_joint_is_exactly_the_rigid_fit(sd: float) -> None:
    hidden = np.zeros((40, 8), dtype=bool)
    hidden[10:20, 2] = hidden[15:25, 7] = True
    problem = made_problem(23, 2, 40, travel_sd=np.inf, hidden=hidden)
    problem = with_artifact(problem, [IsotropicArtifact(12, sd)] * 2)
    rigid = np.stack([fit_rigid(s.reference, s.points).pose for s in problem.segments], axis=1)
    result = solved(problem, start=away(np.random.default_rng(1), rigid, 10.0, 0.02))
    assert result.determined.all()
    assert pose_error(result.poses, rigid) < 2e-8


def certain(artifact: FeatureArtifact, sd: float) -> FeatureArtifact:
    """The same mean, with next to no spread."""
    weights = replace(artifact.weights, covariance=np.zeros_like(artifact.weights.covariance))
    return replace(artifact, weights=weights, residual=sd**2 * np.eye(artifact.residual.shape[0]))


def test_narrow_prior_subtracts_its_mean() -> None:
    """Markers that are moved by the mean alone give back the true poses, which the rigid fit misses."""
    rng = np.random.default_rng(24)
    joints = made_joints(2, np.inf)
    angles = made_angles(rng, 30, 1)
    poses = chain_poses(rng, angles)
    segments = []
    for index in range(2):
        artifact = certain(made_artifact(rng, 4, [0]), 1e-6)
        moved = artifact.moments(angles).mean.reshape(30, 4, 3)
        points = se3.transform_points(poses[:, index], CLUSTERS[index] + moved)
        segments.append(SegmentProblem(index, points, CLUSTERS[index], artifact))
    result = solved(Problem(segments, joints, poses, []), marker_sd=1e-6)
    assert pose_error(first_look(segments, 2)[0], poses) > 0.05
    assert pose_error(result.poses, poses) < 1e-7


def test_a_constant_mean_is_a_shifted_reference() -> None:
    rng = np.random.default_rng(25)
    problem = made_problem(25, 1, 20)
    artifact = certain(made_artifact(rng, 4, []), 0.004)
    shift = 0.01 * rng.standard_normal((1, 12))
    artifact = replace(artifact, weights=replace(artifact.weights, mean=shift))
    result = solved(with_artifact(problem, [artifact]))
    expected = fit_rigid(CLUSTERS[0] + shift.reshape(4, 3), problem.segments[0].points).pose[:, None]
    assert pose_error(result.poses, expected) < 1e-8


def test_travel_sd_zero_is_a_ball_joint_and_infinite_is_no_joint() -> None:
    problem = made_problem(26, 2, 60, travel_sd=0.010)
    ball = solved(replace(problem, joints=made_joints(2, 0.0)))
    soft = solved(problem)
    free = solved(replace(problem, joints=made_joints(2, np.inf)))
    for result in (ball, soft, free):
        assert result.determined.all()
    gap = [np.linalg.norm(result.travel[:, 0], axis=-1) for result in (ball, soft, free)]
    assert gap[0].max() < 1e-4
    assert 0.001 < np.median(gap[1]) < np.median(gap[2])
    hinge_points = [
        se3.transform_points(ball.poses[:, index], CENTRES[0][index][None])[:, 0] for index in range(2)
    ]
    assert np.abs(hinge_points[0] - hinge_points[1]).max() < 1e-4
    unknown = [replace(joint, centre_distal=np.full(3, np.nan)) for joint in made_joints(2, 0.0)]
    no_centre = solved(replace(problem, joints=unknown))
    assert pose_error(no_centre.poses, free.poses) < 1e-7
    assert np.isnan(no_centre.travel).all()


def test_hidden_marker_is_a_problem_without_that_marker() -> None:
    hidden = np.zeros((30, 8), dtype=bool)
    hidden[:, 2] = True
    problem = made_problem(27, 2, 30, hidden=hidden)
    whole = solved(problem)
    thigh = problem.segments[0]
    kept = np.flatnonzero(np.arange(12) // 3 != 2)
    artifact = thigh.artifact
    assert isinstance(artifact, FeatureArtifact)
    features = artifact.weights.mean.shape[0]
    columns = (12 * np.arange(features)[:, None] + kept).reshape(-1)
    weights = replace(
        artifact.weights,
        mean=artifact.weights.mean[:, kept],
        covariance=artifact.weights.covariance[np.ix_(columns, columns)],
    )
    fewer = replace(artifact, weights=weights, residual=artifact.residual[np.ix_(kept, kept)])
    markers = [0, 1, 3]
    small = SegmentProblem(0, thigh.points[:, markers], thigh.reference[markers], fewer)
    without = solved(replace(problem, segments=[small, problem.segments[1]]))
    assert pose_error(whole.poses, without.poses) < 1e-8
    np.testing.assert_allclose(whole.covariance, without.covariance, rtol=1e-8, atol=1e-14)
    np.testing.assert_allclose(whole.artifact[0][:, kept], without.artifact[0], atol=1e-9)
    np.testing.assert_allclose(whole.conflict, without.conflict, rtol=1e-6)


def test_start_does_not_change_the_optimum() -> None:
    """From 30° and 0.3 m away every frame settles, and at the same poses."""
    problem = made_problem(5, 2, 300)
    near = solved(problem)
    far = solved(problem, start=away(np.random.default_rng(0), problem.poses, 30.0, 0.3))
    assert near.stop_reason == far.stop_reason == "step below 1e-08 rad and m in every frame"
    assert near.iterations < 30
    assert pose_error(near.poses, far.poses) < 1e-6


def test_covariance_that_swings_with_the_angle_still_settles() -> None:
    """Undamped steps swing or crawl here: 13 of these 500 frames once ended unsettled."""
    rng = np.random.default_rng(3)
    artifacts = [made_artifact(rng, 4, [0], 0.02, 0.008) for _ in range(2)]
    result = solved(made_problem(4, 2, 500, artifacts=artifacts))
    assert result.stop_reason == "step below 1e-08 rad and m in every frame"
    assert result.determined.all()
    three = solved(made_problem(1, 3, 500))
    assert three.determined.all()
    assert three.iterations < 40


def test_frames_that_do_not_settle_are_counted_and_not_told_as_solved(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr(FRAME_MODULE, "MAXIMUM_ITERATIONS", 2)
    result = solved(made_problem(28, 2, 9))
    assert result.stop_reason == "9 frames not converged in 2 iterations"
    assert result.iterations == 2
    assert not result.determined.any()
    assert np.isnan(result.poses).all()
    assert np.isnan(result.angles).all()


def test_frames_do_not_know_of_each_other(monkeypatch: pytest.MonkeyPatch) -> None:
    """Chunks of frames are one problem each: any order, any chunk, the same poses."""
    problem = made_problem(29, 2, 50)
    whole = solved(problem)
    order = np.random.default_rng(1).permutation(50)
    shuffled = solved(some_frames(problem, list(order)))
    monkeypatch.setattr(FRAME_MODULE, "_CHUNK", 7)
    pieces = solved(problem)
    for name in ("poses", "covariance", "angles", "angle_sd", "travel", "travel_sd", "share", "conflict"):
        expected = getattr(whole, name)
        np.testing.assert_allclose(getattr(pieces, name), expected, rtol=1e-9, atol=1e-10, err_msg=name)
        np.testing.assert_allclose(getattr(shuffled, name), expected[order], rtol=1e-6, atol=1e-8)
    for index in range(2):
        np.testing.assert_allclose(pieces.artifact[index], whole.artifact[index], atol=1e-10)
        np.testing.assert_allclose(pieces.artifact_sd[index], whole.artifact_sd[index], atol=1e-10)
    np.testing.assert_array_equal(pieces.determined, whole.determined)
    np.testing.assert_array_equal(pieces.conflict_freedom, whole.conflict_freedom)
    assert pieces.iterations == whole.iterations
    assert pieces.stop_reason == whole.stop_reason


def test_an_unsettled_chunk_is_not_hidden_by_settled_ones(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(FRAME_MODULE, "_CHUNK", 4)
    monkeypatch.setattr(FRAME_MODULE, "MAXIMUM_ITERATIONS", 2)
    problem = made_problem(30, 1, 8, marker_sd=0.0)
    first = solve_frames(problem.segments, [], problem.poses)
    still = [
        replace(s, points=s.points.copy(), artifact=IsotropicArtifact(12, 0.01)) for s in problem.segments
    ]
    rigid = first_look(still, 1)[0]
    start = np.concatenate([rigid[:4], away(np.random.default_rng(2), rigid[4:], 20.0, 0.05)])
    mixed = solve_frames(still, [], start)
    assert first.stop_reason == "4 frames not converged in 2 iterations"
    assert mixed.stop_reason == (
        "step below 1e-08 rad and m in every frame; 4 frames not converged in 2 iterations"
    )
    np.testing.assert_array_equal(mixed.determined[:, 0], [True] * 4 + [False] * 4)


@pytest.mark.parametrize("gone", [0, 1, 2])
def test_a_bone_that_is_never_seen_costs_the_others_nothing(gone: int) -> None:
    """Also where the subject walks 8 m: the missing bone starts beside its neighbour."""
    problem = made_problem(31, 3, 60)
    shift = np.linspace(0, 8, 60)[:, None, None] * np.array([1.0, 0.0, 0.2])
    segments = [
        replace(s, points=s.points + shift, artifact=IsotropicArtifact(s.points.shape[1] * 3, 0.01))
        for s in problem.segments
    ]
    blind = replace(segments[gone], points=np.full_like(segments[gone].points, np.nan))
    result = solved(replace(problem, segments=[*segments[:gone], blind, *segments[gone + 1 :]]))
    assert result.stop_reason == "step below 1e-08 rad and m in every frame"
    expected = np.array([index != gone for index in range(3)])
    np.testing.assert_array_equal(result.determined, np.tile(expected, (60, 1)))
    if gone != 1:
        # A bone at the chain's end that shows nothing tells nothing of the others.
        rest = [index for index in range(3) if index != gone]
        others = [replace(segments[index], index=place) for place, index in enumerate(rest)]
        joint = replace(problem.joints[rest[0]], proximal=0, distal=1)
        alone = solve_frames(others, [joint], first_look(others, 2)[0])
        assert pose_error(result.poses[:, rest], alone.poses) < 1e-7


def test_missing_poses_start_from_the_neighbour_then_from_the_nearest_frame() -> None:
    problem = made_problem(32, 2, 6)
    poses = problem.poses.copy()
    poses[1:3, 1] = np.nan
    poses[4] = np.nan
    filled = bridge(poses, problem.joints)
    across = se3.inverse(problem.poses[:, 0]) @ problem.poses[:, 1]
    np.testing.assert_allclose(filled[1, 1], problem.poses[1, 0] @ across[0], atol=1e-14)
    np.testing.assert_allclose(filled[2, 1], problem.poses[2, 0] @ across[3], atol=1e-14)
    np.testing.assert_array_equal(filled[4], problem.poses[3])
    known = np.isfinite(poses)
    np.testing.assert_array_equal(filled[known], poses[known])


def test_a_pose_that_no_frame_shows_starts_in_the_zero_posture() -> None:
    problem = made_problem(33, 3, 4)
    poses = problem.poses.copy()
    poses[:, 1:] = np.nan
    filled = bridge(poses, problem.joints)
    for index in range(2):
        assert np.abs(joint_travel(problem.joints[index], filled)[0]).max() < 1e-14
        np.testing.assert_allclose(filled[:, index + 1, :3, :3], poses[:, 0, :3, :3], atol=1e-14)
    nothing = np.full((4, 1, 4, 4), np.nan)
    np.testing.assert_array_equal(bridge(nothing, []), np.broadcast_to(np.eye(4), (4, 1, 4, 4)))


def test_two_markers_and_a_joint_centre_determine_a_pose() -> None:
    """Under linked: three points that are not on a line."""
    hidden = np.zeros((20, 8), dtype=bool)
    hidden[:, 5:7] = True
    problem = made_problem(34, 2, 20, hidden=hidden, travel_sd=0.005)
    problem = with_artifact(problem, [IsotropicArtifact(12, 0.004)] * 2)
    linked = solved(problem)
    assert linked.determined.all()
    free = solved(replace(problem, joints=made_joints(2, np.inf)))
    np.testing.assert_array_equal(free.determined, np.tile([True, False], (20, 1)))
    assert np.isnan(free.poses[:, 1]).all()
    # The covariance of the rotation about the line says how well the joint holds it.
    sd = np.sqrt(np.einsum("fxx->fx", linked.covariance))[:, 6:9]
    assert 0.01 < np.linalg.norm(sd, axis=1).min() < 0.3

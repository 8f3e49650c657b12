"""Terms of the frame-wise problem: every Jacobian against central differences, whitening, assembly.

Poses lie 10° and 20 mm from the truth, where a Jacobian that is right at zero residual only shows.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from differences import central_difference
from made_problems import CENTRES, CLUSTERS, Problem, away, made_problem, random_covariance

from sta_prior import se3
from sta_prior.angles import JointConvention
from sta_prior.checks import FloatArray
from sta_prior.prior.interface import IsotropicArtifact
from sta_prior.solve.terms import (
    BALL_JOINT_SD,
    JointProblem,
    SegmentProblem,
    System,
    angles_and_jacobians,
    assemble,
    joint_travel,
    marker_term,
    precision_of_seen,
)

FRAMES = 6
COUNT = 3
LEFT = (JointConvention("knee", "left"), JointConvention("cardan", "right", "yxy", (1.0, -1.0, 1.0)))


def far_problem(side: str = "right") -> tuple[Problem, FloatArray]:
    """Three segments with all markers but a few seen, and poses well away from the optimum."""
    hidden = np.random.default_rng(5).uniform(size=(FRAMES, 11)) < 0.15
    problem = made_problem(11, COUNT, FRAMES, hidden=hidden)
    poses = away(np.random.default_rng(6), problem.poses, 10.0, 0.020)
    if side == "left":
        joints = [replace(joint, convention=LEFT[i]) for i, joint in enumerate(problem.joints)]
        problem = replace(problem, joints=joints)
    return problem, poses


def moved(poses: FloatArray, step: FloatArray) -> FloatArray:
    return poses @ se3.exp(step.reshape(poses.shape[1], 6))


def assert_derivative(got: FloatArray, expected: FloatArray) -> None:
    np.testing.assert_allclose(got, expected, rtol=0, atol=1e-6 * max(1.0, float(np.abs(expected).max())))


@pytest.mark.parametrize("side", ["right", "left"])
def test_angle_jacobian_agrees_with_differences(side: str) -> None:
    problem, poses = far_problem(side)
    _, jacobian = angles_and_jacobians(problem.joints, poses)
    expected = central_difference(
        lambda step: angles_and_jacobians(problem.joints, moved(poses, step))[0], 6 * COUNT
    )
    assert np.abs(expected).max() > 0.5
    assert_derivative(jacobian, expected)


@pytest.mark.parametrize("side", ["right", "left"])
@pytest.mark.parametrize("index", range(COUNT))
def test_marker_jacobian_agrees_with_differences_through_the_prior_mean(index: int, side: str) -> None:
    problem, poses = far_problem(side)
    segment = problem.segments[index]

    def residual(step: FloatArray) -> FloatArray:
        there = moved(poses, step)
        return marker_term(segment, there, *angles_and_jacobians(problem.joints, there), 0.0005).residual

    term = marker_term(segment, poses, *angles_and_jacobians(problem.joints, poses), 0.0005)
    assert np.abs(term.residual).max() > 0.02
    assert np.abs(term.through_mean).max() > 0.005
    assert_derivative(term.jacobian, central_difference(residual, 6 * COUNT))


@pytest.mark.parametrize("index", range(COUNT))
def test_lever_and_mean_derivative_have_the_markers_where_the_prior_expects_them(index: int) -> None:
    problem, poses = far_problem()
    segment = problem.segments[index]

    def mean(step: FloatArray) -> FloatArray:
        return segment.artifact.moments(angles_and_jacobians(problem.joints, moved(poses, step))[0]).mean

    term = marker_term(segment, poses, *angles_and_jacobians(problem.joints, poses), 0.0005)
    assert_derivative(term.through_mean, central_difference(mean, 6 * COUNT))
    expected_places = segment.reference + mean(np.zeros(6 * COUNT)).reshape(FRAMES, -1, 3)
    expected_lab = se3.transform_points(poses[:, index], expected_places)

    def places(step: FloatArray) -> FloatArray:
        bone = se3.transform_points(se3.inverse(moved(poses, step)[:, index]), expected_lab)
        return bone.reshape(FRAMES, -1)

    shown = np.where(term.seen[..., None], 1.0, 0.0)
    assert_derivative(term.lever, shown * central_difference(places, 6 * COUNT))
    np.testing.assert_array_equal(term.slope, term.lever - shown * term.through_mean)


def test_information_does_not_take_artifact_for_width_of_the_cluster() -> None:
    """Markers on a line leave the rotation about it open, however far artifact moves them off it."""
    line = np.array([[0.05, -0.10, 0.03], [0.05, -0.20, 0.03], [0.05, -0.35, 0.03]])
    rng = np.random.default_rng(7)
    points = line + 0.02 * rng.standard_normal((5, 3, 3))
    segment = SegmentProblem(0, points, line, IsotropicArtifact(9, 0.01))
    system = assemble([segment], [], np.tile(np.eye(4), (5, 1, 1, 1)), 0.0005)
    about_the_line = np.concatenate([[0.0, 1.0, 0.0], np.cross([0.05, 0.0, 0.03], [0.0, 1.0, 0.0])])
    open_information = np.einsum("x,fxy,y->f", about_the_line, system.information, about_the_line)
    taken_in = np.einsum("x,fxy,y->f", about_the_line, system.normal, about_the_line)
    assert np.abs(open_information).max() < 1e-9
    assert taken_in.min() > 1.0


@pytest.mark.parametrize("side", ["right", "left"])
@pytest.mark.parametrize("index", [0, 1])
def test_travel_jacobian_agrees_with_differences(index: int, side: str) -> None:
    problem, poses = far_problem(side)
    joint = problem.joints[index]
    travel, jacobian = joint_travel(joint, poses)
    assert np.abs(travel).max() > 0.02
    assert_derivative(
        jacobian, central_difference(lambda step: joint_travel(joint, moved(poses, step))[0], 6 * COUNT)
    )


def test_travel_is_distal_minus_proximal_centre_along_the_proximal_axes() -> None:
    problem, poses = far_problem()
    for index, joint in enumerate(problem.joints):
        proximal_lab = se3.transform_points(poses[:, index], CENTRES[index][0][None])[:, 0]
        distal_lab = se3.transform_points(poses[:, index + 1], CENTRES[index][1][None])[:, 0]
        along = np.einsum("fji,fj->fi", poses[:, index, :3, :3], distal_lab - proximal_lab)
        np.testing.assert_allclose(joint_travel(joint, poses)[0], along, atol=1e-14)


def test_residual_vanishes_where_reference_mean_and_pose_are_exact() -> None:
    problem, _ = far_problem()
    angles, jacobian = angles_and_jacobians(problem.joints, problem.poses)
    for segment in problem.segments:
        mean = segment.artifact.moments(angles).mean.reshape(FRAMES, -1, 3)
        points = se3.transform_points(problem.poses[:, segment.index], segment.reference + mean)
        exact = replace(segment, points=points)
        term = marker_term(exact, problem.poses, angles, jacobian, 0.0005)
        np.testing.assert_allclose(term.residual, 0.0, atol=1e-14)


def cost(problem: Problem, held: System, poses: FloatArray) -> FloatArray:
    """Half the whitened squares of every frame, written apart from the code; covariance held."""
    angles, _ = angles_and_jacobians(problem.joints, poses)
    total = np.zeros(len(poses))
    for segment, term in zip(problem.segments, held.markers, strict=True):
        bone = se3.transform_points(se3.inverse(poses[:, segment.index]), segment.points)
        error = (bone - segment.reference).reshape(len(poses), -1) - segment.artifact.moments(angles).mean
        error = np.where(np.isfinite(error), error, 0.0)
        total += 0.5 * np.einsum("fa,fab,fb->f", error, term.precision, error)
    for joint in problem.joints:
        total += 0.5 * (joint_travel(joint, poses)[0] ** 2).sum(axis=1) / joint.travel_sd**2
    return total


def test_gradient_is_the_derivative_of_the_cost_with_the_covariance_held() -> None:
    problem, poses = far_problem()
    system = assemble(problem.segments, problem.joints, poses, 0.0005)
    expected = central_difference(lambda step: cost(problem, system, moved(poses, step)), 6 * COUNT)
    scale = np.abs(expected).max(axis=1, keepdims=True)
    np.testing.assert_allclose(system.gradient / scale, expected / scale, rtol=0, atol=1e-6)


def test_precision_is_the_inverse_over_the_seen_outputs_of_the_prior_plus_instrument_noise() -> None:
    problem, poses = far_problem()
    marker_sd = 0.0021
    angles, jacobian = angles_and_jacobians(problem.joints, poses)
    for segment in problem.segments:
        term = marker_term(segment, poses, angles, jacobian, marker_sd)
        covariance = segment.artifact.moments(angles).covariance
        for frame in range(FRAMES):
            rows = np.flatnonzero(term.seen[frame])
            here = covariance[frame][np.ix_(rows, rows)] + marker_sd**2 * np.eye(rows.size)
            expected = np.zeros_like(covariance[frame])
            expected[np.ix_(rows, rows)] = np.linalg.inv(here)
            error = np.abs(term.precision[frame] - expected).max()
            assert error < 1e-9 * max(np.abs(expected).max(), 1.0)


def test_precision_of_nothing_seen_is_zero() -> None:
    covariance = random_covariance(np.random.default_rng(1), 6, 0.01)[None]
    precision = precision_of_seen(covariance, np.zeros((1, 6), dtype=bool))
    assert np.all(precision == 0.0)


def test_hidden_outputs_enter_neither_residual_nor_jacobian() -> None:
    problem, poses = far_problem()
    angles, jacobian = angles_and_jacobians(problem.joints, poses)
    for segment in problem.segments:
        term = marker_term(segment, poses, angles, jacobian, 0.0005)
        hidden = ~np.isfinite(segment.points).reshape(FRAMES, -1)
        np.testing.assert_array_equal(~term.seen, hidden)
        assert np.all(term.residual[hidden] == 0.0)
        assert np.all(term.jacobian[hidden] == 0.0)
    assert sum(int(np.isnan(s.points).any()) for s in problem.segments) >= 2


def test_joint_that_constrains_nothing_adds_nothing() -> None:
    problem, poses = far_problem()
    free = [replace(joint, travel_sd=np.inf) for joint in problem.joints]
    unknown = [replace(joint, centre_distal=np.full(3, np.nan)) for joint in problem.joints]
    for joints in (free, unknown):
        assert not any(joint.constrains for joint in joints)
        system = assemble(problem.segments, joints, poses, 0.0005)
        assert np.all(system.joint_normal == 0.0)
        assert np.isfinite(system.gradient).all()
    assert free[0].has_centre
    assert not unknown[0].has_centre


def test_a_ball_joint_has_the_stiffness_of_its_smallest_spread() -> None:
    problem, poses = far_problem()
    tight = [replace(joint, travel_sd=0.0) for joint in problem.joints]
    explicit = [replace(joint, travel_sd=BALL_JOINT_SD) for joint in problem.joints]
    first = assemble(problem.segments, tight, poses, 0.0005)
    second = assemble(problem.segments, explicit, poses, 0.0005)
    np.testing.assert_array_equal(first.normal, second.normal)
    assert np.abs(first.joint_normal).max() > 1.0 / BALL_JOINT_SD**2


def test_a_joint_between_segments_in_any_order() -> None:
    """The distal segment may stand first in the lab file."""
    problem, poses = far_problem()
    joint = problem.joints[0]
    swapped = JointProblem(
        1, 0, joint.convention, joint.centre_proximal, joint.centre_distal, joint.travel_sd
    )
    order = [1, 0, 2]
    plain, jacobian = joint_travel(joint, poses)
    other, other_jacobian = joint_travel(swapped, poses[:, order])
    np.testing.assert_array_equal(plain, other)
    columns = np.concatenate([np.arange(6 * i, 6 * i + 6) for i in order])
    np.testing.assert_array_equal(jacobian[..., columns], other_jacobian)


def test_clusters_are_those_of_the_problem() -> None:
    """The helper's truth holds: the markers are where pose, reference and artifact put them."""
    problem = made_problem(12, COUNT, 4, marker_sd=0.0)
    for segment, displacement in zip(problem.segments, problem.displacement, strict=True):
        bone = se3.transform_points(se3.inverse(problem.poses[:, segment.index]), segment.points)
        np.testing.assert_allclose(bone - CLUSTERS[segment.index], displacement, atol=1e-14)

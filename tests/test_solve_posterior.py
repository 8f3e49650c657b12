"""What the estimators report: covariance, shares and artifact against the dense joint Gaussian.

The dense system stacks poses x and artifact d of one frame, linearised at the optimum:

    markers    (L x − d + e) with precision 1/σ² over the seen outputs
    prior      (d − M x) with precision C⁻¹
    joint      G x with precision 1/travel_sd²

Nothing in it is eliminated by hand; L, M and G come from central differences, L with the markers
where the prior expects them.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import pytest
from differences import central_difference
from made_problems import Problem, made_problem, random_covariance
from scipy.spatial.transform import Rotation
from scipy.stats import chi2, kstest

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.prior.interface import IsotropicArtifact, Moments
from sta_prior.rigid import deformation_modes, marker_jacobian
from sta_prior.solve.frame import MARKER_SD, bridge, first_look, solve_frames
from sta_prior.solve.posterior import SOURCES, FrameSolution
from sta_prior.solve.terms import JointProblem, SegmentProblem, angles_and_jacobians, joint_travel


def solved(problem: Problem, marker_sd: float = MARKER_SD) -> FrameSolution:
    poses, _ = first_look(problem.segments, len(problem.segments))
    return solve_frames(problem.segments, problem.joints, bridge(poses, problem.joints), marker_sd)


def with_some_hidden(seed: int, count: int, frames: int = 5) -> Problem:
    hidden = np.zeros((frames, 4 * count if count < 3 else 11), dtype=bool)
    hidden[1, 1] = hidden[2, 2] = hidden[3, -1] = True
    return made_problem(seed, count, frames, hidden=hidden)


@dataclass(frozen=True)
class DenseSystem:
    """One frame: precision of (x, d) by source, information vector, and where d begins."""

    markers: FloatArray
    prior: FloatArray
    joint: FloatArray
    shift: FloatArray
    poses: int

    @property
    def covariance(self) -> FloatArray:
        total = self.markers + self.prior + self.joint
        scale = np.sqrt(np.diag(total))
        inverse: FloatArray = np.linalg.inv(total / np.outer(scale, scale)) / np.outer(scale, scale)
        return inverse


def dense_system(problem: Problem, poses: FloatArray, frame: int) -> DenseSystem:
    """Joint Gaussian of one frame's poses and artifact about given poses, d about 0."""
    at = poses[[frame]]
    unknown = 6 * at.shape[1]
    outputs = [3 * len(segment.reference) for segment in problem.segments]
    size = unknown + sum(outputs)
    markers, prior, joint_part = (np.zeros((size, size)) for _ in range(3))
    shift = np.zeros(size)

    def there(step: FloatArray) -> FloatArray:
        return at @ se3.exp(step.reshape(1, -1, 6))

    angles, _ = angles_and_jacobians(problem.joints, at)
    first = unknown
    for segment, n in zip(problem.segments, outputs, strict=True):
        points = segment.points[[frame]]
        moments = segment.artifact.moments
        now = moments(angles)
        expected = segment.reference + now.mean.reshape(1, -1, 3)
        expected_lab = se3.transform_points(at[:, segment.index], expected)

        def bone(step: FloatArray, index: int = segment.index, lab: FloatArray = expected_lab) -> FloatArray:
            return se3.transform_points(se3.inverse(there(step)[:, index]), lab).reshape(-1)

        measured = se3.transform_points(se3.inverse(at[:, segment.index]), points) - segment.reference
        displacement = measured.reshape(-1)
        own = np.arange(first, first + n)
        first += n
        seen = np.isfinite(displacement)
        rows = np.zeros((n, size))
        rows[:, :unknown] = np.where(seen[:, None], central_difference(bone, unknown), 0.0)
        rows[:, own] = -np.eye(n)
        rows = rows[seen]
        markers += rows.T @ rows / MARKER_SD**2
        shift -= rows.T @ displacement[seen] / MARKER_SD**2
        rows = np.zeros((n, size))
        rows[:, own] = np.eye(n)

        def mean(step: FloatArray, moments: Callable[[FloatArray], Moments] = moments) -> FloatArray:
            return np.asarray(moments(angles_and_jacobians(problem.joints, there(step))[0]).mean[0])

        rows[:, :unknown] = -central_difference(mean, unknown)
        precision = np.linalg.inv(now.covariance[0])
        prior += rows.T @ precision @ rows
        shift += rows.T @ precision @ now.mean[0]
    for joint in problem.joints:

        def travel(step: FloatArray, joint: JointProblem = joint) -> FloatArray:
            return np.asarray(joint_travel(joint, there(step))[0][0])

        rows = np.zeros((3, size))
        rows[:, :unknown] = central_difference(travel, unknown)
        joint_part += rows.T @ rows / joint.travel_sd**2
        shift -= rows.T @ joint_travel(joint, at)[0][0] / joint.travel_sd**2
    return DenseSystem(markers, prior, joint_part, shift, unknown)


@pytest.mark.parametrize("count", [1, 2, 3])
def test_covariance_is_the_inverse_of_the_dense_normal_matrix(count: int) -> None:
    problem = with_some_hidden(40 + count, count)
    result = solved(problem)
    assert result.determined.all()
    for frame in range(5):
        dense = dense_system(problem, result.poses, frame)
        expected = dense.covariance[: dense.poses, : dense.poses]
        got = result.covariance[frame]
        scale = np.sqrt(np.diag(expected))
        np.testing.assert_allclose(got / np.outer(scale, scale), expected / np.outer(scale, scale), atol=1e-6)
        np.testing.assert_array_equal(got, got.T)
        assert np.linalg.eigvalsh(got).min() > 0.0


@pytest.mark.parametrize("count", [1, 2, 3])
def test_information_shares_are_those_of_the_dense_joint_system(count: int) -> None:
    problem = with_some_hidden(50 + count, count)
    result = solved(problem)
    np.testing.assert_allclose(result.share.sum(axis=-1), 1.0, atol=1e-9)
    assert SOURCES == ("markers", "artifact_prior", "joint", "motion")
    assert np.all(result.share[..., 3] == 0.0)
    for frame in range(5):
        dense = dense_system(problem, result.poses, frame)
        covariance = dense.covariance
        for column, part in enumerate((dense.markers, dense.prior, dense.joint)):
            expected = np.diag(covariance @ part)[: dense.poses].reshape(count, 6)
            np.testing.assert_allclose(result.share[frame, :, :, column], expected, atol=2e-6)


def test_a_prior_that_follows_no_angle_carries_no_information_about_the_pose() -> None:
    """DESIGN §2.1: it only widens the interval; what fixes the pose is the markers."""
    problem = made_problem(54, 1, 5)
    share = solved(problem).share
    np.testing.assert_allclose(share[..., 0], 1.0, atol=1e-12)
    np.testing.assert_allclose(share[..., 1:], 0.0, atol=1e-12)


@pytest.mark.parametrize("count", [1, 2, 3])
def test_artifact_is_that_of_the_dense_joint_gaussian(count: int) -> None:
    problem = with_some_hidden(60 + count, count)
    result = solved(problem)
    for frame in range(5):
        dense = dense_system(problem, result.poses, frame)
        got = np.concatenate([values[frame] for values in result.artifact])
        sd = np.concatenate([values[frame] for values in result.artifact_sd])
        # Mean at the optimum, where x = 0; spread with that of the poses.
        own = slice(dense.poses, None)
        given_poses = (dense.markers + dense.prior)[own, own]
        np.testing.assert_allclose(got, np.linalg.solve(given_poses, dense.shift[own]), atol=1e-9)
        np.testing.assert_allclose(sd, np.sqrt(np.diag(dense.covariance))[own], rtol=1e-6)


def test_angles_and_travel_spread_as_their_linear_functions_of_the_poses() -> None:
    problem = with_some_hidden(65, 3)
    result = solved(problem)

    def angles(step: FloatArray) -> FloatArray:
        return angles_and_jacobians(problem.joints, result.poses @ se3.exp(step.reshape(3, 6)))[0]

    slope = central_difference(angles, 18)
    variance = np.einsum("fjax,fxy,fjay->fja", slope, result.covariance, slope)
    np.testing.assert_allclose(result.angle_sd, np.sqrt(variance), rtol=1e-5)
    np.testing.assert_array_equal(result.angles, angles(np.zeros(18)))
    for index, joint in enumerate(problem.joints):
        travel, gradient = joint_travel(joint, result.poses)
        variance = np.einsum("fax,fxy,fay->fa", gradient, result.covariance, gradient)
        np.testing.assert_allclose(result.travel_sd[:, index], np.sqrt(variance), rtol=1e-9)
        np.testing.assert_array_equal(result.travel[:, index], travel)


@dataclass(frozen=True)
class FullArtifact(IsotropicArtifact):
    """Zero mean, one covariance at every angle."""

    full: FloatArray | None = None

    @property
    def residual(self) -> FloatArray:
        assert self.full is not None
        return self.full


def one_segment(covariance: FloatArray, displacement: FloatArray, reference: FloatArray) -> Problem:
    """Frames of one segment whose markers are moved as given, in random poses."""
    frames, n = displacement.shape
    rng = np.random.default_rng(70)
    rotation = Rotation.from_rotvec(rng.standard_normal((frames, 3))).as_matrix()
    poses = se3.make_pose(rotation, rng.uniform(-1, 1, (frames, 3)))[:, None]
    moved = displacement.reshape(frames, -1, 3)
    points = se3.transform_points(poses[:, 0], reference + moved)
    segment = SegmentProblem(0, points, reference, FullArtifact(n, 0.0, full=covariance))
    return Problem([segment], [], poses, [moved])


CLUSTER = np.array([[0.06, -0.10, 0.05], [0.07, -0.22, -0.02], [-0.01, -0.15, 0.09], [0.05, -0.30, 0.06]])


def test_independent_rigid_artifact_leaves_least_squares_and_an_honest_covariance() -> None:
    """DESIGN §2.1; LITERATURE §1.4 item 1 (derived there): mean = least squares, Σ_rigid + σ²(JᵀJ)⁻¹."""
    rng = np.random.default_rng(71)
    modes, jacobian = deformation_modes(CLUSTER).modes, marker_jacobian(CLUSTER)
    rigid = random_covariance(rng, 6, 1.0) * np.outer(*[np.repeat([0.05, 0.008], 3)] * 2)
    deformation = modes[:, 6:] @ random_covariance(rng, 6, 0.006) @ modes[:, 6:].T
    white = 0.004
    covariance = jacobian @ rigid @ jacobian.T + white**2 * np.eye(12)
    large = 0.015 * rng.standard_normal((50, 12))
    result = solved(one_segment(covariance, large, CLUSTER), marker_sd=0.0)
    problem = one_segment(covariance, large, CLUSTER)
    least_squares = first_look(problem.segments, 1)[0]
    assert np.abs(se3.relative_difference(result.poses, least_squares)).max() < 1e-8
    # Coloured deformation: the mean agrees to first order, so that a tenth of the size leaves a
    # hundredth of the difference.
    coloured = jacobian @ rigid @ jacobian.T + deformation + 0.0005**2 * np.eye(12)
    gap = []
    for size in (0.1, 0.01):
        problem = one_segment(coloured, size * large, CLUSTER)
        got = solved(problem, marker_sd=0.0).poses
        gap.append(np.abs(se3.relative_difference(got, first_look(problem.segments, 1)[0])).max())
    assert 50 < gap[0] / gap[1] < 200
    # Covariance: whatever the artifact of the frame at hand.
    for displacement in (np.zeros((2, 12)), large):
        got = solved(one_segment(coloured, displacement, CLUSTER), marker_sd=0.0).covariance
        expected = rigid + 0.0005**2 * np.linalg.inv(jacobian.T @ jacobian)
        scale = np.outer(*[np.sqrt(np.diag(expected))] * 2)
        np.testing.assert_allclose(got / scale, np.tile(expected / scale, (len(got), 1, 1)), atol=1e-9)


def test_correlated_deformation_gives_the_gain_of_theory() -> None:
    """LITERATURE §1.4 item 2 (derived there), per orthonormal pair of a rigid and a deformation mode:
    σ_r²(1 − ρ²σ_d²/(σ_d² + σ_n²)) + σ_n². Posterior covariance exactly, errors within 4 SD of chance.
    """
    modes, jacobian = deformation_modes(CLUSTER).modes, marker_jacobian(CLUSTER)
    correlation = np.array([0.95, 0.8, 0.6, 0.9, 0.3, 0.0])
    rigid_sd, deformation_sd, noise_sd = 0.0004, 0.0003, 0.0001
    pairs = np.diag(np.repeat([rigid_sd**2, deformation_sd**2], 6))
    pairs[:6, 6:] = pairs[6:, :6] = np.diag(correlation * rigid_sd * deformation_sd)
    covariance = modes @ pairs @ modes.T
    frames = 4000
    rng = np.random.default_rng(72)
    drawn = rng.standard_normal((frames, 12)) @ np.linalg.cholesky(covariance).T
    drawn[0] = 0.0
    noise = noise_sd * rng.standard_normal((frames, 12))
    noise[0] = 0.0
    problem = one_segment(covariance, drawn + noise, CLUSTER)
    result = solved(problem, marker_sd=noise_sd)
    explained = correlation**2 * deformation_sd**2 / (deformation_sd**2 + noise_sd**2)
    expected = rigid_sd**2 * (1 - explained) + noise_sd**2
    along = modes[:, :6].T @ jacobian
    np.testing.assert_allclose(np.diag(along @ result.covariance[0, :6, :6] @ along.T), expected, rtol=1e-9)
    error = se3.log(se3.inverse(result.poses) @ problem.poses)[1:, 0] @ along.T
    ratio = (error**2).mean(axis=0) / expected
    assert np.abs(ratio - 1.0).max() < 4.0 * np.sqrt(2.0 / (frames - 1))
    least_squares = first_look(problem.segments, 1)[0]
    rigid_error = se3.log(se3.inverse(least_squares) @ problem.poses)[1:, 0] @ along.T
    gain = (error**2).mean(axis=0) / (rigid_error**2).mean(axis=0)
    assert gain[0] < 0.3
    assert abs(gain[5] - 1.0) < 0.02


@pytest.mark.parametrize("hidden_markers", [0, 1])
def test_conflict_follows_its_law_on_data_from_the_model(hidden_markers: int) -> None:
    """χ² with 3m − 6 degrees; Kolmogorov–Smirnov at 1 %: largest gap below 1.63/√F."""
    frames = 2500
    covariance = random_covariance(np.random.default_rng(80), 12, 0.006)
    drawn = np.random.default_rng(81).standard_normal((frames, 12)) @ np.linalg.cholesky(covariance).T
    problem = one_segment(covariance, drawn, CLUSTER)
    points = problem.segments[0].points.copy()
    points[:, 4 - hidden_markers :] = np.nan
    result = solved(replace(problem, segments=[replace(problem.segments[0], points=points)]), marker_sd=0.0)
    freedom = 3 * (4 - hidden_markers) - 6
    np.testing.assert_array_equal(result.conflict_freedom, freedom)
    assert kstest(result.conflict[:, 0], chi2(freedom).cdf).statistic < 1.63 / np.sqrt(frames)


def test_conflict_of_markers_on_a_line_counts_one_degree_more() -> None:
    """A joint holds the rotation about the line; no pose of the bone explains anything along it."""
    line = np.array([[0.05, -0.10, 0.03], [0.05, -0.20, 0.03], [0.05, -0.35, 0.03], [0.0, -0.2, 0.1]])
    problem = made_problem(82, 2, 6, artifacts=[IsotropicArtifact(12, 0.003)] * 2)
    points = se3.transform_points(problem.poses[:, 0], line)
    points[:, 3] = np.nan
    thigh = SegmentProblem(0, points, line, problem.segments[0].artifact)
    result = solved(replace(problem, segments=[thigh, problem.segments[1]]))
    assert result.determined.all()
    np.testing.assert_array_equal(result.conflict_freedom, np.tile([4.0, 6.0], (6, 1)))
    assert np.isfinite(result.conflict).all()

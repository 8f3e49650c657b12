"""Covariance of poses and its transport, mean pose, difference, helical axis."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.spatial.transform import Rotation

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.errors import ShapeError

quick = settings(max_examples=60, deadline=None, derandomize=True, database=None)
tangents = arrays(np.float64, 6, elements=st.floats(-1.5, 1.5))


def covariance_like(seed: int, scale: float = 1.0) -> FloatArray:
    """A full 6×6 covariance."""
    root = np.random.default_rng(seed).normal(size=(6, 6))
    return scale**2 * (root @ root.T) / 6


def balanced_sample(covariance: FloatArray) -> FloatArray:
    """Points, mean 0, whose second moment is exactly this covariance."""
    root = np.linalg.cholesky(covariance).T * np.sqrt(len(covariance))
    return np.concatenate([root, -root])


# --- covariance ------------------------------------------------------------------------------------


def test_covariance_in_lab_is_exact_at_any_size() -> None:
    """T·Exp(ξ) = Exp(η)·T with η = Ad(T) ξ holds for finite ξ, so moments move without error."""
    pose = se3.exp([0.9, -0.7, 0.4, 1.2, -0.3, 0.8])
    sample = balanced_sample(covariance_like(1, 0.5))
    moved = se3.log(pose @ se3.exp(sample) @ se3.inverse(pose))
    second_moment = moved.T @ moved / len(moved)
    expected = se3.covariance_in_lab(pose, covariance_like(1, 0.5))
    np.testing.assert_allclose(second_moment, expected, rtol=1e-12, atol=1e-14)
    assert np.array_equal(expected, expected.T)


def test_inverse_covariance_is_exact_at_any_size() -> None:
    pose = se3.exp([0.9, -0.7, 0.4, 1.2, -0.3, 0.8])
    covariance = covariance_like(2, 0.5)
    disturbed = se3.inverse(pose @ se3.exp(balanced_sample(covariance)))
    error = se3.relative_difference(disturbed, se3.inverse(pose))
    second_moment = error.T @ error / len(error)
    expected = se3.inverse_covariance(pose, covariance)
    np.testing.assert_allclose(second_moment, expected, rtol=1e-12, atol=1e-14)
    back = se3.inverse_covariance(se3.inverse(pose), expected)
    np.testing.assert_allclose(back, covariance, rtol=1e-12, atol=1e-14)


def product_covariance_error(size: float) -> float:
    """Relative error of the first-order covariance of A·B for spreads of this size."""
    first, second = se3.exp([[0.5, -0.7, 0.4, 0.2, -0.3, 0.5], [-0.3, 0.2, 0.9, 0.4, 0.1, -0.2]])
    one, two = covariance_like(3, size), covariance_like(4, size)
    # Every pair of the two samples: independent, with exact second moments.
    a, b = balanced_sample(one)[:, None], balanced_sample(two)[None]
    error = se3.relative_difference(first @ se3.exp(a) @ second @ se3.exp(b), first @ second).reshape(-1, 6)
    exact = error.T @ error / len(error)
    found = se3.compose_covariance(one, second, two)
    return float(np.abs(found - exact).max() / np.abs(exact).max())


def test_compose_covariance_is_right_to_first_order() -> None:
    """What is left out is of fourth order in the spread: second order relative to the covariance."""
    coarse, fine = product_covariance_error(1e-2), product_covariance_error(1e-3)
    assert fine < 1e-5
    assert coarse / fine == pytest.approx(100.0, rel=0.05)


def test_compose_covariance_is_the_published_left_formula() -> None:
    """Barfoot & Furgale (2014): Σ ≈ Σ₁ + Ad₁ Σ₂ Ad₁ᵀ for perturbations on the left."""
    first, second = se3.exp([[0.5, -0.7, 0.4, 0.2, -0.3, 0.5], [-0.3, 0.2, 0.9, 0.4, 0.1, -0.2]])
    ours = se3.compose_covariance(covariance_like(5), second, covariance_like(6))
    left_first = se3.covariance_in_lab(first, covariance_like(5))
    left_second = se3.covariance_in_lab(second, covariance_like(6))
    published = left_first + se3.adjoint(first) @ left_second @ se3.adjoint(first).T
    np.testing.assert_allclose(se3.covariance_in_lab(first @ second, ours), published, rtol=1e-12, atol=1e-13)


@quick
@given(tangents)
def test_transport_keeps_a_covariance_a_covariance(tangent: FloatArray) -> None:
    pose = se3.exp(tangent)
    covariance = covariance_like(7)
    moved = se3.covariance_in_lab(pose, covariance)
    assert np.linalg.eigvalsh(moved)[0] > 0
    assert np.linalg.det(moved) == pytest.approx(np.linalg.det(covariance), rel=1e-9)
    there_and_back = se3.covariance_in_lab(se3.inverse(pose), moved)
    np.testing.assert_allclose(there_and_back, covariance, atol=1e-12)


def test_transport_of_a_missing_pose_is_missing() -> None:
    poses = np.stack([np.eye(4), np.full((4, 4), np.nan)])
    moved = se3.covariance_in_lab(poses, np.eye(6))
    np.testing.assert_array_equal(moved[0], np.eye(6))
    assert np.isnan(moved[1]).all()


# --- mean and difference ---------------------------------------------------------------------------


def test_mean_pose_ignores_missing_poses_and_agrees_with_scipy() -> None:
    rng = np.random.default_rng(8)
    poses = se3.exp(rng.normal(scale=0.3, size=(9, 6)))
    poses[4] = np.nan
    seen = np.delete(poses, 4, axis=0)
    mean = se3.mean_pose(poses)
    np.testing.assert_allclose(se3.position_of(mean), se3.position_of(seen).mean(axis=0))
    # The chordal mean is the rotation nearest to the mean of the matrices.
    left, _, right = np.linalg.svd(se3.rotation_of(seen).mean(axis=0))
    np.testing.assert_allclose(se3.rotation_of(mean), left @ right, atol=1e-14)
    np.testing.assert_allclose(
        se3.rotation_of(mean), Rotation.from_matrix(se3.rotation_of(seen)).mean().as_matrix(), atol=1e-14
    )


def test_mean_pose_moves_with_the_lab() -> None:
    rng = np.random.default_rng(9)
    poses = se3.exp(rng.normal(scale=0.3, size=(9, 6)))
    lab = se3.exp(rng.normal(size=6))
    np.testing.assert_allclose(se3.mean_pose(lab @ poses), lab @ se3.mean_pose(poses), atol=1e-14)


def test_mean_of_nothing_is_missing() -> None:
    assert np.isnan(se3.mean_pose(np.full((3, 4, 4), np.nan))).all()
    assert np.isnan(se3.mean_pose(np.empty((0, 4, 4)))).all()


def test_relative_difference_is_along_the_true_bone_axes() -> None:
    rng = np.random.default_rng(10)
    truth = se3.exp(rng.normal(size=(5, 6)))
    error = rng.normal(scale=0.1, size=(5, 6))
    np.testing.assert_allclose(se3.relative_difference(truth @ se3.exp(error), truth), error, atol=1e-14)


def test_mean_pose_refuses_a_stack_of_lists() -> None:
    with pytest.raises(ShapeError) as caught:
        se3.mean_pose(np.zeros((2, 3, 4, 4)))
    assert str(caught.value) == "poses: expected shape (n, 4, 4), got (2, 3, 4, 4)."


# --- helical axis ----------------------------------------------------------------------------------


def test_published_helical_axis() -> None:
    """30° about a line along z through (100, 50, 0) mm with 8 mm slide; Woltring et al. (1985) formula."""
    rotation = Rotation.from_euler("z", 30, degrees=True).as_matrix()
    position = (np.eye(3) - rotation) @ [100.0, 50.0, 0.0] + [0.0, 0.0, 8.0]
    np.testing.assert_allclose(position, [38.39745962, -43.30127019, 8.0], rtol=1e-7)
    found = se3.helical_axis(rotation, position)
    assert np.rad2deg(found.angle) == pytest.approx(30.0, abs=1e-7)
    np.testing.assert_allclose(found.axis, [0, 0, 1], atol=1e-12)
    np.testing.assert_allclose(found.point, [100.0, 50.0, 0.0], atol=1e-7)
    assert found.translation == pytest.approx(8.0, abs=1e-7)


def test_published_helical_axis_of_a_cardan_rotation() -> None:
    """Intrinsic z-x-y (60, −8, 12)°; recomputed values."""
    rotation = Rotation.from_euler("ZXY", [60, -8, 12], degrees=True).as_matrix()
    found = se3.helical_axis(rotation, np.zeros(3))
    assert np.rad2deg(found.angle) == pytest.approx(60.72856505, abs=1e-8)
    np.testing.assert_allclose(found.axis, [-0.22199357, 0.11002386, 0.96882073], atol=1e-8)


@quick
@given(tangents)
def test_helical_axis_rebuilds_the_displacement(tangent: FloatArray) -> None:
    tangent = tangent + np.array([0.0, 0.0, 2.0, 0.0, 0.0, 0.0])
    pose = se3.exp(tangent)
    found = se3.helical_axis(se3.rotation_of(pose), se3.position_of(pose))
    rotation = se3.rotation_of(pose)
    rebuilt = (np.eye(3) - rotation) @ found.point + found.translation * found.axis
    np.testing.assert_allclose(rebuilt, se3.position_of(pose), atol=1e-10)
    assert found.point @ found.axis == pytest.approx(0.0, abs=1e-12)


def test_helical_axis_of_no_turn_is_not_determined() -> None:
    found = se3.helical_axis(np.stack([np.eye(3), np.full((3, 3), np.nan)]), [1.0, 0.0, 0.0])
    assert found.angle[0] == 0.0
    assert np.isnan(found.angle[1])
    assert np.isnan(found.axis).all()
    assert np.isnan(found.point).all()
    assert np.isnan(found.translation).all()


@pytest.mark.parametrize(("angle", "expected"), [(5, 4.644), (10, 2.324), (20, 1.167), (60, 0.405)])
def test_published_spread_of_the_axis_direction(angle: float, expected: float) -> None:
    """Rotation SD of a 1 mm marker spread on the ±50 mm tetrahedron; recomputed, 3 % Monte-Carlo."""
    sd = 0.40514
    formula = np.rad2deg(se3.helical_axis_direction_sd(np.deg2rad(angle), np.deg2rad(sd)))
    assert formula == pytest.approx(expected, rel=2e-3)
    rng = np.random.default_rng(11)
    true = se3.rotation_exp([0.0, 0.0, np.deg2rad(angle)])
    noisy = true @ se3.rotation_exp(np.deg2rad(sd) * rng.normal(size=(20_000, 3)))
    axis = se3.helical_axis(noisy, np.zeros(3)).axis
    across = np.rad2deg(np.sqrt(np.mean(np.arctan2(axis[:, :2], axis[:, 2:]) ** 2)))
    assert across == pytest.approx(expected, rel=0.03)


def test_axis_direction_spread_has_no_bound_at_no_turn() -> None:
    assert np.isinf(se3.helical_axis_direction_sd([0.0], 0.01)).all()

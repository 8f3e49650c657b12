"""Rigid fit: exactness, invariance, missing markers, clusters that determine nothing, messages."""

from __future__ import annotations

import numpy as np
import pytest
from differences import central_difference
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.spatial.transform import Rotation

from sta_prior import se3
from sta_prior.angles import mirror_points, mirror_pose
from sta_prior.checks import FloatArray
from sta_prior.errors import NotDeterminedError, ShapeError
from sta_prior.rigid import (
    MINIMUM_LINE_RATIO,
    deformation_modes,
    deformation_part,
    fit_rigid,
    marker_jacobian,
    rigid_part,
    rigid_subspace,
)

quick = settings(max_examples=60, deadline=None, derandomize=True, database=None)
tangents = arrays(np.float64, 6, elements=st.floats(-1.5, 1.5))
clusters = st.integers(3, 6).flatmap(
    lambda m: arrays(np.float64, (m, 3), elements=st.floats(-0.2, 0.2, allow_subnormal=False))
)

# A thigh-like cluster of five markers, in metres.
THIGH = np.array(
    [[0.06, 0.25, 0.05], [0.09, 0.15, 0.02], [0.02, 0.12, 0.09], [-0.02, 0.2, 0.085], [0.08, 0.3, -0.01]]
)


def noisy(frames: int, sd: float, seed: int) -> tuple[FloatArray, FloatArray]:
    """Poses, and THIGH's markers there with independent noise."""
    rng = np.random.default_rng(seed)
    poses = se3.exp(rng.normal(size=(frames, 6)))
    points = se3.transform_points(poses, THIGH)
    return poses, points + sd * rng.normal(size=points.shape)


# --- exactness and two ways ------------------------------------------------------------------------


def test_noise_free_fit_is_exact() -> None:
    """Least squares recovers R and d to 1e-12 (identity)."""
    poses, points = noisy(50, 0.0, 1)
    fit = fit_rigid(THIGH, points)
    np.testing.assert_allclose(fit.pose, poses, rtol=0, atol=1e-12)
    assert fit.determined.all()
    assert np.abs(fit.residual).max() < 1e-12
    assert fit.spread.max() < 1e-12


def test_batch_equals_a_loop_over_scipy() -> None:
    """Another library: SciPy's Rotation.align_vectors, frame by frame."""
    _, points = noisy(40, 0.01, 2)
    fit = fit_rigid(THIGH, points)
    for pose, residual, target in zip(fit.pose, fit.residual, points, strict=True):
        centred = target - target.mean(axis=0)
        source = THIGH - THIGH.mean(axis=0)
        expected, distance = Rotation.align_vectors(centred, source)
        np.testing.assert_allclose(se3.rotation_of(pose), expected.as_matrix(), atol=1e-12)
        position = target.mean(axis=0) - expected.apply(THIGH.mean(axis=0))
        np.testing.assert_allclose(se3.position_of(pose), position, atol=1e-12)
        assert np.linalg.norm(residual) == pytest.approx(distance, rel=1e-6)


def test_residual_and_spread_are_what_they_say() -> None:
    _, points = noisy(6, 0.01, 3)
    points[2, 1] = np.nan
    fit = fit_rigid(THIGH, points)
    expected = points - se3.transform_points(fit.pose, THIGH)
    np.testing.assert_allclose(fit.residual, expected, atol=1e-14)
    squares = np.nansum(expected**2, axis=(-2, -1))
    np.testing.assert_allclose(fit.spread, np.sqrt(squares / np.array([9, 9, 6, 9, 9, 9])))
    assert np.isnan(fit.residual[2, 1]).all()


def test_spread_estimates_the_marker_sd() -> None:
    """3n − 6 degrees of freedom: the mean square is σ²; bound of 4 Monte-Carlo standard errors."""
    frames, sd = 5000, 1e-3
    fit = fit_rigid(THIGH, noisy(frames, sd, 4)[1])
    error = np.sqrt(2 / (9 * frames))
    assert np.mean(fit.spread**2) / sd**2 == pytest.approx(1.0, abs=4 * error)


@pytest.mark.parametrize("frames", [(), (0,), (4,), (2, 3), (2, 0)])
def test_leading_axes(frames: tuple[int, ...]) -> None:
    rng = np.random.default_rng(5)
    points = se3.transform_points(se3.exp(rng.normal(size=(*frames, 6))), THIGH)
    references = THIGH + 0.01 * rng.normal(size=(*frames, 5, 3))
    fit = fit_rigid(references, points)
    assert fit.pose.shape == (*frames, 4, 4)
    assert fit.residual.shape == (*frames, 5, 3)
    assert fit.unit_covariance.shape == (*frames, 6, 6)
    assert fit.spread.shape == fit.determined.shape == fit.line_ratio.shape == frames
    for index in np.ndindex(*frames):
        single = fit_rigid(references[index], points[index])
        np.testing.assert_allclose(fit.pose[index], single.pose, atol=1e-13)
        np.testing.assert_allclose(fit.unit_covariance[index], single.unit_covariance, rtol=1e-10)


# --- invariance ------------------------------------------------------------------------------------


def usable(cluster: FloatArray) -> bool:
    """Away from a line and not tiny, so that rounding stays rounding."""
    centred = cluster - cluster.mean(axis=0)
    return bool(np.linalg.svd(centred, compute_uv=False)[1] > 0.02)


@quick
@given(clusters, tangents, tangents, st.integers(0, 2**32 - 1))
def test_fit_follows_the_lab_frame(
    cluster: FloatArray, place: FloatArray, lab: FloatArray, seed: int
) -> None:
    assume(usable(cluster))
    points = se3.transform_points(se3.exp(place), cluster)
    points = points + 1e-3 * np.random.default_rng(seed).normal(size=points.shape)
    moved = se3.exp(lab)
    here, there = fit_rigid(cluster, points), fit_rigid(cluster, se3.transform_points(moved, points))
    np.testing.assert_allclose(there.pose, moved @ here.pose, rtol=0, atol=1e-10)
    np.testing.assert_allclose(there.unit_covariance, here.unit_covariance, rtol=1e-12)
    np.testing.assert_allclose(there.spread, here.spread, rtol=1e-8, atol=1e-14)
    residual = here.residual @ se3.rotation_of(moved).T
    np.testing.assert_allclose(there.residual, residual, rtol=0, atol=1e-10)


@quick
@given(clusters, tangents, st.integers(0, 2**32 - 1))
def test_fit_does_not_see_the_order_of_markers(cluster: FloatArray, place: FloatArray, seed: int) -> None:
    assume(usable(cluster))
    rng = np.random.default_rng(seed)
    points = se3.transform_points(se3.exp(place), cluster)
    points = points + 1e-3 * rng.normal(size=points.shape)
    order = rng.permutation(len(cluster))
    plain, shuffled = fit_rigid(cluster, points), fit_rigid(cluster[order], points[order])
    np.testing.assert_allclose(shuffled.pose, plain.pose, rtol=0, atol=1e-10)
    np.testing.assert_allclose(shuffled.residual, plain.residual[order], rtol=0, atol=1e-10)
    np.testing.assert_allclose(shuffled.unit_covariance, plain.unit_covariance, rtol=1e-9, atol=1e-9)


@quick
@given(clusters, tangents, st.integers(0, 2**32 - 1))
def test_fit_of_the_mirror_image_is_the_mirror_of_the_fit(
    cluster: FloatArray, place: FloatArray, seed: int
) -> None:
    assume(usable(cluster))
    points = se3.transform_points(se3.exp(place), cluster)
    points = points + 1e-3 * np.random.default_rng(seed).normal(size=points.shape)
    mirrored = fit_rigid(mirror_points(cluster), mirror_points(points))
    np.testing.assert_allclose(
        mirrored.pose, mirror_pose(fit_rigid(cluster, points).pose), rtol=0, atol=1e-10
    )


@quick
@given(clusters, tangents, tangents)
def test_another_bone_frame_gives_the_same_motion(
    cluster: FloatArray, place: FloatArray, frame: FloatArray
) -> None:
    """Reference points in other bone axes: pose and covariance change by the adjoint."""
    assume(usable(cluster))
    points = se3.transform_points(se3.exp(place), cluster)
    bone_from_other = se3.exp(frame)
    other = fit_rigid(se3.transform_points(se3.inverse(bone_from_other), cluster), points)
    plain = fit_rigid(cluster, points)
    np.testing.assert_allclose(other.pose, plain.pose @ bone_from_other, rtol=0, atol=1e-10)
    moved = se3.adjoint(bone_from_other) @ other.unit_covariance @ se3.adjoint(bone_from_other).T
    scale = np.abs(plain.unit_covariance).max()
    np.testing.assert_allclose(moved, plain.unit_covariance, rtol=0, atol=1e-9 * scale)


# --- reflections, hidden markers, clusters near a line ---------------------------------------------


def test_a_mirrored_cluster_is_not_fitted_by_a_reflection() -> None:
    """Determinant guard of Söderkvist & Wedin (1993) and Challis (1995): det R = +1."""
    reflected = THIGH * [1.0, 1.0, -1.0]
    fit = fit_rigid(THIGH, reflected)
    assert fit.determined
    assert np.linalg.det(se3.rotation_of(fit.pose)) == pytest.approx(1.0, abs=1e-14)
    assert fit.spread > 0.01


def test_the_best_rotation_onto_a_mirrored_tetrahedron_is_not_unique() -> None:
    tetrahedron = 0.05 * np.array([[1.0, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]])
    fit = fit_rigid(tetrahedron, -tetrahedron)
    assert not fit.determined
    assert np.isnan(fit.pose).all()


def test_a_hidden_marker_is_a_dropped_marker() -> None:
    poses, points = noisy(7, 0.005, 6)
    points[:, 3] = np.nan
    points[0, 3] = [0.1, np.nan, 0.2]  # one coordinate is enough to hide it
    kept = [0, 1, 2, 4]
    hidden, dropped = fit_rigid(THIGH, points), fit_rigid(THIGH[kept], points[:, kept])
    np.testing.assert_allclose(hidden.pose, dropped.pose, atol=1e-14)
    np.testing.assert_allclose(hidden.unit_covariance, dropped.unit_covariance, rtol=1e-12)
    np.testing.assert_allclose(hidden.spread, dropped.spread, rtol=1e-12)
    np.testing.assert_allclose(hidden.line_ratio, dropped.line_ratio, rtol=1e-12)
    np.testing.assert_allclose(hidden.residual[:, kept], dropped.residual, atol=1e-14)
    assert np.isnan(hidden.residual[:, 3]).all()
    unknown = THIGH.copy()
    unknown[3, 0] = np.nan
    np.testing.assert_allclose(fit_rigid(unknown, noisy(7, 0.005, 6)[1]).pose, hidden.pose, atol=1e-14)
    assert poses.shape == hidden.pose.shape


@pytest.mark.parametrize("seen", [0, 1, 2])
def test_too_few_markers_determine_nothing(seen: int) -> None:
    points = np.stack([THIGH, THIGH])
    points[1, seen:] = np.nan
    fit = fit_rigid(THIGH, points)
    assert fit.determined.tolist() == [True, False]
    for field in (fit.pose, fit.unit_covariance, fit.residual):
        assert np.isfinite(field[0]).all()
        assert np.isnan(field[1]).all()
    assert np.isnan(fit.spread[1])
    assert fit.line_ratio[1] < 1e-6
    two = fit_rigid(THIGH[:seen], THIGH[:seen])
    assert not two.determined
    assert not fit_rigid(THIGH[:seen], THIGH[:seen], minimum_line_ratio=0.0).determined


@pytest.mark.parametrize(("offset", "determined"), [(0.0, False), (0.0015, False), (0.0040, True)])
def test_markers_near_a_line_determine_nothing(offset: float, determined: bool) -> None:
    """Four markers over 300 mm, two of them off the line: extent ratio 0, 0.009 and 0.024."""
    line = np.array([[0.0, 0.0, 0.0], [0.0, 0.1, offset], [0.0, 0.2, -offset], [0.0, 0.3, 0.0]])
    fit = fit_rigid(line, se3.transform_points(se3.exp([0.4, -0.3, 0.2, 1.0, 0.5, 0.1]), line))
    # Moments 2o² across, 0.05 along, −0.1·o mixed: 1.8·o² about the best line, to second order.
    expected = float(np.sqrt(1.8 / 0.05) * offset)
    assert fit.line_ratio == pytest.approx(expected, rel=1e-3, abs=1e-7)
    assert bool(fit.determined) is determined
    assert (expected >= MINIMUM_LINE_RATIO) is determined
    assert np.isnan(fit.pose).all() == (not determined)
    loose = fit_rigid(line, line, minimum_line_ratio=1e-3)
    assert bool(loose.determined) is (offset > 0)


def test_markers_measured_on_one_spot_determine_nothing() -> None:
    fit = fit_rigid(THIGH, np.zeros_like(THIGH))
    assert not fit.determined
    assert fit.line_ratio == 0.0


# --- Jacobian, rigid part, modes -------------------------------------------------------------------


def test_marker_jacobian_against_central_differences() -> None:
    rng = np.random.default_rng(7)
    pose = se3.exp(rng.normal(size=6))
    rotation = se3.rotation_of(pose)

    def in_bone_axes(change: FloatArray) -> FloatArray:
        # The pose is more than 10° and 20 mm away from the identity.
        moved: FloatArray = se3.transform_points(pose @ se3.exp(change), THIGH) @ rotation
        return moved.ravel()

    exact = marker_jacobian(THIGH)
    np.testing.assert_allclose(exact, central_difference(in_bone_axes, 6), rtol=1e-6, atol=1e-9)
    np.testing.assert_array_equal(marker_jacobian(np.stack([THIGH, THIGH]))[1], exact)
    assert marker_jacobian(np.empty((0, 5, 3))).shape == (0, 15, 6)


def test_rigid_part_is_least_squares_on_the_jacobian() -> None:
    displacement = 0.01 * np.random.default_rng(8).normal(size=(20, 5, 3))
    displacement[3, 2] = np.nan
    found = rigid_part(THIGH, displacement)
    for field, motion in zip(displacement, found, strict=True):
        rows = ~np.isnan(field.ravel())
        jacobian = marker_jacobian(THIGH)[rows]
        expected = np.linalg.lstsq(jacobian, field.ravel()[rows], rcond=None)[0]
        np.testing.assert_allclose(motion, expected, rtol=1e-9, atol=1e-13)
    rest = deformation_part(THIGH, displacement)
    assert np.isnan(rest[3, 2]).all()
    np.testing.assert_allclose(rigid_part(THIGH, rest), 0.0, atol=1e-15)
    # Splitting twice changes nothing.
    np.testing.assert_allclose(deformation_part(THIGH, rest), rest, atol=1e-15)


def test_rigid_part_is_the_small_motion_limit_of_the_fit() -> None:
    displacement = np.random.default_rng(9).normal(size=(5, 3))
    for size, tolerance in ((1e-4, 1e-2), (1e-6, 1e-4)):
        fitted = se3.log(fit_rigid(THIGH, THIGH + size * displacement).pose) / size
        expected = rigid_part(THIGH, displacement)
        assert np.abs(fitted - expected).max() < tolerance * np.abs(expected).max()


def test_rigid_part_of_too_little_is_not_determined() -> None:
    displacement = np.zeros((2, 5, 3))
    displacement[1, 2:] = np.nan
    assert np.isnan(rigid_part(THIGH, displacement)).all(axis=1).tolist() == [False, True]
    line = np.outer([0.0, 1.0, 2.0], [0.1, 0.2, 0.0])
    assert np.isnan(rigid_part(line, np.zeros((3, 3)))).all()


@pytest.mark.parametrize(
    ("cluster", "names"),
    [
        (THIGH, ["homothety", "stretch_x", "stretch_y", *(f"residual_{k}" for k in range(1, 7))]),
        (THIGH * [1, 1, 0], ["homothety", "stretch_x", *(f"residual_{k}" for k in range(1, 8))]),
        (THIGH[[0, 1, 4]], ["homothety", "stretch_x", "stretch_y"]),
    ],
)
def test_modes_are_an_orthonormal_basis(cluster: FloatArray, names: list[str]) -> None:
    """Order of Dumas et al. (2014): translations, rotations, homothety, stretches, rest."""
    found = deformation_modes(cluster)
    rigid_names = [f"{kind}_{axis}" for kind in ("translation", "rotation") for axis in "xyz"]
    assert list(found.names) == rigid_names + names
    np.testing.assert_allclose(found.modes.T @ found.modes, np.eye(3 * len(cluster)), atol=1e-14)
    rigid = rigid_subspace(cluster)
    np.testing.assert_array_equal(rigid, found.modes[:, :6])
    jacobian = marker_jacobian(cluster)
    np.testing.assert_allclose(rigid @ (rigid.T @ jacobian), jacobian, atol=1e-14)
    centred = (cluster - cluster.mean(axis=0)).ravel()
    np.testing.assert_allclose(found.modes[:, 6], centred / np.linalg.norm(centred), atol=1e-14)
    parts = rigid_part(cluster, found.modes[:, 6:].T.reshape(-1, len(cluster), 3))
    np.testing.assert_allclose(parts, 0.0, atol=1e-12)


# --- messages --------------------------------------------------------------------------------------


def test_messages_of_the_fit() -> None:
    with pytest.raises(ShapeError) as caught:
        fit_rigid(THIGH, THIGH[:4])
    assert str(caught.value) == "points: expected 5 markers as in the reference, got 4."
    with pytest.raises(ShapeError) as caught:
        rigid_part(THIGH[:3], THIGH)
    assert str(caught.value) == "displacement: expected 3 markers as in the reference, got 5."
    broken = THIGH.copy()
    broken[0, 1], broken[2, 1] = np.nan, np.inf
    with pytest.raises(ShapeError) as caught:
        fit_rigid(THIGH, broken)
    assert str(caught.value) == "points: value at (2, 1) is inf, expected a finite number."
    with pytest.raises(ShapeError) as caught:
        fit_rigid(-broken, THIGH)
    assert str(caught.value) == "reference: value at (2, 1) is -inf, expected a finite number."


def test_messages_of_the_modes() -> None:
    line = np.outer([0.0, 1.0, 2.0], [0.1, 0.2, 0.0]) + 1e-4 * np.eye(3)
    with pytest.raises(NotDeterminedError) as caught:
        deformation_modes(THIGH[:2])
    assert str(caught.value) == (
        "reference: 2 markers with line ratio 0, expected at least 3 markers and 0.02. "
        "Add a marker away from the line."
    )
    with pytest.raises(NotDeterminedError) as caught:
        rigid_subspace(line)
    assert str(caught.value) == (
        "reference: 3 markers with line ratio 0.00026, expected at least 3 markers and 0.02. "
        "Add a marker away from the line."
    )
    with pytest.raises(ShapeError) as caught:
        deformation_modes(np.stack([THIGH, THIGH]))
    assert str(caught.value) == "reference: expected shape (m, 3), got (2, 5, 3)."

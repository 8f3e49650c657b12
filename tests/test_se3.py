"""Poses: exponential and logarithm, group laws, adjoint, Jacobians, messages."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
import scipy.linalg
from differences import central_difference
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.spatial.transform import RigidTransform

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.errors import RotationError, ShapeError

quick = settings(max_examples=60, deadline=None, derandomize=True, database=None)
tangents = arrays(np.float64, 6, elements=st.floats(-1.5, 1.5))


def hat(tangent: FloatArray) -> FloatArray:
    """The 4×4 matrix whose matrix exponential is the pose."""
    matrix = np.zeros((4, 4))
    matrix[:3, :3] = se3.skew(tangent[:3])
    matrix[:3, 3] = tangent[3:]
    return matrix


def small_adjoint(tangent: FloatArray) -> FloatArray:
    """ad(ξ), rotation first: the derivative of Ad(Exp(ξ))."""
    turn, slide = se3.skew(tangent[:3]), se3.skew(tangent[3:])
    return np.block([[turn, np.zeros((3, 3))], [slide, turn]])


def jacobian_by_series(generator: FloatArray) -> FloatArray:
    """Σ Aᵏ/(k + 1)!, the slow and obvious left Jacobian."""
    term = np.eye(len(generator))
    total = term.copy()
    for k in range(1, 60):
        term = term @ generator / (k + 1)
        total += term
    return total


# --- Exp and Log -----------------------------------------------------------------------------------

ANGLES = np.concatenate(
    [np.geomspace(1e-12, 1.0, 49), np.linspace(1.1, 3.1, 21), np.pi - np.geomspace(1e-2, 1e-8, 7)]
)
TRANSLATIONS = [1e-3, 0.1, 1.0, 10.0]


@pytest.mark.parametrize("length", TRANSLATIONS)
def test_exp_and_log_have_no_bad_valley(length: float) -> None:
    """Against scipy.linalg.expm, with a translation that does not shrink with the angle."""
    rng = np.random.default_rng(1)
    for angle in ANGLES:
        axis, direction = (v / np.linalg.norm(v) for v in rng.normal(size=(2, 3)))
        tangent = np.concatenate([angle * axis, length * direction])
        pose = se3.exp(tangent)
        expected = scipy.linalg.expm(hat(tangent))
        np.testing.assert_allclose(se3.rotation_of(pose), expected[:3, :3], rtol=0, atol=1e-12)
        error = np.linalg.norm(se3.position_of(pose) - expected[:3, 3])
        assert error <= 1e-12 * np.linalg.norm(expected[:3, 3])
        back = se3.log(pose)
        assert np.linalg.norm(back[3:] - tangent[3:]) <= 1e-12 * length
        assert np.linalg.norm(back[:3] - tangent[:3]) <= 1e-12 * max(angle, 1e-3)


def test_rotation_exp_and_log_are_the_rotation_blocks() -> None:
    rng = np.random.default_rng(2)
    vectors = rng.normal(size=(40, 3))
    tangents_with_slide = np.concatenate([vectors, rng.normal(size=(40, 3))], axis=-1)
    rotation = se3.rotation_of(se3.exp(tangents_with_slide))
    np.testing.assert_allclose(se3.rotation_exp(vectors), rotation, atol=1e-14)
    np.testing.assert_allclose(se3.rotation_log(rotation), se3.log(se3.exp(tangents_with_slide))[:, :3])


def test_published_exponential() -> None:
    """Worked SE(3) example (recomputed with a 4×4 matrix exponential), 1e-11."""
    pose = se3.exp([0.1, -0.2, 0.3, 1.0, 2.0, 3.0])
    expected = [0.393727104366, 1.933798447465, 3.157956596855]
    np.testing.assert_allclose(se3.position_of(pose), expected, rtol=1e-11)
    np.testing.assert_allclose(se3.log(pose), [0.1, -0.2, 0.3, 1.0, 2.0, 3.0], rtol=1e-11)


def test_log_takes_the_short_way_round() -> None:
    tangent = np.array([0.0, 0.0, 1.5 * np.pi, 0.0, 0.0, 0.4])
    np.testing.assert_allclose(se3.log(se3.exp(tangent)), [0, 0, -0.5 * np.pi, 0, 0, 0.4], atol=1e-14)


@pytest.mark.parametrize("leading", [(), (0,), (1,), (5,), (2, 3), (2, 0, 3)])
def test_batches_equal_single_calls(leading: tuple[int, ...]) -> None:
    rng = np.random.default_rng(3)
    batch = rng.normal(size=(*leading, 6))
    functions: list[tuple[Callable[..., FloatArray], FloatArray]] = [
        (se3.exp, batch),
        (se3.left_jacobian, batch),
        (se3.right_jacobian_inverse, batch),
        (se3.rotation_exp, batch[..., :3]),
        (se3.rotation_left_jacobian_inverse, batch[..., :3]),
        (se3.log, se3.exp(batch)),
        (se3.inverse, se3.exp(batch)),
        (se3.adjoint, se3.exp(batch)),
        (se3.rotation_log, se3.rotation_of(se3.exp(batch))),
    ]
    for function, argument in functions:
        together = function(argument)
        assert together.shape[: len(leading)] == leading
        for index in np.ndindex(*leading):
            np.testing.assert_allclose(together[index], function(argument[index]), rtol=1e-13, atol=1e-15)


def test_missing_poses_stay_missing_and_touch_no_other() -> None:
    batch = np.random.default_rng(4).normal(size=(3, 6))
    batch[1, 4] = np.nan
    pose = se3.exp(batch)
    assert np.isnan(pose[1]).all()
    assert np.isfinite(pose[[0, 2]]).all()
    for result in (se3.log(pose), se3.inverse(pose), se3.relative_difference(pose, pose)):
        assert np.isnan(result[1]).all()
        assert np.isfinite(result[[0, 2]]).all()
    assert np.isnan(se3.log(np.full((4, 4), np.nan))).all()
    vectors = batch[:, 3:]
    assert np.isnan(se3.rotation_exp(vectors)[1]).all()
    assert np.isnan(se3.rotation_log(se3.rotation_exp(vectors))[1]).all()
    assert np.isnan(se3.make_pose(np.eye(3), [[0.0, np.nan, 0.0], [0.0, 0.0, 0.0]])).any(
        axis=(1, 2)
    ).tolist() == [
        True,
        False,
    ]


# --- group laws ------------------------------------------------------------------------------------


@quick
@given(tangents, tangents, tangents)
def test_group_laws(first: FloatArray, second: FloatArray, third: FloatArray) -> None:
    a, b, c = se3.exp(first), se3.exp(second), se3.exp(third)
    np.testing.assert_allclose((a @ b) @ c, a @ (b @ c), atol=1e-13)
    np.testing.assert_allclose(a @ se3.inverse(a), np.eye(4), atol=1e-14)
    np.testing.assert_allclose(se3.inverse(a @ b), se3.inverse(b) @ se3.inverse(a), atol=1e-14)
    product = se3.rotation_of(a @ b)
    np.testing.assert_allclose(product.T @ product, np.eye(3), atol=1e-14)
    assert np.linalg.det(product) == pytest.approx(1.0, abs=1e-14)


@quick
@given(tangents, st.floats(-1.0, 1.0), st.floats(-1.0, 1.0))
def test_one_parameter_subgroups(tangent: FloatArray, first: float, second: float) -> None:
    together = se3.exp((first + second) * tangent)
    np.testing.assert_allclose(se3.exp(first * tangent) @ se3.exp(second * tangent), together, atol=1e-13)
    np.testing.assert_allclose(se3.exp(-tangent), se3.inverse(se3.exp(tangent)), atol=1e-13)


@quick
@given(tangents, tangents)
def test_adjoint_moves_a_tangent_from_right_to_left(place: FloatArray, tangent: FloatArray) -> None:
    pose = se3.exp(place)
    right = pose @ se3.exp(tangent)
    left = se3.exp(se3.adjoint(pose) @ tangent) @ pose
    np.testing.assert_allclose(right, left, atol=1e-12)
    expected = scipy.linalg.expm(small_adjoint(place))
    np.testing.assert_allclose(se3.adjoint(pose), expected, atol=1e-12)


@quick
@given(tangents, tangents)
def test_points_follow_the_product_of_poses(first: FloatArray, second: FloatArray) -> None:
    points = np.random.default_rng(5).normal(size=(4, 3))
    a, b = se3.exp(first), se3.exp(second)
    expected = se3.transform_points(a, se3.transform_points(b, points))
    np.testing.assert_allclose(se3.transform_points(a @ b, points), expected, atol=1e-13)
    homogeneous = (a @ np.column_stack([points, np.ones(4)]).T).T[:, :3]
    np.testing.assert_allclose(se3.transform_points(a, points), homogeneous, atol=1e-13)


def test_parts_of_a_pose_are_views() -> None:
    pose = se3.make_pose(np.eye(3), [1.0, 2.0, 3.0])
    se3.position_of(pose)[:] = 7.0
    se3.rotation_of(pose)[0, 0] = -1.0
    assert pose[:3, 3].tolist() == [7.0, 7.0, 7.0]
    assert pose[0, 0] == -1.0


def test_skew_is_the_cross_product() -> None:
    a, b = np.random.default_rng(6).normal(size=(2, 7, 3))
    product = np.einsum("...ij,...j->...i", se3.skew(a), b)
    np.testing.assert_allclose(product, np.cross(a, b), atol=1e-15)


# --- Jacobians -------------------------------------------------------------------------------------

# 10° about an oblique axis with 20 mm, a large turn, and a tiny turn with a long slide.
PLACES = [
    np.concatenate([np.deg2rad(10) * np.array([0.6, -0.48, 0.64]), 0.02 * np.array([0.36, 0.8, -0.48])]),
    np.array([1.3, -1.1, 0.9, 0.4, -2.0, 1.0]),
    np.array([2e-5, 1e-5, -1e-5, 0.3, 4.0, -2.0]),
]


@pytest.mark.parametrize("place", PLACES)
def test_jacobians_against_central_differences(place: FloatArray) -> None:
    pose = se3.exp(place)
    back = se3.inverse(pose)
    scale = max(1.0, float(np.abs(place).max()))
    cases = [
        (se3.left_jacobian(place), lambda d: se3.log(se3.exp(place + d) @ back)),
        (se3.right_jacobian(place), lambda d: se3.log(back @ se3.exp(place + d))),
        (se3.left_jacobian_inverse(place), lambda d: se3.log(se3.exp(d) @ pose)),
        (se3.right_jacobian_inverse(place), lambda d: se3.log(pose @ se3.exp(d))),
    ]
    for exact, function in cases:
        numeric = central_difference(function, 6)
        np.testing.assert_allclose(exact, numeric, rtol=1e-6, atol=1e-6 * scale)


@pytest.mark.parametrize("place", PLACES)
def test_rotation_jacobians_against_central_differences(place: FloatArray) -> None:
    vector = place[:3]
    rotation = se3.rotation_exp(vector)
    cases = [
        (
            se3.rotation_left_jacobian(vector),
            lambda d: se3.rotation_log(se3.rotation_exp(vector + d) @ rotation.T),
        ),
        (
            se3.rotation_right_jacobian(vector),
            lambda d: se3.rotation_log(rotation.T @ se3.rotation_exp(vector + d)),
        ),
        (
            se3.rotation_left_jacobian_inverse(vector),
            lambda d: se3.rotation_log(se3.rotation_exp(d) @ rotation),
        ),
        (
            se3.rotation_right_jacobian_inverse(vector),
            lambda d: se3.rotation_log(rotation @ se3.rotation_exp(d)),
        ),
    ]
    for exact, function in cases:
        np.testing.assert_allclose(exact, central_difference(function, 3), rtol=1e-6, atol=1e-6)


def test_jacobians_against_their_series_at_every_angle() -> None:
    rng = np.random.default_rng(7)
    for angle in [*ANGLES, 0.4999999, 0.5, 0.5000001, 0.0]:
        axis = rng.normal(size=3)
        tangent = np.concatenate([angle * axis / np.linalg.norm(axis), rng.normal(size=3)])
        expected = jacobian_by_series(small_adjoint(tangent))
        np.testing.assert_allclose(se3.left_jacobian(tangent), expected, atol=2e-14)
        np.testing.assert_allclose(
            se3.right_jacobian(tangent), jacobian_by_series(-small_adjoint(tangent)), atol=2e-14
        )
        np.testing.assert_allclose(se3.left_jacobian_inverse(tangent) @ expected, np.eye(6), atol=1e-13)
        turn = jacobian_by_series(se3.skew(tangent[:3]))
        np.testing.assert_allclose(se3.rotation_left_jacobian(tangent[:3]), turn, atol=2e-14)
        np.testing.assert_allclose(
            se3.rotation_left_jacobian_inverse(tangent[:3]) @ turn, np.eye(3), atol=1e-13
        )


def test_jacobian_inverses_beyond_half_a_turn() -> None:
    tangent = np.array([0.0, 3.0, 5.0, 0.3, -0.2, 0.1])  # 5.83 rad, short of 2π
    for jacobian, inverse in [
        (se3.left_jacobian, se3.left_jacobian_inverse),
        (se3.right_jacobian, se3.right_jacobian_inverse),
    ]:
        np.testing.assert_allclose(jacobian(tangent) @ inverse(tangent), np.eye(6), atol=1e-12)


# --- messages --------------------------------------------------------------------------------------


def test_a_sheared_pose_is_refused_where_scipy_repairs_it() -> None:
    pose = np.eye(4)
    pose[0, 1] = 0.01
    assert RigidTransform.from_matrix(pose).as_matrix()[0, 1] != 0.01
    text = (
        "pose: not orthonormal, RᵀR differs from 1 by 0.01, expected at most 1e-06. "
        "A sheared or scaled matrix is not a pose."
    )
    for refused in (
        lambda: se3.log(pose),
        lambda: se3.covariance_in_lab(pose, np.eye(6)),
    ):
        with pytest.raises(RotationError) as caught:
            refused()
        assert str(caught.value) == text
    with pytest.raises(RotationError) as caught:
        se3.rotation_log(np.diag([1.0, 1.0, -1.0]))
    assert str(caught.value) == (
        "rotation: a reflection, expected determinant +1, got −1. Check the order and the sign of its axes."
    )


def test_wrong_axes_are_named() -> None:
    cases: list[tuple[Callable[[], object], str]] = [
        (lambda: se3.exp(np.zeros((4, 5))), "tangent: expected shape (..., 6), got (4, 5)."),
        (lambda: se3.log(np.zeros((3, 4))), "pose: expected shape (..., 4, 4), got (3, 4)."),
        (lambda: se3.skew(np.zeros(4)), "vector: expected shape (..., 3), got (4,)."),
        (
            lambda: se3.transform_points(np.eye(4), np.zeros(3)),
            "points: expected shape (..., n, 3), got (3,).",
        ),
    ]
    for call, text in cases:
        with pytest.raises(ShapeError) as caught:
            call()
        assert str(caught.value) == text

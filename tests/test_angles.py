"""Joint angles: published definitions and values, signs of the body, Jacobians, mirror, messages."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest
from differences import central_difference
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.spatial.transform import Rotation

from sta_prior import se3
from sta_prior.angles import (
    GIMBAL_WARNING,
    MIRROR_TANGENT_SIGNS,
    JointConvention,
    angle_jacobian,
    gimbal_margin,
    joint_angle_pose_jacobians,
    joint_angles,
    mirror_points,
    mirror_pose,
    mirror_rotation,
    rotation_from_angles,
)
from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, RotationError, ShapeError

quick = settings(max_examples=60, deadline=None, derandomize=True, database=None)
vectors = arrays(np.float64, 3, elements=st.floats(-1.5, 1.5))
tangents = arrays(np.float64, 6, elements=st.floats(-1.5, 1.5))

SEQUENCES = [a + b + c for a, b, c in product("xyz", repeat=3) if b not in (a, c)]
ANATOMICAL = [JointConvention(kind, side) for kind in ("knee", "hip", "ankle") for side in ("right", "left")]
CARDAN = [JointConvention("cardan", side, s, (1, -1, 1)) for s in SEQUENCES for side in ("right", "left")]
HIP = JointConvention("hip", "right")


def name_of(convention: JointConvention) -> str:
    return f"{convention.kind}-{convention.side}-{convention.sequence}"


every_convention = pytest.mark.parametrize("convention", ANATOMICAL + CARDAN, ids=name_of)


def degrees(convention: JointConvention, rotation: FloatArray) -> FloatArray:
    return np.rad2deg(joint_angles(convention, rotation))


# --- published definitions and values --------------------------------------------------------------


def test_sequence_is_the_intrinsic_one_of_scipy() -> None:
    """Another library: SciPy's intrinsic Euler angles, all twelve sequences."""
    rotations = Rotation.random(200, rng=np.random.default_rng(1))
    for sequence in SEQUENCES:
        convention = JointConvention("cardan", "right", sequence)
        expected = rotations.as_euler(sequence.upper())
        np.testing.assert_allclose(joint_angles(convention, rotations.as_matrix()), expected, atol=1e-12)


def test_angles_are_those_of_grood_and_suntay() -> None:
    """Grood & Suntay (1983): e1 = proximal z, e3 = distal y, floating axis e2 = e3 × e1 normalised."""
    rotations = Rotation.random(600, rng=np.random.default_rng(2)).as_matrix()
    proximal, distal = rotations[:300], rotations[300:]
    x, y, z = 0, 1, 2
    e1, e3 = proximal[..., z], distal[..., y]
    e2 = np.cross(e3, e1)
    e2 /= np.linalg.norm(e2, axis=-1, keepdims=True)

    def dot(a: FloatArray, b: FloatArray) -> FloatArray:
        return np.einsum("...i,...i->...", a, b)

    alpha = np.arctan2(dot(e2, proximal[..., y]), dot(e2, proximal[..., x]))
    beta = np.arcsin(dot(e3, e1))
    gamma = np.arctan2(dot(e2, distal[..., z]), dot(e2, distal[..., x]))
    found = joint_angles(HIP, np.swapaxes(proximal, -1, -2) @ distal)
    # The middle angle of an arcsine is good to √eps only near its ends.
    np.testing.assert_allclose(found, np.stack([alpha, beta, gamma], axis=-1), rtol=0, atol=1e-9)


@pytest.mark.parametrize("angles", [(60.0, -8.0, 12.0), (30.0, 5.0, -10.0)])
def test_published_round_trip(angles: tuple[float, float, float]) -> None:
    """Joint coordinate system = intrinsic z-x-y; recomputed, 1e-10°."""
    rotation = Rotation.from_euler("ZXY", angles, degrees=True).as_matrix()
    np.testing.assert_allclose(degrees(HIP, rotation), angles, rtol=0, atol=1e-10)
    np.testing.assert_allclose(rotation_from_angles(HIP, np.deg2rad(angles)), rotation, atol=1e-15)


def test_published_rotation_matrix() -> None:
    """First row of Rz(60°)·Rx(−8°)·Ry(12°); recomputed values."""
    rotation = rotation_from_angles(HIP, np.deg2rad([60.0, -8.0, 12.0]))
    np.testing.assert_allclose(rotation[0], [0.5141328644, -0.8575973041, -0.0139377818], atol=1e-10)
    knee = degrees(JointConvention("knee", "right"), rotation)
    np.testing.assert_allclose(knee, [-60.0, -8.0, 12.0], atol=1e-10)


def test_published_cross_talk() -> None:
    """A flexion axis 10° out of line about the long axis, flexed 60°; recomputed, 1e-3°."""
    offset = Rotation.from_euler("y", 10, degrees=True)
    rotation = (offset.inv() * Rotation.from_euler("z", 60, degrees=True) * offset).as_matrix()
    np.testing.assert_allclose(degrees(HIP, rotation), [59.619, -8.649, 4.962], atol=1e-3)
    expected = -np.rad2deg(np.arcsin(np.sin(np.deg2rad(10)) * np.sin(np.deg2rad(60))))
    assert degrees(HIP, rotation)[1] == pytest.approx(expected, abs=1e-12)


# --- what the signs mean on a body -----------------------------------------------------------------
# Bone axes on both sides: x forward, y up, z to the right of the body.

FORWARD, UP, RIGHT = np.eye(3)


@pytest.mark.parametrize(("side", "medial"), [("right", -RIGHT), ("left", RIGHT)])
def test_positive_angles_mean_the_named_motion(side: str, medial: FloatArray) -> None:
    """Common practice (Wu et al. 2002 for the axes): both sides name the same motion."""

    def seen(kind: str, angles: list[float], direction: FloatArray) -> FloatArray:
        convention = JointConvention(kind, side)  # type: ignore[arg-type]
        return rotation_from_angles(convention, np.deg2rad(angles)) @ direction

    down = -UP
    assert seen("knee", [20, 0, 0], down) @ FORWARD < -0.1  # the foot goes back
    assert seen("hip", [20, 0, 0], down) @ FORWARD > 0.1  # the knee goes forward
    assert seen("ankle", [20, 0, 0], FORWARD) @ UP > 0.1  # the toes rise
    for kind in ("knee", "hip"):
        assert seen(kind, [0, 20, 0], down) @ medial > 0.1  # the distal end goes inward
    assert seen("ankle", [0, 20, 0], down) @ medial > 0.1  # the sole faces inward
    for kind in ("knee", "hip", "ankle"):
        assert seen(kind, [0, 0, 20], FORWARD) @ medial > 0.1  # the toes turn inward


def test_names_of_the_angles() -> None:
    leg = ("flexion", "adduction", "internal_rotation")
    assert JointConvention("knee", "left").dof == leg
    assert JointConvention("hip", "right").dof == leg
    assert JointConvention("ankle", "right").dof == ("dorsiflexion", "inversion", "internal_rotation")
    assert JointConvention("cardan", "right", "xyz").dof == ("rotation_1", "rotation_2", "rotation_3")


# --- round trips and Jacobians ---------------------------------------------------------------------


@every_convention
def test_rotation_and_angles_are_inverse(convention: JointConvention) -> None:
    rotations = Rotation.random(50, rng=np.random.default_rng(3)).as_matrix()
    angles = joint_angles(convention, rotations)
    np.testing.assert_allclose(rotation_from_angles(convention, angles), rotations, atol=1e-14)


@every_convention
def test_jacobian_against_central_differences(convention: JointConvention) -> None:
    for vector in ([0.12, -0.08, 0.1], [0.9, -0.5, 1.1], [-0.4, 0.3, -2.0]):
        rotation = se3.rotation_exp(vector)
        exact = angle_jacobian(convention, rotation)
        numeric = central_difference(
            lambda turn, at=rotation: joint_angles(convention, at @ se3.rotation_exp(turn)), 3, 0.3
        )
        np.testing.assert_allclose(exact, numeric, rtol=1e-6, atol=1e-6 * np.abs(exact).max())


@every_convention
def test_pose_jacobians_against_central_differences(convention: JointConvention) -> None:
    rng = np.random.default_rng(4)
    proximal, distal = se3.exp(rng.normal(size=(2, 6)) * [0.5, 0.5, 0.5, 1.0, 1.0, 1.0])
    # 10° and 20 mm away from where the derivative would be simplest.
    distal = distal @ se3.exp([*(np.deg2rad(10) * np.array([0.6, -0.48, 0.64])), 0.012, -0.016, 0.0])
    angles, by_proximal, by_distal = joint_angle_pose_jacobians(convention, proximal, distal)

    def relative(first: FloatArray, second: FloatArray) -> FloatArray:
        return joint_angles(convention, se3.rotation_of(se3.inverse(first) @ second))

    np.testing.assert_allclose(angles, relative(proximal, distal), atol=1e-14)
    scale = 1e-6 * np.abs(by_distal).max()
    numeric = central_difference(lambda change: relative(proximal @ se3.exp(change), distal), 6, 0.3)
    np.testing.assert_allclose(by_proximal, numeric, rtol=1e-6, atol=scale)
    numeric = central_difference(lambda change: relative(proximal, distal @ se3.exp(change)), 6, 0.3)
    np.testing.assert_allclose(by_distal, numeric, rtol=1e-6, atol=scale)


@quick
@given(tangents, tangents, tangents)
def test_moving_the_lab_changes_no_angle(lab: FloatArray, first: FloatArray, second: FloatArray) -> None:
    moved, proximal, distal = se3.exp(lab), se3.exp(first), se3.exp(second)
    here = joint_angle_pose_jacobians(HIP, proximal, distal)
    there = joint_angle_pose_jacobians(HIP, moved @ proximal, moved @ distal)
    relative = se3.rotation_of(se3.inverse(proximal) @ distal)
    tolerance = 1e-11 / float(np.sin(gimbal_margin(HIP, relative))) ** 2
    for a, b in zip(here, there, strict=True):
        np.testing.assert_allclose(a, b, rtol=0, atol=tolerance)


def test_leading_axes_and_missing_poses() -> None:
    rotations = Rotation.random(6, rng=np.random.default_rng(5)).as_matrix().reshape(2, 3, 3, 3)
    rotations[0, 1] = np.nan
    for convention in (HIP, JointConvention("cardan", "left", "yxy")):
        angles = joint_angles(convention, rotations)
        jacobian = angle_jacobian(convention, rotations)
        margin = gimbal_margin(convention, rotations)
        back = rotation_from_angles(convention, angles)
        for index in np.ndindex(2, 3):
            missing = index == (0, 1)
            for result in (angles[index], jacobian[index], margin[index], back[index]):
                assert np.isnan(result).all() == missing
                assert np.isnan(result).any() == missing
            single = joint_angles(convention, rotations[index])
            np.testing.assert_allclose(angles[index], single, rtol=0, atol=1e-15)
        # One unknown angle makes the whole rotation unknown.
        for unknown in np.where(np.eye(3) > 0, np.nan, 0.2):
            assert np.isnan(rotation_from_angles(convention, unknown)).all()
        assert joint_angles(convention, np.empty((4, 0, 3, 3))).shape == (4, 0, 3)
        assert angle_jacobian(convention, np.empty((0, 3, 3))).shape == (0, 3, 3)


# --- the singular posture --------------------------------------------------------------------------


@pytest.mark.parametrize("sequence", SEQUENCES)
def test_singular_posture_keeps_the_rotation(sequence: str) -> None:
    """First and third angle cannot be told apart, but together they still give the rotation."""
    convention = JointConvention("cardan", "right", sequence)
    middle = 0.0 if sequence[0] == sequence[2] else np.pi / 2
    for offset in (0.0, 1e-15, 1e-9, 1e-6):
        rotation = rotation_from_angles(convention, [0.7, middle + offset, 0.4])
        angles = joint_angles(convention, rotation)
        np.testing.assert_allclose(rotation_from_angles(convention, angles), rotation, atol=1e-14)
        assert gimbal_margin(convention, rotation) <= 2e-6


def test_neutral_posture_of_a_repeated_axis_reads_zero() -> None:
    """Without a choice of the first angle, signs of zero would make it ±π."""
    for sequence in ("yxy", "zxz", "xyx"):
        convention = JointConvention("cardan", "right", sequence)
        np.testing.assert_array_equal(joint_angles(convention, np.eye(3)), [0.0, 0.0, 0.0])


def test_jacobian_of_the_singular_posture_is_not_determined() -> None:
    rotation = np.array([[0.0, 0.0, 1.0], [1.0, 0.0, 0.0], [0.0, 1.0, 0.0]])  # Rz(0)·Rx(90°)·Ry(90°)
    np.testing.assert_allclose(degrees(HIP, rotation), [0.0, 90.0, 90.0])
    assert np.isnan(angle_jacobian(HIP, rotation)).all()


def test_margin_is_the_distance_from_the_singular_posture() -> None:
    for middle, expected in [(0.0, 90.0), (80.0, 10.0), (-60.0, 30.0)]:
        rotation = rotation_from_angles(HIP, np.deg2rad([25.0, middle, -10.0]))
        assert np.rad2deg(gimbal_margin(HIP, rotation)) == pytest.approx(expected, abs=1e-9)
    shoulder = JointConvention("cardan", "right", "yxy")
    for middle, expected in [(90.0, 90.0), (10.0, 10.0), (150.0, 30.0)]:
        rotation = rotation_from_angles(shoulder, np.deg2rad([25.0, middle, -10.0]))
        assert np.rad2deg(gimbal_margin(shoulder, rotation)) == pytest.approx(expected, abs=1e-9)
    assert np.rad2deg(GIMBAL_WARNING) == pytest.approx(15.0)


# --- the other side --------------------------------------------------------------------------------


@quick
@given(vectors)
def test_mirrored_body_has_the_same_angles_on_the_other_side(vector: FloatArray) -> None:
    rotation = se3.rotation_exp(vector)
    for convention in ANATOMICAL + CARDAN:
        other = JointConvention(
            convention.kind,
            "left" if convention.side == "right" else "right",
            convention.sequence,
            convention.signs,
        )
        here, there = joint_angles(convention, rotation), joint_angles(other, mirror_rotation(rotation))
        np.testing.assert_allclose(here, there, rtol=0, atol=1e-15)
        np.testing.assert_allclose(
            rotation_from_angles(other, here), mirror_rotation(rotation), rtol=0, atol=1e-14
        )


@pytest.mark.parametrize("sequence", ["zxy", "xyz", "yxz"])
def test_left_angles_of_one_rotation_change_sign_about_x_and_y(sequence: str) -> None:
    """The rule for left legs, second and third angle change sign: common practice, no source."""
    rotation = se3.rotation_exp([0.3, -0.2, 0.5])
    signs = np.array([1.0 if letter == "z" else -1.0 for letter in sequence])
    kinds = ["knee", "hip", "ankle", "cardan"] if sequence == "zxy" else ["cardan"]
    for kind in kinds:
        left, right = (
            joint_angles(JointConvention(kind, side, sequence), rotation)  # type: ignore[arg-type]
            for side in ("left", "right")
        )
        np.testing.assert_allclose(left, signs * right, rtol=0, atol=1e-15)


@quick
@given(tangents)
def test_mirror_of_poses_points_and_tangents_agree(tangent: FloatArray) -> None:
    pose = se3.exp(tangent)
    points = np.random.default_rng(6).normal(size=(4, 3))
    mirrored = mirror_pose(pose)
    np.testing.assert_allclose(
        se3.transform_points(mirrored, mirror_points(points)),
        mirror_points(se3.transform_points(pose, points)),
        atol=1e-14,
    )
    np.testing.assert_allclose(se3.exp(MIRROR_TANGENT_SIGNS * tangent), mirrored, atol=1e-14)
    np.testing.assert_array_equal(mirror_rotation(se3.rotation_of(pose)), se3.rotation_of(mirrored))
    np.testing.assert_array_equal(mirror_pose(mirrored), pose)
    assert np.linalg.det(se3.rotation_of(mirrored)) == pytest.approx(1.0)


# --- messages --------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "text"),
    [
        (
            ("kne", "right"),
            "joint kind: expected one of knee, hip, ankle, cardan, got 'kne'. Did you mean knee?",
        ),
        (("knee", "Right"), "joint side: expected right or left, got 'Right'."),
        (
            ("cardan", "right", "xxz"),
            "joint sequence: expected three of x, y, z with no neighbours alike, got 'xxz'. "
            'Write, for example, "zxy" or "yxy".',
        ),
        (
            ("cardan", "right", "ZXY"),
            "joint sequence: expected three of x, y, z with no neighbours alike, got 'ZXY'. "
            'Write, for example, "zxy" or "yxy".',
        ),
        (
            ("cardan", "right", "xyz", (1, -1, 2)),
            "joint signs: expected three of 1 and -1, got (1, -1, 2).",
        ),
        (
            ("knee", "left", "xyz", (1, -1, 1)),
            "joint sequence: the angles of kind 'knee' are fixed, got sequence 'xyz' and signs (1, -1, 1). "
            'Use kind = "cardan" for other angles.',
        ),
    ],
)
def test_conventions_without_meaning_are_refused(arguments: tuple[object, ...], text: str) -> None:
    with pytest.raises(InputError) as caught:
        JointConvention(*arguments)  # type: ignore[arg-type]
    assert str(caught.value) == text


def test_bad_rotations_and_shapes_are_named() -> None:
    sheared = np.eye(3)
    sheared[0, 1] = 0.02
    for function in (joint_angles, angle_jacobian, gimbal_margin):
        with pytest.raises(RotationError) as caught:
            function(HIP, np.stack([np.eye(3), sheared]))
        assert str(caught.value) == (
            "proximal_from_distal, index (1,): not orthonormal, RᵀR differs from 1 by 0.02, "
            "expected at most 1e-06. A sheared or scaled matrix is not a pose."
        )
    with pytest.raises(ShapeError) as caught:
        rotation_from_angles(HIP, np.zeros((5, 2)))
    assert str(caught.value) == "angles: expected shape (..., 3), got (5, 2)."
    with pytest.raises(ShapeError) as caught:
        joint_angle_pose_jacobians(HIP, np.eye(4), np.eye(3))
    assert str(caught.value) == "lab_from_distal: expected shape (..., 4, 4), got (3, 3)."

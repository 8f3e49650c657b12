"""Joint angles of a proximal and a distal bone, their Jacobians, and the mirror to the other side.

Bone axes on both sides of the body: x forward, y up, z to the right. Angles come from
``proximal_from_distal``, the distal bone's rotation seen from the proximal bone.
Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike

from sta_prior.checks import FloatArray, check_rotation, check_shape, nearest
from sta_prior.errors import InputError, message
from sta_prior.se3 import rotation_of

JointKind = Literal["knee", "hip", "ankle", "cardan"]
Side = Literal["right", "left"]

GIMBAL_WARNING = float(np.deg2rad(15.0))
# Sine of the margin below which the first and third angle cannot be told apart in double precision.
_SINGULAR = 1e-12

_LEG = ("flexion", "adduction", "internal_rotation")
_DEGREES_OF_FREEDOM: dict[str, tuple[str, str, str]] = {
    "knee": _LEG,
    "hip": _LEG,
    "ankle": ("dorsiflexion", "inversion", "internal_rotation"),
    "cardan": ("rotation_1", "rotation_2", "rotation_3"),
}
_SIGNS: dict[str, tuple[float, float, float]] = {
    "knee": (-1.0, 1.0, 1.0),
    "hip": (1.0, 1.0, 1.0),
    "ankle": (1.0, 1.0, 1.0),
}
_MIRROR = np.array([1.0, 1.0, -1.0])
# What mirroring z does to (rx, ry, rz, tx, ty, tz): a rotation vector is a pseudovector.
MIRROR_TANGENT_SIGNS: FloatArray = np.array([-1.0, -1.0, 1.0, 1.0, 1.0, -1.0])


@dataclass(frozen=True)
class JointConvention:
    """How a joint's rotation is told in three angles.

    Attributes
    ----------
    kind : knee, hip, ankle: Grood–Suntay angles, that is, intrinsic rotations about z, x, y;
        cardan: the intrinsic `sequence`
    side : of the body; a left joint is read in the mirror image, z → −z, so that adduction,
        inversion and internal rotation mean the same on both sides
    sequence : three axes, used by cardan only; first and third may be the same axis
    signs : factor of each angle, +1 or −1, used by cardan only

    Raises
    ------
    InputError : another kind, side, sequence or sign, or a sequence or signs given to an
        anatomical joint, whose angles are fixed.

    Notes
    -----
    Flexion at the knee takes the distal end back, at the hip forward; dorsiflexion lifts the toes.

    References
    ----------
    Grood & Suntay (1983), J. Biomech. Eng. 105, 136–144, doi 10.1115/1.3138397.
    Wu et al. (2002), J. Biomechanics 35, 543–548.

    Examples
    --------
    >>> JointConvention("ankle", "left").dof
    ('dorsiflexion', 'inversion', 'internal_rotation')
    """

    kind: JointKind
    side: Side
    sequence: str = "zxy"
    signs: tuple[float, float, float] = (1.0, 1.0, 1.0)

    def __post_init__(self) -> None:
        """Refuse what has no meaning."""
        if self.kind not in _DEGREES_OF_FREEDOM:
            known = ", ".join(_DEGREES_OF_FREEDOM)
            raise InputError(
                message(
                    "joint kind",
                    f"expected one of {known}, got {self.kind!r}",
                    nearest(str(self.kind), _DEGREES_OF_FREEDOM),
                )
            )
        if self.side not in ("right", "left"):
            raise InputError(message("joint side", f"expected right or left, got {self.side!r}"))
        letters = str(self.sequence)
        if len(letters) != 3 or set(letters) - set("xyz") or letters[1] in (letters[0], letters[2]):
            raise InputError(
                message(
                    "joint sequence",
                    f"expected three of x, y, z with no neighbours alike, got {self.sequence!r}",
                    'Write, for example, "zxy" or "yxy".',
                )
            )
        if len(self.signs) != 3 or any(sign not in (1, -1) for sign in self.signs):
            raise InputError(message("joint signs", f"expected three of 1 and -1, got {self.signs!r}"))
        if self.kind != "cardan" and (letters != "zxy" or any(sign != 1 for sign in self.signs)):
            raise InputError(
                message(
                    "joint sequence",
                    f"the angles of kind {self.kind!r} are fixed, got sequence {letters!r} and "
                    f"signs {self.signs!r}",
                    'Use kind = "cardan" for other angles.',
                )
            )

    @property
    def dof(self) -> tuple[str, str, str]:
        """Names of the three angles."""
        return _DEGREES_OF_FREEDOM[self.kind]

    @property
    def angle_signs(self) -> FloatArray:
        """Factor of each angle of the intrinsic sequence on the right side, shape (3,)."""
        return np.array(_SIGNS.get(self.kind, self.signs), dtype=np.float64)


def _axes(sequence: str) -> tuple[int, int, int, int, float, bool]:
    """Return the axes i, j, k of a sequence, the axis of the third turn, parity, and whether i-j-i."""
    i, j, last = ("xyz".index(letter) for letter in sequence)
    k = 3 - i - j
    return i, j, k, last, 1.0 if (j - i) % 3 == 1 else -1.0, last == i


def _raw_angles(sequence: str, rotation: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return intrinsic angles; in the singular posture one of the many, consistent with the rotation."""
    i, j, k, _, parity, proper = _axes(sequence)
    if proper:
        lower, upper = rotation[..., j, i], -parity * rotation[..., k, i]
        second = np.arctan2(np.hypot(lower, upper), rotation[..., i, i])
    else:
        lower, upper = -parity * rotation[..., j, k], rotation[..., k, k]
        second = np.arctan2(parity * rotation[..., i, k], np.hypot(rotation[..., i, i], rotation[..., i, j]))
    # Where the two merge the first is set to 0. The third is read after undoing the first, so that
    # together they stay right near the singularity.
    first = np.where(np.hypot(lower, upper) < _SINGULAR, 0.0, np.arctan2(lower, upper))
    cosine, sine = np.cos(first), parity * np.sin(first)
    undone = cosine[..., None] * rotation[..., j, :] + sine[..., None] * rotation[..., k, :]
    side = -parity * undone[..., k] if proper else parity * undone[..., i]
    return first, second, np.arctan2(side, undone[..., j])


def _on_the_right(convention: JointConvention, proximal_from_distal: ArrayLike) -> FloatArray:
    """Return the checked rotation; of a left joint its mirror image."""
    rotation = check_rotation(proximal_from_distal, "proximal_from_distal")
    return mirror_rotation(rotation) if convention.side == "left" else rotation


def joint_angles(convention: JointConvention, proximal_from_distal: ArrayLike) -> FloatArray:
    """Return the angles of a joint.

    Parameters
    ----------
    convention : kind of joint and side
    proximal_from_distal : shape (..., 3, 3), unitless, proximal ← distal
        All NaN = missing.

    Returns
    -------
    shape (..., 3), rad, in the order of `convention.dof`; NaN where missing. The middle angle
    of three different axes lies in ±π/2. In the singular posture the first angle is 0.

    Raises
    ------
    ShapeError : last axes differ from those above.
    RotationError : not orthonormal to 1e-6, or a reflection.

    Notes
    -----
    R = R_z(α) R_x(β) R_y(γ): rotation about the floating axis of Grood & Suntay is β.
    """
    raw = _raw_angles(convention.sequence, _on_the_right(convention, proximal_from_distal))
    return np.stack(raw, axis=-1) * convention.angle_signs


def _elementary(axis: int, angle: FloatArray) -> FloatArray:
    """Return rotations about one coordinate axis, shape (..., 3, 3)."""
    i, j = (axis + 1) % 3, (axis + 2) % 3
    rotation = np.zeros((*angle.shape, 3, 3))
    rotation[..., axis, axis] = 1.0
    rotation[..., i, i] = rotation[..., j, j] = np.cos(angle)
    rotation[..., j, i] = np.sin(angle)
    rotation[..., i, j] = -rotation[..., j, i]
    rotation[np.isnan(angle)] = np.nan
    return rotation


def rotation_from_angles(convention: JointConvention, angles: ArrayLike) -> FloatArray:
    """Return the rotation that has these joint angles: the inverse of `joint_angles`.

    Parameters
    ----------
    convention : kind of joint and side
    angles : shape (..., 3), rad, in the order of `convention.dof`

    Returns
    -------
    shape (..., 3, 3), proximal ← distal; NaN where an angle is NaN.

    Raises
    ------
    ShapeError : last axis is not 3.
    """
    raw = check_shape(angles, (3,), "angles") * convention.angle_signs
    i, j, _, last, _, _ = _axes(convention.sequence)
    result: FloatArray = (
        _elementary(i, raw[..., 0]) @ _elementary(j, raw[..., 1]) @ _elementary(last, raw[..., 2])
    )
    return mirror_rotation(result) if convention.side == "left" else result


def angle_jacobian(convention: JointConvention, proximal_from_distal: ArrayLike) -> FloatArray:
    """Return the derivative of the angles by a small turn of the distal bone about its own axes.

    Parameters
    ----------
    convention : kind of joint and side
    proximal_from_distal : shape (..., 3, 3), unitless, proximal ← distal

    Returns
    -------
    shape (..., 3, 3), unitless: d angles / d ω for R ← R·Exp(ω). Grows without bound towards
    the singular posture, see `gimbal_margin`; NaN in it, and where missing.

    Raises
    ------
    ShapeError, RotationError : as `joint_angles`.
    """
    rotation = _on_the_right(convention, proximal_from_distal)
    i, j, k, last, parity, proper = _axes(convention.sequence)
    third = _raw_angles(convention.sequence, rotation)[2]
    # The three axes of rotation in the distal frame; the angles' rates are ω in the reciprocal basis.
    first_axis = rotation[..., i, :]
    second_axis = np.zeros_like(first_axis)
    second_axis[..., j] = np.cos(third)
    other, sign = (k, -parity) if proper else (i, parity)
    second_axis[..., other] = sign * np.sin(third)
    third_axis = np.broadcast_to(np.eye(3)[last], first_axis.shape)
    rows = np.stack(
        [
            np.cross(second_axis, third_axis),
            np.cross(third_axis, first_axis),
            np.cross(first_axis, second_axis),
        ],
        axis=-2,
    )
    volume = np.einsum("...i,...i->...", rows[..., 0, :], first_axis)
    volume = np.where(np.abs(volume) < _SINGULAR, np.nan, volume)
    result: FloatArray = convention.angle_signs[:, None] * rows / volume[..., None, None]
    return result * MIRROR_TANGENT_SIGNS[:3] if convention.side == "left" else result


def joint_angle_pose_jacobians(
    convention: JointConvention, lab_from_proximal: ArrayLike, lab_from_distal: ArrayLike
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return joint angles and their derivatives by the two bones' poses.

    Parameters
    ----------
    convention : kind of joint and side
    lab_from_proximal, lab_from_distal : shape (..., 4, 4), rotation unitless, position m
        Leading axes broadcast; missing = NaN.

    Returns
    -------
    angles : shape (..., 3), rad
    by_proximal, by_distal : shape (..., 3, 6), unitless and rad/m
        d angles / dξ for T ← T·Exp(ξ); the translation columns are 0.

    Raises
    ------
    ShapeError, RotationError : as `joint_angles`.
    """
    proximal = rotation_of(check_shape(lab_from_proximal, (4, 4), "lab_from_proximal"))
    distal = rotation_of(check_shape(lab_from_distal, (4, 4), "lab_from_distal"))
    relative: FloatArray = np.swapaxes(proximal, -1, -2) @ distal
    jacobian = angle_jacobian(convention, relative)
    by_distal = np.zeros((*jacobian.shape[:-1], 6))
    by_distal[..., :3] = jacobian
    by_proximal = np.zeros_like(by_distal)
    by_proximal[..., :3] = -jacobian @ np.swapaxes(relative, -1, -2)
    return joint_angles(convention, relative), by_proximal, by_distal


def gimbal_margin(convention: JointConvention, proximal_from_distal: ArrayLike) -> FloatArray:
    """Return how far the joint is from the posture where first and third angle merge.

    Parameters
    ----------
    convention : kind of joint and side
    proximal_from_distal : shape (..., 3, 3), unitless, proximal ← distal

    Returns
    -------
    shape (...), rad: middle angle's distance from ±π/2, or from 0 and π where first and third
    axis are the same; NaN where missing. Below `GIMBAL_WARNING` the angles deserve a warning.

    Raises
    ------
    ShapeError, RotationError : as `joint_angles`.
    """
    second = _raw_angles(convention.sequence, _on_the_right(convention, proximal_from_distal))[1]
    if _axes(convention.sequence)[-1]:
        return np.minimum(second, np.pi - second)
    return np.pi / 2 - np.abs(second)


def mirror_points(points: ArrayLike) -> FloatArray:
    """Mirror points across the sagittal plane, z → −z: shape (..., 3), any unit, frame kept."""
    mirrored: FloatArray = check_shape(points, (3,), "points") * _MIRROR
    return mirrored


def mirror_rotation(rotation: ArrayLike) -> FloatArray:
    """Mirror rotations across the sagittal plane, M R M: shape (..., 3, 3), still right-handed."""
    mirrored: FloatArray = check_shape(rotation, (3, 3), "rotation") * (_MIRROR[:, None] * _MIRROR)
    return mirrored


def mirror_pose(pose: ArrayLike) -> FloatArray:
    """Mirror poses across the sagittal plane, M T M: shape (..., 4, 4), position m."""
    signs = np.append(_MIRROR, 1.0)
    mirrored: FloatArray = check_shape(pose, (4, 4), "pose") * (signs[:, None] * signs)
    return mirrored

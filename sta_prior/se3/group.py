"""Poses: making, inverting, applying, Exp and Log, adjoint.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike
from scipy.spatial.transform import RigidTransform, Rotation

from sta_prior.checks import BoolArray, FloatArray, check_rotation, check_shape


def _missing(array: FloatArray, axis: int | tuple[int, ...]) -> BoolArray:
    """Return where any value over these axes is NaN."""
    return np.asarray(np.isnan(array).any(axis=axis))


def make_pose(rotation: ArrayLike, position: ArrayLike) -> FloatArray:
    """Join rotations and positions into poses.

    Parameters
    ----------
    rotation : shape (..., 3, 3), unitless, lab ← bone
    position : shape (..., 3), m, lab frame
        Of the bone's origin. Leading axes broadcast.

    Returns
    -------
    shape (..., 4, 4), lab ← bone. All NaN where either part has a NaN.

    Raises
    ------
    ShapeError : last axes differ from those above.
    """
    rotation = check_shape(rotation, (3, 3), "rotation")
    position = check_shape(position, (3,), "position")
    leading = np.broadcast_shapes(rotation.shape[:-2], position.shape[:-1])
    pose = np.zeros((*leading, 4, 4))
    pose[..., :3, :3] = rotation
    pose[..., :3, 3] = position
    pose[..., 3, 3] = 1.0
    pose[np.isnan(pose).any(axis=(-2, -1))] = np.nan
    return pose


def rotation_of(pose: FloatArray) -> FloatArray:
    """Return the rotation block of poses, a view: shape (..., 3, 3), lab ← bone."""
    return pose[..., :3, :3]


def position_of(pose: FloatArray) -> FloatArray:
    """Return the position of the bone's origin, a view: shape (..., 3), m, lab frame."""
    return pose[..., :3, 3]


def inverse(pose: ArrayLike) -> FloatArray:
    """Invert poses.

    Parameters
    ----------
    pose : shape (..., 4, 4), rotation unitless, position m, lab ← bone

    Returns
    -------
    shape (..., 4, 4), bone ← lab; NaN where the pose is missing.

    Raises
    ------
    ShapeError : last axes differ from those above.
    """
    pose = check_shape(pose, (4, 4), "pose")
    transposed = np.swapaxes(rotation_of(pose), -1, -2)
    return make_pose(transposed, -np.einsum("...ij,...j->...i", transposed, position_of(pose)))


def transform_points(pose: ArrayLike, points: ArrayLike) -> FloatArray:
    """Map points from the bone frame to the lab frame.

    Parameters
    ----------
    pose : shape (..., 4, 4), rotation unitless, position m, lab ← bone
    points : shape (..., m, 3), m, bone frame

    Returns
    -------
    shape (..., m, 3), m, lab frame. Leading axes broadcast.

    Raises
    ------
    ShapeError : last axes differ from those above.
    """
    pose = check_shape(pose, (4, 4), "pose")
    points = check_shape(points, (None, 3), "points")
    turned: FloatArray = points @ np.swapaxes(rotation_of(pose), -1, -2)
    return turned + position_of(pose)[..., None, :]


def skew(vector: ArrayLike) -> FloatArray:
    """Return the matrix of the cross product: ``skew(a) @ b`` is a × b.

    Parameters
    ----------
    vector : shape (..., 3), any unit and frame

    Returns
    -------
    shape (..., 3, 3), same unit and frame.

    Raises
    ------
    ShapeError : last axis is not 3.
    """
    vector = check_shape(vector, (3,), "vector")
    matrix = np.zeros((*vector.shape, 3))
    matrix[..., 2, 1] = vector[..., 0]
    matrix[..., 0, 2] = vector[..., 1]
    matrix[..., 1, 0] = vector[..., 2]
    matrix -= np.swapaxes(matrix, -1, -2).copy()
    return matrix


def exp(tangent: ArrayLike) -> FloatArray:
    """Return the pose that a tangent vector leads to.

    Parameters
    ----------
    tangent : shape (..., 6), rad and m
        (rx, ry, rz, tx, ty, tz).

    Returns
    -------
    shape (..., 4, 4); all NaN where the tangent has a NaN.

    Raises
    ------
    ShapeError : last axis is not 6.

    Examples
    --------
    >>> exp([0.1, -0.2, 0.3, 1, 2, 3])[:3, 3].round(6).tolist()
    [0.393727, 1.933798, 3.157957]
    """
    tangent = check_shape(tangent, (6,), "tangent")
    missing = _missing(tangent, -1)
    clean = np.where(missing[..., None], 0.0, tangent)
    pose: FloatArray = RigidTransform.from_exp_coords(clean).as_matrix()
    pose[missing] = np.nan
    return pose


def log(pose: ArrayLike) -> FloatArray:
    """Return the tangent vector of a pose, rotation angle at most π: the inverse of `exp`.

    Parameters
    ----------
    pose : shape (..., 4, 4), rotation unitless, position m

    Returns
    -------
    shape (..., 6), rad and m; NaN where the pose is missing.

    Raises
    ------
    ShapeError : last axes differ from those above.
    RotationError : rotation block not orthonormal to 1e-6, or a reflection.
    """
    pose = check_shape(pose, (4, 4), "pose")
    missing = _missing(pose, (-2, -1))
    clean = np.where(missing[..., None, None], np.eye(4), pose)
    # SciPy would orthonormalise a sheared matrix without a word.
    check_rotation(rotation_of(clean), "pose")
    tangent: FloatArray = RigidTransform.from_matrix(clean).as_exp_coords()
    tangent[missing] = np.nan
    return tangent


def rotation_exp(vector: ArrayLike) -> FloatArray:
    """Return the rotation by the angle ‖vector‖ about the vector.

    Parameters
    ----------
    vector : shape (..., 3), rad

    Returns
    -------
    shape (..., 3, 3); NaN where the vector has a NaN.

    Raises
    ------
    ShapeError : last axis is not 3.
    """
    vector = check_shape(vector, (3,), "rotation vector")
    missing = _missing(vector, -1)
    rotation: FloatArray = Rotation.from_rotvec(np.where(missing[..., None], 0.0, vector)).as_matrix()
    rotation[missing] = np.nan
    return rotation


def rotation_log(rotation: ArrayLike) -> FloatArray:
    """Return the rotation vector, angle at most π: the inverse of `rotation_exp`.

    Parameters
    ----------
    rotation : shape (..., 3, 3)

    Returns
    -------
    shape (..., 3), rad; NaN where the rotation has a NaN.

    Raises
    ------
    ShapeError : last axes differ from those above.
    RotationError : not orthonormal to 1e-6, or a reflection.
    """
    rotation = check_shape(rotation, (3, 3), "rotation")
    missing = _missing(rotation, (-2, -1))
    clean = check_rotation(np.where(missing[..., None, None], np.eye(3), rotation))
    vector: FloatArray = Rotation.from_matrix(clean).as_rotvec()
    vector[missing] = np.nan
    return vector


def adjoint(pose: ArrayLike) -> FloatArray:
    """Return Ad(T), with T·Exp(ξ) = Exp(Ad(T) ξ)·T.

    Parameters
    ----------
    pose : shape (..., 4, 4), rotation unitless, position m

    Returns
    -------
    shape (..., 6, 6), blocks [[R, 0], [[p]× R, R]].

    Raises
    ------
    ShapeError : last axes differ from those above.
    """
    pose = check_shape(pose, (4, 4), "pose")
    rotation = rotation_of(pose)
    result = np.zeros((*pose.shape[:-2], 6, 6))
    result[..., :3, :3] = rotation
    result[..., 3:, 3:] = rotation
    result[..., 3:, :3] = skew(position_of(pose)) @ rotation
    return result

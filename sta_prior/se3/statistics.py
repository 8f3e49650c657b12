"""Covariance of poses, mean pose, difference of poses, helical axis.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.spatial.transform import Rotation

from sta_prior.checks import FloatArray, check_rotation, check_shape
from sta_prior.errors import ShapeError, message
from sta_prior.se3.group import adjoint, inverse, log, make_pose, position_of, rotation_log, rotation_of


def _transport(matrix: FloatArray, covariance: FloatArray) -> FloatArray:
    """Return A Σ Aᵀ, exactly symmetric."""
    moved = matrix @ covariance @ np.swapaxes(matrix, -1, -2)
    result: FloatArray = 0.5 * (moved + np.swapaxes(moved, -1, -2))
    return result


def covariance_in_lab(lab_from_bone: ArrayLike, covariance: ArrayLike) -> FloatArray:
    """Restate a pose covariance from the bone frame in the lab frame.

    Parameters
    ----------
    lab_from_bone : shape (..., 4, 4), rotation unitless, position m
        Pose of the bone; maps bone coordinates to lab coordinates.
    covariance : shape (..., 6, 6), blocks rad², rad·m, m², bone frame
        Of (rx, ry, rz, tx, ty, tz) in T ← T·Exp(ξ).

    Returns
    -------
    shape (..., 6, 6), same units, lab axes about the lab origin, T ← Exp(ξ)·T. Leading axes
    broadcast; NaN where the pose is missing.

    Raises
    ------
    ShapeError : last axes differ from those above.
    RotationError : rotation block not orthonormal to 1e-6, or a reflection.

    Notes
    -----
    Exact: Ad(T) Σ Ad(T)ᵀ. Rotation spread appears as translation spread at a lever arm.

    References
    ----------
    Barfoot & Furgale (2014), IEEE Trans. Robotics 30(3), 679–693.

    Examples
    --------
    A 0.01 rad spread about x, for a bone 1 m above the lab origin:

    >>> pose = np.eye(4); pose[2, 3] = 1.0
    >>> spread = np.diag([0.01**2, 0, 0, 0, 0, 0])
    >>> np.sqrt(np.diag(covariance_in_lab(pose, spread))).round(4).tolist()
    [0.01, 0.0, 0.0, 0.0, 0.01, 0.0]
    """
    pose = check_shape(lab_from_bone, (4, 4), "pose")
    check_rotation(rotation_of(pose), "pose")
    return _transport(adjoint(pose), check_shape(covariance, (6, 6), "pose covariance"))


def inverse_covariance(lab_from_bone: ArrayLike, covariance: ArrayLike) -> FloatArray:
    """Return the covariance of the inverse pose, perturbed on its own right.

    Parameters
    ----------
    lab_from_bone : shape (..., 4, 4), rotation unitless, position m
    covariance : shape (..., 6, 6), blocks rad², rad·m, m², of T ← T·Exp(ξ)

    Returns
    -------
    shape (..., 6, 6), of T⁻¹ ← T⁻¹·Exp(ξ).

    Raises
    ------
    ShapeError, RotationError : as `covariance_in_lab`.

    Notes
    -----
    (T·Exp(ξ))⁻¹ = T⁻¹·Exp(−Ad(T) ξ): the same numbers as `covariance_in_lab`, exact.
    """
    return covariance_in_lab(lab_from_bone, covariance)


def compose_covariance(
    first_covariance: ArrayLike, second: ArrayLike, second_covariance: ArrayLike
) -> FloatArray:
    """Return the covariance of the product A·B of two independent poses.

    Parameters
    ----------
    first_covariance : shape (..., 6, 6), blocks rad², rad·m, m², of A ← A·Exp(ξ)
    second : shape (..., 4, 4), rotation unitless, position m
        The pose B. The pose A does not enter.
    second_covariance : shape (..., 6, 6), as the first, of B ← B·Exp(ξ)

    Returns
    -------
    shape (..., 6, 6), of A·B ← A·B·Exp(ξ). Leading axes broadcast.

    Raises
    ------
    ShapeError, RotationError : as `covariance_in_lab`.

    Notes
    -----
    First order: Ad(B⁻¹) Σ_A Ad(B⁻¹)ᵀ + Σ_B; terms of fourth order in the spread are left out.

    References
    ----------
    Barfoot & Furgale (2014), IEEE Trans. Robotics 30(3), 679–693, restated for right perturbations.
    """
    second_covariance = check_shape(second_covariance, (6, 6), "pose covariance")
    return covariance_in_lab(inverse(second), first_covariance) + second_covariance


def mean_pose(poses: ArrayLike) -> FloatArray:
    """Average poses: chordal mean of the rotations, mean of the positions.

    Parameters
    ----------
    poses : shape (n, 4, 4), rotation unitless, position m, lab ← bone
        Missing poses are left out.

    Returns
    -------
    shape (4, 4); all NaN if every pose is missing.

    Raises
    ------
    ShapeError : not of the shape above.
    RotationError : a rotation block not orthonormal to 1e-6, or a reflection.
    """
    poses = check_shape(poses, (None, 4, 4), "poses")
    if poses.ndim != 3:
        raise ShapeError(message("poses", f"expected shape (n, 4, 4), got {poses.shape}"))
    seen = poses[~np.isnan(poses).any(axis=(-2, -1))]
    if not len(seen):
        return np.full((4, 4), np.nan)
    rotations = check_rotation(rotation_of(seen), "poses")
    return make_pose(Rotation.from_matrix(rotations).mean().as_matrix(), position_of(seen).mean(axis=0))


def relative_difference(estimate: ArrayLike, truth: ArrayLike) -> FloatArray:
    """Return how far an estimated pose is from the truth, along the true bone's axes.

    Parameters
    ----------
    estimate, truth : shape (..., 4, 4), rotation unitless, position m, lab ← bone
        Leading axes broadcast.

    Returns
    -------
    shape (..., 6), rad and m: Log(truth⁻¹·estimate); NaN where either is missing.

    Raises
    ------
    ShapeError, RotationError : as `log`.
    """
    return log(inverse(truth) @ check_shape(estimate, (4, 4), "estimate"))


@dataclass(frozen=True)
class HelicalAxis:
    """A finite displacement as a turn about a line and a slide along it.

    Attributes
    ----------
    angle : shape (...), rad, 0 … π
    axis : shape (..., 3), unit vector; NaN where the angle is 0
    point : shape (..., 3), m; the point of the line that is nearest to the origin
    translation : shape (...), m; slide along the axis
    """

    angle: FloatArray
    axis: FloatArray
    point: FloatArray
    translation: FloatArray


def helical_axis(rotation: ArrayLike, position: ArrayLike) -> HelicalAxis:
    """Return the helical axis of the displacement x ↦ R x + t.

    Parameters
    ----------
    rotation : shape (..., 3, 3), unitless
    position : shape (..., 3), m
        The translation t, in the frame the axis is wanted in. Leading axes broadcast.

    Returns
    -------
    HelicalAxis; axis, point and translation are NaN where the angle is 0.

    Raises
    ------
    ShapeError, RotationError : as `rotation_log`.

    Notes
    -----
    t = (I − R) c + τ n, τ = nᵀt, c = ½ (t − τ n) + n × t / (2 tan(θ/2)). The direction is
    worth little at small angles: see `helical_axis_direction_sd`.

    References
    ----------
    Woltring, Huiskes, de Lange & Veldpaus (1985), J. Biomechanics 18, 379–389.
    """
    vector = rotation_log(rotation)
    position = check_shape(position, (3,), "position")
    vector, position = np.broadcast_arrays(vector, position)
    angle = np.linalg.norm(vector, axis=-1)
    turned = np.where(angle > 0, angle, np.nan)[..., None]
    axis = vector / turned
    along = np.einsum("...i,...i->...", axis, position)
    across = position - along[..., None] * axis
    point = across / 2 + np.cross(axis, position) / (2 * np.tan(turned / 2))
    return HelicalAxis(angle=angle, axis=axis, point=point, translation=along)


def helical_axis_direction_sd(angle: ArrayLike, angle_sd: ArrayLike) -> FloatArray:
    """Return the SD of each of the two components across a helical axis's direction.

    Parameters
    ----------
    angle : shape (...), rad
        Of the displacement.
    angle_sd : shape (...), rad
        SD of the rotation error about any axis (isotropic).

    Returns
    -------
    shape (...), rad; infinite at angle 0.

    Notes
    -----
    angle_sd / (2 sin(angle/2)).

    References
    ----------
    Woltring, Huiskes, de Lange & Veldpaus (1985), J. Biomechanics 18, 379–389.
    """
    half = np.sin(np.asarray(angle, dtype=np.float64) / 2)
    spread = np.asarray(angle_sd, dtype=np.float64)
    result: FloatArray = np.where(half > 0, spread / (2 * np.where(half > 0, half, 1.0)), np.inf)
    return result

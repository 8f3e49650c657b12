"""Least-squares rigid fit of marker clusters, and the split of displacement into rigid part and deformation.

Everything is batched over leading axes: frames, subjects. A hidden marker is NaN.
Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from sta_prior.checks import BoolArray, FloatArray, check_finite, check_shape
from sta_prior.errors import NotDeterminedError, ShapeError, message
from sta_prior.gaussian import symmetrise
from sta_prior.se3 import make_pose, skew

# Common practice, no source: below this, a turn about the line through the markers is
# some fifty times less certain than a turn across it.
MINIMUM_LINE_RATIO = 0.02
# A direction whose part outside the modes already chosen is smaller than this is a repetition.
_REPETITION = 1e-9


@dataclass(frozen=True)
class RigidFit:
    """Frame-wise rigid fit of one cluster.

    Attributes
    ----------
    pose : shape (..., 4, 4), rotation unitless, position m, lab ← bone
        NaN where not determined.
    residual : shape (..., m, 3), m, lab frame
        Measured minus fitted; NaN where hidden or not determined. Small residuals say
        nothing about the accuracy of the pose.
    unit_covariance : shape (..., 6, 6), blocks rad²/m², rad/m, 1, bone axes
        (JᵀJ)⁻¹: multiply by the marker variance in m². Of ξ in T ← T·Exp(ξ).
    spread : shape (...), m
        √(SSR/(3n − 6)), n markers seen: the marker SD if errors were independent and isotropic.
    determined : shape (...), bool
    line_ratio : shape (...), unitless
        Extent of the cluster across its longest line over the extent along it; 0 on a line.
    """

    pose: FloatArray
    residual: FloatArray
    unit_covariance: FloatArray
    spread: FloatArray
    determined: BoolArray
    line_ratio: FloatArray


def _pair(reference: ArrayLike, other: ArrayLike, name: str) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Broadcast reference and points to one shape; hidden markers become 0, with weight 0."""
    reference = check_shape(reference, (None, 3), "reference")
    other = check_shape(other, (None, 3), name)
    if reference.shape[-2] != other.shape[-2]:
        raise ShapeError(
            message(
                name, f"expected {reference.shape[-2]} markers as in the reference, got {other.shape[-2]}"
            )
        )
    for array, label in ((reference, "reference"), (other, name)):
        if np.isinf(array).any():
            check_finite(np.where(np.isnan(array), 0.0, array), label)
    shape = np.broadcast_shapes(reference.shape, other.shape)
    reference, other = np.broadcast_to(reference, shape), np.broadcast_to(other, shape)
    seen = ~(np.isnan(reference).any(axis=-1) | np.isnan(other).any(axis=-1))
    mask = seen[..., None]
    return np.where(mask, reference, 0.0), np.where(mask, other, 0.0), seen.astype(np.float64)


def _centre(points: FloatArray, weight: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the mean of the markers seen, and the markers about it (0 where hidden)."""
    count = np.maximum(weight.sum(axis=-1), 1.0)
    mean = points.sum(axis=-2) / count[..., None]
    return mean, (points - mean[..., None, :]) * weight[..., None]


def _unit_covariance(
    mean: FloatArray, centred: FloatArray, weight: FloatArray, determined: BoolArray
) -> FloatArray:
    """Return (JᵀJ)⁻¹ in closed form from the 3×3 rotation information about the centroid."""
    outer = np.swapaxes(centred, -1, -2) @ centred
    information = np.trace(outer, axis1=-2, axis2=-1)[..., None, None] * np.eye(3) - outer
    information = np.where(determined[..., None, None], information, np.eye(3))
    rotation = symmetrise(np.linalg.solve(information, np.eye(3)))
    # The origin moves by the centroid's error plus the turn about the centroid: t = c + [p̄]× θ.
    lever = skew(mean)
    count = np.maximum(weight.sum(axis=-1), 1.0)[..., None, None]
    cross = lever @ rotation
    covariance = np.empty((*determined.shape, 6, 6))
    covariance[..., :3, :3] = rotation
    covariance[..., 3:, :3] = cross
    covariance[..., :3, 3:] = np.swapaxes(cross, -1, -2)
    covariance[..., 3:, 3:] = symmetrise(np.eye(3) / count + cross @ np.swapaxes(lever, -1, -2))
    covariance[~determined] = np.nan
    return covariance


def _line_ratio(singular: FloatArray, sign: FloatArray | float = 1.0) -> FloatArray:
    """Return √((s₂ + s₃)/s₁) of second moments, 0 for a point or nothing."""
    across = np.maximum(singular[..., 1] + sign * singular[..., 2], 0.0)
    along = singular[..., 0]
    positive = along > 0
    ratio: FloatArray = np.sqrt(np.where(positive, across / np.where(positive, along, 1.0), 0.0))
    return ratio


def fit_rigid(
    reference: ArrayLike, points: ArrayLike, minimum_line_ratio: float = MINIMUM_LINE_RATIO
) -> RigidFit:
    """Fit the pose that carries a reference cluster onto measured markers, frame by frame.

    Parameters
    ----------
    reference : shape (..., m, 3), m, bone frame
        Reference positions of the markers; NaN = unknown.
    points : shape (..., m, 3), m, lab frame
        Measured positions; NaN = hidden. Leading axes broadcast.
    minimum_line_ratio : unitless
        Clusters nearer to a line than this are reported as not determined.

    Returns
    -------
    RigidFit. With fewer than three markers seen, or markers near a line, `determined` is
    False and the rest NaN; this never raises.

    Raises
    ------
    ShapeError : last axes differ from those above, another number of markers, or an
        infinite value.

    Notes
    -----
    With a, b the centred reference and measurement, Σ b aᵀ = U S Vᵀ,
    R = U diag(1, 1, det(U Vᵀ)) Vᵀ: a rotation also where the cluster is mirrored.

    References
    ----------
    Söderkvist & Wedin (1993), J. Biomechanics 26, 1473–1477,
    doi 10.1016/0021-9290(93)90098-Y.

    Examples
    --------
    >>> square = np.array([[50, 50, 0], [-50, 50, 0], [-50, -50, 0], [50, -50, 0]]) / 1000
    >>> fit = fit_rigid(square, square + [0.1, 0.0, 0.0])
    >>> fit.pose[:3, 3].round(6).tolist()
    [0.1, 0.0, 0.0]

    Rotation SD in degrees for markers of 1 mm SD:

    >>> np.rad2deg(1e-3 * np.sqrt(np.diag(fit.unit_covariance))[:3]).round(5).tolist()
    [0.57296, 0.57296, 0.40514]
    """
    source, target, weight = _pair(reference, points, "points")
    source_mean, source_centred = _centre(source, weight)
    target_mean, target_centred = _centre(target, weight)
    left, singular, right = np.linalg.svd(np.swapaxes(target_centred, -1, -2) @ source_centred)
    sign = np.where(np.linalg.det(left) * np.linalg.det(right) < 0, -1.0, 1.0)
    # A turn is fixed by the moments that remain after the determinant guard.
    ratio = _line_ratio(singular, sign)
    count = weight.sum(axis=-1)
    determined = np.asarray((count >= 3) & (ratio >= minimum_line_ratio) & (singular[..., 0] > 0))
    left[..., :, 2] *= sign[..., None]
    rotation = left @ right
    position = target_mean - np.einsum("...ij,...j->...i", rotation, source_mean)
    fitted = source_centred @ np.swapaxes(rotation, -1, -2)
    error = target_centred - fitted
    spread = np.sqrt(np.einsum("...ij,...ij->...", error, error) / np.maximum(3 * count - 6, 1.0))
    pose = make_pose(rotation, position)
    pose[~determined] = np.nan
    error[~(determined[..., None] & (weight > 0))] = np.nan
    return RigidFit(
        pose=pose,
        residual=error,
        unit_covariance=_unit_covariance(source_mean, source_centred, weight, determined),
        spread=np.where(determined, spread, np.nan),
        determined=determined,
        line_ratio=ratio,
    )


def marker_jacobian(points_bone: ArrayLike) -> FloatArray:
    """Return the derivative of marker positions by the pose, in the bone's axes.

    Parameters
    ----------
    points_bone : shape (..., m, 3), m, bone frame

    Returns
    -------
    shape (..., 3m, 6), m/rad and unitless: R⁻¹ d(T·p)/dξ for T ← T·Exp(ξ), rows marker by
    marker, each [−[p]×, I].

    Raises
    ------
    ShapeError : last axes differ from those above.
    """
    points = check_shape(points_bone, (None, 3), "points")
    jacobian = np.empty((*points.shape, 6))
    jacobian[..., :3] = -skew(points)
    jacobian[..., 3:] = np.eye(3)
    return jacobian.reshape(*points.shape[:-2], 3 * points.shape[-2], 6)


def rigid_part(reference: ArrayLike, displacement: ArrayLike) -> FloatArray:
    """Return the small rigid motion that fits a displacement field best.

    Parameters
    ----------
    reference : shape (..., m, 3), m, bone frame
    displacement : shape (..., m, 3), m, bone frame
        Of each marker from its reference; NaN = hidden. Leading axes broadcast.

    Returns
    -------
    shape (..., 6), rad and m: least squares on J of `marker_jacobian`; NaN where fewer than
    three markers are seen or they are near a line.

    Raises
    ------
    ShapeError : last axes differ from those above, or another number of markers.

    Notes
    -----
    The rigid part is defined by projection on J, not by splitting a field into symmetric
    and skew parts: a symmetric stretch may well turn the fitted cluster.
    """
    source, moved, weight = _pair(reference, displacement, "displacement")
    mean, centred = _centre(source, weight)
    shift = moved.sum(axis=-2) / np.maximum(weight.sum(axis=-1), 1.0)[..., None]
    outer = np.swapaxes(centred, -1, -2) @ centred
    ratio = _line_ratio(np.asarray(np.linalg.eigvalsh(outer), dtype=np.float64)[..., ::-1])
    determined = np.asarray((weight.sum(axis=-1) >= 3) & (ratio >= MINIMUM_LINE_RATIO))[..., None]
    information = np.trace(outer, axis1=-2, axis2=-1)[..., None, None] * np.eye(3) - outer
    information = np.where(determined[..., None], information, np.eye(3))
    moment = np.cross(centred, moved).sum(axis=-2)
    turn = np.linalg.solve(information, moment[..., None])[..., 0]
    result = np.concatenate([turn, shift - np.cross(turn, mean)], axis=-1)
    return np.where(determined, result, np.nan)


def deformation_part(reference: ArrayLike, displacement: ArrayLike) -> FloatArray:
    """Return what is left of a displacement field without its `rigid_part`.

    Parameters
    ----------
    reference, displacement : shape (..., m, 3), m, bone frame; as `rigid_part`

    Returns
    -------
    shape (..., m, 3), m, bone frame; NaN where hidden or not determined.

    Raises
    ------
    ShapeError : as `rigid_part`.
    """
    reference = np.asarray(reference, dtype=np.float64)
    displacement = np.asarray(displacement, dtype=np.float64)
    motion = rigid_part(reference, displacement)[..., None, :]
    return displacement - np.cross(motion[..., :3], reference) - motion[..., 3:]


def rigid_subspace(reference: ArrayLike) -> FloatArray:
    """Return an orthonormal basis of the displacements that a rigid motion can make.

    Parameters
    ----------
    reference : shape (m, 3), m, bone frame

    Returns
    -------
    shape (3m, 6), unitless: the first six columns of `deformation_modes`.

    Raises
    ------
    ShapeError, NotDeterminedError : as `deformation_modes`.
    """
    return deformation_modes(reference).modes[:, :6]


@dataclass(frozen=True)
class DeformationModes:
    """Orthonormal modes of a cluster's displacement.

    Attributes
    ----------
    names : 3m names: translation_x … z, rotation_x … z, homothety, stretch_x …, residual_1 …
    modes : shape (3m, 3m), unitless
        One mode a column, rows marker by marker; the first six span the rigid motions.
    """

    names: tuple[str, ...]
    modes: FloatArray


def deformation_modes(reference: ArrayLike) -> DeformationModes:
    """Return modes of displacement: translations, rotations, homothety, stretches, rest.

    Parameters
    ----------
    reference : shape (m, 3), m, bone frame
        Three or more markers, not near a line.

    Returns
    -------
    DeformationModes. Each mode is made orthogonal to those before it, and left out where it
    repeats them: of the stretches along x, y, z one always follows from the homothety.

    Raises
    ------
    ShapeError : not of the shape above, or not finite.
    NotDeterminedError : fewer than three markers, or markers near a line.

    References
    ----------
    Dumas, Camomilla, Bonci, Chèze & Cappozzo (2014), J. Biomechanics 47, 476–481,
    doi 10.1016/j.jbiomech.2013.10.034.
    """
    reference = check_finite(check_shape(reference, (None, 3), "reference"), "reference")
    if reference.ndim != 2:
        raise ShapeError(message("reference", f"expected shape (m, 3), got {reference.shape}"))
    count = len(reference)
    centred = reference - reference.mean(axis=0)
    moments = np.asarray(np.linalg.eigvalsh(centred.T @ centred)[::-1], dtype=np.float64)
    ratio = float(_line_ratio(moments)) if count >= 3 else 0.0
    if count < 3 or ratio < MINIMUM_LINE_RATIO:
        raise NotDeterminedError(
            message(
                "reference",
                f"{count} markers with line ratio {ratio:.2g}, expected at least 3 markers and "
                f"{MINIMUM_LINE_RATIO:g}",
                "Add a marker away from the line.",
            )
        )
    axes = "xyz"
    wanted = [(f"translation_{axes[k]}", np.tile(np.eye(3)[k], (count, 1))) for k in range(3)]
    wanted += [(f"rotation_{axes[k]}", np.cross(np.eye(3)[k], centred)) for k in range(3)]
    wanted += [("homothety", centred)]
    wanted += [(f"stretch_{axes[k]}", centred * np.eye(3)[k]) for k in range(3)]
    size = np.linalg.norm(centred)
    names: list[str] = []
    columns = np.empty((3 * count, 0))
    for name, field in wanted:
        column = field.ravel() / (size if not name.startswith("translation") else 1.0)
        for _ in range(2):  # the second pass removes what rounding left of the first
            column = column - columns @ (columns.T @ column)
        length = np.linalg.norm(column)
        if length > _REPETITION:
            names.append(name)
            columns = np.column_stack([columns, column / length])
    rest = np.linalg.svd(columns)[0][:, columns.shape[1] :]
    # The sign of a residual mode is free; make its largest entry positive.
    largest = np.abs(rest).argmax(axis=0) if rest.size else np.zeros(0, dtype=np.intp)
    rest = rest * np.sign(rest[largest, np.arange(rest.shape[1])])
    names += [f"residual_{k + 1}" for k in range(rest.shape[1])]
    return DeformationModes(names=tuple(names), modes=np.column_stack([columns, rest]))

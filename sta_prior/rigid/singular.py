"""Rigid fit by singular values: right for every cluster, and the measure of the compiled fit.

Kernel: arrays in, arrays out, batched over leading axes. Conventions: docs/conventions.md.

References
----------
Söderkvist & Wedin (1993), J. Biomechanics 26, 1473–1477, doi 10.1016/0021-9290(93)90098-Y.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from sta_prior.checks import BoolArray, FloatArray, check_finite, check_shape
from sta_prior.errors import ShapeError, message
from sta_prior.gaussian import symmetrise
from sta_prior.se3 import make_pose, skew

# Common practice, no source: below this, a turn about the line through the markers is
# some fifty times less certain than a turn across it.
MINIMUM_LINE_RATIO = 0.02


class Fitted(NamedTuple):
    """What a fit gives, as in `sta_prior.rigid.RigidFit`."""

    pose: FloatArray
    residual: FloatArray
    unit_covariance: FloatArray
    spread: FloatArray
    determined: BoolArray
    line_ratio: FloatArray


def check_pair(reference: ArrayLike, other: ArrayLike, name: str) -> tuple[FloatArray, FloatArray]:
    """Return reference and points, shapes (..., m, 3), or raise ShapeError; an infinite value may be left."""
    reference = check_shape(reference, (None, 3), "reference")
    other = check_shape(other, (None, 3), name)
    if reference.shape[-2] != other.shape[-2]:
        raise ShapeError(
            message(
                name, f"expected {reference.shape[-2]} markers as in the reference, got {other.shape[-2]}"
            )
        )
    return reference, other


def refuse_infinite(reference: FloatArray, other: FloatArray, name: str) -> None:
    """Raise ShapeError naming the first infinite value, if there is one."""
    for array, label in ((reference, "reference"), (other, name)):
        if np.isinf(array).any():
            check_finite(np.where(np.isnan(array), 0.0, array), label)


def pair(reference: ArrayLike, other: ArrayLike, name: str) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Broadcast reference and points to one shape; hidden markers become 0, with weight 0."""
    reference, other = check_pair(reference, other, name)
    refuse_infinite(reference, other, name)
    shape = np.broadcast_shapes(reference.shape, other.shape)
    reference, other = np.broadcast_to(reference, shape), np.broadcast_to(other, shape)
    seen = ~(np.isnan(reference).any(axis=-1) | np.isnan(other).any(axis=-1))
    mask = seen[..., None]
    return np.where(mask, reference, 0.0), np.where(mask, other, 0.0), seen.astype(np.float64)


def centre(points: FloatArray, weight: FloatArray) -> tuple[FloatArray, FloatArray]:
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


def line_ratio(singular: FloatArray, sign: FloatArray | float = 1.0) -> FloatArray:
    """Return √((s₂ + s₃)/s₁) of second moments, 0 for a point or nothing."""
    across = np.maximum(singular[..., 1] + sign * singular[..., 2], 0.0)
    along = singular[..., 0]
    positive = along > 0
    ratio: FloatArray = np.sqrt(np.where(positive, across / np.where(positive, along, 1.0), 0.0))
    return ratio


def fit_singular(reference: ArrayLike, points: ArrayLike, minimum_line_ratio: float) -> Fitted:
    """Fit by singular values; arguments, result and errors as `sta_prior.rigid.fit_rigid`."""
    source, target, weight = pair(reference, points, "points")
    source_mean, source_centred = centre(source, weight)
    target_mean, target_centred = centre(target, weight)
    left, singular, right = np.linalg.svd(np.swapaxes(target_centred, -1, -2) @ source_centred)
    sign = np.where(np.linalg.det(left) * np.linalg.det(right) < 0, -1.0, 1.0)
    # A turn is fixed by the moments that remain after the determinant guard.
    ratio = line_ratio(singular, sign)
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
    return Fitted(
        pose=pose,
        residual=error,
        unit_covariance=_unit_covariance(source_mean, source_centred, weight, determined),
        spread=np.where(determined, spread, np.nan),
        determined=determined,
        line_ratio=ratio,
    )

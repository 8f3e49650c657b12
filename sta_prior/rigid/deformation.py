"""Small rigid motion of a cluster, and the split of its displacement into rigid part and deformation.

Kernel: everything is batched over leading axes. A hidden marker is NaN. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from sta_prior.checks import FloatArray, check_finite, check_shape
from sta_prior.errors import NotDeterminedError, ShapeError, message
from sta_prior.rigid.singular import MINIMUM_LINE_RATIO, centre, line_ratio, pair
from sta_prior.se3 import skew

# A direction whose part outside the modes already chosen is smaller than this is a repetition.
_REPETITION = 1e-9


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
    source, moved, weight = pair(reference, displacement, "displacement")
    mean, centred = centre(source, weight)
    shift = moved.sum(axis=-2) / np.maximum(weight.sum(axis=-1), 1.0)[..., None]
    outer = np.swapaxes(centred, -1, -2) @ centred
    ratio = line_ratio(np.asarray(np.linalg.eigvalsh(outer), dtype=np.float64)[..., ::-1])
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
    ratio = float(line_ratio(moments)) if count >= 3 else 0.0
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

"""Validators shared by all layers: each returns the clean array or raises.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sta_prior.errors import CovarianceError, RotationError, ShapeError, message

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

ROTATION_TOLERANCE = 1e-6


def check_shape(array: ArrayLike, core: tuple[int | None, ...], name: str) -> FloatArray:
    """Return the array as float64 once its last axes have the sizes asked for.

    Parameters
    ----------
    array : shape (..., *core)
    core : sizes of the last axes; None accepts any size
    name : how the message calls the array

    Raises
    ------
    ShapeError : fewer axes, or other sizes.
    """
    clean = np.asarray(array, dtype=np.float64)
    tail = clean.shape[clean.ndim - len(core) :] if clean.ndim >= len(core) else None
    if tail is None or any(want is not None and want != got for want, got in zip(core, tail, strict=True)):
        wanted = ", ".join("n" if size is None else str(size) for size in core)
        raise ShapeError(message(name, f"expected shape (..., {wanted}), got {clean.shape}"))
    return clean


def check_finite(array: FloatArray, name: str) -> FloatArray:
    """Return the array if no value is NaN or infinite; raise ShapeError naming the first one."""
    bad = ~np.isfinite(array)
    if bad.any():
        where = tuple(int(i) for i in np.argwhere(bad)[0])
        raise ShapeError(message(name, f"value at {where} is {array[where]}, expected a finite number"))
    return array


def check_rotation(
    rotation: ArrayLike, name: str = "rotation", tolerance: float = ROTATION_TOLERANCE
) -> FloatArray:
    """Return the rotation matrices if each is orthonormal and right-handed.

    Parameters
    ----------
    rotation : shape (..., 3, 3), unitless; a matrix whose nine entries are NaN is
        missing and passes
    name : how the message calls it
    tolerance : largest entry of RᵀR − I that passes

    Raises
    ------
    ShapeError, RotationError : with the index of the first bad matrix.
    """
    clean = check_shape(rotation, (3, 3), name)
    missing = np.asarray(np.isnan(clean).all(axis=(-2, -1)))
    gram = np.einsum("...ji,...jk->...ik", clean, clean) - np.eye(3)
    worst = np.abs(gram).max(axis=(-2, -1))
    bad = np.asarray(~missing & ~(worst <= tolerance))
    if bad.any():
        where = tuple(int(i) for i in np.argwhere(bad)[0]) if bad.ndim else ()
        raise RotationError(
            message(
                (name, f"index {where}" if where else None),
                f"not orthonormal, RᵀR differs from 1 by {float(worst[where]):.3g}, "
                f"expected at most {tolerance:.1g}",
                "A sheared or scaled matrix is not a pose.",
            )
        )
    determinant = np.linalg.det(np.where(missing[..., None, None], np.eye(3), clean))
    reflected = np.asarray(~missing & (determinant < 0))
    if reflected.any():
        where = tuple(int(i) for i in np.argwhere(reflected)[0]) if reflected.ndim else ()
        raise RotationError(
            message(
                (name, f"index {where}" if where else None),
                "a reflection, expected determinant +1, got −1",
                "Check the order and the sign of its axes.",
            )
        )
    return clean


def check_covariance(covariance: ArrayLike, size: int, name: str = "covariance") -> FloatArray:
    """Return symmetric positive semi-definite matrices, shape (..., size, size); else CovarianceError."""
    clean = check_finite(check_shape(covariance, (size, size), name), name)
    scale = np.abs(clean).max(initial=0.0)
    if scale > 0 and np.abs(clean - np.swapaxes(clean, -1, -2)).max() > 1e-8 * scale:
        raise CovarianceError(message(name, "not symmetric"))
    lowest = float(np.linalg.eigvalsh(clean).min(initial=0.0))
    if lowest < -1e-8 * scale:
        raise CovarianceError(message(name, f"smallest eigenvalue is {lowest:.3g}, expected at least 0"))
    return clean


def nearest(word: str, known: Iterable[str]) -> str:
    """Return ' Did you mean …?' for the known word most like this one, or an empty text."""
    close = difflib.get_close_matches(word, list(known), n=1, cutoff=0.5)
    return f"Did you mean {close[0]}?" if close else ""

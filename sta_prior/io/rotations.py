"""Rotations as files hold them: rounded to some digits, and to be named by time and segment.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
import xarray as xr

from sta_prior.checks import BoolArray, FloatArray, check_rotation
from sta_prior.errors import InputError, RotationError
from sta_prior.io.points import AXES

ROUNDING_TOLERANCE = 1e-3


def check_table_rotations(
    rotation: FloatArray,
    time: FloatArray,
    segments: Sequence[str],
    place: str | Path | tuple[object, ...],
) -> FloatArray:
    """Check each rotation of a table and remove the rounding of its digits.

    Parameters
    ----------
    rotation : shape (time, segment, 3, 3), unitless, all NaN where missing
    time : shape (time,), s
    segments : names
    place : the file

    Returns
    -------
    shape (time, segment, 3, 3); the nearest rotations in the least-squares sense, NaN kept.

    Raises
    ------
    InputError : RᵀR differs from 1 by more than 1e-3 (the rounding of three decimals), or a reflection;
        names file, time and segment of the first one.
    """
    parts = place if isinstance(place, tuple) else (place,)
    missing: BoolArray = np.asarray(np.isnan(rotation).all(axis=(-2, -1)))
    gram = np.einsum("...ji,...jk->...ik", rotation, rotation) - np.eye(3)
    whole = np.where(missing[..., None, None], np.eye(3), rotation)
    bad = ~missing & (~(np.abs(gram).max(axis=(-2, -1)) <= ROUNDING_TOLERANCE) | ~(np.linalg.det(whole) > 0))
    if bad.any():
        row, column = (int(i) for i in np.argwhere(bad)[0])
        where = (*parts, f"time {time[row]:g}", f"segment {segments[column]}")
        try:
            check_rotation(rotation[row, column], ", ".join(map(str, where)), ROUNDING_TOLERANCE)
        except RotationError as error:
            raise InputError(str(error)) from None
    left, _, right = np.linalg.svd(whole)
    return np.where(missing[..., None, None], np.nan, left @ right)


def poses_dataset(
    rotation: FloatArray,
    position: FloatArray,
    time: FloatArray,
    segments: Sequence[str],
    attributes: Mapping[str, object],
) -> xr.Dataset:
    """Put poses into a Dataset.

    Parameters
    ----------
    rotation : shape (time, segment, 3, 3), unitless, lab ← bone, NaN where missing
    position : shape (time, segment, 3), m, lab frame, NaN where missing
    time : shape (time,), s
    segments : names
    attributes : of the Dataset

    Returns
    -------
    Dataset with dims time, segment, row, col, axis.
    """
    return xr.Dataset(
        {
            "rotation": (("time", "segment", "row", "col"), rotation, {"units": "1"}),
            "position": (("time", "segment", "axis"), position, {"units": "m"}),
        },
        coords={
            "time": ("time", time, {"units": "s"}),
            "segment": ("segment", np.array(segments, dtype=str)),
            "row": ("row", list(AXES)),
            "col": ("col", list(AXES)),
            "axis": ("axis", list(AXES)),
        },
        attrs=dict(attributes),
    )

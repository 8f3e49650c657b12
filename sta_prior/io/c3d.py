"""C3D files in and out, all three byte orders and both number formats.

Points are decoded here from the bytes; tests hold the result against two independent libraries.
Neither of those can be the reader: they take the word FFFF hex of an unseen point for a seen one at
the lab's origin, one exchanges residual and camera mask, stops at 65535 frames and refuses
big-endian files, and both lose the reliability of rotations.

References
----------
The C3D file format user guide (C3D.org): point data, residual sign, 2019 rotation extension.
"""

from __future__ import annotations

import math
import struct
import warnings
from pathlib import Path

import numpy as np
import xarray as xr

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.errors import InputError, StaPriorWarning, message
from sta_prior.io.c3d_format import (
    BIG_ENDIAN,
    C3dContent,
    decode_floats,
    order,
    parse_c3d,
)
from sta_prior.io.c3d_write import copy_with_rotations, write_c3d
from sta_prior.io.points import AXES, Event, check_extent, check_unique, metres_per_unit, points_dataset
from sta_prior.io.rotations import check_table_rotations

__all__ = ["copy_with_rotations", "read_c3d", "read_c3d_rotations", "write_c3d"]

ROTATION_FLOATS = 17
EVENT_KEY = 12345


def read_c3d(path: str | Path) -> xr.Dataset:
    """Read the points of a C3D file.

    Parameters
    ----------
    path : the file

    Returns
    -------
    Points Dataset: dims time, point, axis; `position` m, lab frame, NaN occluded; `residual` m, 0 where
    the point was calculated, NaN where occluded; time s, 0 at the first stored frame; attributes rate
    (Hz), source, units_declared and events (JSON text, a list of [label, time s, context]).

    Raises
    ------
    InputError : empty, truncated or foreign file, unknown unit, a label twice, nothing seen, or a cloud of
        points whose size contradicts the declared unit.

    Warns
    -----
    StaPriorWarning : no unit declared (mm is taken); more data than the declared frames.

    Notes
    -----
    A negative residual word or a NaN is an occluded point, whatever its coordinates; 0 is kept.
    """
    layout = parse_c3d(path)
    unit, factor = _declared_unit(layout)
    position, residual = _decode_points(layout)
    labels = _point_labels(layout)
    seen: BoolArray = np.asarray(np.isfinite(position[..., 0]).any(axis=0))
    kept = _without_unseen_twins(labels, seen)
    labels = [labels[number] for number in kept]
    check_unique(labels, layout.path, "label")
    position, residual = position[:, kept], residual[:, kept]
    if not np.isfinite(position).any():
        raise InputError(
            message(
                layout.path, f"none of its {layout.points} points is seen in any frame", "Export it again."
            )
        )
    position *= factor
    check_extent(position, unit, layout.path)
    return points_dataset(
        position,
        residual * factor,
        np.arange(layout.frames) / layout.rate,
        labels,
        rate=layout.rate,
        source=layout.path.name,
        units_declared=unit,
        events=_events(layout),
    )


def _declared_unit(layout: C3dContent) -> tuple[str, float]:
    """Return the unit of the points and its size in metres."""
    units = [unit for unit in layout.texts("POINT:UNITS") if unit]
    if not units:
        warnings.warn(
            message(layout.path, "POINT:UNITS is missing, mm is taken", "State the unit when you export."),
            StaPriorWarning,
            stacklevel=3,
        )
        return "mm", metres_per_unit("mm", layout.path)
    return units[0], metres_per_unit(units[0], (layout.path, "POINT:UNITS"))


def _point_labels(layout: C3dContent) -> list[str]:
    """Return one label a point; a point without one is called unlabelled_<number>."""
    labels = layout.all_texts("POINT:LABELS")[: layout.points]
    labels += [""] * (layout.points - len(labels))
    return [label or f"unlabelled_{number}" for number, label in enumerate(labels, start=1)]


def _without_unseen_twins(labels: list[str], seen: BoolArray) -> list[int]:
    """Return which points to keep: of those that share a label, the ones never seen go (but one stays)."""
    kept: list[int] = []
    for number, label in enumerate(labels):
        twins = [other for other, name in enumerate(labels) if name == label]
        visible = [other for other in twins if seen[other]] or twins[:1]
        if number in visible:
            kept.append(number)
    return kept


def _decode_points(layout: C3dContent) -> tuple[FloatArray, FloatArray]:
    """Return position (time, point, 3) and residual (time, point) in the file's unit, NaN where occluded."""
    size = layout.frames * layout.frame_size
    content = layout.content[layout.data_start : layout.data_start + size]
    if layout.scale < 0:
        words = decode_floats(content, layout.processor)
    else:
        words = np.frombuffer(content, ">i2" if layout.processor == BIG_ENDIAN else "<i2").astype(np.float64)
    words = words.reshape(layout.frames, -1)[:, : 4 * layout.points].reshape(layout.frames, layout.points, 4)
    position = words[..., :3] * (layout.scale if layout.scale > 0 else 1.0)
    occluded, residual = _decode_residual(words[..., 3])
    occluded |= ~np.isfinite(position).all(axis=-1)
    position[occluded] = np.nan
    residual[occluded] = np.nan
    return position, residual * abs(layout.scale)


def _decode_residual(word: FloatArray) -> tuple[BoolArray, FloatArray]:
    """Split the fourth word: the sign bit of its 16 bits says occluded, the low byte is the residual.

    Float files hold the word as a number; some write FFFF hex as 65535 instead of −1.
    """
    finite = np.isfinite(word) & (np.abs(word) <= 65536)
    whole = np.where(finite, word, -1.0).astype(np.int64)
    occluded: BoolArray = ~finite | (word < 0) | ((whole & 0x8000) != 0)
    return occluded, (whole & 0xFF).astype(np.float64)


def _events(layout: C3dContent) -> list[Event]:
    """Return the events on the clock whose 0 is the first stored frame; the file counts from frame 1."""
    shift = (layout.first_frame - 1) / layout.rate
    times = layout.numbers("EVENT:TIMES")
    used = layout.number("EVENT:USED")
    if times is not None and used is not None:
        clock = times[: len(times) // 2 * 2].reshape(-1, 2) @ (60.0, 1.0)
        labels, contexts = layout.all_texts("EVENT:LABELS"), layout.all_texts("EVENT:CONTEXTS")
        count = min(int(used), len(clock))
        labels += [""] * (count - len(labels))
        contexts += [""] * (count - len(contexts))
        return [Event(labels[i], float(clock[i] - shift), contexts[i]) for i in range(count)]
    key, count = struct.unpack_from(order(layout.processor) + "2H", layout.content, 298)
    if key != EVENT_KEY or count > 18:
        return []
    clock = decode_floats(layout.content[304:376], layout.processor)
    names = [layout.content[396 + 4 * i : 400 + 4 * i].decode("latin-1").strip("\0 ") for i in range(count)]
    return [Event(name, float(clock[i] - shift), "") for i, name in enumerate(names)]


def read_c3d_rotations(path: str | Path) -> xr.Dataset:
    """Read the ROTATION group of a C3D file: segment poses.

    Parameters
    ----------
    path : the file

    Returns
    -------
    Dataset: dims time, segment, row, col, axis; `rotation` (time, segment, row, col) unitless and
    `position` (time, segment, axis) m, lab ← segment, NaN where missing; `reliability` (time, segment);
    time s, 0 at the first stored frame.

    Raises
    ------
    InputError : no such group, truncated, or a matrix that is not a rotation.

    Notes
    -----
    17 floats a pose: the 4×4 local→lab matrix column by column, then its reliability; a negative
    reliability, a NaN or a zero matrix is a missing pose. ROTATION:RATE is a whole multiple of POINT:RATE.
    """
    layout = parse_c3d(path)
    used = int(layout.number("ROTATION:USED") or 0)
    if used == 0:
        raise InputError(
            message(layout.path, "no ROTATION group with poses", "Name a file that holds segment poses.")
        )
    unit, factor = _declared_unit(layout)
    ratio = _rotation_ratio(layout)
    labels = layout.all_texts("ROTATION:LABELS")[:used]
    if len(labels) < used or not all(labels):
        raise InputError(
            message(
                layout.path, f"ROTATION:LABELS holds {len([x for x in labels if x])} names, expected {used}"
            )
        )
    check_unique(labels, layout.path, "ROTATION label")
    count = layout.frames * ratio
    start = (int(layout.number("ROTATION:DATA_START") or 0) - 1) * 512
    size = count * used * ROTATION_FLOATS * 4
    if start < 512 or start + size > len(layout.content):
        raise InputError(
            message(
                (layout.path, "ROTATION"),
                f"truncated, expected {max(start, 0) + size} bytes, got {len(layout.content)}",
                "Copy or export the file again.",
            )
        )
    values = decode_floats(layout.content[start : start + size], layout.processor)
    values = values.reshape(count, used, ROTATION_FLOATS)
    reliability = values[..., 16].copy()
    matrix = np.swapaxes(values[..., :16].reshape(count, used, 4, 4), -1, -2)
    missing = ~(reliability >= 0) | ~np.isfinite(matrix).all(axis=(-2, -1)) | ~matrix.any(axis=(-2, -1))
    rotation = np.where(missing[..., None, None], np.nan, matrix[..., :3, :3])
    position = np.where(missing[..., None], np.nan, matrix[..., :3, 3]) * factor
    time = np.arange(count) / (layout.rate * ratio)
    rotation = check_table_rotations(rotation, time, labels, (layout.path, "ROTATION"))
    return xr.Dataset(
        {
            "rotation": (("time", "segment", "row", "col"), rotation, {"units": "1"}),
            "position": (("time", "segment", "axis"), position, {"units": "m"}),
            "reliability": (("time", "segment"), reliability, {"units": "1"}),
        },
        coords={
            "time": ("time", time, {"units": "s"}),
            "segment": ("segment", np.array(labels, dtype=str)),
            "row": ("row", list(AXES)),
            "col": ("col", list(AXES)),
            "axis": ("axis", list(AXES)),
        },
        attrs={"rate": layout.rate * ratio, "source": layout.path.name, "units_declared": unit},
    )


def _rotation_ratio(layout: C3dContent) -> int:
    """Return how many poses there are a frame: RATE as a whole multiple of POINT:RATE."""
    rate, ratio = layout.number("ROTATION:RATE"), layout.number("ROTATION:RATIO")
    multiple = rate / layout.rate if rate else (ratio or 1.0)
    whole = round(multiple) if math.isfinite(multiple) else 0
    if whole < 1 or abs(multiple - whole) > 1e-3:
        raise InputError(
            message(
                (layout.path, "ROTATION:RATE"),
                f"expected a whole multiple of POINT:RATE {layout.rate:g} Hz, got {rate or 0:g} Hz",
                "Export the poses at the rate of the points.",
            )
        )
    return whole

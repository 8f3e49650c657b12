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
from numpy.typing import NDArray

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, StaPriorWarning, message
from sta_prior.io.c3d_format import EXPORT_AGAIN, C3dContent, parse_c3d
from sta_prior.io.c3d_records import BIG_ENDIAN, BLOCK, SHORT_LIMIT, decode_floats, decode_text, order
from sta_prior.io.c3d_write import ROTATION_FLOATS, copy_with_rotations, write_c3d
from sta_prior.io.points import Event, check_extent, check_unique, metres_per_unit, points_dataset
from sta_prior.io.rotations import check_table_rotations, poses_dataset

__all__ = ["copy_with_rotations", "read_c3d", "read_c3d_rotations", "write_c3d"]

EVENT_KEY = 12345
HEADER_EVENTS = 18


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
    StaPriorWarning : no unit declared (mm is taken) or another than mm; more data than declared frames;
        all events outside the stored frames.

    Notes
    -----
    A negative residual word or a NaN is an occluded point, whatever its coordinates; 0 is kept. Of points
    that share a label, those never seen are left out; if two are seen, the file is refused.
    """
    layout = parse_c3d(path)
    unit, factor = _declared_unit(layout)
    position, residual = _decode_points(layout)
    labels = _point_labels(layout)
    kept = _without_unseen_twins(labels, np.atleast_1d(np.isfinite(position[..., 0]).any(axis=0)))
    labels = [labels[number] for number in kept]
    check_unique(labels, layout.path, "label")
    position, residual = position[:, kept] * factor, residual[:, kept] * factor
    if not np.isfinite(position).any():
        raise InputError(
            message(layout.path, f"none of its {layout.points} points is seen in any frame", EXPORT_AGAIN)
        )
    check_extent(position, unit, layout.path)
    _warn_of_more_frames(layout)
    return points_dataset(
        position,
        residual,
        np.arange(layout.frames) / layout.rate,
        labels,
        rate=layout.rate,
        source=layout.path.name,
        units_declared=unit,
        events=_events(layout),
    )


def _declared_unit(layout: C3dContent) -> tuple[str, float]:
    """Return the unit of the points and its size in metres; the standard wants mm."""
    units = [unit for unit in layout.texts("POINT:UNITS") if unit]
    place = (layout.path, "POINT:UNITS")
    unit = units[0] if units else "mm"
    factor = metres_per_unit(unit, place)
    if not units:
        _warn(message(place, "missing, mm is taken", "State the unit when you export."))
    elif unit.lower() != "mm":
        _warn(message(place, f"{unit}, converted to SI; the standard expects mm"))
    return unit, factor


def _warn(text: str) -> None:
    warnings.warn(text, StaPriorWarning, stacklevel=4)


def _warn_of_more_frames(layout: C3dContent) -> None:
    """Say so where a file declares the most that 16 bits hold, and has data for more."""
    if layout.frames != SHORT_LIMIT or layout.number("ROTATION:USED"):
        return
    stored = (len(layout.content) - layout.data_start - BLOCK) // layout.frame_size
    if stored > layout.frames:
        _warn(
            message(
                layout.path,
                f"declares {layout.frames} frames and holds {stored} or more; the rest is not read",
                "Export it with POINT:LONG_FRAMES.",
            )
        )


def _point_labels(layout: C3dContent) -> list[str]:
    """Return one label a point; a point without one is called unlabelled_<number>."""
    labels = layout.all_texts("POINT:LABELS")[: layout.points]
    labels += [""] * (layout.points - len(labels))
    return [label or f"unlabelled_{number}" for number, label in enumerate(labels, start=1)]


def _without_unseen_twins(labels: list[str], seen: NDArray[np.bool_]) -> list[int]:
    """Return which points to keep: of those that share a label, the ones never seen go (but one stays)."""
    visible = {label for label, is_seen in zip(labels, seen, strict=True) if is_seen}
    kept: list[int] = []
    for number, label in enumerate(labels):
        if seen[number] or label not in visible:
            kept.append(number)
            visible.add(label)
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


def _decode_residual(word: FloatArray) -> tuple[NDArray[np.bool_], FloatArray]:
    """Split the fourth word: the sign bit of its 16 bits says occluded, the low byte is the residual.

    Float files hold the word as a number; some write FFFF hex as 65535 instead of −1.
    """
    finite = np.isfinite(word) & (np.abs(word) <= 65536)
    whole = np.where(finite, word, -1.0).astype(np.int64)
    occluded = np.asarray(~finite | (word < 0) | ((whole & 0x8000) != 0))
    return occluded, (whole & 0xFF).astype(np.float64)


def _events(layout: C3dContent) -> list[Event]:
    """Return the events on the clock whose 0 is the first stored frame; the file counts from frame 1."""
    shift = (layout.first_frame - 1) / layout.rate
    events = [event._replace(time=event.time - shift) for event in _stored_events(layout)]
    last = (layout.frames - 1) / layout.rate
    if events and not any(-1 / layout.rate <= event.time <= last + 1 / layout.rate for event in events):
        _warn(
            message(
                (layout.path, "EVENT"),
                f"none of its {len(events)} events falls inside the stored frames, 0 … {last:g} s",
                "Check the frame numbers, or give the cycles in the study file.",
            )
        )
    return events


def _stored_events(layout: C3dContent) -> list[Event]:
    """Return the events of the EVENT group, or else of the header, in s from frame 1."""
    times, used = layout.numbers("EVENT:TIMES"), layout.whole("EVENT:USED")
    if times is not None and used is not None:
        clock = times[: len(times) // 2 * 2].reshape(-1, 2) @ (60.0, 1.0)
        labels, contexts = layout.all_texts("EVENT:LABELS"), layout.all_texts("EVENT:CONTEXTS")
    else:
        key, used = struct.unpack_from(order(layout.processor) + "2H", layout.content, 298)
        if key != EVENT_KEY or used > HEADER_EVENTS:
            return []
        clock = decode_floats(layout.content[304:376], layout.processor)
        names = layout.content[396:468]
        labels, contexts = [decode_text(names[at : at + 4]) for at in range(0, len(names), 4)], []
    count = min(used, len(clock))
    labels += [""] * (count - len(labels))
    contexts += [""] * (count - len(contexts))
    rows = zip(labels, clock, contexts, strict=False)
    return [Event(label, float(time), context) for label, time, context in rows][:count]


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
    used = layout.whole("ROTATION:USED") or 0
    if used == 0:
        raise InputError(
            message(layout.path, "no ROTATION group with poses", "Name a file that holds segment poses.")
        )
    unit, factor = _declared_unit(layout)
    ratio = _rotation_ratio(layout)
    labels = [label for label in layout.all_texts("ROTATION:LABELS")[:used] if label]
    if len(labels) < used:
        raise InputError(
            message(
                (layout.path, "ROTATION:LABELS"), f"expected {used} names, got {len(labels)}", EXPORT_AGAIN
            )
        )
    check_unique(labels, (layout.path, "ROTATION:LABELS"), "label")
    count = layout.frames * ratio
    start = ((layout.whole("ROTATION:DATA_START") or 0) - 1) * BLOCK
    end = start + count * used * ROTATION_FLOATS * 4
    if start < BLOCK or end > len(layout.content):
        wrong = f"truncated, its data are bytes {start} … {end}, the file has {len(layout.content)}"
        raise InputError(message((layout.path, "ROTATION"), wrong, EXPORT_AGAIN))
    values = decode_floats(layout.content[start:end], layout.processor).reshape(count, used, ROTATION_FLOATS)
    reliability = values[..., 16]
    matrix = np.swapaxes(values[..., :16].reshape(count, used, 4, 4), -1, -2)
    missing = ~(reliability >= 0) | ~np.isfinite(matrix).all(axis=(-2, -1)) | ~matrix.any(axis=(-2, -1))
    time = np.arange(count) / (layout.rate * ratio)
    rotation = np.where(missing[..., None, None], np.nan, matrix[..., :3, :3])
    dataset = poses_dataset(
        check_table_rotations(rotation, time, labels, (layout.path, "ROTATION")),
        np.where(missing[..., None], np.nan, matrix[..., :3, 3]) * factor,
        time,
        labels,
        {"rate": layout.rate * ratio, "source": layout.path.name, "units_declared": unit},
    )
    return dataset.assign(reliability=(("time", "segment"), reliability.copy(), {"units": "1"}))


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

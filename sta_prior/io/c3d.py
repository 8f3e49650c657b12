"""C3D files in and out, all three byte orders and both number formats.

Two libraries decode them (c3d_file); what both of them get wrong is read here: the fourth word of a point
(c3d_residual), and the reliability of a pose, which ezc3d gives only pose by pose, of Intel files.

References
----------
The C3D file format user guide (C3D.org): point data, residual sign, 2019 rotation extension.
"""

from __future__ import annotations

import math
import warnings
from pathlib import Path

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from sta_prior.errors import StaPriorWarning, message
from sta_prior.io.c3d_file import ROTATION_SIZE, SHORT_LIMIT, C3dFile, open_c3d, read_coordinates
from sta_prior.io.c3d_records import BLOCK
from sta_prior.io.c3d_residual import decode_floats, decode_residual
from sta_prior.io.c3d_write import copy_with_rotations, write_c3d
from sta_prior.io.points import Event, check_extent, check_unique, metres_per_unit, points_dataset
from sta_prior.io.rotations import check_table_rotations, poses_dataset

__all__ = ["copy_with_rotations", "read_c3d", "read_c3d_rotations", "write_c3d"]


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
    file = open_c3d(path)
    unit, factor = _declared_unit(file)
    occluded, residual = decode_residual(file.data, file.processor, file.points, file.frames, file.scale)
    position = read_coordinates(file)
    occluded |= ~np.isfinite(position).all(axis=-1)
    position[occluded] = residual[occluded] = np.nan
    labels = _point_labels(file)
    kept = _without_unseen_twins(labels, np.atleast_1d(np.isfinite(position[..., 0]).any(axis=0)))
    labels = [labels[number] for number in kept]
    check_unique(labels, file.path, "label")
    position, residual = position[:, kept] * factor, residual[:, kept] * factor
    if not np.isfinite(position).any():
        raise file.error(f"none of its {file.points} points is seen in any frame")
    check_extent(position, unit, file.path)
    _warn_of_more_frames(file)
    return points_dataset(
        position,
        residual,
        np.arange(file.frames) / file.rate,
        labels,
        rate=file.rate,
        source=file.path.name,
        units_declared=unit,
        events=_events(file),
    )


def _declared_unit(file: C3dFile) -> tuple[str, float]:
    """Return the unit of the points and its size in metres; the standard wants mm."""
    units = [unit for unit in file.texts("POINT:UNITS") if unit]
    place = (file.path, "POINT:UNITS")
    unit = units[0] if units else "mm"
    factor = metres_per_unit(unit, place)
    if not units:
        _warn(message(place, "missing, mm is taken", "State the unit when you export."))
    elif unit.lower() != "mm":
        _warn(message(place, f"{unit}, converted to SI; the standard expects mm"))
    return unit, factor


def _warn(text: str) -> None:
    warnings.warn(text, StaPriorWarning, stacklevel=4)


def _warn_of_more_frames(file: C3dFile) -> None:
    """Say so where a file declares the most that 16 bits hold, and has data for more."""
    if file.frames != SHORT_LIMIT or file.number("ROTATION:USED"):
        return
    stored = (len(file.content) - file.data_start - BLOCK) // file.frame_size
    if stored > file.frames:
        _warn(
            message(
                file.path,
                f"declares {file.frames} frames and holds {stored} or more; the rest is not read",
                "Export it with POINT:LONG_FRAMES.",
            )
        )


def _point_labels(file: C3dFile) -> list[str]:
    """Return one label a point; a point without one is called unlabelled_<number>."""
    labels = file.texts("POINT:LABELS")[: file.points]
    labels += [""] * (file.points - len(labels))
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


def _events(file: C3dFile) -> list[Event]:
    """Return the events on the clock whose 0 is the first stored frame; the file counts from frame 1."""
    shift = (file.first_frame - 1) / file.rate
    events = [event._replace(time=event.time - shift) for event in _stored_events(file)]
    last = (file.frames - 1) / file.rate
    if events and not any(-1 / file.rate <= event.time <= last + 1 / file.rate for event in events):
        _warn(
            message(
                (file.path, "EVENT"),
                f"none of its {len(events)} events falls inside the stored frames, 0 … {last:g} s",
                "Check the frame numbers, or give the cycles in the study file.",
            )
        )
    return events


def _stored_events(file: C3dFile) -> list[Event]:
    """Return the events of the EVENT group, or else of the header, in s from frame 1."""
    times, used = file.numbers("EVENT:TIMES"), file.whole("EVENT:USED")
    if times is None or used is None:
        return [
            Event(label.split("\0")[0].strip(), float(time), "") for time, label in file.reader.header.events
        ]
    clock = times[: len(times) // 2 * 2].reshape(-1, 2) @ (60.0, 1.0)
    labels, contexts = file.texts("EVENT:LABELS"), file.texts("EVENT:CONTEXTS")
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
    file = open_c3d(path)
    used = file.whole("ROTATION:USED") or 0
    if used == 0:
        raise file.error("no ROTATION group with poses", do="Name a file that holds segment poses.")
    unit, factor = _declared_unit(file)
    ratio = _rotation_ratio(file)
    labels = [label for label in file.texts("ROTATION:LABELS")[:used] if label]
    if len(labels) < used:
        raise file.error(f"expected {used} names, got {len(labels)}", "ROTATION:LABELS")
    check_unique(labels, (file.path, "ROTATION:LABELS"), "label")
    count = file.frames * ratio
    start = ((file.whole("ROTATION:DATA_START") or 0) - 1) * BLOCK
    end = start + count * used * ROTATION_SIZE
    if start < BLOCK or end > len(file.content):
        wrong = f"truncated, its data are bytes {start} … {end}, the file has {len(file.content)}"
        raise file.error(wrong, "ROTATION")
    values = decode_floats(file.content[start:end], file.processor).reshape(count, used, -1)
    reliability = values[..., 16]
    matrix = np.swapaxes(values[..., :16].reshape(count, used, 4, 4), -1, -2)
    missing = ~(reliability >= 0) | ~np.isfinite(matrix).all(axis=(-2, -1)) | ~matrix.any(axis=(-2, -1))
    time = np.arange(count) / (file.rate * ratio)
    rotation = np.where(missing[..., None, None], np.nan, matrix[..., :3, :3])
    dataset = poses_dataset(
        check_table_rotations(rotation, time, labels, (file.path, "ROTATION")),
        np.where(missing[..., None], np.nan, matrix[..., :3, 3]) * factor,
        time,
        labels,
        {"rate": file.rate * ratio, "source": file.path.name, "units_declared": unit},
    )
    return dataset.assign(reliability=(("time", "segment"), reliability.copy(), {"units": "1"}))


def _rotation_ratio(file: C3dFile) -> int:
    """Return how many poses there are a frame: RATE as a whole multiple of POINT:RATE."""
    rate, ratio = file.number("ROTATION:RATE"), file.number("ROTATION:RATIO")
    multiple = rate / file.rate if rate else (ratio or 1.0)
    whole = round(multiple) if math.isfinite(multiple) else 0
    if whole < 1 or abs(multiple - whole) > 1e-3:
        wrong = f"expected a whole multiple of POINT:RATE {file.rate:g} Hz, got {rate or 0:g} Hz"
        raise file.error(wrong, "ROTATION:RATE", "Export the poses at the rate of the points.")
    return whole

"""Writing C3D files: points from a Dataset, and a copy of a file with segment poses added.

Conventions: docs/conventions.md.

References
----------
The C3D file format user guide (C3D.org): sections on writing, events and the 2019 rotation extension.
"""

from __future__ import annotations

import struct
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from sta_prior.checks import FloatArray, check_shape
from sta_prior.errors import InputError, ShapeError, message
from sta_prior.io.c3d_format import C3dContent, parse_c3d, parse_content
from sta_prior.io.c3d_records import (
    BLOCK,
    FORMAT_KEY,
    LITTLE_ENDIAN,
    SHORT_LIMIT,
    Record,
    encode_floats,
    float_record,
    group_record,
    integer_record,
    order,
    pad,
    parameter_section,
    text_records,
    with_pointer,
)
from sta_prior.io.files import atomic_path
from sta_prior.io.points import check_unique, metres_per_unit, read_events

ROTATION_FLOATS = 17
NO_RESIDUAL_SCALE = 0.1  # file units a step of the residual, where no residual is known
MISSING_RELIABILITY = -1.0
MOST_EVENTS = 255


def write_c3d(
    path: str | Path, points: xr.Dataset, *, rotations: xr.Dataset | None = None, unit: str = "mm"
) -> None:
    """Write a Points Dataset as a little-endian float C3D file, with its events and, if given, poses.

    Parameters
    ----------
    path : the file to write, in one piece
    points : dims time, point, axis; `position` m, NaN occluded; optionally `residual` m (0 calculated);
        time s, evenly spaced; attributes rate (Hz) and events
    rotations : dims time, segment, row, col, axis; `rotation` lab ← segment, `position` m, optionally
        `reliability`; a whole multiple of the points' frames
    unit : unit of length in the file: mm, cm or m; the standard wants mm

    Raises
    ------
    InputError : uneven time, a label twice, no frames, or more than the format holds.
    ShapeError : the rotations do not fit the frames.

    Notes
    -----
    Residuals are stored in 1/255 of the largest one and a known residual never becomes 0, which would say
    calculated; an unknown one is written as 0. More than 65535 frames are declared by
    TRIAL:ACTUAL_START_FIELD, TRIAL:ACTUAL_END_FIELD and POINT:LONG_FRAMES. The clock starts anew at 0.
    """
    path = Path(path)
    factor = metres_per_unit(unit, path)
    position = points["position"].transpose("time", "point", "axis").to_numpy() / factor
    labels = [str(label).strip() for label in points["point"].to_numpy()]
    _check_points(path, labels, position)
    rate = _even_rate(points, path)
    scale, words = _data_words(points, position, factor)
    records = _point_records(labels, len(position), rate, scale, unit, path)
    records += _event_records(points, path)
    section = parameter_section(records, LITTLE_ENDIAN, path)
    data_block = 2 + len(section) // BLOCK
    section = parameter_section(with_pointer(records, 1, data_block, LITTLE_ENDIAN), LITTLE_ENDIAN, path)
    last = min(len(position), SHORT_LIMIT)
    header = struct.pack("<2B5HfHHf", 2, FORMAT_KEY, len(labels), 0, 1, last, 10, scale, data_block, 0, rate)
    content = pad(header) + section + pad(words.astype("<f4").tobytes())
    if rotations is not None:
        content = _add_rotations(parse_content(content, path), *_rotation_arrays(rotations), path)
    with atomic_path(path) as temporary:
        temporary.write_bytes(content)


def copy_with_rotations(
    source: str | Path,
    target: str | Path,
    labels: Sequence[str],
    poses: ArrayLike,
    reliability: ArrayLike = 1.0,
) -> None:
    """Copy a C3D file and give the copy a ROTATION group that holds segment poses.

    Parameters
    ----------
    source : the C3D file; it is not changed
    target : the file to write, in one piece
    labels : segment names, S of them
    poses : shape (t, S, 4, 4), lab ← segment, position m, NaN missing; t is a whole multiple of the
        frames of the file
    reliability : shape (t, S) or a number, 0 … 1; a missing pose gets −1

    Raises
    ------
    InputError : the source cannot be read, or the format cannot hold the poses.
    ShapeError : the poses do not fit labels and frames.

    Notes
    -----
    All but the ROTATION group, the section's length and the data pointers is the source's, byte by byte;
    byte order and unit of length are the source's too. An older ROTATION group is replaced. 17 floats a
    pose: the 4×4 matrix column by column, then the reliability (C3D 2019 extension).
    """
    target = Path(target)
    poses = check_shape(poses, (None, None, 4, 4), "poses")
    content = _add_rotations(parse_c3d(source), labels, poses, reliability, target)
    with atomic_path(target) as temporary:
        temporary.write_bytes(content)


def _check_points(path: Path, labels: Sequence[str], position: FloatArray) -> None:
    """Refuse what the format cannot hold."""
    check_unique(labels, path, "label")
    if not position.size:
        wrong = f"{position.shape[1]} points and {len(position)} frames to write"
        raise InputError(message(path, wrong, "Give at least one of each."))
    if "" in labels:
        raise InputError(message((path, f"point {labels.index('') + 1}"), "a blank label", "Name the point."))
    if len(labels) > SHORT_LIMIT:
        raise InputError(message(path, f"{len(labels)} points, a C3D file holds at most {SHORT_LIMIT}"))


def _even_rate(points: xr.Dataset, path: Path) -> float:
    """Return the frame rate, Hz; C3D has no time stamps, so time must be even."""
    rate = float(points.attrs.get("rate", np.nan))
    time = points["time"].to_numpy().astype(np.float64)
    if not rate > 0 or not np.isfinite(rate):
        raise InputError(
            message(path, f"frame rate {rate:g} Hz, expected more than 0", "Set the attribute rate.")
        )
    uneven = ~(np.abs(time - time[0] - np.arange(len(time)) / rate) <= 0.5 / rate)
    if uneven.any():
        frame = int(np.argmax(uneven))
        raise InputError(
            message(
                (path, f"frame {frame}"),
                f"time {time[frame]:g} s, expected {time[0] + frame / rate:g} s at {rate:g} Hz",
                "C3D needs evenly spaced frames: write CSV instead.",
            )
        )
    return rate


def _data_words(points: xr.Dataset, position: FloatArray, factor: float) -> tuple[float, FloatArray]:
    """Return POINT:SCALE and the four words of each point, shape (time, point, 4)."""
    seen = np.isfinite(position).all(axis=-1)
    residual = np.full(seen.shape, np.nan)
    if "residual" in points:
        residual = points["residual"].transpose("time", "point").to_numpy() / factor
    known = np.where(seen & (residual > 0), residual, 0.0)
    step = known.max() / 255 if known.any() else NO_RESIDUAL_SCALE
    word = np.where(known > 0, np.clip(np.rint(known / step), 1, 255), 0.0)
    words = np.concatenate([position, word[..., None]], axis=-1)
    words[~seen] = (0.0, 0.0, 0.0, -1.0)
    return -float(step), words


def _point_records(
    labels: Sequence[str], frames: int, rate: float, scale: float, unit: str, path: Path
) -> list[Record]:
    """Return the groups POINT, ANALOG, FORCE_PLATFORM and, for a long trial, TRIAL."""
    short = min(frames, SHORT_LIMIT)
    records = [
        group_record(1, "POINT", LITTLE_ENDIAN),
        integer_record(1, "USED", [len(labels)], LITTLE_ENDIAN),
        integer_record(1, "FRAMES", [short], LITTLE_ENDIAN),
        integer_record(1, "DATA_START", [0], LITTLE_ENDIAN),
        float_record(1, "SCALE", [scale], LITTLE_ENDIAN),
        float_record(1, "RATE", [rate], LITTLE_ENDIAN),
        *text_records(1, "UNITS", [unit], LITTLE_ENDIAN, path),
        *text_records(1, "LABELS", labels, LITTLE_ENDIAN, path),
        *text_records(1, "DESCRIPTIONS", [" "] * len(labels), LITTLE_ENDIAN, path),
        group_record(2, "ANALOG", LITTLE_ENDIAN),
        integer_record(2, "USED", [0], LITTLE_ENDIAN),
        float_record(2, "RATE", [0.0], LITTLE_ENDIAN),
        float_record(2, "GEN_SCALE", [1.0], LITTLE_ENDIAN),
        group_record(3, "FORCE_PLATFORM", LITTLE_ENDIAN),
        integer_record(3, "USED", [0], LITTLE_ENDIAN),
    ]
    if frames > short:
        high, low = divmod(frames, SHORT_LIMIT + 1)
        records += [
            float_record(1, "LONG_FRAMES", [float(frames)], LITTLE_ENDIAN),
            group_record(4, "TRIAL", LITTLE_ENDIAN),
            integer_record(4, "ACTUAL_START_FIELD", [1, 0], LITTLE_ENDIAN),
            integer_record(4, "ACTUAL_END_FIELD", [low, high], LITTLE_ENDIAN),
        ]
    return records


def _event_records(points: xr.Dataset, path: Path) -> list[Record]:
    """Return the EVENT group; times are minutes and seconds from the first frame."""
    events = read_events(points)
    if not events:
        return []
    if len(events) > MOST_EVENTS:
        wrong = f"{len(events)} events, a C3D file holds at most {MOST_EVENTS}"
        raise InputError(message(path, wrong, "Remove some."))
    start = float(points["time"].to_numpy()[0])
    clock = np.array([[0.0, event.time - start] for event in events])
    return [
        group_record(5, "EVENT", LITTLE_ENDIAN),
        integer_record(5, "USED", [len(events)], LITTLE_ENDIAN),
        float_record(5, "TIMES", clock, LITTLE_ENDIAN, (2, len(events))),
        *text_records(5, "LABELS", [event.label or " " for event in events], LITTLE_ENDIAN, path),
        *text_records(5, "CONTEXTS", [event.context or " " for event in events], LITTLE_ENDIAN, path),
    ]


def _rotation_arrays(rotations: xr.Dataset) -> tuple[list[str], FloatArray, FloatArray]:
    """Return labels, poses (t, S, 4, 4) and reliability (t, S) of a rotations Dataset."""
    rotation = rotations["rotation"].transpose("time", "segment", "row", "col").to_numpy()
    poses = np.zeros((*rotation.shape[:2], 4, 4))
    poses[..., :3, :3] = rotation
    poses[..., :3, 3] = rotations["position"].transpose("time", "segment", "axis").to_numpy()
    poses[..., 3, 3] = 1.0
    reliability = np.ones(rotation.shape[:2])
    if "reliability" in rotations:
        reliability = rotations["reliability"].transpose("time", "segment").to_numpy()
    return [str(label) for label in rotations["segment"].to_numpy()], poses, reliability


def _add_rotations(
    layout: C3dContent, labels: Sequence[str], poses: FloatArray, reliability: ArrayLike, target: Path
) -> bytes:
    """Return the bytes of the file with a ROTATION group of these poses and their data section."""
    count, segments = poses.shape[:2]
    if segments != len(labels) or not segments:
        wrong = f"expected {len(labels)} segments as there are labels (at least 1), got {segments}"
        raise ShapeError(message((target, "poses"), wrong))
    if count == 0 or count % layout.frames:
        wrong = f"expected a whole multiple of {layout.frames} frames, got {count}"
        raise ShapeError(message((target, "poses"), wrong))
    check_unique(labels, target, "segment")
    processor = layout.processor
    groups = {record.name: -record.group for record in layout.records if record.group < 0}
    kept = [record for record in layout.records if abs(record.group) != groups.get("ROTATION")]
    new = next(number for number in range(1, 128) if number not in {abs(record.group) for record in kept})
    added = _rotation_records(new, labels, count // layout.frames, layout, target)
    section = parameter_section([*kept, *added], processor, target)
    size = layout.frames * layout.frame_size
    data = pad(layout.content[layout.data_start : layout.data_start + size])
    rotations = pad(encode_floats(_rotation_words(poses, reliability, layout), processor))
    first = (layout.section_start + len(section)) // BLOCK + 1
    data_block, rotation_block = first, first + len(data) // BLOCK
    if rotation_block > SHORT_LIMIT:  # the pointers have 16 bits: the shorter section goes first
        data_block, rotation_block = first + len(rotations) // BLOCK, first
    if data_block > SHORT_LIMIT:
        wrong = (
            f"points and poses are longer than {SHORT_LIMIT} blocks each, more than a C3D file can point to"
        )
        raise InputError(message(target, wrong, "Cut the trial."))
    records = with_pointer(kept, groups["POINT"], data_block, processor)
    records += with_pointer(added, new, rotation_block, processor)
    head = bytearray(layout.content[: layout.section_start])
    struct.pack_into(order(processor) + "H", head, 16, data_block)
    blocks = [data, rotations] if data_block < rotation_block else [rotations, data]
    return b"".join([bytes(head), parameter_section(records, processor, target), *blocks])


def _rotation_records(
    group: int, labels: Sequence[str], ratio: int, layout: C3dContent, target: Path
) -> list[Record]:
    """Return the ROTATION group, its pointer still 0."""
    processor = layout.processor
    return [
        group_record(group, "ROTATION", processor),
        integer_record(group, "USED", [len(labels)], processor),
        integer_record(group, "DATA_START", [0], processor),
        integer_record(group, "RATIO", [ratio], processor),
        float_record(group, "RATE", [layout.rate * ratio], processor),
        *text_records(group, "LABELS", labels, processor, target),
        *text_records(group, "DESCRIPTIONS", [" "] * len(labels), processor, target),
    ]


def _rotation_words(poses: FloatArray, reliability: ArrayLike, layout: C3dContent) -> FloatArray:
    """Return 17 numbers a pose: the matrix column by column, position in the file's unit; reliability."""
    units = [unit for unit in layout.texts("POINT:UNITS") if unit] or ["mm"]
    matrix = poses.copy()
    matrix[..., :3, 3] /= metres_per_unit(units[0], (layout.path, "POINT:UNITS"))
    missing = ~np.isfinite(matrix).all(axis=(-2, -1))
    matrix[missing] = np.nan
    words = np.empty((*missing.shape, ROTATION_FLOATS))
    words[..., :16] = np.swapaxes(matrix, -1, -2).reshape(*missing.shape, 16)
    words[..., 16] = np.where(missing, MISSING_RELIABILITY, np.broadcast_to(reliability, missing.shape))
    return words

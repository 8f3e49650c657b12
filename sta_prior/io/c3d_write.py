"""Writing C3D files: points from a Dataset, and a copy of a file with segment poses added.

Conventions: docs/conventions.md.

References
----------
The C3D file format user guide (C3D.org): sections on writing, events and the 2019 rotation extension.
"""

from __future__ import annotations

import dataclasses
import struct
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from sta_prior.checks import FloatArray, check_shape
from sta_prior.errors import InputError, ShapeError, message
from sta_prior.io import c3d_format as form
from sta_prior.io.files import atomic_path
from sta_prior.io.points import check_unique, metres_per_unit, read_events

LABELS_EACH = 255
NO_RESIDUAL_SCALE = 0.1  # file units a step of the residual, where no residual is known
MISSING_RELIABILITY = -1.0


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
    unit : unit of length in the file: mm, cm or m

    Raises
    ------
    InputError : uneven time, a label twice, no frames, or more than the format holds.

    Notes
    -----
    Residuals are stored in 1/255 of the largest one and a known residual never becomes 0, which would say
    calculated; an unknown one is written as 0. More than 65535 frames are declared by
    TRIAL:ACTUAL_START_FIELD and ACTUAL_END_FIELD and POINT:LONG_FRAMES. The clock starts anew at 0.
    """
    path = Path(path)
    factor = metres_per_unit(unit, path)
    position = points["position"].transpose("time", "point", "axis").to_numpy() / factor
    labels = [str(label) for label in points["point"].to_numpy()]
    check_unique(labels, path, "label")
    if not position.size:
        raise InputError(
            message(path, f"holds {position.shape[1]} points and {len(position)} frames", "Nothing to write.")
        )
    rate = _even_rate(points, path)
    scale, words = _data_words(points, position, factor)
    records = _point_records(labels, len(position), rate, scale, unit)
    records += _event_records(points, path)
    section = form.parameter_section(records, form.LITTLE_ENDIAN, path)
    data_block = 2 + len(section) // form.BLOCK
    records = [_with_data_start(record, data_block, form.LITTLE_ENDIAN) for record in records]
    section = form.parameter_section(records, form.LITTLE_ENDIAN, path)
    last = min(len(position), form.SHORT_LIMIT)
    header = struct.pack(
        "<BB5HfHHf", 2, form.FORMAT_KEY, len(labels), 0, 1, last, 10, scale, data_block, 0, rate
    )
    content = form.pad(header) + section + form.pad(words.astype("<f4").tobytes())
    if rotations is not None:
        content = _add_rotations(form.parse_content(content, path), *_rotation_arrays(rotations), path)
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
    All but the ROTATION group, the section lengths and the data pointers is the source's, byte by byte;
    byte order and unit of length are the source's too. An older ROTATION group is replaced. 17 floats a
    pose: the 4×4 matrix column by column, then the reliability (C3D 2019 extension).
    """
    target = Path(target)
    layout = form.parse_c3d(source)
    content = _add_rotations(
        layout, labels, check_shape(poses, (None, None, 4, 4), "poses"), reliability, target
    )
    with atomic_path(target) as temporary:
        temporary.write_bytes(content)


def _even_rate(points: xr.Dataset, path: Path) -> float:
    """Return the frame rate, Hz; C3D has no time stamps, so time must be even."""
    rate = float(points.attrs.get("rate", np.nan))
    time = points["time"].to_numpy().astype(np.float64)
    if not rate > 0 or not np.isfinite(rate):
        raise InputError(
            message(path, f"frame rate {rate:g} Hz, expected more than 0", "Set the attribute rate.")
        )
    uneven = np.abs(time - time[0] - np.arange(len(time)) / rate) > 0.5 / rate
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


def _text_record(
    group: int, name: str, texts: Sequence[str], processor: int = form.LITTLE_ENDIAN
) -> form.Record:
    dimensions, content = form.pack_texts(texts)
    return form.parameter_record(group, name, form.CHARACTER, dimensions, content, processor)


def _label_records(
    group: int, name: str, texts: Sequence[str], processor: int = form.LITTLE_ENDIAN
) -> list[form.Record]:
    """Return NAME, NAME2, … with at most 255 texts each."""
    parts = [texts[i : i + LABELS_EACH] for i in range(0, len(texts), LABELS_EACH)]
    return [
        _text_record(group, name + (str(i + 1) if i else ""), part, processor) for i, part in enumerate(parts)
    ]


def _integer_record(
    group: int, name: str, values: Sequence[int], processor: int = form.LITTLE_ENDIAN
) -> form.Record:
    content = struct.pack(f"{form.order(processor)}{len(values)}H", *values)
    dimensions = () if len(values) == 1 else (len(values),)
    return form.parameter_record(group, name, form.INTEGER, dimensions, content, processor)


def _float_record(
    group: int,
    name: str,
    values: ArrayLike,
    dimensions: Sequence[int] = (),
    processor: int = form.LITTLE_ENDIAN,
) -> form.Record:
    content = form.encode_floats(np.asarray(values, dtype=np.float64), processor)
    return form.parameter_record(group, name, form.FLOAT, dimensions, content, processor)


def _point_records(
    labels: Sequence[str], frames: int, rate: float, scale: float, unit: str
) -> list[form.Record]:
    """Return the groups POINT, ANALOG, FORCE_PLATFORM and, for a long trial, TRIAL."""
    if len(labels) > form.SHORT_LIMIT:
        raise InputError(
            message("points", f"{len(labels)} of them, a C3D file holds at most {form.SHORT_LIMIT}")
        )
    short = min(frames, form.SHORT_LIMIT)
    records = [
        form.group_record(1, "POINT", form.LITTLE_ENDIAN),
        _integer_record(1, "USED", [len(labels)]),
        _integer_record(1, "FRAMES", [short]),
        _integer_record(1, "DATA_START", [0]),
        _float_record(1, "SCALE", [scale]),
        _float_record(1, "RATE", [rate]),
        _text_record(1, "UNITS", [unit]),
        *_label_records(1, "LABELS", labels),
        *_label_records(1, "DESCRIPTIONS", [" "] * len(labels)),
        form.group_record(2, "ANALOG", form.LITTLE_ENDIAN),
        _integer_record(2, "USED", [0]),
        _float_record(2, "RATE", [0.0]),
        _float_record(2, "GEN_SCALE", [1.0]),
        form.group_record(3, "FORCE_PLATFORM", form.LITTLE_ENDIAN),
        _integer_record(3, "USED", [0]),
    ]
    if frames > short:
        long = [frames % (form.SHORT_LIMIT + 1), frames // (form.SHORT_LIMIT + 1)]
        records += [
            _float_record(1, "LONG_FRAMES", [float(frames)]),
            form.group_record(4, "TRIAL", form.LITTLE_ENDIAN),
            _integer_record(4, "ACTUAL_START_FIELD", [1, 0]),
            _integer_record(4, "ACTUAL_END_FIELD", long),
        ]
    return records


def _event_records(points: xr.Dataset, path: Path) -> list[form.Record]:
    """Return the EVENT group; times are minutes and seconds from the first frame."""
    events = read_events(points)
    if not events:
        return []
    if len(events) > 255:
        raise InputError(message(path, f"{len(events)} events, a C3D file holds at most 255", "Remove some."))
    start = float(points["time"].to_numpy()[0])
    clock = np.array([[0.0, event.time - start] for event in events])
    return [
        form.group_record(5, "EVENT", form.LITTLE_ENDIAN),
        _integer_record(5, "USED", [len(events)]),
        _float_record(5, "TIMES", clock, (2, len(events))),
        _text_record(5, "LABELS", [event.label or " " for event in events]),
        _text_record(5, "CONTEXTS", [event.context or " " for event in events]),
    ]


def _with_data_start(record: form.Record, block: int, processor: int, group: int = 1) -> form.Record:
    """Return the record, with the pointer to the data if it is POINT:DATA_START."""
    if record.group != group or record.name != "DATA_START":
        return record
    content = bytearray(record.content)
    struct.pack_into(form.order(processor) + "H", content, record.data_at, block)
    return dataclasses.replace(record, content=bytes(content))


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
    layout: form.C3dContent, labels: Sequence[str], poses: FloatArray, reliability: ArrayLike, target: Path
) -> bytes:
    """Return the bytes of the file with a ROTATION group of these poses and their data section."""
    count, segments = poses.shape[:2]
    if segments != len(labels) or not labels:
        raise ShapeError(
            message((target, "poses"), f"expected {len(labels)} segments (at least 1), got {segments}")
        )
    if count == 0 or count % layout.frames:
        raise ShapeError(
            message((target, "poses"), f"expected a whole multiple of {layout.frames} frames, got {count}")
        )
    check_unique(labels, target, "segment")
    units = [unit for unit in layout.texts("POINT:UNITS") if unit] or ["mm"]
    factor = metres_per_unit(units[0], (layout.path, "POINT:UNITS"))
    processor = layout.processor
    numbers = {-record.group: record.name for record in layout.records if record.group < 0}
    old = [number for number, name in numbers.items() if name == "ROTATION"]
    point = next(number for number, name in numbers.items() if name == "POINT")
    kept = [record for record in layout.records if abs(record.group) not in old]
    free = next(number for number in range(1, 128) if number not in {abs(r.group) for r in kept})
    ratio = count // layout.frames
    added = [
        form.group_record(free, "ROTATION", processor),
        _integer_record(free, "USED", [segments], processor),
        _integer_record(free, "DATA_START", [0], processor),
        _integer_record(free, "RATIO", [ratio], processor),
        _float_record(free, "RATE", [layout.rate * ratio], (), processor),
        *_label_records(free, "LABELS", labels, processor),
        *_label_records(free, "DESCRIPTIONS", [" "] * segments, processor),
    ]
    section = form.parameter_section([*kept, *added], processor, target)
    data_at = layout.section_start + len(section)
    data = form.pad(layout.content[layout.data_start : layout.data_start + layout.frames * layout.frame_size])
    blocks = data_at // form.BLOCK + 1, (data_at + len(data)) // form.BLOCK + 1
    if blocks[1] > form.SHORT_LIMIT:
        raise InputError(
            message(
                target,
                f"poses would start at block {blocks[1]}, a C3D file reaches {form.SHORT_LIMIT}",
                "Cut the trial.",
            )
        )
    records = [_with_data_start(record, blocks[0], processor, point) for record in kept]
    records += [_with_data_start(record, blocks[1], processor, free) for record in added]
    head = bytearray(layout.content[: layout.section_start])
    struct.pack_into(form.order(processor) + "H", head, 16, blocks[0])
    section = form.parameter_section(records, processor, target)
    words = _rotation_words(poses, reliability, factor)
    return bytes(head) + section + data + form.pad(form.encode_floats(words, processor))


def _rotation_words(poses: FloatArray, reliability: ArrayLike, factor: float) -> FloatArray:
    """Return 17 numbers a pose: the matrix column by column, position in the file's unit; reliability."""
    count, segments = poses.shape[:2]
    matrix = poses.copy()
    matrix[..., :3, 3] /= factor
    missing = ~np.isfinite(matrix).all(axis=(-2, -1))
    matrix[missing] = np.nan
    words = np.empty((count, segments, 17))
    words[..., :16] = np.swapaxes(matrix, -1, -2).reshape(count, segments, 16)
    words[..., 16] = np.where(missing, MISSING_RELIABILITY, np.broadcast_to(reliability, (count, segments)))
    return words

"""Writing C3D files: points from a Dataset, and a copy of a file with segment poses added.

Points go out through ezc3d. Two things are put right afterwards: version 1.7.2 writes residuals into the
high byte, which holds the camera mask, and always −1 into the header for POINT:SCALE.

Copies are not made by it. Measured on the 29 real files: it cannot write four (more labels than points) and
refuses two (big-endian); of five it loses the mark of all gaps (FFFF hex becomes FF7F hex); reliabilities
become 0. So a copy keeps the bytes of its source, and the ROTATION group is added to them.

Conventions: docs/conventions.md.

References
----------
The C3D file format user guide (C3D.org): sections on writing, events and the 2019 rotation extension.
"""

from __future__ import annotations

import struct
import tempfile
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from sta_prior.checks import FloatArray, check_shape
from sta_prior.errors import InputError, ShapeError, message
from sta_prior.io.c3d_file import SHORT_LIMIT, C3dFile, open_c3d, parse_c3d
from sta_prior.io.c3d_records import BLOCK, join_records, make_record
from sta_prior.io.c3d_residual import byte_order, encode_floats
from sta_prior.io.files import atomic_path
from sta_prior.io.points import Event, check_unique, metres_per_unit, read_events

NO_RESIDUAL_SCALE = 0.1  # file units a step of the residual, where no residual is known
MISSING_RELIABILITY = -1.0
MOST_EVENTS = MOST_LABELS = MOST_BLOCKS = 255
LONGEST_TEXT = 127  # bytes


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
    POINT:LONG_FRAMES. The clock starts anew at 0.
    """
    path = Path(path)
    factor = metres_per_unit(unit, path)
    position = points["position"].transpose("time", "point", "axis").to_numpy() / factor
    labels = [str(label).strip() for label in points["point"].to_numpy()]
    events = read_events(points)
    _check_points(path, labels, position, events)
    rate = _even_rate(points, path)
    scale, word = _residual_words(points, position, factor)
    start = float(points["time"].to_numpy()[0])
    events = [event._replace(time=event.time - start) for event in events]
    content = _encode_points(position, labels, rate, unit, scale, events)
    struct.pack_into("<f", content, 12, scale)
    (data_block,) = struct.unpack_from("<H", content, 16)
    if data_block - 2 > MOST_BLOCKS:
        wrong = f"the parameters need {data_block - 2} blocks, a C3D file holds at most {MOST_BLOCKS}"
        raise InputError(message(path, wrong, "Write fewer points or shorter labels."))
    stored = np.frombuffer(content, "<f4", 4 * word.size, (data_block - 1) * BLOCK).reshape(*word.shape, 4)
    stored[..., 3] = word
    whole = bytes(content)
    if rotations is not None:
        whole = _add_rotations(parse_c3d(whole, path), *_rotation_arrays(rotations), path)
    with atomic_path(path) as temporary:
        temporary.write_bytes(whole)


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
    content = _add_rotations(open_c3d(source), labels, poses, reliability, target)
    with atomic_path(target) as temporary:
        temporary.write_bytes(content)


def _check_texts(texts: Sequence[str], place: tuple[object, ...]) -> None:
    """Refuse a text of more than 127 bytes: 255 of them still have a 16-bit record length."""
    for text in texts:
        if (size := len(text.encode())) > LONGEST_TEXT:
            wrong = f"{text[:20]}… takes {size} bytes, expected at most {LONGEST_TEXT}"
            raise InputError(message(place, wrong, "Shorten it."))


def _check_points(path: Path, labels: Sequence[str], position: FloatArray, events: Sequence[Event]) -> None:
    """Refuse what the format cannot hold."""
    check_unique(labels, path, "label")
    if not position.size:
        wrong = f"{position.shape[1]} points and {len(position)} frames to write"
        raise InputError(message(path, wrong, "Give at least one of each."))
    if "" in labels:
        raise InputError(message((path, f"point {labels.index('') + 1}"), "a blank label", "Name the point."))
    if len(labels) > SHORT_LIMIT:
        raise InputError(message(path, f"{len(labels)} points, a C3D file holds at most {SHORT_LIMIT}"))
    if len(events) > MOST_EVENTS:
        wrong = f"{len(events)} events, a C3D file holds at most {MOST_EVENTS}"
        raise InputError(message(path, wrong, "Remove some."))
    _check_texts(labels, (path, "LABELS"))
    _check_texts([event.label for event in events], (path, "EVENT:LABELS"))
    _check_texts([event.context for event in events], (path, "EVENT:CONTEXTS"))


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


def _residual_words(points: xr.Dataset, position: FloatArray, factor: float) -> tuple[float, FloatArray]:
    """Return POINT:SCALE and the fourth word of each point, shape (time, point)."""
    seen = np.isfinite(position).all(axis=-1)
    residual = np.full(seen.shape, np.nan)
    if "residual" in points:
        residual = points["residual"].transpose("time", "point").to_numpy() / factor
    known = np.where(seen & (residual > 0), residual, 0.0)
    step = known.max() / 255 if known.any() else NO_RESIDUAL_SCALE
    word = np.where(known > 0, np.clip(np.rint(known / step), 1, 255), 0.0)
    return -float(step), np.where(seen, word, -1.0)


def _encode_points(
    position: FloatArray, labels: list[str], rate: float, unit: str, scale: float, events: Sequence[Event]
) -> bytearray:
    """Return the bytes of the file that ezc3d writes; positions of unseen points become 0."""
    import ezc3d  # here: a compiled library, needed by this function only

    file = ezc3d.c3d()
    point = file["parameters"]["POINT"]
    point["UNITS"]["value"], point["LABELS"]["value"] = [unit], labels
    point["RATE"]["value"], point["SCALE"]["value"] = np.array([rate]), np.array([scale])
    if len(position) > SHORT_LIMIT:
        file.add_parameter("POINT", "LONG_FRAMES", [float(len(position))])
    for event in events:
        file.add_event([0.0, event.time], event.context, event.label)
    file["data"]["points"] = np.where(np.isfinite(position).all(axis=-1, keepdims=True), position, 0.0).T
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "points.c3d"  # the library adds this suffix to any other
        file.write(str(path))
        return bytearray(path.read_bytes())


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
    file: C3dFile, labels: Sequence[str], poses: FloatArray, reliability: ArrayLike, target: Path
) -> bytes:
    """Return the bytes of the file with a ROTATION group of these poses and their data section."""
    count, segments = poses.shape[:2]
    if segments != len(labels) or not segments:
        wrong = f"expected {len(labels)} segments as there are labels (at least 1), got {segments}"
        raise ShapeError(message((target, "poses"), wrong))
    if count == 0 or count % file.frames:
        wrong = f"expected a whole multiple of {file.frames} frames, got {count}"
        raise ShapeError(message((target, "poses"), wrong))
    check_unique(labels, target, "segment")
    _check_texts(labels, (target, "ROTATION:LABELS"))
    data, processor = file.data, file.processor
    rotations = encode_floats(_rotation_words(poses, reliability, file), processor)
    data, rotations = (part + bytes(-len(part) % BLOCK) for part in (data, rotations))
    start = (file.content[0] - 1) * BLOCK
    section = _parameters_with_rotations(file, labels, count // file.frames, 0, 0, target)
    first = (start + len(section)) // BLOCK + 1
    data_block, rotation_block = first, first + len(data) // BLOCK
    if rotation_block > SHORT_LIMIT:  # the pointers have 16 bits: the shorter section goes first
        data_block, rotation_block = first + len(rotations) // BLOCK, first
    if data_block > SHORT_LIMIT:
        wrong = (
            f"points and poses are longer than {SHORT_LIMIT} blocks each, more than a C3D file can point to"
        )
        raise InputError(message(target, wrong, "Cut the trial."))
    section = _parameters_with_rotations(
        file, labels, count // file.frames, data_block, rotation_block, target
    )
    head = bytearray(file.content[:start])
    struct.pack_into(byte_order(processor) + "H", head, 16, data_block)
    blocks = [data, rotations] if data_block < rotation_block else [rotations, data]
    return b"".join([bytes(head), section, *blocks])


def _parameters_with_rotations(
    file: C3dFile, labels: Sequence[str], ratio: int, data_block: int, rotation_block: int, target: Path
) -> bytes:
    """Return the parameter section of the file with these pointers and one ROTATION group."""
    records, processor = file.records, file.processor
    groups = {record.name: -record.group for record in records if record.group < 0}
    point, old = groups["POINT"], groups.get("ROTATION")
    kept = [r for r in records if abs(r.group) != old and (r.group, r.name) != (point, "DATA_START")]
    new = next(number for number in range(1, 128) if number not in {abs(record.group) for record in kept})
    words = struct.Struct(byte_order(processor) + "H").pack
    names = [label.encode() for label in labels]
    width = max(map(len, names))
    rate = encode_floats(np.array([file.rate * ratio]), processor)
    added = [
        make_record(processor, point, "DATA_START", 2, (), words(data_block)),
        make_record(processor, -new, "ROTATION"),
        make_record(processor, new, "USED", 2, (), words(len(names))),
        make_record(processor, new, "DATA_START", 2, (), words(rotation_block)),
        make_record(processor, new, "RATIO", 2, (), words(ratio)),
        make_record(processor, new, "RATE", 4, (), rate),
    ]
    for at in range(0, len(names), MOST_LABELS):
        part, number = names[at : at + MOST_LABELS], at // MOST_LABELS + 1
        title = "LABELS" if number == 1 else f"LABELS{number}"
        text = b"".join(name.ljust(width) for name in part)
        added.append(make_record(processor, new, title, -1, (width, len(part)), text))
    section = join_records([*kept, *added], processor)
    if len(section) > MOST_BLOCKS * BLOCK:
        wrong = f"the parameters need {len(section) // BLOCK} blocks, a C3D file holds at most {MOST_BLOCKS}"
        raise InputError(message(target, wrong, "Write fewer points or shorter labels."))
    return section


def _rotation_words(poses: FloatArray, reliability: ArrayLike, file: C3dFile) -> FloatArray:
    """Return 17 numbers a pose: the matrix column by column, position in the file's unit; reliability."""
    units = [unit for unit in file.texts("POINT:UNITS") if unit] or ["mm"]
    matrix = poses.copy()
    matrix[..., :3, 3] /= metres_per_unit(units[0], (file.path, "POINT:UNITS"))
    missing = ~np.isfinite(matrix).all(axis=(-2, -1))
    matrix[missing] = np.nan
    words = np.empty((*missing.shape, 17))
    words[..., :16] = np.swapaxes(matrix, -1, -2).reshape(*missing.shape, 16)
    words[..., 16] = np.where(missing, MISSING_RELIABILITY, np.broadcast_to(reliability, missing.shape))
    return words

"""Header and parameter section of a C3D file, read from bytes and held against the file's size.

Everything that a length or a pointer in the file promises is checked against the bytes that are
there, so that a truncated or foreign file ends in a message.

References
----------
The C3D file format user guide (C3D.org), header, parameter and 2019 rotation sections.
"""

from __future__ import annotations

import dataclasses
import math
import struct
from dataclasses import dataclass, field
from pathlib import Path

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, message
from sta_prior.io.c3d_records import (
    BIG_ENDIAN,
    BLOCK,
    BYTE,
    CHARACTER,
    DEC,
    FLOAT,
    FORMAT_KEY,
    INTEGER,
    LITTLE_ENDIAN,
    SHORT_LIMIT,
    Parameter,
    Record,
    decode_floats,
    decode_numbers,
    decode_text,
    order,
)
from sta_prior.io.files import read_content

EXPORT_AGAIN = "Copy or export the file again."


@dataclass(frozen=True)
class C3dContent:
    """A C3D file whose header and parameters have been read and checked.

    Units: rate Hz; positions as in the file.
    """

    path: Path
    content: bytes
    processor: int
    section_start: int
    records: tuple[Record, ...]
    parameters: dict[str, Parameter] = field(repr=False)
    points: int = 0
    analog_words: int = 0
    first_frame: int = 1
    frames: int = 0
    scale: float = -1.0
    rate: float = 0.0
    data_start: int = 0

    @property
    def word_size(self) -> int:
        """Bytes of a number in the data section: 4 (floats) or 2 (integers)."""
        return 4 if self.scale < 0 else 2

    @property
    def frame_size(self) -> int:
        """Bytes of one frame in the data section, analog samples included."""
        return (4 * self.points + self.analog_words) * self.word_size

    def numbers(self, name: str) -> FloatArray | None:
        """Return a numeric parameter as a flat array (integers unsigned), or None if absent or empty."""
        parameter = self.parameters.get(name)
        if parameter is None or parameter.kind == CHARACTER or not parameter.content:
            return None
        return decode_numbers(parameter.content, parameter.kind, self.processor)

    def number(self, name: str) -> float | None:
        """Return the first value of a numeric parameter, or None if absent or empty."""
        values = self.numbers(name)
        return None if values is None else float(values[0])

    def whole(self, name: str) -> int | None:
        """Return the first value as a whole number, or None if absent; InputError if it is none."""
        value = self.number(name)
        if value is None:
            return None
        if not math.isfinite(value) or value != int(value):
            raise InputError(
                message((self.path, name), f"expected a whole number, got {value:g}", EXPORT_AGAIN)
            )
        return int(value)

    def texts(self, name: str) -> list[str]:
        """Return a text parameter as a list, blanks at the end removed; empty if absent."""
        parameter = self.parameters.get(name)
        if parameter is None or parameter.kind != CHARACTER:
            return []
        width = parameter.dimensions[0] if parameter.dimensions else 1
        if not width:
            return []
        parts = [parameter.content[i : i + width] for i in range(0, len(parameter.content), width)]
        return [decode_text(part) for part in parts]

    def all_texts(self, name: str) -> list[str]:
        """Return a text parameter with its continuations NAME2, NAME3, … joined."""
        texts, number = self.texts(name), 2
        while f"{name}{number}" in self.parameters:
            texts += self.texts(f"{name}{number}")
            number += 1
        return texts


def parse_c3d(path: str | Path) -> C3dContent:
    """Read header and parameters of a C3D file and check them against its size.

    Parameters
    ----------
    path : the file

    Returns
    -------
    The file's bytes with all that is needed to find the data in them.

    Raises
    ------
    InputError : not a C3D file, truncated, or its header and parameters contradict each other.
    """
    path = Path(path)
    return parse_content(read_content(path), path)


def parse_content(content: bytes, path: Path) -> C3dContent:
    """Do the work of parse_c3d on bytes; `path` is for messages."""
    if len(content) < 2 or content[1] != FORMAT_KEY or content[0] < 2:
        raise InputError(
            message(path, "not a C3D file (its second byte is not 50 hex)", "Export the trial as C3D.")
        )
    start = (content[0] - 1) * BLOCK
    if len(content) < start + BLOCK:
        wrong = f"not a C3D file or truncated, its parameters would end after byte {start + BLOCK}"
        raise InputError(message(path, f"{wrong}, it has {len(content)} bytes", EXPORT_AGAIN))
    processor = content[start + 3]
    if processor not in (LITTLE_ENDIAN, DEC, BIG_ENDIAN):
        raise InputError(
            message(
                path,
                f"not a C3D file or damaged, expected processor code 84, 85 or 86, got {processor}",
                EXPORT_AGAIN,
            )
        )
    end = start + content[start + 2] * BLOCK
    if len(content) < end:
        raise InputError(
            message(
                path,
                f"truncated inside its parameters, expected at least {end} bytes, got {len(content)}",
                EXPORT_AGAIN,
            )
        )
    records = _read_records(path, content, start + 4, end, processor)
    parameters = _name_parameters(records)
    return _check_layout(path, content, processor, start, records, parameters)


def _damaged(path: Path, name: str, what: str) -> InputError:
    return InputError(message((path, f"parameter {name}"), what, EXPORT_AGAIN))


def _read_records(path: Path, content: bytes, at: int, end: int, processor: int) -> tuple[Record, ...]:
    """Walk the chain of records; each must stay inside the section."""
    records: list[Record] = []
    while at + 2 <= end:
        length, group = struct.unpack_from("bb", content, at)
        if length == 0 or group == 0:
            break
        after_name = at + 2 + abs(length)
        name = decode_text(content[at + 2 : after_name]).upper()
        if after_name + 4 > end:
            raise _damaged(path, name, "runs past the end of the parameter section")
        (offset,) = struct.unpack_from(order(processor) + "H", content, after_name)
        body = after_name + 2
        if group < 0:
            data_at, needed = body + 1, body + 1 + content[body]
        else:
            kind, count = struct.unpack_from("bB", content, body)
            if kind not in (CHARACTER, BYTE, INTEGER, FLOAT) or count > 7:
                raise _damaged(path, name, f"type {kind} with {count} dimensions is not of this format")
            data_at = body + 2 + count
            size = abs(kind) * math.prod(content[body + 2 : data_at])
            needed = data_at + size
        # 0 marks the last record; some writers leave a number there that points outside the section
        is_last = offset == 0 or after_name + offset > end
        following = end if is_last else after_name + offset
        if needed > following:
            raise _damaged(path, name, f"needs bytes up to {needed}, its record ends at {following}")
        stop = following
        if is_last:  # give it its true length so that others can be put behind it
            stop = min(needed + (1 + content[needed] if group > 0 and needed < end else 0), end)
        raw = bytearray(content[at:stop])
        struct.pack_into(order(processor) + "H", raw, after_name - at, stop - after_name)
        records.append(Record(group, name, bytes(raw), data_at - at))
        if is_last:
            break
        at = following
    return tuple(records)


def _name_parameters(records: tuple[Record, ...]) -> dict[str, Parameter]:
    """Return the parameters by GROUP:NAME."""
    groups = {-record.group: record.name for record in records if record.group < 0}
    named: dict[str, Parameter] = {}
    for record in records:
        if record.group > 0 and record.group in groups:
            (length,) = struct.unpack_from("b", record.content)
            kind, count = struct.unpack_from("bB", record.content, 4 + abs(length))
            dimensions = tuple(record.content[record.data_at - count : record.data_at])
            size = abs(kind) * math.prod(dimensions)
            values = record.content[record.data_at : record.data_at + size]
            named[f"{groups[record.group]}:{record.name}"] = Parameter(kind, dimensions, values)
    return named


def _check_layout(
    path: Path,
    content: bytes,
    processor: int,
    start: int,
    records: tuple[Record, ...],
    parameters: dict[str, Parameter],
) -> C3dContent:
    """Read the header, hold it against the parameters and both against the file's size."""
    points, analog_words, first, last = struct.unpack_from(order(processor) + "4H", content, 2)
    data_block, samples = struct.unpack_from(order(processor) + "2H", content, 16)
    found = C3dContent(path, content, processor, start, records, parameters)
    if not any(name.startswith("POINT:") for name in parameters):
        raise InputError(message(path, "no POINT group among its parameters", EXPORT_AGAIN))
    _check_words(found, points, data_block, analog_words, samples)
    scale, rate = _scale_and_rate(found)
    layout = dataclasses.replace(
        found,
        points=points,
        analog_words=analog_words,
        first_frame=first,
        frames=_count_frames(found, first, last),
        scale=scale,
        rate=rate,
        data_start=(data_block - 1) * BLOCK,
    )
    if points == 0 or layout.frames <= 0:
        raise InputError(
            message(path, f"holds {points} points and {layout.frames} frames", "Name a file with 3D points.")
        )
    available = len(content) - layout.data_start
    if available < layout.frames * layout.frame_size:
        whole = max(available, 0) // layout.frame_size
        raise InputError(
            message(path, f"truncated, expected {layout.frames} frames, got {whole}", EXPORT_AGAIN)
        )
    return layout


def _check_words(found: C3dContent, points: int, data_block: int, analog_words: int, samples: int) -> None:
    """Refuse a header that the parameters contradict: the frames would be cut at wrong places."""
    for name, header in (("POINT:USED", points), ("POINT:DATA_START", data_block)):
        stated = found.whole(name)
        if stated is not None and stated != header:
            raise InputError(
                message(found.path, f"{name} is {stated}, the header says {header}", EXPORT_AGAIN)
            )
    used = found.whole("ANALOG:USED")
    if used is not None and used * samples != analog_words:
        raise InputError(
            message(
                found.path,
                f"ANALOG:USED {used} × {samples} samples a frame is {used * samples}, "
                f"the header says {analog_words}",
                EXPORT_AGAIN,
            )
        )
    if data_block < 2:
        raise InputError(
            message(found.path, f"its data start at block {data_block}, expected at least 2", EXPORT_AGAIN)
        )


def _scale_and_rate(found: C3dContent) -> tuple[float, float]:
    """Return POINT:SCALE and POINT:RATE (Hz); where the parameter is absent, the header's."""
    in_header = (decode_floats(found.content[at : at + 4], found.processor)[0] for at in (12, 20))
    header_scale, header_rate = (float(value) for value in in_header)
    stated_scale, stated_rate = found.number("POINT:SCALE"), found.number("POINT:RATE")
    scale = header_scale if stated_scale is None else stated_scale
    rate = header_rate if stated_rate is None else stated_rate
    if not math.isfinite(scale) or scale == 0:
        raise InputError(
            message(found.path, f"POINT:SCALE is {scale:g}, expected a number other than 0", EXPORT_AGAIN)
        )
    if scale * header_scale < 0:  # the sign tells integers from floats
        raise InputError(
            message(found.path, f"POINT:SCALE is {scale:g}, the header says {header_scale:g}", EXPORT_AGAIN)
        )
    if not math.isfinite(rate) or rate <= 0:
        raise InputError(
            message(
                found.path, f"POINT:RATE is {rate:g} Hz, expected more than 0", "Export it with its rate."
            )
        )
    return scale, rate


def _count_frames(found: C3dContent, first: int, last: int) -> int:
    """Return the number of frames; 16-bit words are not believed at their limit or where they wrapped."""
    span = last - first + 1
    short = found.whole("POINT:FRAMES") or span
    long = _long_frames(found)
    if long is None:
        return short
    saturated = short >= SHORT_LIMIT or last >= SHORT_LIMIT
    wrapped = long > SHORT_LIMIT and long % (SHORT_LIMIT + 1) == short
    return long if saturated or wrapped else short


def _long_frames(found: C3dContent) -> int | None:
    """Return the number of frames from the parameters for long trials, or None."""
    begin, finish = found.numbers("TRIAL:ACTUAL_START_FIELD"), found.numbers("TRIAL:ACTUAL_END_FIELD")
    words = (1, SHORT_LIMIT + 1)  # low word first
    if begin is not None and finish is not None and len(begin) == len(finish) == 2:
        span = float(finish @ words - begin @ words)
        if math.isfinite(span):
            return int(span) + 1
    return found.whole("POINT:LONG_FRAMES")

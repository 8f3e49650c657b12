"""Header and parameter section of a C3D file: reading them from bytes, and making records.

Everything that a length or a pointer in the file promises is checked against the bytes that are
there, so that a truncated or foreign file ends in a message.

References
----------
The C3D file format user guide (C3D.org), header, parameter and 2019 rotation sections.
"""

from __future__ import annotations

import math
import struct
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, message
from sta_prior.io.files import read_content

BLOCK = 512
FORMAT_KEY = 0x50
LITTLE_ENDIAN, DEC, BIG_ENDIAN = 84, 85, 86
CHARACTER, BYTE, INTEGER, FLOAT = -1, 1, 2, 4
SHORT_LIMIT = 65535  # largest frame number that a 16-bit word holds
_EXPORT_AGAIN = "Copy or export the file again."


@dataclass(frozen=True)
class Parameter:
    """One parameter: its type code, its dimensions (fastest first) and its bytes."""

    kind: int
    dimensions: tuple[int, ...]
    content: bytes


@dataclass(frozen=True)
class Record:
    """One record of the parameter section: its bytes and whose it is.

    `group` is the group's number (negative for the group's own record), `length` the bytes that
    the content needs; `data_at` is where, inside the bytes, a parameter's values start.
    """

    group: int
    name: str
    content: bytes
    data_at: int


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

    def texts(self, name: str) -> list[str]:
        """Return a text parameter as a list, blanks at the end removed; empty if absent."""
        parameter = self.parameters.get(name)
        if parameter is None or parameter.kind != CHARACTER:
            return []
        width = parameter.dimensions[0] if parameter.dimensions else 1
        if not width:
            return []
        parts = [parameter.content[i : i + width] for i in range(0, len(parameter.content), width)]
        return [_text(part) for part in parts]

    def all_texts(self, name: str) -> list[str]:
        """Return a text parameter with its continuations NAME2, NAME3, … joined."""
        texts, number = self.texts(name), 2
        while f"{name}{number}" in self.parameters:
            texts += self.texts(f"{name}{number}")
            number += 1
        return texts


def _text(content: bytes) -> str:
    """Decode text of unknown encoding (the standard says ASCII) and drop the padding."""
    content = content.split(b"\0", 1)[0]
    try:
        return content.decode("utf-8").strip()
    except UnicodeDecodeError:
        return content.decode("latin-1").strip()


def decode_floats(content: bytes, processor: int) -> FloatArray:
    """Decode 32-bit floats of any of the three byte orders, shape (len / 4,)."""
    if processor == DEC:
        # a DEC F-float has its 16-bit halves swapped and an exponent larger by two
        halves = np.frombuffer(content, "<u2").reshape(-1, 2)[:, ::-1]
        return np.ascontiguousarray(halves).view("<f4").ravel().astype(np.float64) / 4
    return np.frombuffer(content, ">f4" if processor == BIG_ENDIAN else "<f4").astype(np.float64)


def encode_floats(values: FloatArray, processor: int) -> bytes:
    """Encode 32-bit floats in any of the three byte orders; DEC has no NaN, which becomes 0."""
    if processor == DEC:
        scaled = np.ascontiguousarray(np.nan_to_num(values, nan=0.0) * 4, dtype="<f4")
        return np.ascontiguousarray(scaled.reshape(-1).view("<u2").reshape(-1, 2)[:, ::-1]).tobytes()
    return np.ascontiguousarray(values, dtype=">f4" if processor == BIG_ENDIAN else "<f4").tobytes()


def decode_numbers(content: bytes, kind: int, processor: int) -> FloatArray:
    """Decode the values of a numeric parameter; bytes and 16-bit integers are unsigned."""
    if kind == FLOAT:
        return decode_floats(content, processor)
    if kind == BYTE:
        return np.frombuffer(content, np.uint8).astype(np.float64)
    return np.frombuffer(content, ">u2" if processor == BIG_ENDIAN else "<u2").astype(np.float64)


def order(processor: int) -> str:
    """Return the byte-order sign of integers for struct."""
    return ">" if processor == BIG_ENDIAN else "<"


def parameter_record(
    group: int, name: str, kind: int, dimensions: Sequence[int], content: bytes, processor: int
) -> Record:
    """Make the record of one parameter.

    Parameters
    ----------
    group : number of its group, 1 … 127
    kind : CHARACTER, BYTE, INTEGER or FLOAT
    dimensions : sizes, fastest first; empty for a scalar
    content : the values, already in the byte order of `processor`
    """
    label = name.encode("ascii")
    body = struct.pack("bB", kind, len(dimensions)) + bytes(dimensions) + content + b"\0"
    head = struct.pack("bb", len(label), group) + label
    data_at = len(head) + 4 + len(dimensions)
    return Record(group, name, head + struct.pack(order(processor) + "H", len(body) + 2) + body, data_at)


def group_record(group: int, name: str, processor: int) -> Record:
    """Make the record that names a group."""
    label = name.encode("ascii")
    content = struct.pack("bb", len(label), -group) + label + struct.pack(order(processor) + "H", 3) + b"\0"
    return Record(-group, name, content, len(content))


def pack_texts(texts: Sequence[str]) -> tuple[tuple[int, int], bytes]:
    """Return dimensions and bytes of a list of texts, padded with blanks to one width."""
    encoded = [text.encode("utf-8") for text in texts]
    width = max((len(text) for text in encoded), default=0)
    return (width, len(encoded)), b"".join(text.ljust(width) for text in encoded)


def pad(content: bytes) -> bytes:
    """Fill up with zero bytes to a whole number of blocks."""
    return content + bytes(-len(content) % BLOCK)


def parameter_section(records: Sequence[Record], processor: int, place: object) -> bytes:
    """Join records to a parameter section of whole blocks.

    Raises
    ------
    InputError : more than the 255 blocks that the format allows.
    """
    body = b"".join(record.content for record in records) + bytes(2)
    blocks = -(-(len(body) + 4) // BLOCK)
    if blocks > 255:
        raise InputError(
            message(
                (place,),
                f"the parameters need {blocks} blocks, a C3D file holds at most 255",
                "Write fewer points or shorter labels.",
            )
        )
    return pad(bytes([1, FORMAT_KEY, blocks, processor]) + body)


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
        raise InputError(
            message(path, f"truncated, {len(content)} bytes end before the parameters", _EXPORT_AGAIN)
        )
    processor = content[start + 3]
    if processor not in (LITTLE_ENDIAN, DEC, BIG_ENDIAN):
        raise InputError(
            message(
                path,
                f"not a C3D file or damaged, expected processor code 84, 85 or 86, got {processor}",
                _EXPORT_AGAIN,
            )
        )
    end = start + content[start + 2] * BLOCK
    if len(content) < end:
        raise InputError(
            message(
                path,
                f"truncated inside its parameters, expected at least {end} bytes, got {len(content)}",
                _EXPORT_AGAIN,
            )
        )
    records = _read_records(path, content, start + 4, end, processor)
    parameters = _name_parameters(records)
    return _check_layout(path, content, processor, start, records, parameters)


def _damaged(path: Path, name: str, what: str) -> InputError:
    return InputError(message((path, f"parameter {name}"), what, _EXPORT_AGAIN))


def _read_records(path: Path, content: bytes, at: int, end: int, processor: int) -> tuple[Record, ...]:
    """Walk the chain of records; each must stay inside the section."""
    records: list[Record] = []
    while at + 2 <= end:
        length, group = struct.unpack_from("bb", content, at)
        if length == 0 or group == 0:
            break
        after_name = at + 2 + abs(length)
        name = _text(content[at + 2 : after_name]).upper()
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
            kind, count = struct.unpack_from(
                "bB", record.content, 4 + abs(struct.unpack_from("b", record.content)[0])
            )
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
    scale, rate = (
        float(decode_floats(content[12:16], processor)[0]),
        float(decode_floats(content[20:24], processor)[0]),
    )
    found = C3dContent(path, content, processor, start, records, parameters)
    if not any(name.startswith("POINT:") for name in parameters):
        raise InputError(message(path, "no POINT group among its parameters", _EXPORT_AGAIN))
    for name, header in (
        ("POINT:USED", points),
        ("POINT:DATA_START", data_block),
    ):
        stated = found.number(name)
        if stated is not None and stated != header:
            raise InputError(message(path, f"{name} is {stated:g}, the header says {header}", _EXPORT_AGAIN))
    used = found.number("ANALOG:USED")
    if used is not None and used * samples != analog_words:
        raise InputError(
            message(
                path,
                f"ANALOG:USED {used:g} × {samples} samples a frame is {used * samples:g}, "
                f"the header says {analog_words}",
                _EXPORT_AGAIN,
            )
        )
    stated_scale, stated_rate = found.number("POINT:SCALE"), found.number("POINT:RATE")
    scale = scale if stated_scale is None else stated_scale
    rate = rate if stated_rate is None else stated_rate
    if not math.isfinite(scale) or scale == 0:
        raise InputError(
            message(path, f"POINT:SCALE is {scale:g}, expected a number other than 0", _EXPORT_AGAIN)
        )
    if not math.isfinite(rate) or rate <= 0:
        raise InputError(
            message(
                path, f"POINT:RATE is {rate:g} Hz, expected more than 0", "Export it with its frame rate."
            )
        )
    frames = _count_frames(found, first, last)
    layout = C3dContent(
        path, content, processor, start, records, parameters,
        points=points, analog_words=analog_words, first_frame=first, frames=frames,
        scale=scale, rate=rate, data_start=(data_block - 1) * BLOCK,
    )  # fmt: skip
    if points == 0 or frames <= 0:
        raise InputError(
            message(path, f"holds {points} points and {max(frames, 0)} frames", "Name a file with 3D points.")
        )
    if data_block < 2:
        raise InputError(
            message(path, f"its data start at block {data_block}, expected at least 2", _EXPORT_AGAIN)
        )
    available = len(content) - layout.data_start
    if available < frames * layout.frame_size:
        whole = max(available, 0) // layout.frame_size
        raise InputError(message(path, f"truncated, expected {frames} frames, got {whole}", _EXPORT_AGAIN))
    return layout


def _count_frames(found: C3dContent, first: int, last: int) -> int:
    """Return the number of frames; the 16-bit words are believed only below their limit."""
    span = last - first + 1
    stated = found.number("POINT:FRAMES")
    short = span if stated is None or stated == 0 else int(stated)
    if short == span and last < SHORT_LIMIT and short < SHORT_LIMIT:
        return short
    begin, finish = found.numbers("TRIAL:ACTUAL_START_FIELD"), found.numbers("TRIAL:ACTUAL_END_FIELD")
    if begin is not None and finish is not None and len(begin) == len(finish) == 2:
        return int(finish @ (1, SHORT_LIMIT + 1) - begin @ (1, SHORT_LIMIT + 1)) + 1
    long = found.number("POINT:LONG_FRAMES")
    return int(long) if long is not None and math.isfinite(long) else short

"""Numbers, texts and records of a C3D parameter section, in all three byte orders.

References
----------
The C3D file format user guide (C3D.org), parameter section.
"""

from __future__ import annotations

import struct
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, message

BLOCK = 512
FORMAT_KEY = 0x50
LITTLE_ENDIAN, DEC, BIG_ENDIAN = 84, 85, 86
CHARACTER, BYTE, INTEGER, FLOAT = -1, 1, 2, 4
SHORT_LIMIT = 65535  # largest number that a 16-bit word holds
TEXTS_EACH = 255  # entries of one text parameter
LONGEST_TEXT = 127  # bytes; 255 of them still have a 16-bit record length


@dataclass(frozen=True)
class Parameter:
    """One parameter: its type code, its dimensions (fastest first) and its bytes."""

    kind: int
    dimensions: tuple[int, ...]
    content: bytes


@dataclass(frozen=True)
class Record:
    """One record of the parameter section: its bytes and whose it is.

    `group` is the group's number, negative for the group's own record; `data_at` is where, inside the
    bytes, a parameter's values start.
    """

    group: int
    name: str
    content: bytes
    data_at: int


def decode_text(content: bytes) -> str:
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
    name : its name, ASCII
    kind : CHARACTER, BYTE, INTEGER or FLOAT
    dimensions : sizes, fastest first; empty for a scalar
    content : the values, already in the byte order of `processor`
    processor : LITTLE_ENDIAN, DEC or BIG_ENDIAN
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


def integer_record(group: int, name: str, values: Sequence[int], processor: int) -> Record:
    """Make the record of unsigned 16-bit integers; one value is a scalar."""
    content = struct.pack(f"{order(processor)}{len(values)}H", *values)
    dimensions = () if len(values) == 1 else (len(values),)
    return parameter_record(group, name, INTEGER, dimensions, content, processor)


def float_record(
    group: int, name: str, values: ArrayLike, processor: int, dimensions: Sequence[int] = ()
) -> Record:
    """Make the record of 32-bit floats; `dimensions` are fastest first."""
    content = encode_floats(np.asarray(values, dtype=np.float64), processor)
    return parameter_record(group, name, FLOAT, dimensions, content, processor)


def text_records(group: int, name: str, texts: Sequence[str], processor: int, place: object) -> list[Record]:
    """Make the records NAME, NAME2, … of a list of texts, 255 each, padded with blanks to one width.

    Raises
    ------
    InputError : a text of more than 127 bytes.
    """
    for text in texts:
        if len(text.encode()) > LONGEST_TEXT:
            raise InputError(
                message(
                    (str(place), name),
                    f"{text[:20]}… takes {len(text.encode())} bytes, expected at most {LONGEST_TEXT}",
                    "Shorten it.",
                )
            )
    records = []
    for number in range(0, len(texts), TEXTS_EACH):
        part = [text.encode() for text in texts[number : number + TEXTS_EACH]]
        width = max(len(text) for text in part)
        title = name if number == 0 else f"{name}{number // TEXTS_EACH + 1}"
        content = b"".join(text.ljust(width) for text in part)
        records.append(parameter_record(group, title, CHARACTER, (width, len(part)), content, processor))
    return records


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
                str(place),
                f"the parameters need {blocks} blocks, a C3D file holds at most 255",
                "Write fewer points or shorter labels.",
            )
        )
    return pad(bytes([1, FORMAT_KEY, blocks, processor]) + body)


def with_pointer(records: Sequence[Record], group: int, block: int, processor: int) -> list[Record]:
    """Return the records with the group's DATA_START set to a block number."""
    pointer = integer_record(group, "DATA_START", [block], processor)
    return [
        pointer if record.group == group and record.name == "DATA_START" else record for record in records
    ]

"""The chain of records of a C3D parameter section: where they stand, and new ones.

Needed twice. ezc3d 1.7.2 ends the process on a damaged chain (of 300 files with 1 … 4 random bytes, 5 by
signal 11 and 4 by a loop without end), so only a sound one is handed to it. And a copy with segment poses
keeps the records of its source byte by byte.

References
----------
The C3D file format user guide (C3D.org), parameter section.
"""

from __future__ import annotations

import math
import struct
from collections.abc import Sequence
from pathlib import Path
from typing import NamedTuple

from sta_prior.errors import InputError, message
from sta_prior.io.c3d_residual import byte_order

BLOCK = 512
EXPORT_AGAIN = "Copy or export the file again."


class Record(NamedTuple):
    """One record: number of its group (negative for the group's own record), its name, and its bytes."""

    group: int
    name: str
    content: bytes


def read_records(content: bytes, path: Path) -> tuple[list[Record], bool]:
    """Walk the chain of records.

    Parameters
    ----------
    content : a C3D file whose parameter section is not cut off
    path : for messages

    Returns
    -------
    records, the last one with its true length; and whether the chain is sound: each record is filled by its
    name, values and description, exactly, and the last one is marked by 0.

    Raises
    ------
    InputError : a record that ends before its values do, or of an unknown type.
    """
    start = (content[0] - 1) * BLOCK
    at, end = start + 4, start + content[start + 2] * BLOCK
    order = byte_order(content[start + 3])
    records: list[Record] = []
    sound = True
    while at + 2 < end and content[at] and content[at + 1]:
        length, group = struct.unpack_from("bb", content, at)
        body = at + 4 + abs(length)  # behind the pointer to the next record
        name = content[at + 2 : body - 2].decode("latin-1").upper()
        needed = following = body
        if body + 2 <= end:
            (offset,) = struct.unpack_from(order + "H", content, body - 2)
            # 0 marks the last record; some writers leave a number there that points outside the section
            is_last = offset == 0 or body - 2 + offset > end
            following = end if is_last else body - 2 + offset
            sound &= not is_last or offset == 0
            if group > 0:
                kind, count = struct.unpack_from("bB", content, body)
                needed += 2 + count + abs(kind) * math.prod(content[body + 2 : body + 2 + count])
                if kind not in (-1, 1, 2, 4) or count > 7:
                    needed = end
        if needed >= following:
            place = (path, f"parameter {name!r}")
            raise InputError(message(place, "damaged, its values do not fit in its record", EXPORT_AGAIN))
        filled = needed + 1 + content[needed]  # with the description
        sound &= filled <= end if is_last else filled == following
        stop = min(filled, end) if is_last else following
        raw = bytearray(content[at:stop])
        struct.pack_into(order + "H", raw, body - 2 - at, stop - body + 2)
        records.append(Record(group, name, bytes(raw)))
        if is_last:
            break
        at = following
    return records, sound


def make_record(
    processor: int, group: int, name: str, kind: int = 0, sizes: Sequence[int] = (), values: bytes = b""
) -> Record:
    """Make the record of a parameter (kind −1 text, 2 integers, 4 floats) or of a group (negative)."""
    head = struct.pack("bB", kind, len(sizes)) + bytes(sizes) + values if group > 0 else b""
    label = name.encode("ascii")
    pointer = struct.pack(byte_order(processor) + "H", len(head) + 3)
    return Record(group, name, struct.pack("bb", len(label), group) + label + pointer + head + b"\0")


def join_records(records: Sequence[Record], processor: int) -> bytes:
    """Return a parameter section of whole blocks; beyond 255 blocks their number does not fit its byte."""
    body = b"".join(record.content for record in records) + bytes(2)
    blocks = -(-(len(body) + 4) // BLOCK)
    return (bytes([1, 0x50, blocks % 256, processor]) + body).ljust(blocks * BLOCK, b"\0")

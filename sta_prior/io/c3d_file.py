"""Opening C3D files: what they declare, held against their size, and the points from the libraries.

`c3d` decodes header and parameters of all three byte orders: it is plain Python and survives damage, where
ezc3d 1.7.2 ends the process by signal 6 or 11 (ROTATION:RATIO, ANALOG:SCALE or the name of a group damaged).
ezc3d then decodes the points of a file found sound, `c3d` those of all others: big-endian, which ezc3d
refuses; more than 65535 frames, which it cuts; analog samples without ANALOG:RATE, where it takes points from
wrong places without a word.
"""

from __future__ import annotations

import io
import math
import struct
import warnings
from dataclasses import dataclass
from pathlib import Path

import c3d
import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, message
from sta_prior.io.c3d_records import BLOCK, EXPORT_AGAIN, Record, read_records
from sta_prior.io.c3d_residual import BIG_ENDIAN, DEC, LITTLE_ENDIAN, byte_order
from sta_prior.io.files import read_content

SHORT_LIMIT = 65535  # largest number that a 16-bit word holds
ROTATION_SIZE = 17 * 4  # bytes of a pose
HEADER_EVENTS = (12345, 18)  # the key of events in the header, and how many there may be
LIBRARY_ERRORS = (
    ArithmeticError,
    AssertionError,
    AttributeError,
    EOFError,
    LookupError,
    MemoryError,
    OSError,
    RuntimeError,
    TypeError,
    ValueError,
    struct.error,
)


class _Reader(c3d.Reader):  # type: ignore[misc]
    """The library's reader, with frames and samples as checked here and without its own assertions.

    Those refuse files whose header rounds the rate, and it takes POINT:LONG_FRAMES for a frame's number.
    """

    frames = 0
    first_frame = 1

    def _check_metadata(self) -> None: ...

    @property
    def last_frame(self) -> int:
        return self.frames

    @property
    def analog_per_frame(self) -> int:
        return int(self.header.analog_per_frame)


@dataclass
class C3dFile:
    """A C3D file whose header and parameters have been read and checked. Rate Hz, else as in the file."""

    path: Path
    content: bytes
    processor: int
    reader: _Reader
    records: list[Record]
    is_sound: bool
    points: int = 0
    first_frame: int = 1
    frames: int = 0
    frame_size: int = 0
    scale: float = -1.0
    rate: float = 0.0
    data_start: int = 0

    @property
    def data(self) -> bytes:
        """The data section: points and analog samples."""
        return self.content[self.data_start : self.data_start + self.frames * self.frame_size]

    def numbers(self, name: str) -> FloatArray | None:
        """Return a numeric parameter as a flat array (integers unsigned), or None if absent or empty."""
        parameter = self.reader.get(name)
        if parameter is None or parameter.bytes_per_element < 0 or not parameter.bytes:
            return None
        parameter.dimensions = [parameter.num_elements]  # the library makes no array of a scalar
        values = parameter.float_array if parameter.bytes_per_element == 4 else parameter.uint_array
        return np.asarray(values, dtype=np.float64)

    def number(self, name: str) -> float | None:
        """Return the first value of a numeric parameter, or None if absent or empty."""
        values = self.numbers(name)
        return None if values is None else float(values[0])

    def whole(self, name: str) -> int | None:
        """Return the first value as a whole number, or None if absent; InputError if it is none."""
        value = self.number(name)
        if value is not None and not value.is_integer():
            raise self.error(f"expected a whole number, got {value:g}", name)
        return None if value is None else int(value)

    def texts(self, name: str) -> list[str]:
        """Return a text parameter with its continuations NAME2, NAME3, …, blanks at the ends removed."""
        texts: list[str] = []
        number, parameter = 1, self.reader.get(name)
        while parameter is not None and parameter.bytes_per_element < 0:
            texts += [text.split("\0")[0].strip() for text in parameter.string_array.ravel()]
            number += 1
            parameter = self.reader.get(f"{name}{number}")
        return texts

    def error(self, wrong: str, name: str | None = None, do: str = EXPORT_AGAIN) -> InputError:
        """Return the error that says what is wrong, and with which parameter."""
        return InputError(message((self.path, name), wrong, do))


def open_c3d(path: str | Path) -> C3dFile:
    """Read header and parameters of a C3D file and check them against each other and against its size.

    Raises
    ------
    InputError : not a C3D file, truncated, damaged, or its header and parameters contradict each other.
    """
    return parse_c3d(read_content(path), Path(path))


def parse_c3d(content: bytes, path: Path) -> C3dFile:
    """Do the work of open_c3d on bytes; `path` is for messages."""
    processor = _check_container(content, path)
    records, sound = read_records(content, path)
    head = bytearray(content)
    key, events = struct.unpack_from(byte_order(processor) + "2H", content, 298)
    if key != HEADER_EVENTS[0] or events > HEADER_EVENTS[1]:
        head[300:302] = bytes(2)  # `c3d` believes any number that stands there
    try:
        with warnings.catch_warnings(action="ignore"):
            file = C3dFile(path, content, processor, _Reader(io.BytesIO(head)), records, sound)
            _check_declared(file)
    except LIBRARY_ERRORS as error:
        if isinstance(error, InputError):
            raise
        wrong = f"its parameters cannot be decoded ({type(error).__name__})"
        raise InputError(message(path, wrong, EXPORT_AGAIN)) from None
    return file


def _check_container(content: bytes, path: Path) -> int:
    """Return the processor code of bytes that hold a whole parameter section."""
    if len(content) < 2 or content[1] != 0x50 or content[0] < 2:
        wrong = "not a C3D file (its second byte is not 50 hex)"
        raise InputError(message(path, wrong, "Export the trial as C3D."))
    start, size = (content[0] - 1) * BLOCK, len(content)
    wrong = ""
    if size < start + BLOCK:
        wrong = f"not a C3D file or truncated, its parameters would end after byte {start + BLOCK}, "
        wrong += f"it has {size} bytes"
    elif (processor := content[start + 3]) not in (LITTLE_ENDIAN, DEC, BIG_ENDIAN):
        wrong = f"not a C3D file or damaged, expected processor code 84, 85 or 86, got {processor}"
    elif size < (end := start + content[start + 2] * BLOCK):
        wrong = f"truncated inside its parameters, expected at least {end} bytes, got {size}"
    if wrong:
        raise InputError(message(path, wrong, EXPORT_AGAIN))
    return processor


def _check_declared(file: C3dFile) -> None:
    """Fill in what header and parameters declare; refuse contradictions, which would cut frames wrongly."""
    header = file.reader.header
    group = file.reader.get("POINT")
    if group is None or not any(group.param_keys()):
        raise file.error("no POINT group among its parameters")
    for name, word in (("POINT:USED", header.point_count), ("POINT:DATA_START", header.data_block)):
        if (stated := file.whole(name)) not in (None, word):
            raise file.error(f"{name} is {stated}, the header says {word}")
    used, samples = file.whole("ANALOG:USED"), header.analog_per_frame
    if used is not None and used * samples != header.analog_count:
        wrong = f"ANALOG:USED {used} × {samples} samples a frame is {used * samples}"
        raise file.error(f"{wrong}, the header says {header.analog_count}")
    if header.data_block < 2:
        raise file.error(f"its data start at block {header.data_block}, expected at least 2")
    stated_scale, stated_rate = file.number("POINT:SCALE"), file.number("POINT:RATE")
    file.scale = float(header.scale_factor) if stated_scale is None else stated_scale
    file.rate = float(header.frame_rate) if stated_rate is None else stated_rate
    if not math.isfinite(file.scale) or file.scale == 0:
        raise file.error(f"POINT:SCALE is {file.scale:g}, expected a number other than 0")
    if file.scale * header.scale_factor < 0:  # the sign tells integers from floats
        raise file.error(f"POINT:SCALE is {file.scale:g}, the header says {header.scale_factor:g}")
    if not math.isfinite(file.rate) or file.rate <= 0:
        wrong = f"POINT:RATE is {file.rate:g} Hz, expected more than 0"
        raise file.error(wrong, do="Export it with its rate.")
    file.points, file.first_frame = int(header.point_count), int(header.first_frame)
    file.frames = file.reader.frames = _count_frames(file)
    file.frame_size = (4 * file.points + int(header.analog_count)) * (4 if file.scale < 0 else 2)
    file.data_start = (int(header.data_block) - 1) * BLOCK
    if file.points == 0 or file.frames <= 0:
        wrong = f"holds {file.points} points and {file.frames} frames"
        raise file.error(wrong, do="Name a file with 3D points.")
    whole = max(len(file.content) - file.data_start, 0) // file.frame_size
    if whole < file.frames:
        raise file.error(f"truncated, expected {file.frames} frames, got {whole}")


def _count_frames(file: C3dFile) -> int:
    """Return the number of frames; 16-bit words are not believed at their limit or where they wrapped."""
    last = int(file.reader.header.last_frame)
    short = file.whole("POINT:FRAMES") or last - file.first_frame + 1
    begin, finish = file.numbers("TRIAL:ACTUAL_START_FIELD"), file.numbers("TRIAL:ACTUAL_END_FIELD")
    if begin is not None and finish is not None and len(begin) == len(finish) == 2:
        long = int((finish - begin) @ (1, SHORT_LIMIT + 1)) + 1  # low word first
    else:
        long = file.whole("POINT:LONG_FRAMES") or short
    wrapped = long > SHORT_LIMIT and long % (SHORT_LIMIT + 1) == short
    return long if short >= SHORT_LIMIT or last >= SHORT_LIMIT or wrapped else short


def read_coordinates(file: C3dFile) -> FloatArray:
    """Return the coordinates of all points, shape (time, point, 3), unit of the file; unseen ones any number.

    Raises
    ------
    InputError : neither library decodes them.
    """
    shape = (file.frames, file.points, 3)
    if _is_sound_for_ezc3d(file):
        import ezc3d  # here: a compiled library, needed by this function only

        try:
            found = ezc3d.c3d(str(file.path))["data"]["points"][:3].transpose(2, 1, 0)
        except LIBRARY_ERRORS:
            found = np.empty(0)
        if found.shape == shape:
            return np.ascontiguousarray(found, dtype=np.float64)
    try:
        with warnings.catch_warnings(action="ignore"):
            frames = [points[:, :3] for _, points, _ in file.reader.read_frames(check_nan=False)]
        return np.array(frames, dtype=np.float64).reshape(shape)
    except LIBRARY_ERRORS as error:
        raise file.error(f"its points cannot be decoded ({type(error).__name__})") from None


def _is_sound_for_ezc3d(file: C3dFile) -> bool:
    """Tell whether ezc3d decodes the file: whole, at the right places and without ending the process."""
    if file.processor == BIG_ENDIAN or file.frames > SHORT_LIMIT or not file.is_sound:
        return False
    needed = ("POINT:USED", "POINT:FRAMES", "POINT:SCALE", "POINT:RATE", "ANALOG:USED")
    if any(file.number(name) is None for name in needed):
        return False
    channels, samples = file.number("ANALOG:USED") or 0, file.reader.analog_per_frame
    if channels:
        known = [file.numbers(f"ANALOG:{name}") for name in ("SCALE", "OFFSET")]
        if (file.number("ANALOG:RATE") or 0) != samples * file.rate:
            return False
        if any(values is None or len(values) < channels for values in known):
            return False
    used, ratio, block = (file.number(f"ROTATION:{name}") or 0 for name in ("USED", "RATIO", "DATA_START"))
    size = file.frames * used * ratio * ROTATION_SIZE
    return not used or (ratio >= 1 and block >= 2 and (block - 1) * BLOCK + size <= len(file.content))

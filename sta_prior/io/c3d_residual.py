"""The fourth word of each stored point: whether it was seen, and its residual.

Read here and not by the libraries, since each of them loses the gaps of real files. Measured over all 65536
words, float and integer files, Intel and DEC, ezc3d 1.7.2 and c3d 0.6.0:

- float files, words 8000 … FFFF hex (negative as 16 bits, stored as 32768 … 65535): both call all 32768 of
  them seen. A walking trial of 25 points × 672 frames has 3902 such gaps, which become points at the origin.
- ezc3d takes the residual from the high byte, where the camera mask is, reading and writing: 128 of the 32768
  words of seen points give the right residual. The coordinates of both libraries are right.

References
----------
The C3D file format user guide (C3D.org): point data, sign of the residual.
"""

from __future__ import annotations

import numpy as np

from sta_prior.checks import BoolArray, FloatArray

LITTLE_ENDIAN, DEC, BIG_ENDIAN = 84, 85, 86


def byte_order(processor: int) -> str:
    """Return the sign of the byte order of integers, for struct and NumPy."""
    return ">" if processor == BIG_ENDIAN else "<"


def decode_floats(content: bytes, processor: int) -> FloatArray:
    """Decode 32-bit floats, shape (len / 4,); DEC swaps their halves and has an exponent larger by two."""
    if processor == DEC:
        halves = np.frombuffer(content, "<u2").reshape(-1, 2)[:, ::-1]
        return np.ascontiguousarray(halves).view("<f4").ravel().astype(np.float64) / 4
    return np.frombuffer(content, byte_order(processor) + "f4").astype(np.float64)


def encode_floats(values: FloatArray, processor: int) -> bytes:
    """Encode 32-bit floats; DEC has no NaN, which becomes 0."""
    if processor == DEC:
        scaled = np.ascontiguousarray(np.nan_to_num(values, nan=0.0) * 4, dtype="<f4")
        return np.ascontiguousarray(scaled.reshape(-1).view("<u2").reshape(-1, 2)[:, ::-1]).tobytes()
    return values.astype(byte_order(processor) + "f4").tobytes()


def decode_residual(
    content: bytes, processor: int, points: int, frames: int, scale: float
) -> tuple[BoolArray, FloatArray]:
    """Split the fourth words of a data section.

    Parameters
    ----------
    content : the section, exactly
    processor : LITTLE_ENDIAN, DEC or BIG_ENDIAN
    points, frames : how many
    scale : POINT:SCALE; negative where numbers are 32-bit floats and not 16-bit integers

    Returns
    -------
    occluded (time, point): the sign of the 16 bits; residual (time, point): the low byte times |scale|.
    """
    kind, size = ("u4", 4) if scale < 0 else ("i2", 2)
    stored = np.frombuffer(content, f"{byte_order(processor)}{kind}").reshape(
        frames, len(content) // frames // size
    )
    fourth = np.ascontiguousarray(stored[:, 3 : 4 * points : 4])
    word = decode_floats(fourth.tobytes(), processor) if scale < 0 else fourth.astype(np.float64)
    word = word.reshape(frames, points)
    whole = np.where(np.isfinite(word) & (np.abs(word) <= 65536), word, -1.0)
    bits = whole.astype(np.int64)
    occluded: BoolArray = np.asarray((whole < 0) | ((bits & 0x8000) != 0))
    return occluded, (bits & 0xFF).astype(np.float64) * abs(scale)

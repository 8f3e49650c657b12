"""C3D files made byte by byte for the tests, by code that shares nothing with the package's own writer."""

from __future__ import annotations

import struct
from collections.abc import Sequence
from pathlib import Path

import numpy as np

LITTLE, DEC, BIG = 84, 85, 86
RATE = 50.0
# one step of the residual, and in integer files of the coordinates; a power of two, exact in each format
SCALE = 0.125


def _integers(values: Sequence[int], processor: int) -> bytes:
    sign = ">" if processor == BIG else "<"
    return struct.pack(f"{sign}{len(values)}h", *(((int(v) + 32768) % 65536) - 32768 for v in values))


def _floats(values: Sequence[float], processor: int) -> bytes:
    if processor == BIG:
        return struct.pack(f">{len(values)}f", *values)
    if processor == LITTLE:
        return struct.pack(f"<{len(values)}f", *values)
    parts = (struct.pack("<f", 4.0 * value) for value in values)
    return b"".join(part[2:] + part[:2] for part in parts)


def _texts(texts: Sequence[str], width: int) -> tuple[list[int], bytes]:
    return [width, len(texts)], b"".join(text.encode().ljust(width) for text in texts)


def _record(
    group: int, name: str, kind: int, dimensions: Sequence[int], content: bytes, processor: int
) -> bytes:
    body = struct.pack("bB", kind, len(dimensions)) + bytes(dimensions) + content + b"\x04note"
    return struct.pack("bb", len(name), group) + name.encode() + _integers([len(body) + 2], processor) + body


def _group(group: int, name: str, processor: int) -> bytes:
    return struct.pack("bb", len(name), -group) + name.encode() + _integers([3], processor) + b"\x00"


def make_c3d(
    path: Path,
    words: np.ndarray,
    labels: Sequence[str] | None = None,
    *,
    processor: int = LITTLE,
    real: bool = True,
    units: str | None = "mm",
    rate: float = RATE,
    scale: float = SCALE,
    first_frame: int = 1,
    events: Sequence[tuple[str, str, float, float]] = (),
    changes: dict[str, object] | None = None,
    analog: int = 0,
) -> Path:
    """Write words of shape (frame, point, 4): x, y, z and the fourth word, as stored.

    `changes` puts other numbers than the true ones into header words or parameters, by name; None leaves
    the parameter out. `analog` is the number of analog channels, one zero sample a frame each.
    """
    frames, points = words.shape[:2]
    changes = changes or {}
    labels = [f"M{number}" for number in range(points)] if labels is None else labels
    signed = -scale if real else scale
    values = {
        "header points": points,
        "header analog": analog,
        "header last": first_frame + frames - 1,
        "header scale": signed,
        "header rate": rate,
        "USED": points,
        "FRAMES": frames,
        "SCALE": signed,
        "RATE": rate,
        "DATA_START": None,
        "ANALOG USED": analog,
        **changes,
    }
    blocks = 4 + len(labels) * 24 // 512
    data_block = 2 + blocks
    if "DATA_START" not in changes:
        values["DATA_START"] = data_block
    records = [_group(1, "POINT", processor), _group(2, "ANALOG", processor)]
    for name in ("USED", "FRAMES", "DATA_START"):
        if values[name] is not None:
            records.append(_record(1, name, 2, [], _integers([values[name]], processor), processor))
    for name in ("SCALE", "RATE"):
        if values[name] is not None:
            records.append(_record(1, name, 4, [], _floats([values[name]], processor), processor))
    if "LONG_FRAMES" in changes:
        records.append(
            _record(1, "LONG_FRAMES", 4, [], _floats([changes["LONG_FRAMES"]], processor), processor)
        )
    records.append(_record(2, "USED", 2, [], _integers([values["ANALOG USED"]], processor), processor))
    if units is not None:
        records.append(_record(1, "UNITS", -1, *_texts([units], 4), processor))
    if labels:
        records.append(_record(1, "LABELS", -1, *_texts(labels, 20), processor))
    if events:
        names, contexts, minutes, seconds = zip(*events, strict=True)
        clock = np.stack([minutes, seconds], axis=1).ravel().tolist()
        records += [
            _group(3, "EVENT", processor),
            _record(3, "USED", 2, [], _integers([len(events)], processor), processor),
            _record(3, "TIMES", 4, [2, len(events)], _floats(clock, processor), processor),
            _record(3, "LABELS", -1, *_texts(names, 12), processor),
            _record(3, "CONTEXTS", -1, *_texts(contexts, 8), processor),
        ]
    section = bytes([1, 0x50, blocks, processor]) + b"".join(records)
    assert len(section) + 2 <= blocks * 512
    header = (
        bytes([2, 0x50])
        + _integers(
            [values["header points"], values["header analog"], first_frame, values["header last"], 10],
            processor,
        )
        + _floats([values["header scale"]], processor)
        + _integers([data_block, 1 if analog else 0], processor)
        + _floats([values["header rate"]], processor)
    )
    stored = np.concatenate([words.reshape(frames, -1), np.zeros((frames, analog))], axis=1).ravel().tolist()
    data = _floats(stored, processor) if real else _integers([int(v) for v in stored], processor)
    path.write_bytes(header.ljust(512, b"\0") + section.ljust(blocks * 512, b"\0") + data)
    return path


def cloud(frames: int = 4, points: int = 3, seed: int = 0) -> np.ndarray:
    """Words of seen points within some 2 m, whole numbers; the fourth word is 5: residual 5, no camera."""
    rng = np.random.default_rng(seed)
    words = np.full((frames, points, 4), 5.0)
    words[..., :3] = rng.integers(-1000, 1000, (frames, points, 3))
    return words

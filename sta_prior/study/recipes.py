"""The frame of a segment as the lab file writes it.

Conventions: docs/conventions.md. The file's form: docs/files.md.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

from sta_prior.checks import nearest
from sta_prior.errors import InputError, message
from sta_prior.io.text import Table
from sta_prior.study.frames import (
    AXES,
    OPTIONAL_LANDMARKS,
    STANDARD_LANDMARKS,
    AxisName,
    AxisRecipe,
    Frame,
    FrameRecipe,
    Side,
    StandardFrame,
)

RECIPE_KEYS = ("origin", *AXES, "side")
STANDARD_KEYS = ("standard", "side", "points")
FORMS = 'expected "imaging", a recipe with origin and two of x, y, z, or a table with standard'


def read_frame(segment: Table) -> Frame:
    """Read a segment's frame.

    Parameters
    ----------
    segment : its table in the lab file

    Returns
    -------
    A recipe, a standard frame, or None for "imaging".

    Raises
    ------
    InputError : with file and dotted place: none of the three forms, an unknown or
        missing key, a landmark the standard does not have.
    """
    written: Any = segment.get("frame")
    if isinstance(written, str):
        if written == "imaging":
            return None
        do = nearest(written, ["imaging"]) or 'A standard is written { standard = "isb-tibia", … }.'
        raise InputError(message(segment.place("frame"), f"{FORMS}, got {written!r}", do))
    if "frame" not in segment:
        raise InputError(message(segment.place("frame"), f"missing, {FORMS}", nearest("frame", segment)))
    table = segment.table("frame")
    return _read_standard(table) if "standard" in table else _read_recipe(table)


def read_side(table: Table) -> Side:
    """Read the side of the body a joint or a standard frame is declared for.

    Raises
    ------
    InputError : missing, or neither right nor left.
    """
    if "side" not in table:
        raise InputError(
            message(table.place("side"), "missing, expected right or left", 'Write side = "right".')
        )
    side: Side = table.choice("side", ("right", "left"))
    return side


def frame_sides(frames: Iterable[Frame]) -> set[Side]:
    """Return the sides of the body that standard frames are declared for."""
    return {frame.side for frame in frames if isinstance(frame, StandardFrame) and frame.side is not None}


def _read_standard(table: Table) -> StandardFrame:
    """Read { standard = …, side = …, points = { … } }."""
    table.refuse_unknown(STANDARD_KEYS)
    standard = table.choice("standard", STANDARD_LANDMARKS)
    needed = STANDARD_LANDMARKS[standard]
    optional = OPTIONAL_LANDMARKS.get(standard, ())
    # A pelvis has right and left landmarks and needs no side.
    side = read_side(table) if "side" in table or standard != "isb-pelvis" else None
    points = table.table("points")
    points.refuse_unknown((*needed, *optional))
    absent = [name for name in needed if name not in points]
    if absent:
        raise InputError(
            message(
                points.place(),
                f"{standard} needs {' '.join(needed)}, {' '.join(absent)} missing",
                "Name the point that shows it.",
            )
        )
    landmarks = [(name, points.text(name)) for name in needed]
    landmarks += [(name, points.text(name)) for name in optional if name in points]
    return StandardFrame(standard, side, tuple(landmarks))


def _read_recipe(table: Table) -> FrameRecipe:
    """Read { origin = […], y = { from = […], to = […] }, z = { … } }; the first axis in the file is exact."""
    table.refuse_unknown(RECIPE_KEYS)
    origin = _points(table, "origin")
    named: list[AxisName] = [axis for key in table for axis in AXES if axis == key]
    if len(named) != 2:
        got = " ".join(named) or "none"
        raise InputError(
            message(
                table.place(),
                f"expected two of the axes x, y, z, got {got}",
                "The third follows by the right-hand rule.",
            )
        )
    axes = [_read_axis(axis, table.table(axis)) for axis in named]
    side = table.choice("side", ("right", "left", "both"), None)
    return FrameRecipe(origin, axes[0], axes[1], side)


def _read_axis(axis: AxisName, table: Table) -> AxisRecipe:
    """Read { from = […], to = […] }."""
    table.refuse_unknown(("from", "to"))
    start, end = _points(table, "from"), _points(table, "to")
    if set(start) == set(end):
        raise InputError(
            message(table.place(), f"from and to are the same points, {' '.join(start)}", "Name two places.")
        )
    return AxisRecipe(axis, start, end)


def _points(table: Table, key: str) -> tuple[str, ...]:
    """Read a list of point names that is not empty."""
    names = tuple(table.texts(key))
    if not names:
        raise InputError(message(table.place(key), "an empty list, expected points", "Name at least one."))
    return names

"""The one form in which points leave a reader: a Dataset in SI units.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Sequence
from pathlib import Path
from typing import NamedTuple

import numpy as np
import xarray as xr

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, message

AXES = ("x", "y", "z")
METRES_PER_UNIT = {"mm": 1e-3, "cm": 1e-2, "m": 1.0}
LOWEST_EXTENT = 0.020
HIGHEST_EXTENT = 100.0


class Event(NamedTuple):
    """One event of a trial: its label, its time (s, clock of the points) and its context."""

    label: str
    time: float
    context: str


def metres_per_unit(unit: str, place: str | Path | tuple[object, ...]) -> float:
    """Return how many metres the declared unit is; InputError for a unit that is not known."""
    try:
        return METRES_PER_UNIT[unit.strip().lower()]
    except KeyError:
        raise InputError(
            message(
                place,
                f"unit {unit.strip()!r}, expected one of {', '.join(METRES_PER_UNIT)}",
                "Correct the declared unit.",
            )
        ) from None


def check_extent(
    position: FloatArray,
    unit: str,
    place: str | Path | tuple[object, ...],
    lowest: float = LOWEST_EXTENT,
) -> None:
    """Notice metres declared as millimetres, and the reverse, by the size of the whole cloud.

    Parameters
    ----------
    position : shape (..., axis), m, NaN where not seen
    unit : unit the file declares, for the message
    place : where the positions stand
    lowest : smallest extent that passes, m

    Raises
    ------
    InputError : the cloud is smaller than `lowest` or larger than 100 m. Limits: common practice, no source.
    """
    flat = position.reshape(-1, position.shape[-1])
    flat = flat[np.isfinite(flat).all(axis=1)]
    if not len(flat):
        return
    extent = float(np.ptp(flat, axis=0).max())
    if lowest <= extent <= HIGHEST_EXTENT:
        return
    small = extent < lowest
    limit = f"at least {lowest * 1e3:g} mm" if small else "at most 100 m"
    size = f"{extent * 1e3:.3g} mm" if small else f"{extent:.4g} m"
    if small:
        likely = "The numbers look like metres: correct the declared unit or export the file again."
        do = likely if unit.lower() != "m" else "Check what was exported."
    else:
        likely = "The numbers look like millimetres: correct the declared unit, or remove stray points."
        do = likely if unit.lower() != "mm" else "Remove stray points."
    wrong = f"declared in {unit}, all points together span {size}, expected {limit}"
    raise InputError(message(place, wrong, do))


def check_unique(labels: Sequence[str], place: str | Path | tuple[object, ...], what: str) -> None:
    """Raise InputError naming the first label that stands twice."""
    repeated = [label for label, count in Counter(labels).items() if count > 1]
    if repeated:
        first = repeated[0]
        positions = [index + 1 for index, label in enumerate(labels) if label == first]
        raise InputError(
            message(
                place,
                f"{what} {first} stands {len(positions)} times (numbers "
                f"{', '.join(map(str, positions))}), expected once",
                "Rename or remove all but one.",
            )
        )


def points_dataset(
    position: FloatArray,
    residual: FloatArray,
    time: FloatArray,
    labels: Sequence[str],
    *,
    rate: float,
    source: str,
    units_declared: str,
    events: Sequence[Event] = (),
) -> xr.Dataset:
    """Put arrays into a Points Dataset.

    Parameters
    ----------
    position : shape (time, point, 3), m, lab frame, NaN where occluded
    residual : shape (time, point), m, 0 where calculated, NaN where unknown or occluded
    time : shape (time,), s
    labels : names of the points
    rate : frames per second, Hz; NaN where there is one frame only
    source : name of the file
    units_declared : unit the file declares
    events : label, time (s) and context of each

    Returns
    -------
    Dataset with dims time, point, axis.
    """
    return xr.Dataset(
        {
            "position": (("time", "point", "axis"), position, {"units": "m"}),
            "residual": (
                ("time", "point"),
                residual,
                {"units": "m", "comment": "0 where the point was calculated, NaN where unknown or occluded"},
            ),
        },
        coords={
            "time": ("time", time, {"units": "s"}),
            "point": ("point", np.array(labels, dtype=str)),
            "axis": ("axis", list(AXES)),
        },
        attrs={
            "rate": float(rate),
            "source": source,
            "units_declared": units_declared,
            "events": json.dumps([list(event) for event in events], ensure_ascii=False),
        },
    )


def read_events(points: xr.Dataset) -> list[Event]:
    """Return the events of a Points Dataset, in the order of the file."""
    return [
        Event(str(label), float(time), str(context))
        for label, time, context in json.loads(points.attrs.get("events", "[]"))
    ]

"""Where a trial's data comes from, and reading it once.

Conventions: docs/conventions.md. The file's form: docs/files.md.
"""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Literal

import numpy as np
import xarray as xr

from sta_prior.checks import FloatArray, nearest
from sta_prior.errors import InputError, StaPriorWarning, message
from sta_prior.io.c3d import read_c3d_rotations
from sta_prior.io.files import POINT_SUFFIXES, read_points
from sta_prior.io.points import read_events
from sta_prior.io.text import Table, read_bone_table
from sta_prior.se3 import make_pose
from sta_prior.study.lab import MINIMUM_MARKERS, Lab, check_distinct

# Files kept in memory: a static trial that is a trial too, skin and bone of the trial at hand.
FILES_KEPT = 8
FOOT_STRIKES = frozenset({"foot strike", "heel strike", "foot contact", "initial contact"})


@dataclass(frozen=True)
class BoneSource:
    """The file that shows the bones of a trial.

    Attributes
    ----------
    kind : "table" a bone pose table, "rotations" a C3D file with a ROTATION group,
        "pins" a C3D file with markers on bone pins
    path : the file
    clusters : for pins, pairs of a segment and its pin markers
    """

    kind: Literal["table", "rotations", "pins"]
    path: Path
    clusters: tuple[tuple[str, tuple[str, ...]], ...] = ()


def existing_file(table: Table, key: str, of: str, suffixes: Sequence[str]) -> Path:
    """Return the path of a file that a study names, relative to the study file.

    Parameters
    ----------
    table, key : where the study names it
    of : whose it is, for the message
    suffixes : name endings that can be read

    Raises
    ------
    InputError : names the study file and the key; no such file, or another suffix.
    """
    written = table.text(key)
    path: Path = table.path.parent / written
    if path.suffix.lower() not in suffixes:
        expected = ", ".join(suffixes)
        raise InputError(
            message(
                table.place(key),
                f"expected a file name ending in {expected}, got {written}",
                f"It is the {key} of {of}.",
            )
        )
    if not path.is_file():
        raise InputError(
            message(table.place(key), f"no file {written}, needed for {of}", "Check the name and the folder.")
        )
    return path


def read_bone_source(table: Table, lab: Lab, of: str) -> BoneSource | None:
    """Read the bone key of a trial; None where there is none.

    Raises
    ------
    InputError : with file and dotted place: none of the three forms, a missing file, a
        cluster of a segment that is not in the lab or of fewer than three markers.
    """
    if "bone" not in table:
        return None
    if isinstance(table["bone"], str):
        return BoneSource("table", existing_file(table, "bone", of, (".csv",)))
    source = table.table("bone")
    forms = [key for key in ("pins", "rotations") if key in source]
    if len(forms) != 1:
        raise InputError(
            message(
                table.place("bone"),
                "expected a file name, or a table with either pins or rotations, got a table with "
                f"{' and '.join(source) or 'nothing'}",
                'Write bone = "….csv", or { rotations = "….c3d" }.',
            )
        )
    if forms == ["rotations"]:
        source.refuse_unknown(("rotations",))
        return BoneSource("rotations", existing_file(source, "rotations", of, (".c3d",)))
    source.refuse_unknown(("pins", "clusters"))
    path = existing_file(source, "pins", of, POINT_SUFFIXES)
    clusters = source.table("clusters")
    clusters.refuse_unknown(lab.segment_names)
    pins = []
    for name in clusters:
        markers = tuple(clusters.texts(name))
        check_distinct(markers, clusters, name, "marker")
        if len(markers) < MINIMUM_MARKERS:
            raise InputError(
                message(
                    clusters.place(name),
                    f"expected at least {MINIMUM_MARKERS} markers, got {len(markers)}",
                    "Fewer do not show how a bone is turned.",
                )
            )
        pins.append((name, markers))
    return BoneSource("pins", path, tuple(pins))


def read_trial_points(path: Path) -> xr.Dataset:
    """Read the points of a file, or return them from memory while the file is unchanged."""
    return _kept_points(path, _version(path))


def read_bones(source: BoneSource, lab: Lab, place: tuple[object, ...]) -> xr.Dataset:
    """Read bone poses, in the lab's segment order.

    Parameters
    ----------
    source : the file
    lab : segments wanted; one the file does not show is NaN throughout
    place : of the trial, for messages

    Returns
    -------
    Dataset: dims time, segment, row, col, axis; `rotation`, `position` m, lab ← bone
    frame of the file; time s.

    Raises
    ------
    InputError : none of the segments is there; bone pins.

    Warns
    -----
    StaPriorWarning : a segment is missing while a name much like it is there.
    """
    if source.kind == "pins":
        raise InputError(
            message(
                (*place, source.path.name),
                "bone pins are not yet read",
                'Give a bone pose table: bone = "….csv".',
            )
        )
    bones = _kept_bones(source.kind, source.path, _version(source.path))
    there = [str(name) for name in bones["segment"].to_numpy()]
    absent = [name for name in lab.segment_names if name not in there]
    if len(absent) == len(lab.segments):
        raise InputError(
            message(
                source.path,
                f"expected poses of {' '.join(lab.segment_names)}, has {' '.join(there)}",
                "Name its segments as the lab file does.",
            )
        )
    foreign = [name for name in there if name not in lab.segment_names]
    for name in absent:
        if nearest(name, foreign):
            warnings.warn(
                message(source.path, f"no poses of {name}, has {' '.join(there)}", nearest(name, foreign)),
                StaPriorWarning,
                stacklevel=2,
            )
    return bones.reindex(segment=list(lab.segment_names))


def bone_poses(bones: xr.Dataset) -> FloatArray:
    """Return the poses of a bone Dataset, shape (time, segment, 4, 4), m; NaN where not in view."""
    rotation = bones["rotation"].transpose("time", "segment", "row", "col").to_numpy()
    return make_pose(rotation, bones["position"].transpose("time", "segment", "axis").to_numpy())


def cycles_from_events(points: xr.Dataset, side: str) -> FloatArray:
    """Return start and end of each cycle, from one foot strike of a side to the next.

    Parameters
    ----------
    points : with the events of its file
    side : "right" or "left"; events whose context is the other side are left out

    Returns
    -------
    shape (n, 2), s, clock of the points; n = 0 where there are no two such events.
    """
    times = sorted(
        event.time
        for event in read_events(points)
        if event.label.strip().lower() in FOOT_STRIKES
        and event.context.strip().lower() in (side, "general", "")
    )
    return np.stack([times[:-1], times[1:]], axis=-1).astype(np.float64)


def _version(path: Path) -> tuple[int, int]:
    """Return what changes when a file is written anew; zeros where it is gone, for the reader to say so."""
    if not path.is_file():
        return (0, 0)
    status = path.stat()
    return (status.st_mtime_ns, status.st_size)


@lru_cache(maxsize=FILES_KEPT)
def _kept_points(path: Path, version: tuple[int, int]) -> xr.Dataset:
    return read_points(path)


@lru_cache(maxsize=FILES_KEPT)
def _kept_bones(kind: str, path: Path, version: tuple[int, int]) -> xr.Dataset:
    return read_bone_table(path) if kind == "table" else read_c3d_rotations(path)

"""CSV tables: points of a trial, bone poses, reference points; each value keeps its place for messages.

First line ``# unit: mm`` (or cm, m), then a header, then rows; a blank is a missing value.
Conventions: docs/conventions.md.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
import xarray as xr

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, message
from sta_prior.io.csv_table import (
    CsvTable,
    check_names,
    digits,
    read_csv,
    read_time,
    write_numbers,
    write_rows,
)
from sta_prior.io.points import AXES, check_extent, metres_per_unit, points_dataset
from sta_prior.io.rotations import check_table_rotations, poses_dataset

POSE_COLUMNS = (*(f"r{row}{column}" for row in (1, 2, 3) for column in (1, 2, 3)), "px", "py", "pz")
LOWEST_POSITION = 0.005  # m from the lab's origin, for the farthest bone of a table


def _read_groups(table: CsvTable, endings: Sequence[str], what: str) -> dict[str, list[int]]:
    """Return, for each name in the header, the columns name_ending in the order of the endings."""
    found: dict[str, dict[str, int]] = {}
    for column, title in enumerate(table.header[1:], start=1):
        name, separator, ending = title.rpartition("_")
        if not separator or not name or ending not in endings:
            raise InputError(
                message(
                    (table.path, "header", f"column {column + 1}"),
                    f"expected <{what}>_{endings[0]} … <{what}>_{endings[-1]}, got {title!r}",
                    "Rename or remove the column.",
                )
            )
        found.setdefault(name, {})[ending] = column
    if not found:
        raise InputError(
            message((table.path, "header"), f"no {what} beside time", f"Add a {what}'s columns.")
        )
    for name, columns in found.items():
        absent = [f"{name}_{ending}" for ending in endings if ending not in columns]
        if absent:
            raise InputError(
                message(
                    (table.path, "header", f"{what} {name}"),
                    f"expected {len(endings)} columns, got {len(columns)}, {', '.join(absent)} missing",
                    "Add what is missing.",
                )
            )
    return {name: [columns[ending] for ending in endings] for name, columns in found.items()}


def read_points_csv(path: str | Path) -> xr.Dataset:
    """Read the points of a trial from CSV.

    Parameters
    ----------
    path : first line ``# unit: mm`` (or m), header ``time,TA_x,TA_y,TA_z,…``; time in s; blank = occluded

    Returns
    -------
    Points Dataset: dims time, point, axis; `position` m, lab frame, NaN occluded; `residual` all NaN
    (unknown); time s as in the file; attribute rate is one over the median time step, Hz (NaN for one row).

    Raises
    ------
    InputError : with file, line and column: not such a table, not a number, one of three columns missing,
        time that does not rise, nothing seen, a size that contradicts the unit.

    Notes
    -----
    A point with a blank in any of its three cells is occluded.
    """
    table = read_csv(path)
    time = read_time(table)
    groups = _read_groups(table, AXES, "point")
    columns = [column for group in groups.values() for column in group]
    position = table.numbers(columns).reshape(len(time), len(groups), 3)
    position[np.isnan(position).any(axis=-1)] = np.nan
    if not np.isfinite(position).any():
        raise InputError(
            message(table.path, f"none of its {len(groups)} points is seen in any row", "Export it again.")
        )
    position *= table.factor
    check_extent(position, table.unit, table.path)
    rate = 1.0 / float(np.median(np.diff(time))) if len(time) > 1 else np.nan
    return points_dataset(
        position,
        np.full(position.shape[:2], np.nan),
        time,
        list(groups),
        rate=rate,
        source=table.path.name,
        units_declared=table.unit,
    )


def _refuse_partial(table: CsvTable, poses: FloatArray, columns: list[list[int]]) -> None:
    """Raise for a pose that is blank in part; `poses` has shape (row, segment, cell)."""
    blank = np.isnan(poses)
    partial = np.argwhere(blank.any(axis=-1) & ~blank.all(axis=-1))
    if len(partial):
        row, segment = (int(i) for i in partial[0])
        cells = np.flatnonzero(blank[row, segment])
        raise InputError(
            message(
                table.place(row, columns[segment][int(cells[0])]),
                f"{len(cells)} of {poses.shape[-1]} cells of the pose blank, expected all or none",
                "Leave all blank where the bone is not in view.",
            )
        )


def read_bone_table(path: str | Path) -> xr.Dataset:
    """Read a bone pose table from CSV.

    Parameters
    ----------
    path : first line ``# unit: mm`` (or m), header ``time`` then per segment ``thigh_r11 … thigh_r33``
        (row by row, lab ← bone) and ``thigh_px, thigh_py, thigh_pz``; blank = bone not in view

    Returns
    -------
    Dataset: dims time, segment, row, col, axis; `rotation` (time, segment, row, col) unitless, lab ← bone;
    `position` (time, segment, axis) m, lab frame; NaN where the bone is not in view; time s.

    Raises
    ------
    InputError : with file, line and column, or file, time and segment: as read_points_csv, a matrix that is
        not a rotation (beyond the rounding of three decimals), a pose blank in part, a blank table.
    """
    table = read_csv(path)
    time = read_time(table)
    groups = _read_groups(table, POSE_COLUMNS, "segment")
    columns = [column for group in groups.values() for column in group]
    values = table.numbers(columns).reshape(len(time), len(groups), 12)
    _refuse_partial(table, values, list(groups.values()))
    if np.isnan(values).all():
        raise InputError(
            message(
                table.path,
                f"no bone is in view in any of its {len(time)} rows",
                "Leave the table out of the study, or export it again.",
            )
        )
    rotation = values[..., :9].reshape(len(time), len(groups), 3, 3)
    position = values[..., 9:] * table.factor
    if len(groups) > 1 and np.nanmax(np.abs(position)) > 0:
        # two bones may share an origin and keep still, but hardly all at the origin of the lab
        with_origin = np.concatenate([position.reshape(-1, 3), np.zeros((1, 3))])
        check_extent(with_origin, table.unit, table.path, LOWEST_POSITION)
    return poses_dataset(
        check_table_rotations(rotation, time, list(groups), table.path),
        position,
        time,
        list(groups),
        {"source": table.path.name, "units_declared": table.unit},
    )


def read_reference_points(path: str | Path) -> dict[tuple[str, str], FloatArray]:
    """Read reference points measured in the bone frame from CSV.

    Parameters
    ----------
    path : first line ``# unit: mm`` (or m), header ``segment,point,x,y,z``

    Returns
    -------
    (segment, point) → shape (3,), m, bone frame, in the order of the file.

    Raises
    ------
    InputError : with file, line and column: another header, a blank or a word, a point twice, a size that
        contradicts the unit.
    """
    table = read_csv(path)
    expected = ("segment", "point", *AXES)
    if table.header != expected:
        raise InputError(
            message(
                (table.path, "header"),
                f"expected {','.join(expected)}, got {','.join(table.header)}",
                "Rename the columns.",
            )
        )
    values = table.numbers([2, 3, 4])
    points: dict[tuple[str, str], FloatArray] = {}
    for number, (row, value) in enumerate(zip(table.rows, values, strict=True)):
        for column in (0, 1, 2, 3, 4):
            if not row[column]:
                raise InputError(
                    message(table.place(number, column), "blank", "Fill it in or remove the row.")
                )
        if (row[0], row[1]) in points:
            raise InputError(
                message(
                    (table.path, f"line {table.lines[number]}"),
                    f"point {row[1]} of segment {row[0]} stands a second time",
                    "Keep one of the rows.",
                )
            )
        points[row[0], row[1]] = value * table.factor
    if len(points) > 2:
        check_extent(np.array(list(points.values())), table.unit, table.path)
    return points


def write_points_csv(path: str | Path, points: xr.Dataset, unit: str = "mm") -> None:
    """Write a Points Dataset as CSV, in one piece; occluded points are blank.

    Parameters
    ----------
    path : the file to write
    points : dims time, point, axis; `position` m, NaN occluded; time s
    unit : unit of length in the file: mm, cm or m
    """
    labels = [str(label) for label in points["point"].to_numpy()]
    position = points["position"].transpose("time", "point", "axis").to_numpy()
    check_names(path, labels, "point")
    header = ["time", *(f"{label}_{axis}" for label in labels for axis in AXES)]
    time = points["time"].to_numpy()
    write_numbers(path, unit, header, time, position.reshape(len(time), -1) / metres_per_unit(unit, path))


def write_bone_table(path: str | Path, dataset: xr.Dataset, unit: str = "mm") -> None:
    """Write bone poses as CSV, in one piece; a bone not in view is blank.

    Parameters
    ----------
    path : the file to write
    dataset : dims time, segment, row, col, axis; `rotation` lab ← bone, `position` m, NaN not in view; time s
    unit : unit of length in the file: mm, cm or m
    """
    labels = [str(label) for label in dataset["segment"].to_numpy()]
    check_names(path, labels, "segment")
    rotation = dataset["rotation"].transpose("time", "segment", "row", "col").to_numpy()
    position = dataset["position"].transpose("time", "segment", "axis").to_numpy()
    flat = rotation.reshape(*rotation.shape[:2], 9)
    values = np.concatenate([flat, position / metres_per_unit(unit, path)], axis=-1)
    values[~np.isfinite(values).all(axis=-1)] = np.nan
    header = ["time", *(f"{label}_{column}" for label in labels for column in POSE_COLUMNS)]
    time = dataset["time"].to_numpy()
    write_numbers(path, unit, header, time, values.reshape(len(time), -1))


def write_reference_points(
    path: str | Path, points: Mapping[tuple[str, str], FloatArray], unit: str = "mm"
) -> None:
    """Write reference points as CSV, in one piece.

    Parameters
    ----------
    path : the file to write
    points : (segment, point) → shape (3,), m, bone frame
    unit : unit of length in the file: mm, cm or m
    """
    factor = metres_per_unit(unit, path)
    rows = [[segment, point, *map(digits, np.asarray(p) / factor)] for (segment, point), p in points.items()]
    write_rows(path, unit, ["segment", "point", *AXES], rows)

"""CSV tables: points of a trial, bone poses, reference points; each value keeps its place for messages.

First line ``# unit: mm`` (or cm, m), then a header, then rows; a blank is a missing value.
Conventions: docs/conventions.md.
"""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, message
from sta_prior.io.files import atomic_path, read_text
from sta_prior.io.points import AXES, check_extent, check_unique, metres_per_unit, points_dataset
from sta_prior.io.rotations import check_table_rotations

POSE_COLUMNS = (*(f"r{row}{column}" for row in (1, 2, 3) for column in (1, 2, 3)), "px", "py", "pz")
LOWEST_POSITION = 0.005  # m from the lab's origin, for the farthest bone of a table
_UNIT_LINE = re.compile(r"#\s*unit\s*:\s*(.*?)\s*$")


@dataclass(frozen=True)
class _Table:
    """The cells of a CSV file; `lines` are the line numbers of its rows, for messages."""

    path: Path
    unit: str
    factor: float
    header: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    lines: tuple[int, ...]

    def place(self, row: int, column: int) -> tuple[object, ...]:
        return (self.path, f"line {self.lines[row]}", f"column {self.header[column]}")

    def numbers(self, columns: Sequence[int]) -> FloatArray:
        """Return the columns as numbers, shape (row, column); NaN where blank."""
        cells = [[row[column] for column in columns] for row in self.rows]
        try:
            values = np.array([[float(cell or "nan") for cell in row] for row in cells], dtype=np.float64)
        except ValueError:
            values = np.full((len(cells), len(columns)), np.nan)
        values = values.reshape(len(cells), len(columns))
        # a blank alone means missing: "nan", "inf" and words are refused, by row and column
        blank = np.array([[not cell for cell in row] for row in cells], dtype=bool).reshape(values.shape)
        for row, column in np.argwhere(~np.isfinite(values) & ~blank):
            cell = cells[row][column]
            if not _is_finite(cell):
                raise InputError(
                    message(
                        self.place(int(row), columns[column]),
                        f"expected a number or a blank, got {cell!r}",
                        "Leave the cell blank where the value is missing.",
                    )
                )
        return values


def _is_finite(cell: str) -> bool:
    try:
        return math.isfinite(float(cell))
    except ValueError:
        return False


def _read_table(path: str | Path) -> _Table:
    """Read unit line, header and rows of a CSV file."""
    path = Path(path)
    lines = read_text(path).splitlines()
    match = _UNIT_LINE.match(lines[0].rstrip(",; ")) if lines else None
    if match is None:
        first = lines[0][:40] if lines else ""
        raise InputError(
            message(
                (path, "line 1"),
                f"expected '# unit: mm' or '# unit: m', got {first!r}",
                "Put the unit there.",
            )
        )
    factor = metres_per_unit(match[1], (path, "line 1"))
    reader = csv.reader(lines[1:], strict=True)
    rows: list[tuple[str, ...]] = []
    numbers: list[int] = []
    try:
        for cells in reader:
            stripped = tuple(cell.strip() for cell in cells)
            if any(stripped):
                rows.append(stripped)
                numbers.append(reader.line_num + 1)
    except csv.Error as error:
        raise InputError(
            message(
                (path, f"line {reader.line_num + 1}"), f"not a CSV row ({error})", "Export the table again."
            )
        ) from None
    if not rows:
        raise InputError(message((path, "line 2"), "no header", "Name the columns in the second line."))
    header, body = rows[0], rows[1:]
    if not body:
        raise InputError(message(path, "a header but no rows", "Export the table again."))
    for row, number in zip(body, numbers[1:], strict=True):
        if len(row) != len(header):
            raise InputError(
                message(
                    (path, f"line {number}"),
                    f"expected {len(header)} cells as in the header, got {len(row)}",
                    "Leave a cell blank where a value is missing; use a point in decimals.",
                )
            )
    check_unique(header, (path, f"line {numbers[0]}"), "column")
    return _Table(path, match[1].lower(), factor, header, tuple(body), tuple(numbers[1:]))


def _read_time(table: _Table) -> FloatArray:
    """Return the first column, which must be `time`, in s and rising."""
    if table.header[0] != "time":
        raise InputError(
            message(
                (table.path, "header"),
                f"expected time as first column, got {table.header[0]!r}",
                "Add it, in s.",
            )
        )
    time = table.numbers([0])[:, 0]
    for row in np.flatnonzero(np.isnan(time)):
        raise InputError(message(table.place(int(row), 0), "blank, expected a time in s", "Fill it in."))
    for row in np.flatnonzero(np.diff(time) <= 0) + 1:
        raise InputError(
            message(
                table.place(int(row), 0),
                f"expected a time after {time[row - 1]:g} s, got {time[row]:g} s",
                "Sort the rows by time and remove repeated ones.",
            )
        )
    return time


def _read_groups(table: _Table, endings: Sequence[str], what: str) -> dict[str, list[int]]:
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
    InputError : with file, line and column: not such a table, not a number, one or two of three
        coordinates blank, time that does not rise, nothing seen, a size that contradicts the unit.
    """
    table = _read_table(path)
    time = _read_time(table)
    groups = _read_groups(table, AXES, "point")
    columns = [column for group in groups.values() for column in group]
    position = table.numbers(columns).reshape(len(time), len(groups), 3)
    _refuse_partial(table, position, list(groups.values()), "occluded point")
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


def _refuse_partial(table: _Table, values: FloatArray, columns: list[list[int]], what: str) -> None:
    """Raise for a group of cells that is blank in part; `values` has shape (row, group, cell)."""
    blank = np.isnan(values)
    partial = np.argwhere(blank.any(axis=-1) & ~blank.all(axis=-1))
    if len(partial):
        row, group = (int(i) for i in partial[0])
        cells = [table.header[columns[group][cell]] for cell in np.flatnonzero(blank[row, group])]
        raise InputError(
            message(
                (table.path, f"line {table.lines[row]}", f"column {cells[0]}"),
                f"{len(cells)} of {values.shape[-1]} cells blank, expected all or none",
                f"Leave all blank for an {what}." if what[0] in "aeo" else f"Leave all blank for a {what}.",
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
    table = _read_table(path)
    time = _read_time(table)
    groups = _read_groups(table, POSE_COLUMNS, "segment")
    columns = [column for group in groups.values() for column in group]
    values = table.numbers(columns).reshape(len(time), len(groups), 12)
    _refuse_partial(table, values, list(groups.values()), "bone that is not in view")
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
    rotation = check_table_rotations(rotation, time, list(groups), table.path)
    return xr.Dataset(
        {
            "rotation": (("time", "segment", "row", "col"), rotation, {"units": "1"}),
            "position": (("time", "segment", "axis"), position, {"units": "m"}),
        },
        coords={
            "time": ("time", time, {"units": "s"}),
            "segment": ("segment", np.array(list(groups), dtype=str)),
            "row": ("row", list(AXES)),
            "col": ("col", list(AXES)),
            "axis": ("axis", list(AXES)),
        },
        attrs={"source": table.path.name, "units_declared": table.unit},
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
    table = _read_table(path)
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
    _check_names(path, labels, "point")
    header = ["time", *(f"{label}_{axis}" for label in labels for axis in AXES)]
    time = points["time"].to_numpy()
    _write_numbers(path, unit, header, time, position.reshape(len(time), -1) / metres_per_unit(unit, path))


def write_bone_table(path: str | Path, dataset: xr.Dataset, unit: str = "mm") -> None:
    """Write bone poses as CSV, in one piece; a bone not in view is blank.

    Parameters
    ----------
    path : the file to write
    dataset : dims time, segment, row, col, axis; `rotation` lab ← bone, `position` m, NaN not in view; time s
    unit : unit of length in the file: mm, cm or m
    """
    labels = [str(label) for label in dataset["segment"].to_numpy()]
    _check_names(path, labels, "segment")
    rotation = dataset["rotation"].transpose("time", "segment", "row", "col").to_numpy()
    position = dataset["position"].transpose("time", "segment", "axis").to_numpy()
    flat = rotation.reshape(*rotation.shape[:2], 9)
    values = np.concatenate([flat, position / metres_per_unit(unit, path)], axis=-1)
    values[~np.isfinite(values).all(axis=-1)] = np.nan
    header = ["time", *(f"{label}_{column}" for label in labels for column in POSE_COLUMNS)]
    time = dataset["time"].to_numpy()
    _write_numbers(path, unit, header, time, values.reshape(len(time), -1))


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
    rows = [[segment, point, *map(_digits, np.asarray(p) / factor)] for (segment, point), p in points.items()]
    _write_rows(path, unit, ["segment", "point", *AXES], rows)


def _check_names(path: str | Path, names: Sequence[str], what: str) -> None:
    check_unique(names, path, what)
    for name in names:
        if not name or name != name.strip() or any(sign in name for sign in "\r\n"):
            raise InputError(
                message(
                    path,
                    f"{what} {name!r} cannot name a column",
                    "Rename it: no blanks around, no line breaks.",
                )
            )


def _digits(value: float) -> str:
    """Return the shortest text that reads back as the same number; blank for NaN."""
    return "" if np.isnan(value) else repr(float(value))


def _write_numbers(
    path: str | Path, unit: str, header: Sequence[str], time: FloatArray, values: FloatArray
) -> None:
    rows = [[_digits(t), *map(_digits, row)] for t, row in zip(time, values, strict=True)]
    _write_rows(path, unit, header, rows)


def _write_rows(path: str | Path, unit: str, header: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    with atomic_path(path) as temporary, temporary.open("w", encoding="utf-8", newline="") as file:
        file.write(f"# unit: {unit}\n")
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(header)
        writer.writerows(rows)

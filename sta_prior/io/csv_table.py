"""CSV files whose first line is ``# unit: mm`` (or cm, m): cells, header, time, with their places.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, message
from sta_prior.io.files import atomic_path, read_text
from sta_prior.io.points import check_unique, metres_per_unit

_UNIT_LINE = re.compile(r"#\s*unit\s*:\s*(.*?)\s*$")


@dataclass(frozen=True)
class CsvTable:
    """The cells of a CSV file; `lines` are the line numbers of its rows, for messages."""

    path: Path
    unit: str
    factor: float
    header: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    lines: tuple[int, ...]

    def place(self, row: int, column: int) -> tuple[object, ...]:
        """Return file, line and column of a cell, for messages."""
        return (self.path, f"line {self.lines[row]}", f"column {self.header[column]}")

    def numbers(self, columns: Sequence[int]) -> FloatArray:
        """Return the columns as numbers, shape (row, column), NaN where blank.

        Raises
        ------
        InputError : a cell that is neither a finite number nor blank, NaN in words included.
        """
        values = np.full((len(self.rows), len(columns)), np.nan)
        for number, row in enumerate(self.rows):
            try:
                values[number] = [_number(row[column]) for column in columns]
            except ValueError:
                column = next(column for column in columns if not _is_number(row[column]))
                raise InputError(
                    message(
                        self.place(number, column),
                        f"expected a number or a blank, got {row[column]!r}",
                        "Leave the cell blank where the value is missing.",
                    )
                ) from None
        return values


def _number(cell: str) -> float:
    """Return a cell as a number, NaN where blank; ValueError for anything else than a finite number."""
    if not cell:
        return math.nan
    value = float(cell)
    if not math.isfinite(value) or "_" in cell:
        raise ValueError(cell)
    return value


def _is_number(cell: str) -> bool:
    try:
        _number(cell)
    except ValueError:
        return False
    return True


def read_csv(path: str | Path) -> CsvTable:
    """Read unit line, header and rows of a CSV file.

    Raises
    ------
    InputError : not such a file, no rows, a row of another length, a column twice.
    """
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
                    "Separate cells by commas, write decimals with a point, leave a missing cell blank.",
                )
            )
    check_unique(header, (path, f"line {numbers[0]}"), "column")
    return CsvTable(path, match[1].lower(), factor, header, tuple(body), tuple(numbers[1:]))


def read_time(table: CsvTable) -> FloatArray:
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


def check_names(path: str | Path, names: Sequence[str], what: str) -> None:
    """Raise InputError for a name that stands twice or cannot head a column."""
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


def digits(value: float) -> str:
    """Return the shortest text that reads back as the same number; blank for NaN."""
    return "" if np.isnan(value) else repr(float(value))


def write_numbers(
    path: str | Path, unit: str, header: Sequence[str], time: FloatArray, values: FloatArray
) -> None:
    """Write unit line, header and rows of time and values; NaN is blank."""
    rows = [[digits(t), *map(digits, row)] for t, row in zip(time, values, strict=True)]
    write_rows(path, unit, header, rows)


def write_rows(path: str | Path, unit: str, header: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    """Write unit line, header and rows, in one piece."""
    with atomic_path(path) as temporary, temporary.open("w", encoding="utf-8", newline="") as file:
        file.write(f"# unit: {unit}\n")
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(header)
        writer.writerows(rows)

"""A comparison as CSV, JSON and terminal tables: degrees and millimetres leave here only."""

from __future__ import annotations

import csv
import math
from collections.abc import Iterable, Sequence
from dataclasses import fields
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from rich import box
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from sta_prior.compare.scores import LEVELS, Errors, Score
from sta_prior.io.files import atomic_path

if TYPE_CHECKING:
    from sta_prior.compare.comparison import Comparison

Cell = str | int | float | None
_SCALE = {"rad": ("deg", 180.0 / np.pi), "m": ("mm", 1000.0)}
_DETAILS = ("rx", "ry", "rz", "tx", "ty", "tz", "pose")
_SIZES = tuple(field.name for field in fields(Errors) if field.name != "frames")


def record(score: Score) -> dict[str, Cell]:
    """Return one score as named cells, None where there is no number.

    Parameters
    ----------
    score : of any level

    Returns
    -------
    A cell for each column of the CSV. An error stands under ``…_deg`` or ``…_mm``,
    by its unit; the other one is None.
    """
    cells: dict[str, Cell] = {
        "level": score.level,
        "subject": score.subject,
        "trial": score.trial,
        "activity": score.activity,
        "part": score.part,
        "component": score.component,
        "subjects": score.subjects,
        "trials": score.trials,
        "frames": score.frames,
        "frames_informed_left_out": score.frames_informed,
        "frames_effective": _known(score.frames_effective, 4),
    }
    for prefix, errors in (("", score.estimate), ("rigid_", score.rigid)):
        cells[f"{prefix}frames"] = errors.frames if prefix else score.frames
        for size in _SIZES:
            for unit, (suffix, scale) in _SCALE.items():
                value = getattr(errors, size) * scale if score.unit == unit else math.nan
                cells[f"{prefix}{size}_{suffix}"] = _known(value)
    for unit, (suffix, scale) in _SCALE.items():
        cells[f"predicted_sd_{suffix}"] = _known(
            score.predicted_sd * scale if score.unit == unit else math.nan
        )
    cells["ratio_to_rigid"] = _known(score.ratio)
    for level, share in zip(LEVELS, score.coverage, strict=True):
        cells[f"coverage_{100 * level:.0f}_percent"] = _known(100 * share)
    cells["normalised_error"] = _known(score.normalised_error)
    return cells


def _known(value: float, digits: int = 6) -> float | None:
    return float(f"{value:.{digits}g}") if math.isfinite(value) else None


def write_csv(path: Path, scores: Iterable[Score]) -> None:
    """Write scores as a table, atomically; units stand in the column names."""
    records = [record(score) for score in scores]
    columns = list(records[0]) if records else []
    with atomic_path(path) as temporary, open(temporary, "w", encoding="utf-8", newline="") as stream:
        writer = csv.DictWriter(stream, fieldnames=columns, lineterminator="\n")
        writer.writeheader()
        writer.writerows(records)


def format_comparison(comparison: Comparison) -> list[RenderableType]:
    """Tables and notes of a comparison for the terminal.

    Parameters
    ----------
    comparison : of one folder of solutions

    Returns
    -------
    Rich renderables, in order: overall, by activity where there are several, by
    subject (joint angles, and the size of each segment's pose error), then notes and
    refused trials. Peak, range error and the other intervals stand in the CSV:
    the tables fit 80 columns.
    """
    levels: dict[str, list[Score]] = {}
    for score in comparison.summary:
        levels.setdefault(score.level, []).append(score)
    shown: list[RenderableType] = []
    for level, scores in levels.items():
        if level == "overall":
            count = max(score.subjects for score in scores)
            title = (
                f"Overall: mean over trials within a subject, then over {count} "
                f"{'subject' if count == 1 else 'subjects'}"
            )
            if comparison.invented:
                title = f"INVENTED DATA. {title}"
            shown.append(_table(title, scores))
        else:
            brief = [score for score in scores if score.component not in _DETAILS]
            shown.append(_table(f"By {level}", brief))
    lines = [*comparison.notes, *(f"Not compared. {text}" for text in comparison.refused)]
    shown.append(Group(*(Text(f"· {line}") for line in lines)))
    return shown


def _table(title: str, scores: Sequence[Score]) -> Table:
    """One line a score, under a line with the name of the subject or activity where there is one."""
    table = Table(title=Text(title), title_justify="left", box=box.SIMPLE_HEAD, padding=(0, 1, 0, 0))
    table.add_column("part and component")
    for heading in ("frames", "bias", "spread", "RMS", "rigid\nRMS", "ratio", "cover\n90 %", "norm.\nerror"):
        table.add_column(heading, justify="right", no_wrap=True)
    before = ""
    for score in scores:
        name = score.subject or score.activity
        if name != before:
            table.add_row(Text(name, style="bold"))
            before = name
        table.add_row(*(Text(cell) for cell in _cells(score)))
    return table


def _cells(score: Score) -> tuple[str, ...]:
    suffix, scale = _SCALE.get(score.unit, ("", math.nan))
    errors = score.estimate
    return (
        f"{score.part} {score.component.replace('_', ' ')} {'°' if suffix == 'deg' else suffix}".rstrip(),
        str(score.frames),
        *(_number(value * scale, 2) for value in (errors.bias, errors.spread, errors.rms, score.rigid.rms)),
        _number(score.ratio, 2),
        _number(100 * score.coverage[LEVELS.index(0.90)], 0),
        _number(score.normalised_error, 2),
    )


def _number(value: float, digits: int) -> str:
    return f"{value:.{digits}f}" if math.isfinite(value) else "–"

"""The report page: reads a folder of finished solutions, writes one self-contained HTML file."""

from __future__ import annotations

import csv
import json
import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import jinja2
import numpy as np
import xarray as xr
from markupsafe import Markup

from sta_prior.compare import bone_truth, solution_paths
from sta_prior.errors import InputError, MismatchError, message
from sta_prior.io.files import atomic_path, read_text
from sta_prior.io.netcdf import read_dataset
from sta_prior.report import content, figures
from sta_prior.report.content import DASH, PageTable
from sta_prior.report.figures import Drawing, TruthCurve
from sta_prior.study import Study

FEW_TRIALS = 3
"""Up to so many trials stand open on the page."""
FRAMES_DRAWN = ((12, 400), (100, 160), (math.inf, 80))
"""Number of trials up to which so many frames of a curve are drawn: the page must still open."""


@dataclass(frozen=True)
class Panel:
    """One figure of a trial with its caption and the kind of its key."""

    svg: Markup
    caption: str
    key: str
    shaded: bool


@dataclass(frozen=True)
class TrialPart:
    """One trial on the page."""

    anchor: str
    subject: str
    trial: str
    invented: bool
    flags: tuple[str, ...]
    index_cells: tuple[str, ...]
    facts: tuple[tuple[str, str], ...]
    panels: tuple[Panel, ...]
    tables: tuple[PageTable, ...]


INDEX_COLUMNS = (
    "trial",
    "frames",
    "duration (s)",
    "90 % interval of angles, mean ± (deg)",
    "change from rigid fit, RMS (deg)",
    "frames beyond the prior",
    f"conflict p < {content.CONFLICT_LEVEL}",
    "look at",
)


def build_report(directory: str | Path, study: Study | None = None) -> Path:
    """Build DIR/report.html from the finished files in DIR.

    Parameters
    ----------
    directory : with <subject>/<trial>.solution.nc and, where they exist, run.json,
        summary.csv and compare.csv
    study : draws the bone truth of its trials beside the estimate; None draws none

    Returns
    -------
    Path of the page. It needs no other file and runs no script.

    Raises
    ------
    InputError : no such folder, no solution in it, or none that can be read.
    """
    folder = Path(directory)
    found = solution_paths(folder)
    most = next(frames for trials_at_most, frames in FRAMES_DRAWN if len(found) <= trials_at_most)
    trials: list[TrialPart] = []
    unread: list[str] = []
    for position, (subject, trial, path) in enumerate(found, start=1):
        try:
            solution = read_dataset(path, "solution")
        except InputError as error:
            unread.append(str(error))
            continue
        truth = None if study is None else _truth(study, subject, trial, solution)
        trials.append(_trial_part(position, subject, trial, solution, most, truth))
    if not trials:
        raise InputError(message(folder, f"no solution can be read: {unread[0].rstrip('.')}"))
    summary = _read_csv(folder / "summary.csv", unread)
    comparison = _read_csv(folder / "compare.csv", unread)
    run = _run(folder / "run.json", unread)
    template = _environment().get_template("report.html")
    text = template.render(
        subjects=len({part.subject for part in trials}),
        trials=trials,
        unread=unread,
        invented=[part.invented for part in trials],
        index_columns=INDEX_COLUMNS,
        facts=_page_facts(trials),
        run=run,
        summary=None if summary is None else content.tidy_rows(*summary, "summary.csv, one row a trial"),
        comparison=[] if comparison is None else _comparison_tables(*comparison),
        open_all=len(trials) <= FEW_TRIALS,
        colours={
            "estimate": figures.ESTIMATE,
            "rigid": figures.RIGID,
            "truth": figures.TRUTH,
            "shade": figures.SHADE,
        },
        axes=[(name, colour) for name, colour, _ in figures.AXIS_STYLES],
        created_by=_common([part.facts for part in trials], "Written by"),
    )
    target = folder / "report.html"
    with atomic_path(target) as temporary:
        Path(temporary).write_text(text, encoding="utf-8")
    return target


def _environment() -> jinja2.Environment:
    # Every name on the page comes from the user's files: all of it is escaped, and
    # a name missing from the template is an error, never an empty cell.
    return jinja2.Environment(
        loader=jinja2.PackageLoader("sta_prior", "templates"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )


def _truth(study: Study, subject: str, trial: str, solution: xr.Dataset) -> TruthCurve | None:
    try:
        found = study.trial(subject, trial)
        if not found.has_bone:
            return None
        truth = bone_truth(found, np.asarray(solution["time"].values, dtype=np.float64))
    except (InputError, MismatchError):
        return None  # a page without truth is still whole; compare says why there is none
    joints = found.subject.lab.joints
    return TruthCurve(
        times=np.asarray(solution["time"].values, dtype=np.float64)[truth.frames],
        angles=truth.angles,
        joints=tuple(joint.name for joint in joints),
        dofs=tuple(tuple(joint.convention.dof) for joint in joints),
    )


def _trial_part(
    position: int, subject: str, trial: str, solution: xr.Dataset, most: int, truth: TruthCurve | None
) -> TrialPart:
    times = np.asarray(solution["time"].values, dtype=np.float64)
    flags = []
    if content.words_of(solution, "observability"):
        flags.append("observability")
    if content.words_of(solution, "suspects"):
        flags.append("suspect markers")
    if content.beyond_share(solution) > 0.1:
        flags.append("support")
    invented = _is_invented(solution)
    cells = (
        str(len(times)),
        content.number(float(times[-1] - times[0]) if len(times) else math.nan, 2),
        content.number(math.degrees(content.half_width(solution))),
        content.number(math.degrees(content.shift_from_rigid(solution))),
        content.percent(content.beyond_share(solution)),
        content.percent(content.conflict_share(solution)),
        ", ".join(flags) or DASH,
    )
    tables = [content.angle_table(solution), content.segment_table(solution), content.marker_table(solution)]
    shares = content.share_table(solution)
    return TrialPart(
        anchor=f"trial-{position}",
        subject=figures.plain(subject),
        trial=figures.plain(trial),
        invented=invented,
        flags=tuple(flags),
        index_cells=cells,
        facts=(
            *content.facts(solution),
            ("Written by", content.words_of(solution, "created_by") or DASH),
        ),
        panels=tuple(_panels(position, solution, most, truth)),
        tables=tuple(table for table in (*tables, shares) if table is not None and table.rows),
    )


def _panels(position: int, solution: xr.Dataset, most: int, truth: TruthCurve | None) -> list[Panel]:
    stride = -(-solution.sizes["time"] // most)
    sparse = f" Every {_ordinal(stride)} frame is drawn." if stride > 1 else ""
    shaded = bool(figures.beyond_frames(solution).any())
    with_truth = ", and the bone truth (dots)" if truth is not None else ""
    drawings: list[tuple[Drawing | None, str, str]] = [
        (
            figures.angle_figure(solution, f"t{position}a", most, truth),
            f"Joint angles in degrees: the estimate with its 90 % band, the rigid fit of the same "
            f"markers (dashes){with_truth}. A band much wider than the curve runs out of the panel.{sparse}",
            "angles-truth" if truth is not None else "angles",
        ),
        (
            figures.artifact_figure(solution, f"t{position}m", most // 2),
            "Estimated artifact of each marker in mm, along the axes of its bone, with 90 % bands; "
            "all panels have one scale.",
            "axes",
        ),
        (
            figures.travel_figure(solution, f"t{position}j", most),
            "Travel of the distal joint centre, seen from the proximal bone, in mm, with 90 % bands.",
            "axes",
        ),
    ]
    return [
        Panel(Markup(drawing.svg), caption, key, shaded)  # made by figures.py, which escapes its labels
        for drawing, caption, key in drawings
        if drawing is not None
    ]


def _ordinal(count: int) -> str:
    ending = "th" if count % 100 in (11, 12, 13) else {1: "st", 2: "nd", 3: "rd"}.get(count % 10, "th")
    return f"{count}{ending}"


def _is_invented(solution: xr.Dataset) -> bool:
    return str(solution.attrs.get("invented_data", "0")).strip().lower() not in ("0", "", "false", "0.0")


def _page_facts(trials: list[TrialPart]) -> list[tuple[str, str]]:
    """Facts of the trials that hold for the whole page, or how many different values there are."""
    return [
        (term, _common([part.facts for part in trials], term))
        for term in ("Estimator", "Intervals from", "Prior", "Written by")
    ]


def _common(facts: list[tuple[tuple[str, str], ...]], term: str) -> str:
    values = list(dict.fromkeys(dict(pairs).get(term, DASH) for pairs in facts))
    return values[0] if len(values) == 1 else f"{len(values)} different ones: " + ", ".join(values)


def _run(path: Path, unread: list[str]) -> PageTable | None:
    if not path.is_file():
        return None
    try:
        value = json.loads(read_text(path))
    except InputError as error:
        unread.append(str(error))
        return None
    except ValueError as error:
        unread.append(message(path, f"not JSON text ({error})"))
        return None
    rows: list[tuple[str, str]] = []
    _flatten("", value, rows.append)
    return PageTable("run.json, what was run", ("entry", "value"), tuple(rows))


def _flatten(name: str, value: object, add: Callable[[tuple[str, str]], None]) -> None:
    if isinstance(value, dict) and value:
        for key, inner in value.items():
            _flatten(f"{name} › {figures.plain(key)}" if name else figures.plain(key), inner, add)
    elif isinstance(value, list) and any(isinstance(item, (dict, list)) for item in value):
        for position, inner in enumerate(value, start=1):
            _flatten(f"{name} › {position}" if name else str(position), inner, add)
    else:
        text = ", ".join(str(item) for item in value) if isinstance(value, list) else str(value)
        blank = value is None or value in ({}, []) or text.lower() in ("", "nan")
        add((name.replace("_", " "), DASH if blank else figures.plain(text)))


def _read_csv(path: Path, unread: list[str]) -> tuple[list[str], list[list[str]]] | None:
    if not path.is_file():
        return None
    try:
        text = read_text(path)
    except InputError as error:
        unread.append(str(error))
        return None
    rows = [row for row in csv.reader(text.splitlines()) if row and not row[0].startswith("#")]
    return (rows[0], rows[1:]) if len(rows) > 1 else None


_COMPARISON_COLUMNS = (
    ("subjects", "subjects", "", 0),
    ("frames", "frames", "", 0),
    ("worth", "frames_effective", "", 0),
    ("offset (bias)", "bias", "unit", 2),
    ("spread about it", "spread", "unit", 2),
    ("RMS", "rms", "unit", 2),
    ("peak", "peak", "unit", 2),
    ("range error", "range_error", "unit", 2),
    ("rigid fit RMS", "rigid_rms", "unit", 2),
    ("ratio to rigid", "ratio_to_rigid", "", 2),
    ("covered at 50 (%)", "coverage_50_percent", "", 0),
    ("at 90 (%)", "coverage_90_percent", "", 0),
    ("at 95 (%)", "coverage_95_percent", "", 0),
    ("normalised error", "normalised_error", "", 2),
)


def _comparison_tables(header: list[str], rows: list[list[str]]) -> list[PageTable]:
    """Tables of a compare.csv for each level but single trials; none where it is another table."""
    if not {"level", "part", "component"} <= set(header):
        return []
    groups: dict[tuple[str, str], list[dict[str, str]]] = {}
    for row in rows:
        cells = dict.fromkeys(header, "") | dict(zip(header, row, strict=False))
        if cells["level"] != "trial":
            name = cells.get("subject") or cells.get("activity") or ""
            groups.setdefault((cells["level"], name), []).append(cells)
    tables = []
    for (level, name), group in groups.items():
        caption = figures.plain(f"{level.capitalize()} {name}".strip())
        columns = ("part and component", *(heading for heading, _, _, _ in _COMPARISON_COLUMNS))
        tables.append(PageTable(caption, columns, tuple(_comparison_row(cells) for cells in group)))
    return tables


def _comparison_row(cells: dict[str, str]) -> tuple[str, ...]:
    unit = "deg" if cells.get("rms_deg") else "mm" if cells.get("rms_mm") else ""
    label = figures.plain(f"{cells['part']} {cells['component'].replace('_', ' ')}")
    row = [f"{label} ({unit})" if unit else label]
    for _, name, kind, digits in _COMPARISON_COLUMNS:
        text = cells.get(f"{name}_{unit}" if kind else name, "")
        try:
            row.append(content.number(float(text), digits))
        except ValueError:
            row.append(DASH)
    return tuple(row)

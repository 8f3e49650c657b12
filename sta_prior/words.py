"""Tables and summaries of pairs, priors and runs for the terminal and for --json.

Shell: finished objects in, text out; nothing is printed here. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from rich import box
from rich.table import Table

from sta_prior.batch import Run
from sta_prior.prior import Prior
from sta_prior.prior.validate import binomial_bound

CAUTION = (
    "Imaging dose and bone pins need ethics approval, justification and licensed practice; "
    "fewer is better. Results are for research, not for clinical decisions."
)


def _table(title: str, columns: list[str], rows: list[list[str]]) -> Table:
    table = Table(title=title, title_justify="left", box=box.SIMPLE_HEAD, padding=(0, 1, 0, 0))
    for index, name in enumerate(columns):
        table.add_column(name, justify="left" if index == 0 else "right", overflow="fold")
    for row in rows:
        table.add_row(*row)
    return table


def counted(number: int, noun: str) -> str:
    """A number with its noun.

    Examples
    --------
    >>> counted(1, "trial"), counted(3, "trial")
    ('1 trial', '3 trials')
    """
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"


def pairs_table(data: xr.Dataset) -> Table:
    """A row a trial and segment: frames, displacement RMS and peak over its markers, cluster offset."""
    rows = []
    segments = [str(name) for name in data["segment"].values]
    for index in range(data.sizes["trial"]):
        name = f"{data['trial_subject'].values[index]} {data['trial_id'].values[index]}"
        for column, segment in enumerate(segments):
            own = data["marker_segment"].values == segment
            rms = 1000 * data["displacement_rms"].values[index, own]
            peak = 1000 * data["displacement_peak"].values[index, own]
            rows.append(
                [
                    name if column == 0 else "",
                    segment,
                    str(int(data["frames_used"].values[index])),
                    f"{np.sqrt(np.nanmean(rms**2)):.1f}" if np.isfinite(rms).any() else "–",
                    f"{np.nanmax(peak):.1f}" if np.isfinite(peak).any() else "–",
                    f"{1000 * data['cluster_offset'].values[index, column]:.1f}",
                ]
            )
    columns = ["trial", "segment", "frames", "RMS mm", "peak mm", "offset mm"]
    return _table("Displacement of markers from the reference, in the bone frame", columns, rows)


def pairs_summary(data: xr.Dataset, refused: tuple[tuple[str, str, str], ...], out: Path) -> dict[str, Any]:
    """Machine-readable account of paired data."""
    return {
        "out": str(out),
        "subjects": [str(name) for name in data["subject_id"].values],
        "frames": int(data.sizes["frame"]),
        "trials": [
            {
                "subject": str(data["trial_subject"].values[index]),
                "trial": str(data["trial_id"].values[index]),
                "frames": int(data["frames_used"].values[index]),
                "displacement_rms_mm": {
                    str(marker): round(1000 * float(value), 3)
                    for marker, value in zip(
                        data["marker"].values, data["displacement_rms"].values[index], strict=True
                    )
                    if np.isfinite(value)
                },
            }
            for index in range(data.sizes["trial"])
        ],
        "refused": [{"subject": s, "trial": t, "reason": reason} for s, t, reason in refused],
        "invented_data": int(data.attrs.get("invented_data", 0)),
    }


def validation_table(data: xr.Dataset, others: bool = False) -> Table | None:
    """Figures by segment of subjects left out, or of other subjects; None where there are none."""
    if data.sizes.get("unit", 0) == 0:
        return None
    units = data.sizes["unit"]
    by_subject = bool(data["by_subject"].values[0])
    rows = []
    for index, segment in enumerate(data["segment"].values):
        covered = np.nanmean(data["coverage"].values[index], axis=0)
        row = [str(segment)]
        for column, level in enumerate(data["level"].values):
            low, high = binomial_bound(units, float(level))
            row.append(f"{100 * covered[column]:.0f} ({100 * low:.0f}–{100 * high:.0f})")
        error, zero = data["rms_error"].values[index], data["rms_zero"].values[index]
        row += [
            f"{1000 * np.sqrt(np.nanmean(error**2)):.1f}",
            f"{1000 * np.sqrt(np.nanmean(zero**2)):.1f}",
            f"{1000 * np.nanmean(data['crps'].values[index]):.2f}",
            f"{float(data['inflation'].values[index]):.2f}",
        ]
        rows.append(row)
    what = "subject" if by_subject else "trial (one subject: this says nothing about others)"
    title = f"Displacement predicted for each left-out {what}, {units} in all; per axis"
    if others:
        title = f"Displacement predicted for {counted(units, 'other subject')} of the given pairs; per axis"
    levels = [f"covered at {100 * float(level):.0f} %" for level in data["level"].values]
    return _table(title, ["segment", *levels, "RMS mm", "RMS, no prior", "CRPS mm", "factor"], rows)


def prior_lines(prior: Prior, found: xr.Dataset | None = None) -> list[Any]:
    """What a prior is made of, its validation (and on other pairs, if given), and what to distrust."""
    lines: list[Any] = []
    if prior.invented:
        lines.append("INVENTED DATA: this prior describes nobody.")
    kind = "Personal prior" if prior.is_personal else "Prior"
    subjects = counted(len(prior.subjects), "subject")
    learned = (
        f"learned from {subjects}: {', '.join(prior.subjects)}" if prior.subjects else "learned from nobody"
    )
    lines.append(f"{kind} of family {prior.family}, {learned}")
    if prior.inputs:
        lines.append(f"Driven by flexion and by {' and '.join(prior.inputs)}")
    by_activity: dict[str, list[int]] = {}
    for trial in prior.trials:
        by_activity.setdefault(trial.activity, []).append(trial.times.size)
    for activity, counts in by_activity.items():
        frames = counted(sum(counts), "frame")
        lines.append(f"  {activity}: {counted(len(counts), 'trial')}, {frames} with bone truth")
    lines += angle_lines(prior.validation)
    for subject, values in prior.covariates.items():
        lines.append(f"  {subject}: {', '.join(f'{name} {value:g}' for name, value in values.items())}")
    for name, model in prior.segments.items():
        lines.append(f"  {name}: {' '.join(model.markers) or 'any markers'}; {model.describe()}")
    table = validation_table(prior.validation)
    if table is None:
        lines.append("Not validated: there is nothing to leave out.")
    else:
        lines.append(table)
        lines.append(
            "In brackets: the range that 19 of 20 sets of so many units would show if the level held. "
            "From three subjects on, each is judged by interval widths calibrated on the others. "
            "Factor: widening of the spread between subjects for their small number, in the solver's "
            "normal intervals."
        )
        lines += score_lines(prior.validation)
    if found is not None:
        lines.append(validation_table(found, others=True))
    lines += [f"Note. {note}" for note in prior.notes]
    lines.append(CAUTION)
    return lines


def _figures(data: xr.Dataset, index: int) -> dict[str, Any]:
    """Validation of one segment: coverage by level, error with and without the prior."""
    if not data.sizes.get("unit", 0):
        return {}
    covered = np.nanmean(data["coverage"].values[index], axis=0)
    return {
        "units": [str(unit) for unit in data["unit"].values],
        "coverage": {
            f"{100 * float(level):.0f}": round(float(share), 4)
            for level, share in zip(data["level"].values, covered, strict=True)
        },
        "rms_error_mm": round(1000 * float(np.nanmean(data["rms_error"].values[index])), 3),
        "rms_without_prior_mm": round(1000 * float(np.nanmean(data["rms_zero"].values[index])), 3),
    }


def _left_out(data: xr.Dataset) -> str:
    """What was left out in turn: subject, trial, or nothing."""
    if not data.sizes.get("unit", 0):
        return "nothing"
    return "subject" if bool(data["by_subject"].values[0]) else "trial"


def angle_lines(data: xr.Dataset) -> list[str]:
    """Frames with bone truth by region of each joint's first angle; empty where none are known."""
    if "frames_by_angle" not in data:
        return []
    lines = []
    counts = data["frames_by_angle"]
    for joint in counts["joint"].values:
        row = counts.sel(joint=joint)
        here = [
            f"{float(np.degrees(low)):.0f}–{float(np.degrees(high)):.0f}°: {int(count)}"
            for low, high, count in zip(
                data["region_low"].values, data["region_high"].values, row.values, strict=True
            )
            if count
        ]
        lines.append(
            f"  {joint} {data['region_dof'].sel(joint=joint).item()}, frames by region: {', '.join(here)}"
        )
    return lines


def score_lines(data: xr.Dataset) -> list[str]:
    """What the prior gains over two plain laws, in log score of left-out frames."""
    if not data.sizes.get("unit", 0) or not np.isfinite(data["log_score_zero"].values).any():
        return []
    lines = []
    for index, segment in enumerate(data["segment"].values):
        own = data["log_score"].values[index]
        zero = float(np.nanmean(own - data["log_score_zero"].values[index]))
        pooled = float(np.nanmean(own - data["log_score_pooled"].values[index]))
        lines.append(
            f"  {segment}: {zero:+.2f} against a law of mean zero, "
            f"{pooled:+.2f} against one regression for all"
        )
    return ["Log score of left-out frames, nats a value, above 0 where the prior is better:", *lines]


def prior_summary(prior: Prior, path: Path, found: xr.Dataset | None = None) -> dict[str, Any]:
    """Machine-readable account of a prior, and of its test on other pairs where one was made."""
    data = prior.validation
    segments = {}
    for index, (segment, model) in enumerate(prior.segments.items()):
        segments[segment] = {
            "markers": list(model.markers),
            "inflation": model.inflation,
            "learned": model.describe(),
            **_figures(data, index),
        }
    others = {}
    if found is not None:
        others = {str(name): _figures(found, index) for index, name in enumerate(found["segment"].values)}
    return {
        "prior": str(path),
        "digest": prior.digest,
        "family": prior.family,
        "inputs": list(prior.inputs),
        "personal": prior.is_personal,
        "subjects": list(prior.subjects),
        "left_out": _left_out(data),
        "segments": segments,
        "other_pairs": others,
        "notes": list(prior.notes),
        "invented_data": int(prior.invented),
    }


def run_table(run: Run) -> Table:
    """A row a trial: frames, frames not determined, frames that informed the prior, iterations."""
    rows = [
        [
            f"{item.subject} {item.trial}",
            item.status,
            str(item.frames) if item.frames else "–",
            str(item.frames_undetermined) if item.frames else "–",
            str(item.frames_informed) if item.frames else "–",
            str(item.iterations) if item.frames else "–",
            f"{item.seconds:.2f}" if item.frames else "–",
        ]
        for item in run.outcomes
    ]
    columns = ["trial", "status", "frames", "undetermined", "informed", "iterations", "s"]
    return _table("Trials: frames without a pose, frames whose bone truth informed the prior", columns, rows)


def run_summary(run: Run, out: Path, page: Path) -> dict[str, Any]:
    """Machine-readable account of a run."""
    return {
        "out": str(out),
        "report": str(page),
        "trials": [
            {
                "subject": item.subject,
                "trial": item.trial,
                "status": item.status,
                "reason": item.reason,
                "frames": item.frames,
                "frames_undetermined": item.frames_undetermined,
                "frames_informed": item.frames_informed,
                "warnings": list(item.warnings),
                "observability": item.observability,
            }
            for item in run.outcomes
        ],
        "failed": len(run.failed),
    }

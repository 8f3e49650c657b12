"""What the page says of each trial: tables of text made from a finished solution."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.report.figures import BAND, beyond_frames, joint_dofs, plain, runs

DASH = "–"
CONFLICT_LEVEL = 0.05


@dataclass(frozen=True)
class PageTable:
    """A table of text: the first cell of a row is its heading."""

    caption: str
    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]


def number(value: float, digits: int = 1) -> str:
    """Return a number as text, a dash where there is none.

    Examples
    --------
    >>> number(2.04), number(float("nan"))
    ('2.0', '–')
    """
    if not math.isfinite(value):
        return DASH
    text = f"{value:.{digits}f}"
    return text.removeprefix("-") if float(text) == 0 else text.replace("-", "−")


def percent(share: float) -> str:
    """Return a share (0 … 1) as a percentage; a small one that is not zero never reads 0.

    Examples
    --------
    >>> percent(0.254), percent(0.002), percent(0.9998)
    ('25 %', '< 1 %', '> 99 %')
    """
    if not math.isfinite(share):
        return DASH
    if 0 < share < 0.01:
        return "< 1 %"
    if 0.99 < share < 1:
        return "> 99 %"
    return f"{number(100 * share, 0)} %"


def mean_of(values: FloatArray) -> float:
    """Mean of the finite values, NaN if there is none."""
    known = values[np.isfinite(values)]
    return float(known.mean()) if known.size else math.nan


def half_width(solution: xr.Dataset) -> float:
    """Half-width of the 90 % intervals of the joint angles, rad, mean over all frames and angles."""
    return BAND * mean_of(solution["angle_sd"].values)


def shift_from_rigid(solution: xr.Dataset) -> float:
    """RMS difference between the angles of estimate and rigid fit, rad; no measure of accuracy."""
    apart = solution["angle"].values - solution["angle_rigid"].values
    return math.sqrt(mean_of(((apart + np.pi) % (2 * np.pi) - np.pi) ** 2))


def conflict_share(solution: xr.Dataset) -> float:
    """Share of frames and segments whose conflict p-value is below CONFLICT_LEVEL."""
    if "conflict_p" not in solution:
        return math.nan
    values = solution["conflict_p"].values
    known = values[np.isfinite(values)]
    return float(np.mean(known < CONFLICT_LEVEL)) if known.size else math.nan


def beyond_share(solution: xr.Dataset) -> float:
    """Share of frames that the prior's data does not carry."""
    return float(beyond_frames(solution).mean()) if "support_class" in solution else math.nan


def words_of(solution: xr.Dataset, key: str) -> str:
    """Return an attribute that holds words or a list of names, as one line."""
    value = solution.attrs.get(key, "")
    if isinstance(value, (list, tuple, np.ndarray)):
        return ", ".join(plain(item) for item in value)
    return plain(value)


def angle_table(solution: xr.Dataset) -> PageTable:
    """Range of each joint angle and its interval, estimate beside rigid fit, deg."""
    rows = []
    for joint, dofs in joint_dofs(solution):
        for dof in dofs:
            own = solution.sel(joint=joint, dof=dof)
            estimate, rigid = np.degrees(own["angle"].values), np.degrees(own["angle_rigid"].values)
            half = BAND * np.degrees(own["angle_sd"].values)
            rows.append(
                (
                    f"{plain(joint)} {plain(dof).replace('_', ' ')}",
                    _range(estimate),
                    _range(rigid),
                    number(mean_of(half)),
                    number(float(np.nanmax(half)) if np.isfinite(half).any() else math.nan),
                )
            )
    columns = (
        "angle",
        "estimate, lowest to highest (deg)",
        "rigid fit, lowest to highest (deg)",
        "90 % interval, mean ± (deg)",
        "widest ± (deg)",
    )
    return PageTable("Joint angles", columns, tuple(rows))


def _range(values: FloatArray) -> str:
    known = values[np.isfinite(values)]
    return f"{number(known.min())} to {number(known.max())}" if known.size else DASH


def share_table(solution: xr.Dataset) -> PageTable | None:
    """Where the information on each pose component comes from, mean over frames; None if not stored."""
    if "information_share" not in solution:
        return None
    share = solution["information_share"]
    rows = []
    for segment in solution["segment"].values:
        for pose in share["pose"].values:
            own = share.sel(segment=segment, pose=pose)
            cells = [percent(mean_of(own.sel(source=source).values)) for source in share["source"].values]
            rows.append((f"{plain(segment)} {plain(pose)}", *cells))
    columns = ("pose component", *(plain(source).replace("_", " ") for source in share["source"].values))
    return PageTable(
        "Share of the information, mean over frames; a row sums to 100 %, and a share may be negative",
        columns,
        tuple(rows),
    )


def segment_table(solution: xr.Dataset) -> PageTable:
    """Support, conflict and gaps of each segment."""
    times = np.asarray(solution["time"].values, dtype=np.float64)
    rows = []
    for segment in solution["segment"].values:
        own = solution.sel(segment=segment)
        missing = ~np.isfinite(own["position"].values).all(axis=-1)
        rigid_missing = ~np.isfinite(own["rigid_position"].values).all(axis=-1)
        rows.append(
            (
                plain(segment),
                *_support_cells(own),
                *_conflict_cells(own),
                percent(float(missing.mean())),
                percent(float(rigid_missing.mean())),
                _longest(missing | rigid_missing, times),
            )
        )
    columns = (
        "segment",
        "supported / thin / beyond",
        "conflict p, median",
        f"frames with p < {CONFLICT_LEVEL}",
        "without estimate",
        "without rigid fit",
        "longest gap",
    )
    return PageTable("Support, conflict and gaps", columns, tuple(rows))


def _support_cells(own: xr.Dataset) -> tuple[str]:
    if "support_class" not in own:
        return (DASH,)
    classes = own["support_class"].values
    return (" / ".join(percent(float(np.mean(classes == kind))) for kind in (0, 1, 2)),)


def _conflict_cells(own: xr.Dataset) -> tuple[str, str]:
    values = own["conflict_p"].values if "conflict_p" in own else np.empty(0)
    known = values[np.isfinite(values)]
    if not known.size:
        return DASH, DASH
    return number(float(np.median(known)), 3), percent(float(np.mean(known < CONFLICT_LEVEL)))


def _longest(flags: BoolArray, times: FloatArray) -> str:
    found = runs(flags)
    if not found:
        return "none"
    first, last = max(found, key=lambda run: run[1] - run[0])
    return f"{last - first + 1} frames from {number(float(times[first]), 2)} s"


def marker_table(solution: xr.Dataset) -> PageTable:
    """Size of each marker's artifact and of its interval, mm."""
    rows = []
    for marker in solution["marker"].values:
        own = solution.sel(marker=marker)
        size = 1000 * np.linalg.norm(own["artifact"].values, axis=-1)
        half = 1000 * BAND * own["artifact_sd"].values
        known = size[np.isfinite(size)]
        rows.append(
            (
                plain(marker),
                number(mean_of(size)),
                number(float(known.max()) if known.size else math.nan),
                number(mean_of(half)),
                percent(1.0 - float(own["marker_seen"].values.mean())) if "marker_seen" in own else DASH,
            )
        )
    columns = (
        "marker",
        "mean size (mm)",
        "largest (mm)",
        "90 % interval, mean ± per axis (mm)",
        "frames hidden",
    )
    return PageTable("Artifact", columns, tuple(rows))


def facts(solution: xr.Dataset) -> list[tuple[str, str]]:
    """Return how the trial was solved, as (term, words) pairs."""
    attributes = solution.attrs
    seconds = attributes.get("seconds")
    pairs = [
        ("Estimator", words_of(solution, "estimator")),
        ("Stopped", _stopped(words_of(solution, "stop_reason"), words_of(solution, "iterations"))),
        ("Activity", words_of(solution, "activity")),
        ("Intervals from", words_of(solution, "covariance") or "posterior"),
        ("Computing time", "" if seconds is None else f"{number(float(seconds), 2)} s"),
        ("Observability", _or(solution, "observability", "every pose component is determined")),
        ("Suspect markers", _or(solution, "suspects", "none named")),
        ("Informed frames", _informed(solution)),
        ("Prior", words_of(solution, "prior_digest") or "none"),
        ("What it rests on", words_of(solution, "belief")),
        ("Reference posture", words_of(solution, "reference_notes")),
        ("Skin data", words_of(solution, "input_digest")),
    ]
    return [(term, text) for term, text in pairs if text]


def _or(solution: xr.Dataset, key: str, empty: str) -> str:
    """Words of an attribute, what its being empty means, or a dash where it is not stored at all."""
    return words_of(solution, key) or (empty if key in solution.attrs else DASH)


def _stopped(reason: str, iterations: str) -> str:
    return ", ".join(part for part in (reason, f"{iterations} iterations" if iterations else "") if part)


def _informed(solution: xr.Dataset) -> str:
    if "informed" not in solution:
        return ""
    count = int(np.sum(solution["informed"].values == 1))
    return f"{count}: bone truth of these very frames was part of the prior" if count else "none"


def tidy_rows(header: Sequence[str], rows: Sequence[Sequence[str]], caption: str) -> PageTable:
    """Make a table of a CSV file's text, dashes for blanks and for "nan"."""
    width = len(header)
    cleaned = tuple(
        tuple(DASH if cell.strip().lower() in ("", "nan", "none") else plain(cell) for cell in row[:width])
        + (DASH,) * (width - len(row))
        for row in rows
    )
    return PageTable(caption, tuple(plain(name).replace("_", " ") for name in header), cleaned)

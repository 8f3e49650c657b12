"""Averages of scores: over trials within a subject, then over subjects, never over frames.

Pooling frames would let the longest trial, and its one subject, speak for all.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence

from sta_prior.compare.scores import LEVELS, NAN, Errors, Level, Score


def summarise(table: Sequence[Score]) -> tuple[Score, ...]:
    """Average the scores of trials per subject, per activity and overall.

    Parameters
    ----------
    table : scores of trials, as in Comparison.table

    Returns
    -------
    Scores of level "overall", "activity", "subject", in that order; parts and
    components in the order in which they come in ``table``.

    Notes
    -----
    Each number is the mean over trials within a subject, then the mean over
    subjects. Exceptions: ``peak`` is the largest, counts are sums, ratios are
    geometric means (swapping estimate and rigid fit then gives the inverse).
    """
    subjects = list(dict.fromkeys(row.subject for row in table))
    activities = list(dict.fromkeys(row.activity for row in table))
    result = _level(table, "overall")
    if len(activities) > 1:
        for activity in activities:
            group = [row for row in table if row.activity == activity]
            result += _level(group, "activity", activity=activity)
    for subject in subjects:
        result += _level([row for row in table if row.subject == subject], "subject", subject=subject)
    return tuple(result)


def _level(rows: Sequence[Score], level: Level, subject: str = "", activity: str = "") -> list[Score]:
    keys = dict.fromkeys((row.part, row.component, row.unit) for row in rows)
    result = []
    for part, component, unit in keys:
        group = [row for row in rows if (row.part, row.component, row.unit) == (part, component, unit)]
        worth = [row.frames_effective for row in group if not math.isnan(row.frames_effective)]
        result.append(
            Score(
                level=level,
                part=part,
                component=component,
                unit=unit,
                subject=subject,
                activity=activity,
                subjects=len({row.subject for row in group}),
                trials=len(group),
                frames=sum(row.frames for row in group),
                frames_informed=sum(row.frames_informed for row in group),
                frames_effective=sum(worth) if worth else NAN,
                estimate=_mean_errors(group, lambda row: row.estimate),
                rigid=_mean_errors(group, lambda row: row.rigid),
                ratio=_mean(group, lambda row: row.ratio, geometric=True),
                predicted_sd=_mean(group, lambda row: row.predicted_sd),
                coverage=tuple(_mean(group, _coverage_at(index)) for index in range(len(LEVELS))),
                normalised_error=_mean(group, lambda row: row.normalised_error),
            )
        )
    return result


def _coverage_at(index: int) -> Callable[[Score], float]:
    return lambda row: row.coverage[index]


def _mean_errors(group: Sequence[Score], pick: Callable[[Score], Errors]) -> Errors:
    peaks = [pick(row).peak for row in group if not math.isnan(pick(row).peak)]
    return Errors(
        frames=sum(pick(row).frames for row in group),
        bias=_mean(group, lambda row: pick(row).bias),
        bias_size=_mean(group, lambda row: pick(row).bias_size),
        spread=_mean(group, lambda row: pick(row).spread),
        rms=_mean(group, lambda row: pick(row).rms),
        peak=max(peaks, default=NAN),
        range_error=_mean(group, lambda row: pick(row).range_error),
    )


def _mean(group: Sequence[Score], pick: Callable[[Score], float], geometric: bool = False) -> float:
    """Mean over trials within each subject, then over subjects; NaN counts as not there."""
    by_subject: dict[str, list[float]] = {}
    for row in group:
        by_subject.setdefault(row.subject, []).append(pick(row))
    if geometric:
        logs = [_known_mean(_log(value) for value in values) for values in by_subject.values()]
        return math.exp(_known_mean(logs))
    return _known_mean(_known_mean(values) for values in by_subject.values())


def _log(value: float) -> float:
    return math.log(value) if value > 0 else (-math.inf if value == 0 else NAN)


def _known_mean(values: Iterable[float]) -> float:
    known = [value for value in values if not math.isnan(value)]
    return sum(known) / len(known) if known else NAN

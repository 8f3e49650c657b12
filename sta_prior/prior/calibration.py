"""Intervals that hold for a subject never imaged: what few subjects cost, and what left-out ones teach.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

Two questions, two answers. How much wider must a covariance be because it was estimated from few
subjects? few_subjects_factor; the solver uses it. How far out does a share p of a new subject's
displacements lie, in units of the predicted SD? calibrate; the artifact of real tissue is not normal
about the prior (subjects differ by a common factor, wobble comes and goes), so its central half is
narrower and its tails longer than a normal law's, and no one factor on the SD can serve 50, 90 and 95 %.

References
----------
Lei et al. (2018), JASA 113, 1094–1111 (split conformal bands; from memory). Here the new subject is
replaced by a Student one instead of an infinite one, and whole subjects, not values, are exchangeable.
Measured in docs/left-out-coverage.md.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.stats import norm
from scipy.stats import t as student

from sta_prior.checks import FloatArray

LARGEST_INFLATION = 4.0
PSEUDO_SUBJECTS = 2.0
"""Subjects that the weak prior on the spread between subjects counts for, see fitting.FitSettings."""

TABLE_LEVELS: FloatArray = np.arange(1, 100) / 100.0
_HALVINGS = 60


def freedom(subjects: int) -> float:
    """Degrees of freedom of a spread between subjects: n − 1, and those of the weak prior on it."""
    return max(subjects - 1, 0) + PSEUDO_SUBJECTS


def few_subjects_factor(subjects: int) -> float:
    """Factor on a variance estimated from few subjects so that a normal 90 % interval becomes Student's.

    The squared ratio of the 95 % points of Student's t and of the normal law: 2.05 for two subjects,
    1.50 for four, 1.21 for nine, 1.09 for twenty. With one subject nothing is known of others:
    LARGEST_INFLATION.
    """
    if subjects < 2:
        return LARGEST_INFLATION
    ratio = student.ppf(0.95, freedom(subjects)) / norm.ppf(0.95)
    return float(min(ratio**2, LARGEST_INFLATION))


@dataclass(frozen=True)
class Calibration:
    """Half-widths of central intervals in units of the predicted SD.

    levels: (L,) rising, between 0 and 1; factors: (L,), rising.
    """

    levels: FloatArray
    factors: FloatArray

    def factor(self, level: FloatArray | float) -> FloatArray:
        """Half-width at a level of any shape, linear between the table's; held at its ends."""
        return np.asarray(np.interp(level, self.levels, self.factors, left=0.0), dtype=np.float64)

    def share_inside(self, ratio: FloatArray) -> FloatArray:
        """Share of a new subject's displacements that lie closer to the mean than so many SD."""
        levels = np.concatenate([[0.0], self.levels])
        return np.asarray(np.interp(ratio, np.concatenate([[0.0], self.factors]), levels), dtype=np.float64)


def calibrate(ratios: Sequence[FloatArray], subjects: int, levels: FloatArray = TABLE_LEVELS) -> Calibration:
    """Learn half-widths from subjects left out.

    Parameters
    ----------
    ratios : an array (values,) for every left-out subject: error over predicted SD, any sign
    subjects : how many the prior has learned from
    levels : shape (L,), rising, between 0 and 1

    Returns
    -------
    Calibration. A factor is the quantile of a mixture of laws with one share each: the left-out
    subjects' own, and Student's with ``freedom(subjects)``, which stands for the subject not yet seen and
    is all there is without ratios. Every subject counts alike, however many frames it has.
    """
    ordered = [np.sort(np.abs(np.asarray(ratio, dtype=np.float64))) for ratio in ratios]
    law = student(freedom(subjects))

    def share_inside(width: FloatArray) -> FloatArray:
        total = 2.0 * law.cdf(width) - 1.0
        for values in ordered:
            total = total + np.searchsorted(values, width, side="right") / values.size
        return np.asarray(total / (1 + len(ordered)), dtype=np.float64)

    low = np.zeros(len(levels))
    most = max([1.0, *(float(values[-1]) for values in ordered)])
    high = np.maximum(law.ppf(0.5 + 0.5 * np.asarray(levels)), most)
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        enough = share_inside(middle) >= levels
        low, high = np.where(enough, low, middle), np.where(enough, middle, high)
    return Calibration(np.asarray(levels, dtype=np.float64), high)


def nested_coverage(ratios: Sequence[FloatArray], levels: FloatArray) -> FloatArray:
    """Coverage of every left-out subject by intervals calibrated on the other left-out subjects.

    Parameters
    ----------
    ratios : as calibrate, of two or more subjects
    levels : shape (L,)

    Returns
    -------
    shape (subjects, L). Calibrated on themselves, subjects would be covered by construction.
    """
    result = np.empty((len(ratios), len(levels)))
    for index, own in enumerate(ratios):
        others = [ratio for position, ratio in enumerate(ratios) if position != index]
        factors = calibrate(others, len(others), levels).factors
        result[index] = (np.abs(own)[:, None] <= factors).mean(axis=0)
    return result

"""Scores of an error series against its predicted covariance: arrays in, numbers out.

A constant offset (bias) is kept apart from the spread about it, so that a bone
frame defined differently is not read as tracking error. Conventions:
docs/conventions.md.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from scipy import stats

from sta_prior.checks import BoolArray, FloatArray

LEVELS = (0.50, 0.90, 0.95)
Level = Literal["trial", "subject", "activity", "overall"]
Unit = Literal["rad", "m", "1"]
NAN = math.nan


@dataclass(frozen=True)
class Errors:
    """Size of one error over the scored frames, in rad or m.

    ``rms² = bias_size² + spread²`` within a trial. For a vector (a whole rotation
    or position) ``bias`` is the length of the mean error vector and the spread is
    taken about that mean vector; for a scalar ``bias`` keeps its sign, estimate
    minus truth. ``bias_size`` is the absolute value, which averaging over trials
    cannot cancel. ``range_error`` is the range of motion of the estimate minus
    that of the truth; NaN where a range has no meaning.
    """

    frames: int = 0
    bias: float = NAN
    bias_size: float = NAN
    spread: float = NAN
    rms: float = NAN
    peak: float = NAN
    range_error: float = NAN


@dataclass(frozen=True)
class Score:
    """One line of a comparison: one part and component, for a trial or an average over trials.

    Attributes
    ----------
    level : "trial", or the mean over trials within a subject, then over subjects:
        "subject", "activity", "overall"
    subject, trial, activity : empty where averaged over
    part, component : segment or joint; what is scored there
    unit : "rad", "m", or "1" for the whole pose, whose errors have no common unit
    subjects, trials, frames : how many went in; frames_informed counts frames that
        the scored set leaves out because bone truth of that frame informed the prior
    frames_effective : frames worth of independent errors, n(1 − ρ)/(1 + ρ)
    estimate, rigid : errors of the estimate and of the frame-wise least-squares fit
    ratio : RMS of the estimate over RMS of the rigid fit on the frames both have;
        averages are geometric
    predicted_sd : RMS over frames of the SD that the posterior and the declared
        bone-truth accuracy predict for the error (root of the trace for vectors)
    coverage : share of frames inside the posterior interval (ellipsoid for vectors)
        at each of LEVELS
    normalised_error : mean squared error in units of the predicted covariance,
        divided by its dimension; 1 if the intervals are right
    """

    level: Level
    part: str
    component: str
    unit: Unit
    subject: str = ""
    trial: str = ""
    activity: str = ""
    subjects: int = 1
    trials: int = 1
    frames: int = 0
    frames_informed: int = 0
    frames_effective: float = NAN
    estimate: Errors = field(default_factory=Errors)
    rigid: Errors = field(default_factory=Errors)
    ratio: float = NAN
    predicted_sd: float = NAN
    coverage: tuple[float, ...] = (NAN,) * len(LEVELS)
    normalised_error: float = NAN


def normalised_square(error: FloatArray, covariance: FloatArray) -> FloatArray:
    """Squared error in units of its covariance, eᵀ C⁻¹ e.

    Parameters
    ----------
    error : shape (..., k), any unit
    covariance : shape (..., k, k), the unit squared, same axes

    Returns
    -------
    shape (...), unitless; NaN where an entry is missing or the covariance is not
    positive definite.

    References
    ----------
    Bar-Shalom, Li & Kirubarajan (2001), Estimation with Applications to Tracking
    and Navigation, ch. 5 (normalised estimation error squared).

    Examples
    --------
    >>> round(float(normalised_square(np.array([2.0, 3.0]), np.diag([4.0, 9.0]))), 12)
    2.0
    """
    scale = np.sqrt(np.maximum(np.diagonal(covariance, axis1=-2, axis2=-1), 0.0))
    usable: BoolArray = np.asarray(
        np.isfinite(error).all(axis=-1)
        & np.isfinite(covariance).all(axis=(-2, -1))
        & (scale > 0).all(axis=-1)
    )
    # Scaled to a correlation matrix: rad² and m² entries differ by orders of magnitude.
    size = error.shape[-1]
    divisor = np.where(usable[..., None], scale, 1.0)
    correlation = np.where(
        usable[..., None, None], covariance / divisor[..., :, None] / divisor[..., None, :], np.eye(size)
    )
    values, vectors = np.linalg.eigh(correlation)
    usable &= values[..., 0] > 1e-12
    rotated = np.einsum("...ji,...j->...i", vectors, np.where(usable[..., None], error / divisor, 0.0))
    square = np.sum(rotated**2 / np.where(values > 1e-12, values, 1.0), axis=-1)
    return np.asarray(np.where(usable, square, np.nan), dtype=np.float64)


def effective_frames(error: FloatArray, adjacent: BoolArray) -> float:
    """Number of independent frames that a correlated error series is worth.

    Parameters
    ----------
    error : shape (n, k), no missing values
    adjacent : shape (n − 1,), whether frame i + 1 follows frame i without a gap

    Returns
    -------
    n(1 − ρ)/(1 + ρ), between 1 and n, with ρ the lag-one autocorrelation about the
    mean (of a vector: of its components together), a negative one counted as zero.
    A constant offset shared by all frames is not in ρ: it is one draw a trial.

    References
    ----------
    Bayley & Hammersley (1946), J. R. Stat. Soc. Suppl. 8, 184–197,
    doi 10.2307/2983560. The limit for a long first-order autoregressive series.

    Examples
    --------
    >>> effective_frames(np.array([[1.0], [-1.0], [1.0], [-1.0]]), np.ones(3, bool))
    4.0
    """
    count = len(error)
    if count < 2:
        return float(count)
    centred = error - error.mean(axis=0)
    power = float(np.sum(centred**2)) / count
    if power <= 1e-24 * max(float(np.sum(error**2)) / count, 1e-300):
        return 1.0
    products = np.sum(centred[1:] * centred[:-1], axis=-1)[adjacent]
    correlation = float(products.mean()) / power if len(products) else 0.0
    correlation = min(max(correlation, 0.0), 1.0)
    return max(count * (1.0 - correlation) / (1.0 + correlation), 1.0)


def describe_errors(error: FloatArray, series: tuple[FloatArray, FloatArray] | None = None) -> Errors:
    """Bias, spread, RMS, peak and range error of one error series.

    Parameters
    ----------
    error : shape (n, k), rad or m; a row with NaN is left out
    series : estimate and truth themselves, each shape (n,), where a range of motion
        has a meaning (a joint angle)

    Returns
    -------
    Errors, in the unit of ``error``; all NaN without a single frame.
    """
    seen = np.isfinite(error).all(axis=-1)
    if not seen.any():
        return Errors()
    part = error[seen]
    mean = part.mean(axis=0)
    size = float(np.linalg.norm(mean))
    lengths = np.linalg.norm(part, axis=-1)
    range_error = NAN
    if series is not None:
        range_error = float(np.ptp(series[0][seen]) - np.ptp(series[1][seen]))
    return Errors(
        frames=int(seen.sum()),
        bias=float(mean[0]) if part.shape[1] == 1 else size,
        bias_size=size,
        spread=float(np.sqrt(np.mean(np.sum((part - mean) ** 2, axis=-1)))),
        rms=float(np.sqrt(np.mean(lengths**2))),
        peak=float(lengths.max()),
        range_error=range_error,
    )


def rms_ratio(error: FloatArray, rigid_error: FloatArray) -> float:
    """RMS of one error series over another, shape (n, k) each, on the rows that both have; else NaN."""
    common = np.isfinite(error).all(axis=-1) & np.isfinite(rigid_error).all(axis=-1)
    if not common.any():
        return NAN
    below = float(np.sqrt(np.mean(np.sum(rigid_error[common] ** 2, axis=-1))))
    above = float(np.sqrt(np.mean(np.sum(error[common] ** 2, axis=-1))))
    return above / below if below > 0 else NAN


def coverage(square: FloatArray, dimension: int) -> tuple[float, ...]:
    """Share of frames inside the posterior region at each of LEVELS.

    Parameters
    ----------
    square : shape (n,), squared normalised errors; NaN is left out
    dimension : of the error; for one dimension the region is the central interval

    Returns
    -------
    One share (0 … 1) a level; NaN without a single frame.

    Examples
    --------
    >>> coverage(np.array([0.1, 1.0, 3.0, 5.0]), 1)
    (0.25, 0.5, 0.75)
    """
    known = square[np.isfinite(square)]
    if not len(known):
        return (NAN,) * len(LEVELS)
    return tuple(float(np.mean(known <= stats.chi2.ppf(level, dimension))) for level in LEVELS)


def binomial_range(units: float, level: float, confidence: float = 0.95) -> tuple[float, float]:
    """Range of observed coverage that right intervals would show.

    Parameters
    ----------
    units : number of independent units, rounded to a whole number, at least 1
    level : nominal coverage, 0 … 1
    confidence : probability that the observed coverage lies in the range

    Returns
    -------
    lowest and highest share of covered units.

    Examples
    --------
    Nine independent subjects say little about a 90 % interval:

    >>> low, high = binomial_range(9, 0.90)
    >>> round(low, 3), round(high, 3)
    (0.667, 1.0)
    """
    count = max(round(units), 1)
    low, high = stats.binom.interval(confidence, count, level)
    return float(low) / count, float(high) / count

"""Are values uniform on 0 … 1? Three questions, each with a computed bound.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

References
----------
Säilynoja, Bürkner & Vehtari (2022), Stat Comput 32:32, doi 10.1007/s11222-022-10090-6 (simultaneous band of
an empirical distribution function; from memory, recomputed by simulation).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import binom, chi2, chisquare, norm, poisson

from sta_prior.checks import FloatArray, IntArray

BINS, LEAST_IN_A_BIN = 20, 5
POINTS = 100
LEVELS = (0.5, 0.9, 0.95)

SMALLEST = 1e-12
"""Places nearer to 0 or 1 than this count as this, where they are turned into normal deviates."""


@dataclass(frozen=True)
class Band:
    """Simultaneous band of the distribution function of n uniform values.

    points: (K,) where it is evaluated; low, high: (K,), smallest and largest count within; level: probability
    that a sample leaves it anywhere.
    """

    points: FloatArray
    low: IntArray
    high: IntArray
    level: float


@dataclass(frozen=True)
class Uniformity:
    """What a sample of places says.

    covered: share within the central 50, 90 and 95 %; chi_square_p; deviation, bound: of the distribution
    function, where it deviates most, or, if it leaves the band, where it leaves it farthest; squared,
    squared_range: mean square of the normal deviates, and its range; shift: their mean; uniform: whether all
    three bounds are kept.
    """

    covered: tuple[float, ...]
    chi_square_p: float
    deviation: float
    bound: float
    squared: float
    squared_range: tuple[float, float]
    shift: float
    uniform: bool


def _leaving(low: IntArray, high: IntArray, count: int) -> float:
    """Probability that count uniform values leave the band low … high at the points 1/K … 1.

    Counts in equal bins are independent Poisson numbers given their sum.
    """
    steps = low.size
    jump = poisson.pmf(np.arange(count + 1), count / steps)
    reached = np.zeros(count + 1)
    reached[0] = 1.0
    numbers = np.arange(count + 1)
    for smallest, largest in zip(low, high, strict=True):
        reached = np.convolve(reached, jump)[: count + 1]
        reached[(numbers < smallest) | (numbers > largest)] = 0.0
    return 1.0 - float(reached[count] / poisson.pmf(count, count))


def simultaneous_band(count: int, level: float) -> Band:
    """Band that a sample of uniform values leaves anywhere with at most this probability.

    Parameters
    ----------
    count : n, values
    level : probability of a false alarm

    Notes
    -----
    Binomial intervals of equal level at every point; that level is found by bisection.
    """
    points = np.arange(1, POINTS + 1) / POINTS

    def band(each: float) -> tuple[IntArray, IntArray]:
        low = binom.ppf(0.5 * each, count, points).astype(np.int64)
        high = binom.isf(0.5 * each, count, points).astype(np.int64)
        high[-1] = low[-1] = count
        return low, high

    small, large = level / POINTS, level
    for _ in range(40):
        middle = float(np.sqrt(small * large))
        if _leaving(*band(middle), count) <= level:
            small = middle
        else:
            large = middle
    return Band(points, *band(small), level)


def coverage_range(count: int, level: float, certainty: float = 0.95) -> tuple[float, float]:
    """Range of the share covered that chance allows if intervals of this level are right."""
    tail = 0.5 * (1.0 - certainty)
    return float(binom.ppf(tail, count, level) / count), float(binom.isf(tail, count, level) / count)


def judge_uniformity(places: FloatArray, band: Band) -> Uniformity:
    """Judge places, shape (n,), by chi-square, distribution function and mean square deviate.

    Parameters
    ----------
    places : in 0 … 1, independent of each other
    band : from `simultaneous_band` of as many values; each of the three has its level
    """
    count = places.size
    bins = max(2, min(BINS, count // LEAST_IN_A_BIN))
    filled, _ = np.histogram(places, bins, (0.0, 1.0))
    p = float(chisquare(filled).pvalue)
    counts = np.searchsorted(np.sort(places), band.points, side="right")
    away = counts - count * band.points
    room = np.where(away > 0, band.high - count * band.points, count * band.points - band.low)
    left = (counts < band.low) | (counts > band.high)
    # Where the band is left, the place where it is left farthest; else the largest deviation.
    worst = int(np.argmax(np.abs(away) - room * left + count * left))
    deviation, bound = float(np.abs(away[worst]) / count), float(room[worst] / count)
    within = not bool(left.any())
    deviates = norm.ppf(np.clip(places, SMALLEST, 1.0 - SMALLEST))
    squared = float((deviates**2).mean())
    low, high = (
        float(value) / count for value in chi2.ppf([0.5 * band.level, 1.0 - 0.5 * band.level], count)
    )
    return Uniformity(
        covered=tuple(float((np.abs(places - 0.5) <= 0.5 * level).mean()) for level in LEVELS),
        chi_square_p=p,
        deviation=deviation,
        bound=bound,
        squared=squared,
        squared_range=(low, high),
        shift=float(deviates.mean()),
        uniform=p >= band.level and within and low <= squared <= high,
    )

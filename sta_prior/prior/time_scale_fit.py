"""One decay time of the residual or two: fitted to products of frames, chosen by subjects left out.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. Where the products come from:
prior/lag_products.py.

    correlation of r at lag t:   Σ_j share_j · exp(−t/constant_j)
    of what is seen of it:       that times (1 − w), and w more at lag 0 alone

The white share w, of the bone truth and the markers, is no part of the residual: it is fitted and left out.

References
----------
Varin, Reid & Firth (2011), Statistica Sinica 21:5–42 (composite likelihood of pairs; from memory).
Breiman et al. (1984), Classification and Regression Trees, and Hastie, Tibshirani & Friedman (2009), The
Elements of Statistical Learning, §7.10 (one standard error; both from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.optimize import minimize
from scipy.special import ndtr
from scipy.stats import t as student

from sta_prior.checks import BoolArray, FloatArray, IntArray
from sta_prior.prior.time_scales import LONGEST_TIME_CONSTANT, SHORTEST_TIME_CONSTANT, TimeScales

LARGEST_RATIO = 0.5
"""Of a fast decay time to the slow one: two that are closer cannot be told apart."""

SMALLEST_SHARE = 0.05
"""Of either of two scales: less is not worth a scale of its own."""

SMALLEST_LAG_SHARE = 1.0 / 3.0
"""Decay time against the time step, at least: what is down to e⁻³ at the first lag looks white."""

ONE_SIGMA = float(ndtr(1.0))
"""Probability below one standard deviation above the mean, 84 %."""

GRID = np.geomspace(SHORTEST_TIME_CONSTANT, LONGEST_TIME_CONSTANT, 9)
"""Decay times, s, at which the loss by the fit is worked out; a spline in their logarithm joins them."""

# Parameters of one scale: log constant, white share. Of two: log slow constant, where the log of the fast
# one lies between its bounds (0 … 1), slow share, white share.
_STARTS: dict[int, tuple[tuple[float, ...], ...]] = {
    1: ((np.log(0.01), 0.2), (np.log(0.06), 0.2)),
    2: ((np.log(0.08), 0.7, 0.5, 0.2), (np.log(0.04), 0.4, 0.5, 0.2)),
}


@dataclass(frozen=True)
class LagProducts:
    """Sums over pairs of frames, a row for each unit and lag.

    A unit is a subject, or a trial where there is one subject.

    Attributes
    ----------
    unit : shape (R,), its number
    lag : shape (R,), s
    count : shape (R,), pairs of values
    squares : shape (R,), Σ (s_t² + s_{t+lag}²)/2 over them, s the left-over of a trial's own fit
    products : shape (R,), Σ s_t s_{t+lag}
    lost : shape (R, 2, 1 + GRID), what that fit took, for each pair, of mean square and of product of a
        residual of variance 1: of white noise first, then of each decay time of GRID
    step : s, the shortest time step
    """

    unit: IntArray
    lag: FloatArray
    count: FloatArray
    squares: FloatArray
    products: FloatArray
    lost: FloatArray
    step: float

    def chosen(self, rows: BoolArray) -> LagProducts:
        """Some rows only."""
        names = ("unit", "lag", "count", "squares", "products", "lost")
        return replace(self, **{name: getattr(self, name)[rows] for name in names})

    @property
    def fastest(self) -> float:
        """Log of the fastest decay time that can be told from white noise."""
        return float(np.log(max(SHORTEST_TIME_CONSTANT, SMALLEST_LAG_SHARE * self.step)))

    @cached_property
    def spread(self) -> FloatArray:
        """Σ of the halved squares of sum and difference of a pair, (R, 2)."""
        return np.stack([self.squares + self.products, self.squares - self.products], axis=1)

    @cached_property
    def _lost_sums(self) -> FloatArray:
        square, product = self.lost[:, 0], self.lost[:, 1]
        return np.stack([square + product, square - product], axis=1)

    @cached_property
    def _spline(self) -> CubicSpline:
        return CubicSpline(np.log(GRID), self._lost_sums[..., 1:], axis=-1)

    @cached_property
    def members(self) -> FloatArray:
        """Which rows belong to which unit, (units, R), 0 or 1."""
        return np.asarray(np.unique(self.unit)[:, None] == self.unit, dtype=np.float64)

    @cached_property
    def white(self) -> FloatArray:
        """Expected ``spread`` of a pair of white noise of variance 1, (R, 2)."""
        return np.asarray(1.0 - self._lost_sums[..., 0])

    def decaying(self, log_constant: float) -> tuple[FloatArray, FloatArray]:
        """The same of an exponential, and its derivative by the log of the decay time, (R, 2) both."""
        ratio = self.lag / np.exp(log_constant)
        left = np.exp(-ratio)[:, None] * np.array([1.0, -1.0])
        value = 1.0 + left - self._spline(log_constant)
        return value, ratio[:, None] * left - self._spline(log_constant, 1)


def _expected(sums: LagProducts, parameters: FloatArray) -> tuple[FloatArray, list[FloatArray]]:
    """Expected ``spread`` of a pair, (R, 2), and its derivatives by the parameters; white noise for none."""
    if not parameters.size:
        return sums.white, []
    white = parameters[-1]
    slow, slow_slope = sums.decaying(parameters[0])
    if parameters.size == 2:
        mixed, slopes = slow, [slow_slope]
    else:
        _, between, share, _ = parameters
        room = parameters[0] + np.log(LARGEST_RATIO) - sums.fastest
        fast, fast_slope = sums.decaying(sums.fastest + between * room)
        mixed = share * slow + (1.0 - share) * fast
        slopes = [
            share * slow_slope + (1.0 - share) * between * fast_slope,
            (1.0 - share) * room * fast_slope,
            slow - fast,
        ]
    slopes = [(1.0 - white) * slope for slope in slopes]
    return (1.0 - white) * mixed + white * sums.white, [*slopes, sums.white - mixed]


def _scores(sums: LagProducts, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Composite log likelihood of every unit, each with the variance that suits it best, and its gradient.

    A pair (s, s') is Gaussian; its sum and difference are independent. A common factor on both would let loud
    subjects outvote the others, so every unit has its own and only the shape counts.
    """
    expected, slopes = _expected(sums, parameters)
    expected = np.maximum(expected, 1e-6)
    ratio = sums.spread / expected
    size = 2.0 * (sums.members @ sums.count)
    variance = np.maximum(sums.members @ ratio.sum(axis=1) / size, np.finfo(np.float64).tiny)
    logs = sums.members @ (sums.count[:, None] * np.log(expected)).sum(axis=1)
    pull = (ratio / (sums.members.T @ variance)[:, None] - sums.count[:, None]) / expected
    gradient = [0.5 * float((pull * slope).sum()) for slope in slopes]
    return -0.5 * (size * (np.log(variance) + 1.0) + logs), np.array(gradient)


def _bounds(sums: LagProducts, scales: int) -> list[tuple[float, float]]:
    longest, part = float(np.log(LONGEST_TIME_CONSTANT)), (0.0, 1.0)
    if scales == 1:
        return [(float(np.log(SHORTEST_TIME_CONSTANT)), longest), part]
    return [
        (sums.fastest - float(np.log(LARGEST_RATIO)), longest),
        part,
        (SMALLEST_SHARE, 1.0 - SMALLEST_SHARE),
        part,
    ]


def _fit(sums: LagProducts, scales: int, starts: Sequence[Sequence[float] | FloatArray]) -> FloatArray:
    """Parameters of the highest composite likelihood."""
    total = float(sums.count.sum())

    def cost(parameters: FloatArray) -> tuple[float, FloatArray]:
        scores, gradient = _scores(sums, parameters)
        return -float(scores.sum()) / total, -gradient / total

    options = {"ftol": 1e-10, "gtol": 1e-7, "maxiter": 100}
    bounds, fits = _bounds(sums, scales), []
    low, high = np.array(bounds).T
    for start in starts:
        inside = np.clip(start, low, high)
        found = minimize(cost, inside, jac=True, method="L-BFGS-B", bounds=bounds, options=options)
        fits.append((float(found.fun), np.asarray(found.x, dtype=np.float64)))
    return min(fits, key=lambda fit: fit[0])[1]


def _gains(sums: LagProducts, richer: FloatArray, plainer: FloatArray) -> FloatArray:
    """How much better the richer of two models predicts each unit, left out, (units,), log likelihood."""
    gains = []
    for unit in np.unique(sums.unit):
        left_out, others = sums.chosen(sums.unit == unit), sums.chosen(sums.unit != unit)
        scores = []
        for whole in (richer, plainer):
            own = _fit(others, whole.size // 2, [whole]) if whole.size else whole
            scores.append(float(_scores(left_out, own)[0].sum()))
        gains.append(scores[0] - scores[1])
    return np.array(gains)


def choose_time_scales(sums: LagProducts) -> TimeScales:
    """One decay time or two, whichever predicts subjects left out.

    Parameters
    ----------
    sums : of every subject, or of every trial where there is one subject

    Returns
    -------
    TimeScales, the slowest at most LONGEST_TIME_CONSTANT; that alone where neighbouring frames have nothing
    in common, which is the cautious answer: it counts frames least.

    Notes
    -----
    Each number of scales is fitted by the Gaussian composite likelihood of pairs of frames, a unit left out
    at a time, and the unit is scored. The richer model is taken where its mean gain exceeds the standard
    error of that gain over units (times 1.84 for two units, 1.07 for nine: Student's t at the level of one
    normal deviate). Not the standard error of the scores: they differ far more between subjects than the
    models do within one. With fewer than two units nothing can be left out: one scale.
    """
    longest, none = TimeScales.single(LONGEST_TIME_CONSTANT), np.zeros(0)
    if not sums.count.sum():
        return longest
    several = np.unique(sums.unit).size > 1
    one = _fit(sums, 1, _STARTS[1])
    looks_white = one[0] <= sums.fastest or one[-1] > 1.0 - SMALLEST_SHARE
    if looks_white or (several and _gains(sums, one, none).sum() <= 0.0):
        return longest
    plain = TimeScales.single(float(np.exp(one[0])))
    if not several or sums.fastest > np.log(LARGEST_RATIO * LONGEST_TIME_CONSTANT):
        return plain
    two = _fit(sums, 2, _STARTS[2])
    slow, between, share, _ = two
    # A fast scale at its bound is white noise, a share at its bound nothing: no need to ask those left out.
    edge = 1e-3
    if between < edge or not SMALLEST_SHARE + edge < share < 1.0 - SMALLEST_SHARE - edge:
        return plain
    gains = _gains(sums, two, one)
    error = float(np.std(gains, ddof=1)) / np.sqrt(gains.size)
    # The error itself is badly known from few units: Student's t at the level of one normal deviate.
    if gains.mean() <= student.ppf(ONE_SIGMA, gains.size - 1) * error:
        return plain
    fast = sums.fastest + between * (slow + np.log(LARGEST_RATIO) - sums.fastest)
    return TimeScales(np.exp([slow, fast]), np.array([share, 1.0 - share]))

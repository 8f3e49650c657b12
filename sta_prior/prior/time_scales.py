"""How fast the residual of an artifact prior forgets: one decay time or two.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. Estimated by prior/lag_products.py and
prior/time_scale_fit.py.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.checks import FloatArray

LONGEST_TIME_CONSTANT = 0.1
"""Cap of the residual's decay time, s: a single fitted exponential otherwise runs to the longest
constant allowed and soaks up what the basis does not fit."""

SHORTEST_TIME_CONSTANT = 0.001
"""Smallest decay time, s: at the rates of motion capture a shorter one looks like white noise."""


@dataclass(frozen=True)
class TimeScales:
    """Correlation of a residual over time: a sum of exponentials.

    Attributes
    ----------
    constants : shape (k,), s, slowest first; k = 1 or 2
    shares : shape (k,), of the variance; they sum to 1
    """

    constants: FloatArray
    shares: FloatArray

    @classmethod
    def single(cls, constant: float) -> TimeScales:
        """One decay time, s; 0 for a residual that is independent from frame to frame."""
        return cls(np.array([constant]), np.array([1.0]))

    @property
    def slowest(self) -> float:
        """The longest decay time, s."""
        return float(self.constants[0])

    def correlation(self, lag: FloatArray) -> FloatArray:
        """Correlation at lags in s, of any shape, either sign."""
        away = np.abs(np.asarray(lag, dtype=np.float64))[..., None]
        # A constant of 0 gives 1 at lag 0, and else 0.
        decay = np.exp(-away / np.maximum(self.constants, np.finfo(np.float64).tiny))
        return np.asarray(decay @ self.shares)

    def words(self) -> str:
        """In words, for the line of a segment."""
        if self.constants.size == 1:
            return f"decay time {self.slowest:.3f} s"
        parts = [
            f"{constant:.3f} s ({100.0 * share:.0f} %)"
            for constant, share in zip(self.constants, self.shares, strict=True)
        ]
        return f"decay times {' and '.join(parts)}"

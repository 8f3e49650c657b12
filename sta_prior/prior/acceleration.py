"""Acceleration of slow fixed-point iterations on covariance matrices.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

Expectation–maximisation walks slowly along directions in which most information is missing, and slower
than any geometric series where a variance goes to zero. Anderson's method fits the last few steps together.
It works on matrix logarithms here, so that every extrapolation is a covariance again and a variance on its
way to zero is a straight line.

References
----------
Walker & Ni (2011), SIAM J Numer Anal 49, 1715–1735, doi 10.1137/10078356X (Anderson's method; from memory).
Henderson & Varadhan (2019), J Comput Graph Stat 28, 834–846, doi 10.1080/10618600.2019.1594835 (damped and
restarted, for expectation–maximisation; from memory).
"""

from __future__ import annotations

from collections import deque

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.gaussian import symmetrise

SMALLEST = 1e-15
"""Eigenvalues below this part of the largest are taken as this part."""


def to_logarithm(matrix: FloatArray) -> FloatArray:
    """Matrix logarithm of a covariance, shape (n, n)."""
    values, vectors = np.linalg.eigh(matrix)
    values = np.log(np.maximum(values, SMALLEST * values[-1]))
    return symmetrise((vectors * values) @ vectors.T)


def from_logarithm(logarithm: FloatArray) -> FloatArray:
    """The covariance of a matrix logarithm, shape (n, n)."""
    values, vectors = np.linalg.eigh(symmetrise(logarithm))
    return symmetrise((vectors * np.exp(values)) @ vectors.T)


class Anderson:
    """Anderson's method with a bounded step and restarts.

    memory: how many steps are fitted together, 0 for none; longest_step: bound on the change of any entry
    beyond the plain step; growth: a residual that grows by more than this factor starts anew from the best
    point.
    """

    def __init__(self, memory: int, longest_step: float = 3.0, growth: float = 2.0) -> None:
        self.memory, self.longest_step, self.growth = memory, longest_step, growth
        self.clear()

    def clear(self) -> None:
        """Forget all steps."""
        self._points: deque[FloatArray] = deque(maxlen=self.memory + 1)
        self._steps: deque[FloatArray] = deque(maxlen=self.memory + 1)
        self._best = np.inf
        self._safe: FloatArray | None = None

    def next(self, point: FloatArray, mapped: FloatArray) -> FloatArray:
        """Where to go after ``mapped`` was found from ``point``, any shape (N,)."""
        if not self.memory:
            return mapped
        step = mapped - point
        size = float(np.linalg.norm(step))
        if self._safe is not None and size > self.growth * self._best:
            safe = self._safe
            self.clear()
            return safe
        if size < self._best:
            self._best, self._safe = size, mapped
        self._points.append(point)
        self._steps.append(step)
        if len(self._points) < 2:
            return mapped
        point_changes = np.diff(np.stack(self._points, axis=1), axis=1)
        step_changes = np.diff(np.stack(self._steps, axis=1), axis=1)
        shares = np.linalg.lstsq(step_changes, step, rcond=1e-8)[0]
        further = -(point_changes + step_changes) @ shares
        largest = float(np.max(np.abs(further), initial=0.0))
        return np.asarray(mapped + further * min(1.0, self.longest_step / max(largest, 1e-300)))

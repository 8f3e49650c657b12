"""Hilbert-space basis of Gaussian processes on an interval, and covariance functions of one variable.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

On x ∈ [−L, L] the Hilbert-space basis is φ_j(x) = L^−½ sin(πj(x + L)/(2L)), j = 1 … m, with prior
weight S(√λ_j), √λ_j = πj/(2L) and S the spectral density of the covariance function. Trend and deviation
both: a polynomial by itself explodes beyond its data, a stationary process falls back to its mean.

References
----------
Solin & Särkkä (2020), Stat Comput, doi 10.1007/s11222-019-09886-w (basis and weights).
Rasmussen & Williams (2006), Gaussian Processes for Machine Learning, ch. 4 (spectral densities;
from memory).
"""

from __future__ import annotations

import math
from typing import Literal

import numpy as np

from sta_prior.checks import FloatArray

Covariance = Literal["squared-exponential", "matern-3/2"]
EDGE_DEFICIT = 1e-3
"""Largest part of the variance that may be missing at the edge of the data."""


def spectral_density(frequency: FloatArray, length: float, kind: Covariance) -> FloatArray:
    """Spectral density of a covariance of unit variance on the line.

    Parameters
    ----------
    frequency : any shape, rad of phase per unit of x
    length : length scale, unit of x
    """
    if kind == "squared-exponential":
        return np.asarray(math.sqrt(2.0 * math.pi) * length * np.exp(-0.5 * (length * frequency) ** 2))
    rate = math.sqrt(3.0) / length
    return np.asarray(4.0 * rate**3 / (rate**2 + frequency**2) ** 2)


def covariance(distance: FloatArray, length: float, kind: Covariance) -> FloatArray:
    """Covariance of unit variance at a distance, any shape."""
    if kind == "squared-exponential":
        return np.asarray(np.exp(-0.5 * (distance / length) ** 2))
    scaled = math.sqrt(3.0) * np.abs(distance) / length
    return np.asarray((1.0 + scaled) * np.exp(-scaled))


def boundary_factor(
    half_range: float, length: float, kind: Covariance, deficit: float = EDGE_DEFICIT
) -> float:
    """Smallest factor c with k(2S(c − 1)) ≤ deficit: L = c·S for data on [−S, S].

    The images of the data behind the boundary take variance away from the edge by k(2(L − S)); a rule of
    thumb alone leaves intervals there too narrow.
    """
    if kind == "squared-exponential":
        reach = length * math.sqrt(-2.0 * math.log(deficit))
    else:
        low, high = 0.0, 100.0 * length
        for _ in range(80):
            middle = 0.5 * (low + high)
            above = float(covariance(np.array(middle), length, kind)) > deficit
            low, high = (middle, high) if above else (low, middle)
        reach = high
    return 1.0 + reach / (2.0 * half_range)


def basis_functions(x: FloatArray, limit: float, count: int) -> FloatArray:
    """φ_1 … φ_m at x, shape (..., m)."""
    order = np.arange(1, count + 1)
    phase = 0.5 * np.pi * order * (x[..., None] + limit) / limit
    return np.asarray(np.sin(phase) / math.sqrt(limit), dtype=np.float64)


def basis_slopes(x: FloatArray, limit: float, count: int) -> FloatArray:
    """Derivatives of φ_1 … φ_m at x, shape (..., m)."""
    order = np.arange(1, count + 1)
    frequency = 0.5 * np.pi * order / limit
    slopes = frequency * np.cos(frequency * (x[..., None] + limit)) / math.sqrt(limit)
    return np.asarray(slopes, dtype=np.float64)

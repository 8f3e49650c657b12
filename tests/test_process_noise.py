"""Process noise of the constant-velocity model: published value, two routes, and a namesake."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg
from filterpy.common import Q_continuous_white_noise, Q_discrete_white_noise, van_loan_discretization

from sta_prior.checks import FloatArray

# Constant velocity and constant acceleration: the last derivative is driven by white noise.
MODELS = {2: np.diag([1.0], k=1), 3: np.diag([1.0, 1.0], k=1)}


def closed_form(order: int, interval: float, density: float) -> FloatArray:
    """∫ of the outer product of (…, s²/2, s, 1) over the interval, times the density."""
    powers = np.arange(order)[::-1]
    factorial = np.array([1.0, 1.0, 2.0])[powers]
    exponent = powers[:, None] + powers + 1
    result: FloatArray = density * interval**exponent / (exponent * factorial[:, None] * factorial)
    return result


def by_van_loan(order: int, interval: float, density: float) -> FloatArray:
    """Van Loan (1978), IEEE Trans. Automatic Control 23, 395–404, with SciPy's matrix exponential."""
    drift = MODELS[order]
    diffusion = np.zeros((order, order))
    diffusion[-1, -1] = density
    block = np.block([[-drift, diffusion], [np.zeros((order, order)), drift.T]])
    exponential = scipy.linalg.expm(block * interval)
    transition = exponential[order:, order:].T
    result: FloatArray = transition @ exponential[:order, order:]
    return result


def test_published_constant_velocity_noise() -> None:
    """Δ = 0.01 s, q = 1: q [[Δ³/3, Δ²/2], [Δ²/2, Δ]], Anderson et al. (2015); recomputed, 1e-10."""
    expected = [[1e-6 / 3, 5e-5], [5e-5, 1e-2]]
    found = Q_continuous_white_noise(2, dt=0.01, spectral_density=1.0)
    np.testing.assert_allclose(found, expected, rtol=1e-10)
    np.testing.assert_allclose(found, [[3.3333e-7, 5e-5], [5e-5, 1e-2]], rtol=2e-5)


@pytest.mark.parametrize("order", [2, 3])
@pytest.mark.parametrize(("interval", "density"), [(0.01, 1.0), (0.004, 250.0), (1.7, 3e-4)])
def test_three_routes_agree(order: int, interval: float, density: float) -> None:
    found = Q_continuous_white_noise(order, dt=interval, spectral_density=density)
    np.testing.assert_allclose(found, closed_form(order, interval, density), rtol=1e-12)
    np.testing.assert_allclose(found, by_van_loan(order, interval, density), rtol=1e-10)
    drive = np.zeros((order, 1))
    drive[-1] = np.sqrt(density)
    transition, noise = van_loan_discretization(MODELS[order], drive, dt=interval)
    np.testing.assert_allclose(noise, found, rtol=1e-10)
    np.testing.assert_allclose(transition, scipy.linalg.expm(MODELS[order] * interval), rtol=1e-12)


@pytest.mark.parametrize("order", [2, 3])
def test_two_short_steps_are_one_long_step(order: int) -> None:
    """What makes it a discretisation of one continuous process, gaps included."""
    first, second = 0.013, 0.029
    transition = scipy.linalg.expm(MODELS[order] * second)
    joined = transition @ Q_continuous_white_noise(order, dt=first) @ transition.T
    joined = joined + Q_continuous_white_noise(order, dt=second)
    np.testing.assert_allclose(Q_continuous_white_noise(order, dt=first + second), joined, rtol=1e-12)


def test_noise_by_simulation() -> None:
    """Moments of 20 000 finely stepped paths, within 4 Monte-Carlo standard errors and the step."""
    paths, steps, interval = 20_000, 200, 0.5
    rng = np.random.default_rng(30)
    kicks = rng.normal(size=(steps, paths)) * np.sqrt(interval / steps)
    velocity = kicks.cumsum(axis=0)
    position = (velocity - kicks / 2).sum(axis=0) * (interval / steps)
    found = np.cov(np.stack([position, velocity[-1]]), bias=True)
    expected = Q_continuous_white_noise(2, dt=interval)
    assert np.abs(found / expected - 1.0).max() < 4 * np.sqrt(2 / paths) + 1 / steps


def test_the_namesake_is_another_model() -> None:
    """Noise held constant over a step is no discretisation: two steps do not make one."""
    held = Q_discrete_white_noise(2, dt=0.01, var=1.0)
    np.testing.assert_allclose(held, [[0.25e-8, 0.5e-6], [0.5e-6, 1e-4]])
    assert np.linalg.matrix_rank(held) == 1
    assert np.linalg.matrix_rank(Q_continuous_white_noise(2, dt=0.01)) == 2
    transition = np.array([[1.0, 0.01], [0.0, 1.0]])
    joined = transition @ held @ transition.T + held
    assert joined[1, 1] != pytest.approx(Q_discrete_white_noise(2, dt=0.02, var=1.0)[1, 1], rel=0.1)

"""Hilbert-space basis: to the exact Gaussian process in the limit, its edge, its derivatives; the Basis."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from differences import central_difference
from scipy.integrate import quad

from sta_prior.checks import FloatArray
from sta_prior.gaussian import condition
from sta_prior.prior.basis import SOFT_EDGE, WAVE_SHARE, Basis, Reach, Term, Wave, orthonormal
from sta_prior.prior.hierarchy import TrialStatistics, Weights, condition_on, make_block, trial_message
from sta_prior.prior.hilbert import (
    EDGE_DEFICIT,
    Covariance,
    basis_functions,
    basis_slopes,
    boundary_factor,
    covariance,
    spectral_density,
)
from sta_prior.prior.reduced_rank import reduced_rank_basis

KINDS: tuple[Covariance, ...] = ("squared-exponential", "matern-3/2")


def approximate(x: FloatArray, limit: float, count: int, length: float, kind: Covariance) -> FloatArray:
    """Covariance of the reduced-rank process between all pairs of points."""
    frequency = 0.5 * np.pi * np.arange(1, count + 1) / limit
    functions = basis_functions(x, limit, count)
    return np.asarray((functions * spectral_density(frequency, length, kind)) @ functions.T)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("length", [0.3, 1.7])
def test_spectral_density_is_the_transform_of_the_covariance(kind: Covariance, length: float) -> None:
    """S(ω) = 2∫₀^∞ k(r) cos(ωr) dr (Wiener–Khinchin), by quadrature."""
    for frequency in (0.0, 0.8, 3.0):

        def integrand(r: float, w: float = frequency) -> float:
            return 2.0 * float(covariance(np.array(r), length, kind)) * math.cos(w * r)

        expected = quad(integrand, 0.0, 40.0 * length, limit=400)[0]
        got = float(spectral_density(np.array(frequency), length, kind))
        assert got == pytest.approx(expected, rel=1e-7)


def test_matern_is_that_of_its_state_space_form() -> None:
    """Hartikainen & Särkkä (2010): q = 4λ³σ², λ = √3/ℓ. For σ² = 4 and ℓ = 0.5 it is 665.10751.

    k(0.1) is 3.80884545 there. The spectral density of that process is q/(λ² + ω²)².
    """
    assert 4.0 * float(covariance(np.array(0.1), 0.5, "matern-3/2")) == pytest.approx(3.80884545, abs=5e-9)
    rate = math.sqrt(3.0) / 0.5
    for frequency in (0.0, 2.0, 9.0):
        got = 4.0 * float(spectral_density(np.array(frequency), 0.5, "matern-3/2"))
        assert got == pytest.approx(665.10751 / (rate**2 + frequency**2) ** 2, rel=1e-8)


def test_functions_are_orthonormal_and_vanish_at_the_limit() -> None:
    nodes, weights = np.polynomial.legendre.leggauss(80)
    values = basis_functions(1.3 * nodes, 1.3, 12)
    gram = (values * (1.3 * weights)[:, None]).T @ values
    np.testing.assert_allclose(gram, np.eye(12), atol=1e-12)
    np.testing.assert_allclose(basis_functions(np.array([-1.3, 1.3]), 1.3, 12), 0.0, atol=1e-13)
    # Numbered from 1: number 0 would be zero everywhere.
    assert np.abs(values).max(axis=0).min() > 0.5


def test_slopes_are_derivatives_of_the_functions() -> None:
    x = np.linspace(-1.2, 1.1, 7)
    step = 1e-6
    difference = (basis_functions(x + step, 1.5, 9) - basis_functions(x - step, 1.5, 9)) / (2 * step)
    np.testing.assert_allclose(basis_slopes(x, 1.5, 9), difference, atol=1e-7)


def test_reduced_rank_process_meets_the_exact_one() -> None:
    """c = 2, m = 32, ℓ/S = 0.3: largest error of the covariance 2.2e-10, computed independently."""
    x = np.linspace(-1.0, 1.0, 41)
    exact = covariance(x[:, None] - x, 0.3, "squared-exponential")
    error = np.abs(approximate(x, 2.0, 32, 0.3, "squared-exponential") - exact).max()
    assert error < 1e-9
    assert error == pytest.approx(2.2e-10, rel=0.05)


@pytest.mark.parametrize(
    ("kind", "factor", "published"),
    [
        ("squared-exponential", 1.2, 0.411),
        ("squared-exponential", 1.5, 0.00387),
        ("matern-3/2", 1.2, 0.329),
    ],
)
def test_variance_missing_at_the_edge(kind: Covariance, factor: float, published: float) -> None:
    """With plenty of functions the edge x = S lacks k(2(L − S)); ℓ/S = 0.3. Within 1 %."""
    edge = np.array([1.0])
    # The tail of a Matérn density falls as ω⁻⁴: it needs many.
    deficit = 1.0 - float(approximate(edge, factor, 4000, 0.3, kind)[0, 0])
    assert deficit == pytest.approx(published, rel=0.01)
    image = float(covariance(np.array(2.0 * (factor - 1.0)), 0.3, kind))
    assert deficit == pytest.approx(image, rel=0.01)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("half_range", [0.1, 1.0, 4.0])
@pytest.mark.parametrize("length", [0.05, 0.5, 3.0])
def test_boundary_is_as_near_as_the_edge_allows(kind: Covariance, half_range: float, length: float) -> None:
    for deficit in (EDGE_DEFICIT, 0.05):
        factor = boundary_factor(half_range, length, kind, deficit)
        at = float(covariance(np.array(2.0 * half_range * (factor - 1.0)), length, kind))
        assert at <= deficit * (1.0 + 1e-9)
        assert at == pytest.approx(deficit, rel=1e-6)
    assert EDGE_DEFICIT == 1e-3


def test_two_points_by_hand_through_weights_of_the_basis() -> None:
    """x = (0, 1), y = (1, 2), ℓ = σ_f = 1, σ_n² = 0.1, asked at 0.5. Exact, in closed form:

    mean 3e^(−1/8)/(1.1 + e^(−1/2)) = 1.5513877191, variance 1 − 2e^(−1/4)/(1.1 + e^(−1/2)) = 0.0872700955,
    log marginal likelihood −3.5770425528. Reached by the same messages as learning, in the limit of many
    functions and a far boundary.
    """
    wave = Wave(joint=0, dof=0, centre=0.5, limit=8.0, length=1.0, count=60)
    points, observed = np.array([0.0, 1.0]), np.array([[1.0], [2.0]])
    features = wave.values(points)
    block = make_block(features, observed, np.zeros((2, 1, 1)), np.ones(2), np.ones(1, dtype=bool))
    told = trial_message(TrialStatistics("S", "t", (block,)), np.array([[0.1]]))
    belief = condition_on(Weights(np.zeros((60, 1)), np.eye(60)), told)
    at = wave.values(np.array([0.5]))
    assert (at @ belief.mean).item() == pytest.approx(1.5513877191, abs=1e-9)
    assert (at @ belief.covariance @ at.T).item() == pytest.approx(0.0872700955, abs=1e-9)
    assert 3 * math.exp(-1 / 8) / (1.1 + math.exp(-1 / 2)) == pytest.approx(1.5513877191, abs=1e-10)
    found = condition(np.zeros(60), np.eye(60), features, observed[:, 0], 0.1 * np.eye(2))
    assert float(found.log_evidence) == pytest.approx(-3.5770425528, abs=1e-9)


def test_weights_of_a_matern_wave_are_those_of_its_density() -> None:
    wave = Wave(0, 0, centre=0.2, limit=1.5, length=0.4, count=5, kind="matern-3/2", scale=2.0)
    frequency = 0.5 * np.pi * np.arange(1, 6) / 1.5
    expected = 2.0 * np.sqrt(spectral_density(frequency, 0.4, "matern-3/2"))
    np.testing.assert_allclose(wave.weights, expected, rtol=1e-14)
    x = np.array([[0.1, 0.9]])
    np.testing.assert_allclose(wave.values(x), basis_functions(x - 0.2, 1.5, 5) * expected, rtol=1e-14)
    np.testing.assert_allclose(wave.slopes(x), basis_slopes(x - 0.2, 1.5, 5) * expected, rtol=1e-14)


def made_basis() -> Basis:
    """Two joints; a mixed trend in both, a wave in each, held between −0.4 and 1.1 in one angle."""
    terms = (Term(0, 0, 1), Term(0, 0, 2), Term(1, 2, 3))
    mixing = np.array([[1.5, 0.0, 0.0], [-0.4, 2.0, 0.0], [0.2, 0.1, 0.7]])
    waves = (
        Wave(0, 0, 0.35, 1.4, 0.5, 6, scale=0.8),
        Wave(1, 1, 0.0, 1.0, 0.3, 4, kind="matern-3/2"),
    )
    return Basis(terms, mixing, waves, (Reach(0, 0, -0.4, 1.1),))


def some_angles(seed: int, frames: int = 8) -> FloatArray:
    angles: FloatArray = np.random.default_rng(seed).uniform(-0.35, 0.9, (frames, 2, 3))
    return angles


def test_features_are_differences_to_the_reference() -> None:
    basis, reference = made_basis(), some_angles(1, 1)[0]
    angles = some_angles(2)
    values = basis.values(angles, reference)
    assert values.shape == (8, basis.size) == (8, 14)
    np.testing.assert_array_equal(values[:, 0], 1.0)
    np.testing.assert_allclose(basis.values(reference[None], reference)[0, 1:], 0.0, atol=1e-15)

    def trend(q: FloatArray) -> FloatArray:
        return np.stack([q[..., 0, 0], q[..., 0, 0] ** 2, q[..., 1, 2] ** 3], axis=-1)

    np.testing.assert_allclose(
        values[:, 1:4], (trend(angles) - trend(reference)) @ basis.mixing.T, rtol=1e-12
    )
    first = basis.waves[0]
    expected = first.values(angles[:, 0, 0]) - first.values(reference[0, 0])
    np.testing.assert_allclose(values[:, 4:10], expected, rtol=1e-12)


def test_derivatives_of_the_features_by_differences() -> None:
    basis, reference = made_basis(), some_angles(3, 1)[0]
    angles = some_angles(4)
    angles[0, 0, 0], angles[1, 0, 0] = 1.6, -0.9
    got = basis.derivatives(angles)
    for frame in range(len(angles)):

        def features(change: FloatArray, at: FloatArray = angles[frame]) -> FloatArray:
            return basis.values(at[None] + change.reshape(1, 2, 3), reference)[0]

        expected = central_difference(features, 6).reshape(basis.size, 2, 3)
        np.testing.assert_allclose(got[frame], expected, atol=1e-7)
    # Held beyond the edge of the data, an angle moves next to nothing.
    assert np.abs(got[:2, :, 0, 0]).max() < 1e-4 * np.abs(got[2:, :, 0, 0]).max()
    assert got[2:, 1, 0, 0].all()


def test_angles_are_held_at_the_edge_and_their_excess_counted() -> None:
    basis = replace(made_basis(), reaches=(Reach(0, 0, -0.4, 1.1), Reach(1, 1, -0.2, 0.5)))
    angles = np.zeros((4, 2, 3))
    angles[1, 0, 0], angles[2, 0, 0] = 1.4, -0.8
    angles[3, 0, 0], angles[3, 1, 1] = 1.5, 0.8
    angles[3, 0, 1] = 2.0
    held = basis.held(angles)

    def rest(beyond: float) -> float:
        return SOFT_EDGE * (1.0 - np.exp(-beyond / SOFT_EDGE))

    np.testing.assert_allclose(held[:, 0, 0], [0.0, 1.1 + rest(0.3), -0.4 - rest(0.4), 1.1 + rest(0.4)])
    np.testing.assert_allclose(held[:, 1, 1], [0.0, 0.0, 0.0, 0.5 + rest(0.3)])
    assert held[3, 0, 1] == 2.0
    assert angles[1, 0, 0] == 1.4
    np.testing.assert_allclose(basis.excess(angles), [0.0, 0.3, 0.4, 0.5], atol=1e-15)
    reference = np.zeros((2, 3))
    free = replace(basis, reaches=())
    np.testing.assert_array_equal(basis.values(angles, reference), free.values(held, reference))
    assert free.held(angles) is angles
    np.testing.assert_array_equal(free.excess(angles), np.zeros(4))


def test_prior_variance_is_shared_between_trend_and_waves() -> None:
    basis = made_basis()
    np.testing.assert_array_equal(basis.relative_variance, [1.0] * 4 + [WAVE_SHARE] * 10)
    assert basis.total_relative_variance == pytest.approx(4.0 + 2 * WAVE_SHARE)


def test_waves_have_unit_mean_square_over_the_training_frames() -> None:
    angles, references = [some_angles(5, 30), some_angles(6, 20)], [some_angles(7, 1)[0]] * 2
    basis = orthonormal(replace(made_basis(), reaches=()), angles, references)
    values = np.concatenate([basis.values(q, q0) for q, q0 in zip(angles, references, strict=True)])
    for first, last in ((4, 10), (10, 14)):
        assert (values[:, first:last] ** 2).sum(axis=1).mean() == pytest.approx(1.0, rel=1e-12)


def test_basis_of_the_family_is_held_and_loses_little_at_its_edge() -> None:
    """The prior variance of the deviations at the edge of the data is that in the middle, but for 1 %.

    Differences to the reference aside: k(x, x) of the wave itself.
    """
    angles = [0.6 + 0.6 * np.sin(np.linspace(0, 6, 50))[:, None, None] * np.ones((1, 1, 3))]
    references = [np.full((1, 3), 0.05)]
    basis = reduced_rank_basis((0,), angles, references)
    reach, wave = basis.reaches[0], basis.waves[0]
    assert reach.low == pytest.approx(angles[0].min())
    assert reach.high == pytest.approx(angles[0].max())
    edge, middle = (float((wave.values(np.array([x])) ** 2).sum()) for x in (reach.high, wave.centre))
    assert edge / middle == pytest.approx(1.0, abs=0.01)

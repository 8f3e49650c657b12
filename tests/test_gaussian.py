"""Gaussian algebra: factors, densities, conditioning, subtraction of noise, published scores, messages."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
import scipy.integrate
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from sta_prior.checks import FloatArray
from sta_prior.errors import CovarianceError, ShapeError
from sta_prior.gaussian import (
    cholesky,
    condition,
    crps_normal,
    log_density,
    mahalanobis,
    nearest_psd,
    solve_spd,
    subtract_psd,
    symmetrise,
    whiten,
)

quick = settings(max_examples=60, deadline=None, derandomize=True, database=None)
seeds = st.integers(0, 2**32 - 1)


def covariance(size: int, seed: int, leading: tuple[int, ...] = (), rank: int | None = None) -> FloatArray:
    root = np.random.default_rng(seed).normal(size=(*leading, size, rank or size + 2))
    result: FloatArray = root @ np.swapaxes(root, -1, -2)
    return symmetrise(result)


# --- factors and densities -------------------------------------------------------------------------


@pytest.mark.parametrize("leading", [(), (0,), (3,), (2, 3)])
def test_factor_whiten_and_solve(leading: tuple[int, ...]) -> None:
    sigma = covariance(5, 1, leading)
    factor = cholesky(sigma)
    np.testing.assert_allclose(factor @ np.swapaxes(factor, -1, -2), sigma, rtol=1e-12, atol=1e-12)
    assert np.array_equal(factor, np.tril(factor))
    matrix = np.random.default_rng(2).normal(size=(*leading, 5, 2))
    np.testing.assert_allclose(factor @ whiten(factor, matrix), matrix, rtol=1e-10, atol=1e-12)
    np.testing.assert_allclose(sigma @ solve_spd(sigma, matrix), matrix, rtol=1e-9, atol=1e-10)
    for index in np.ndindex(*leading):
        single = solve_spd(sigma[index], matrix[index])
        np.testing.assert_allclose(solve_spd(sigma, matrix)[index], single, rtol=1e-9, atol=1e-12)
        np.testing.assert_allclose(
            whiten(factor, matrix)[index], whiten(factor[index], matrix[index]), atol=1e-12
        )


def test_one_right_side_serves_every_covariance() -> None:
    sigma = covariance(3, 3, (4,))
    shared = np.random.default_rng(4).normal(size=(3, 2))
    np.testing.assert_allclose(
        sigma @ solve_spd(sigma, shared), np.broadcast_to(shared, (4, 3, 2)), atol=1e-10
    )


def test_nothing_is_added_to_the_diagonal() -> None:
    """(0.1 mm)² in m² is 1e-8: a hidden 1e-9 would be a tenth of it."""
    sigma = np.diag([1e-8, 1e-20])
    np.testing.assert_allclose(cholesky(sigma), np.diag([1e-4, 1e-10]), rtol=1e-15)
    np.testing.assert_allclose(solve_spd(sigma, np.eye(2)), np.diag([1e8, 1e20]), rtol=1e-14)


def test_density_and_distance_against_scipy() -> None:
    """Another library: scipy.stats.multivariate_normal; χ² 95 % point of 6 degrees of freedom."""
    sigma = covariance(6, 5)
    residual = np.random.default_rng(6).normal(size=(7, 6))
    expected = stats.multivariate_normal(cov=sigma).logpdf(residual)
    np.testing.assert_allclose(log_density(residual, sigma), expected, rtol=1e-10)
    square = np.einsum("...i,ij,...j->...", residual, np.linalg.inv(sigma), residual)
    np.testing.assert_allclose(mahalanobis(residual, sigma) ** 2, square, rtol=1e-9)
    draws = np.random.default_rng(7).multivariate_normal(np.zeros(6), sigma, size=20_000)
    inside = int((mahalanobis(draws, sigma) ** 2 < 12.5916).sum())
    low, high = stats.binom.interval(0.9999, 20_000, 0.95)
    assert low <= inside <= high


def test_density_of_a_missing_residual_is_missing() -> None:
    residual = np.array([[1.0, 2.0], [np.nan, 0.0]])
    for function in (log_density, mahalanobis):
        assert np.isnan(function(residual, np.eye(2))).tolist() == [False, True]


# --- conditioning ----------------------------------------------------------------------------------


def dense_posterior(
    mean: FloatArray, prior: FloatArray, design: FloatArray, observed: FloatArray, noise: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Slow and obvious: information form with explicit inverses."""
    precision = np.linalg.inv(prior) + design.T @ np.linalg.inv(noise) @ design
    result = np.linalg.inv(precision)
    return result @ (np.linalg.inv(prior) @ mean + design.T @ np.linalg.inv(noise) @ observed), result


@pytest.mark.parametrize("leading", [(), (4,), (2, 3)])
def test_conditioning_equals_the_information_form(leading: tuple[int, ...]) -> None:
    rng = np.random.default_rng(8)
    mean, design = rng.normal(size=(*leading, 4)), rng.normal(size=(*leading, 3, 4))
    observed = rng.normal(size=(*leading, 3))
    prior, noise = covariance(4, 9, leading), covariance(3, 10, leading)
    found = condition(mean, prior, design, observed, noise)
    for index in np.ndindex(*leading):
        expected = dense_posterior(mean[index], prior[index], design[index], observed[index], noise[index])
        np.testing.assert_allclose(found.mean[index], expected[0], rtol=1e-9, atol=1e-9)
        np.testing.assert_allclose(found.covariance[index], expected[1], rtol=1e-9, atol=1e-9)
        spread = design[index] @ prior[index] @ design[index].T + noise[index]
        evidence = stats.multivariate_normal(design[index] @ mean[index], spread).logpdf(observed[index])
        assert found.log_evidence[index] == pytest.approx(evidence, rel=1e-9)


def test_a_hidden_row_is_a_dropped_row() -> None:
    rng = np.random.default_rng(11)
    design, noise = rng.normal(size=(3, 4)), covariance(3, 12)
    observed = np.array([[0.3, -0.2, 0.9], [0.3, np.nan, 0.9], [np.nan, np.nan, np.nan]])
    found = condition(np.ones(4), covariance(4, 13), design, observed, noise)
    for row, kept in enumerate(([0, 1, 2], [0, 2])):
        part = condition(
            np.ones(4), covariance(4, 13), design[kept], observed[row, kept], noise[np.ix_(kept, kept)]
        )
        np.testing.assert_allclose(found.mean[row], part.mean, rtol=1e-12)
        np.testing.assert_allclose(found.covariance[row], part.covariance, rtol=1e-10, atol=1e-12)
        assert found.log_evidence[row] == pytest.approx(float(part.log_evidence), rel=1e-12)
    np.testing.assert_array_equal(found.mean[2], np.ones(4))
    np.testing.assert_allclose(found.covariance[2], covariance(4, 13))
    assert found.log_evidence[2] == pytest.approx(0.0, abs=1e-15)


def test_observations_one_after_another_equal_all_at_once() -> None:
    rng = np.random.default_rng(14)
    design, observed = rng.normal(size=(3, 4)), rng.normal(size=3)
    noise = np.diag([0.5, 1.0, 2.0])
    together = condition(np.zeros(4), covariance(4, 15), design, observed, noise)
    mean, spread, evidence = np.zeros(4), covariance(4, 15), 0.0
    for k in range(3):
        step = condition(mean, spread, design[[k]], observed[[k]], noise[[k]][:, [k]])
        mean, spread, evidence = step.mean, step.covariance, evidence + float(step.log_evidence)
    np.testing.assert_allclose(mean, together.mean, rtol=1e-10)
    np.testing.assert_allclose(spread, together.covariance, rtol=1e-9, atol=1e-10)
    assert evidence == pytest.approx(float(together.log_evidence), rel=1e-10)


def test_exact_observation_of_a_wide_prior_stays_a_covariance() -> None:
    """A prior 1e16 times wider than the noise: (I − KH) P turns negative, Joseph's form gives the noise."""
    prior, noise = 1e6 * covariance(6, 16), 1e-10 * np.eye(6)
    found = condition(np.zeros(6), prior, np.eye(6), np.arange(6.0), noise)
    np.testing.assert_allclose(found.covariance, noise, rtol=0, atol=1e-12)
    np.testing.assert_allclose(found.mean, np.arange(6.0), atol=1e-4)


def test_limits_of_the_prior() -> None:
    design, observed = np.array([[1.0, 0.5], [0.0, 1.0], [1.0, -1.0]]), np.array([1.0, 2.0, 3.0])
    least_squares = np.linalg.lstsq(design, observed, rcond=None)[0]
    wide = condition(np.array([5.0, -5.0]), 1e6 * np.eye(2), design, observed, np.eye(3))
    np.testing.assert_allclose(wide.mean, least_squares, rtol=1e-4)
    wider = condition(np.array([5.0, -5.0]), 1e8 * np.eye(2), design, observed, np.eye(3))
    np.testing.assert_allclose(wider.mean, least_squares, rtol=1e-6)
    narrow = condition(np.array([5.0, -5.0]), 1e-12 * np.eye(2), design, observed, np.eye(3))
    np.testing.assert_allclose(narrow.mean, [5.0, -5.0], rtol=1e-10)


# --- clipping --------------------------------------------------------------------------------------


@quick
@given(seeds)
def test_known_noise_is_taken_out_exactly(seed: int) -> None:
    signal, noise = covariance(5, seed, rank=2), covariance(5, seed + 1)
    found = subtract_psd(signal + noise, noise, 1e-3)
    np.testing.assert_allclose(found, signal, rtol=0, atol=1e-9 * np.abs(signal + noise).max())


@quick
@given(seeds)
def test_subtraction_leaves_a_covariance_that_only_clips(seed: int) -> None:
    observed, noise = covariance(5, seed), covariance(5, seed + 1)
    found = subtract_psd(observed, noise, 1e-3)
    scale = np.abs(observed).max() + np.abs(noise).max()
    assert np.linalg.eigvalsh(found)[0] > -1e-10 * scale
    # Clipping raises eigenvalues only: what is returned is at least the plain difference …
    assert np.linalg.eigvalsh(found - (observed - noise))[0] > -1e-9 * scale
    # … and no more than was observed, nor is it clipped twice.
    assert np.linalg.eigvalsh(observed - found)[0] > -1e-9 * scale
    again = subtract_psd(found + noise, noise, 1e-3)
    np.testing.assert_allclose(again, found, rtol=0, atol=1e-8 * scale)


def test_subtraction_does_not_depend_on_the_unit_of_a_coordinate() -> None:
    """Rotation in rad or degrees: the same answer, restated (floor small against the noise)."""
    observed, noise = covariance(4, 20), covariance(4, 21)
    unit = np.diag([1.0, 180 / np.pi, 1e3, 1.0])
    restated = subtract_psd(unit @ observed @ unit, unit @ noise @ unit, 1e-12)
    expected = unit @ subtract_psd(observed, noise, 1e-12) @ unit
    np.testing.assert_allclose(restated, expected, rtol=1e-6, atol=1e-6)
    assert np.linalg.eigvalsh(observed - noise)[0] < 0  # so that something was clipped


def test_subtraction_is_batched_and_takes_singular_noise() -> None:
    """Rounding grows by observed/floor, here some 1e7."""
    observed, noise = covariance(4, 22, (3,)), covariance(4, 23, (3,), rank=2)
    found = subtract_psd(observed, noise, 1e-6)
    for k in range(3):
        np.testing.assert_allclose(found[k], subtract_psd(observed[k], noise[k], 1e-6), rtol=0, atol=1e-6)
    silent = subtract_psd(observed, np.zeros((4, 4)), 1e-6)
    np.testing.assert_allclose(silent, observed, rtol=0, atol=1e-9)


@quick
@given(seeds)
def test_nearest_psd_is_nearest(seed: int) -> None:
    rng = np.random.default_rng(seed)
    matrix = symmetrise(rng.normal(size=(4, 4)))
    found = nearest_psd(matrix)
    assert np.linalg.eigvalsh(found)[0] > -1e-13
    other = covariance(4, seed, rank=3) * 10 ** rng.uniform(-3, 0)
    between = found + 0.3 * (other - found)
    assert np.linalg.norm(matrix - found) <= np.linalg.norm(matrix - between) + 1e-12
    np.testing.assert_allclose(nearest_psd(found), found, atol=1e-13)
    raised = np.linalg.eigvalsh(nearest_psd(matrix, 0.2))
    np.testing.assert_allclose(raised, np.maximum(np.linalg.eigvalsh(matrix), 0.2), rtol=1e-9)


def test_symmetrise() -> None:
    np.testing.assert_array_equal(symmetrise([[1.0, 2.0], [4.0, 5.0]]), [[1.0, 3.0], [3.0, 5.0]])


# --- scores ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("mean", "sd", "observed", "expected"),
    [(0.0, 1.0, 0.0, 0.2336949773), (0.0, 1.0, 1.0, 0.6024413576), (0.1, 0.4, 0.0, 0.1033999252)],
)
def test_published_scores(mean: float, sd: float, observed: float, expected: float) -> None:
    """Gneiting & Raftery (2007), closed form; values recomputed, 1e-9."""
    assert crps_normal(mean, sd, observed) == pytest.approx(expected, abs=1e-9)


def test_score_is_the_integral_it_stands_for() -> None:
    def integrand(x: float) -> float:
        return float((stats.norm.cdf(x, 0.3, 0.7) - (x >= 1.1)) ** 2)

    expected = scipy.integrate.quad(integrand, -8, 1.1)[0] + scipy.integrate.quad(integrand, 1.1, 9)[0]
    assert crps_normal(0.3, 0.7, 1.1) == pytest.approx(expected, rel=1e-8)


def test_mean_score_of_a_calibrated_forecast() -> None:
    """σ/√π = 0.5641896 σ, within 4 Monte-Carlo standard errors."""
    sd = 2.5
    scores = crps_normal(0.0, sd, sd * np.random.default_rng(24).normal(size=40_000))
    error = scores.std() / np.sqrt(scores.size)
    assert scores.mean() == pytest.approx(0.5641896 * sd, abs=4 * error)


def test_score_of_a_certain_forecast_is_its_error() -> None:
    np.testing.assert_array_equal(crps_normal([1.0, 1.0], 0.0, [3.0, np.nan]), [2.0, np.nan])
    assert crps_normal(1.0, 1e-9, 3.0) == pytest.approx(2.0)
    assert np.isnan(crps_normal(0.0, np.nan, 1.0))


# --- messages --------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("call", "error", "text"),
    [
        (
            lambda: cholesky(np.diag([1.0, -0.25]), "artifact covariance"),
            CovarianceError,
            "artifact covariance: smallest eigenvalue is -0.25, expected above 0. "
            "Give every direction some spread.",
        ),
        (
            lambda: solve_spd(np.stack([np.eye(2), np.diag([1.0, -3.0])]), np.eye(2), "noise"),
            CovarianceError,
            "noise, index (1,): smallest eigenvalue is -3, expected above 0. "
            "Give every direction some spread.",
        ),
        (
            lambda: condition([0.0], np.zeros((1, 1)), [[1.0]], [2.0], np.zeros((1, 1))),
            CovarianceError,
            "innovation: smallest eigenvalue is 0, expected above 0. Give every direction some spread.",
        ),
        (
            lambda: cholesky(np.zeros((2, 3))),
            ShapeError,
            "covariance: expected shape (..., 3, 3), got (2, 3).",
        ),
        (
            lambda: cholesky(np.array([[1.0, np.nan], [0.0, 1.0]])),
            ShapeError,
            "covariance: value at (0, 1) is nan, expected a finite number.",
        ),
        (
            lambda: symmetrise(np.zeros((4, 2))),
            ShapeError,
            "matrix: expected shape (..., n, n), got (4, 2).",
        ),
        (
            lambda: whiten(np.eye(3), np.zeros((2, 5))),
            ShapeError,
            "matrix: expected shape (..., 3, n), got (2, 5).",
        ),
        (
            lambda: log_density(np.zeros(4), np.eye(3)),
            ShapeError,
            "residual: expected shape (..., 3), got (4,).",
        ),
        (
            lambda: nearest_psd(np.eye(2), -0.5),
            CovarianceError,
            "floor: expected at least 0, got -0.5.",
        ),
        (
            lambda: subtract_psd(np.eye(2), np.eye(2), 0.0),
            CovarianceError,
            "floor: expected above 0, got 0.",
        ),
        (
            lambda: subtract_psd(np.eye(2), np.diag([1.0, -2.0]), 1.0),
            CovarianceError,
            "noise: smallest eigenvalue is -2, expected at least 0.",
        ),
        (
            lambda: crps_normal(0.0, [0.5, -0.1], 1.0),
            CovarianceError,
            "sd, index (1,): expected at least 0, got -0.1.",
        ),
        (lambda: crps_normal(0.0, -3.0, 1.0), CovarianceError, "sd: expected at least 0, got -3."),
    ],
)
def test_messages(call: Callable[[], object], error: type[Exception], text: str) -> None:
    with pytest.raises(error) as caught:
        call()
    assert str(caught.value) == text

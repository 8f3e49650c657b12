"""Fitting of the hierarchy: known covariances come back, noise of the bone truth is taken out."""

from __future__ import annotations

from dataclasses import replace

import made_priors as made
import numpy as np
import pytest

from sta_prior.gaussian import nearest_psd
from sta_prior.prior.fitting import FitSettings, fit_hierarchy
from sta_prior.prior.hierarchy import Block, scale_of

RELATIVE = np.ones(2)
SETTINGS = FitSettings()


def test_known_covariances_are_recovered() -> None:
    """Variances within 4 standard errors of a mean of squares, √(2/count), plus what two units of prior add.

    Between trials a third of the count is spent on the subjects' own means.
    """
    generator = np.random.default_rng(2)
    truth = made.known_truth(correlated=False)
    subjects, frames = 100, 12
    mean = np.concatenate([np.zeros((1, 6)), generator.uniform(1, 2, (1, 6))])
    drawn = made.draw_trials(generator, truth, [3] * subjects, frames, mean=mean)
    fit = fit_hierarchy(made.statistics_of(drawn), RELATIVE)
    prior = SETTINGS.between_share / 2 * scale_of(made.statistics_of(drawn)).displacement
    assert fit.stop_reason == "relative change of the covariances below 0.001"
    for level, units in (("subject", subjects), ("trial", 2 * subjects)):
        expected = np.diag(getattr(truth, f"{level}_features"))
        got = np.diag(getattr(fit, f"{level}_features"))
        error = 4 * np.sqrt(2 / (6 * units)) * expected
        pulled = SETTINGS.pseudo_units / units * np.abs(prior - expected)
        assert (np.abs(got - expected) < error + pulled).all()
    values = 3 * subjects * frames
    np.testing.assert_allclose(np.diag(fit.observed_residual), 0.3, rtol=4 * np.sqrt(2 / values) + 0.01)
    # Spread of the estimated mean: its own posterior covariance.
    error = (fit.population.mean - mean).reshape(-1)[6:]
    covariance = fit.population.covariance[6:, 6:]
    # 99.9 % point of χ² with 6 degrees of freedom is 22.46 (table of χ²).
    assert error @ np.linalg.solve(covariance, error) < 22.46


def test_correlations_are_drawn_towards_zero_by_the_stated_part() -> None:
    """With plenty of data only the shrinkage is left; a correlation's standard error is at most 1/√units."""
    generator = np.random.default_rng(3)
    truth = made.known_truth(correlated=True)
    fit = fit_hierarchy(made.statistics_of(made.draw_trials(generator, truth, [2] * 150, 12)), RELATIVE)
    spread = np.sqrt(np.diag(fit.subject_features))
    correlation = fit.subject_features / np.outer(spread, spread)
    expected = 0.25 / np.sqrt(0.5)
    error = 4 / np.sqrt(6 * 150)
    assert correlation[0, 1] == pytest.approx((1 - SETTINGS.feature_shrinkage) * expected, abs=error)
    spread = np.sqrt(np.diag(fit.subject_outputs))
    correlation = fit.subject_outputs / np.outer(spread, spread)
    pairs = correlation[np.arange(3), np.arange(3, 6)]
    assert pairs.mean() == pytest.approx((1 - SETTINGS.output_shrinkage) * 0.5, abs=4 / np.sqrt(6 * 150))


def test_noise_of_the_bone_truth_is_taken_out_of_the_residual() -> None:
    """Residual 0.3 under noise of mean variance 1 and up to 3 in some directions.

    Bound by direction: 4 standard errors of an observed variance, 4·√(2/frames)·(0.3 + noise), and the
    two pseudo-frames. Never below what subtraction alone leaves, in the order of positive matrices.
    """
    generator = np.random.default_rng(10)
    truth = made.known_truth(correlated=False)
    noise = made.random_covariance(generator, 6)
    drawn = made.draw_trials(generator, truth, [3] * 12, 40, noise=noise)
    statistics = made.statistics_of(drawn)
    fit = fit_hierarchy(statistics, RELATIVE)
    frames = 12 * 3 * 40
    values, directions = np.linalg.eigh(noise)
    learned = np.einsum("ai,ab,bi->i", directions, fit.residual, directions)
    bound = 4 * np.sqrt(2 / frames) * (0.3 + values) + 2 * scale_of(statistics).residual / frames
    assert (np.abs(learned - 0.3) < bound).all()
    assert np.linalg.eigvalsh(fit.residual)[0] >= 0
    assert np.linalg.eigvalsh(fit.residual - (fit.observed_residual - noise))[0] > -1e-12
    # Left in, the noise would more than triple the residual.
    assert np.trace(fit.observed_residual) > 3 * np.trace(fit.residual)


def test_noise_declared_too_large_leaves_nothing_negative() -> None:
    generator = np.random.default_rng(11)
    drawn = made.draw_trials(generator, made.known_truth(False), [3] * 6, 20)
    declared = 10.0 * np.eye(6)
    claimed = [replace(item, noise=np.broadcast_to(declared, (20, 6, 6))) for item in drawn]
    fit = fit_hierarchy(made.statistics_of(claimed), RELATIVE)
    np.testing.assert_allclose(fit.residual, np.zeros((6, 6)), atol=1e-12)
    assert np.trace(fit.observed_residual) == pytest.approx(6 * 0.3, rel=0.2)


def test_noise_of_a_hidden_marker_is_averaged_over_the_frames_that_saw_it() -> None:
    generator = np.random.default_rng(12)
    noise = 0.2 * made.random_covariance(generator, 6)
    drawn = made.draw_trials(generator, made.known_truth(False), [3] * 4, 20, noise=noise, hidden=True)
    statistics = made.statistics_of(drawn)
    fit = fit_hierarchy(statistics, RELATIVE)
    blocks: list[Block] = [block for trial in statistics for block in trial.blocks]
    assert not all(block.seen.all() for block in blocks)
    expected = nearest_psd(fit.observed_residual - noise)
    np.testing.assert_allclose(fit.residual, expected, atol=1e-12)

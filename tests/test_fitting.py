"""Fitting of the hierarchy: one step against dense algebra, invariances, few subjects, floors."""

from __future__ import annotations

from dataclasses import replace

import made_priors as made
import numpy as np
import pytest
from scipy.linalg import block_diag

from sta_prior.checks import FloatArray
from sta_prior.prior.fitting import (
    BETWEEN_SHARE,
    FEATURE_SHRINKAGE,
    OUTPUT_SHRINKAGE,
    PSEUDO_UNITS,
    fit_hierarchy,
)
from sta_prior.prior.hierarchy import (
    Hierarchy,
    TrialStatistics,
    population_prior,
    scale_of,
    unison_covariance,
    without_subject,
)

FIXED = np.array([True, False])
COVARIANCES = (
    "subject_features",
    "subject_outputs",
    "trial_features",
    "trial_outputs",
    "residual",
    "observed_residual",
)


def assert_alike(one: Hierarchy, other: Hierarchy, rtol: float = 1e-9) -> None:
    for name in COVARIANCES:
        a, b = getattr(one, name), getattr(other, name)
        np.testing.assert_allclose(a, b, rtol=0, atol=rtol * np.abs(b).max(), err_msg=name)
    scale = np.abs(other.population.covariance).max()
    np.testing.assert_allclose(one.population.covariance, other.population.covariance, atol=rtol * scale)
    np.testing.assert_allclose(one.population.mean, other.population.mean, atol=rtol * np.sqrt(scale))


def second_moments(
    hierarchy: Hierarchy, statistics: list[TrialStatistics], trials: list[made.MadeTrial]
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """ΣE[uuᵀ], ΣE[vvᵀ], ΣκE[rrᵀ] by one dense Gaussian of W, u, v and every residual, hidden ones too."""
    n = hierarchy.observed_residual.shape[0]
    prior = population_prior(statistics, FIXED)
    size = prior.covariance.shape[0]
    subjects = sorted({item.subject for item in trials})
    frames = [(at, f) for at, item in enumerate(trials) for f in range(item.weights.size)]
    blocks = [prior.covariance, *[hierarchy.subject_covariance] * len(subjects)]
    blocks += [hierarchy.trial_covariance] * len(trials)
    blocks += [hierarchy.observed_residual / trials[at].weights[f] for at, f in frames]
    covariance = block_diag(*blocks)
    first_residual = size * (1 + len(subjects) + len(trials))
    rows, observed = [], []
    for number, (at, f) in enumerate(frames):
        item = trials[at]
        parts = np.zeros(1 + len(subjects) + len(trials))
        parts[[0, 1 + subjects.index(item.subject), 1 + len(subjects) + at]] = 1.0
        row = np.zeros((n, covariance.shape[0]))
        row[:, :first_residual] = np.kron(parts, np.kron(item.features[f], np.eye(n)))
        row[:, first_residual + n * number : first_residual + n * number + n] = np.eye(n)
        seen = np.isfinite(item.outputs[f])
        rows.append(row[seen])
        observed.append(item.outputs[f][seen])
    design = np.concatenate(rows)
    gain = np.linalg.solve(design @ covariance @ design.T, design @ covariance).T
    mean = gain @ np.concatenate(observed)
    moment = covariance - gain @ design @ covariance + np.outer(mean, mean)

    def block(first: int, length: int) -> FloatArray:
        return np.asarray(moment[first : first + length, first : first + length])

    subject = sum(block(size * (1 + i), size) for i in range(len(subjects)))
    trial = sum(block(size * (1 + len(subjects) + i), size) for i in range(len(trials)))
    residual = sum(
        trials[at].weights[f] * block(first_residual + n * number, n) for number, (at, f) in enumerate(frames)
    )
    return np.asarray(subject), np.asarray(trial), np.asarray(residual)


def flip_flop(
    moment: FloatArray, units: float, features: FloatArray, outputs: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """One step of the matrix-normal fit with its shrinkage, entry by entry."""
    count, n = features.shape[0], outputs.shape[0]
    blocks = moment.reshape(count, n, count, n)
    precision = np.linalg.inv(outputs)
    new = np.array([[np.trace(blocks[k, :, i] @ precision) for i in range(count)] for k in range(count)])
    new /= n * units
    new[~np.eye(count, dtype=bool)] *= 1.0 - FEATURE_SHRINKAGE
    precision = np.linalg.inv(new)
    spread = np.array([[np.trace(blocks[:, a, :, b] @ precision) for b in range(n)] for a in range(n)])
    spread /= count * units
    spread[~np.eye(n, dtype=bool)] *= 1.0 - OUTPUT_SHRINKAGE
    size = np.trace(spread) / n
    return new * size, spread / size


@pytest.mark.parametrize("hidden", [False, True])
def test_one_step_is_that_of_the_dense_joint_gaussian(hidden: bool) -> None:
    generator = np.random.default_rng(1)
    start = made.random_hierarchy(generator, 2, 6)
    trials = made.draw_trials(generator, start, [2, 1, 2], 4, hidden=hidden)
    # A weight below one is a power of the likelihood, which has no joint Gaussian for hidden outputs.
    trials = trials if hidden else made.with_weights(trials, generator)
    statistics = made.statistics_of(trials)
    got = fit_hierarchy(statistics, FIXED, start, maximum_iterations=1)
    subject, trial, residual = second_moments(start, statistics, trials)
    scale = scale_of(statistics)
    pseudo = PSEUDO_UNITS * np.kron(BETWEEN_SHARE / 2 * np.diag(scale.features), unison_covariance(6))
    features, outputs = flip_flop(subject + pseudo, 3 + 2.0, start.subject_features, start.subject_outputs)
    np.testing.assert_allclose(got.subject_features, features, atol=1e-9)
    np.testing.assert_allclose(got.subject_outputs, outputs, atol=1e-9)
    features, outputs = flip_flop(trial + pseudo, 5 + 2.0, start.trial_features, start.trial_outputs)
    np.testing.assert_allclose(got.trial_features, features, atol=1e-9)
    np.testing.assert_allclose(got.trial_outputs, outputs, atol=1e-9)
    weight = sum(item.weights.sum() for item in trials)
    own = PSEUDO_UNITS * scale.residual * unison_covariance(6, 0.5)
    np.testing.assert_allclose(got.observed_residual, (residual + own) / (weight + 2.0), atol=1e-9)
    expected = without_subject(start, statistics, FIXED, "").population
    np.testing.assert_allclose(got.population.mean, expected.mean, atol=1e-9)
    np.testing.assert_allclose(got.population.covariance, expected.covariance, atol=1e-9)
    assert got.stop_reason == "not converged in 1 iterations"
    assert got.iterations == 1


def test_a_frame_counts_as_much_as_its_weight_says() -> None:
    """Every frame four times at a quarter of its weight is the same as once, hidden markers included."""
    generator = np.random.default_rng(15)
    truth = made.random_hierarchy(generator, 2, 6)
    once = made.draw_trials(generator, truth, [2, 1, 2], 6, hidden=True)
    often = [
        replace(
            item,
            features=np.repeat(item.features, 4, axis=0),
            outputs=np.repeat(item.outputs, 4, axis=0),
            noise=np.repeat(item.noise, 4, axis=0),
            weights=np.repeat(item.weights / 4, 4),
        )
        for item in once
    ]
    one, other = (fit_hierarchy(made.statistics_of(drawn), FIXED) for drawn in (once, often))
    assert_alike(other, one)


def test_every_covariance_is_positive_and_the_fixed_weight_stays_zero() -> None:
    generator = np.random.default_rng(4)
    truth = made.random_hierarchy(generator, 2, 6)
    statistics = made.statistics_of(made.draw_trials(generator, truth, [2, 3, 1], 5, hidden=True))
    fit = fit_hierarchy(statistics, FIXED)
    for name in COVARIANCES:
        matrix = getattr(fit, name)
        np.testing.assert_allclose(matrix, matrix.T, atol=1e-15)
        assert np.linalg.eigvalsh(matrix)[0] > 0, name
    assert np.linalg.eigvalsh(fit.population.covariance)[0] > -1e-15
    assert not fit.population.mean[0].any()
    assert not fit.population.covariance[:6].any()
    assert np.trace(fit.subject_outputs) == pytest.approx(6.0)
    assert np.trace(fit.trial_outputs) == pytest.approx(6.0)


@pytest.mark.parametrize("subjects", [1, 2])
def test_few_subjects_still_give_a_proper_fit(subjects: int) -> None:
    generator = np.random.default_rng(5)
    truth = made.known_truth(correlated=True)
    statistics = made.statistics_of(made.draw_trials(generator, truth, [3] * subjects, 12))
    fit = fit_hierarchy(statistics, FIXED)
    prior = BETWEEN_SHARE / 2 * scale_of(statistics).features
    between = np.diag(fit.subject_features)
    # Two units of prior against one or two of data: neither vanishes nor runs away.
    assert (between > 0.3 * prior).all()
    assert (between < 5.0 * np.maximum(prior, np.diag(truth.subject_features))).all()
    assert np.linalg.eigvalsh(fit.subject_covariance)[0] > 0
    assert np.isfinite(fit.population.covariance).all()


def test_one_frame_of_one_subject_is_no_breakdown() -> None:
    trial = made.MadeTrial("S", "t", np.array([[1.0, 0.4]]), np.ones((1, 3)), np.ones(1), np.zeros((1, 3, 3)))
    fit = fit_hierarchy([trial.statistics()], FIXED)
    assert np.linalg.eigvalsh(fit.residual)[0] > 0
    assert np.isfinite(fit.population.mean).all()


def test_order_of_subjects_and_trials_does_not_matter() -> None:
    generator = np.random.default_rng(6)
    drawn = made.draw_trials(generator, made.known_truth(True), [2, 3, 1, 2], 6, hidden=True)
    one = fit_hierarchy(made.statistics_of(drawn), FIXED)
    order = generator.permutation(len(drawn))
    names = {"S001": "Z", "S002": "C", "S003": "M", "S004": "A"}
    other = [replace(drawn[at], subject=names[drawn[at].subject]) for at in order]
    assert_alike(fit_hierarchy(made.statistics_of(other), FIXED), one)


def test_order_of_markers_does_not_matter() -> None:
    generator = np.random.default_rng(7)
    truth = made.random_hierarchy(generator, 2, 9)
    drawn = made.draw_trials(generator, truth, [2, 3, 1], 6, hidden=True)
    columns = (3 * np.array([2, 0, 1])[:, None] + np.arange(3)).reshape(-1)
    one = fit_hierarchy(made.statistics_of(drawn), FIXED)
    other = fit_hierarchy(
        made.statistics_of([replace(item, outputs=item.outputs[:, columns]) for item in drawn]), FIXED
    )
    both = (9 * np.arange(2)[:, None] + columns).reshape(-1)
    expected = replace(
        one,
        population=replace(
            one.population,
            mean=one.population.mean[:, columns],
            covariance=one.population.covariance[np.ix_(both, both)],
        ),
        subject_outputs=one.subject_outputs[np.ix_(columns, columns)],
        trial_outputs=one.trial_outputs[np.ix_(columns, columns)],
        residual=one.residual[np.ix_(columns, columns)],
        observed_residual=one.observed_residual[np.ix_(columns, columns)],
    )
    assert_alike(other, expected)


@pytest.mark.parametrize("factor", [0.02, 7.0])
def test_scaled_displacement_scales_means_and_covariances(factor: float) -> None:
    """Exact while the mean square displacement is above (1 mm)²; noise of the bone truth scaled alike.

    INSTRUMENT_SD enters only the metric in which noise is taken out; here every direction stays positive.
    """
    generator = np.random.default_rng(8)
    noise = 0.05 * made.random_covariance(generator, 6)
    drawn = made.draw_trials(generator, made.known_truth(True), [2, 3, 2], 8, noise=noise)
    scaled = [replace(t, outputs=factor * t.outputs, noise=factor**2 * t.noise) for t in drawn]
    one = fit_hierarchy(made.statistics_of(drawn), FIXED)
    other = fit_hierarchy(made.statistics_of(scaled), FIXED)
    square = factor**2
    expected = replace(
        one,
        population=replace(
            one.population,
            mean=factor * one.population.mean,
            covariance=square * one.population.covariance,
        ),
        subject_features=square * one.subject_features,
        trial_features=square * one.trial_features,
        residual=square * one.residual,
        observed_residual=square * one.observed_residual,
    )
    assert_alike(other, expected, 1e-8)


def test_displacement_below_a_millimetre_meets_the_floor() -> None:
    """Far below it nothing but the floor of (1 mm)² is left in the covariances."""
    generator = np.random.default_rng(9)
    drawn = made.draw_trials(generator, made.known_truth(True), [2, 2], 8)
    one, other = (
        fit_hierarchy(
            made.statistics_of([replace(item, outputs=size * item.outputs) for item in drawn]), FIXED
        )
        for size in (1e-7, 1e-9)
    )
    for name in COVARIANCES:
        np.testing.assert_allclose(
            getattr(one, name), getattr(other, name), atol=1e-3 * np.abs(getattr(other, name)).max()
        )
    # Two pseudo-frames of (1 mm)²/10 among 34, and what the weights' own spread adds.
    floor = 2 * 0.1 * 1e-6 / 34
    assert (np.diag(other.observed_residual) > floor).all()
    assert (np.diag(other.observed_residual) < 2 * floor).all()


def test_a_warm_start_ends_where_a_cold_one_does() -> None:
    """To ten times the tolerance on the change of one iteration: the rate of convergence is near ½."""
    generator = np.random.default_rng(13)
    statistics = made.statistics_of(made.draw_trials(generator, made.known_truth(True), [2] * 8, 12))
    cold = fit_hierarchy(statistics, FIXED)
    start = fit_hierarchy([item for item in statistics if item.subject != "S003"], FIXED)
    warm = fit_hierarchy(statistics, FIXED, start)
    for name in ("subject_features", "trial_features", "observed_residual"):
        np.testing.assert_allclose(np.diag(getattr(warm, name)), np.diag(getattr(cold, name)), rtol=1e-2)
    assert warm.iterations <= cold.iterations


def test_population_belongs_to_the_covariances_it_is_returned_with() -> None:
    """It is that of the last step but one: to the tolerance of the fit, a small part of its own spread."""
    generator = np.random.default_rng(14)
    statistics = made.statistics_of(made.draw_trials(generator, made.known_truth(True), [2] * 8, 12))
    fit = fit_hierarchy(statistics, FIXED)
    now = without_subject(fit, statistics, FIXED, "").population
    spread = np.sqrt(np.diag(now.covariance)).reshape(2, 6)[1]
    assert (np.abs(now.mean - fit.population.mean)[1] < 0.005 * spread).all()
    np.testing.assert_allclose(
        np.diag(now.covariance)[6:], np.diag(fit.population.covariance)[6:], rtol=0.005
    )

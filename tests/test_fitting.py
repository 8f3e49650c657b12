"""Fitting of the hierarchy: one step against dense algebra, invariances, few subjects, floors."""

from __future__ import annotations

from dataclasses import replace

import made_priors as made
import numpy as np
import pytest
from scipy.linalg import block_diag

from sta_prior.checks import FloatArray
from sta_prior.prior.fitting import FitSettings, fit_hierarchy
from sta_prior.prior.hierarchy import (
    Hierarchy,
    TrialStatistics,
    population_prior,
    scale_of,
    unison_covariance,
    without_subject,
)

RELATIVE = np.ones(2)
SETTINGS = FitSettings()
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
    prior = population_prior(statistics, RELATIVE, hierarchy.subject_outputs)
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


def dense_step(
    hierarchy: Hierarchy, statistics: list[TrialStatistics], trials: list[made.MadeTrial]
) -> Hierarchy:
    """One step of expectation and maximisation with priors and shrinkage, entry by entry."""
    subject, trial, residual = second_moments(hierarchy, statistics, trials)
    count, n = hierarchy.subject_features.shape[0], hierarchy.residual.shape[0]
    scale, pseudo = scale_of(statistics), SETTINGS.pseudo_units
    weak = pseudo * SETTINGS.between_share / 2 * scale.displacement * np.eye(2 * n)
    weak = weak @ np.kron(np.eye(2), unison_covariance(n))
    spread, features, total = np.zeros((n, n)), [], 0.0
    inverse = np.linalg.inv(hierarchy.subject_outputs)
    for moment, units in ((subject, len({item.subject for item in trials})), (trial, len(trials))):
        blocks = (moment + weak).reshape(count, n, count, n)
        new = np.array([[np.trace(blocks[k, :, i] @ inverse) for i in range(count)] for k in range(count)])
        new /= n * (units + pseudo)
        new[~np.eye(count, dtype=bool)] *= 1.0 - SETTINGS.feature_shrinkage
        precision = np.linalg.inv(new)
        spread += [[np.trace(blocks[:, a, :, b] @ precision) for b in range(n)] for a in range(n)]
        total += count * (units + pseudo)
        features.append(new)
    spread /= total
    spread[~np.eye(n, dtype=bool)] *= 1.0 - SETTINGS.output_shrinkage
    size = np.trace(spread) / n
    weight = sum(item.weights.sum() for item in trials)
    own = pseudo * scale.residual * unison_covariance(n, 0.5)
    return replace(
        hierarchy,
        subject_features=size * features[0],
        subject_outputs=spread / size,
        trial_features=size * features[1],
        trial_outputs=spread / size,
        observed_residual=(residual + own) / (weight + pseudo),
    )


def shared_start(generator: np.random.Generator) -> Hierarchy:
    start = made.random_hierarchy(generator, 2, 6)
    return replace(start, trial_outputs=start.subject_outputs)


@pytest.mark.parametrize("kind", ["all seen", "hidden, outputs apart"])
def test_one_step_is_that_of_the_dense_joint_gaussian(kind: str) -> None:
    """Exact with every output seen, and with hidden ones where outputs do not go together."""
    generator = np.random.default_rng(1)
    start = shared_start(generator)
    hidden = kind != "all seen"
    if hidden:
        apart = np.diag([0.4, 0.7, 1.0, 1.0, 1.3, 1.6])
        start = replace(
            start, subject_outputs=apart, trial_outputs=apart, observed_residual=0.3 * apart[::-1, ::-1]
        )
    trials = made.draw_trials(generator, start, [2, 1, 2], 4, hidden=hidden)
    assert any(np.isnan(item.outputs).any() for item in trials) == hidden
    # A weight below one is a power of the likelihood, which has no joint Gaussian for hidden outputs.
    trials = trials if hidden else made.with_weights(trials, generator)
    statistics = made.statistics_of(trials)
    got = fit_hierarchy(statistics, RELATIVE, start=start, settings=FitSettings(maximum_iterations=1))
    expected = dense_step(start, statistics, trials)
    for name in COVARIANCES:
        if name != "residual":
            np.testing.assert_allclose(getattr(got, name), getattr(expected, name), atol=1e-9, err_msg=name)
    population = without_subject(got, statistics, RELATIVE, "").population
    np.testing.assert_array_equal(got.population.mean, population.mean)
    np.testing.assert_array_equal(got.population.covariance, population.covariance)
    assert got.stop_reason == "not converged in 1 iterations"
    assert got.iterations == 1


@pytest.mark.parametrize("kind", ["now and then", "whole trials"])
def test_hidden_outputs_end_near_the_dense_fit(kind: str) -> None:
    """A fifth of the values hidden here and there, or one of two markers in every third trial.

    Where hidden outputs mix all, covariances are taken block-diagonal; that costs up to 5 %
    here, and ever less with more frames a trial.
    """
    generator = np.random.default_rng(2)
    start = shared_start(generator)
    drawn = made.draw_trials(generator, start, [3] * 5, 5, hidden=kind == "now and then")
    if kind == "whole trials":
        without = [np.where(np.arange(6) < 3, np.nan, item.outputs) for item in drawn]
        drawn = [
            replace(item, outputs=lost) if at % 3 == 0 else item
            for at, (item, lost) in enumerate(zip(drawn, without, strict=True))
        ]
    statistics = made.statistics_of(drawn)
    fit = fit_hierarchy(statistics, RELATIVE, settings=FitSettings(tolerance=1e-6))
    dense, change = fit, np.inf
    while change > 1e-4:
        new = dense_step(dense, statistics, drawn)
        change = np.abs(np.diag(new.trial_covariance) / np.diag(dense.trial_covariance) - 1.0).max()
        dense = new
    for name in ("subject_covariance", "trial_covariance", "observed_residual"):
        got, expected = np.diag(getattr(fit, name)), np.diag(getattr(dense, name))
        np.testing.assert_allclose(got, expected, rtol=0.05, err_msg=name)
    assert fit.iterations <= 25


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
    one, other = (fit_hierarchy(made.statistics_of(drawn), RELATIVE) for drawn in (once, often))
    assert_alike(other, one)


def test_every_covariance_is_positive_and_the_fixed_weight_stays_zero() -> None:
    generator = np.random.default_rng(4)
    truth = made.random_hierarchy(generator, 2, 6)
    statistics = made.statistics_of(made.draw_trials(generator, truth, [2, 3, 1], 5, hidden=True))
    fit = fit_hierarchy(statistics, RELATIVE)
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
    fit = fit_hierarchy(statistics, RELATIVE)
    prior = SETTINGS.between_share / 2 * scale_of(statistics).displacement
    between = np.diag(fit.subject_features)
    # Two units of prior against one or two of data: neither vanishes nor runs away.
    assert (between > 0.3 * prior).all()
    assert (between < 5.0 * np.maximum(prior, np.diag(truth.subject_features))).all()
    assert np.linalg.eigvalsh(fit.subject_covariance)[0] > 0
    assert np.isfinite(fit.population.covariance).all()


def test_one_frame_of_one_subject_is_no_breakdown() -> None:
    trial = made.MadeTrial("S", "t", np.array([[1.0, 0.4]]), np.ones((1, 3)), np.ones(1), np.zeros((1, 3, 3)))
    fit = fit_hierarchy([trial.statistics()], RELATIVE)
    assert np.linalg.eigvalsh(fit.residual)[0] > 0
    assert np.isfinite(fit.population.mean).all()


def test_order_of_subjects_and_trials_does_not_matter() -> None:
    generator = np.random.default_rng(6)
    drawn = made.draw_trials(generator, made.known_truth(True), [2, 3, 1, 2], 6, hidden=True)
    one = fit_hierarchy(made.statistics_of(drawn), RELATIVE)
    order = generator.permutation(len(drawn))
    names = {"S001": "Z", "S002": "C", "S003": "M", "S004": "A"}
    other = [replace(drawn[at], subject=names[drawn[at].subject]) for at in order]
    assert_alike(fit_hierarchy(made.statistics_of(other), RELATIVE), one)


def test_order_of_markers_does_not_matter() -> None:
    generator = np.random.default_rng(7)
    truth = made.random_hierarchy(generator, 2, 9)
    drawn = made.draw_trials(generator, truth, [2, 3, 1], 6, hidden=True)
    columns = (3 * np.array([2, 0, 1])[:, None] + np.arange(3)).reshape(-1)
    one = fit_hierarchy(made.statistics_of(drawn), RELATIVE)
    other = fit_hierarchy(
        made.statistics_of([replace(item, outputs=item.outputs[:, columns]) for item in drawn]), RELATIVE
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
    one = fit_hierarchy(made.statistics_of(drawn), RELATIVE)
    other = fit_hierarchy(made.statistics_of(scaled), RELATIVE)
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
            made.statistics_of([replace(item, outputs=size * item.outputs) for item in drawn]), RELATIVE
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
    cold = fit_hierarchy(statistics, RELATIVE)
    start = fit_hierarchy([item for item in statistics if item.subject != "S003"], RELATIVE)
    warm = fit_hierarchy(statistics, RELATIVE, start=start)
    for name in ("subject_features", "trial_features", "observed_residual"):
        np.testing.assert_allclose(np.diag(getattr(warm, name)), np.diag(getattr(cold, name)), rtol=1e-2)
    assert warm.iterations <= cold.iterations


def test_population_belongs_to_the_covariances_it_is_returned_with() -> None:
    generator = np.random.default_rng(14)
    statistics = made.statistics_of(made.draw_trials(generator, made.known_truth(True), [2] * 8, 12))
    fit = fit_hierarchy(statistics, RELATIVE)
    now = without_subject(fit, statistics, RELATIVE, "").population
    np.testing.assert_array_equal(now.mean, fit.population.mean)
    np.testing.assert_array_equal(now.covariance, fit.population.covariance)


def test_acceleration_changes_the_way_and_not_the_end() -> None:
    generator = np.random.default_rng(16)
    statistics = made.statistics_of(made.draw_trials(generator, made.known_truth(True), [2] * 8, 12))
    plain, fast = (
        fit_hierarchy(
            statistics,
            RELATIVE,
            settings=FitSettings(memory=memory, tolerance=1e-11, maximum_iterations=400),
        )
        for memory in (0, 5)
    )
    assert_alike(fast, plain, 1e-8)
    assert fast.stop_reason == plain.stop_reason == "relative change of the covariances below 1e-11"
    assert fast.iterations < 0.6 * plain.iterations

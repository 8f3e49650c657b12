"""The core of learning as a linear mixed model: published values, another program, dense maximisation.

Published values: docs of the R packages lme4 (Bates et al. 2015, J Stat Softw 67(1), doi
10.18637/jss.v067.i01) and nlme, recomputed independently to the digits given here.
"""

from __future__ import annotations

import math
import warnings
from dataclasses import replace

import made_priors as made
import numpy as np
import pandas as pd
import pytest
import statsmodels.formula.api as smf
from published_tables import (
    BOYS,
    DYESTUFF,
    DYESTUFF2,
    GIRLS,
    RAIL,
    growth,
    numbers,
    one_way,
    rows_of,
    sleep_study,
    trials_of,
)
from scipy.optimize import minimize

from sta_prior.checks import FloatArray
from sta_prior.errors import NotDeterminedError
from sta_prior.prior.evidence import marginal_log_likelihood
from sta_prior.prior.fitting import RESTRICTED, FitSettings, fit_hierarchy
from sta_prior.prior.hierarchy import Hierarchy, TrialStatistics, subject_posterior, without_subject

MAXIMUM_LIKELIHOOD = replace(RESTRICTED, point_population=True)


def fitted(
    trials: list[TrialStatistics], settings: FitSettings = RESTRICTED, start: Hierarchy | None = None
) -> Hierarchy:
    relative = np.ones(trials[0].blocks[0].feature_gram.shape[0])
    fit = fit_hierarchy(trials, relative, start=start, settings=settings)
    assert fit.stop_reason.startswith("relative change of the covariances below 1e-09")
    return fit


def criterion(fit: Hierarchy, trials: list[TrialStatistics], point: bool = False) -> float:
    """REML criterion, or the deviance of maximum likelihood."""
    relative = np.ones(fit.subject_features.shape[0])
    return -2.0 * marginal_log_likelihood(fit, trials, relative, math.inf, True, point)


def fixed_effects(fit: Hierarchy) -> tuple[FloatArray, FloatArray]:
    return fit.population.mean.reshape(-1), np.sqrt(np.diag(fit.population.covariance))


def mixed_start(trials: list[TrialStatistics], random: list[int]) -> Hierarchy:
    """A start in which only some features differ between subjects."""
    relative = np.ones(trials[0].blocks[0].feature_gram.shape[0])
    fit = fit_hierarchy(trials, relative, settings=replace(RESTRICTED, maximum_iterations=0))
    mask = np.isin(np.arange(relative.size), random)
    return replace(fit, subject_features=np.where(mask[:, None] & mask, fit.subject_features, 0.0))


def test_sleep_study_by_restricted_likelihood() -> None:
    trials = sleep_study()
    fit = fitted(trials)
    sd = np.sqrt(np.diag(fit.subject_features))
    np.testing.assert_allclose(np.diag(fit.subject_features), [612.090, 35.0717], rtol=2e-6)
    assert fit.subject_features[0, 1] / sd.prod() == pytest.approx(0.06555, abs=5e-6)
    assert fit.observed_residual[0, 0] == pytest.approx(654.941, rel=1e-6)
    assert criterion(fit, trials) == pytest.approx(1743.6283, abs=1e-4)
    effects, errors = fixed_effects(fit)
    np.testing.assert_allclose(effects, [251.40510, 10.46729], rtol=5e-7)
    np.testing.assert_allclose(errors, [6.8246, 1.5458], rtol=1e-5)
    assert fit.iterations < 30


def test_effects_of_single_people_in_the_sleep_study() -> None:
    trials = sleep_study()
    fit = fitted(trials)
    for name, expected in {"308": (2.25856, 9.19897), "309": (-40.39858, -8.61970)}.items():
        others = without_subject(fit, trials, np.ones(2), name, math.inf, True)
        own = subject_posterior(others, [item for item in trials if item.subject == name])
        effect = (own.mean - fit.population.mean).reshape(-1)
        np.testing.assert_allclose(effect, expected, rtol=0, atol=1.5e-5)


def test_sleep_study_by_maximum_likelihood() -> None:
    trials = sleep_study()
    fit = fitted(trials, MAXIMUM_LIKELIHOOD)
    sd = np.sqrt(np.diag(fit.subject_features))
    np.testing.assert_allclose(np.diag(fit.subject_features), [565.515, 32.682], rtol=2e-5)
    assert fit.subject_features[0, 1] / sd.prod() == pytest.approx(0.0813, abs=5e-5)
    assert criterion(fit, trials, point=True) == pytest.approx(1751.9393, abs=1e-4)


def test_dyestuff_by_both_likelihoods() -> None:
    trials = one_way(DYESTUFF, 5)
    fit = fitted(trials)
    assert fit.subject_features[0, 0] == pytest.approx(1764.05, rel=1e-7)
    assert fit.observed_residual[0, 0] == pytest.approx(2451.25, rel=1e-7)
    assert criterion(fit, trials) == pytest.approx(319.6543, abs=5e-5)
    effects, errors = fixed_effects(fit)
    assert effects[0] == pytest.approx(1527.5, rel=1e-12)
    assert errors[0] == pytest.approx(19.3834, abs=5e-5)
    fit = fitted(trials, MAXIMUM_LIKELIHOOD)
    assert fit.subject_features[0, 0] == pytest.approx(1388.333, abs=5e-4)
    assert criterion(fit, trials, point=True) == pytest.approx(327.3271, abs=5e-5)


def test_a_variance_that_ends_at_its_boundary_is_zero_and_said_so() -> None:
    values = numbers(DYESTUFF2).reshape(6, 5)
    within = values.var(axis=1, ddof=1).mean()
    between = 5 * values.mean(axis=1).var(ddof=1)
    np.testing.assert_allclose([between, within], [8.33633, 14.94589], rtol=1e-6)
    # Method of moments, as published: a negative variance.
    assert (between - within) / 5 == pytest.approx(-1.32191, abs=5e-6)
    trials = one_way(DYESTUFF2, 5)
    fit = fitted(trials)
    assert fit.subject_features[0, 0] == 0.0
    assert fit.observed_residual[0, 0] == pytest.approx(13.80631, abs=5e-6)
    assert criterion(fit, trials) == pytest.approx(161.8283, abs=5e-5)
    assert fit.population.mean[0, 0] == pytest.approx(5.6656, abs=5e-5)
    assert fit.stop_reason == (
        "relative change of the covariances below 1e-09; "
        "spread between subjects at its boundary, zero, for feature 0"
    )
    assert fit.iterations < 60
    # Plain expectation–maximisation creeps towards it and says that it has not arrived.
    plain = fit_hierarchy(trials, np.ones(1), settings=replace(RESTRICTED, memory=0))
    assert plain.stop_reason == "not converged in 500 iterations"
    assert plain.subject_features[0, 0] > 0.01


def test_rail_is_the_analysis_of_variance() -> None:
    """SD 24.80547 and 4.020779, log restricted likelihood −61.0885: nlme, from memory; and by hand."""
    values = numbers(RAIL).reshape(6, 3)
    within = values.var(axis=1, ddof=1).mean()
    between = values.mean(axis=1).var(ddof=1) - within / 3
    trials = one_way(RAIL, 3)
    fit = fitted(trials)
    assert fit.subject_features[0, 0] == pytest.approx(between, rel=1e-7)
    assert fit.observed_residual[0, 0] == pytest.approx(within, rel=1e-7)
    assert math.sqrt(fit.subject_features[0, 0]) == pytest.approx(24.80547, abs=5e-6)
    assert math.sqrt(fit.observed_residual[0, 0]) == pytest.approx(4.020779, abs=5e-7)
    assert fit.population.mean[0, 0] == pytest.approx(66.5, rel=1e-12)
    assert -0.5 * criterion(fit, trials) == pytest.approx(-61.0885, abs=5e-5)
    rows = rows_of("nlme_Rail.csv")
    assert sorted(float(row["travel"]) for row in rows) == sorted(values.reshape(-1).tolist())


def test_growth_of_children() -> None:
    trials = growth(GIRLS, "F") + growth(BOYS, "M")
    fit = fitted(trials)
    effects, errors = fixed_effects(fit)
    np.testing.assert_allclose(effects, [16.76111, 0.660185], rtol=1e-6)
    np.testing.assert_allclose(errors, [0.775246, 0.071253], rtol=1e-5)
    sd = np.sqrt(np.diag(fit.subject_features))
    np.testing.assert_allclose(sd, [2.32703, 0.226428], rtol=3e-6)
    assert fit.subject_features[0, 1] / sd.prod() == pytest.approx(-0.60933, abs=6e-6)
    assert math.sqrt(fit.observed_residual[0, 0]) == pytest.approx(1.31004, rel=4e-6)
    assert -0.5 * criterion(fit, trials) == pytest.approx(-221.31834, abs=6e-6)


def test_growth_of_girls_who_differ_by_a_constant_alone() -> None:
    trials = growth(GIRLS, "F")
    fit = fitted(trials, start=mixed_start(trials, [0]))
    np.testing.assert_allclose(fit.subject_features[1], 0.0)
    np.testing.assert_allclose(fixed_effects(fit)[0], [17.372727, 0.479545], rtol=1e-6)
    assert math.sqrt(fit.subject_features[0, 0]) == pytest.approx(2.06847, rel=3e-6)
    assert math.sqrt(fit.observed_residual[0, 0]) == pytest.approx(0.780033, rel=1e-6)
    assert -0.5 * criterion(fit, trials) == pytest.approx(-70.60916, abs=6e-6)


@pytest.mark.parametrize(("group", "other", "sd"), [("sample", "plate", 1.9316), ("plate", "sample", 0.8467)])
def test_penicillin_with_one_factor_random_and_one_fixed(group: str, other: str, sd: float) -> None:
    """SD of plates 0.8467, of samples 1.9316, residual 0.5499: lme4 with both random, from memory.

    The table is balanced, so that either variance is the same with the other factor fixed.
    """
    rows = rows_of("lme4_Penicillin.csv")
    levels = sorted({row[other] for row in rows})
    indicator = np.array([[float(row[other] == level) for level in levels] for row in rows])
    design = np.concatenate([np.ones((len(rows), 1)), indicator[:, 1:] - indicator[:, :1]], axis=1)
    diameter = np.array([float(row["diameter"]) for row in rows])
    trials = trials_of([row[group] for row in rows], design, diameter)
    fit = fitted(trials, start=mixed_start(trials, [0]))
    assert math.sqrt(fit.subject_features[0, 0]) == pytest.approx(sd, abs=6e-5)
    assert math.sqrt(fit.observed_residual[0, 0]) == pytest.approx(0.5499, abs=6e-5)
    # Grand mean of the published fit.
    assert fit.population.mean[0, 0] == pytest.approx(22.9722, abs=5e-5)


def unbalanced(seed: int) -> tuple[pd.DataFrame, list[TrialStatistics]]:
    """Twelve subjects with 1 to 4 trials of 3 to 8 frames, a slope and one output."""
    generator = np.random.default_rng(seed)
    rows = []
    for subject in range(12):
        own = generator.normal(0, 2.0)
        for trial in range(int(generator.integers(1, 5))):
            level = own + generator.normal(0, 0.8)
            for _ in range(int(generator.integers(3, 9))):
                x = generator.normal()
                y = 3.0 + level + (0.5 + 0.4 * own) * x + generator.normal(0, 0.6)
                rows.append((f"s{subject:02d}", f"t{trial}", x, y))
    table = pd.DataFrame(rows, columns=["subject", "trial", "x", "y"])
    design = np.stack([np.ones(len(rows)), table["x"].to_numpy()], axis=1)
    trials = trials_of(table["subject"].tolist(), design, table["y"].to_numpy(), table["trial"].tolist())
    return table, trials


def other_program(table: pd.DataFrame, **model: object) -> object:
    """Statsmodels' MixedLM by restricted likelihood, to a tight tolerance."""
    with warnings.catch_warnings():
        # Its own optimisers warn about each other on the way.
        warnings.simplefilter("ignore")
        return smf.mixedlm("y ~ x", table, groups="subject", **model).fit(
            reml=True, method=["bfgs", "powell"], gtol=1e-10, maxiter=2000
        )


@pytest.mark.parametrize("seed", [1, 2])
def test_agreement_with_another_program_on_intercept_and_slope(seed: int) -> None:
    table, trials = unbalanced(seed)
    whole = trials_of(
        table["subject"].tolist(),
        np.stack([np.ones(len(table)), table["x"].to_numpy()], axis=1),
        table["y"].to_numpy(),
    )
    assert len(whole) == 12 < len(trials)
    theirs, ours = other_program(table, re_formula="~x"), fitted(whole)
    np.testing.assert_allclose(ours.subject_features, theirs.cov_re.to_numpy(), rtol=1e-4)
    assert ours.observed_residual[0, 0] == pytest.approx(theirs.scale, rel=1e-4)
    effects, errors = fixed_effects(ours)
    np.testing.assert_allclose(effects, theirs.fe_params, rtol=1e-4)
    # Their standard errors come from the observed information of all parameters; ours are those of
    # generalised least squares, which their variances give by dense algebra.
    gram = np.zeros((2, 2))
    for _, own in table.groupby("subject"):
        design = np.stack([np.ones(len(own)), own["x"].to_numpy()], axis=1)
        variance = design @ theirs.cov_re.to_numpy() @ design.T + theirs.scale * np.eye(len(own))
        gram += design.T @ np.linalg.solve(variance, design)
    np.testing.assert_allclose(errors, np.sqrt(np.diag(np.linalg.inv(gram))), rtol=1e-4)
    np.testing.assert_allclose(errors, theirs.bse_fe, rtol=1e-2)
    assert -0.5 * criterion(ours, whole) == pytest.approx(theirs.llf, abs=1e-5)
    for name in ("s03", "s11"):
        others = without_subject(ours, whole, np.ones(2), name, math.inf, True)
        own = subject_posterior(others, [item for item in whole if item.subject == name])
        effect = (own.mean - ours.population.mean).reshape(-1)
        np.testing.assert_allclose(effect, theirs.random_effects[name].to_numpy(), rtol=1e-4, atol=1e-5)


@pytest.mark.parametrize("seed", [3, 4])
def test_agreement_with_another_program_on_trials_within_subjects(seed: int) -> None:
    table, trials = unbalanced(seed)
    start = mixed_start(trials, [0])
    start = replace(start, trial_features=start.subject_features)
    ours = fitted(trials, replace(RESTRICTED, trial_level=True), start)
    theirs = other_program(table, re_formula="1", vc_formula={"trial": "0 + C(trial)"})
    assert ours.subject_features[0, 0] == pytest.approx(float(theirs.cov_re.iloc[0, 0]), rel=1e-4)
    assert ours.trial_features[0, 0] == pytest.approx(float(theirs.vcomp[0]), rel=1e-4)
    assert ours.observed_residual[0, 0] == pytest.approx(theirs.scale, rel=1e-4)
    np.testing.assert_allclose(fixed_effects(ours)[0], theirs.fe_params, rtol=1e-4)
    assert -0.5 * criterion(ours, trials) == pytest.approx(theirs.llf, abs=1e-5)


def lower(values: FloatArray) -> FloatArray:
    return np.array([[values[0], 0.0], [values[1], values[2]]])


@pytest.mark.parametrize("point", [False, True])
def test_two_outputs_against_direct_maximisation(point: bool) -> None:
    """Covariances A ⊗ M and Σ by a search over their factors in one dense Gaussian of all frames."""
    generator = np.random.default_rng(11)
    truth = made.known_truth(correlated=True)
    root = np.linalg.cholesky(np.array([[1.0, 0.6], [0.6, 2.0]]))
    truth = replace(
        truth,
        population=replace(truth.population, mean=np.zeros((2, 2))),
        **dict.fromkeys(("subject_outputs", "trial_outputs"), root @ root.T),
        trial_features=1e-12 * truth.trial_features,
        residual=np.array([[0.3, -0.1], [-0.1, 0.2]]),
    )
    drawn = made.draw_trials(generator, truth, [1] * 14, 5, mean=np.array([[1.0, -1.0], [0.5, 2.0]]))
    designs = [np.concatenate([np.kron(z, np.eye(2)) for z in item.features]) for item in drawn]
    whole, observed = np.concatenate(designs), np.concatenate([item.outputs.reshape(-1) for item in drawn])

    def covariances(values: FloatArray) -> tuple[FloatArray, FloatArray]:
        features, outputs, residual = (lower(part) for part in (values[:3], [1.0, *values[3:5]], values[5:]))
        return np.kron(features @ features.T, outputs @ outputs.T), residual @ residual.T

    def minus_twice(values: FloatArray) -> float:
        between, residual = covariances(values)
        total, gram, shift = 0.0, np.zeros((4, 4)), np.zeros(4)
        for item, design in zip(drawn, designs, strict=True):
            variance = design @ between @ design.T + np.kron(np.eye(5), residual)
            data = item.outputs.reshape(-1)
            solved = np.linalg.solve(variance, np.column_stack([design, data]))
            total += np.linalg.slogdet(variance)[1] + data @ solved[:, 4]
            gram, shift = gram + design.T @ solved[:, :4], shift + design.T @ solved[:, 4]
        total += observed.size * math.log(2 * math.pi) - shift @ np.linalg.solve(gram, shift)
        return float(total if point else total + np.linalg.slogdet(gram)[1] - 4 * math.log(2 * math.pi))

    found = minimize(
        minus_twice, [1.0, 0.0, 0.7, 0.5, 1.0, 0.5, 0.0, 0.5], method="BFGS", options={"gtol": 1e-5}
    )
    assert whole.shape == (140, 4)
    between, residual = covariances(found.x)
    trials = made.statistics_of(drawn)
    fit = fitted(trials, MAXIMUM_LIKELIHOOD if point else RESTRICTED)
    scale = np.abs(between).max()
    np.testing.assert_allclose(fit.subject_covariance, between, atol=1e-4 * scale)
    np.testing.assert_allclose(fit.observed_residual, residual, atol=1e-4 * np.abs(residual).max())
    assert criterion(fit, trials, point) == pytest.approx(found.fun, abs=1e-6)
    assert criterion(fit, trials, point) <= found.fun + 1e-9


@pytest.mark.parametrize("point", [False, True])
@pytest.mark.parametrize("seed", range(6))
def test_likelihood_never_falls_in_a_step_of_expectation_and_maximisation(seed: int, point: bool) -> None:
    """Without prior or shrinkage each step is one of expectation–conditional-maximisation."""
    generator = np.random.default_rng(seed)
    outputs, features = int(generator.integers(1, 5)), int(generator.integers(1, 4))
    truth = made.random_hierarchy(generator, features, outputs)
    counts = generator.integers(1, 4, 8).tolist()
    drawn = made.with_weights(made.draw_trials(generator, truth, counts, 6), generator)
    trials, relative = made.statistics_of(drawn), np.ones(features)
    step = replace(
        MAXIMUM_LIKELIHOOD if point else RESTRICTED, trial_level=True, memory=0, maximum_iterations=1
    )
    fit, history = None, []
    for _ in range(25):
        fit = fit_hierarchy(trials, relative, start=fit, settings=step)
        history.append(marginal_log_likelihood(fit, trials, relative, math.inf, True, point))
    assert np.diff(history).min() > -1e-9 * np.abs(history).max()
    assert history[-1] - history[0] > 1.0


@pytest.mark.parametrize("hidden", [False, True])
def test_likelihood_is_that_of_one_dense_gaussian(hidden: bool) -> None:
    generator = np.random.default_rng(21)
    hierarchy = made.random_hierarchy(generator, 2, 6)
    drawn = made.draw_trials(generator, hierarchy, [2, 1, 3], 4, hidden=hidden)
    trials, relative = made.statistics_of(drawn), np.array([1.0, 0.4])
    prior = np.kron(np.diag([0.0, 0.4 * 4.0]), hierarchy.subject_outputs)
    seen = [np.isfinite(item.outputs.reshape(-1)) for item in drawn]
    assert all(part.all() for part in seen) != hidden
    designs = [
        np.concatenate([np.kron(z, np.eye(6)) for z in item.features])[own]
        for item, own in zip(drawn, seen, strict=True)
    ]
    data = np.concatenate([item.outputs.reshape(-1)[own] for item, own in zip(drawn, seen, strict=True)])
    square = sum(float(np.nansum(item.outputs**2)) for item in drawn) / data.size
    rows, first = [], 0
    for item, design, own in zip(drawn, designs, seen, strict=True):
        row = []
        for other, across in zip(drawn, designs, strict=True):
            spread = square * prior + (item.subject == other.subject) * hierarchy.subject_covariance
            spread = spread + (item is other) * hierarchy.trial_covariance
            row.append(design @ spread @ across.T)
        noise = np.kron(np.eye(4), hierarchy.observed_residual)[np.ix_(own, own)]
        row[len(rows)] = row[len(rows)] + noise
        rows.append(np.concatenate(row, axis=1))
        first += own.sum()
    covariance = np.concatenate(rows)
    expected = -0.5 * (
        data @ np.linalg.solve(covariance, data)
        + np.linalg.slogdet(covariance)[1]
        + first * math.log(2 * math.pi)
    )
    assert marginal_log_likelihood(hierarchy, trials, relative) == pytest.approx(expected, rel=1e-10)


def test_population_weights_that_nothing_determines_are_refused() -> None:
    """A second feature that is twice the first."""
    frames = made.MadeTrial(
        "S",
        "t",
        np.array([[1.0, 2.0], [1.0, 2.0]]),
        np.array([[1.0], [2.0]]),
        np.ones(2),
        np.zeros((2, 1, 1)),
    )
    trials = [frames.statistics(), replace(frames.statistics(), subject="T")]
    for ask in (
        lambda: fit_hierarchy(trials, np.ones(2), settings=RESTRICTED),
        lambda: criterion(made.random_hierarchy(np.random.default_rng(1), 2, 1), trials),
    ):
        with pytest.raises(NotDeterminedError) as caught:
            ask()
        assert str(caught.value) == (
            "population weights: not determined by the trials and without a prior. "
            "Give population_width a finite value or leave out features."
        )

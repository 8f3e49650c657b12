"""Message passing between population, subject and trial, against one dense joint Gaussian."""

from __future__ import annotations

import csv
from dataclasses import replace
from pathlib import Path

import made_priors as made
import numpy as np
import pytest
from scipy.linalg import block_diag, toeplitz

from sta_prior.checks import FloatArray
from sta_prior.prior.hierarchy import (
    Hierarchy,
    Message,
    Weights,
    condition_on,
    frame_weights,
    make_block,
    new_subject,
    population_prior,
    population_width,
    scale_of,
    subject_posterior,
    through,
    total_message,
    trial_message,
    trial_posterior,
    unison_covariance,
    without_subject,
)

FEATURES = 2
RELATIVE = np.array([1.0, 0.6])
NOBODY = ""


class Dense:
    """Joint Gaussian of (W, u of every subject, v of every trial) given all frames, in moment form."""

    def __init__(self, hierarchy: Hierarchy, prior: Weights, trials: list[made.MadeTrial]) -> None:
        self.size = prior.covariance.shape[0]
        self.subjects = sorted({item.subject for item in trials})
        self.trials = [(item.subject, item.trial) for item in trials]
        blocks = [prior.covariance]
        blocks += [hierarchy.subject_covariance] * len(self.subjects)
        blocks += [hierarchy.trial_covariance] * len(trials)
        covariance = block_diag(*blocks)
        mean = np.zeros(covariance.shape[0])
        mean[: self.size] = prior.mean.reshape(-1)
        rows, noise, observed = [], [], []
        for item in trials:
            pick = self.pick(item.subject, item.trial)
            for z, d, weight in zip(item.features, item.outputs, item.weights, strict=True):
                seen = np.isfinite(d)
                rows.append((np.kron(z, np.eye(d.size)) @ pick)[seen])
                noise.append(hierarchy.observed_residual[np.ix_(seen, seen)] / weight)
                observed.append(d[seen])
        design = np.concatenate(rows)
        innovation = design @ covariance @ design.T + block_diag(*noise)
        gain = np.linalg.solve(innovation, design @ covariance).T
        self.mean = mean + gain @ (np.concatenate(observed) - design @ mean)
        self.covariance = covariance - gain @ design @ covariance

    def pick(self, subject: str | None = None, trial: str | None = None) -> FloatArray:
        """Matrix that takes W, W + u or W + u + v out of all unknowns."""
        parts = np.zeros(1 + len(self.subjects) + len(self.trials))
        parts[0] = 1.0
        if subject is not None:
            parts[1 + self.subjects.index(subject)] = 1.0
        if trial is not None:
            parts[1 + len(self.subjects) + self.trials.index((str(subject), trial))] = 1.0
        return np.asarray(np.kron(parts, np.eye(self.size)), dtype=np.float64)

    def weights(self, subject: str | None = None, trial: str | None = None) -> Weights:
        pick = self.pick(subject, trial)
        mean = (pick @ self.mean).reshape(FEATURES, -1)
        return Weights(mean, pick @ self.covariance @ pick.T)


def assert_same(got: Weights, expected: Weights, tolerance: float = 1e-9) -> None:
    np.testing.assert_allclose(got.mean, expected.mean, rtol=0, atol=tolerance)
    np.testing.assert_allclose(got.covariance, expected.covariance, rtol=0, atol=tolerance)


def problem(seed: int, hidden: bool = True) -> tuple[Hierarchy, list[made.MadeTrial]]:
    """Three subjects with 2, 1 and 3 trials of five frames each, two markers."""
    generator = np.random.default_rng(seed)
    truth = made.random_hierarchy(generator, FEATURES, 6)
    trials = made.draw_trials(generator, truth, [2, 1, 3], 5, hidden=hidden)
    return truth, made.with_weights(trials, generator)


@pytest.mark.parametrize("hidden", [False, True])
def test_population_is_that_of_the_dense_joint_gaussian(hidden: bool) -> None:
    hierarchy, trials = problem(1, hidden)
    assert any(np.isnan(item.outputs).any() for item in trials) == hidden
    statistics = made.statistics_of(trials)
    dense = Dense(hierarchy, population_prior(statistics, RELATIVE, hierarchy.subject_outputs), trials)
    assert_same(without_subject(hierarchy, statistics, RELATIVE, NOBODY).population, dense.weights())


def test_population_without_a_subject_is_that_of_the_others() -> None:
    hierarchy, trials = problem(2)
    statistics = made.statistics_of(trials)
    others = [item for item in trials if item.subject != "S003"]
    dense = Dense(hierarchy, population_prior(statistics, RELATIVE, hierarchy.subject_outputs), others)
    got = without_subject(hierarchy, statistics, RELATIVE, "S003")
    assert_same(got.population, dense.weights())
    assert replace(got, population=hierarchy.population) == hierarchy


def test_subject_posterior_is_that_of_the_dense_joint_gaussian() -> None:
    hierarchy, trials = problem(3)
    statistics = made.statistics_of(trials)
    dense = Dense(hierarchy, population_prior(statistics, RELATIVE, hierarchy.subject_outputs), trials)
    for name in dense.subjects:
        others = without_subject(hierarchy, statistics, RELATIVE, name)
        own = [item for item in statistics if item.subject == name]
        assert_same(subject_posterior(others, own), dense.weights(name))


def test_trial_posterior_is_that_of_the_dense_joint_gaussian() -> None:
    hierarchy, trials = problem(4)
    statistics = made.statistics_of(trials)
    dense = Dense(hierarchy, population_prior(statistics, RELATIVE, hierarchy.subject_outputs), trials)
    for name, trial in dense.trials:
        others = without_subject(hierarchy, statistics, RELATIVE, name)
        own = [item for item in statistics if item.subject == name]
        assert_same(trial_posterior(others, own, trial), dense.weights(name, trial))


def test_a_trial_without_frames_of_its_own_gets_the_spread_between_trials() -> None:
    hierarchy, trials = problem(5)
    statistics = made.statistics_of(trials)
    dense = Dense(hierarchy, population_prior(statistics, RELATIVE, hierarchy.subject_outputs), trials)
    others = without_subject(hierarchy, statistics, RELATIVE, "S001")
    own = [item for item in statistics if item.subject == "S001"]
    subject = dense.weights("S001")
    expected = Weights(subject.mean, subject.covariance + hierarchy.trial_covariance)
    assert_same(trial_posterior(others, own, "another"), expected)


def test_a_new_subject_gets_all_three_spreads() -> None:
    hierarchy, trials = problem(6)
    known = without_subject(hierarchy, made.statistics_of(trials), RELATIVE, NOBODY)
    spread = known.population.covariance + known.subject_covariance + known.trial_covariance
    assert_same(new_subject(known), Weights(known.population.mean, spread), 0.0)
    assert_same(new_subject(known, 1.7), Weights(known.population.mean, 1.7 * spread), 1e-15)
    assert_same(trial_posterior(known, [], "any"), new_subject(known), 1e-15)


def test_order_of_subjects_trials_and_frames_does_not_matter() -> None:
    hierarchy, trials = problem(7)
    generator = np.random.default_rng(70)
    shuffled = []
    for index in generator.permutation(len(trials)):
        item = trials[index]
        order = generator.permutation(item.weights.size)
        shuffled.append(
            replace(
                item,
                features=item.features[order],
                outputs=item.outputs[order],
                weights=item.weights[order],
                noise=item.noise[order],
            )
        )
    one = without_subject(hierarchy, made.statistics_of(trials), RELATIVE, NOBODY).population
    other = without_subject(hierarchy, made.statistics_of(shuffled), RELATIVE, NOBODY).population
    assert_same(one, other, 1e-12)


def test_frames_may_be_split_into_blocks_in_any_way() -> None:
    hierarchy, trials = problem(8, hidden=False)
    whole = trials[0].statistics()
    halves = [
        replace(
            trials[0],
            features=trials[0].features[part],
            outputs=trials[0].outputs[part],
            weights=trials[0].weights[part],
            noise=trials[0].noise[part],
        ).statistics()
        for part in (slice(0, 2), slice(2, None))
    ]
    split = replace(whole, blocks=tuple(block for half in halves for block in half.blocks))
    one, two = (trial_message(item, hierarchy.observed_residual) for item in (whole, split))
    np.testing.assert_allclose(one.precision, two.precision, rtol=1e-12)
    np.testing.assert_allclose(one.shift, two.shift, rtol=1e-11)


def test_subjects_may_be_learned_one_after_the_other() -> None:
    hierarchy, trials = problem(9)
    statistics = made.statistics_of(trials)
    belief = population_prior(statistics, RELATIVE, hierarchy.subject_outputs)
    for name in ("S002", "S003", "S001"):
        own = [
            through(trial_message(item, hierarchy.observed_residual), hierarchy.trial_covariance)
            for item in statistics
            if item.subject == name
        ]
        size = belief.covariance.shape[0]
        belief = condition_on(belief, through(total_message(own, size), hierarchy.subject_covariance))
    assert_same(belief, without_subject(hierarchy, statistics, RELATIVE, NOBODY).population)


def test_covariances_stay_positive_however_strong_the_data() -> None:
    hierarchy, trials = problem(10)
    strong = made.statistics_of([replace(item, weights=1e9 * item.weights) for item in trials])
    known = without_subject(hierarchy, strong, RELATIVE, "S001")
    own = [item for item in strong if item.subject == "S001"]
    for belief in (known.population, subject_posterior(known, own), trial_posterior(known, own, "t0")):
        values = np.linalg.eigvalsh(belief.covariance)
        assert values[0] >= -1e-14
        np.testing.assert_array_equal(belief.covariance, belief.covariance.T)


def test_random_effects_are_those_of_laird_and_ware() -> None:
    """b̂ = D Zᵀ V⁻¹ (y − X β̂), Laird & Ware (1982), Biometrics 38, 963–974; here X = Z, β with a prior."""
    generator = np.random.default_rng(11)
    hierarchy = made.random_hierarchy(generator, FEATURES, 3)
    trials = made.draw_trials(generator, hierarchy, [1, 1, 1], 4)
    statistics = made.statistics_of(trials)
    spread = hierarchy.subject_covariance + hierarchy.trial_covariance
    prior = population_prior(statistics, RELATIVE, hierarchy.subject_outputs)
    designs = [np.concatenate([np.kron(z, np.eye(3)) for z in item.features]) for item in trials]
    marginal = [
        design @ spread @ design.T + np.kron(np.eye(4), hierarchy.observed_residual) for design in designs
    ]
    whole, observed = np.concatenate(designs), np.concatenate([item.outputs.reshape(-1) for item in trials])
    total = block_diag(*marginal) + whole @ prior.covariance @ whole.T
    fixed = prior.covariance @ whole.T @ np.linalg.solve(total, observed)
    for item, design, variance in zip(trials, designs, marginal, strict=True):
        misfit = item.outputs.reshape(-1) - design @ fixed
        effect = hierarchy.subject_covariance @ design.T @ np.linalg.solve(variance, misfit)
        others = without_subject(hierarchy, statistics, RELATIVE, item.subject)
        got = subject_posterior(others, [item.statistics()]).mean.reshape(-1)
        np.testing.assert_allclose(got, fixed + effect, atol=1e-11)


def test_sleep_study_gives_the_published_effects() -> None:
    """Belenky et al. (2003) as table `sleepstudy`; coefficients, standard errors and effects published with
    the R package lme4 (Bates et al. 2015, J Stat Softw 67(1), doi 10.18637/jss.v067.i01).

    Tolerance: the covariances are published with three to six digits.
    """
    path = Path(__file__).parents[2] / "shared" / "data" / "statistics" / "lme4_sleepstudy.csv"
    if not path.is_file():
        pytest.skip("shared/data/statistics/lme4_sleepstudy.csv is not there")
    with path.open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    trials = []
    for name in sorted({row["Subject"] for row in rows}):
        own = [row for row in rows if row["Subject"] == name]
        days = np.array([float(row["Days"]) for row in own])
        reaction = np.array([[float(row["Reaction"])] for row in own])
        features = np.stack([np.ones_like(days), days], axis=1)
        none = np.zeros((days.size, 1, 1))
        trials.append(made.MadeTrial(name, "t", features, reaction, np.ones(days.size), none).statistics())
    covariance = 0.0656 * np.sqrt(612.090 * 35.0717)
    residual = np.array([[654.941]])
    between = np.array([[612.090, covariance], [covariance, 35.0717]])
    messages = {item.subject: through(trial_message(item, residual), between) for item in trials}
    flat = Weights(np.zeros((2, 1)), 1e9 * np.eye(2))
    population = condition_on(flat, total_message(list(messages.values()), 2))
    np.testing.assert_allclose(population.mean[:, 0], [251.4051, 10.46729], rtol=2e-6)
    np.testing.assert_allclose(np.sqrt(np.diag(population.covariance)), [6.8246, 1.5458], rtol=2e-4)
    effects = {"308": (2.25856, 9.19897), "309": (-40.39858, -8.61970)}
    for item in trials:
        if item.subject in effects:
            others = condition_on(
                flat, total_message([m for name, m in messages.items() if name != item.subject], 2)
            )
            reach = Weights(others.mean, others.covariance + between)
            posterior = condition_on(reach, trial_message(item, residual))
            np.testing.assert_allclose(
                (posterior.mean - population.mean)[:, 0], np.array(effects[item.subject]), rtol=0, atol=2e-3
            )


@pytest.mark.parametrize("correlation", [0.0, 0.37, 0.9, 0.995])
@pytest.mark.parametrize("frames", [1, 2, 7, 500])
def test_a_window_counts_as_its_exact_number_for_a_constant(correlation: float, frames: int) -> None:
    """Generalised least squares of a mean: 1ᵀR⁻¹1 with R of an AR(1), by dense algebra; exact for any n."""
    window, rho = np.zeros(frames), np.full(frames, correlation)
    exact = np.linalg.solve(toeplitz(correlation ** np.arange(frames)), np.ones(frames)).sum()
    weights = frame_weights(window, rho)
    np.testing.assert_array_equal(weights, weights[0])
    assert weights.sum() == pytest.approx(exact, rel=1e-9)


def test_hundred_frames_at_090_count_as_few() -> None:
    """n(1 − ρ)/(1 + ρ) = 5.3 effective frames (Bar-Shalom et al. 2001, from memory), and 0.9 for the ends."""
    weights = frame_weights(np.zeros(100), np.full(100, 0.9))
    assert weights.sum() == pytest.approx(100 * 0.1 / 1.9 + 2 * 0.9 / 1.9, rel=1e-12)


def test_windows_are_weighted_apart() -> None:
    window = np.array([0.0, 0, 0, 1, 1, 2])
    rho = np.full(6, 0.5)
    weights = frame_weights(window, rho)
    expected = [(1 + 2 / 3) / 3] * 3 + [(1 + 1 / 3) / 2] * 2 + [1.0]
    np.testing.assert_allclose(weights, expected, rtol=1e-15)


def test_a_block_sums_its_frames_and_ignores_what_is_hidden() -> None:
    generator = np.random.default_rng(12)
    features, outputs = generator.standard_normal((4, 2)), generator.standard_normal((4, 3))
    noise = np.stack([made.random_covariance(generator, 3) for _ in range(4)])
    weights, seen = np.array([0.5, 1.0, 0.25, 0.75]), np.array([True, True, False])
    outputs[:, 2] = np.nan
    block = make_block(features, outputs, noise, weights, seen)
    clean = np.nan_to_num(outputs)
    gram = sum(w * np.outer(z, z) for w, z in zip(weights, features, strict=True))
    np.testing.assert_allclose(block.feature_gram, gram, rtol=1e-13)
    cross = sum(w * np.outer(z, d) for w, z, d in zip(weights, features, clean, strict=True))
    np.testing.assert_allclose(block.cross, cross, rtol=1e-13)
    output = sum(w * np.outer(d, d) for w, d in zip(weights, clean, strict=True))
    np.testing.assert_allclose(block.output_gram, output, rtol=1e-13)
    total = np.tensordot(weights, noise, 1)
    total[2], total[:, 2] = 0.0, 0.0
    np.testing.assert_allclose(block.noise_gram, total, rtol=1e-13)
    assert (block.weight, block.frames) == (2.5, 4)


def test_messages_at_their_limits() -> None:
    generator = np.random.default_rng(13)
    message = Message(made.random_covariance(generator, 4), generator.standard_normal(4))
    same = through(message, np.zeros((4, 4)))
    np.testing.assert_allclose(same.precision, message.precision, rtol=1e-14)
    np.testing.assert_allclose(same.shift, message.shift, rtol=1e-14)
    lost = through(message, 1e12 * np.eye(4))
    assert np.abs(lost.precision).max() < 2e-12
    belief = Weights(generator.standard_normal((2, 2)), made.random_covariance(generator, 4))
    nothing = total_message([], 4)
    assert_same(condition_on(belief, nothing), belief, 1e-15)
    certain = Weights(belief.mean, np.zeros((4, 4)))
    assert_same(condition_on(certain, message), certain, 0.0)


def test_weak_prior_is_sized_by_the_data() -> None:
    """Outputs of ±2 m: mean square 4, and four times that for a weight of relative variance 1/9."""
    features = np.array([[1.0, 3.0], [1.0, -3.0]])
    outputs = np.array([[2.0, 2.0, -2.0], [-2.0, 2.0, np.nan]])
    trial = made.MadeTrial("S", "t", features, outputs, np.array([1.0, 1.0]), np.zeros((2, 3, 3)))
    statistics, relative = [trial.statistics()], np.array([1.0, 1.0 / 9.0])
    scale = scale_of(statistics)
    assert scale.displacement == pytest.approx(4.0, rel=1e-14)
    assert scale.residual == pytest.approx(0.4)
    prior = population_prior(statistics, relative)
    assert not prior.mean.any()
    np.testing.assert_array_equal(prior.covariance[:3], np.zeros((3, 6)))
    np.testing.assert_allclose(prior.covariance[3:, 3:], 16.0 / 9.0 * np.eye(3), rtol=1e-14)
    np.testing.assert_allclose(population_width(statistics, relative), [0.0, 16.0 / 9.0], rtol=1e-14)
    np.testing.assert_allclose(population_width(statistics, relative, 1.0, True), [4.0, 4.0 / 9.0])
    np.testing.assert_array_equal(population_width(statistics, relative, np.inf), [0.0, np.inf])
    np.testing.assert_array_equal(relative, [1.0, 1.0 / 9.0])
    free = population_prior(statistics, relative, 2.0 * np.eye(3), free_constant=True)
    np.testing.assert_allclose(np.diag(free.covariance), [32.0] * 3 + [32.0 / 9.0] * 3, rtol=1e-14)


def test_weak_prior_stays_proper_without_artifact() -> None:
    trial = made.MadeTrial(
        "S", "t", np.array([[1.0, 0.0]]), np.zeros((1, 3)), np.ones(1), np.zeros((1, 3, 3))
    )
    scale = scale_of([trial.statistics()])
    assert (scale.displacement, scale.residual) == (1e-6, 1e-7)


@pytest.mark.parametrize("free_constant", [False, True])
@pytest.mark.parametrize("width", [2.0, np.inf])
def test_split_outputs_give_the_population_of_the_dense_messages(width: float, free_constant: bool) -> None:
    """Where nothing is hidden and both levels share M, outputs are split; else messages are dense."""
    hierarchy, trials = problem(14, hidden=False)
    alike = replace(hierarchy, trial_outputs=hierarchy.subject_outputs)
    # Not to be told from the same matrix by its numbers, but by its bits.
    nearly = replace(hierarchy, trial_outputs=hierarchy.subject_outputs * (1.0 + 1e-15))
    assert not np.array_equal(nearly.trial_outputs, alike.trial_outputs)
    statistics = made.statistics_of(trials)
    for left_out in (NOBODY, "S001"):
        fast, slow = (
            without_subject(item, statistics, RELATIVE, left_out, width, free_constant).population
            for item in (alike, nearly)
        )
        assert_same(fast, slow, 1e-9 * np.abs(slow.covariance).max())


def test_flat_population_is_generalised_least_squares() -> None:
    hierarchy, trials = problem(15)
    statistics = made.statistics_of(trials)
    got = without_subject(hierarchy, statistics, RELATIVE, NOBODY, np.inf, True).population
    rows, noise, observed = [], [], []
    for item in trials:
        design = np.concatenate([np.kron(z, np.eye(6)) for z in item.features])
        seen = np.isfinite(item.outputs.reshape(-1))
        rows.append(design[seen])
        own = np.kron(np.diag(1.0 / item.weights), hierarchy.observed_residual)
        noise.append(own[np.ix_(seen, seen)] + rows[-1] @ hierarchy.trial_covariance @ rows[-1].T)
        observed.append(item.outputs.reshape(-1)[seen])
    whole, data = np.concatenate(rows), np.concatenate(observed)
    total = block_diag(*noise)
    for name in sorted({item.subject for item in trials}):
        of_subject = [design * (item.subject == name) for item, design in zip(trials, rows, strict=True)]
        stacked = np.concatenate(of_subject)
        total = total + stacked @ hierarchy.subject_covariance @ stacked.T
    covariance = np.linalg.inv(whole.T @ np.linalg.solve(total, whole))
    mean = covariance @ whole.T @ np.linalg.solve(total, data)
    assert_same(got, Weights(mean.reshape(2, 6), covariance), 1e-8 * np.abs(covariance).max())


def test_unison_covariance_has_the_stated_shares() -> None:
    covariance = unison_covariance(12)
    np.testing.assert_allclose(np.diag(covariance), 1.0)
    assert covariance[0, 3] == pytest.approx(0.6)
    assert covariance[0, 1] == 0.0
    np.testing.assert_array_equal(unison_covariance(2), np.eye(2))
    # Eigenvalues by hand: 1 − s + s·m along the common motion of m markers, 1 − s elsewhere.
    np.testing.assert_allclose(np.linalg.eigvalsh(covariance), [0.4] * 9 + [2.8] * 3, atol=1e-14)

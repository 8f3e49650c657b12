"""Left-out subjects: what is predicted, how it is scored, how the spread is widened."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.signal import lfilter
from scipy.stats import multivariate_normal

from sta_prior.checks import FloatArray
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.family import Posture, SegmentData
from sta_prior.prior.feature_model import LINEAR, REDUCED_RANK, REFIT, FeatureFamily, FeatureModel
from sta_prior.prior.fitting import FitSettings, fit_hierarchy
from sta_prior.prior.hierarchy import (
    Hierarchy,
    TrialStatistics,
    new_subject,
    trial_posterior,
    unison_covariance,
    without_subject,
)
from sta_prior.prior.linear import linear_basis
from sta_prior.prior.statistics import SegmentFrames, summarise
from sta_prior.prior.validate import (
    LARGEST_INFLATION,
    LeftOut,
    binomial_bound,
    calibrate_inflation,
    coverage,
    few_subjects_factor,
    learn_rivals,
    leave_one_out,
    predict_others,
    summarise_validation,
)

OUTPUTS = 6


def draw_population(generator: np.random.Generator, subjects: int, trials: int = 2) -> list[SegmentFrames]:
    """Subjects drawn from the model itself: sizes about those that the weak priors expect.

    Residual AR(1) of 50 ms in two windows of 0.4 s a trial; flexion from 0 to 1.2 rad.
    """
    basis = linear_basis((0,))
    features = np.diag([3.3e-6, 4.6e-6, 3.7e-6])  # m², equal shares at the mean square of each feature
    shared = np.linalg.cholesky(unison_covariance(OUTPUTS))
    residual = 1e-3 * np.linalg.cholesky(unison_covariance(OUTPUTS, 0.5))
    population = 0.0025 * generator.standard_normal((3, OUTPUTS))
    population[0] = 0.0
    time = np.concatenate([np.arange(40), 120 + np.arange(40)]) / 100.0
    memory = np.exp(-0.01 / 0.05)
    made_frames = []
    for subject in range(subjects):
        own = np.sqrt(features) @ generator.standard_normal((3, OUTPUTS)) @ shared.T
        for trial in range(trials):
            extra = 0.5 * np.sqrt(features) @ generator.standard_normal((3, OUTPUTS)) @ shared.T
            angles = np.zeros((80, 1, 3))
            angles[:, 0, 0] = 0.6 - 0.6 * np.cos(2 * np.pi * time + generator.uniform(0, 6))
            reference = np.array([[0.05 * generator.standard_normal(), 0.0, 0.0]])
            fresh = generator.standard_normal((2, 40, OUTPUTS))
            fresh[:, 1:] *= np.sqrt(1 - memory**2)
            noise = lfilter([1.0], [1.0, -memory], fresh, axis=1).reshape(80, OUTPUTS) @ residual.T
            displacement = basis.values(angles, reference) @ (population + own + extra) + noise
            made_frames.append(
                SegmentFrames(
                    subject=f"S{subject:02d}",
                    trial=f"t{trial}",
                    angles=angles,
                    reference_angles=reference,
                    displacement=displacement,
                    noise=np.zeros((80, OUTPUTS, OUTPUTS)),
                    time=time,
                )
            )
    return made_frames


def model_of(frames: list[SegmentFrames], family: FeatureFamily = LINEAR) -> FeatureModel:
    """Learn one segment as prior.learning does."""
    return family.learn(SegmentData("thigh", ("TA", "TB"), np.zeros((2, 3)), frames, (0,)))


def refit(model: FeatureModel, trials: list[TrialStatistics]) -> Hierarchy:
    """Fit to other trials from where the model stood."""
    relative, total = model.basis.relative_variance, model.basis.total_relative_variance
    return fit_hierarchy(trials, relative, total, model.hierarchy, model.shrinkage.settings(REFIT))


both_families = pytest.mark.parametrize("family", [LINEAR, REDUCED_RANK], ids=lambda family: family.name)


def left_out(error: FloatArray, constant: float = 1.0, rest: float = 0.0, unit: str = "A") -> LeftOut:
    size = np.asarray(error, dtype=np.float64)
    return LeftOut(unit, size, np.full(size.size, constant), np.full(size.size, rest), 2 * size, True)


@pytest.mark.parametrize(
    ("subjects", "point"), [(2, 2.353), (3, 2.132), (4, 2.015), (9, 1.812), (10, 1.796), (20, 1.721)]
)
def test_few_subjects_widen_as_students_law_asks(subjects: int, point: float) -> None:
    """Table of Student's t, 95 % points with n + 1 degrees of freedom, over 1.645 of the normal law.

    n − 1 of the spread between n subjects, and two of the weak prior on it.
    """
    assert few_subjects_factor(subjects) == pytest.approx((point / 1.645) ** 2, rel=1e-3)


def test_widening_has_its_limits() -> None:
    """One subject says nothing of others; many subjects ask for no widening."""
    assert few_subjects_factor(0) == few_subjects_factor(1) == LARGEST_INFLATION == 4.0
    assert few_subjects_factor(9) == pytest.approx(1.21, abs=0.005)
    assert few_subjects_factor(10_000) == pytest.approx(1.0, abs=1e-3)
    factors = [few_subjects_factor(count) for count in range(2, 60)]
    assert factors == sorted(factors, reverse=True)


def test_coverage_by_hand() -> None:
    """Normal 50, 90, 95 % intervals reach 0.674, 1.645 and 1.960 standard deviations (table)."""
    unit = left_out(np.array([0.67, -0.68, 1.64, -1.65, 1.95, -1.97]))
    assert coverage(unit, 0.50) == pytest.approx(1 / 6)
    assert coverage(unit, 0.90) == pytest.approx(3 / 6)
    assert coverage(unit, 0.95) == pytest.approx(5 / 6)
    # Only the trial-constant part is widened: SD √(4·0.75 + 0.25) = 1.803.
    both = left_out(np.array([1.21, 1.22]), constant=0.75, rest=0.25)
    assert coverage(both, 0.50) == 0.0
    assert coverage(both, 0.50, 4.0) == 0.5


def test_spread_is_widened_until_subjects_are_covered_on_average() -> None:
    """Ten subjects of ten values; nine are well inside, one needs a variance of (3.0/1.645)² = 3.326."""
    easy = [left_out(np.full(10, 0.1), unit=str(index)) for index in range(9)]
    hard = left_out(np.concatenate([np.full(1, 3.0), np.full(9, 9.0)]), unit="hard")
    assert calibrate_inflation([*easy, hard]) == pytest.approx(few_subjects_factor(10))
    units = [*easy[:-1], left_out(np.full(10, 3.0), unit="8"), hard]
    least, needed = few_subjects_factor(10), (3.0 / 1.6449) ** 2
    got = calibrate_inflation(units)
    assert needed <= got < needed + (LARGEST_INFLATION - least) / 60
    assert np.mean([coverage(unit, 0.90, got) for unit in units]) == pytest.approx(0.91)


def test_spread_is_never_widened_beyond_the_largest_factor() -> None:
    assert calibrate_inflation([left_out(np.full(10, 50.0), unit=str(i)) for i in range(9)]) == 4.0
    assert calibrate_inflation([]) == 4.0
    trials = [replace(left_out(np.full(10, 0.1), unit=str(i)), by_subject=False) for i in range(9)]
    assert calibrate_inflation(trials) == 4.0


@pytest.mark.parametrize(("units", "level"), [(9, 0.90), (9, 0.50), (4, 0.95), (30, 0.90)])
def test_range_of_an_observed_coverage_is_that_of_the_binomial_law(units: int, level: float) -> None:
    """2.5 and 97.5 % points, summed by hand from the binomial coefficients."""
    chance = [math.comb(units, k) * level**k * (1 - level) ** (units - k) for k in range(units + 1)]
    total = np.cumsum(chance)
    expected = [int(np.searchsorted(total, point)) / units for point in (0.025, 0.975)]
    assert binomial_bound(units, level) == pytest.approx(expected)


def test_figures_by_hand() -> None:
    """CRPS of the normal law (Gneiting & Raftery 2007): 0.2336949773 at y = 0, 0.6024413576 at y = 1."""
    units = [left_out(np.array([0.0, 1.0]), unit="A"), left_out(np.array([3.0, 4.0]), unit="B")]
    data = summarise_validation("thigh", units, 1.0)
    assert dict(data.sizes) == {"segment": 1, "unit": 2, "level": 3, "bin": 10}
    assert data["level"].values.tolist() == [0.50, 0.90, 0.95]
    assert data["unit"].values.tolist() == ["A", "B"]
    np.testing.assert_allclose(data["coverage"].values[0], [[0.5, 1.0, 1.0], [0.0, 0.0, 0.0]])
    np.testing.assert_allclose(data["rms_error"].values[0], [np.sqrt(0.5), np.sqrt(12.5)])
    np.testing.assert_allclose(data["rms_zero"].values[0], [np.sqrt(2.0), np.sqrt(50.0)])
    assert data["crps"].values[0, 0] == pytest.approx((0.2336949773 + 0.6024413576) / 2, rel=1e-9)
    # No prior: values 0 and 2 under N(0, 2), at 0 and √2 standard deviations.
    at = math.sqrt(2.0)
    bracket = at * math.erf(1.0) + 2 * math.exp(-1.0) / math.sqrt(2 * math.pi) - 1 / math.sqrt(math.pi)
    assert data["crps_zero"].values[0, 0] == pytest.approx(at * (0.2336949773 + bracket) / 2, rel=1e-9)
    assert (data["by_subject"].item(), data["inflation"].item()) == (1, 1.0)
    # Φ(0) = 0.5, Φ(1) = 0.84; Φ(3) and Φ(4) are nearly 1. Table.
    pit = np.zeros((2, 10))
    pit[0, 5] = pit[0, 8] = 0.5
    pit[1, 9] = 1.0
    np.testing.assert_array_equal(data["pit"].values[0], pit)
    np.testing.assert_allclose(data["bin"].values, 0.05 + 0.1 * np.arange(10))
    assert np.isnan(data["log_score"].values).all()
    wide = summarise_validation("thigh", units, 4.0)
    np.testing.assert_allclose(wide["coverage"].values[0, 1], [0, 0.5, 0.5])
    assert all(data[name].attrs["units"] in ("1", "m") for name in data.data_vars)


@both_families
def test_a_subject_left_out_is_predicted_as_one_never_imaged(family: FeatureFamily) -> None:
    frames = draw_population(np.random.default_rng(1), 4)
    model = model_of(frames, family)
    units = leave_one_out(model, frames)
    assert [unit.unit for unit in units] == ["S00", "S01", "S02", "S03"]
    own = [item for item in frames if item.subject == "S02"]
    others = [trial for trial in model.trials if trial.subject != "S02"]
    fit = refit(model, others)
    weights = new_subject(fit)
    predicted = [
        FeatureArtifact(
            model.basis, weights, fit.residual, model.time_scales, item.reference_angles, model.magnitude
        ).moments(item.angles)
        for item in own
    ]
    error = np.concatenate(
        [(item.displacement - part.mean).ravel() for item, part in zip(own, predicted, strict=True)]
    )
    np.testing.assert_allclose(units[2].error, error, rtol=1e-12)
    variance = np.concatenate([np.einsum("faa->fa", part.covariance).ravel() for part in predicted])
    np.testing.assert_allclose(units[2].constant + units[2].rest, variance, rtol=1e-12)
    np.testing.assert_allclose(units[2].rest, np.tile(np.diag(fit.residual), 160), rtol=1e-12)


def test_log_scores_are_mean_log_densities_of_whole_frames() -> None:
    """By SciPy, frame by frame; a frame with a hidden marker counts with the other one alone."""
    frames = draw_population(np.random.default_rng(6), 3)
    displacement = frames[4].displacement.copy()
    displacement[7, 3:] = np.nan
    frames[4] = replace(frames[4], displacement=displacement)
    model = model_of(frames)
    kept = frames[:4]
    (unit,) = [item for item in leave_one_out(model, frames, (0,)) if item.unit == "S02"]
    fresh = model.refitted(kept)
    rivals = learn_rivals(kept, (0,))
    totals, count = np.zeros(3), 0
    for item in frames[4:]:
        artifact = fresh.for_new_subject(Posture(item.reference_angles, np.zeros((2, 3))), 1.0)
        moments = artifact.moments(item.angles)
        change = linear_basis((0,)).values(item.angles, item.reference_angles)
        for at in range(80):
            seen = np.isfinite(item.displacement[at])
            laws = (
                (moments.mean[at], moments.covariance[at]),
                (np.zeros(OUTPUTS), rivals.zero),
                (change[at] @ rivals.weights, rivals.pooled),
            )
            for index, (mean, covariance) in enumerate(laws):
                law = multivariate_normal(mean[seen], covariance[np.ix_(seen, seen)])
                totals[index] += law.logpdf(item.displacement[at][seen])
            count += int(seen.sum())
    got = (unit.log_score, unit.log_score_zero, unit.log_score_pooled)
    # The scores of a subject's trials are averaged by their values.
    np.testing.assert_allclose(got, totals / count, rtol=1e-9)


def test_rivals_are_second_moment_and_least_squares() -> None:
    frames = draw_population(np.random.default_rng(7), 3)
    rivals = learn_rivals(frames, (0,))
    outputs = np.concatenate([item.displacement for item in frames])
    np.testing.assert_allclose(
        rivals.zero, outputs.T @ outputs / len(outputs) + 9e-8 * np.eye(OUTPUTS), rtol=1e-9
    )
    basis = linear_basis((0,))
    features = np.concatenate([basis.values(item.angles, item.reference_angles)[:, 1:] for item in frames])
    weights, *_ = np.linalg.lstsq(features, outputs, rcond=None)
    np.testing.assert_allclose(rivals.weights[1:], weights, atol=1e-4 * np.abs(weights).max())
    assert not rivals.weights[0].any()
    rest = outputs - features @ rivals.weights[1:]
    np.testing.assert_allclose(rivals.pooled, rest.T @ rest / len(rest) + 9e-8 * np.eye(OUTPUTS), rtol=1e-9)


@both_families
def test_what_a_left_out_subject_did_does_not_change_its_own_prediction(family: FeatureFamily) -> None:
    frames = draw_population(np.random.default_rng(2), 4)
    model = model_of(frames, family)
    wild = [
        replace(item, displacement=7.0 * item.displacement + 0.01) if item.subject == "S01" else item
        for item in frames
    ]
    trials = tuple(summarise(item, model.basis) for item in wild)
    one, other = leave_one_out(model, frames)[1], leave_one_out(replace(model, trials=trials), wild)[1]
    np.testing.assert_array_equal(one.constant, other.constant)
    np.testing.assert_array_equal(one.rest, other.rest)
    np.testing.assert_allclose(one.size - one.error, other.size - other.error, atol=1e-15)
    assert np.abs(one.error - other.error).max() > 0.01


@both_families
def test_a_refit_from_where_it_stood_is_a_refit_from_scratch(family: FeatureFamily) -> None:
    """Left-out fits start from the whole one; what that keeps of the left-out subject is below 1 %."""
    frames = draw_population(np.random.default_rng(3), 6)
    model = model_of(frames, family)
    others = [trial for trial in model.trials if trial.subject != "S00"]
    warm = refit(model, others)
    cold = fit_hierarchy(
        others,
        model.basis.relative_variance,
        model.basis.total_relative_variance,
        settings=model.shrinkage.settings(FitSettings()),
    )
    for part in ("subject_covariance", "trial_covariance", "residual"):
        np.testing.assert_allclose(
            np.trace(getattr(warm, part)), np.trace(getattr(cold, part)), rtol=0.01, err_msg=part
        )


def test_one_subject_is_validated_by_its_trials() -> None:
    frames = draw_population(np.random.default_rng(4), 1, trials=3)
    model = model_of(frames)
    units = leave_one_out(model, frames)
    assert [unit.unit for unit in units] == ["t0", "t1", "t2"]
    assert not any(unit.by_subject for unit in units)
    # Learned from the two other trials, which count as the subject's own and not as the population's.
    rest = [model.trials[0], model.trials[2]]
    relative = model.basis.relative_variance
    alone = without_subject(refit(model, rest), rest, relative, "S00")
    weights = trial_posterior(alone, rest, "t1")
    mean = model.basis.values(frames[1].angles, frames[1].reference_angles) @ weights.mean
    np.testing.assert_allclose(units[1].error, (frames[1].displacement - mean).ravel(), rtol=1e-9, atol=1e-15)
    assert leave_one_out(model, frames[:1]) == []


def test_hidden_outputs_and_noise_of_the_bone_truth_in_a_prediction() -> None:
    frames = draw_population(np.random.default_rng(5), 3)
    displacement = frames[0].displacement.copy()
    displacement[:10, 3:] = np.nan
    noise = np.broadcast_to(np.diag(np.arange(1.0, 7.0)) * 1e-6, (80, 6, 6))
    frames[0] = replace(frames[0], displacement=displacement, noise=noise)
    model = model_of(frames)
    (unit,) = predict_others(model, frames[:1])
    assert unit.error.size == 80 * 6 - 30
    assert np.isfinite(unit.error).all()
    expected = np.diag(model.hierarchy.residual)[:3] + np.array([1e-6, 2e-6, 3e-6])
    np.testing.assert_allclose(unit.rest[:3], expected, rtol=1e-12)


@pytest.mark.slow
def test_subjects_of_populations_drawn_from_the_model_are_covered() -> None:
    """Twelve populations of nine subjects, each judged on twelve more of the same population.

    The mean coverage has a standard error of s/√12 with s the spread between populations; bounds are
    2.201 of it, Student's 97.5 % point with 11 degrees of freedom (table). Unwidened, the mean must be 90 %;
    widened for nine subjects it must lie between that and 2Φ(1.645·√1.278) − 1 = 93.7 %, which holds
    where the spread between subjects is all of the variance.
    """
    generator = np.random.default_rng(0)
    plain, widened = [], []
    for _ in range(12):
        frames = draw_population(generator, 21)
        known, fresh = frames[:18], frames[18:]
        model = model_of(known)
        factor = calibrate_inflation(leave_one_out(model, known))
        units = predict_others(model, fresh)
        assert len(units) == 12
        plain.append(np.mean([coverage(unit, 0.90) for unit in units]))
        widened.append(np.mean([coverage(unit, 0.90, factor) for unit in units]))
    bound = 2.201 * np.std(plain, ddof=1) / np.sqrt(12)
    assert 0.005 < bound < 0.03
    assert abs(np.mean(plain) - 0.90) < bound
    bound = 2.201 * np.std(widened, ddof=1) / np.sqrt(12)
    assert 0.90 - bound < np.mean(widened) < 0.937 + bound

"""Shrinkage by left-out subjects: its score against dense algebra, what it chooses, what it tells."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from dataclasses import replace

import made_priors as made
import numpy as np
import pytest

from sta_prior.checks import FloatArray
from sta_prior.prior import feature_model, shrinkage
from sta_prior.prior.evidence import LeftOutScore
from sta_prior.prior.family import SegmentData, Values
from sta_prior.prior.feature_model import LINEAR, REDUCED_RANK, REFIT, FeatureFamily, FeatureModel
from sta_prior.prior.fitting import FitSettings, fit_covariances, fit_hierarchy, state_of
from sta_prior.prior.hierarchy import Hierarchy, TrialStatistics, population_width
from sta_prior.prior.shrinkage import (
    CHOSEN,
    FEATURE_CHOICES,
    NO_BETTER,
    OUTPUT_CHOICES,
    TOO_FEW,
    USUAL,
    Shrinkage,
    choose_shrinkage,
    clear_gain,
)
from sta_prior.prior.statistics import SegmentFrames

USUAL_STRENGTHS = (0.4, 0.2)


def alike(generator: np.random.Generator, features: int, outputs: int) -> Hierarchy:
    """Made up; one M for both levels."""
    made_up = made.random_hierarchy(generator, features, outputs)
    size = float(np.trace(made_up.subject_outputs)) / outputs
    return replace(
        made_up,
        subject_outputs=made_up.subject_outputs / size,
        trial_outputs=made_up.subject_outputs / size,
    )


def dense_log_density(
    hierarchy: Hierarchy, drawn: Sequence[made.MadeTrial], width: FloatArray
) -> tuple[float, int]:
    """Of every seen value of all trials in one Gaussian, frame by frame; and how many values there are."""
    n = hierarchy.residual.shape[0]
    prior = np.kron(np.diag(width), hierarchy.subject_outputs)
    seen = [np.isfinite(item.outputs.reshape(-1)) for item in drawn]
    designs = [
        np.concatenate([np.kron(z, np.eye(n)) for z in item.features])[own]
        for item, own in zip(drawn, seen, strict=True)
    ]
    rows: list[FloatArray] = []
    for item, design, own in zip(drawn, designs, seen, strict=True):
        row = []
        for other, across in zip(drawn, designs, strict=True):
            spread = prior + (item.subject == other.subject) * hierarchy.subject_covariance
            row.append(design @ (spread + (item is other) * hierarchy.trial_covariance) @ across.T)
        noise = np.kron(np.diag(1.0 / item.weights), hierarchy.observed_residual)
        row[len(rows)] = row[len(rows)] + noise[np.ix_(own, own)]
        rows.append(np.concatenate(row, axis=1))
    covariance = np.concatenate(rows)
    data = np.concatenate([item.outputs.reshape(-1)[own] for item, own in zip(drawn, seen, strict=True)])
    square = float(data @ np.linalg.solve(covariance, data))
    determinant = float(np.linalg.slogdet(covariance)[1])
    return -0.5 * (square + determinant + data.size * math.log(2.0 * math.pi)), data.size


@pytest.mark.parametrize("hidden", [False, True])
def test_score_is_that_of_one_dense_gaussian(hidden: bool) -> None:
    """The others and a left-out subject together, less the others alone; each left-out subject by itself."""
    generator = np.random.default_rng(1)
    hierarchy = alike(generator, 2, 3 if not hidden else 6)
    drawn = made.draw_trials(generator, hierarchy, [2, 1, 3, 2], 4, hidden=hidden)
    assert any(np.isnan(item.outputs).any() for item in drawn) == hidden
    trials, relative = made.statistics_of(drawn), np.array([1.0, 0.4])
    names = ["S002", "S003"]
    got = LeftOutScore(trials, relative)(state_of(hierarchy), names)
    rest = [item for item in drawn if item.subject not in names]
    width = population_width(made.statistics_of(rest), relative)
    expected = [
        dense_log_density(hierarchy, [*rest, *(item for item in drawn if item.subject == name)], width)[0]
        - dense_log_density(hierarchy, rest, width)[0]
        for name in names
    ]
    np.testing.assert_allclose(got, expected, rtol=1e-8)
    assert got[0] != pytest.approx(got[1], rel=0.01)


def test_score_takes_trials_with_fewer_frames_than_features() -> None:
    generator = np.random.default_rng(2)
    hierarchy = alike(generator, 4, 3)
    hierarchy = replace(hierarchy, trial_features=np.diag([0.3, 0.0, 0.2, 0.1]))
    drawn = made.draw_trials(generator, alike(generator, 4, 3), [2, 1, 2], 2)
    rest = [item for item in drawn if item.subject != "S003"]
    width = population_width(made.statistics_of(rest), np.ones(4))
    got = LeftOutScore(made.statistics_of(drawn), np.ones(4))(state_of(hierarchy), ["S003"])
    both, alone = (dense_log_density(hierarchy, part, width)[0] for part in (drawn, rest))
    np.testing.assert_allclose(got, [both - alone], rtol=1e-8)


def truth(correlated: bool) -> Hierarchy:
    """Four features, two markers, all deviations independent or with correlations of 0.85 and 0.8."""
    features, outputs = np.eye(4), np.eye(6)
    if correlated:
        features, outputs = 0.15 * features + 0.85, 0.2 * outputs + 0.8
    base = made.random_hierarchy(np.random.default_rng(0), 4, 6)
    return replace(
        base,
        subject_features=features,
        subject_outputs=outputs,
        trial_features=0.2 * features,
        trial_outputs=outputs,
        residual=0.3 * np.eye(6),
        observed_residual=0.3 * np.eye(6),
    )


def choose(trials: list[TrialStatistics]) -> Shrinkage:
    relative = np.ones(trials[0].blocks[0].feature_gram.shape[0])
    return choose_shrinkage(trials, relative, float(relative.sum()), fit_hierarchy(trials, relative))


def choices(correlated: bool, subjects: int, studies: int) -> Counter[tuple[float, float]]:
    found: Counter[tuple[float, float]] = Counter()
    for seed in range(studies):
        drawn = made.draw_trials(np.random.default_rng(seed), truth(correlated), [2] * subjects, 15)
        chosen = choose(made.statistics_of(drawn))
        usual = (chosen.features, chosen.outputs) == USUAL_STRENGTHS
        assert chosen.reason == (NO_BETTER if usual else CHOSEN)
        found[chosen.features, chosen.outputs] += 1
    return found


def test_independent_deviations_of_few_subjects_are_shrunk_strongly() -> None:
    """Ten studies of five subjects: at least one strength above the usual in nine, none below in any."""
    found = choices(False, 5, 10)
    stronger = sum(count for key, count in found.items() if key[0] > 0.4 or key[1] > 0.2)
    assert stronger >= 9
    assert all(features >= 0.4 and outputs >= 0.2 for features, outputs in found)
    assert found[0.7, 0.4] >= 4


def test_correlated_deviations_of_many_subjects_are_shrunk_weakly() -> None:
    """Six studies of sixteen subjects: the weakest in all of them."""
    assert choices(True, 16, 6) == {(0.2, 0.1): 6}


def test_gain_must_exceed_its_standard_error() -> None:
    """Four differences with mean 1: SD 2 has a standard error of 1, which is not below it."""
    apart = np.sqrt(3.0) * np.array([-1.0, -1.0, 1.0, 1.0])
    assert clear_gain(1.001 + apart) == pytest.approx(1.001)
    assert clear_gain(0.999 + apart) == 0.0
    assert clear_gain(-3.0 + 0.1 * apart) == 0.0


def test_usual_strengths_are_kept_where_the_score_cannot_tell(monkeypatch: pytest.MonkeyPatch) -> None:
    """A score of noise alone, which differs by much more between subjects than between strengths."""
    drawn = made.draw_trials(np.random.default_rng(5), truth(True), [1] * 6, 15)
    generator = np.random.default_rng(4)
    plain = np.array([-1.0, 1.0] * 3)

    class Noise(LeftOutScore):
        def __call__(self, state: object, left_out: Sequence[str]) -> FloatArray:
            signs = plain[[self.subjects.index(name) for name in left_out]]
            return np.asarray(100.0 * generator.choice([-1.0, 1.0]) * signs, dtype=np.float64)

    monkeypatch.setattr(shrinkage, "LeftOutScore", Noise)
    assert choose(made.statistics_of(drawn)) == Shrinkage(*USUAL_STRENGTHS, NO_BETTER)


@pytest.mark.parametrize("subjects", [1, 3])
def test_fewer_than_four_subjects_keep_the_usual_strengths(subjects: int) -> None:
    drawn = made.draw_trials(np.random.default_rng(6), truth(True), [3] * subjects, 15)
    chosen = choose(made.statistics_of(drawn))
    assert chosen == Shrinkage(*USUAL_STRENGTHS, TOO_FEW)
    assert chosen.words == (
        "between-subject shrinkage 40 % between features, 20 % between outputs, "
        "kept: fewer than four subjects"
    )


def test_four_subjects_can_choose() -> None:
    drawn = made.draw_trials(np.random.default_rng(6), truth(True), [3] * 4, 15)
    chosen = choose(made.statistics_of(drawn))
    assert chosen == Shrinkage(0.2, 0.1, CHOSEN)
    assert chosen.words == (
        "between-subject shrinkage 20 % between features, 10 % between outputs, chosen by left-out subjects"
    )


def test_the_choice_does_not_depend_on_the_order_of_trials() -> None:
    generator = np.random.default_rng(7)
    drawn = made.draw_trials(generator, truth(False), [2, 3, 1, 2, 2, 3, 2], 15)
    trials = made.statistics_of(drawn)
    one = choose(trials)
    assert choose(trials) == one
    for _ in range(3):
        assert choose([trials[at] for at in generator.permutation(len(trials))]) == one
    assert (one.features, one.outputs) != USUAL_STRENGTHS


def watch(monkeypatch: pytest.MonkeyPatch) -> list[list[TrialStatistics]]:
    """What the choices are judged on from now on."""
    judged: list[list[TrialStatistics]] = []

    class Watched(LeftOutScore):
        def __init__(self, trials: list[TrialStatistics], relative: FloatArray) -> None:
            judged.append(trials)
            super().__init__(trials, relative)

    monkeypatch.setattr(shrinkage, "LeftOutScore", Watched)
    return judged


def test_frames_that_show_every_output_decide_where_they_are_many(monkeypatch: pytest.MonkeyPatch) -> None:
    """A marker hidden in a fifth of the frames of each trial: the choice is that of the other frames."""
    drawn = made.draw_trials(np.random.default_rng(8), truth(False), [2] * 5, 20)
    for item in drawn:
        item.outputs[:4, :3] = np.nan
    whole = made.statistics_of(drawn)
    complete = [
        replace(trial, blocks=tuple(block for block in trial.blocks if block.seen.all())) for trial in whole
    ]
    assert [len(trial.blocks) for trial in whole] == [2] * 10
    start = fit_hierarchy(whole, np.ones(4))
    judged = watch(monkeypatch)
    one = choose_shrinkage(whole, np.ones(4), 4.0, start)
    assert one == choose_shrinkage(complete, np.ones(4), 4.0, start)
    assert judged == [complete, complete]


def test_a_marker_that_a_subject_never_shows_is_no_hindrance(monkeypatch: pytest.MonkeyPatch) -> None:
    """All frames are then judged, and the choice among correlated deviations is the weakest."""
    judged = watch(monkeypatch)
    drawn = made.draw_trials(np.random.default_rng(9), truth(True), [1] * 5, 15)
    drawn[2].outputs[:, 3:] = np.nan
    trials = made.statistics_of(drawn)
    assert choose(trials) == Shrinkage(0.2, 0.1, CHOSEN)
    assert judged == [trials]


def frames_of(generator: np.random.Generator, subjects: int) -> list[SegmentFrames]:
    """Two markers that follow flexion, each subject by a share and with a bulge of its own."""
    result = []
    time = np.arange(60) / 100.0
    for subject in range(subjects):
        slope = 0.01 + 0.004 * generator.standard_normal(6)
        for trial in range(2):
            angles = np.zeros((60, 1, 3))
            angles[:, 0, 0] = 0.6 - 0.6 * np.cos(2 * np.pi * time / 0.6 + generator.uniform(0, 6))
            moved = angles[:, :, 0] * (slope + 0.001 * generator.standard_normal(6))
            result.append(
                SegmentFrames(
                    subject=f"S{subject}",
                    trial=f"t{trial}",
                    angles=angles,
                    reference_angles=np.zeros((1, 3)),
                    displacement=moved + 0.0005 * generator.standard_normal((60, 6)),
                    noise=np.zeros((60, 6, 6)),
                    time=time,
                )
            )
    return result


def learned(family: FeatureFamily, frames: list[SegmentFrames]) -> FeatureModel:
    return family.learn(SegmentData("thigh", ("TA", "TB"), np.zeros((2, 3)), frames, (0,)))


def stored_of(model: FeatureModel) -> dict[str, Values]:
    return {
        **{name: variable.values for name, variable in model.variables().items()},
        "markers": np.array(model.markers),
        "layout": model.layout,
        "inflation": np.array(model.inflation),
    }


@pytest.mark.parametrize("family", [LINEAR, REDUCED_RANK], ids=lambda family: family.name)
def test_a_model_is_fitted_with_its_choice_and_refitted_and_stored_with_it(
    family: FeatureFamily, monkeypatch: pytest.MonkeyPatch
) -> None:
    frames = frames_of(np.random.default_rng(10), 5)
    given = []

    def choose_far(
        trials: list[TrialStatistics], relative: FloatArray, total: float, start: Hierarchy
    ) -> Shrinkage:
        given.append(fit_hierarchy(trials, relative, total).subject_features - start.subject_features)
        return Shrinkage(0.7, 0.1, CHOSEN)

    monkeypatch.setattr(feature_model, "choose_shrinkage", choose_far)
    model = learned(family, frames)
    assert not given[0].any()
    trials, basis = list(model.trials), model.basis
    parts = basis.relative_variance, basis.total_relative_variance
    strong = FitSettings(feature_shrinkage=0.7, output_shrinkage=0.1)
    expected = fit_hierarchy(trials, *parts, settings=strong)
    np.testing.assert_array_equal(model.hierarchy.subject_features, expected.subject_features)
    others = [trial for trial in trials if trial.subject != "S1"]
    own = replace(REFIT, feature_shrinkage=0.7, output_shrinkage=0.1)
    again = model.refitted([item for item in frames if item.subject != "S1"])
    expected = fit_hierarchy(others, *parts, model.hierarchy, own)
    np.testing.assert_array_equal(again.hierarchy.subject_features, expected.subject_features)
    assert again.shrinkage == model.shrinkage == Shrinkage(0.7, 0.1, CHOSEN)
    back = family.read("thigh", stored_of(model))
    assert back.shrinkage == model.shrinkage
    words = (
        "; between-subject shrinkage 70 % between features, 10 % between outputs, "
        "chosen by left-out subjects; "
    )
    assert words in model.describe()
    assert words in back.describe()


@pytest.mark.parametrize("family", [LINEAR, REDUCED_RANK], ids=lambda family: family.name)
def test_a_family_chooses_for_itself_and_tells_it(family: FeatureFamily) -> None:
    frames = frames_of(np.random.default_rng(11), 5)
    model = learned(family, frames)
    assert model.shrinkage.features in FEATURE_CHOICES
    assert model.shrinkage.outputs in OUTPUT_CHOICES
    assert model.shrinkage.reason in {CHOSEN, NO_BETTER}
    assert learned(family, frames).shrinkage == model.shrinkage
    few = learned(family, frames[:6])
    assert few.shrinkage == Shrinkage(*USUAL_STRENGTHS, TOO_FEW)
    assert "20 % between outputs, kept: fewer than four subjects; fit: " in few.describe()


def test_a_file_from_before_there_was_a_choice_keeps_the_strengths_of_then() -> None:
    stored = stored_of(learned(LINEAR, frames_of(np.random.default_rng(12), 2)))
    del stored["feature_shrinkage"]
    assert LINEAR.read("thigh", stored).shrinkage == USUAL == Shrinkage(*USUAL_STRENGTHS, "fixed")


def test_fits_to_fewer_subjects_end_near_those_that_go_on() -> None:
    """The choice rests on fits of few iterations: their scores differ as those of finished ones do."""
    drawn = made.draw_trials(np.random.default_rng(13), truth(False), [2] * 5, 15)
    trials, relative = made.statistics_of(drawn), np.ones(4)
    start = state_of(fit_hierarchy(trials, relative))
    rest = [trial for trial in trials if trial.subject != "S001"]
    score = LeftOutScore(trials, relative)
    values = []
    for strength in (0.2, 0.7):
        own = FitSettings(feature_shrinkage=strength)
        short, long = (
            fit_covariances(rest, relative, 4.0, start, replace(own, maximum_iterations=many))[0]
            for many in (shrinkage.FURTHER_ITERATIONS, 100)
        )
        values.append([float(score(state, ["S001"])[0]) for state in (short, long)])
    (weak_short, weak_long), (strong_short, strong_long) = values
    difference = strong_long - weak_long
    assert abs(difference) > 0.1
    assert strong_short - weak_short == pytest.approx(difference, rel=0.1)

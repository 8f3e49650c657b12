"""Decay times of the residual: recovered, one or two, told, stored and handed on."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import made_priors as made
import numpy as np
import pytest
from made_problems import made_artifact
from made_studies import says
from scipy.signal import lfilter

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError
from sta_prior.io.netcdf import write_dataset
from sta_prior.prior import load_prior
from sta_prior.prior.augmented import Augmented
from sta_prior.prior.basis import Basis, orthonormal
from sta_prior.prior.family import Posture, restrict
from sta_prior.prior.feature_model import FeatureModel
from sta_prior.prior.files import prior_to_dataset
from sta_prior.prior.interface import IsotropicArtifact, time_scales_of
from sta_prior.prior.lag_products import MOST_FRAMES, lag_products, learn_time_scales
from sta_prior.prior.learning import learn
from sta_prior.prior.linear import linear_basis
from sta_prior.prior.other_models import ExactModel
from sta_prior.prior.reduced_rank import reduced_rank_basis
from sta_prior.prior.statistics import SegmentFrames
from sta_prior.prior.time_scale_fit import GRID, LagProducts, _scores
from sta_prior.prior.time_scales import LONGEST_TIME_CONSTANT, TimeScales

TWO = ((0.08, 0.5), (0.01, 0.5))
SEEDS = range(20)


def simulated(
    seed: int,
    scales: Sequence[tuple[float, float]],
    *,
    white: float = 0.3,
    subjects: int = 20,
    trials: int = 2,
    windows: int = 2,
    length: int = 50,
    rate: float = 100.0,
) -> list[SegmentFrames]:
    """Trials of a few windows: a residual of variance 1, of (decay time, share), and white noise.

    Two markers that move together; flexion goes to and fro once in 1.1 s; the gap is as long as the window.
    """
    generator = np.random.default_rng(seed)
    root = np.eye(6) + 0.5 * generator.standard_normal((6, 6))
    time = np.concatenate([2 * length * index + np.arange(length) for index in range(windows)]) / rate
    made_trials = []
    for trial in range(subjects * trials):
        residual = np.zeros((windows, length, 6))
        for constant, share in scales:
            rho = np.exp(-1.0 / rate / constant)
            fresh = generator.standard_normal(residual.shape)
            fresh[:, 0] /= np.sqrt(1.0 - rho**2)  # stationary from the first frame on
            residual += np.sqrt(share) * lfilter([np.sqrt(1.0 - rho**2)], [1.0, -rho], fresh, axis=1)
        values = residual.reshape(-1, 6) @ root
        values += np.sqrt(white) * generator.standard_normal(values.shape)
        angles = np.zeros((time.size, 1, 3))
        angles[:, 0, 0] = 0.6 - 0.5 * np.cos(2 * np.pi * time / 1.1 + generator.uniform(0.0, 6.0))
        made_trials.append(
            SegmentFrames(
                subject=f"S{trial // trials:02d}",
                trial=f"t{trial % trials}",
                angles=angles,
                reference_angles=np.full((1, 3), 0.1),
                displacement=0.002 * values,
                noise=np.zeros((time.size, 6, 6)),
                time=time,
            )
        )
    return made_trials


def basis_of(frames: list[SegmentFrames]) -> Basis:
    angles, references = [item.angles for item in frames], [item.reference_angles for item in frames]
    return orthonormal(reduced_rank_basis((0,), angles, references), angles, references)


def learned(frames: list[SegmentFrames]) -> TimeScales:
    return learn_time_scales(frames, basis_of(frames))


def close(got: TimeScales, expected: TimeScales, rtol: float) -> None:
    np.testing.assert_allclose(got.constants, expected.constants, rtol=rtol)
    np.testing.assert_allclose(got.shares, expected.shares, rtol=rtol)


def without(frames: SegmentFrames, hidden: FloatArray) -> SegmentFrames:
    """The frames with some markers hidden, (F, markers)."""
    displacement = frames.displacement.copy()
    displacement[np.repeat(hidden, 3, axis=1)] = np.nan
    return replace(frames, displacement=displacement)


# What they are.


def test_correlation_is_a_sum_of_exponentials() -> None:
    scales = TimeScales(np.array([0.08, 0.01]), np.array([0.7, 0.3]))
    lag = np.array([[0.0, 0.02], [-0.02, 0.5]])
    expected = 0.7 * np.exp(-np.abs(lag) / 0.08) + 0.3 * np.exp(-np.abs(lag) / 0.01)
    np.testing.assert_allclose(scales.correlation(lag), expected, rtol=1e-14)
    assert scales.slowest == 0.08
    np.testing.assert_array_equal(TimeScales.single(0.0).correlation(np.array([0.0, 0.001])), [1.0, 0.0])


def test_words() -> None:
    two = TimeScales(np.array([0.08, 0.0121]), np.array([0.704, 0.296]))
    assert two.words() == "decay times 0.080 s (70 %) and 0.012 s (30 %)"
    assert TimeScales.single(0.063).words() == "decay time 0.063 s"


def test_an_artifact_with_one_decay_time_has_one_scale() -> None:
    scales = time_scales_of(IsotropicArtifact(6, 0.003, 0.04))
    np.testing.assert_array_equal(scales.constants, [0.04])
    np.testing.assert_array_equal(scales.shares, [1.0])


def test_what_stands_before_an_artifact_hands_its_scales_on() -> None:
    two = TimeScales(np.array([0.08, 0.01]), np.array([0.7, 0.3]))
    inner = replace(
        made_artifact(np.random.default_rng(0), 2, [0], slope=0.01, subject_sd=0.003, residual_sd=0.002),
        time_scales=two,
    )
    kept = restrict(inner, np.arange(3), "left", [0], 1)
    both = Augmented(kept, IsotropicArtifact(3, 0.003, 0.04), np.arange(3), np.arange(3, 6))
    for artifact in (inner, kept, both):
        assert time_scales_of(artifact) is two
        assert artifact.time_constant == 0.08
    plain = restrict(IsotropicArtifact(6, 0.003, 0.04), np.arange(3), "right", [0], 1)
    assert time_scales_of(plain).slowest == plain.time_constant == 0.04


# The sums.


def test_what_a_fit_takes_of_a_residual_is_worked_out_exactly() -> None:
    """Against (I − H) R (I − H)ᵀ as full matrices: two windows, a marker that is hidden at times."""
    frames = simulated(3, TWO, subjects=1, trials=1, length=12)[0]
    hidden = np.zeros((24, 2), dtype=bool)
    hidden[[2, 3, 17], 1] = True
    frames = without(frames, hidden)
    basis = basis_of([frames])
    sums = lag_products([frames], basis)
    features, seen = basis.values(frames.angles, frames.reference_angles), ~hidden
    same = frames.window[:, None] == frames.window
    distance = np.abs(frames.time[:, None] - frames.time)
    for row, lag in enumerate(np.rint(100 * sums.lag).astype(int)):
        square, product, count = np.zeros(10), np.zeros(10), 0
        for marker in range(2):
            own = features * seen[:, marker, None]
            gram = own.T @ own
            ridge = 1e-3 * np.trace(gram) / gram.shape[0] * np.eye(gram.shape[0])
            left = np.diag(seen[:, marker].astype(float)) - own @ np.linalg.solve(gram + ridge, own.T)
            early = np.arange(24 - lag)
            early = early[same[early, early + lag] & seen[early, marker] & seen[early + lag, marker]]
            count += 3 * early.size
            for index, constant in enumerate([1e-9, *GRID]):
                whole = np.where(same, np.exp(-distance / constant), 0.0)
                lost = whole - left @ whole @ left.T
                ends = lost[early, early].sum() + lost[early + lag, early + lag].sum()
                square[index] += 1.5 * ends
                product[index] += 3.0 * lost[early, early + lag].sum()
        assert sums.count[row] == count
        # Directions of which the ridge leaves 99 % or more are not worked out.
        np.testing.assert_allclose(sums.lost[row, 0], square / count, atol=0.003)
        np.testing.assert_allclose(sums.lost[row, 1], product / count, atol=0.003)


def test_gradient_of_the_likelihood() -> None:
    """Against central differences, at one scale and at two."""
    frames = simulated(4, TWO, subjects=3)
    sums = lag_products(frames, basis_of(frames))
    for point in (np.array([np.log(0.03), 0.2]), np.array([np.log(0.07), 0.4, 0.6, 0.3])):
        gradient = _scores(sums, point)[1]
        for index, step in enumerate(1e-5 * np.eye(point.size)):
            up, down = (_scores(sums, point + sign * step)[0].sum() for sign in (1, -1))
            assert gradient[index] == pytest.approx((up - down) / 2e-5, rel=1e-4)


def test_long_trials_are_thinned_by_windows() -> None:
    """Of 40 windows of 50 frames 8 are kept; of 5000 in a row, or of two rows, 400. Six outputs."""
    for windows, length, pairs in ((40, 50, 8 * 49), (1, 5000, 399), (2, 1000, 399)):
        frames = simulated(5, TWO, subjects=1, trials=1, windows=windows, length=length)
        sums = lag_products(frames, basis_of(frames))
        assert sums.count[0] == 6 * pairs
        assert pairs < MOST_FRAMES


def test_lags_of_trials_at_several_rates_are_kept_apart() -> None:
    slow, fast = simulated(6, TWO, subjects=1, rate=30.0), simulated(6, TWO, subjects=1, rate=250.0)
    sums: LagProducts = lag_products([slow[0], fast[1]], linear_basis((0,)))
    np.testing.assert_allclose(sums.lag[sums.unit == 0], np.array([1, 2, 3, 4, 5, 6, 7, 9]) / 30.0, atol=1e-4)
    assert sums.lag[sums.unit == 1][0] == pytest.approx(0.004)
    assert sums.lag.max() <= 0.3001
    assert sums.step == pytest.approx(0.004)


# Recovered.


@pytest.mark.parametrize(
    ("constant", "length", "tolerance"), [(0.02, 50, 0.0009), (0.06, 50, 0.0027), (0.06, 20, 0.0041)]
)
def test_one_decay_time_is_recovered_and_chosen(constant: float, length: int, tolerance: float) -> None:
    """Twenty subjects of two trials, 100 frames each; windows of 20 frames are 0.2 s long.

    Tolerance: standard deviation of the estimate over 40 such data sets. Their mean lies within four standard
    errors of the truth, and one is chosen in nine of ten.
    """
    got = [
        learned(simulated(seed, [(constant, 1.0)], length=length, windows=100 // length)) for seed in SEEDS
    ]
    assert sum(item.constants.size == 1 for item in got) >= 0.9 * len(SEEDS)
    mean = np.mean([item.slowest for item in got if item.constants.size == 1])
    assert abs(mean - constant) < 4.0 * tolerance / np.sqrt(0.9 * len(SEEDS))


@pytest.mark.parametrize(("rate", "length"), [(100.0, 20), (250.0, 80)])
def test_two_decay_times_are_recovered_and_chosen(rate: float, length: int) -> None:
    """0.08 and 0.01 s, half and half: chosen in four of five.

    Standard deviations over 40 data sets: 0.015–0.019 s of the slow one, 0.0035 s of the fast one, 0.06 of
    the share. The mean of twenty lies within four standard errors; the cap at 0.1 s takes off up to 0.005 s.
    """
    got = [learned(simulated(seed, TWO, rate=rate, length=length, windows=160 // length)) for seed in SEEDS]
    two = [item for item in got if item.constants.size == 2]
    assert len(two) >= 0.8 * len(SEEDS)
    error = 4.0 / np.sqrt(len(two))
    assert np.mean([item.constants[0] for item in two]) == pytest.approx(0.08, abs=0.019 * error + 0.005)
    assert np.mean([item.constants[1] for item in two]) == pytest.approx(0.01, abs=0.0035 * error)
    assert np.mean([item.shares[0] for item in two]) == pytest.approx(0.5, abs=0.06 * error)
    assert all(item.constants[0] >= 2.0 * item.constants[1] - 1e-9 for item in two)
    assert all(item.shares.sum() == 1.0 for item in two)


def test_white_noise_does_not_shorten_it() -> None:
    """Three times as much noise as residual; tolerance four standard deviations of 0.002 s (40 data sets)."""
    assert learned(simulated(1, [(0.03, 1.0)], white=3.0)).slowest == pytest.approx(0.03, abs=0.008)
    frames = simulated(1, [(0.03, 1.0)], white=3.0)
    louder = [replace(item, noise=np.broadcast_to(4.0 * np.eye(6), item.noise.shape)) for item in frames]
    assert learned(louder).slowest == learned(frames).slowest


def test_white_noise_alone_and_no_frames_give_the_longest() -> None:
    generator = np.random.default_rng(2)
    for frames in (simulated(2, [], white=1.0), simulated(2, [], white=1.0, subjects=1, trials=4)):
        close(learned(frames), TimeScales.single(LONGEST_TIME_CONSTANT), 0.0)
    frames = simulated(2, TWO, subjects=2)
    unseen = [without(item, generator.uniform(size=(100, 2)) >= 0.0) for item in frames]
    close(learned(unseen), TimeScales.single(LONGEST_TIME_CONSTANT), 0.0)
    alone = simulated(2, TWO, subjects=2, windows=1, length=1)
    close(learned(alone), TimeScales.single(LONGEST_TIME_CONSTANT), 0.0)


def test_it_is_never_longer_than_the_cap() -> None:
    """A residual of 1 s leaves one scale at the cap, not a second one."""
    close(learned(simulated(7, [(1.0, 1.0)], length=80)), TimeScales.single(LONGEST_TIME_CONSTANT), 1e-6)


def test_frames_too_far_apart_tell_no_second_scale() -> None:
    """At 5 Hz the fast of two would have to be 0.067 s at least, more than half of the cap."""
    assert learned(simulated(8, TWO, rate=5.0)).constants.size == 1


def test_a_decay_within_a_third_of_a_frame_is_noise() -> None:
    """0.004 s at 30 Hz is gone at the next frame; at 250 Hz it is recovered (standard deviation 0.0003 s)."""
    close(learned(simulated(8, [(0.004, 1.0)], rate=30.0)), TimeScales.single(LONGEST_TIME_CONSTANT), 0.0)
    assert learned(simulated(8, [(0.004, 1.0)], rate=250.0)).slowest == pytest.approx(0.004, abs=0.001)


# What it does not depend on.


def test_scale_and_rotation_of_the_outputs_change_nothing() -> None:
    frames = simulated(9, TWO)
    one = learned(frames)
    assert one.constants.size == 2
    turn = np.linalg.qr(np.random.default_rng(9).standard_normal((6, 6)))[0]
    for changed in (0.003 * np.eye(6), turn):
        close(
            learned([replace(item, displacement=item.displacement @ changed) for item in frames]), one, 1e-3
        )


def test_gaps_are_not_bridged_and_their_length_does_not_matter() -> None:
    """Twenty windows of five frames: a fifth of all neighbours lie in two windows.

    Taken for neighbours they would take a fifth off ρ = 0.607, and leave 14 ms. Tolerance four standard
    deviations of 0.0011 s (40 data sets).
    """
    frames = simulated(10, [(0.02, 1.0)], length=5, windows=20)
    one = learned(frames)
    assert one.slowest == pytest.approx(0.02, abs=0.0044)
    shifted = [replace(item, time=item.time + 5.0 * item.window) for item in frames]
    close(learned(shifted), one, 1e-5)


def test_hidden_outputs_count_where_they_are_seen() -> None:
    """A tenth of all markers hidden, one trial without any; four standard deviations over 40 data sets."""
    generator = np.random.default_rng(11)
    for scales in (((0.05, 1.0),), TWO):
        frames = [
            without(item, generator.uniform(size=(100, 2)) < 0.1) for item in simulated(11, scales, length=50)
        ]
        frames[3] = without(frames[3], np.ones((100, 2), dtype=bool))
        got = learned(frames)
        assert got.constants.size == len(scales)
        assert got.slowest == pytest.approx(scales[0][0], abs=4 * 0.0033 if len(scales) == 1 else 4 * 0.0125)


def test_a_marker_hidden_in_one_window_of_all_trials() -> None:
    frames = simulated(12, [(0.05, 1.0)])
    hidden = np.zeros((100, 2), dtype=bool)
    hidden[50:, 1] = True
    assert learned([without(item, hidden) for item in frames]).slowest == pytest.approx(0.05, abs=4 * 0.0033)


# One subject.


def test_with_one_subject_trials_are_left_out() -> None:
    frames = simulated(13, TWO, subjects=1, trials=30)
    got = learned(frames)
    assert got.constants.size == 2
    # The same trials as thirty people: units are the same.
    people = [replace(item, subject=item.trial) for item in frames]
    close(learned(people), got, 1e-9)


def test_one_trial_tells_one_scale() -> None:
    frames = simulated(14, TWO, subjects=1, trials=1, windows=8)
    got = learned(frames)
    assert got.constants.size == 1
    assert 0.01 < got.slowest < 0.1


# Wired in.


@pytest.mark.parametrize("family", ["linear", "reduced-rank-gp", "exact-gp"])
def test_two_scales_are_told_stored_and_handed_to_the_solver(family: str, tmp_path: Path) -> None:
    prior = learn(made.make_pairs(np.random.default_rng(1), made.subjects_of(3)), family)
    two = TimeScales(np.array([0.08, 0.012]), np.array([0.7, 0.3]))
    segments = {}
    for name, model in prior.segments.items():
        assert isinstance(model, FeatureModel | ExactModel)
        assert "residual" in model.describe()
        assert "decay time 0." in model.describe()
        if isinstance(model, FeatureModel):
            segments[name] = replace(model, time_scales=two)
        else:
            fit = replace(model.fit, time_constants=two.constants, time_shares=two.shares)
            segments[name] = replace(model, fit=fit)
        assert "SD per axis, decay times 0.080 s (70 %) and 0.012 s (30 %); " in segments[name].describe()
    changed = replace(prior, segments=segments)
    path = tmp_path / "prior.nc"
    changed.save(path)
    model = load_prior(path).segments["thigh"]
    artifact = model.for_new_subject(Posture(np.zeros((1, 3)), model.layout))
    scales = time_scales_of(artifact)
    np.testing.assert_array_equal(scales.constants, two.constants)
    np.testing.assert_array_equal(scales.shares, two.shares)
    assert artifact.time_constant == 0.08
    data = prior_to_dataset(changed)
    assert data["thigh_time_constants"].attrs["units"] == "s"
    for missing in ("time_constants", "time_shares"):
        write_dataset(path, data.drop_vars(f"thigh_{missing}"), "prior", {})
        with says(InputError, f"{path}: not a whole prior file ('{missing}'). Learn the prior again."):
            load_prior(path)

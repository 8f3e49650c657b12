"""The exact Gaussian process: what it learns, whom it covers, and what it refuses."""

from __future__ import annotations

import warnings
from dataclasses import fields, replace

import numpy as np
import pytest
from numpy.random import Generator
from scipy.stats import t as student

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, NotDeterminedError
from sta_prior.prior.exact_gp import ExactSettings, fit_exact
from sta_prior.prior.exact_model import ExactFit, noise_factor, thinned
from sta_prior.prior.hierarchy import unison_covariance
from sta_prior.prior.statistics import SegmentFrames

KNEE = 1
RATE = 50.0


def covariance(generator: Generator, size: int) -> FloatArray:
    root = generator.standard_normal((size, 2 * size))
    return np.asarray(root @ root.T / (2 * size))


def drives(flexion: FloatArray) -> FloatArray:
    return np.stack([flexion, np.tanh(2 * flexion), np.sin(1.5 * flexion)], axis=-1)


def drawn(
    generator: Generator, subjects: int, population: FloatArray, markers: FloatArray, first: int = 0,
    bone_sd: float = 0.0, trials: int = 2,
) -> list[SegmentFrames]:  # fmt: skip
    """Trials of a mechanism that the process does not contain: three drives of flexion, AR(1) residual."""
    frames, n = 70, markers.shape[0]
    root = np.linalg.cholesky(markers)
    result = []
    for subject in range(subjects):
        own = 0.7 * generator.standard_normal((3, n)) @ root.T
        reference = generator.uniform(0.0, 0.15, (2, 3))
        for trial in range(trials):
            weights = population + own + 0.3 * generator.standard_normal((3, n)) @ root.T
            time = np.arange(frames) / RATE
            angles = np.zeros((frames, 2, 3))
            angles[:, KNEE, 0] = 0.55 + 0.5 * np.sin(2 * np.pi * time / 1.3 + generator.uniform(0, 6.28))
            drive = drives(angles[:, KNEE, 0]) - drives(reference[KNEE, 0])
            decay = np.exp(-1 / RATE / 0.05)
            noise = 0.0015 * generator.standard_normal((frames, n))
            for frame in range(1, frames):
                noise[frame] = decay * noise[frame - 1] + np.sqrt(1 - decay**2) * noise[frame]
            noise += bone_sd * generator.standard_normal((frames, n))
            bone = np.broadcast_to(bone_sd**2 * np.eye(n), (frames, n, n))
            shown = drive @ weights + noise
            result.append(
                SegmentFrames(f"S{first + subject}", f"t{trial}", angles, reference, shown, bone, time)
            )
    return result


def population(generator: Generator, outputs: int = 6) -> tuple[FloatArray, FloatArray]:
    markers = 0.006**2 * covariance(generator, outputs) + 0.003**2 * unison_covariance(outputs, 0.9)
    return 1.2 * generator.standard_normal((3, outputs)) @ np.linalg.cholesky(markers).T, markers


@pytest.fixture(scope="module")
def small() -> tuple[list[SegmentFrames], ExactFit]:
    generator = np.random.default_rng(21)
    frames = drawn(generator, 5, *population(generator), bone_sd=0.002)
    return frames, fit_exact(frames, (KNEE,))


def test_the_fit_finds_the_residual_without_the_noise_of_the_bone_truth(
    small: tuple[list[SegmentFrames], ExactFit],
) -> None:
    _, fit = small
    observed = np.sqrt(np.diag(fit.observed_residual).mean())
    # Root of the mean over 6 outputs of about 70 frames, and a little of the weak prior: within 12 %.
    assert observed == pytest.approx(np.hypot(0.0015, 0.002), rel=0.12)
    assert np.sqrt(np.diag(fit.residual).mean()) == pytest.approx(0.0015, rel=0.2)
    assert fit.stop_reason == "log likelihood changed by less than 0.0001 a value"
    assert fit.levels[:3].sum() == pytest.approx(1.0)


def test_the_fit_is_a_maximum_over_the_covariances_of_the_markers(
    small: tuple[list[SegmentFrames], ExactFit],
) -> None:
    """Any small change of M or Σ lowers the likelihood times the weak inverse-Wishart priors."""
    frames, first = small
    fit = fit_exact(frames, (KNEE,), start=first, settings=ExactSettings(tolerance=1e-7))
    generator = np.random.default_rng(8)
    n = fit.outputs.shape[0]
    size = float((fit.displacement**2).mean())
    weak = {
        "outputs": 0.45 * size * unison_covariance(n),
        "observed_residual": 0.1 * size * unison_covariance(n, 0.5),
    }

    def objective(changed: ExactFit) -> float:
        total = changed.gaussian.log_likelihood()
        for name, centre in weak.items():
            matrix = getattr(changed, name)
            pull = np.linalg.slogdet(matrix)[1] + np.trace(np.linalg.solve(matrix, centre))
            total -= 0.5 * (0.5 * n) * float(pull)
        return total

    best = objective(fit)
    for name in weak:
        root = np.linalg.cholesky(getattr(fit, name))
        for _ in range(4):
            turn = generator.standard_normal((n, n))
            way = (turn + turn.T) / np.linalg.norm(turn + turn.T)
            for step in (-0.01, 0.01):
                changed = replace(fit, **{name: root @ (np.eye(n) + step * way) @ root.T})
                assert objective(changed) < best


def test_the_fit_is_a_maximum_over_the_parameters_of_the_angles(
    small: tuple[list[SegmentFrames], ExactFit],
) -> None:
    """Any change of a log parameter by 0.1 lowers the likelihood times the weak log-normal priors."""
    fit = fit_exact(small[0], (KNEE,), settings=ExactSettings(tolerance=1e-7, maximum_iterations=40))
    half = 0.5 * np.ptp(fit.reach, axis=1)
    centre = np.log([1.0, *half, 1.0, 0.2, 0.05])
    width = np.array([1.0, 0.7, 1.0, 1.0, 1.5])
    theta = np.log([fit.wave, *fit.lengths, *fit.levels[1:] / fit.levels[0]])

    def objective(theta: FloatArray) -> float:
        ratios = np.exp(theta[2:])
        changed = replace(
            fit,
            wave=float(np.exp(theta[0])),
            lengths=np.exp(theta[1:2]),
            levels=np.array([1.0, *ratios]) / (1.0 + ratios[0] + ratios[1]),
        )
        away = (theta - centre) / width
        return changed.gaussian.log_likelihood() - 0.5 * float(away @ away)

    best = objective(theta)
    for index in range(theta.size):
        for step in (-0.1, 0.1):
            assert objective(theta + step * np.eye(theta.size)[index]) < best


def test_the_fit_holds_nothing_but_arrays_numbers_and_texts(
    small: tuple[list[SegmentFrames], ExactFit],
) -> None:
    for item in fields(small[1]):
        value = getattr(small[1], item.name)
        texts = isinstance(value, tuple) and all(isinstance(text, str) for text in value)
        assert texts or isinstance(value, np.ndarray | float | int | str), item.name
        if isinstance(value, np.ndarray):
            assert value.dtype.kind in "fi"


def test_a_fit_rebuilt_from_its_arrays_predicts_the_same(
    small: tuple[list[SegmentFrames], ExactFit],
) -> None:
    frames, fit = small
    again = ExactFit(**{item.name: getattr(fit, item.name) for item in fields(fit)})
    first, second = (
        one.artifact(frames[0].reference_angles).moments(frames[0].angles) for one in (fit, again)
    )
    np.testing.assert_array_equal(first.mean, second.mean)


def test_a_refit_keeps_what_belongs_to_the_angles(small: tuple[list[SegmentFrames], ExactFit]) -> None:
    frames, fit = small
    rest = [item for item in frames if item.subject != "S0"]
    again = fit_exact(rest, (KNEE,), start=fit)
    assert again.subject_names == ("S1", "S2", "S3", "S4")
    np.testing.assert_allclose(again.lengths, fit.lengths)
    np.testing.assert_allclose(again.levels, fit.levels)
    np.testing.assert_array_equal(again.time_constants, fit.time_constants)
    np.testing.assert_array_equal(again.time_shares, fit.time_shares)
    assert again.log_likelihood != fit.log_likelihood


def test_left_out_subjects_are_covered_as_well_as_eight_subjects_allow() -> None:
    """Coverage at 90 %: nominal at best, Student's t for seven degrees of freedom at worst.

    A plug-in interval from N subjects covers 2 T(1.645/√(1 + 1/N)) − 1 of new ones, T with N − 1 degrees of
    freedom (common practice, no source). Subjects count, so the standard error is over left-out subjects.
    """
    hits = []
    for seed in (30, 31, 32):
        generator = np.random.default_rng(seed)
        mean, markers = population(generator)
        fit = fit_exact(drawn(generator, 8, mean, markers, trials=1), (KNEE,))
        for item in drawn(generator, 12, mean, markers, first=100, trials=1):
            moments = fit.artifact(item.reference_angles).moments(item.angles)
            sd = np.sqrt(np.einsum("faa->fa", moments.covariance))
            hits.append(float((np.abs(item.displacement - moments.mean) < 1.645 * sd).mean()))
    error = 2.6 * float(np.std(hits, ddof=1)) / np.sqrt(len(hits))
    worst = 2.0 * float(student.cdf(1.645 / np.sqrt(1.0 + 1.0 / 8.0), 7)) - 1.0
    assert worst - error < np.mean(hits) < 0.9 + error


def test_one_subject_leaves_the_spread_between_subjects_to_the_weak_prior() -> None:
    generator = np.random.default_rng(5)
    fit = fit_exact(drawn(generator, 1, *population(generator)), (KNEE,))
    assert 0.05 < fit.levels[1] < 0.95


def test_frames_are_thinned_within_windows() -> None:
    window = np.repeat([0.0, 1.0], [10, 3])
    np.testing.assert_array_equal(thinned(window, 0.02, 0.08), [0, 4, 8, 11])
    np.testing.assert_array_equal(thinned(window, 0.02, 0.01), np.arange(13))
    assert thinned(np.zeros(0), 0.02, 0.08).size == 0


def test_a_frame_of_noisier_bone_truth_counts_less() -> None:
    bone = np.stack([np.zeros((3, 3)), np.eye(3), 2.0 * np.eye(3)])
    np.testing.assert_allclose(noise_factor(2.0 * np.eye(3), np.eye(3), bone), [0.5, 1.0, 1.5])
    assert noise_factor(np.eye(3), np.eye(3), bone)[0] == 0.25


def test_a_segment_without_a_joint_is_refused(small: tuple[list[SegmentFrames], ExactFit]) -> None:
    with pytest.raises(InputError) as caught:
        fit_exact(small[0], ())
    assert str(caught.value) == (
        "exact-gp: no joint touches the segment, so no angle can drive it. Add a joint."
    )


def test_too_many_frames_are_refused(small: tuple[list[SegmentFrames], ExactFit]) -> None:
    count = small[1].subject.size
    with pytest.raises(InputError) as caught:
        fit_exact(small[0], (KNEE,), settings=ExactSettings(most_frames=7))
    assert str(caught.value) == (
        f"exact-gp: expected at most 7 frames after thinning, got {count}. "
        "Use reduced-rank-gp, which sums frames instead of keeping them."
    )


def test_a_subject_who_never_shows_all_markers_is_refused(
    small: tuple[list[SegmentFrames], ExactFit],
) -> None:
    frames = list(small[0])
    for index, item in enumerate(frames):
        if item.subject == "S3":
            hidden = item.displacement.copy()
            hidden[:, 3:] = np.nan
            frames[index] = replace(item, displacement=hidden)
    with pytest.raises(InputError) as caught:
        fit_exact(frames, (KNEE,))
    assert str(caught.value) == (
        "exact-gp, S3: no frame shows all markers of the segment. "
        "Use reduced-rank-gp, which sums frames instead of keeping them."
    )


def test_a_parameter_on_its_bound_is_an_error(small: tuple[list[SegmentFrames], ExactFit]) -> None:
    narrow = ExactSettings(length_range=(0.01, 0.02))
    half = 0.5 * float(np.ptp(small[1].reach))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        with pytest.raises(NotDeterminedError) as caught:
            fit_exact(small[0], (KNEE,), settings=narrow)
    assert str(caught.value) == (
        "exact-gp, length scale 1 in rad: expected inside its bounds "
        f"{0.01 * half:.3g} to {0.02 * half:.3g}, got {0.02 * half:.3g}. "
        "Pair frames of a wider range of flexion, or use reduced-rank-gp."
    )

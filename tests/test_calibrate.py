"""Simulation-based calibration of the smoother (Talts et al. 2018), at reduced size, and its own faults."""

from __future__ import annotations

import csv
import math
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import norm

from sta_prior import se3
from sta_prior.angles import JointConvention
from sta_prior.calibrate import Calibration, Recipe, calibrate
from sta_prior.calibrate import command as command_module
from sta_prior.calibrate.command import judge, main, table
from sta_prior.calibrate.draw import (
    CENTRES,
    MARKER_SD,
    STEP,
    TRAVEL_SD,
    draw_motion,
    draw_residual,
    draw_start,
)
from sta_prior.calibrate.joined import draw_joined
from sta_prior.calibrate.ranks import QUANTITIES, rank_one
from sta_prior.calibrate.uniformity import coverage_range, judge_uniformity, simultaneous_band
from sta_prior.errors import InputError
from sta_prior.solve.motion import MotionPrior
from sta_prior.solve.terms import JointProblem, joint_travel

SMALL = Recipe(frames=40)
TRIALS = 60


@cache
def small(joint: str = "free", decay_time: float = 0.1) -> Calibration:
    recipe = replace(SMALL, joint="soft" if joint == "soft" else "free", decay_time=decay_time)
    return calibrate(TRIALS, 1, recipe)


def narrowed(found: Calibration, factor: float) -> Calibration:
    """What posterior SDs times a factor would have given."""
    ranked = [replace(own, places=norm.cdf(norm.ppf(own.places) / factor)) for own in found.ranked]
    return judge(tuple(ranked))


def test_the_smoother_is_calibrated_on_its_own_model() -> None:
    found = small()
    assert [name for name, own in zip(QUANTITIES, found.judged, strict=True) if not own.uniform] == []
    assert all(own.converged for own in found.ranked)


def test_intervals_that_are_too_narrow_are_found_out() -> None:
    assert narrowed(small(), 1.0).uniform
    assert not narrowed(small(), 0.7).uniform


def test_a_residual_that_lasts_longer_than_the_prior_says_is_found_out() -> None:
    assert not small(decay_time=0.5).uniform


def test_the_same_seed_gives_the_same_places_whatever_the_number() -> None:
    again = calibrate(20, 1, SMALL)
    np.testing.assert_array_equal(again.places, small().places[:20])
    assert not np.array_equal(calibrate(20, 2, SMALL).places, again.places)


def test_the_band_is_left_as_often_as_it_says() -> None:
    """Simulation; the binomial range of 4,000 samples."""
    band = simultaneous_band(60, 0.1)
    values = np.sort(np.random.default_rng(3).random((4000, 60)), axis=1)
    counts = np.stack([np.searchsorted(own, band.points, side="right") for own in values])
    left = ((counts < band.low) | (counts > band.high)).any(axis=1).mean()
    low, high = coverage_range(4000, 0.1, 0.999)
    assert low <= left <= high


def test_what_is_uniform_and_what_is_not() -> None:
    band = simultaneous_band(200, 0.01)
    even = (np.arange(200) + 0.5) / 200
    judged = judge_uniformity(even, band)
    assert judged.uniform
    assert judged.covered == (0.5, 0.9, 0.95)
    assert judged.deviation <= 0.005
    assert not judge_uniformity(even**1.5, band).uniform
    shifted = judge_uniformity(np.clip(even - 0.15, 0.0, 1.0), band)
    assert shifted.deviation == pytest.approx(0.15, abs=0.01)
    assert shifted.deviation > shifted.bound


def test_coverage_that_chance_allows() -> None:
    """Binomial quantiles of 100 at 0.9, from a table: 84 and 95."""
    assert coverage_range(100, 0.9) == (0.84, 0.95)


def test_drawn_motion_has_the_density_it_was_given() -> None:
    """Variance of the last velocity and position of white noise on acceleration: q·t and q·t³/3."""
    rng = np.random.default_rng(5)
    density = np.full(6, 1e-4)
    motion = MotionPrior(2, STEP, density)
    drawn = [draw_motion(rng, motion, np.eye(4), np.zeros(6), 51) for _ in range(300)]
    tangent = se3.log(np.stack([poses[-1] for poses, _ in drawn]))
    velocity = np.stack([velocities[-1] for _, velocities in drawn])
    # 1,800 values: a relative SD of a variance of 0.033.
    assert (tangent**2).mean() == pytest.approx(1e-4 * 0.5**3 / 3, rel=0.13)
    assert (velocity**2).mean() == pytest.approx(1e-4 * 0.5, rel=0.13)


@pytest.mark.parametrize(("noise", "lag"), [("model", 0.0), ("white", -1.0)])
def test_noise_as_the_model_has_it_and_white_noise(noise: str, lag: float) -> None:
    """Innovations of a residual of nearly nothing: white, or correlated by −ρσ² with their neighbours."""
    recipe = Recipe(frames=20000, noise="model" if noise == "model" else "white")
    drawn = draw_residual(np.random.default_rng(7), 1e-16 * np.eye(2), recipe)
    decay = math.exp(-STEP / recipe.decay_time)
    innovations = drawn[1:] - decay * drawn[:-1]
    square = MARKER_SD**2
    assert (innovations**2).mean() == pytest.approx((1.0 + decay**2) * square, rel=0.03)
    along = (innovations[1:] * innovations[:-1]).mean()
    assert along == pytest.approx(lag * decay * square, abs=0.03 * square)


def test_a_soft_joint_travels_as_far_as_it_may() -> None:
    rng = np.random.default_rng(11)
    motions = [MotionPrior(2, STEP, Recipe().density)] * 2
    joint = JointProblem(0, 1, JointConvention("knee", "right"), *CENTRES, TRAVEL_SD)
    travels, weights = [], []
    for _ in range(40):
        first, velocity = draw_start(rng, 1.0)
        drawn = [draw_motion(rng, *own, 40) for own in zip(motions, first, velocity, strict=True)]
        poses, weight = draw_joined(
            rng, motions, joint, *(np.stack(own, axis=1) for own in zip(*drawn, strict=True))
        )
        np.testing.assert_allclose(poses[0, 0], first[0], atol=1e-7)
        travels.append(joint_travel(joint, poses)[0][[0, 20, 39]])
        weights.append(weight)
    # Motion adds what it knows of the joint's travel, so that it comes out somewhat smaller.
    assert 0.7 * TRAVEL_SD < np.std(travels) < 1.15 * TRAVEL_SD
    assert np.isfinite(weights).all()


def test_a_soft_joint_approximately() -> None:
    found = small(joint="soft")
    assert found.uniform


def test_bounded_information_gives_wider_intervals() -> None:
    recipe = Recipe(frames=150)
    full, bounded = (rank_one(1, 0, recipe, limit).sd for limit in (math.inf, 0.5))
    assert (bounded > full).all()


def test_the_command_prints_a_table_and_writes_places(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "places.csv"
    assert main(["--trials", "20", "--frames", "20", "--out", str(path)]) == 0
    out = capsys.readouterr().out
    assert out.endswith("Calibrated.\n")
    assert "knee flexion" in out
    lines = path.read_text(encoding="utf-8").splitlines()
    rows = list(csv.DictReader(lines[1:]))
    assert len(rows) == 20 * 3 * len(QUANTITIES)
    assert sum(row["judged"] == "1" for row in rows) == 20 * len(QUANTITIES)


def test_the_command_gives_no_verdict_where_none_is_due(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    asked: list[float] = []

    def made(trials: int, seed: int, recipe: Recipe, *, constant_time: float, workers: int) -> Calibration:
        asked.append(constant_time)
        assert recipe.frames == (200 if math.isfinite(constant_time) else 60)
        return narrowed(small(), 0.7)

    monkeypatch.setattr(command_module, "calibrate", made)
    assert main(["--constants", "bounded"]) == 0
    assert "alibrated" not in capsys.readouterr().out
    assert main(["--noise", "white"]) == 0
    assert main([]) == 1
    out = capsys.readouterr().out
    assert out.endswith("Not calibrated.\n")
    assert "NOT UNIFORM" in out
    assert asked == [1.0, math.inf, math.inf]


def test_a_trial_that_did_not_converge_is_counted() -> None:
    found = small()
    stopped = (replace(found.ranked[0], converged=False), *found.ranked[1:])
    assert "did not converge in 1." in table(replace(found, ranked=stopped), True)


@pytest.mark.parametrize(
    ("arguments", "text"),
    [
        (["--trials", "19"], "--trials: expected 20 or more, got 19.\n"),
        (["--frames", "12"], "--frames: expected 20 or more, got 12.\n"),
        (["--seed", "-3"], "--seed: expected 0 or more, got -3.\n"),
        (["--workers", "0"], "--workers: expected 1 or more, got 0.\n"),
        (["--artifact", "-2"], "--artifact: expected a number above 0, got -2.\n"),
    ],
)
def test_bad_arguments_are_refused(
    arguments: list[str], text: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(arguments) == 2
    assert capsys.readouterr().err == text


def test_a_file_in_no_folder_is_refused(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "gone" / "places.csv"
    assert main(["--out", str(path)]) == 2
    assert (
        capsys.readouterr().err == f"{path}: expected a file in a folder that exists, got no such folder.\n"
    )


def test_unknown_arguments_are_refused(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as caught:
        main(["--constants", "some"])
    assert caught.value.code == 2
    assert "--constants" in capsys.readouterr().err


def test_the_function_refuses_too_few_trials() -> None:
    with pytest.raises(InputError) as caught:
        calibrate(7, 1)
    assert str(caught.value) == "--trials: expected 20 or more, got 7."

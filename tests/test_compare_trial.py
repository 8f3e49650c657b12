"""One solution against bone truth: errors of known size, coverage, frames, matching, what is left out."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from made_solutions import (
    CENTRE,
    DOF,
    SEGMENTS,
    TIMES,
    keep,
    knee_angles,
    made_solution,
    made_study,
    walking_poses,
)

from sta_prior.compare import (
    Comparison,
    Score,
    binomial_range,
    bone_truth,
    compare_solutions,
)
from sta_prior.se3 import adjoint, exp, make_pose
from sta_prior.study import read_study


def one_trial(folder: Path, solution: xr.Dataset, frames: str = "hidden", **study: object) -> Comparison:
    made = made_study(folder, {"K01": ["stairs-1"]}, **study)  # type: ignore[arg-type]
    keep(folder / "out", "K01", "stairs-1", solution)
    return compare_solutions(folder / "out", made, frames=frames)  # type: ignore[arg-type]


def score_of(comparison: Comparison, part: str, component: str) -> Score:
    found = [score for score in comparison.table if (score.part, score.component) == (part, component)]
    assert len(found) == 1
    return found[0]


def test_a_perfect_solution_has_no_error(tmp_path: Path) -> None:
    comparison = one_trial(tmp_path, made_solution(TIMES, walking_poses(TIMES)))
    for score in comparison.table:
        assert score.frames == len(TIMES)
        if score.unit != "1":
            assert score.estimate.peak < 2e-6  # the table holds six digits
            assert score.coverage == (1.0, 1.0, 1.0)
    assert comparison.invented
    assert {score.part for score in comparison.table} == {"thigh", "shank", "knee"}


def test_a_constant_offset_is_bias_and_not_tracking_error(tmp_path: Path) -> None:
    offset = np.zeros((1, 2, 6))
    offset[0, 0] = [math.radians(3.0), 0.0, 0.0, 0.0, 0.004, 0.0]
    rigid = np.zeros((1, 2, 6))
    rigid[0, 0] = [math.radians(6.0), 0.0, 0.0, 0.0, 0.008, 0.0]
    solution = made_solution(TIMES, walking_poses(TIMES), error=offset, rigid_error=rigid)
    comparison = one_trial(tmp_path, solution)
    turn = score_of(comparison, "thigh", "rx")
    assert math.degrees(turn.estimate.bias) == pytest.approx(3.0, abs=1e-4)
    assert math.degrees(turn.estimate.spread) < 1e-4
    assert turn.ratio == pytest.approx(0.5, abs=1e-4)
    shift = score_of(comparison, "thigh", "ty")
    assert 1000 * shift.estimate.bias == pytest.approx(4.0, abs=1e-3)
    whole = score_of(comparison, "thigh", "rotation")
    assert math.degrees(whole.estimate.rms) == pytest.approx(3.0, abs=1e-4)
    assert math.degrees(whole.rigid.peak) == pytest.approx(6.0, abs=1e-4)
    origin = score_of(comparison, "thigh", "origin")
    moved = np.linalg.norm(exp(offset[0, 0])[:3, 3])
    assert origin.estimate.rms == pytest.approx(moved, abs=1e-6)
    centre = score_of(comparison, "thigh", "knee centre")
    away = exp(offset[0, 0]) @ np.append(CENTRE["thigh"], 1.0)
    assert centre.estimate.rms == pytest.approx(np.linalg.norm(away[:3] - CENTRE["thigh"]), abs=1e-6)
    assert score_of(comparison, "shank", "origin").estimate.rms < 1e-6
    assert score_of(comparison, "shank", "rx").frames_effective >= 1.0


def test_angles_are_scored_with_their_range(tmp_path: Path) -> None:
    poses = walking_poses(TIMES)
    error = np.zeros((len(TIMES), 2, 6))
    error[:, 1, 2] = 0.05 * np.sin(2 * np.pi * TIMES)
    solution = made_solution(TIMES, poses, error=error)
    comparison = one_trial(tmp_path, solution)
    true, found = knee_angles(poses)[:, 0], solution["angle"].values[:, 0, 0]
    flexion = score_of(comparison, "knee", "flexion").estimate
    assert flexion.rms == pytest.approx(float(np.sqrt(np.mean((found - true) ** 2))), abs=1e-6)
    assert flexion.range_error == pytest.approx(np.ptp(found) - np.ptp(true), abs=2e-6)
    assert math.isnan(score_of(comparison, "thigh", "rx").estimate.range_error)
    assert [score.component for score in comparison.table if score.part == "knee"] == list(DOF)


def posterior_draws(sd: np.ndarray, count: int, seed: int) -> np.ndarray:
    """Errors that a right posterior makes: truth = estimate · Exp(ξ), so estimate = truth · Exp(−ξ)."""
    return -np.random.default_rng(seed).standard_normal((count, 2, 6)) * sd


@pytest.mark.parametrize(("stated", "right"), [(1.0, True), (0.6, False)])
def test_coverage_tells_right_intervals_from_narrow_ones(tmp_path: Path, stated: float, right: bool) -> None:
    times = np.arange(0.0, 8.0, 0.01)
    sd = np.array([0.03, 0.02, 0.04, 0.004, 0.006, 0.005])
    noise = np.array([np.radians(0.8)] * 3 + [0.0015] * 3)
    rng = np.random.default_rng(7)
    true = walking_poses(times)
    measured = true @ exp(rng.standard_normal((len(times), 2, 6)) * noise)
    solution = made_solution(times, true, error=posterior_draws(sd, len(times), 8), sd=stated * sd)
    comparison = one_trial(tmp_path, solution, bone_times=times, poses=measured, mm=1.5, deg=0.8)
    low, high = binomial_range(len(times), 0.90, 0.999)
    # Both covariances enter: variance predicted = posterior + bone truth.
    expected = float(np.sqrt(np.sum((stated * sd[:3]) ** 2 + noise[:3] ** 2)))
    assert score_of(comparison, "thigh", "rotation").predicted_sd == pytest.approx(expected, rel=1e-6)
    for part in SEGMENTS:
        for component in ("rotation", "origin", "knee centre", "pose", "rx", "tz"):
            score = score_of(comparison, part, component)
            if right:
                assert low <= score.coverage[1] <= high
                assert score.normalised_error == pytest.approx(1.0, abs=0.15)
            else:
                assert score.coverage[1] < low
                assert score.normalised_error > 1.5


def test_a_pose_known_best_at_the_joint_is_judged_there(tmp_path: Path) -> None:
    # Drawn at the knee centre, where the position is sharp; rotation and origin are then correlated.
    times = np.arange(0.0, 8.0, 0.01)
    sd = np.array([0.06, 0.02, 0.05, 0.001, 0.002, 0.0015])
    to_centre = make_pose(np.eye(3), CENTRE["thigh"])
    transport = adjoint(to_centre)
    draws = posterior_draws(sd, len(times), 11) @ transport.T
    solution = made_solution(times, walking_poses(times), error=draws)
    solution["pose_covariance"][:] = transport @ np.diag(sd**2) @ transport.T
    comparison = one_trial(tmp_path, solution, bone_times=times, mm=1e-3, deg=1e-3)
    low, high = binomial_range(len(times), 0.90, 0.999)
    centre, origin = (score_of(comparison, "thigh", name) for name in ("knee centre", "origin"))
    assert low <= centre.coverage[1] <= high
    assert low <= origin.coverage[1] <= high
    assert centre.predicted_sd == pytest.approx(math.sqrt(np.sum(sd[3:] ** 2)), rel=1e-3)
    assert origin.predicted_sd > 5 * centre.predicted_sd


def test_the_interval_of_an_angle_holds_both_variances(tmp_path: Path) -> None:
    solution = made_solution(TIMES, walking_poses(TIMES), angle_sd=0.01)
    comparison = one_trial(tmp_path, solution, deg=1.2)
    expected = math.hypot(0.01, math.radians(1.2) * math.sqrt(2))
    assert score_of(comparison, "knee", "adduction").predicted_sd == pytest.approx(expected, rel=1e-6)


def test_truth_noise_of_both_bones_enters_the_angle(tmp_path: Path) -> None:
    study = made_study(tmp_path, {"K01": ["stairs-1"]}, deg=0.7)
    truth = bone_truth(study.trial("K01", "stairs-1"), TIMES)
    adduction = np.abs(truth.angles[:, 0, 1])
    # √2 · sd for the floating-axis angle; the outer two grow with adduction as 1/cos.
    assert np.degrees(truth.angle_sd[:, 0, 1]) == pytest.approx(np.full(len(TIMES), 0.7 * math.sqrt(2)))
    assert np.degrees(truth.angle_sd[:, 0, 0]) == pytest.approx(0.7 * math.sqrt(2) / np.cos(adduction))
    rng = np.random.default_rng(9)
    pose = walking_poses(TIMES[:1])
    draws = pose @ exp(
        np.concatenate(
            [np.radians(0.7) * rng.standard_normal((20_000, 2, 3)), np.zeros((20_000, 2, 3))], axis=-1
        )
    )
    assert knee_angles(draws).std(axis=0) == pytest.approx(truth.angle_sd[0, 0], rel=0.03)


def test_scores_do_not_depend_on_the_lab_frame(tmp_path: Path) -> None:
    rng = np.random.default_rng(10)
    error = 0.02 * rng.standard_normal((len(TIMES), 2, 6))
    moved = exp(np.array([0.4, -1.1, 0.7, 2.0, -3.0, 1.0])) @ walking_poses(TIMES)
    here = one_trial(tmp_path / "a", made_solution(TIMES, walking_poses(TIMES), error=error))
    there = one_trial(tmp_path / "b", made_solution(TIMES, moved, error=error), poses=moved)
    for first, second in zip(here.table, there.table, strict=True):
        assert second.normalised_error == pytest.approx(first.normalised_error, rel=1e-3)
        if first.unit != "1":
            assert second.estimate.rms == pytest.approx(first.estimate.rms, rel=1e-3)
            assert second.estimate.bias == pytest.approx(first.estimate.bias, abs=1e-5)


def test_truth_is_restated_in_the_study_s_bone_frame(tmp_path: Path) -> None:
    up = 'y = { from = ["LEP", "MEP"], to = ["HJC"] }'
    recipe = f'{{ origin = ["HJC"], {up}, z = {{ from = ["MEP"], to = ["LEP"] }} }}'
    study = made_study(tmp_path, {"K01": ["stairs-1"]}, thigh_frame=recipe)
    offset = study.trial("K01", "stairs-1").subject.reference().frame_offset
    assert np.abs(offset[0] - np.eye(4)).max() > 0.04  # the recipe turns the imaging frame by 2.9°
    keep(tmp_path / "out", "K01", "stairs-1", made_solution(TIMES, walking_poses(TIMES) @ offset))
    comparison = compare_solutions(tmp_path / "out", study)
    assert score_of(comparison, "thigh", "rotation").estimate.peak < 2e-6
    assert score_of(comparison, "knee", "flexion").estimate.peak < 2e-6


def test_bone_out_of_view_and_missing_rigid_fit_are_left_out(tmp_path: Path) -> None:
    poses = walking_poses(TIMES)
    seen = poses.copy()
    seen[30:, 1] = np.nan
    rigid = np.full((1, 2, 6), 0.01)
    solution = made_solution(TIMES, poses, rigid_error=rigid)
    solution["rigid_rotation"][:10] = np.nan
    solution["rigid_position"][:10] = np.nan
    solution["angle_rigid"][:10] = np.nan
    comparison = one_trial(tmp_path, solution, poses=seen)
    assert score_of(comparison, "thigh", "rx").frames == 100
    assert score_of(comparison, "thigh", "rx").rigid.frames == 90
    assert score_of(comparison, "shank", "rx").frames == 30
    assert score_of(comparison, "knee", "flexion").frames == 30
    assert score_of(comparison, "knee", "flexion").rigid.frames == 20


def test_frames_that_informed_the_prior_are_not_scored(tmp_path: Path) -> None:
    error = np.zeros((len(TIMES), 2, 6))
    error[60:, :, 0] = 0.1
    solution = made_solution(TIMES, walking_poses(TIMES), error=error)
    solution["informed"][:60] = 1
    hidden = one_trial(tmp_path, solution)
    turn = score_of(hidden, "thigh", "rx")
    assert (turn.frames, turn.frames_informed) == (40, 60)
    assert turn.estimate.rms == pytest.approx(0.1, abs=1e-6)
    assert any(note.startswith("60 frames are left out because bone truth") for note in hidden.notes)
    study = read_study(tmp_path / "study.toml")
    informed = compare_solutions(tmp_path / "out", study, frames="informed")
    assert score_of(informed, "thigh", "rx").estimate.rms < 1e-6
    assert score_of(informed, "thigh", "rx").frames == 60
    everything = compare_solutions(tmp_path / "out", study, frames="all")
    assert score_of(everything, "thigh", "rx").frames == 100


def test_a_window_of_truth_between_frames_is_matched_and_said_so(tmp_path: Path) -> None:
    window = np.arange(0.303, 0.6, 0.02)
    solution = made_solution(TIMES, walking_poses(TIMES))
    comparison = one_trial(tmp_path, solution, bone_times=window)
    assert score_of(comparison, "thigh", "rx").frames == len(window)
    assert any(
        note == "Bone-truth frames lie up to 3 ms from the solution frame they are held against "
        "(K01 stairs-1); fast motion turns that into error."
        for note in comparison.notes
    )

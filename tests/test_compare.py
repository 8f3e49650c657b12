"""Comparison over trials: kernels of the scores, averages, tables, notes, refusals."""

from __future__ import annotations

import csv
import io
import json
import math
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from made_solutions import TIMES, keep, made_solution, made_study, walking_poses
from rich.console import Console
from scipy import stats

from sta_prior.compare import (
    Comparison,
    Errors,
    Score,
    binomial_range,
    bone_truth,
    compare_solutions,
    effective_frames,
    format_comparison,
    normalised_square,
    summarise,
)
from sta_prior.compare.scores import coverage, describe_errors, rms_ratio
from sta_prior.compare.truth import match_times
from sta_prior.errors import InputError, MismatchError, StaPriorWarning
from sta_prior.study import read_study


def test_normalised_square_matches_a_dense_solve_and_ignores_units() -> None:
    rng = np.random.default_rng(1)
    root = rng.standard_normal((20, 6, 6))
    covariance = root @ np.swapaxes(root, -1, -2) + 0.1 * np.eye(6)
    error = rng.standard_normal((20, 6))
    expected = np.einsum("ni,ni->n", error, np.linalg.solve(covariance, error[..., None])[..., 0])
    assert normalised_square(error, covariance) == pytest.approx(expected, rel=1e-9)
    scale = np.array([1, 1, 1, 1e-6, 1e-6, 1e-6])
    scaled = normalised_square(error * scale, covariance * np.outer(scale, scale))
    assert scaled == pytest.approx(expected, rel=1e-9)


def test_normalised_square_is_missing_where_it_is_not_defined() -> None:
    covariance = np.stack(
        [np.eye(2), np.ones((2, 2)), np.diag([1.0, 0.0]), np.full((2, 2), np.nan), np.eye(2)]
    )
    error = np.array([[1.0, 2.0], [1.0, 2.0], [1.0, 2.0], [1.0, 2.0], [1.0, np.nan]])
    assert np.isnan(normalised_square(error, covariance)).tolist() == [False, True, True, True, True]


def test_effective_frames_of_an_autoregressive_series() -> None:
    # 100 frames at correlation 0.9 are worth 5.3: Bayley & Hammersley (1946).
    rng = np.random.default_rng(2)
    series = np.zeros(60_000)
    for index in range(1, len(series)):
        series[index] = 0.9 * series[index - 1] + rng.standard_normal()
    joined = np.ones(len(series) - 1, dtype=bool)
    found = effective_frames(series[:, None], joined) / len(series)
    assert found == pytest.approx(5.263 / 100, rel=0.05)
    # Only neighbours in time count: cut into pairs whose second frame repeats the first.
    pairs = np.repeat(rng.standard_normal(2000), 2)[:, None]
    cut = np.arange(len(pairs) - 1) % 2 == 1
    assert effective_frames(pairs, cut) > 0.9 * len(pairs)
    assert effective_frames(pairs, ~cut) < 0.05 * len(pairs)


def test_effective_frames_at_the_ends() -> None:
    assert effective_frames(np.zeros((0, 1)), np.zeros(0, bool)) == 0.0
    assert effective_frames(np.ones((1, 1)), np.zeros(0, bool)) == 1.0
    assert effective_frames(np.full((50, 3), 0.3), np.ones(49, bool)) == 1.0


def test_errors_keep_offset_and_spread_apart() -> None:
    rng = np.random.default_rng(4)
    error = rng.standard_normal((500, 3)) * 0.1 + np.array([0.3, -0.4, 0.0])
    found = describe_errors(error)
    assert found.rms**2 == pytest.approx(found.bias_size**2 + found.spread**2, rel=1e-12)
    assert found.bias_size == pytest.approx(0.5, abs=0.02)
    moved = describe_errors(error + np.array([0.0, 0.0, 7.0]))
    assert moved.spread == pytest.approx(found.spread, rel=1e-12)
    signed = describe_errors(np.array([[-3.0], [np.nan], [-1.0]]))
    assert (signed.frames, signed.bias, signed.bias_size, signed.spread, signed.peak) == (
        2,
        -2.0,
        2.0,
        1.0,
        3.0,
    )
    assert math.isnan(describe_errors(np.full((4, 1), np.nan)).rms)


def test_ratio_uses_only_frames_that_both_have() -> None:
    error = np.array([[1.0], [1.0], [9.0]])
    rigid = np.array([[2.0], [2.0], [np.nan]])
    assert rms_ratio(error, rigid) == 0.5
    assert math.isnan(rms_ratio(error, np.zeros((3, 1))))
    assert math.isnan(rms_ratio(error, np.full((3, 1), np.nan)))


@pytest.mark.parametrize("dimension", [1, 3, 6])
def test_coverage_of_right_intervals_is_nominal(dimension: int) -> None:
    rng = np.random.default_rng(5)
    square = rng.chisquare(dimension, 4000)
    for share, level in zip(coverage(square, dimension), (0.5, 0.9, 0.95), strict=True):
        low, high = binomial_range(4000, level, 0.999)
        assert low <= share <= high


def test_binomial_range_is_the_binomial_s() -> None:
    low, high = binomial_range(20, 0.9)
    assert stats.binom.cdf(20 * low - 1, 20, 0.9) <= 0.025
    assert stats.binom.sf(20 * high, 20, 0.9) <= 0.025
    assert binomial_range(0.2, 0.9) == (0.0, 1.0)


def test_matching_takes_the_nearest_within_half_a_frame_each_once() -> None:
    solution = np.array([0.00, 0.01, 0.02, 0.03])
    frames, rows, step = match_times(solution, np.array([-0.004, 0.0012, 0.0149, 0.0151, 0.036, 0.0297]))
    assert frames.tolist() == [0, 1, 2, 3]
    assert rows.tolist() == [1, 2, 3, 5]
    assert step == pytest.approx(0.01)
    assert match_times(solution, np.array([0.0350001]))[0].size == 0
    assert match_times(np.empty(0), np.array([0.0]))[0].size == 0
    assert match_times(np.array([0.5]), np.array([0.4, 0.5]))[1].tolist() == [1]


def trial_score(subject: str, trial: str, activity: str, rms: float, ratio: float, frames: int) -> Score:
    errors = Errors(frames, -rms, rms, 0.0, rms, 2 * rms, math.nan)
    return Score(
        level="trial",
        part="knee",
        component="flexion",
        unit="rad",
        subject=subject,
        trial=trial,
        activity=activity,
        frames=frames,
        frames_effective=2.0,
        estimate=errors,
        rigid=errors,
        ratio=ratio,
        coverage=(0.5, rms, math.nan),
        normalised_error=1.0,
    )


def test_averages_run_over_trials_then_subjects_never_frames() -> None:
    table = [
        trial_score("K01", "a", "stairs", 0.1, 0.5, 10_000),
        trial_score("K01", "b", "walk", 0.3, 2.0, 10),
        trial_score("K02", "a", "stairs", 0.8, 0.25, 10),
    ]
    summary = {(s.level, s.subject or s.activity): s for s in summarise(table)}
    overall = summary["overall", ""]
    assert overall.estimate.rms == pytest.approx((0.2 + 0.8) / 2)
    assert overall.estimate.bias == pytest.approx(-(0.2 + 0.8) / 2)
    assert overall.estimate.peak == pytest.approx(1.6)
    assert overall.ratio == pytest.approx(math.sqrt(1.0 * 0.25))
    assert (overall.subjects, overall.trials, overall.frames) == (2, 3, 10_020)
    assert overall.frames_effective == 6.0
    assert math.isnan(summarise([Score("trial", "thigh", "pose", "1")])[0].frames_effective)
    assert overall.coverage[:2] == pytest.approx((0.5, 0.5))
    assert math.isnan(overall.coverage[2])
    assert math.isnan(overall.estimate.range_error)
    assert summary["activity", "stairs"].estimate.rms == pytest.approx(0.45)
    assert summary["activity", "walk"].subjects == 1
    assert summary["subject", "K01"].ratio == pytest.approx(1.0)
    assert len(summary) == 5


def two_subjects(tmp_path: Path) -> Comparison:
    study = made_study(tmp_path, {"K01": ["stairs-1", "walk-1"], "K02": ["stairs-1"]})
    poses = walking_poses(TIMES)
    for index, (subject, trial) in enumerate([("K01", "stairs-1"), ("K01", "walk-1"), ("K02", "stairs-1")]):
        error = np.full((1, 2, 6), 0.002 * (index + 1))
        keep(
            tmp_path / "out", subject, trial, made_solution(TIMES, poses, error=error, rigid_error=2 * error)
        )
    return compare_solutions(tmp_path / "out", study)


def test_csv_has_units_in_its_columns_and_blanks_for_nothing(tmp_path: Path) -> None:
    comparison = two_subjects(tmp_path)
    path = comparison.to_csv(tmp_path / "compare.csv")
    with open(path, encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert len(rows) == len(comparison.summary) + len(comparison.table)
    assert not any(cell.lower() in ("nan", "none", "inf") for row in rows for cell in row.values())
    first = next(
        row for row in rows if (row["level"], row["part"], row["component"]) == ("trial", "thigh", "rx")
    )
    assert (first["subject"], first["trial"], first["activity"]) == ("K01", "stairs-1", "stairs")
    assert float(first["bias_deg"]) == pytest.approx(math.degrees(0.002), abs=1e-4)
    assert float(first["rigid_rms_deg"]) == pytest.approx(math.degrees(0.004), abs=1e-4)
    assert first["rms_mm"] == ""
    origin = next(row for row in rows if row["component"] == "origin")
    assert origin["rms_deg"] == ""
    assert float(origin["rms_mm"]) > 1.0
    assert origin["range_error_mm"] == ""
    assert sorted(file.name for file in tmp_path.glob(".*")) == []


def test_json_is_plain_and_says_what_it_holds(tmp_path: Path) -> None:
    comparison = two_subjects(tmp_path)
    value = json.loads(comparison.to_json())
    assert value["invented_data"] == 1
    assert value["frames"] == "hidden"
    assert {row["level"] for row in value["summary"]} == {"overall", "activity", "subject"}
    assert len(value["trials"]) == len(comparison.table)
    flexion = [row for row in value["summary"] if row["component"] == "flexion" and row["level"] == "overall"]
    assert flexion[0]["rms_deg"] == pytest.approx(math.degrees(comparison_rms(comparison)), rel=1e-5)
    assert flexion[0]["rms_mm"] is None


def comparison_rms(comparison: Comparison) -> float:
    return next(
        s for s in comparison.summary if (s.level, s.component) == ("overall", "flexion")
    ).estimate.rms


def table_numbers(score: Score) -> list[float]:
    errors = (score.estimate.bias, score.estimate.spread, score.estimate.rms, score.rigid.rms)
    return [*(math.degrees(error) for error in errors), score.ratio]


def test_terminal_tables_show_every_level_and_take_names_literally(tmp_path: Path) -> None:
    comparison = two_subjects(tmp_path)
    stream = io.StringIO()
    console = Console(file=stream, width=80)
    for part in format_comparison(comparison):
        console.print(part)
    text = stream.getvalue()
    assert "INVENTED DATA. Overall: mean over trials within a subject, then over 2 subjects" in text
    for title in ("By activity", "By subject", "stairs", "walk", "K01", "K02", "internal"):
        assert title in text
    assert "Frames are no independent sample" in text
    assert "nan" not in text
    assert "…" not in text  # nothing is cut at 80 columns
    overall = comparison.summary[0]
    line = next(line for line in text.splitlines() if line.strip().startswith("thigh rotation °"))
    assert line.split()[3:] == ["300", *(f"{x:.2f}" for x in table_numbers(overall)), "100", "0.05"]
    odd = Score(level="overall", part="[red]thigh[/red]", component="rx", unit="rad")
    named = Comparison(tmp_path, "hidden", (odd,), (odd,), ("[bold]note",), (), False)
    for part in format_comparison(named):
        console.print(part)
    assert "[red]thigh[/red]" in stream.getvalue()
    assert "[bold]note" in stream.getvalue()


def test_notes_say_how_little_few_subjects_prove(tmp_path: Path) -> None:
    notes = two_subjects(tmp_path).notes
    assert any("2 subjects: a deviation that a subject keeps" in note for note in notes)
    assert any("intervals would cover 50 to 100 % of 2." in note for note in notes)
    assert any("(SD 0.5°, 0.5 mm)" in note for note in notes)


def test_folder_without_solutions_is_refused(tmp_path: Path) -> None:
    study = made_study(tmp_path, {"K01": ["stairs-1"]})
    with pytest.raises(InputError) as error:
        compare_solutions(tmp_path / "nowhere", study)
    expected = f"{tmp_path / 'nowhere'}: no such folder. Name the folder given to solve as --out."
    assert str(error.value) == expected
    with pytest.raises(InputError) as error:
        compare_solutions(tmp_path, study)
    assert str(error.value) == (
        f"{tmp_path}: no <subject>/<trial>.solution.nc in it. Run solve with it as --out first."
    )


@pytest.mark.parametrize(("key", "value"), [("clock", "estimate"), ("space", "estimate")])
def test_estimated_alignment_is_refused(tmp_path: Path, key: str, value: str) -> None:
    study = made_study(tmp_path, {"K01": ["stairs-1"]}, **{key: value})  # type: ignore[arg-type]
    with pytest.raises(MismatchError) as error:
        bone_truth(study.trial("K01", "stairs-1"), TIMES)
    assert str(error.value) == (
        f'K01, stairs-1: {key} expected "shared", got "estimate". An alignment estimated from skin markers '
        f"would enter the error; align the bone truth first, then declare the {key} shared."
    )
    keep(tmp_path / "out", "K01", "stairs-1", made_solution(TIMES, walking_poses(TIMES)))
    with pytest.raises(InputError, match="no solution can be compared: K01, stairs-1"):
        compare_solutions(tmp_path / "out", study)


def test_truth_at_another_time_is_refused(tmp_path: Path) -> None:
    study = made_study(tmp_path, {"K01": ["stairs-1"]}, bone_times=TIMES + 20.0)
    with pytest.raises(MismatchError) as error:
        bone_truth(study.trial("K01", "stairs-1"), TIMES)
    assert str(error.value) == (
        "K01, stairs-1: no bone-truth frame within half a frame (5 ms) of a solution frame, solution from "
        "0.000 to 0.990 s, bone truth from 20.000 to 20.990 s. Check that both times count from the same "
        "instant, in seconds."
    )


def test_study_without_bone_truth_is_refused(tmp_path: Path) -> None:
    study = made_study(tmp_path, {"K01": ["stairs-1"]}, bone=False)
    keep(tmp_path / "out", "K01", "stairs-1", made_solution(TIMES, walking_poses(TIMES)))
    with pytest.raises(InputError) as error:
        compare_solutions(tmp_path / "out", study)
    assert str(error.value) == (
        f"{tmp_path / 'out'}: no solution can be compared: K01 stairs-1 has no bone truth in the study."
    )
    with pytest.raises(MismatchError) as missing:
        bone_truth(study.trial("K01", "stairs-1"), TIMES)
    assert str(missing.value) == (
        "K01, stairs-1: no bone truth in the study. Name it in the trial's bone key to compare."
    )


def refused(tmp_path: Path, solution: xr.Dataset) -> str:
    """Message for a second trial that cannot be compared, beside a first one that can."""
    study = made_study(tmp_path, {"K01": ["stairs-1", "walk-1"]})
    keep(tmp_path / "out", "K01", "stairs-1", made_solution(TIMES, walking_poses(TIMES)))
    keep(tmp_path / "out", "K01", "walk-1", solution)
    with pytest.warns(StaPriorWarning) as record:
        comparison = compare_solutions(tmp_path / "out", study)
    assert {score.trial for score in comparison.table} == {"stairs-1"}
    assert [str(warning.message) for warning in record] == list(comparison.refused)
    assert len(comparison.refused) == 1
    return comparison.refused[0]


def test_other_segments_are_refused_and_the_rest_compared(tmp_path: Path) -> None:
    solution = made_solution(TIMES, walking_poses(TIMES)).assign_coords(segment=["thigh", "foot"])
    assert refused(tmp_path, solution) == (
        "K01, walk-1: segments expected shank thigh, solution has foot thigh. "
        "Compare with the study that the trial was solved from."
    )


def test_other_skin_data_is_refused(tmp_path: Path) -> None:
    text = refused(tmp_path, made_solution(TIMES, walking_poses(TIMES), input_digest="ab" * 32))
    digest = read_study(tmp_path / "study.toml").trial("K01", "walk-1").digest()
    path = tmp_path / "out" / "K01" / "walk-1.solution.nc"
    assert text == (
        f"{path}: made from skin data abababababab…, the study's file is {digest[:12]}…. "
        "Solve the trial again."
    )


def test_all_frames_informed_is_refused(tmp_path: Path) -> None:
    solution = made_solution(TIMES, walking_poses(TIMES))
    solution["informed"][:] = 1
    assert refused(tmp_path, solution) == (
        "K01, walk-1: no hidden frame with bone truth. "
        "All of its bone truth informed the prior: solve with another."
    )


def test_trial_of_another_study_is_refused(tmp_path: Path) -> None:
    study = made_study(tmp_path, {"K01": ["stairs-1"]})
    for trial in ("stairs-1", "stairs-7"):
        keep(tmp_path / "out", "K01", trial, made_solution(TIMES, walking_poses(TIMES)))
    with pytest.warns(StaPriorWarning, match="no trial of subject K01 stairs-7"):
        comparison = compare_solutions(tmp_path / "out", study)
    assert len(comparison.refused) == 1

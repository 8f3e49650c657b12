"""Slipped and swapped markers: found, named, left out on request; and the smoother's own options."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from made_laboratory import make_courier_study, run
from made_problems import chain_poses as chained
from made_problems import draw_trial_artifact, made_angles, made_artifact, made_joints
from made_studies import says
from scipy.stats import binom, chi2

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, StaPriorWarning
from sta_prior.prior import Prior, load_prior
from sta_prior.se3 import transform_points
from sta_prior.solve import solve
from sta_prior.solve.suspects import FALSE_ALARM, find_suspects, hide, marker_conflict, name_suspects
from sta_prior.solve.terms import JointProblem, SegmentProblem, angles_and_jacobians, marker_term
from sta_prior.solve.timeline import even_grid, on_grid
from sta_prior.study import Trial, read_study

MARKERS, FRAMES, NOISE = 6, 80, 0.0005


def leg(seed: int) -> tuple[list[SegmentProblem], list[JointProblem], FloatArray]:
    """Thigh and shank of six markers each, artifact from the prior; true poses."""
    rng = np.random.default_rng(seed)
    joints = made_joints(2)
    angles = np.repeat(made_angles(rng, 1, 1), FRAMES, axis=0)
    angles[:, 0, 0] = np.linspace(0.1, 1.0, FRAMES)
    poses = chained(rng, angles)
    segments = []
    for index in range(2):
        artifact = made_artifact(rng, MARKERS, [0], subject_sd=0.003, residual_sd=0.002)
        height = np.linspace(-0.08, -0.34, MARKERS) if index == 0 else np.linspace(0.32, 0.06, MARKERS)
        round_it = 2.4 * np.arange(MARKERS)
        reference = np.stack([0.06 * np.cos(round_it), height, 0.06 * np.sin(round_it)], axis=1)
        moved = draw_trial_artifact(rng, artifact, angles, 0.01).reshape(FRAMES, -1, 3)
        points = transform_points(poses[:, index], reference + moved)
        points = points + NOISE * rng.standard_normal(points.shape)
        segments.append(SegmentProblem(index, points, reference, artifact))
    return segments, joints, poses


def changed(
    segments: list[SegmentProblem], index: int, marker: int, move: FloatArray
) -> list[SegmentProblem]:
    points = segments[index].points.copy()
    points[:, marker] += move
    return [replace(s, points=points) if s.index == index else s for s in segments]


def test_conflict_of_a_marker_has_the_law_it_says() -> None:
    """At the true poses, over independent draws of everything, each marker's statistic is chi-square."""
    values = []
    for seed in range(60):
        segments, joints, poses = leg(seed)
        first = replace(segments[0], points=segments[0].points[:1])
        term = marker_term(first, poses[:1], *angles_and_jacobians(joints, poses[:1]), NOISE)
        squared, freedom, _ = marker_conflict(term, slice(0, 6))
        assert (freedom == 3).all()
        values.append(squared[0])
    inside = np.mean(np.array(values) < chi2.ppf(0.9, 3), axis=0)
    low, high = binom.interval(1.0 - 1e-3, 60, 0.9)
    assert (inside * 60 >= low).all()
    assert (inside * 60 <= high).all()


def test_good_markers_are_not_suspected() -> None:
    """Nominally one trial in a hundred has a suspect."""
    alarms = sum(bool(find_suspects(*leg(seed), NOISE)) for seed in range(60))
    assert alarms <= binom.ppf(1.0 - 1e-3, 60, FALSE_ALARM)


@pytest.mark.parametrize("marker", range(MARKERS))
@pytest.mark.parametrize("index", [0, 1])
def test_a_slipped_marker_is_found(index: int, marker: int) -> None:
    segments, joints, poses = leg(100 + marker)
    move = poses[:, index, :3, :3] @ np.array([0.03, 0.03, -0.03])
    found = find_suspects(changed(segments, index, marker, move), joints, poses, NOISE)
    assert [(item.segment, item.marker, item.partner) for item in found] == [(index, marker, -1)]
    assert 0.02 < found[0].distance < 0.08


@pytest.mark.parametrize(("one", "other"), [(0, 1), (2, 5), (3, 4)])
def test_swapped_markers_are_named_with_each_other(one: int, other: int) -> None:
    segments, joints, poses = leg(7)
    points = segments[1].points.copy()
    points[:, [one, other]] = points[:, [other, one]]
    found = find_suspects([segments[0], replace(segments[1], points=points)], joints, poses, NOISE)
    assert {(item.marker, item.partner) for item in found} == {(one, other), (other, one)}


def test_too_few_markers_accuse_none() -> None:
    """Of four markers none can be told from the others."""
    segments, joints, poses = leg(8)
    few = [
        SegmentProblem(
            s.index, s.points[:, :4], s.reference[:4], made_artifact(np.random.default_rng(1), 4, [0])
        )
        for s in segments
    ]
    assert find_suspects(changed(few, 0, 1, np.full((FRAMES, 3), 0.05)), joints, poses, NOISE) == []


def test_hiding_touches_the_suspects_only() -> None:
    segments, joints, poses = leg(9)
    wrong = changed(segments, 0, 2, np.full((FRAMES, 3), 0.06))
    kept = hide(wrong, find_suspects(wrong, joints, poses, NOISE))
    assert np.isnan(kept[0].points[:, 2]).all()
    assert np.isfinite(np.delete(kept[0].points, 2, axis=1)).all()
    np.testing.assert_array_equal(kept[1].points, segments[1].points)


@pytest.fixture(scope="module")
def laboratory(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Prior]:
    folder = tmp_path_factory.mktemp("laboratory")
    make_courier_study(folder)
    assert run(folder, "pair", "study.toml", "--out", "pairs.nc").status == 0
    assert run(folder, "learn", "pairs.nc", "--out", "prior.nc").status == 0
    return folder, load_prior(folder / "prior.nc")


def archived(laboratory: tuple[Path, Prior]) -> Trial:
    return read_study(laboratory[0] / "study.toml").select(["K10"])[0]


def with_skin(monkeypatch: pytest.MonkeyPatch, skin: xr.Dataset) -> None:
    monkeypatch.setattr(Trial, "skin", lambda self: skin)


OTHERS = ("ignore:.*marker distances differ", "ignore:.*has not converged", "ignore:.*cannot be told apart")


@pytest.mark.filterwarnings(*OTHERS)
def test_a_swap_is_named_and_left_out_on_request(
    laboratory: tuple[Path, Prior], monkeypatch: pytest.MonkeyPatch
) -> None:
    trial, prior = archived(laboratory), laboratory[1]
    plain = solve(trial, prior)
    assert plain.attrs["suspects"] == ""
    skin = trial.skin().copy(deep=True)
    names = [str(name) for name in skin["marker"].values]
    first, second = names.index("TA"), names.index("TB")
    skin["position"].values[:, [first, second]] = skin["position"].values[:, [second, first]]
    with_skin(monkeypatch, skin)
    told = "markers do not fit the prior: TA (swapped with TB?), TB (swapped with TA?)"
    with pytest.warns(StaPriorWarning, match="markers do not fit") as caught:
        kept = solve(trial, prior)
    assert any(told in str(item.message) for item in caught)
    assert kept.attrs["suspects"] == "TA (swapped with TB?), TB (swapped with TA?)"
    with pytest.warns(StaPriorWarning, match="Solved without"):
        freed = solve(trial, prior, exclude_suspects=True)
    assert freed.attrs["suspects"].endswith(" [left out]")

    def off(data: xr.Dataset) -> float:
        return float(np.degrees(np.sqrt(((data["angle"] - plain["angle"]) ** 2).mean())))

    assert off(freed) < 0.5 * off(kept)
    hidden = freed["marker_seen"].sel(marker=["TA", "TB"])
    assert (hidden == 1).all()
    assert np.isfinite(freed["artifact_sd"].sel(marker=["TA", "TB"])).all()


def test_words_of_suspects(laboratory: tuple[Path, Prior]) -> None:
    lab = archived(laboratory).subject.lab
    assert name_suspects([], lab) == ""
    assert name_suspects([], lab, excluded=True) == ""


@pytest.mark.parametrize("constants", ["full", "none"])
def test_choice_of_the_constants(laboratory: tuple[Path, Prior], constants: str) -> None:
    trial, prior = archived(laboratory), laboratory[1]
    bounded, other = solve(trial, prior), solve(trial, prior, constants=constants)
    ratio = float((other["angle_sd"] / bounded["angle_sd"]).mean())
    assert ratio < 1.0 if constants == "full" else ratio > 0.5
    assert float(np.abs(other["angle"] - bounded["angle"]).max()) > 1e-5


def test_unknown_choice_of_the_constants(laboratory: tuple[Path, Prior]) -> None:
    with says(
        InputError, "--constants: no choice bound here, known: bounded, full, none. Did you mean bounded?"
    ):
        solve(archived(laboratory), laboratory[1], constants="bound")


def test_frames_that_the_file_lacks_are_lost_frames(
    laboratory: tuple[Path, Prior], monkeypatch: pytest.MonkeyPatch
) -> None:
    trial, prior = archived(laboratory), laboratory[1]
    skin = trial.skin()
    gap = np.r_[0:60, 66 : skin.sizes["time"]]
    blank = skin.copy(deep=True)
    blank["position"].values[60:66] = np.nan
    with_skin(monkeypatch, blank)
    whole = solve(trial, prior)
    with_skin(monkeypatch, skin.isel(time=gap))
    short = solve(trial, prior)
    assert short.sizes["time"] == gap.size
    np.testing.assert_allclose(short["angle"], whole["angle"][gap], atol=1e-9)
    np.testing.assert_allclose(short["angle_sd"], whole["angle_sd"][gap], atol=1e-9)


def test_uneven_frames_are_refused(laboratory: tuple[Path, Prior], monkeypatch: pytest.MonkeyPatch) -> None:
    trial = archived(laboratory)
    skin = trial.skin()
    moved = skin["time"].values.copy()
    moved[50] += 0.4 * (moved[1] - moved[0])
    with_skin(monkeypatch, skin.assign_coords(time=moved))
    with pytest.raises(InputError, match=r"not evenly spaced, expected steps of 0\.01 s\. Resample"):
        solve(trial, laboratory[1])


@pytest.mark.filterwarnings(*OTHERS, "ignore:.*do not fit the prior")
def test_a_jumping_marker_set_is_told(
    laboratory: tuple[Path, Prior], monkeypatch: pytest.MonkeyPatch
) -> None:
    trial = archived(laboratory)
    skin = trial.skin().copy(deep=True)
    jitter = 0.02 * np.random.default_rng(0).standard_normal(skin["position"].shape)
    skin["position"].values[:] += jitter
    with_skin(monkeypatch, skin)
    with pytest.warns(StaPriorWarning, match=r"from frame to frame the markers move \d+\.\d times as far as"):
        solve(trial, laboratory[1])


def test_even_grid() -> None:
    time = np.array([0.0, 0.01, 0.02, 0.05, 0.06])
    grid = even_grid(time + 3.0)
    assert grid.frames == 7
    assert grid.step == pytest.approx(0.01)
    np.testing.assert_array_equal(grid.at, [0, 1, 2, 5, 6])
    whole = on_grid(time, grid)
    np.testing.assert_array_equal(np.isnan(whole), [0, 0, 0, 1, 1, 0, 0])
    assert even_grid(np.array([1.0])).frames == 1
    assert even_grid(np.zeros(0)).frames == 0


@pytest.mark.parametrize("rate", [29.97, 59.94, 120.0, 250.0])
def test_rates_rounded_in_a_file_lie_on_a_grid(rate: float) -> None:
    time = np.round(np.arange(3000) / rate, 4)
    grid = even_grid(time)
    assert grid.frames == 3000
    assert grid.step == pytest.approx(1.0 / rate, rel=1e-4)

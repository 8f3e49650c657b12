"""What the markers leave open, in exact words, and NaN where a pose is not determined."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from made_studies import LAB, THIGH
from made_trials import fixed_prior, hide, moving_poses, write_moving_leg

from sta_prior import se3
from sta_prior.checks import BoolArray, FloatArray
from sta_prior.prior.interface import IsotropicArtifact
from sta_prior.solve import ESTIMATORS, WITH_PRIOR, solve
from sta_prior.solve.observability import describe_observability
from sta_prior.solve.terms import SegmentProblem
from sta_prior.study import Lab, read_lab

FRAMES = 40
BY_SEGMENT = {
    **dict.fromkeys(
        ("rotation", "position", "pose_covariance", "information_share"),
        "segment",
    ),
    **dict.fromkeys(("artifact", "artifact_sd"), "marker"),
}
BY_JOINT = ("angle", "angle_sd", "joint_travel", "joint_travel_sd")
FREE = LAB.replace("travel_sd_mm = 5.0", 'travel_sd_mm = "free"')
NEAR_A_LINE = (
    "the markers seen lie near one line, an adjoining segment is not determined, "
    "or the iteration did not settle"
)


def lab_of(folder: Path) -> Lab:
    (folder / "lab.toml").write_text(LAB, encoding="utf-8")
    return read_lab(folder / "lab.toml")


def seen_problem(lab: Lab, seen: list[BoolArray]) -> list[SegmentProblem]:
    """Segments of which only who is seen matters."""
    return [
        SegmentProblem(
            index,
            np.where(mask[..., None], 1.0, np.nan) * np.ones(3),
            np.zeros((mask.shape[1], 3)),
            IsotropicArtifact(3 * mask.shape[1], 0.01),
        )
        for index, mask in enumerate(seen)
    ]


def test_words_for_every_cause(tmp_path: Path) -> None:
    lab = lab_of(tmp_path)
    thigh = np.ones((10, 4), dtype=bool)
    thigh[0] = False
    thigh[1:3] = [True, False, False, False]
    thigh[3:6] = [True, True, False, False]
    thigh[6] = [False, True, False, True]
    thigh[7] = [True, True, True, False]
    determined = np.ones((10, 2), dtype=bool)
    determined[:8, 0] = False
    shank = np.ones((10, 4), dtype=bool)
    shank[9] = False
    determined[9, 1] = False
    assert describe_observability(seen_problem(lab, [thigh, shank]), determined, lab) == (
        "thigh: not determined in 1 of 10 frames, no marker is seen; "
        "thigh: not determined in 2 of 10 frames, one marker is seen: rotation is open; "
        "thigh: not determined in 1 of 10 frames, rotation about the line TB–TD is open; "
        "thigh: not determined in 3 of 10 frames, rotation about the line TA–TB is open; "
        f"thigh: not determined in 1 of 10 frames, {NEAR_A_LINE}; "
        "shank: not determined in 1 of 10 frames, no marker is seen"
    )


def test_no_words_where_all_is_determined(tmp_path: Path) -> None:
    lab = lab_of(tmp_path)
    few = np.ones((5, 4), dtype=bool)
    few[2, 1:] = False
    assert describe_observability(seen_problem(lab, [few, few]), np.ones((5, 2), dtype=bool), lab) == ""


def assert_missing(data: xr.Dataset, thigh: slice, shank: slice) -> None:
    """NaN exactly in these frames of these segments, in every variable, and in what depends on both."""
    missing = {"thigh": np.zeros(FRAMES, dtype=bool), "shank": np.zeros(FRAMES, dtype=bool)}
    missing["thigh"][thigh] = True
    missing["shank"][shank] = True
    for name, of in BY_SEGMENT.items():
        for segment in ("thigh", "shank"):
            own = data["segment"] == segment if of == "segment" else data["marker_segment"] == segment
            values = data[name].isel({of: np.flatnonzero(own.to_numpy())}).to_numpy().reshape(FRAMES, -1)
            np.testing.assert_array_equal(np.isnan(values).all(axis=1), missing[segment], err_msg=name)
            np.testing.assert_array_equal(np.isnan(values).any(axis=1), missing[segment], err_msg=name)
    for name in BY_JOINT:
        values = data[name].to_numpy().reshape(FRAMES, -1)
        np.testing.assert_array_equal(
            np.isnan(values).all(axis=1), missing["thigh"] | missing["shank"], err_msg=name
        )


def solved(
    folder: Path, estimator: str, change: Callable[[dict[str, FloatArray]], None], lab: str = FREE
) -> xr.Dataset:
    study = write_moving_leg(folder, lab=lab, change=change, alone=estimator != "smoother")
    prior = fixed_prior() if estimator in WITH_PRIOR else None
    return solve(study.trial("P01", "stairs_01"), prior, estimator)


NOTHING = slice(0, 0)
FRAME_WISE = ("rigid", "linked", "frame-map")


@pytest.mark.parametrize("estimator", FRAME_WISE)
@pytest.mark.parametrize(
    ("names", "words"),
    [
        ("SA SB SC SD", "no marker is seen"),
        ("SA SB SC", "one marker is seen: rotation is open"),
        ("SA SC", "rotation about the line SB–SD is open"),
        ("SB SD", "rotation about the line SA–SC is open"),
    ],
)
def test_too_few_markers_without_a_joint(tmp_path: Path, estimator: str, names: str, words: str) -> None:
    def cover(points: dict[str, FloatArray]) -> None:
        hide(points, names, slice(12, 19))

    data = solved(tmp_path, estimator, cover)
    assert data.attrs["observability"] == f"shank: not determined in 7 of 40 frames, {words}"
    assert_missing(data, NOTHING, slice(12, 19))
    rigid = np.isnan(data["rigid_position"].to_numpy()).any(axis=-1)
    np.testing.assert_array_equal(np.flatnonzero(rigid[:, 1]), np.arange(12, 19))
    assert not rigid[:, 0].any()


@pytest.mark.parametrize("estimator", ["linked", "frame-map"])
@pytest.mark.parametrize(
    ("names", "words"),
    [("SA SB SC SD", "no marker is seen"), ("SA SB SC", "one marker is seen: rotation is open")],
)
def test_a_joint_does_not_replace_three_markers(
    tmp_path: Path, estimator: str, names: str, words: str
) -> None:
    def cover(points: dict[str, FloatArray]) -> None:
        hide(points, names, slice(12, 19))

    data = solved(tmp_path, estimator, cover, lab=LAB)
    assert data.attrs["observability"] == f"shank: not determined in 7 of 40 frames, {words}"
    assert_missing(data, NOTHING, slice(12, 19))


@pytest.mark.parametrize("estimator", ["linked", "frame-map"])
def test_two_markers_and_a_joint_centre_are_enough(tmp_path: Path, estimator: str) -> None:
    def cover(points: dict[str, FloatArray]) -> None:
        hide(points, "SA SC", slice(12, 19))

    data = solved(tmp_path, estimator, cover, lab=LAB)
    assert data.attrs["observability"] == ""
    assert_missing(data, NOTHING, NOTHING)
    error = se3.log(
        se3.inverse(se3.make_pose(data["rotation"].to_numpy(), data["position"].to_numpy()))
        @ moving_poses(FRAMES)
    )
    assert np.degrees(np.sqrt((error[12:19, 1, :3] ** 2).mean())) < 10.0
    # The rigid fit of the same frames cannot do it, nor can the joint's angles be told from it.
    assert np.isnan(data["rigid_position"].sel(segment="shank")[12:19]).all()
    assert np.isnan(data["angle_rigid"][12:19]).all()
    assert np.isfinite(data["angle_rigid"][:12]).all()


def test_both_bones_hidden_at_different_times(tmp_path: Path) -> None:
    def cover(points: dict[str, FloatArray]) -> None:
        hide(points, "SA SB SC SD", slice(30, 40))
        hide(points, "TA TB TC TD", slice(0, 6))

    data = solved(tmp_path, "frame-map", cover, lab=LAB)
    assert data.attrs["observability"] == (
        "thigh: not determined in 6 of 40 frames, no marker is seen; "
        "shank: not determined in 10 of 40 frames, no marker is seen"
    )
    assert data.attrs["stop_reason"] == "step below 1e-08 rad and m in every frame"
    assert_missing(data, slice(0, 6), slice(30, 40))
    np.testing.assert_allclose(
        data["information_share"].sel(segment="thigh")[30:].sum("source"), 1.0, atol=1e-9
    )


def test_a_trial_without_a_single_marker(tmp_path: Path) -> None:
    def cover(points: dict[str, FloatArray]) -> None:
        hide(points, "TA TB TC TD SA SB SC SD", slice(0, FRAMES))

    for estimator in ESTIMATORS:
        data = solved(tmp_path, estimator, cover, lab=LAB)
        assert data.attrs["observability"] == (
            "thigh: not determined in 40 of 40 frames, no marker is seen; "
            "shank: not determined in 40 of 40 frames, no marker is seen"
        )
        assert_missing(data, slice(0, FRAMES), slice(0, FRAMES))


@pytest.mark.parametrize("estimator", FRAME_WISE)
@pytest.mark.parametrize("width", [0.0, 0.002])
def test_markers_seen_near_one_line(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, estimator: str, width: float
) -> None:
    """TA, TB, TC lie on a line along the thigh, or within 2 mm of it: too little against their scatter."""
    monkeypatch.setitem(THIGH, "TA", (0.05, -0.10, 0.04 + width))
    monkeypatch.setitem(THIGH, "TB", (0.05, -0.22, 0.04 - width))
    monkeypatch.setitem(THIGH, "TC", (0.05, -0.34, 0.04 + width))

    def cover(points: dict[str, FloatArray]) -> None:
        hide(points, "TD", slice(3, 8))

    data = solved(tmp_path, estimator, cover)
    assert data.attrs["observability"] == f"thigh: not determined in 5 of 40 frames, {NEAR_A_LINE}"
    assert_missing(data, slice(3, 8), NOTHING)


# The smoother carries a pose over frames in which its own markers leave it open.


@pytest.mark.parametrize(
    ("names", "rank", "words"),
    [
        ("SA SB SC SD", 0, ""),
        ("SA SB SC", 3, ""),
        ("SA SC", 5, ", their own markers leave open the turn about the bone's axis (…"),
    ],
)
def test_the_smoother_bridges_and_says_so(tmp_path: Path, names: str, rank: int, words: str) -> None:
    def cover(points: dict[str, FloatArray]) -> None:
        hide(points, names, slice(12, 19))

    data = solved(tmp_path, "smoother", cover)
    assert data.attrs["observability"] == ""
    assert_missing(data, NOTHING, NOTHING)
    told = "shank: 7 of 40 frames are carried by their neighbours"
    assert data.attrs["bridged"].startswith(told + words.removesuffix("(…"))
    own = data["pose_rank"].sel(segment="shank").to_numpy()
    assert (own[12:19] == rank).all()
    assert (np.delete(own, slice(12, 19)) == 6).all()
    assert (data["pose_rank"].sel(segment="thigh") == 6).all()
    sd = np.sqrt(np.einsum("txx->tx", data["pose_covariance"].sel(segment="shank").to_numpy()))
    assert (sd[15] > 1.02 * sd[5]).any()
    truth = moving_poses(FRAMES)[:, 1]
    found = data.sel(segment="shank")
    error = se3.log(se3.inverse(se3.make_pose(found["rotation"].values, found["position"].values)) @ truth)
    assert (np.abs(error / sd) < 3.5).all()


def test_what_is_open_throughout_is_not_bridged(tmp_path: Path) -> None:
    """With two markers throughout, no neighbour can carry the turn about their line."""

    def cover(points: dict[str, FloatArray]) -> None:
        hide(points, "SA SC", slice(0, FRAMES))

    data = solved(tmp_path, "smoother", cover)
    assert data.attrs["observability"] == (
        "shank: not determined in 40 of 40 frames, rotation about the line SB–SD is open"
    )
    assert data.attrs["bridged"] == ""
    assert_missing(data, NOTHING, slice(0, FRAMES))

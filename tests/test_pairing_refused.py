"""Trials that cannot be paired: named with the reason, the others go on. Several trials in one data set."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from made_studies import LAB, leg_points, leg_poses, says, warns, write_bones, write_points
from test_pairing import FIRST, LAST, PAIRED_STUDY, displaced, motion, paired_leg

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError
from sta_prior.pairs import pair, pair_with_report
from sta_prior.pairs.pairing import (
    angles_of_poses,
    dof_names,
    gather_from_dof,
    posture_distance,
    segment_side,
    spread_over_dof,
)
from sta_prior.study import Lab, read_lab, read_study

SECOND_TRIAL = (
    PAIRED_STUDY
    + """\
[[subject.trial]]
id = "stairs_02"
activity = "stairs-down"
skin = "second.csv"
bone = "second_bone.csv"
bone_sd = { mm = 1.5, deg = 0.25 }
"""
)
ADVICE = "Not paired: its reference does not belong to it; give it a reference of its own"

Change = Callable[[dict[str, FloatArray], FloatArray], None]


def two_trials(folder: Path, change: Change | None = None, study: str = SECOND_TRIAL) -> Path:
    """A sound trial and a second one whose points `change` may edit, given the poses; the study's path."""
    truth = paired_leg(folder, study=study)
    poses = motion()[1]
    points = leg_points(poses)
    displaced(points, poses, 0.006)
    if change is not None:
        change(points, poses)
    write_points(folder / "second.csv", points)
    time = np.arange(FIRST, LAST) / 100
    write_bones(folder / "second_bone.csv", ("thigh", "shank"), time, poses[FIRST:LAST])
    return truth.path


def in_bone(poses: FloatArray, segment: int, shift: tuple[float, float, float]) -> FloatArray:
    """A shift along the bone's axes, seen in the lab, (F, 3)."""
    along: FloatArray = poses[:, segment, :3, :3] @ np.array(shift)
    return along


def other_placement(points: dict[str, FloatArray], poses: FloatArray) -> None:
    points["TC"] = points["TC"] + in_bone(poses, 0, (0.0, 0.04, 0.02))


def swapped_labels(points: dict[str, FloatArray], poses: FloatArray) -> None:
    points["SA"], points["SD"] = points["SD"], points["SA"]


def offset_cluster(points: dict[str, FloatArray], poses: FloatArray) -> None:
    points.update(leg_points(poses))
    for name in ("SA", "SB", "SC", "SD"):
        points[name] = points[name] + in_bone(poses, 1, (0.0, 0.045, 0.0))


def large_artifact(points: dict[str, FloatArray], poses: FloatArray) -> None:
    plain = leg_points(poses)
    points.update(plain)
    displaced(points, poses, 0.030)


@pytest.mark.parametrize(
    ("change", "start"),
    [
        (other_placement, "thigh marker distances differ from the reference by "),
        (swapped_labels, "shank marker distances differ from the reference by "),
        (offset_cluster, "shank cluster keeps its shape but sits "),
    ],
)
def test_a_trial_that_does_not_belong_is_left_out_by_name(tmp_path: Path, change: Change, start: str) -> None:
    path = two_trials(tmp_path, change)
    data, report = pair_with_report(read_study(path))
    assert data["trial_id"].to_numpy().tolist() == ["stairs_01"]
    ((subject, trial, reason),) = report.refused
    assert (subject, trial) == ("P01", "stairs_02")
    assert reason.startswith(start)
    assert reason.endswith(f". {ADVICE}")
    line = f"P01, stairs_02: {reason}."
    assert report.lines() == [line]
    with warns(line):
        again = pair(read_study(path))
    assert again["trial_id"].to_numpy().tolist() == ["stairs_01"]


def test_the_reason_is_told_in_numbers(tmp_path: Path) -> None:
    """The 45 mm that were put in."""
    _, report = pair_with_report(read_study(two_trials(tmp_path, offset_cluster)))
    assert report.lines() == [
        "P01, stairs_02: shank cluster keeps its shape but sits 45 mm and 0° from the bone near the "
        f"reference posture, expected at most 30 mm and 20°. {ADVICE}."
    ]


def test_artifact_is_no_reason_to_refuse(tmp_path: Path) -> None:
    data, report = pair_with_report(read_study(two_trials(tmp_path, large_artifact)))
    assert report.refused == ()
    assert data.sizes["trial"] == 2
    assert float(data["displacement_peak"][1].max()) > 0.02


def test_the_only_trial_refused_is_an_error_with_the_reason(tmp_path: Path) -> None:
    path = two_trials(tmp_path, offset_cluster)
    with says(
        InputError,
        f"{path}: no trial is left to pair: P01, stairs_02: shank cluster keeps its shape but sits 45 mm "
        f"and 0° from the bone near the reference posture, expected at most 30 mm and 20°. {ADVICE}.",
    ):
        pair(read_study(path), trials=["stairs_02"])


def test_an_unusable_trial_does_not_stop_the_others(tmp_path: Path) -> None:
    path = two_trials(
        tmp_path,
        study=SECOND_TRIAL.replace("bone_sd = { mm = 1.5", 'clock = "estimate"\n bone_sd = { mm = 1.5'),
    )
    data, report = pair_with_report(read_study(path))
    assert data["trial_id"].to_numpy().tolist() == ["stairs_01"]
    assert report.lines() == [
        'P01, stairs_02: clock = "estimate" cannot be paired by this version, expected "shared". '
        "Bring the bone truth to the skin system's clock and lab frame first."
    ]


def test_bones_in_view_only_outside_the_trial(tmp_path: Path) -> None:
    """Rows inside the trial are blank, rows after its end are not."""
    path = two_trials(tmp_path)
    poses = motion()[1][:20].copy()
    poses[:10] = np.nan
    time = np.concatenate([np.arange(10, 20), np.arange(50, 60)]) / 100
    write_bones(tmp_path / "second_bone.csv", ("thigh", "shank"), time, poses)
    with warns("P01, stairs_02: 10 of 20 bone frames lie outside the skin trial. They are left out."):
        data, report = pair_with_report(read_study(path))
    assert data["trial_id"].to_numpy().tolist() == ["stairs_01"]
    assert report.lines() == [
        "P01, stairs_02: no frame with bone truth in view. Not paired: check its bone table."
    ]


def test_trials_stand_one_after_the_other(tmp_path: Path) -> None:
    path = two_trials(tmp_path)
    study = read_study(path)
    data = pair(study)
    count = LAST - FIRST
    assert data["trial"].to_numpy().tolist() == ["stairs_01"] * count + ["stairs_02"] * count
    assert data["activity"].to_numpy().tolist() == ["stairs"] * count + ["stairs-down"] * count
    assert data["trial_activity"].to_numpy().tolist() == ["stairs", "stairs-down"]
    np.testing.assert_allclose(data["bone_sd_position"], [0.0005, 0.0015])
    np.testing.assert_allclose(data["bone_sd_rotation"], np.radians([0.5, 0.25]))
    for index, name in enumerate(("stairs_01", "stairs_02")):
        alone = pair(study, trials=[name])
        own = np.flatnonzero(data["trial"].to_numpy() == name)
        for variable in ("displacement", "bone_position", "angle"):
            np.testing.assert_array_equal(alone[variable], data[variable].isel(frame=own))
        for variable in ("displacement_rms", "displacement_peak", "cluster_offset", "distance_misfit"):
            np.testing.assert_array_equal(alone[variable][0], data[variable][index])


def test_a_bone_out_of_view_leaves_the_other_paired(tmp_path: Path) -> None:
    path = two_trials(tmp_path)
    poses = motion()[1][FIRST:LAST].copy()
    poses[3:7, 1] = np.nan
    poses[9, 0] = np.nan
    poses[12] = np.nan
    write_bones(tmp_path / "second_bone.csv", ("thigh", "shank"), np.arange(FIRST, LAST) / 100, poses)
    data = pair(read_study(path), trials=["stairs_02"])
    assert data.sizes["frame"] == LAST - FIRST - 1
    thigh = np.isnan(data["displacement"].sel(marker="TA").to_numpy()).any(axis=1)
    shank = np.isnan(data["displacement"].sel(marker="SA").to_numpy()).any(axis=1)
    assert np.flatnonzero(thigh).tolist() == [9]
    assert np.flatnonzero(shank).tolist() == [3, 4, 5, 6]
    angle = np.isnan(data["angle"].to_numpy()).any(axis=(1, 2))
    assert np.flatnonzero(angle).tolist() == [3, 4, 5, 6, 9]


TWO_JOINTS = (
    LAB
    + """\
[segment.foot]
markers = ["FA", "FB", "FC"]
frame = "imaging"
[joint.ankle]
proximal = "shank"
distal = "foot"
kind = "ankle"
side = "right"
travel_sd_mm = "free"
"""
)


@pytest.fixture
def chain(tmp_path: Path) -> Lab:
    (tmp_path / "lab.toml").write_text(TWO_JOINTS, encoding="utf-8")
    return read_lab(tmp_path / "lab.toml")


def test_degrees_of_freedom_of_different_joints_share_their_names(chain: Lab) -> None:
    assert dof_names(chain) == ["flexion", "adduction", "internal_rotation", "dorsiflexion", "inversion"]
    values = np.arange(12.0).reshape(2, 2, 3)
    spread = spread_over_dof(chain, values)
    expected = np.full((2, 2, 5), np.nan)
    expected[:, 0, :3] = values[:, 0]
    expected[:, 1, [3, 4, 2]] = values[:, 1]
    np.testing.assert_array_equal(spread, expected)
    np.testing.assert_array_equal(gather_from_dof(chain, spread), values)


def test_side_of_a_segment_is_that_of_its_joints(chain: Lab) -> None:
    assert [segment_side(chain, name) for name in chain.segment_names] == ["right"] * 3
    left = chain.for_side("left")
    assert [segment_side(left, name) for name in left.segment_names] == ["left"] * 3
    assert segment_side(left, "pelvis") == "right"


def test_angles_are_nan_where_a_bone_is_missing(chain: Lab) -> None:
    poses = np.tile(np.concatenate([leg_poses(), np.eye(4)[None]]), (4, 1, 1, 1))
    poses[1, 0] = np.nan
    poses[2, 2] = np.nan
    angles = angles_of_poses(chain, poses)
    np.testing.assert_allclose(angles[0, 0], np.radians([5.0, 2.0, -3.0]), atol=1e-12)
    assert np.isnan(angles).all(axis=2).tolist() == [
        [False, False],
        [True, False],
        [False, True],
        [False] * 2,
    ]


def test_distance_from_the_reference_posture_takes_the_short_way_round() -> None:
    angles = np.radians([[[179.0, 0.0, 0.0]], [[3.0, 4.0, 0.0]]])
    reference = np.radians([[-179.0, 0.0, 0.0]])
    got = np.degrees(posture_distance(angles, reference))
    np.testing.assert_allclose(got, [2.0, np.hypot(178.0, 4.0)], atol=1e-9)

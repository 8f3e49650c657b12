"""Paired data: displacement against simulated truth for every kind of reference, dataset, refusals."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from made_studies import (
    IMAGING_LAB,
    LAB,
    SHANK_MARKERS,
    STUDY,
    THIGH_MARKERS,
    knee_rotation,
    leg_points,
    leg_poses,
    make_study,
    reference_rows,
    says,
    warns,
    write_bones,
    write_points,
    write_reference,
)
from scipy.spatial.transform import Rotation

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError
from sta_prior.io.netcdf import read_dataset, write_dataset
from sta_prior.pairs import PairingReport, input_digests, pair, pair_with_report
from sta_prior.se3 import inverse, make_pose
from sta_prior.study import read_study

FRAMES, FIRST, LAST = 40, 10, 25
BONE_SD = "bone_sd = { mm = 0.5, deg = 0.5 }\n"
PAIRED_STUDY = STUDY + BONE_SD
WITH_BONE_STATIC = PAIRED_STUDY.replace(
    'static = "static.csv"\n', 'static = "static.csv"\nbone_static = "bones.csv"\n'
)
POINTS_STUDY = PAIRED_STUDY.replace(
    'static = "static.csv"\n', 'reference_points = "reference.csv"\nbone_static = "bones.csv"\n'
)
REFERENCE_POSTURE = (5.0, 2.0, -3.0)
MARKERS = (*THIGH_MARKERS, *SHANK_MARKERS)


@dataclass(frozen=True)
class Truth:
    """What was put into the files: times, poses (B, 2, 4, 4) and displacement (B, 8, 3) in the bones."""

    path: Path
    time: FloatArray
    poses: FloatArray
    displacement: FloatArray
    angles: FloatArray


def motion(side: str = "right") -> tuple[FloatArray, FloatArray]:
    """Knee angles (F, 3) in degrees and poses (F, 2, 4, 4), starting in the reference posture."""
    bend = np.linspace(0, 50, FRAMES)
    angles = np.array(REFERENCE_POSTURE) + np.stack([bend, -0.1 * bend, 0.15 * bend], axis=-1)
    return angles, np.stack([leg_poses(tuple(row), side) for row in angles])


def displaced(points: dict[str, FloatArray], poses: FloatArray, size: float = 0.010) -> FloatArray:
    """Move the markers as artifact does, growing from zero; returns it in the bone frames, (F, 8, 3)."""
    rng = np.random.default_rng(5)
    grown = np.linspace(0, 1, len(poses))[:, None, None]
    displacement = size * grown * rng.standard_normal((1, 8, 3))
    for place, name in enumerate(MARKERS):
        bone = poses[:, place // 4, :3, :3]
        points[name] = points[name] + np.einsum("fij,fj->fi", bone, displacement[:, place])
    return displacement


def paired_leg(
    folder: Path,
    *,
    lab: str = LAB,
    study: str = PAIRED_STUDY,
    side: str = "right",
    imaging_from_bone: FloatArray | None = None,
    change: Callable[[dict[str, FloatArray]], None] | None = None,
    table_time: FloatArray | None = None,
) -> Truth:
    """Write a study whose trial has artifact and a window of bone truth, all free of noise.

    imaging_from_bone: (2, 4, 4), the bone tables are given in frames that differ by it.
    """
    path = make_study(folder, lab=lab, study=study, angles=REFERENCE_POSTURE, side=side)
    angles, poses = motion(side)
    points = leg_points(poses, side)
    displacement = displaced(points, poses)
    if change is not None:
        change(points)
    write_points(folder / "stairs.csv", points)
    offset = np.tile(np.eye(4), (2, 1, 1)) if imaging_from_bone is None else imaging_from_bone
    in_view = slice(FIRST, LAST)
    time = np.arange(FRAMES)[in_view] / 100
    written = time if table_time is None else table_time
    write_bones(folder / "stairs_bone.csv", ("thigh", "shank"), written, poses[in_view] @ inverse(offset))
    static = np.tile(leg_poses(REFERENCE_POSTURE, side), (3, 1, 1, 1))
    write_bones(folder / "bones.csv", ("thigh", "shank"), np.arange(3) / 100, static @ inverse(offset))
    write_reference(folder / "reference.csv", reference_rows(side))
    return Truth(path, time, poses[in_view], displacement[in_view], np.radians(angles[in_view]))


def offsets() -> FloatArray:
    turned = Rotation.from_rotvec([[0.2, -0.1, 0.3], [-0.15, 0.25, 0.05]]).as_matrix()
    return make_pose(turned, np.array([[0.01, -0.02, 0.03], [-0.02, 0.01, 0.005]]))


KINDS = {
    "static": (LAB, PAIRED_STUDY, None),
    "static and imaging": (LAB, WITH_BONE_STATIC, offsets()),
    "points": (IMAGING_LAB.replace('["LEP", "MEP"]', '["KJC"]'), POINTS_STUDY, None),
    "bone": (IMAGING_LAB, WITH_BONE_STATIC, None),
}


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("side", ["right", "left"])
def test_displacement_is_the_simulated_truth(tmp_path: Path, kind: str, side: str) -> None:
    lab, study, offset = KINDS[kind]
    if side == "left":
        study = study.replace('id = "P01"\n', 'id = "P01"\nside = "left"\n')
    truth = paired_leg(tmp_path, lab=lab, study=study, side=side, imaging_from_bone=offset)
    data = pair(read_study(truth.path))
    np.testing.assert_allclose(data["displacement"], truth.displacement, atol=1e-9)
    np.testing.assert_allclose(data["bone_rotation"], truth.poses[..., :3, :3], atol=1e-9)
    np.testing.assert_allclose(data["bone_position"], truth.poses[..., :3, 3], atol=1e-9)
    np.testing.assert_allclose(data["angle"][:, 0], truth.angles, atol=1e-9)
    np.testing.assert_allclose(data["time"], truth.time, atol=1e-12)
    assert np.abs(truth.displacement).max() > 0.01
    reference = np.array(list(reference_rows(side).values()))[:8]
    np.testing.assert_allclose(data["reference"][0], reference, atol=1e-9)
    np.testing.assert_allclose(data["reference_angle"][0, 0], np.radians(REFERENCE_POSTURE), atol=1e-9)
    assert data["segment_side"].to_numpy().tolist() == [[side, side]]


def test_anatomical_angles_of_left_and_right_agree(tmp_path: Path) -> None:
    turn = knee_rotation(40.0, 5.0, -8.0)
    mirror = np.diag([1.0, 1.0, -1.0])
    study = PAIRED_STUDY.replace('id = "P01"\n', 'id = "P01"\nside = "left"\n')
    truth = paired_leg(tmp_path, study=study, side="left")
    left = pair(read_study(truth.path))
    np.testing.assert_allclose(left["angle"][:, 0], truth.angles, atol=1e-9)
    across = (
        np.swapaxes(left["bone_rotation"][:, 0].to_numpy(), 1, 2) @ left["bone_rotation"][:, 1].to_numpy()
    )
    expected = np.stack([mirror @ knee_rotation(*np.degrees(row)) @ mirror for row in truth.angles])
    np.testing.assert_allclose(across, expected, atol=1e-9)
    assert not np.allclose(turn, mirror @ turn @ mirror)


VARIABLES = {
    "displacement": (("frame", "marker", "axis"), "m"),
    "bone_rotation": (("frame", "segment", "row", "col"), "1"),
    "bone_position": (("frame", "segment", "axis"), "m"),
    "angle": (("frame", "joint", "dof"), "rad"),
    "reference": (("subject", "marker", "axis"), "m"),
    "reference_angle": (("subject", "joint", "dof"), "rad"),
    "reference_rotation": (("subject", "segment", "row", "col"), "1"),
    "clock_lag": (("trial",), "s"),
    "clock_lag_sd": (("trial",), "s"),
    "space_rotation": (("trial", "row", "col"), "1"),
    "space_position": (("trial", "axis"), "m"),
    "bone_sd_position": (("trial",), "m"),
    "bone_sd_rotation": (("trial",), "rad"),
    "frames_used": (("trial",), "1"),
    "displacement_rms": (("trial", "marker"), "m"),
    "displacement_peak": (("trial", "marker"), "m"),
    "marker_seen_share": (("trial", "marker"), "1"),
    "distance_misfit": (("trial", "segment"), "m"),
    "cluster_offset": (("trial", "segment"), "m"),
    "cluster_rotation": (("trial", "segment"), "rad"),
}


def hide_ta(points: dict[str, FloatArray]) -> None:
    points["TA"][12:15] = np.nan


def test_dataset_is_that_of_the_contract(tmp_path: Path) -> None:
    """CONTRACT, "Pairs", and the quality figures beyond it."""
    truth = paired_leg(tmp_path, change=hide_ta)
    study = read_study(truth.path)
    data = pair(study)
    got = {str(name): (v.dims, v.attrs["units"]) for name, v in data.data_vars.items()}
    assert got == VARIABLES
    count = LAST - FIRST
    assert data.sizes == {
        **{"frame": count, "segment": 2, "marker": 8, "joint": 1, "dof": 3, "axis": 3, "row": 3, "col": 3},
        **{"subject": 1, "trial": 1},
    }
    for name, value in (("subject", "P01"), ("trial", "stairs_01"), ("activity", "stairs")):
        assert data[name].dims == ("frame",)
        assert data[name].to_numpy().tolist() == [value] * count
    assert data["time"].dims == ("frame",)
    assert data["time"].attrs["units"] == "s"
    assert data["marker"].to_numpy().tolist() == list(MARKERS)
    assert data["dof"].to_numpy().tolist() == ["flexion", "adduction", "internal_rotation"]
    assert data["clock_lag"].to_numpy().tolist() == [0.0]
    np.testing.assert_array_equal(data["space_rotation"][0], np.eye(3))
    np.testing.assert_array_equal(data["space_position"][0], np.zeros(3))
    np.testing.assert_allclose(data["bone_sd_position"], 0.0005)
    np.testing.assert_allclose(data["bone_sd_rotation"], np.radians(0.5))
    assert data["frames_used"].to_numpy().tolist() == [count]
    assert data.attrs["title"] == "Courier stair study, right leg"
    assert data.attrs["study"] == "study.toml"
    assert json.loads(data.attrs["covariates"]) == {"P01": {"mass_kg": 71.5}}
    assert "invented_data" not in data.attrs
    trial = study.trial("P01", "stairs_01")
    assert input_digests(data) == {"P01/stairs_01": trial.digest()}


def test_hidden_markers_are_nan_and_counted(tmp_path: Path) -> None:
    truth = paired_leg(tmp_path, change=hide_ta)
    data = pair(read_study(truth.path))
    expected = truth.displacement.copy()
    expected[2:5, 0] = np.nan
    np.testing.assert_allclose(data["displacement"], expected, atol=1e-9)
    length = np.linalg.norm(expected, axis=-1)
    np.testing.assert_allclose(data["displacement_rms"][0], np.sqrt(np.nanmean(length**2, axis=0)), atol=1e-9)
    np.testing.assert_allclose(data["displacement_peak"][0], np.nanmax(length, axis=0), atol=1e-9)
    share = np.ones(8)
    share[0] = 12 / 15
    np.testing.assert_allclose(data["marker_seen_share"][0], share)


def test_a_marker_that_is_never_seen_with_the_bone(tmp_path: Path) -> None:
    def cover(points: dict[str, FloatArray]) -> None:
        points["SB"][FIRST:LAST] = np.nan

    data = pair(read_study(paired_leg(tmp_path, change=cover).path))
    assert np.isnan(data["displacement"].sel(marker="SB")).all()
    assert np.isnan(data["displacement_rms"].sel(marker="SB")).all()
    assert np.isnan(data["displacement_peak"].sel(marker="SB")).all()
    assert data["marker_seen_share"].sel(marker="SB").to_numpy().tolist() == [0.0]


def test_paired_data_goes_to_a_file_and_back(tmp_path: Path) -> None:
    data = pair(read_study(paired_leg(tmp_path).path))
    write_dataset(tmp_path / "pairs.nc", data, "pairs", input_digests(data))
    back = read_dataset(tmp_path / "pairs.nc", "pairs")
    for name in VARIABLES:
        np.testing.assert_array_equal(back[name], data[name])
    with xr.open_dataset(tmp_path / "pairs.nc", engine="h5netcdf") as plain:
        assert plain["displacement"].attrs["units"] == "m"
        assert json.loads(plain.attrs["input_digests"]) == input_digests(data)


def test_bone_frames_between_skin_frames_are_interpolated(tmp_path: Path) -> None:
    """Markers of a still leg that creep along straight lines: interpolation is exact."""

    def creep(points: dict[str, FloatArray]) -> None:
        still = leg_points(np.tile(leg_poses(REFERENCE_POSTURE), (FRAMES, 1, 1, 1)))
        for name in points:
            points[name] = still[name] + 0.0002 * np.arange(FRAMES)[:, None]
        points["TC"][20] = np.nan

    instants = np.array([0.104, 0.155, 0.197, 0.203, 0.22])
    truth = paired_leg(tmp_path, change=creep)
    poses = np.tile(leg_poses(REFERENCE_POSTURE), (5, 1, 1, 1))
    write_bones(tmp_path / "stairs_bone.csv", ("thigh", "shank"), instants, poses)
    data = pair(read_study(truth.path))
    lab = np.einsum(
        "fsij,fsj->fsi", data["bone_rotation"].to_numpy(), data["displacement"].to_numpy()[:, [0, 4]]
    )
    np.testing.assert_allclose(lab, 0.02 * instants[:, None, None] * np.ones((5, 2, 3)), atol=1e-9)
    hidden = np.isnan(data["displacement"].sel(marker="TC").to_numpy()).any(axis=1)
    assert hidden.tolist() == [False, False, True, True, False]


def test_frames_outside_the_trial_are_left_out_with_a_warning(tmp_path: Path) -> None:
    truth = paired_leg(tmp_path)
    poses = motion()[1]
    late = np.concatenate([poses[33:], np.tile(poses[-1:], (8, 1, 1, 1))])
    write_bones(tmp_path / "stairs_bone.csv", ("thigh", "shank"), np.arange(33, 48) / 100, late)
    with warns("P01, stairs_01: 8 of 15 bone frames lie outside the skin trial. They are left out."):
        data, report = pair_with_report(read_study(truth.path))
    np.testing.assert_allclose(data["time"], np.arange(33, 40) / 100, atol=1e-12)
    assert data["frames_used"].to_numpy().tolist() == [7]
    assert report == PairingReport(())


def test_a_window_wholly_outside_is_refused(tmp_path: Path) -> None:
    truth = paired_leg(tmp_path, table_time=np.arange(LAST - FIRST) / 100 + 7.0)
    with says(
        InputError,
        "P01, stairs_01: bone truth from 7.000 to 7.140 s lies outside the skin trial, expected within 0.000 "
        "to 0.390 s. Check the bone table's clock.",
    ):
        pair(read_study(truth.path))


@pytest.mark.parametrize("name", ["clock", "space"])
def test_separate_systems_are_refused(tmp_path: Path, name: str) -> None:
    truth = paired_leg(tmp_path, study=PAIRED_STUDY + f'{name} = "estimate"\n')
    with says(
        InputError,
        f'P01, stairs_01: {name} = "estimate" cannot be paired by this version, expected "shared". '
        "Bring the bone truth to the skin system's clock and lab frame first.",
    ):
        pair(read_study(truth.path))


def test_a_study_without_bone_truth_is_refused(tmp_path: Path) -> None:
    truth = paired_leg(tmp_path, study=STUDY.replace('bone = "stairs_bone.csv"\n', ""))
    with says(
        InputError,
        f"{truth.path}: no chosen trial has bone truth. Add bone = … to a trial or choose others.",
    ):
        pair(read_study(truth.path))


def test_assumed_accuracy_of_bone_truth_is_said_once(tmp_path: Path) -> None:
    truth = paired_leg(tmp_path, study=STUDY)
    with warns(
        "P01, stairs_01: bone_sd is not declared here, taken as 0.5 mm and 0.5°. Declare the accuracy of "
        "your bone truth in motion: it is taken out of the artifact."
    ):
        pair(read_study(truth.path))

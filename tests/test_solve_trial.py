"""A whole trial: estimators by name, the solution's variables, invariances, warnings."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from made_studies import LAB, leg_points, leg_poses, says, warns, write_points
from made_trials import (
    MARKERS,
    STUDY_WITHOUT_BONE,
    fixed_prior,
    hide,
    moved_points,
    moving_poses,
    write_moving_leg,
)
from scipy.spatial.transform import Rotation

from sta_prior import se3
from sta_prior.angles import JointConvention, joint_angles
from sta_prior.checks import FloatArray
from sta_prior.errors import InputError
from sta_prior.io.netcdf import read_dataset, write_dataset
from sta_prior.pairs.belonging import DISTANCE_LIMIT
from sta_prior.rigid import fit_rigid
from sta_prior.solve import DEFAULT_ESTIMATOR, ESTIMATORS, WITH_PRIOR, solve
from sta_prior.study import Study, read_study

FRAMES = 40


STOPPED = {
    "rigid": "closed form",
    "linked": "step below 1e-08 rad and m in every frame",
    "frame-map": "step below 1e-08 rad and m in every frame",
    "smoother": "step below 1e-07 rad and m in every frame",
}


def solved(study: Study, estimator: str = "frame-map") -> xr.Dataset:
    prior = fixed_prior() if estimator in WITH_PRIOR else None
    return solve(study.trial("P01", "stairs_01"), prior, estimator)


def poses_of(data: xr.Dataset, kind: str = "") -> FloatArray:
    return se3.make_pose(data[f"{kind}rotation"].to_numpy(), data[f"{kind}position"].to_numpy())


def test_estimators_are_those_of_this_version() -> None:
    assert ESTIMATORS == ("rigid", "linked", "frame-map", "smoother")
    assert DEFAULT_ESTIMATOR == "smoother"


def test_unknown_estimator_is_refused_with_the_nearest(tmp_path: Path) -> None:
    study = write_moving_leg(tmp_path)
    with says(
        InputError,
        "--estimator: no estimator frame-mop here, known: rigid, linked, frame-map, smoother. "
        "Did you mean frame-map?",
    ):
        solve(study.trial("P01", "stairs_01"), fixed_prior(), "frame-mop")


@pytest.mark.parametrize("estimator", WITH_PRIOR)
def test_a_prior_is_needed(tmp_path: Path, estimator: str) -> None:
    study = write_moving_leg(tmp_path)
    with says(
        InputError,
        f"--estimator {estimator}: needs a prior. Give --prior, or use --estimator rigid or linked.",
    ):
        solve(study.trial("P01", "stairs_01"), estimator=estimator)


VARIABLES = {
    "pose_rank": (("time", "segment"), "1"),
    "rotation": (("time", "segment", "row", "col"), "1"),
    "position": (("time", "segment", "axis"), "m"),
    "pose_covariance": (("time", "segment", "pose", "pose2"), "rad2, rad m, m2"),
    "rigid_rotation": (("time", "segment", "row", "col"), "1"),
    "rigid_position": (("time", "segment", "axis"), "m"),
    "angle": (("time", "joint", "dof"), "rad"),
    "angle_sd": (("time", "joint", "dof"), "rad"),
    "angle_rigid": (("time", "joint", "dof"), "rad"),
    "joint_travel": (("time", "joint", "axis"), "m"),
    "joint_travel_sd": (("time", "joint", "axis"), "m"),
    "artifact": (("time", "marker", "axis"), "m"),
    "artifact_sd": (("time", "marker", "axis"), "m"),
    "information_share": (("time", "segment", "pose", "source"), "1"),
    "conflict_p": (("time", "segment"), "1"),
    "informed": (("time",), "1"),
    "marker_seen": (("time", "marker"), "1"),
}


@pytest.mark.parametrize("estimator", ESTIMATORS)
def test_solution_has_the_variables_of_the_contract(tmp_path: Path, estimator: str) -> None:
    """CONTRACT, "Solution": all but support, support_class, which belong to a later layer."""
    data = solved(write_moving_leg(tmp_path), estimator)
    expected = {
        name: what for name, what in VARIABLES.items() if estimator in WITH_PRIOR or name[:4] != "conf"
    }
    got = {str(name): (v.dims, v.attrs["units"]) for name, v in data.data_vars.items()}
    assert got == expected
    assert data.sizes == {
        **{"time": FRAMES, "segment": 2, "row": 3, "col": 3, "axis": 3, "pose": 6, "pose2": 6},
        **{"joint": 1, "dof": 3, "marker": 8, "source": 4},
    }
    coordinates = {
        "segment": ["thigh", "shank"],
        "marker": [*MARKERS["thigh"], *MARKERS["shank"]],
        "joint": ["knee"],
        "dof": ["flexion", "adduction", "internal_rotation"],
        "axis": ["x", "y", "z"],
        "pose": ["rx", "ry", "rz", "tx", "ty", "tz"],
        "source": ["markers", "artifact_prior", "joint", "motion"],
    }
    for name, values in coordinates.items():
        assert list(data[name].to_numpy()) == values
    np.testing.assert_allclose(data["time"], np.arange(FRAMES) / 100, atol=1e-12)
    assert data["time"].attrs["units"] == "s"
    for name in expected:
        assert np.isfinite(data[name].to_numpy().astype(float)).all(), name
    np.testing.assert_allclose(data["information_share"].sum("source"), 1.0, atol=1e-9)


@pytest.mark.parametrize("estimator", ESTIMATORS)
def test_solution_has_the_attributes_of_the_contract(tmp_path: Path, estimator: str) -> None:
    study = write_moving_leg(tmp_path)
    data = solved(study, estimator)
    seconds = data.attrs.pop("seconds")
    iterations = data.attrs.pop("iterations")
    # One where the markers move from frame to frame as the prior's residual does.
    assert 0.7 < data.attrs.pop("misfit", 1.0) < 1.4
    assert 0.0 <= seconds < 60.0
    assert 1 <= iterations < 30
    with_prior = estimator in WITH_PRIOR
    assert data.attrs == {
        "estimator": estimator,
        "stop_reason": STOPPED[estimator],
        "prior_digest": "d" * 64 if with_prior else "",
        "input_digest": study.trial("P01", "stairs_01").digest(),
        "observability": "",
        "bridged": "",
        "suspects": "",
        "reference_notes": "",
        "belief": "made up" if with_prior else "no prior",
        "covariance": "posterior"
        if with_prior
        else "scatter of the markers about the fit; silent about artifact that a cluster's markers share",
        "subject": "P01",
        "trial": "stairs_01",
        "activity": "stairs",
    }


def test_invented_data_stays_marked(tmp_path: Path) -> None:
    study = write_moving_leg(tmp_path)
    assert "invented_data" not in solve(study.trial("P01", "stairs_01"), fixed_prior()).attrs
    invented = solve(study.trial("P01", "stairs_01"), fixed_prior(invented=True))
    assert invented.attrs["invented_data"] == 1
    other = tmp_path / "other"
    other.mkdir()
    own = write_moving_leg(other, study="invented_data = true\n" + STUDY_WITHOUT_BONE)
    assert solved(own, "rigid").attrs["invented_data"] == 1


def test_solution_goes_to_a_file_and_back(tmp_path: Path) -> None:
    data = solved(write_moving_leg(tmp_path))
    path = tmp_path / "stairs_01.solution.nc"
    write_dataset(path, data, "solution", {"skin": data.attrs["input_digest"]})
    back = read_dataset(path, "solution")
    for name in VARIABLES:
        np.testing.assert_array_equal(back[name], data[name])


def test_rigid_is_the_rigid_fit_told_as_a_solution(tmp_path: Path) -> None:
    study = write_moving_leg(tmp_path)
    data = solved(study, "rigid")
    trial = study.trial("P01", "stairs_01")
    reference, points = trial.subject.reference(), trial.skin()["position"].to_numpy()
    for index in range(2):
        own = slice(4 * index, 4 * index + 4)
        fit = fit_rigid(reference.markers[own], points[:, own])
        np.testing.assert_allclose(poses_of(data)[:, index], fit.pose, atol=1e-12)
        inside = se3.transform_points(se3.inverse(fit.pose), points[:, own])
        covariance = (fit.spread**2).mean() * fit.unit_covariance
        np.testing.assert_allclose(data["pose_covariance"][:, index], covariance, rtol=1e-6, atol=1e-12)
        np.testing.assert_allclose(data["artifact"][:, own], inside - reference.markers[own], atol=1e-9)
    np.testing.assert_allclose(data["angle"], data["angle_rigid"], atol=1e-9)
    np.testing.assert_array_equal(data["rotation"], data["rigid_rotation"])
    np.testing.assert_allclose(data["information_share"][..., 0], 1.0, atol=1e-9)


@pytest.mark.parametrize("estimator", ESTIMATORS)
def test_rigid_fit_beside_every_estimate(tmp_path: Path, estimator: str) -> None:
    study = write_moving_leg(tmp_path)
    data = solved(study, estimator)
    rigid = solved(study, "rigid")
    for name in ("rigid_rotation", "rigid_position", "angle_rigid"):
        np.testing.assert_array_equal(data[name], rigid[name])
    if estimator != "rigid":
        assert np.abs(data["angle"] - data["angle_rigid"]).max() > 0.005


def test_angles_and_travel_are_those_of_the_poses(tmp_path: Path) -> None:
    study = write_moving_leg(tmp_path)
    data = solved(study)
    poses = poses_of(data)
    across = se3.inverse(poses[:, 0]) @ poses[:, 1]
    angles = joint_angles(JointConvention("knee", "right"), across[:, :3, :3])
    np.testing.assert_allclose(data["angle"][:, 0], angles, atol=1e-12)
    proximal, distal = study.trial("P01", "stairs_01").subject.reference().joint_centres[0]
    travel = across[:, :3, :3] @ distal + across[:, :3, 3] - proximal
    np.testing.assert_allclose(data["joint_travel"][:, 0], travel, atol=1e-12)


def test_conflict_p_is_small_where_a_marker_slips(tmp_path: Path) -> None:
    def slip(points: dict[str, FloatArray]) -> None:
        points["TB"][20:] += [0.0, 0.03, 0.0]

    usual = solved(write_moving_leg(tmp_path, alone=True))["conflict_p"].to_numpy()
    slipped = solved(write_moving_leg(tmp_path, change=slip, alone=True))["conflict_p"].to_numpy()
    assert 0.2 < np.median(usual) < 0.8
    np.testing.assert_allclose(slipped[:20], usual[:20], atol=1e-12)
    assert np.median(slipped[20:, 0]) < 0.001


def test_estimate_is_near_the_truth_it_was_drawn_from(tmp_path: Path) -> None:
    data = solved(write_moving_leg(tmp_path))
    error = se3.log(se3.inverse(poses_of(data)) @ moving_poses(FRAMES))
    sd = np.sqrt(np.einsum("tsxx->tsx", data["pose_covariance"].to_numpy()))
    normalised = (error / sd) ** 2
    assert 0.5 < normalised.mean() < 1.6
    rigid = se3.log(se3.inverse(poses_of(data, "rigid_")) @ moving_poses(FRAMES))
    assert np.sqrt((error**2).mean()) < np.sqrt((rigid**2).mean())


@pytest.mark.parametrize("estimator", ESTIMATORS)
def test_lab_frame_does_not_matter(tmp_path: Path, estimator: str) -> None:
    """The trial, not the static trial, in a lab that is turned and shifted: only the poses follow."""
    turn = Rotation.from_rotvec([0.4, -1.1, 0.7]).as_matrix()
    move = se3.make_pose(turn, np.array([1.5, -0.4, 3.0]))
    here = solved(write_moving_leg(tmp_path), estimator)
    there = solved(write_moving_leg(tmp_path, move=move), estimator)
    np.testing.assert_allclose(poses_of(there), move @ poses_of(here), atol=1e-8)
    np.testing.assert_allclose(poses_of(there, "rigid_"), move @ poses_of(here, "rigid_"), atol=1e-8)
    for name in set(here.data_vars) - {"rotation", "position", "rigid_rotation", "rigid_position"}:
        np.testing.assert_allclose(there[name], here[name], atol=1e-8, err_msg=str(name))


@pytest.mark.parametrize("estimator", ESTIMATORS)
def test_order_of_markers_and_segments_does_not_matter(tmp_path: Path, estimator: str) -> None:
    thigh, rest = LAB.index("[segment.thigh]"), LAB.index("[joint.knee]")
    shank = LAB.index("[segment.shank]")
    other = LAB[:thigh] + LAB[shank:rest] + LAB[thigh:shank] + LAB[rest:]
    other = other.replace('["TA", "TB", "TC", "TD"]', '["TC", "TA", "TD", "TB"]')
    other = other.replace('["SA", "SB", "SC", "SD"]', '["SD", "SC", "SB", "SA"]')
    here = solved(write_moving_leg(tmp_path), estimator)
    there = solved(write_moving_leg(tmp_path, lab=other), estimator)
    assert list(there["segment"].to_numpy()) == ["shank", "thigh"]
    assert list(there["marker"].to_numpy())[:2] == ["SD", "SC"]
    there = there.sel(segment=here["segment"], marker=here["marker"])
    for name in here.data_vars:
        np.testing.assert_allclose(there[name], here[name], atol=1e-8, err_msg=str(name))


def test_unit_of_the_file_does_not_matter(tmp_path: Path) -> None:
    study = write_moving_leg(tmp_path)
    here = solved(study)
    points = moved_points(moving_poses(FRAMES))
    write_points(tmp_path / "stairs.csv", {name: xyz / 1000 for name, xyz in points.items()})
    text = (tmp_path / "stairs.csv").read_text(encoding="utf-8")
    (tmp_path / "stairs.csv").write_text(text.replace("# unit: mm", "# unit: m"), encoding="utf-8")
    there = solved(read_study(tmp_path / "study.toml"))
    for name in here.data_vars:
        np.testing.assert_allclose(there[name], here[name], atol=1e-8, err_msg=str(name))


def test_left_leg_is_the_mirror_of_the_right(tmp_path: Path) -> None:
    """Linked, which needs no prior: anatomical angles are the same, poses are mirrored across z."""
    right = solved(write_moving_leg(tmp_path), "linked")
    mirror = np.array([1.0, 1.0, -1.0])
    left_folder = tmp_path / "left"
    left_folder.mkdir()

    def flip(points: dict[str, FloatArray]) -> None:
        for name, xyz in points.items():
            points[name] = xyz * mirror

    subject = STUDY_WITHOUT_BONE.replace('id = "P01"\n', 'id = "P01"\nside = "left"\n')
    study = write_moving_leg(left_folder, study=subject, change=flip, side="left")
    left = solved(study, "linked")
    np.testing.assert_allclose(left["angle"], right["angle"], atol=1e-8)
    np.testing.assert_allclose(left["position"], right["position"] * mirror, atol=1e-8)
    np.testing.assert_allclose(left["artifact"], right["artifact"] * mirror, atol=1e-8)
    np.testing.assert_allclose(left["angle_sd"], right["angle_sd"], atol=1e-8)


def test_informed_marks_exactly_the_paired_instants(tmp_path: Path) -> None:
    study = write_moving_leg(tmp_path)
    trial = study.trial("P01", "stairs_01")
    for instants, marked in (
        ([0.05, 0.06, 0.07, 0.31], [5, 6, 7, 31]),
        ([0.12], [12]),
        ([0.0, 0.39], [0, 39]),
        ([0.1001, 0.1999, 0.5], [10, 20]),
        ([], []),
    ):
        data = solve(trial, fixed_prior(np.array(instants)))
        assert data["informed"].dtype == np.int8
        assert np.flatnonzero(data["informed"].to_numpy()).tolist() == marked
    assert not solved(study, "linked")["informed"].any()


def test_one_frame_is_a_trial_too(tmp_path: Path) -> None:
    study = write_moving_leg(tmp_path, frames=1)
    data = solve(study.trial("P01", "stairs_01"), fixed_prior(np.array([0.0])))
    assert data.sizes["time"] == 1
    assert np.isfinite(data["angle"]).all()
    assert data["informed"].to_numpy().tolist() == [1]


def test_gimbal_posture_is_warned_of(tmp_path: Path) -> None:
    adduction = np.concatenate([np.full(30, 5.0), np.full(10, 78.0)])
    poses = np.stack([leg_poses((20.0, turn, 3.0)) for turn in adduction])

    def bend(points: dict[str, FloatArray]) -> None:
        points.update(leg_points(poses))

    study = write_moving_leg(tmp_path, change=bend)
    with warns(
        "P01, stairs_01, joint knee: 10 of 40 frames lie within 15° of the posture where its first and "
        "third angle cannot be told apart. Trust the poses there, not the angles."
    ):
        data = solved(study, "rigid")
    np.testing.assert_allclose(data["angle"][30:, 0, 1], np.radians(78.0), atol=1e-6)


def test_reference_that_does_not_belong_is_noticed(tmp_path: Path) -> None:
    """TD sits 40 mm higher than in the static trial, in every frame."""

    def replaced(points: dict[str, FloatArray]) -> None:
        poses = moving_poses(FRAMES)
        points.update(leg_points(poses))
        points["TD"] = points["TD"] + 0.04 * poses[:, 0, :3, 1]

    study = write_moving_leg(tmp_path, change=replaced)
    at = study.trial("P01", "stairs_01").subject.reference().markers[:4]
    now = at + np.array([[0.0, 0.0, 0.0]] * 3 + [[0.0, 0.04, 0.0]])
    first, second = np.triu_indices(4, 1)
    change = np.linalg.norm(now[first] - now[second], axis=1) - np.linalg.norm(at[first] - at[second], axis=1)
    words = (
        f"thigh marker distances differ from the reference by {1000 * np.sqrt((change**2).mean()):.1f} mm "
        f"RMS even in the best tenth of the frames, expected at most {1000 * DISTANCE_LIMIT:.0f} mm: "
        "the reference does not belong to this trial"
    )
    with warns(f"P01, stairs_01: {words}. Its poses are solved but should not be trusted."):
        data = solved(study, "rigid")
    assert data.attrs["reference_notes"] == words
    assert np.isfinite(data["position"]).all()


def test_hidden_marker_has_an_artifact_with_its_interval(tmp_path: Path) -> None:
    def cover(points: dict[str, FloatArray]) -> None:
        hide(points, "TB", slice(10, 30))

    whole = solved(write_moving_leg(tmp_path))
    data = solved(write_moving_leg(tmp_path, change=cover))
    marker = data["artifact"].sel(marker="TB").to_numpy()[10:30]
    sd = data["artifact_sd"].sel(marker="TB").to_numpy()[10:30]
    assert np.isfinite(marker).all()
    assert np.all(sd > whole["artifact_sd"].sel(marker="TB").to_numpy()[10:30])
    seen = whole["artifact"].sel(marker="TB").to_numpy()[10:30]
    assert np.abs((marker - seen) / sd).max() < 4.0
    np.testing.assert_array_equal(
        data["marker_seen"].sel(marker="TB").to_numpy()[[9, 10, 29, 30]], [1, 0, 0, 1]
    )

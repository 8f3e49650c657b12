from __future__ import annotations

import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from sta_prior.errors import InputError
from sta_prior.io.files import read_points
from sta_prior.io.text import read_bone_table
from sta_prior.simulate import (
    LANDMARKS,
    MARKERS,
    PopulationSettings,
    SimulatedStudy,
    simulate_study,
    write_study,
)
from sta_prior.simulate.artifact import SHANK
from sta_prior.simulate.motion import draw_style, task_motion
from sta_prior.study import read_study


@pytest.fixture(scope="module")
def written(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, SimulatedStudy]:
    folder = tmp_path_factory.mktemp("courier") / "study"
    return folder, write_study(folder, 5, size="small")


def test_files_say_that_they_are_invented(written: tuple[Path, SimulatedStudy]) -> None:
    folder, _ = written
    assert "INVENTED DATA" in (folder / "README.txt").read_text("utf-8")
    for name in ("study.toml", "truth.toml"):
        assert tomllib.loads((folder / name).read_text("utf-8"))["invented_data"] is True
    assert "invented" in tomllib.loads((folder / "lab.toml").read_text("utf-8"))["title"]
    names = {p.name for p in (folder / "K01").iterdir()}
    assert {"static.c3d", "stair-up_01.c3d", "stair-up_01_bone.csv", "stair-up_01_truth.csv"} <= names
    assert not list((folder / "K10").glob("*_bone.csv"))
    assert not [p for p in folder.rglob("*") if p.name.startswith(".")]


def test_points_and_bone_tables_read_back(written: tuple[Path, SimulatedStudy]) -> None:
    folder, study = written
    for subject, trial in [(s, t) for s in study.subjects for t in s.trials][::5]:
        stem = folder / subject.id / trial.id
        points = read_points(stem.with_suffix(".c3d"))
        assert list(points.point.values) == list(MARKERS)
        np.testing.assert_allclose(points.position.values, trial.points, atol=1e-6)
        np.testing.assert_allclose(points.time.values, trial.time, atol=1e-9)
        table = read_bone_table(Path(f"{stem}_truth.csv"))
        assert list(table.segment.values) == ["thigh", "shank"]
        np.testing.assert_allclose(table.rotation.values, trial.lab_from_bone[..., :3, :3], atol=1e-6)
        np.testing.assert_allclose(table.position.values, trial.lab_from_bone[..., :3, 3], atol=1e-6)
        if subject.imaged:
            imaged = read_bone_table(Path(f"{stem}_bone.csv"))
            np.testing.assert_allclose(imaged.position.values, trial.imaged_pose[..., :3, 3], atol=1e-6)
    static = read_points(folder / "K01" / "static.c3d")
    assert list(static.point.values) == [*MARKERS, *LANDMARKS]


def test_study_reads_back_with_reference_and_frames(written: tuple[Path, SimulatedStudy]) -> None:
    folder, simulated = written
    study = read_study(folder / "study.toml")
    truth = read_study(folder / "truth.toml")
    assert study.invented
    assert study.lab.markers == MARKERS
    for subject in simulated.subjects:
        read = next(s for s in study.subjects if s.id == subject.id)
        assert set(read.covariates) == {"mass_kg", "height_m"}
        reference = read.reference()
        assert reference.kind == "static"
        # noise of the static trial only: 0.3 mm over √60 frames, through frames built on landmarks
        np.testing.assert_allclose(reference.markers, subject.body.markers, atol=1e-3)
        np.testing.assert_allclose(reference.poses, subject.reference_pose, atol=2e-3)
        np.testing.assert_allclose(reference.angles[0], subject.style.reference_angles, atol=np.deg2rad(0.2))
        np.testing.assert_allclose(reference.joint_centres[0], subject.body.centres, atol=1e-3)
        for trial in subject.trials:
            archived = study.trial(subject.id, trial.id)
            assert archived.has_bone == subject.imaged
            assert len(archived.cycles) == len(trial.cycles)
            np.testing.assert_allclose(archived.skin().position.values, trial.points, atol=1e-6)
            exact = truth.trial(subject.id, trial.id)
            assert exact.has_bone
            assert exact.bone_sd_position == pytest.approx(0.05e-3)
            assert exact.bone_sd_rotation == pytest.approx(np.deg2rad(0.05))
        imaged = study.trial(subject.id, "level-walk_01")
        if subject.imaged:
            assert imaged.bone_sd_position == pytest.approx(0.5e-3)


def test_truth_and_artifact_agree_across_the_files(written: tuple[Path, SimulatedStudy]) -> None:
    # Marker through the exact bone table, minus the reference of the static trial, is the artifact.
    folder, simulated = written
    truth = read_study(folder / "truth.toml")
    subject = simulated.subjects[1]
    trial = subject.trials[0]
    read = truth.trial(subject.id, trial.id)
    bone = read.bone()
    assert bone is not None
    local = np.einsum(
        "tji,tmj->tmi",
        bone.rotation.values[:, 0],
        read.skin().position.values[:, :5] - bone.position.values[:, 0, None],
    )
    displacement = local - read.subject.reference().markers[:5]
    difference = displacement - trial.displacement[:, :5]
    assert np.sqrt(np.nanmean(difference**2)) < 0.5e-3  # instrument noise of trial and static trial


def test_write_again_over_an_invented_study_and_nowhere_else(tmp_path: Path) -> None:
    folder = tmp_path / "study"
    write_study(folder, 1, size="small")
    first = (folder / "K01" / "level-walk_01.c3d").read_bytes()
    write_study(folder, 1, size="small")
    assert (folder / "K01" / "level-walk_01.c3d").read_bytes() == first
    foreign = tmp_path / "mine"
    foreign.mkdir()
    (foreign / "study.toml").write_text('lab = "lab.toml"\n')
    with pytest.raises(InputError) as caught:
        write_study(foreign, 1)
    assert str(caught.value) == (
        f"{foreign}: not empty and holds no invented study. Name a new folder; nothing is overwritten."
    )
    with pytest.raises(InputError) as caught:
        write_study(foreign / "study.toml", 1)
    assert (
        str(caught.value) == f"{foreign / 'study.toml'}: is a file, expected a folder. Name another folder."
    )
    assert [p.name for p in foreign.iterdir()] == ["study.toml"]


def test_messages_for_unusable_arguments() -> None:
    with pytest.raises(InputError) as caught:
        simulate_study(1, "smal")
    assert str(caught.value) == "size: expected one of demo, small, got smal. Did you mean small?"
    generator = np.random.default_rng(1)
    with pytest.raises(InputError) as caught:
        task_motion("stairs-up", draw_style(generator), (0.42, 0.4), generator)
    assert str(caught.value) == (
        "task: expected one of stair-up, stair-down, parcel-lift, level-walk, got stairs-up. "
        "Did you mean stair-up?"
    )
    with pytest.raises(InputError) as caught:
        PopulationSettings(coupling=1.5)
    assert str(caught.value) == "PopulationSettings.coupling: expected 0 to below 1, got 1.5."
    with pytest.raises(InputError) as caught:
        PopulationSettings(rigid_share=-0.2)
    assert str(caught.value) == "PopulationSettings.rigid_share: expected 0 to below 1, got -0.2."
    with pytest.raises(InputError) as caught:
        PopulationSettings(correlation_time=-0.3)
    assert str(caught.value) == "PopulationSettings.correlation_time: expected a time above 0 s, got -0.3 s."


def test_message_for_sizes_that_do_not_fit() -> None:
    settings = PopulationSettings(shank=replace(SHANK, residual_rms=4e-3), between_share=0.45)
    with pytest.raises(InputError) as caught:
        simulate_study(1, "small", settings)
    assert str(caught.value) == (
        "PopulationSettings, shank: a residual of 4 mm and a between-subject share of 0.45 do not fit into a "
        "displacement of 4.9 mm. Lower the residual or move the share towards the middle."
    )

"""The study file: subjects, trials, lazy reading, and what it refuses in which words."""

from __future__ import annotations

import copy
import hashlib
import os
from pathlib import Path

import numpy as np
import pytest
from made_studies import (
    IMAGING_LAB,
    LAB,
    SHANK_MARKERS,
    STUDY,
    THIGH_MARKERS,
    leg_points,
    leg_poses,
    make_study,
    says,
    still,
    warns,
    write_bones,
    write_c3d,
    write_points,
)

from sta_prior.errors import InputError
from sta_prior.io.c3d import copy_with_rotations
from sta_prior.study import BoneSource, read_study, sources

TWO = (
    STUDY
    + """\
[[subject.trial]]
id = "stairs_02"
activity = "stairs"
session = "day2"
skin = "stairs.csv"
[[subject]]
id = "P02"
side = "left"
static = "static.csv"
[[subject.trial]]
id = "level_01"
activity = "level walk"
skin = "level.csv"
clock = "estimate"
clock_window_s = 0.2
space = "estimate"
bone = "stairs_bone.csv"
bone_sd = { mm = 1.0, deg = 0.7 }
cycles = [[0.42, 1.51], [1.51, 2.6]]
"""
)


def two_subjects(folder: Path) -> Path:
    path = make_study(folder, study=TWO)
    write_points(folder / "level.csv", still(leg_points(leg_poses()), 5))
    return path


def test_subjects_trials_and_defaults(tmp_path):
    study = read_study(two_subjects(tmp_path))
    assert [subject.id for subject in study.subjects] == ["P01", "P02"]
    assert (study.invented, study.title) == (False, "Courier stair study, right leg")
    first, second = study.subjects
    assert first.covariates == {"mass_kg": 71.5}
    assert (first.side, second.side) == ("right", "left")
    assert (study.lab.joints[0].convention.side, second.lab.joints[0].convention.side) == ("right", "left")
    trial = study.trial("P01", "stairs_01")
    assert (trial.activity, trial.session, trial.clock, trial.space) == ("stairs", "", "shared", "shared")
    assert trial.subject is first
    assert trial.has_bone
    assert trial.clock_window == 0.5
    # the documented default where no accuracy is declared
    assert (trial.bone_sd_position, trial.bone_sd_rotation) == (0.0005, pytest.approx(np.deg2rad(0.5)))
    assert not trial.bone_sd_declared
    level = study.trial("P02", "level_01")
    assert (level.clock, level.space, level.clock_window) == ("estimate", "estimate", 0.2)
    assert (level.bone_sd_position, level.bone_sd_rotation) == (0.001, pytest.approx(np.deg2rad(0.7)))
    assert level.bone_sd_declared
    np.testing.assert_array_equal(level.cycles, [[0.42, 1.51], [1.51, 2.6]])
    assert not study.trial("P01", "stairs_02").has_bone
    assert study.trial("P01", "stairs_02").bone() is None


def test_invented_data_and_title(tmp_path):
    text = 'title = "Made up"\ninvented_data = true\n' + STUDY
    study = read_study(make_study(tmp_path, study=text))
    assert study.invented
    assert study.subjects[0].invented
    assert study.title == "Made up"


def test_select_keeps_the_order_of_the_file(tmp_path):
    study = read_study(two_subjects(tmp_path))
    assert [trial.id for trial in study.select()] == ["stairs_01", "stairs_02", "level_01"]
    assert [trial.id for trial in study.select(["P02"])] == ["level_01"]
    assert [trial.id for trial in study.select(trials=["level_01", "stairs_01"])] == ["stairs_01", "level_01"]
    assert study.select(["P01"], ["stairs_02"]) == [study.trial("P01", "stairs_02")]


def test_unknown_ids_are_refused_with_the_nearest(tmp_path):
    path = two_subjects(tmp_path)
    study = read_study(path)
    with says(InputError, f"{path}: no subject P03. Did you mean P02?"):
        study.subject("P03")
    with says(InputError, f"{path}: no subject K07. Known: P01, P02."):
        study.select(["P01", "K07"])
    with says(InputError, f"{path}: no trial of subject P01 stairs_03. Did you mean stairs_02?"):
        study.trial("P01", "stairs_03")
    with says(InputError, f"{path}: no trial level_01. Known: stairs_01, stairs_02."):
        study.select(["P01"], ["level_01"])


# Skin and bone


def test_skin_holds_the_lab_s_markers_in_the_lab_s_order(tmp_path):
    points = still(leg_points(leg_poses()), 12, sd=0.001)
    shuffled = {name: points[name] for name in reversed(points)}
    make_study(tmp_path)
    write_c3d(tmp_path / "stairs.c3d", shuffled)
    path = tmp_path / "study.toml"
    path.write_text(STUDY.replace('"stairs.csv"', '"stairs.c3d"'), encoding="utf-8")
    trial = read_study(path).trial("P01", "stairs_01")
    skin = trial.skin()
    assert dict(skin.sizes) == {"time": 12, "marker": 8, "axis": 3}
    assert skin["marker"].to_numpy().tolist() == [*THIGH_MARKERS, *SHANK_MARKERS]
    assert skin["position"].dims == ("time", "marker", "axis")
    np.testing.assert_allclose(skin["position"][:, 5], points["SB"], atol=1e-6)
    assert skin.attrs["rate"] == 100.0
    assert trial.digest() == hashlib.sha256((tmp_path / "stairs.c3d").read_bytes()).hexdigest()


def test_a_marker_that_the_file_lacks_is_named(tmp_path):
    path = make_study(tmp_path)
    points = still(leg_points(leg_poses()), 12)
    points["TCx"] = points.pop("TC")
    write_points(tmp_path / "stairs.csv", points)
    with says(
        InputError,
        f"{tmp_path / 'stairs.csv'}, marker TC: not among the 15 points of the file. Did you mean TCx?",
    ):
        read_study(path).trial("P01", "stairs_01").skin()


def test_bone_comes_in_the_lab_s_order_with_gaps_for_what_is_not_there(tmp_path):
    path = make_study(tmp_path)
    poses = np.stack([leg_poses((f, 0.0, 0.0)) for f in (1.0, 2.0, 3.0)])
    write_bones(tmp_path / "stairs_bone.csv", ("shank", "thigh"), np.arange(3) / 100, poses[:, ::-1])
    bone = read_study(path).trial("P01", "stairs_01").bone()
    assert bone["segment"].to_numpy().tolist() == ["thigh", "shank"]
    np.testing.assert_allclose(bone["position"], poses[..., :3, 3], atol=1e-9)
    np.testing.assert_allclose(bone["rotation"], poses[..., :3, :3], atol=1e-9)
    write_bones(tmp_path / "stairs_bone.csv", ("shank",), np.arange(3) / 100, poses[:, 1:])
    bone = read_study(path).trial("P01", "stairs_01").bone()
    assert np.isnan(bone["position"][:, 0]).all()
    np.testing.assert_allclose(bone["position"][:, 1], poses[:, 1, :3, 3], atol=1e-9)


def test_segments_of_another_name_are_noticed_or_refused(tmp_path):
    path = make_study(tmp_path)
    poses = leg_poses()[None]
    write_bones(tmp_path / "stairs_bone.csv", ("tigh", "shank"), np.zeros(1), poses)
    with warns(f"{tmp_path / 'stairs_bone.csv'}: no poses of thigh, has tigh shank. Did you mean tigh?"):
        read_study(path).trial("P01", "stairs_01").bone()
    write_bones(tmp_path / "stairs_bone.csv", ("femur", "tibia"), np.zeros(1), poses)
    with says(
        InputError,
        f"{tmp_path / 'stairs_bone.csv'}: expected poses of thigh shank, has femur tibia. "
        "Name its segments as the lab file does.",
    ):
        read_study(path).trial("P01", "stairs_01").bone()


def test_bone_from_a_rotation_group(tmp_path):
    make_study(tmp_path)
    poses = np.stack([leg_poses((f, 2.0, 1.0)) for f in np.linspace(5, 20, 6)])
    points = leg_points(poses)
    write_c3d(tmp_path / "plain.c3d", points)
    copy_with_rotations(
        tmp_path / "plain.c3d", tmp_path / "poses.c3d", ["shank", "thigh"], poses[:, ::-1], np.ones((6, 2))
    )
    path = tmp_path / "study.toml"
    path.write_text(STUDY.replace('"stairs_bone.csv"', '{ rotations = "poses.c3d" }'), encoding="utf-8")
    trial = read_study(path).trial("P01", "stairs_01")
    assert trial.bone_source == BoneSource("rotations", tmp_path / "poses.c3d")
    bone = trial.bone()
    assert bone["segment"].to_numpy().tolist() == ["thigh", "shank"]
    np.testing.assert_allclose(bone["rotation"], poses[..., :3, :3], atol=1e-6)
    np.testing.assert_allclose(bone["position"], poses[..., :3, 3], atol=1e-6)


def test_bone_pins_are_taken_in_and_refused_when_read(tmp_path):
    pins = '{ pins = "pins.csv", clusters = { thigh = ["B1", "B2", "B3"], shank = ["B4", "B5", "B6"] } }'
    path = make_study(tmp_path, study=STUDY.replace('"stairs_bone.csv"', pins))
    write_points(tmp_path / "pins.csv", still(leg_points(leg_poses()), 3))
    trial = read_study(path).trial("P01", "stairs_01")
    assert trial.has_bone
    assert trial.bone_source.clusters == (("thigh", ("B1", "B2", "B3")), ("shank", ("B4", "B5", "B6")))
    with says(
        InputError,
        'P01, stairs_01, pins.csv: bone pins are not yet read. Give a bone pose table: bone = "….csv".',
    ):
        trial.bone()


# Cycles


def test_cycles_come_from_the_foot_strikes_of_the_subject_s_side(tmp_path):
    make_study(tmp_path)
    events = (
        ("Foot Strike", 0.50, "Right"),
        ("Foot Strike", 0.10, "Right"),
        ("Foot Strike", 0.30, "Left"),
        ("Foot Off", 0.35, "Right"),
        ("Foot Strike", 0.95, "Right"),
        ("Foot Strike", 0.70, "Left"),
    )
    write_c3d(tmp_path / "stairs.c3d", still(leg_points(leg_poses()), 120), events)
    path = tmp_path / "study.toml"
    path.write_text(STUDY.replace('"stairs.csv"', '"stairs.c3d"'), encoding="utf-8")
    np.testing.assert_allclose(
        read_study(path).trial("P01", "stairs_01").cycles, [[0.10, 0.50], [0.50, 0.95]], atol=1e-6
    )
    path.write_text(path.read_text("utf-8").replace("mass_kg", 'side = "left"\nmass_kg'), encoding="utf-8")
    np.testing.assert_allclose(read_study(path).trial("P01", "stairs_01").cycles, [[0.30, 0.70]], atol=1e-6)


def test_no_events_no_cycles(tmp_path):
    assert read_study(make_study(tmp_path)).trial("P01", "stairs_01").cycles.shape == (0, 2)


# Reading is lazy, and done once


def test_opening_a_study_of_hundreds_of_trials_reads_no_data(tmp_path, monkeypatch):
    trials = "".join(
        f'[[subject.trial]]\nid = "t{n}"\nactivity = "stairs"\nskin = "trial.c3d"\nbone = "bone.csv"\n'
        for n in range(400)
    )
    (tmp_path / "lab.toml").write_text(LAB, encoding="utf-8")
    for name in ("trial.c3d", "bone.csv", "static.c3d"):
        (tmp_path / name).write_text("not a data file", encoding="utf-8")
    study = tmp_path / "study.toml"
    study.write_text(
        'lab = "lab.toml"\n[[subject]]\nid = "P01"\nstatic = "static.c3d"\n' + trials, encoding="utf-8"
    )
    read = read_study(study)
    assert len(read.select()) == 400
    assert read.trial("P01", "t399").has_bone
    with pytest.raises(InputError):
        read.trial("P01", "t399").skin()


def test_a_file_is_read_once_until_it_changes(tmp_path, monkeypatch):
    path = make_study(tmp_path)
    calls: list[Path] = []
    real = sources.read_points

    def counted(file):
        calls.append(file)
        return real(file)

    monkeypatch.setattr(sources, "read_points", counted)
    study = read_study(path)
    trial = study.trial("P01", "stairs_01")
    before = trial.skin()
    trial.skin()
    assert calls == [tmp_path / "stairs.csv"]
    write_points(tmp_path / "stairs.csv", still(leg_points(leg_poses()), 7))
    os.utime(tmp_path / "stairs.csv", ns=(1, 1))
    assert trial.skin().sizes["time"] == 7
    assert before.sizes["time"] == 30
    assert len(calls) == 2
    subject = study.subjects[0]
    assert subject.reference() is subject.reference()
    assert calls[2:] == [tmp_path / "static.csv"]


def test_a_trial_can_be_copied_for_another_worker(tmp_path):
    trial = read_study(make_study(tmp_path)).trial("P01", "stairs_01")
    trial.subject.reference()
    twin = copy.deepcopy(trial)
    assert twin.subject.trials[0] is twin
    np.testing.assert_array_equal(twin.subject.reference().markers, trial.subject.reference().markers)
    assert "stairs_01" in repr(trial)


# What is refused

WRONG = [
    ("[[subject]]", "sbject = 1\n[[subject]]", ", sbject: unknown key 'sbject'. Did you mean subject?"),
    (
        '"lab.toml"',
        '"lab.tml"',
        ", lab: expected a file name ending in .toml, got lab.tml. It is the lab of the study.",
    ),
    (
        '"lab.toml"',
        '"labs.toml"',
        ", lab: no file labs.toml, needed for the study. Check the name and the folder.",
    ),
    (
        'static = "static.csv"',
        'statc = "static.csv"',
        ", subject[1].statc: unknown key 'statc'. Did you mean static?",
    ),
    (
        "mass_kg = 71.5",
        'mass_kg = "71.5"',
        ", subject[1].mass_kg: expected a number, as every covariate is, got '71.5'. "
        "Write a number, or one of the keys id, side, static, bone_static, reference_points, trial.",
    ),
    (
        'static = "static.csv"',
        'static = "standing.csv"',
        ", subject[1].static: no file standing.csv, needed for subject P01. Check the name and the folder.",
    ),
    (
        'static = "static.csv"',
        'static = "static.trc"',
        ", subject[1].static: expected a file name ending in .c3d, .csv, .nc, got static.trc. "
        "It is the static of subject P01.",
    ),
    (
        'static = "static.csv"\n',
        "",
        ", subject[1]: expected static or reference_points, got neither for subject P01. "
        "A reference posture comes from one of them.",
    ),
    (
        "mass_kg",
        'reference_points = "static.csv"\nmass_kg',
        ", subject[1]: expected static or reference_points, got both for subject P01. "
        "A reference posture comes from one of them.",
    ),
    (
        'skin = "stairs.csv"',
        'skin = "stairs.c3d"',
        ", subject[1].trial[1].skin: no file stairs.c3d, needed for subject P01, trial stairs_01. "
        "Check the name and the folder.",
    ),
    (
        'bone = "stairs_bone.csv"',
        'bone = "stair_bone.csv"',
        ", subject[1].trial[1].bone: no file stair_bone.csv, needed for subject P01, trial stairs_01. "
        "Check the name and the folder.",
    ),
    (
        'bone = "stairs_bone.csv"',
        'bone = { pin = "x.c3d" }',
        ", subject[1].trial[1].bone: expected a file name, or a table with either pins or rotations, "
        'got a table with pin. Write bone = "….csv", or { rotations = "….c3d" }.',
    ),
    (
        'bone = "stairs_bone.csv"',
        'bone = { rotations = "r.c3d" }',
        ", subject[1].trial[1].bone.rotations: no file r.c3d, needed for subject P01, trial stairs_01. "
        "Check the name and the folder.",
    ),
    (
        'bone = "stairs_bone.csv"',
        'bone = { pins = "static.csv", clusters = { tigh = ["A", "B", "C"] } }',
        ", subject[1].trial[1].bone.clusters.tigh: unknown key 'tigh'. Did you mean thigh?",
    ),
    (
        'bone = "stairs_bone.csv"',
        'bone = { pins = "static.csv", clusters = { thigh = ["A", "B"] } }',
        ", subject[1].trial[1].bone.clusters.thigh: expected at least 3 markers, got 2. "
        "Fewer do not show how a bone is turned.",
    ),
    (
        'bone = "stairs_bone.csv"',
        'bone = { pins = "static.csv", clusters = { thigh = ["A", "B", "A"] } }',
        ", subject[1].trial[1].bone.clusters.thigh: marker A stands 2 times. Name it once.",
    ),
    (
        'bone = "stairs_bone.csv"',
        "bone_sd = { mm = 0.5, degrees = 1 }",
        ", subject[1].trial[1].bone_sd.degrees: unknown key 'degrees'. Did you mean deg?",
    ),
    (
        'activity = "stairs"',
        'activity = "stairs"\nclok = "shared"',
        ", subject[1].trial[1].clok: unknown key 'clok'. Did you mean clock?",
    ),
    (
        'id = "stairs_01"',
        'id = "stairs/01"',
        ", subject[1].trial[1].id: 'stairs/01' cannot be an id, expected letters, digits, - _ + . and single "
        "blanks inside. Ids become file names.",
    ),
    (
        'id = "P01"',
        'id = "P01,P02"',
        ", subject[1].id: 'P01,P02' cannot be an id, expected letters, digits, - _ + . and single blanks "
        "inside. Ids become file names.",
    ),
    (
        'activity = "stairs"',
        'activity = "stairs"\ncycles = [[0.1, 0.9], [1.4, 1.2]]',
        ", subject[1].trial[1].cycles[2]: expected start and a later end in s, got [1.4, 1.2]. "
        "Write [0.42, 1.51].",
    ),
    (
        'activity = "stairs"',
        'activity = "stairs"\ncycles = "all"',
        ", subject[1].trial[1].cycles: expected a list of [start, end]. Write [[0.42, 1.51], …].",
    ),
    (
        STUDY[STUDY.index("[[subject]]") :],
        "subject = []\n",
        ", subject: no subjects, expected at least one. Add [[subject]].",
    ),
]


@pytest.mark.parametrize(("old", "new", "expected"), WRONG, ids=[str(n) for n in range(len(WRONG))])
def test_what_is_wrong_is_named_with_its_place(tmp_path, old, new, expected):
    assert old in STUDY
    path = make_study(tmp_path, study=STUDY.replace(old, new, 1))
    with says(InputError, f"{path}{expected}"):
        read_study(path)


def test_ids_stand_once(tmp_path):
    again = STUDY + STUDY[STUDY.index("[[subject]]") :]
    path = make_study(tmp_path, study=again)
    with says(
        InputError,
        f"{path}, subject[2].id: id P01 stands a second time, first in subject[1]. Give each its own id.",
    ):
        read_study(path)
    path = make_study(tmp_path, study=STUDY + STUDY[STUDY.index("[[subject.trial]]") :])
    with says(
        InputError,
        f"{path}, subject[1].trial[2].id: id stairs_01 stands a second time, first in trial[1]. "
        "Give each its own id.",
    ):
        read_study(path)


def test_one_skin_file_under_two_subjects_is_noticed(tmp_path):
    again = STUDY[STUDY.index("[[subject]]") :].replace("P01", "P02")
    path = make_study(tmp_path, study=STUDY + again)
    with warns(
        f"{path}, subject P02, trial stairs_01: skin file stairs.csv belongs to subject P01 too. "
        "Check the copy."
    ):
        read_study(path)


def test_a_side_where_the_lab_has_both_is_refused(tmp_path):
    both = LAB.replace('kind = "knee"\nside = "right"', 'kind = "knee"\nside = "left"')
    path = make_study(tmp_path, lab=both, study=STUDY.replace("mass_kg", 'side = "left"\nmass_kg'))
    with says(
        InputError,
        f"{tmp_path / 'lab.toml'}: has joints or frames of both sides, side = 'left' cannot replace them. "
        "Leave out the subject's side.",
    ):
        read_study(path)


# Real data

DATA = Path(__file__).parents[2] / "shared" / "data"
PAIRED = {"pins-able": 3, "cadaver-pins": 1, "fluoro-able": 4, "fluoro-prosthesis": 3}


@pytest.mark.parametrize(("folder", "trials"), PAIRED.items())
def test_real_paired_studies_open_and_read(folder, trials):
    if not (DATA / "paired" / folder).is_dir():
        pytest.skip(f"real data not here: {DATA / 'paired' / folder}")
    study = read_study(DATA / "paired" / folder / "study.toml")
    truth = read_study(DATA / "paired" / folder / "truth.toml")
    assert len(study.select()) == trials
    for trial in study.select():
        skin, bone = trial.skin(), trial.bone()
        whole = truth.trial(trial.subject.id, trial.id).bone()
        assert skin["marker"].to_numpy().tolist() == list(study.lab.markers)
        assert bone["segment"].to_numpy().tolist() == list(study.lab.segment_names)
        assert skin.sizes["time"] == bone.sizes["time"] == whole.sizes["time"]
        seen = np.isfinite(bone["position"]).all(dim=["segment", "axis"])
        # the windows show every other eighth of the trial; where they do, both tables agree
        assert 0.3 < float(seen.mean()) < 0.65
        np.testing.assert_array_equal(bone["position"][seen], whole["position"][seen])
        assert (trial.bone_sd_position, trial.bone_sd_declared) == (0.001, True)
        # markers lie within half a metre of the bone they are on
        own = skin["position"].to_numpy() - whole["position"].to_numpy()[:, study.lab.marker_segment]
        assert np.nanmax(np.linalg.norm(own, axis=-1)) < 0.5


SKIN_ONLY = {
    # up axis, static and trial, thigh and shank markers, hip, knee and ankle points
    "gappy-walk": (
        "z",
        ("sample26_Standing_Hybrid_1.c3d", "sample26_Walking_Hybrid_1_1.c3d"),
        ([f"R_THIGH_{n}" for n in (1, 2, 3, 4)], [f"R_SHANK_{n}" for n in (1, 2, 3, 4)]),
        ("R_TROCH", "R_KNEE_LAT", "R_KNEE_MED", "R_ANKLE_LAT", "R_ANKLE_MED"),
    ),
    "skin-walk": (
        "y",
        ("run_static.c3d", "run.c3d"),
        (["RTH1", "RTH2", "RTH3"], ["RTB1", "RTB2", "RTB3"]),
        ("RHJC", "RLFC", "RMFC", "RLMAL", "RMMAL"),
    ),
}


@pytest.mark.parametrize("folder", SKIN_ONLY)
def test_real_static_trials_give_a_standing_leg(folder, tmp_path):
    place = DATA / "skin_only" / folder
    if not place.is_dir():
        pytest.skip(f"real data not here: {place}")
    up, (static, walk), (thigh, shank), (hip, lateral, medial, outer, inner) = SKIN_ONLY[folder]
    names = {
        "HJC": hip,
        "LEP": lateral,
        "MEP": medial,
        "LMA": outer,
        "MMA": inner,
        "LCO": lateral,
        "MCO": medial,
    }
    lab = LAB.replace('up = "y"', f'up = "{up}"')
    for generic, label in names.items():
        lab = lab.replace(f'"{generic}"', f'"{label}"')
    lab = lab.replace('["TA", "TB", "TC", "TD"]', str(thigh)).replace('["SA", "SB", "SC", "SD"]', str(shank))
    (tmp_path / "lab.toml").write_text(lab, encoding="utf-8")
    study = STUDY.replace("static.csv", str(place / static)).replace("stairs.csv", str(place / walk))
    (tmp_path / "study.toml").write_text(study.replace('bone = "stairs_bone.csv"\n', ""), encoding="utf-8")
    subject = read_study(tmp_path / "study.toml").subjects[0]
    reference = subject.reference()
    assert np.abs(np.rad2deg(reference.angles)).max() < 20
    # both bones stand: their y axes are within 20° of up
    assert (reference.poses[:, :3, 1] @ subject.lab.up_vector).min() > np.cos(np.deg2rad(20))
    assert reference.marker_sd.max() < 0.005
    assert subject.trials[0].skin().sizes["marker"] == len(thigh) + len(shank)


def test_imaging_labs_need_no_landmarks(tmp_path):
    study = STUDY.replace('static = "static.csv"', 'static = "stairs.csv"')
    subject = read_study(make_study(tmp_path, lab=IMAGING_LAB, study=study)).subjects[0]
    assert subject.lab.frame_points == ()
    assert subject.reference().kind == "bone"

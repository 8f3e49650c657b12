"""Bad input through the command line: status 2, one line that helps, nothing written, no traceback.

Messages of the layers below have tests of their own, whole; here it is the place, what is wrong and
the numbers that must reach the user.
"""

from __future__ import annotations

import os
import re
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from made_laboratory import (
    Done,
    contents,
    cut,
    leg_motion,
    make_leg_study,
    replace_in,
    run,
)
from made_studies import leg_points, write_bones, write_c3d, write_points
from typer.testing import CliRunner

from sta_prior.checks import FloatArray
from sta_prior.cli import app

SOLVE = ("solve", "study.toml", "--out", "s", "--estimator", "rigid")
PAIR = ("pair", "study.toml", "--out", "p.nc")
LEARN = ("learn", "p.nc", "--out", "q.nc")
MAP = ("solve", "study.toml", "--prior", "q.nc", "--out", "s")
# place: what is wrong. What to do.
FORM = re.compile(r"Error\. [^:]+: .+[.…] ?(?:[A-Z].*[.?])?")

Change = Callable[[Path], object]


def expect_refusal(folder: Path, words: tuple[str, ...], start: str, *parts: str) -> Done:
    """Run a command that must be refused: check the message's form, its start, and that nothing is left."""
    before = contents(folder)
    done = run(folder, *words)
    assert done.status == 2, done
    assert done.out == ""
    lines = done.err.splitlines()
    assert len(lines) <= 2
    assert "Traceback" not in done.err
    assert FORM.fullmatch(lines[-1]), done.err
    assert lines[-1].startswith(f"Error. {start}"), done.err
    assert [part for part in parts if part not in done.err] == [], done.err
    assert contents(folder) == before
    return done


@pytest.fixture
def leg(tmp_path: Path) -> Path:
    """A folder with a study that every command takes."""
    make_leg_study(tmp_path)
    return tmp_path


@pytest.fixture(scope="module")
def learned(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The same folder with pairs p.nc, prior q.nc and solutions s; not to be changed."""
    folder = tmp_path_factory.mktemp("learned")
    make_leg_study(folder)
    for words in (PAIR, LEARN, MAP):
        assert run(folder, *words).status == 0
    return folder


def copy_of(learned: Path, folder: Path) -> Path:
    """A copy of the folder that a test may spoil."""
    for path in sorted(learned.rglob("*")):
        target = folder / path.relative_to(learned)
        if path.is_dir():
            target.mkdir()
        else:
            target.write_bytes(path.read_bytes())
    return folder


def test_the_study_of_this_file_is_good(leg: Path) -> None:
    assert run(leg, *SOLVE).status == 0
    assert run(leg, *PAIR).status == 0


C3D_CASES: dict[str, tuple[Change, tuple[str, ...]]] = {
    "truncated in the data": (lambda d: cut(d / "stairs_01.c3d", 4000), ("truncated", "expected 30 frames")),
    "truncated in the head": (lambda d: cut(d / "stairs_01.c3d", 300), ("truncated", "300 bytes")),
    "empty": (lambda d: cut(d / "stairs_01.c3d", 0), ("the file is empty",)),
    "a picture": (
        lambda d: (d / "stairs_01.c3d").write_bytes(b"\x89PNG\r\n\x1a\n" + bytes(900)),
        ("not a C3D",),
    ),
    "a table": (lambda d: (d / "stairs_01.c3d").write_text("time,TA_x\n" * 99), ("not a C3D file",)),
}


@pytest.mark.parametrize("name", C3D_CASES)
@pytest.mark.parametrize("words", [SOLVE, PAIR], ids=["solve", "pair"])
def test_a_c3d_file_that_is_none(leg: Path, name: str, words: tuple[str, ...]) -> None:
    change, parts = C3D_CASES[name]
    change(leg)
    expect_refusal(leg, words, "stairs_01.c3d: ", *parts)


def test_a_static_trial_that_is_none(leg: Path) -> None:
    cut(leg / "static.c3d", 5000)
    expect_refusal(leg, SOLVE, "static.c3d: truncated, expected 40 frames, got ")


def test_a_missing_marker(leg: Path) -> None:
    points = leg_points(leg_motion())
    points["TX"] = points.pop("TC")
    write_c3d(leg / "stairs_01.c3d", points)
    expect_refusal(
        leg, SOLVE, "stairs_01.c3d, marker TC: not among the 15 points of the file.", "Did you mean T"
    )


def test_a_marker_missing_in_the_static_trial(leg: Path) -> None:
    replace_in(leg / "lab.toml", '"SC", "SD"]', '"SC", "SE"]')
    expect_refusal(leg, SOLVE, "static.c3d, segment.shank.markers: no point SE. Did you mean SD?")


def test_fewer_than_three_markers(leg: Path) -> None:
    replace_in(leg / "lab.toml", '"TA", "TB", "TC", "TD"', '"TA", "TB"')
    expect_refusal(leg, SOLVE, "lab.toml, segment.thigh.markers: expected at least 3 markers, got 2.")


def test_fewer_than_three_markers_in_every_frame(leg: Path) -> None:
    points = leg_points(leg_motion())
    for name in ("TA", "TB", "SA", "SB", "SC"):
        points[name][:] = np.nan
    write_c3d(leg / "stairs_01.c3d", points)
    expect_refusal(
        leg,
        SOLVE,
        "P01, stairs_01: no pose is determined in any frame: ",
        "thigh: not determined in 30 of 30 frames, rotation about the line TC–TD is open",
        "shank: not determined in 30 of 30 frames, one marker is seen",
        "Fill its gaps or leave it out.",
    )


def bone_table(change: Callable[[FloatArray], object]) -> Change:
    """Write the bone table anew, with poses (10, 2, 4, 4) changed."""

    def spoil(folder: Path) -> None:
        poses = leg_motion()[10:20].copy()
        change(poses)
        write_bones(folder / "stairs_01_bone.csv", ("thigh", "shank"), np.arange(10, 20) / 100, poses)

    return spoil


def shear(poses: FloatArray) -> None:
    poses[3, 0, :3, :3] = poses[3, 0, :3, :3] @ np.array([[1.0, 0.1, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0]])


def reflect(poses: FloatArray) -> None:
    poses[4, 1, :3, 2] *= -1.0


def blank(poses: FloatArray) -> None:
    poses[:] = np.nan


BONE_CASES: dict[str, tuple[Callable[[FloatArray], object], str, tuple[str, ...]]] = {
    "sheared": (shear, ", time 0.13, segment thigh: ", ("not orthonormal", "0.1, expected at most 0.001")),
    "reflected": (
        reflect,
        ", time 0.14, segment shank: ",
        ("a reflection, expected determinant +1, got −1",),
    ),
    "blank": (blank, ": ", ("no bone is in view in any of its 10 rows",)),
}


@pytest.mark.parametrize("name", BONE_CASES)
def test_a_bone_table_that_is_wrong(leg: Path, name: str) -> None:
    change, place, parts = BONE_CASES[name]
    bone_table(change)(leg)
    expect_refusal(leg, PAIR, f"stairs_01_bone.csv{place}", *parts)


def test_bone_truth_of_another_time(leg: Path) -> None:
    write_bones(leg / "stairs_01_bone.csv", ("thigh", "shank"), 7 + np.arange(10) / 100, leg_motion()[:10])
    expect_refusal(leg, PAIR, "P01, stairs_01: bone truth from 7.000 to 7.090 s lies outside the skin trial")


UNIT_CASES = {
    "metres": (1e-3, "expected at least 20 mm. The numbers look like metres"),
    "stray": (1e3, "expected at most 100 m. Remove stray points."),
}


@pytest.mark.parametrize("name", UNIT_CASES)
def test_a_unit_that_contradicts_the_numbers(leg: Path, name: str) -> None:
    scale, part = UNIT_CASES[name]
    points = {label: scale * values for label, values in leg_points(leg_motion()).items()}
    write_points(leg / "stairs_01.csv", points)
    replace_in(leg / "study.toml", "stairs_01.c3d", "stairs_01.csv")
    expect_refusal(leg, SOLVE, "stairs_01.csv: declared in mm, ", part)


TOML_CASES: dict[str, tuple[str, str, str, str]] = {
    "syntax": ("study.toml", 'lab = "lab.toml"', 'lab = "lab.toml', "study.toml, line 1"),
    "unknown key": (
        *("study.toml", "activity", "activty"),
        "study.toml, subject[1].trial[1].activty: unknown key 'activty'. Did you mean activity?",
    ),
    "unknown key of the lab": (
        *("lab.toml", "travel_sd_mm", "travel_mm"),
        "lab.toml, joint.knee.travel_mm: unknown key 'travel_mm'. Did you mean travel_sd_mm?",
    ),
    "wrong type": (
        *("lab.toml", 'markers = ["TA", "TB", "TC", "TD"]', "markers = 4"),
        "lab.toml, segment.thigh.markers: expected a list of texts, got ",
    ),
    "wrong choice": (
        *("lab.toml", 'kind = "knee"', 'kind = "kne"'),
        "lab.toml, joint.knee.kind: expected one of ",
    ),
    "missing file": (
        *("study.toml", "stairs_01.c3d", "stairs_02.c3d"),
        "study.toml, subject[1].trial[1].skin: no file stairs_02.c3d, needed for subject P01, ",
    ),
    "missing lab": (
        *("study.toml", "lab.toml", "labor.toml"),
        "study.toml, lab: no file labor.toml, needed for the study.",
    ),
}


@pytest.mark.parametrize("name", TOML_CASES)
def test_a_study_or_lab_file_that_is_wrong(leg: Path, name: str) -> None:
    file, old, new, start = TOML_CASES[name]
    replace_in(leg / file, old, new)
    expect_refusal(leg, SOLVE, start)


def test_a_study_file_that_is_no_text(leg: Path) -> None:
    (leg / "study.toml").write_bytes(b'lab = "l\xe4b.toml"\n')
    expect_refusal(leg, SOLVE, "study.toml, line 1: not UTF-8 text.")


NAME_CASES: dict[str, tuple[tuple[str, ...], str]] = {
    "subject": ((*SOLVE, "--subjects", "P02"), "study.toml: no subject P02. Did you mean P01?"),
    "subject to pair": ((*PAIR, "--subjects", "P01,Q7"), "study.toml: no subject Q7."),
    "trial": ((*SOLVE, "--trials", "stairs_1"), "study.toml: no trial stairs_1. Did you mean stairs_01?"),
    "estimator": (
        (*SOLVE[:-1], "rigit"),
        "--estimator: no estimator rigit here, known: rigid, linked, frame-map, smoother. "
        "Did you mean rigid?",
    ),
    "estimator without prior": (
        (*SOLVE[:-1], "frame-map"),
        "--estimator frame-map: needs a prior. Give --prior, or use --estimator rigid or linked.",
    ),
    "study": (("solve", "stud.toml", "--out", "s"), "stud.toml: no such file."),
    "folder as study": (("solve", ".", "--out", "s"), ".: a folder, expected a file."),
    "prior": (MAP, "q.nc: no such file."),
    "personal": ((*SOLVE, "--personal", "own.nc"), "own.nc: no such file."),
    "pairs": (LEARN, "p.nc: no such file."),
    "prior to check": (("check", "q.nc"), "q.nc: no such file."),
    "solutions": (("compare", "s", "study.toml"), "s: no such folder."),
    "report": (("report", "s"), "s: no such folder."),
    "truth": (("report", ".", "--truth", "truth.toml"), "truth.toml: no such file."),
}


@pytest.mark.parametrize("name", NAME_CASES)
def test_a_name_that_is_not_there(leg: Path, name: str) -> None:
    words, start = NAME_CASES[name]
    expect_refusal(leg, words, start)


def test_a_folder_without_solutions(leg: Path) -> None:
    (leg / "s").mkdir()
    for words in (("report", "s"), ("compare", "s", "study.toml")):
        expect_refusal(
            leg, words, "s: no <subject>/<trial>.solution.nc in it. Run solve with it as --out first."
        )


FILE_CASES: dict[str, tuple[tuple[str, ...], str]] = {
    "pairs as prior": (
        ("solve", "study.toml", "--prior", "p.nc", "--out", "t"),
        "p.nc: expected a file of kind prior, got pairs. Name a prior file.",
    ),
    "prior as pairs": (
        ("learn", "q.nc", "--out", "r.nc"),
        "q.nc: expected a file of kind pairs, got prior. Name a pairs file.",
    ),
    "prior as own pairs": (
        (*MAP[:-1], "t", "--personal", "q.nc"),
        "q.nc: expected a file of kind pairs, got prior. Name a pairs file.",
    ),
    "solution as prior": (
        ("check", "s/P01/stairs_01.solution.nc"),
        "s/P01/stairs_01.solution.nc: expected a file of kind prior, got solution. Name a prior file.",
    ),
    "C3D as prior": (("check", "static.c3d"), "static.c3d: not a NetCDF 4 file."),
    "family": (
        ("learn", "p.nc", "--out", "r.nc", "--family", "linaer"),
        "--family: no family linaer here, known: reduced-rank-gp, linear, exact-gp, magnitude. "
        "Did you mean linear?",
    ),
    "subject held out": (
        ("learn", "p.nc", "--out", "r.nc", "--hold-out", "P02"),
        "--hold-out: subject P02 is not in the paired data, which has P01. Did you mean P01?",
    ),
    "every subject held out": (
        ("learn", "p.nc", "--out", "r.nc", "--hold-out", "P01"),
        "--hold-out: leaves no subject to learn from.",
    ),
    "nothing new to test on": (
        ("check", "q.nc", "--pairs", "p.nc"),
        "--pairs: the prior learned from every subject in it. Give other subjects' pairs.",
    ),
    "no hidden frame": (
        ("compare", "s", "study.toml"),
        "s: no solution can be compared: P01, stairs_01: no hidden frame with bone truth.",
    ),
    "over its own input": (
        ("learn", "p.nc", "--out", "p.nc"),
        "p.nc: both an input and the file to write. Choose another --out.",
    ),
}


@pytest.mark.parametrize("name", FILE_CASES)
def test_files_that_do_not_fit_the_command(learned: Path, name: str) -> None:
    words, start = FILE_CASES[name]
    expect_refusal(learned, words, start)


@pytest.mark.parametrize(
    ("file", "size", "words"),
    [
        ("p.nc", 9000, ("learn", "p.nc", "--out", "r.nc")),
        ("p.nc", 0, ("learn", "p.nc", "--out", "r.nc")),
        ("q.nc", 20000, ("check", "q.nc")),
        ("q.nc", 20000, (*MAP[:-1], "t")),
        ("p.nc", 9000, (*MAP[:-1], "t", "--personal", "p.nc")),
    ],
)
def test_a_truncated_netcdf(
    learned: Path, tmp_path: Path, file: str, size: int, words: tuple[str, ...]
) -> None:
    folder = copy_of(learned, tmp_path)
    cut(folder / file, size)
    expect_refusal(
        folder, words, f"{file}: ", "the file is empty" if size == 0 else "damaged or truncated NetCDF"
    )


@pytest.mark.parametrize("words", [("compare", "s", "study.toml"), ("report", "s")])
def test_solutions_of_which_none_can_be_read(learned: Path, tmp_path: Path, words: tuple[str, ...]) -> None:
    folder = copy_of(learned, tmp_path)
    (folder / "s" / "report.html").unlink()
    cut(folder / "s" / "P01" / "stairs_01.solution.nc", 9000)
    expect_refusal(
        folder, words, "s: no solution can be ", "s/P01/stairs_01.solution.nc: damaged or truncated"
    )


def test_a_solution_of_other_skin_data(learned: Path, tmp_path: Path) -> None:
    folder = copy_of(learned, tmp_path)
    write_c3d(folder / "stairs_01.c3d", leg_points(leg_motion(36.0)))
    expect_refusal(
        folder,
        ("compare", "s", "study.toml"),
        "s: no solution can be compared: s/P01/stairs_01.solution.nc: made from skin data ",
        "Solve the trial again.",
    )


def test_a_prior_of_other_markers(learned: Path, tmp_path: Path) -> None:
    folder = copy_of(learned, tmp_path)
    replace_in(folder / "lab.toml", '"TA", "TB", "TC", "TD"]', '"LEP", "MEP", "HJC"]')
    expect_refusal(
        folder,
        (*MAP[:-1], "t"),
        "lab.toml, segment.thigh: prior expects thigh markers TA TB TC TD, lab has LEP MEP HJC.",
    )


def test_a_study_without_bone_truth(leg: Path) -> None:
    replace_in(leg / "study.toml", 'bone = "stairs_01_bone.csv"\n', "")
    expect_refusal(leg, PAIR, "study.toml: no chosen trial has bone truth.")


def test_every_trial_bad_leaves_no_folder(tmp_path: Path) -> None:
    make_leg_study(tmp_path, ("stairs_01", "stairs_02", "stairs_03"))
    for number in (1, 2, 3):
        cut(tmp_path / f"stairs_0{number}.c3d", 4000)
    expect_refusal(tmp_path, SOLVE, "stairs_01.c3d: truncated, ", " 2 more trials failed too.")
    expect_refusal(
        tmp_path, PAIR, "study.toml: no trial is left to pair: ", " 2 more trials cannot be paired either."
    )


def make_file(name: str) -> Change:
    return lambda folder: (folder / name).write_text("a letter\n", encoding="utf-8")


def nothing(folder: Path) -> None:
    assert folder.is_dir()


OUT_CASES: dict[str, tuple[Change, tuple[str, ...], str, str]] = {
    "no folder": (
        nothing,
        (*PAIR[:-1], "no/p.nc"),
        "no/p.nc: no folder ",
        "Make it first, or choose another",
    ),
    "a folder": (
        lambda folder: (folder / "p.nc").mkdir(),
        PAIR,
        *("p.nc: a folder, expected a file name.", "Name the file itself."),
    ),
    "the study": (
        nothing,
        (*PAIR[:-1], "study.toml"),
        *("study.toml: both an input and the file to write.", "Choose another --out."),
    ),
    "the lab": (
        nothing,
        (*PAIR[:-1], "./lab.toml"),
        *("lab.toml: both an input and the file to write.", "Choose another --out."),
    ),
    "a file": (make_file("s"), SOLVE, "s: a file, expected a folder.", "Choose another --out."),
    "below a file": (
        make_file("f"),
        ("solve", "study.toml", "--out", "f/s", "--estimator", "rigid"),
        *("", "f: a file, expected a folder. Choose another --out."),
    ),
    "demo below a file": (
        make_file("f"),
        ("demo", "--out", "f/s"),
        *("f/s: cannot be read or written (Not a directory).", "Check its name, its permissions"),
    ),
    "demo over other files": (
        make_file("letter.txt"),
        ("demo", "--out", "."),
        *(".: not empty and holds ", "nothing is overwritten"),
    ),
}


@pytest.mark.parametrize("name", OUT_CASES)
def test_a_place_that_cannot_take_the_result(leg: Path, name: str) -> None:
    change, words, start, part = OUT_CASES[name]
    if name == "demo over other files":
        (leg / "study.toml").unlink()
    change(leg)
    expect_refusal(leg, words, start, part)


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="root may write anywhere")
@pytest.mark.parametrize("words", [(*PAIR[:-1], "shut/p.nc"), (*SOLVE[:3], "shut/s", *SOLVE[4:])])
def test_a_folder_that_is_write_protected(leg: Path, words: tuple[str, ...]) -> None:
    (leg / "shut").mkdir(mode=0o555)
    expect_refusal(leg, words, "", "nothing can be written in", "Choose another --out.")


def test_a_folder_that_the_system_calls_write_protected(leg: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(os, "access", lambda path, mode: not mode & os.W_OK)
    expect_refusal(leg, PAIR, "p.nc: nothing can be written in its folder. Choose another --out.")
    expect_refusal(leg, SOLVE, "", ": nothing can be written in this folder. Choose another --out.")


def test_a_result_never_takes_the_place_of_the_raw_trial(tmp_path: Path) -> None:
    """Raw data laid out as <subject>/<trial>.c3d is the usual case, and so are results."""
    make_leg_study(tmp_path)
    (tmp_path / "P01").mkdir()
    (tmp_path / "stairs_01.c3d").rename(tmp_path / "P01" / "stairs_01.c3d")
    replace_in(tmp_path / "study.toml", '"stairs_01.c3d"', '"P01/stairs_01.c3d"')
    expect_refusal(
        tmp_path,
        (*SOLVE[:3], ".", *SOLVE[4:]),
        "P01/stairs_01.c3d: an input of the study, a result would take its place. Choose another --out.",
    )


def test_a_cluster_without_its_library(leg: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "dask.distributed", None)
    expect_refusal(
        leg,
        (*SOLVE, "--scheduler", "tcp://127.0.0.1:1"),
        '--scheduler: dask.distributed is not installed. Install "sta-prior[cluster]".',
    )


USAGE_CASES: dict[str, tuple[tuple[str, ...], str]] = {
    "unknown command": (("smooth", "study.toml"), "smooth"),
    "unknown option": ((*SOLVE, "--estimater", "rigid"), "--estimater"),
    "missing argument": (("solve", "--out", "s"), "STUDY.toml"),
    "missing option": (("pair", "study.toml"), "--out"),
    "no number": ((*SOLVE, "--workers", "many"), "--workers"),
    "too few workers": ((*SOLVE, "--workers", "0"), "--workers"),
    "negative seed": (("demo", "--out", "d", "--seed", "-1"), "--seed"),
}


@pytest.mark.parametrize("name", USAGE_CASES)
def test_words_that_the_command_line_does_not_know(leg: Path, name: str) -> None:
    words, part = USAGE_CASES[name]
    before = contents(leg)
    done = run(leg, *words)
    assert done.status == 2
    assert done.out == ""
    assert part in done.err
    assert "Traceback" not in done.err
    assert contents(leg) == before
    assert CliRunner().invoke(app, list(words)).exit_code == 2

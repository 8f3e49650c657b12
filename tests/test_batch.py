"""Many trials: resuming, workers, interruption, and the files of a run."""

from __future__ import annotations

import csv
import json
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from made_laboratory import contents, cut, leg_motion, make_leg_study, replace_in, run, write_leg_trial
from made_studies import leg_points, leg_poses, says, still, write_bones, write_c3d, write_points
from numpy.testing import assert_allclose, assert_array_equal

from sta_prior.batch import Outcome, Run, solve_study
from sta_prior.errors import InputError
from sta_prior.io.c3d import read_c3d_rotations
from sta_prior.io.files import file_digest, read_points

TRIALS = ("stairs_01", "stairs_02", "stairs_03")


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Study of three trials with pairs and prior; not to be changed."""
    folder = tmp_path_factory.mktemp("made")
    make_leg_study(folder, TRIALS)
    for words in (("pair", "study.toml", "--out", "p.nc"), ("learn", "p.nc", "--out", "q.nc")):
        assert run(folder, *words).status == 0
    return folder


@pytest.fixture
def laboratory(made: Path, tmp_path: Path) -> Path:
    """A copy of it that a test may change."""
    for path in made.iterdir():
        (tmp_path / path.name).write_bytes(path.read_bytes())
    return tmp_path


def solve_in(folder: Path, **options: object) -> Run:
    """Solve with the prior of the folder into its folder s."""
    given = {"study_path": folder / "study.toml", "out": folder / "s", "prior_path": folder / "q.nc"}
    return solve_study(**{**given, **options})  # type: ignore[arg-type]


def fit_in(folder: Path, **options: object) -> Run:
    """The same with the rigid fit, which needs no prior."""
    return solve_in(folder, **{"estimator": "rigid", "prior_path": None, **options})


def statuses(run: Run) -> list[str]:
    return [item.status for item in run.outcomes]


def opened(path: Path) -> xr.Dataset:
    with xr.open_dataset(path, engine="h5netcdf") as file:
        return file.load()


def same_bits(first: Path, second: Path) -> bool:
    """Two solutions agree in every bit; the time that they took does not count."""
    one, other = opened(first), opened(second)
    attributes = [{k: v for k, v in data.attrs.items() if k != "seconds"} for data in (one, other)]
    return bool(one.drop_attrs().identical(other.drop_attrs())) and attributes[0] == attributes[1]


# resuming


def test_resuming_keeps_solutions_of_the_very_same_input(laboratory: Path) -> None:
    assert statuses(fit_in(laboratory)) == ["solved"] * 3
    before = contents(laboratory / "s" / "P01")
    assert statuses(fit_in(laboratory, resume=True)) == ["kept"] * 3
    assert contents(laboratory / "s" / "P01") == before
    assert statuses(fit_in(laboratory)) == ["solved"] * 3


def test_a_kept_solution_is_counted_like_a_solved_one(laboratory: Path) -> None:
    solved = fit_in(laboratory).outcomes[0]
    kept = fit_in(laboratory, resume=True).outcomes[0]
    names = [name for name in Outcome.__dataclass_fields__ if name != "status"]
    assert {name: getattr(kept, name) for name in names} == {name: getattr(solved, name) for name in names}


def change_skin(folder: Path) -> None:
    write_leg_trial(folder, "stairs_02", leg_motion(31.0))


def truncate(folder: Path) -> None:
    cut(folder / "s" / "P01" / "stairs_02.solution.nc", 9000)


def lose_companion(folder: Path) -> None:
    (folder / "s" / "P01" / "stairs_02.angles.csv").unlink()


def foreign_solution(folder: Path) -> None:
    (folder / "s" / "P01" / "stairs_02.solution.nc").write_bytes((folder / "q.nc").read_bytes())


def older_program(folder: Path) -> None:
    path = folder / "s" / "P01" / "stairs_02.solution.nc"
    data = opened(path)
    data.attrs["created_by"] = "sta_prior 0.0.1"
    data.to_netcdf(path, engine="h5netcdf")


@pytest.mark.parametrize(
    "change",
    [change_skin, truncate, lose_companion, foreign_solution, older_program],
    ids=lambda f: f.__name__,
)
def test_a_trial_that_changed_is_solved_again_and_no_other(
    laboratory: Path, change: Callable[[Path], None]
) -> None:
    fit_in(laboratory)
    change(laboratory)
    assert statuses(fit_in(laboratory, resume=True)) == ["kept", "solved", "kept"]
    assert statuses(fit_in(laboratory, resume=True)) == ["kept"] * 3


def change_static(folder: Path) -> None:
    write_c3d(folder / "static.c3d", still(leg_points(leg_poses()), 40, sd=1e-4))


def change_lab(folder: Path) -> None:
    replace_in(folder / "lab.toml", "travel_sd_mm = 5.0", "travel_sd_mm = 8.0")


def change_side(folder: Path) -> None:
    replace_in(folder / "study.toml", 'id = "P01"', 'id = "P01"\nside = "left"')


@pytest.mark.parametrize("change", [change_static, change_lab, change_side], ids=lambda f: f.__name__)
def test_what_all_trials_share_makes_all_be_solved_again(
    laboratory: Path, change: Callable[[Path], None]
) -> None:
    fit_in(laboratory)
    change(laboratory)
    assert statuses(fit_in(laboratory, resume=True)) == ["solved"] * 3


def test_prior_own_pairs_and_estimator_are_inputs_too(laboratory: Path) -> None:
    chosen = {"trials": ["stairs_02"], "resume": True}
    assert statuses(solve_in(laboratory, **chosen)) == ["solved"]
    own = laboratory / "p.nc"
    assert statuses(solve_in(laboratory, **chosen, personal_path=own)) == ["solved"]
    assert statuses(solve_in(laboratory, **chosen, personal_path=own)) == ["kept"]
    words = ("pair", "study.toml", "--out", "p2.nc", "--trials", "stairs_01")
    assert run(laboratory, *words).status == 0
    assert run(laboratory, "learn", "p2.nc", "--out", "q.nc").status == 0
    assert statuses(solve_in(laboratory, **chosen, personal_path=own)) == ["solved"]
    assert statuses(solve_in(laboratory, **chosen, estimator="linked")) == ["solved"]


def test_bone_truth_is_an_input_only_where_the_static_trial_is_a_trial(laboratory: Path) -> None:
    fit_in(laboratory)
    (laboratory / "stairs_01_bone.csv").unlink()
    replace_in(laboratory / "study.toml", 'bone = "stairs_01_bone.csv"\n', "")
    assert statuses(fit_in(laboratory, resume=True)) == ["kept"] * 3
    replace_in(laboratory / "study.toml", "static.c3d", "stairs_02.c3d")
    assert statuses(fit_in(laboratory, resume=True)) == ["solved"] * 3
    write_bones(laboratory / "stairs_02_bone.csv", ("thigh", "shank"), np.arange(9) / 100, leg_motion()[:9])
    assert statuses(fit_in(laboratory, resume=True)) == ["solved"] * 3
    assert statuses(fit_in(laboratory, resume=True)) == ["kept"] * 3


# workers and interruption


@pytest.mark.parametrize("estimator", ["frame-map", "linked"])
def test_two_workers_give_the_bits_of_one(laboratory: Path, estimator: str) -> None:
    one = solve_in(laboratory, out=laboratory / "one", estimator=estimator, workers=1)
    two = solve_in(laboratory, out=laboratory / "two", estimator=estimator, workers=2)
    assert [item.trial for item in two.outcomes] == [item.trial for item in one.outcomes] == list(TRIALS)
    for name in TRIALS:
        first, second = (laboratory / side / "P01" / f"{name}.solution.nc" for side in ("one", "two"))
        assert same_bits(first, second)
        for suffix in (".angles.csv", ".c3d"):
            companions = [path.with_name(f"{name}{suffix}").read_bytes() for path in (first, second)]
            assert companions[0] == companions[1]


def test_a_difference_would_be_seen(laboratory: Path) -> None:
    fit_in(laboratory, out=laboratory / "one")
    fit_in(laboratory, out=laboratory / "two", estimator="linked")
    first, second = (laboratory / side / "P01" / "stairs_01.solution.nc" for side in ("one", "two"))
    assert same_bits(first, first)
    assert not same_bits(first, second)


@pytest.mark.parametrize("workers", [1, 2])
def test_an_interruption_keeps_finished_trials_and_their_account(laboratory: Path, workers: int) -> None:
    seen: list[str] = []

    def stop_at_the_second(outcome: Outcome) -> None:
        seen.append(outcome.trial)
        if len(seen) == 2:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        fit_in(laboratory, workers=workers, progress=stop_at_the_second)
    assert seen == ["stairs_01", "stairs_02"]
    for name in seen:
        assert opened(laboratory / "s" / "P01" / f"{name}.solution.nc").attrs["trial"] == name
    record = json.loads((laboratory / "s" / "run.json").read_text(encoding="utf-8"))
    assert record["interrupted"] is True
    assert record["trials_chosen"] == 3
    assert [item["trial"] for item in record["trials"]] == seen
    if workers == 1:  # a process that was stopped may leave its temporary file to the next run
        assert [path.name for path in laboratory.rglob(".*")] == []
    assert statuses(fit_in(laboratory, resume=True))[:2] == ["kept", "kept"]


def test_an_interruption_before_anything_is_finished_leaves_nothing(
    laboratory: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def interrupted(*words: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(sys.modules["sta_prior.batch.output"], "write_dataset", interrupted)
    with pytest.raises(KeyboardInterrupt):
        fit_in(laboratory)
    assert not (laboratory / "s").exists()


def test_a_write_that_fails_leaves_no_part_of_the_trial(
    laboratory: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(path: Path, *words: object) -> None:
        raise OSError(28, "No space left on device", str(path))

    monkeypatch.setattr(sys.modules["sta_prior.batch.output"], "write_dataset", full)
    place = f"{laboratory / 's'}, P01, stairs_01"
    text = f"{place}: cannot be written (No space left on device). Choose another --out."
    with says(InputError, f"{text} 2 more trials failed too."):
        fit_in(laboratory)
    assert not (laboratory / "s").exists()


def test_equations_without_a_solution_are_a_failure_by_name(
    laboratory: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def singular(*words: object) -> None:
        raise np.linalg.LinAlgError("Singular matrix")

    monkeypatch.setattr(sys.modules["sta_prior.batch.job"], "solve", singular)
    text = "P01, stairs_01: its equations cannot be solved (Singular matrix). Look at its markers."
    with says(InputError, text):
        fit_in(laboratory, trials=["stairs_01"])


def test_a_changed_lab_is_read_anew_in_the_next_run(laboratory: Path) -> None:
    fit_in(laboratory, estimator="linked", workers=2)
    before = opened(laboratory / "s" / "P01" / "stairs_01.solution.nc")
    replace_in(laboratory / "lab.toml", '"TA", "TB", "TC", "TD"', '"TA", "TB", "TC"')
    fit_in(laboratory, estimator="linked", workers=2)
    after = opened(laboratory / "s" / "P01" / "stairs_01.solution.nc")
    assert (before.sizes["marker"], after.sizes["marker"]) == (8, 7)


def test_a_study_without_trials(laboratory: Path) -> None:
    study = (laboratory / "study.toml").read_text(encoding="utf-8").split("[[subject.trial]]")[0]
    (laboratory / "study.toml").write_text(study, encoding="utf-8")
    with says(InputError, f"{laboratory / 'study.toml'}: no trial to solve. Add [[subject.trial]]."):
        fit_in(laboratory)


# files


@pytest.fixture(scope="module")
def solved(made: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("solved")
    for path in made.iterdir():
        (folder / path.name).write_bytes(path.read_bytes())
    points = leg_points(leg_motion(36.0))
    for name in ("TA", "TB", "TC"):
        points[name][5:8] = np.nan
    write_points(folder / "table.csv", points)
    text = '[[subject.trial]]\nid = "table"\nactivity = "stairs"\nskin = "table.csv"\n'
    study = (folder / "study.toml").read_text(encoding="utf-8")
    (folder / "study.toml").write_text(study + text, encoding="utf-8")
    fit_in(folder, out=folder / "rigid")
    solve_in(folder)
    return folder


def test_the_summary_has_a_row_a_trial(solved: Path) -> None:
    with (solved / "rigid" / "summary.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert [row["trial"] for row in rows] == [*TRIALS, "table"]
    assert {row["status"] for row in rows} == {"solved"}
    assert {row["estimator"] for row in rows} == {"rigid"}
    assert [row["frames"] for row in rows] == ["30"] * 4
    assert [row["frames_undetermined"] for row in rows] == ["0", "0", "0", "3"]
    assert rows[0]["input_digest"] == file_digest(solved / "stairs_01.c3d")
    assert rows[3]["observability"] == (
        "thigh: not determined in 3 of 30 frames, one marker is seen: rotation is open"
    )


def test_the_run_file_says_what_was_run(solved: Path) -> None:
    record = json.loads((solved / "s" / "run.json").read_text(encoding="utf-8"))
    assert set(record["program"]) == {"sta_prior", "numpy", "scipy", "xarray", "ezc3d"}
    assert record["study"] == "study.toml"
    assert record["study_digest"] == file_digest(solved / "study.toml")
    assert record["prior"] == "q.nc"
    solution = opened(solved / "s" / "P01" / "stairs_01.solution.nc")
    assert record["prior_digest"] == solution.attrs["prior_digest"] != ""
    assert json.loads(solution.attrs["input_digests"])["prior"] == record["prior_digest"]
    assert record["estimator"] == "smoother"
    assert record["interrupted"] is False
    assert [item["trial"] for item in record["trials"]] == [*TRIALS, "table"]
    assert str(solved) not in json.dumps(record)


def angles_table(path: Path) -> dict[str, np.ndarray]:
    with path.open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    return {name: np.array([float(row[name]) if row[name] else np.nan for row in rows]) for name in rows[0]}


@pytest.mark.parametrize("trial", ["stairs_01", "table"])
def test_the_angles_of_the_table_are_those_of_the_solution(solved: Path, trial: str) -> None:
    solution = opened(solved / "s" / "P01" / f"{trial}.solution.nc")
    table = angles_table(solved / "s" / "P01" / f"{trial}.angles.csv")
    expected = {"time_s": solution["time"].values}
    for dof in ("flexion", "adduction", "internal_rotation"):
        own = solution.sel(joint="knee", dof=dof)
        expected[f"knee_{dof}_deg"] = np.degrees(own["angle"].values)
        expected[f"knee_{dof}_sd_deg"] = np.degrees(own["angle_sd"].values)
        expected[f"knee_{dof}_rigid_deg"] = np.degrees(own["angle_rigid"].values)
    for axis in ("x", "y", "z"):
        own = solution.sel(joint="knee", axis=axis)
        expected[f"knee_travel_{axis}_mm"] = 1000 * own["joint_travel"].values
        expected[f"knee_travel_{axis}_sd_mm"] = 1000 * own["joint_travel_sd"].values
    assert list(table) == list(expected)
    for name, values in expected.items():
        assert_allclose(table[name], values, atol=6e-5, err_msg=name)
    # the leg is made with these angles: the first frame is 5° of flexion, 2° of adduction, 3° outwards
    assert_allclose(
        [table[f"knee_{dof}_rigid_deg"][0] for dof in ("flexion", "adduction", "internal_rotation")],
        [5.0, 2.0, -3.0],
        atol=0.01,
    )


def test_an_angle_that_is_not_known_is_a_blank_cell(solved: Path) -> None:
    lines = (solved / "rigid" / "P01" / "table.angles.csv").read_text(encoding="utf-8").splitlines()
    header = lines[0].split(",")
    place = header.index("knee_flexion_deg")
    blank = [index for index, line in enumerate(lines[1:]) if line.split(",")[place] == ""]
    assert blank == [5, 6, 7]


@pytest.mark.parametrize("folder", ["s", "rigid"])
def test_the_copied_c3d_holds_the_poses_and_all_that_was_in_it(solved: Path, folder: str) -> None:
    solution = opened(solved / folder / "P01" / "stairs_02.solution.nc")
    copy = solved / folder / "P01" / "stairs_02.c3d"
    held = read_c3d_rotations(copy)
    assert [str(name) for name in held["segment"].values] == ["thigh", "shank"]
    # the file holds 4-byte numbers: 24 bits of a number up to 1 (rotation), of some metres in mm
    assert_allclose(held["rotation"].values, solution["rotation"].values, atol=1e-6)
    assert_allclose(held["position"].values, solution["position"].values, atol=1e-6)
    assert_allclose(held["time"].values, solution["time"].values, atol=1e-9)
    before, after = read_points(solved / "stairs_02.c3d"), read_points(copy)
    assert_array_equal(after["position"].values, before["position"].values)
    assert list(after["point"].values) == list(before["point"].values)


def test_only_a_c3d_trial_gets_a_c3d_copy(solved: Path) -> None:
    names = {path.name for path in (solved / "s" / "P01").glob("table.*")}
    assert names == {"table.solution.nc", "table.angles.csv"}


def test_a_pose_that_is_not_known_is_missing_in_the_copy(tmp_path: Path) -> None:
    make_leg_study(tmp_path)
    points = leg_points(leg_motion())
    for name in ("SA", "SB"):
        points[name][10:12] = np.nan
    write_c3d(tmp_path / "stairs_01.c3d", points)
    fit_in(tmp_path)
    held = read_c3d_rotations(tmp_path / "s" / "P01" / "stairs_01.c3d")
    missing = np.isnan(held["rotation"].values).all(axis=(2, 3))
    assert_array_equal(np.flatnonzero(missing[:, 1]), [10, 11])
    assert not missing[:, 0].any()


def test_workers_that_live_on_in_another_folder_find_their_files(
    made: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    for name in ("first", "second"):
        folder = tmp_path / name
        folder.mkdir()
        for path in made.iterdir():
            (folder / path.name).write_bytes(path.read_bytes())
        monkeypatch.chdir(folder)
        ended = solve_study("study.toml", "solved", "q.nc", workers=2)
        assert not ended.failed
        assert len(list(folder.glob("solved/*/*.solution.nc"))) == len(TRIALS)

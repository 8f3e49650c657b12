"""Every command as a user types it: help, files left, JSON, silence, exit status."""

from __future__ import annotations

import json
import os
import shlex
import subprocess
import sys
from importlib.metadata import entry_points
from pathlib import Path

import pytest
import typer
import xarray as xr
from made_laboratory import (
    Done,
    contents,
    cut,
    leg_motion,
    make_courier_study,
    make_leg_study,
    run,
    write_leg_trial,
)
from made_studies import leg_points, write_c3d
from typer.testing import CliRunner

from sta_prior.batch import run as batch_run
from sta_prior.batch.job import solve_job
from sta_prior.cli import app, main
from sta_prior.screen import Screen

COMMANDS = ("pair", "learn", "check", "solve", "compare", "report", "demo")
LATER = "demo"  # has a test file of its own
FEWER = {"solve": ("--subjects", "K10")}


def example_of(command: str) -> list[str]:
    """Words of the worked example in a command's help, after the program's name."""
    done = CliRunner().invoke(app, [command, "--help"])
    lines = [line.split("Example:")[1] for line in done.output.splitlines() if "Example:" in line]
    assert len(lines) == 1, f"{command}: {len(lines)} examples"
    words = shlex.split(lines[0])
    assert words[:2] == ["sta-prior", command]
    return words[1:]


@pytest.fixture(scope="module")
def chain(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, Done]]:
    """A laboratory in which the example of every command's help has run, in their order."""
    folder = tmp_path_factory.mktemp("laboratory")
    make_courier_study(folder)
    return folder, {name: run(folder, *example_of(name)) for name in COMMANDS if name != LATER}


def test_the_commands_are_those_of_this_file() -> None:
    group = typer.main.get_command(app)
    assert tuple(getattr(group, "commands", {})) == COMMANDS


def test_the_console_script_is_the_tested_function() -> None:
    (script,) = entry_points(group="console_scripts", name="sta-prior")
    assert script.load() is main


@pytest.mark.parametrize("command", COMMANDS)
def test_help_says_what_a_command_does_and_how_to_end_its_chatter(command: str) -> None:
    done = CliRunner().invoke(app, [command, "--help"])
    assert done.exit_code == 0
    for option in ("--quiet", "--json", "--help"):
        assert option in done.output
    group = typer.main.get_command(app)
    known = {
        option
        for parameter in getattr(group, "commands", {})[command].params
        for option in parameter.opts
        if option.startswith("--")
    }
    assert {word for word in example_of(command) if word.startswith("--")} <= known


def test_help_of_the_program_lists_the_commands_and_the_caution() -> None:
    done = CliRunner().invoke(app, ["--help"])
    assert done.exit_code == 0
    assert "not for clinical decisions" in done.output
    assert [name for name in COMMANDS if f"  {name} " not in done.output] == []


def test_every_example_runs(chain: tuple[Path, dict[str, Done]]) -> None:
    _, done = chain
    assert {name: one.status for name, one in done.items()} == dict.fromkeys(done, 0)
    said = {name: one.err for name, one in done.items() if one.err}
    assert said == {}


def test_files_are_named_as_the_contract_names_them(chain: tuple[Path, dict[str, Done]]) -> None:
    folder, _ = chain
    solved = {name for name in contents(folder / "solved") if (folder / "solved" / name).is_file()}
    trials = {
        f"{subject}/level-walk_01{suffix}"
        for subject in ("K01", "K02", "K10")
        for suffix in (".solution.nc", ".angles.csv", ".c3d")
    }
    assert solved == trials | {"summary.csv", "run.json", "report.html"}
    assert (folder / "errors.csv").is_file()


def test_netcdf_opens_with_plain_xarray(chain: tuple[Path, dict[str, Done]]) -> None:
    folder, _ = chain
    for name, kind in (
        ("pairs.nc", "pairs"),
        ("prior.nc", "prior"),
        ("solved/K10/level-walk_01.solution.nc", "solution"),
    ):
        with xr.open_dataset(folder / name, engine="h5netcdf") as file:
            assert file.attrs["sta_prior_kind"] == kind
            assert file.attrs["invented_data"] == 1
            assert file.attrs["created_by"].startswith("sta_prior ")
            assert json.loads(file.attrs["input_digests"])
            assert [str(v) for v in file.data_vars if "units" not in file[v].attrs] == []


def test_commands_say_where_the_result_is(chain: tuple[Path, dict[str, Done]]) -> None:
    _, done = chain
    for name, last in (
        ("pair", "Wrote pairs.nc"),
        ("learn", "Wrote prior.nc"),
        ("solve", "Wrote solved; report: solved/report.html"),
        ("compare", "Wrote errors.csv"),
        ("report", "Wrote solved/report.html"),
    ):
        assert done[name].out.rstrip().splitlines()[-1] == last
    assert "INVENTED DATA" in done["check"].out
    assert done["check"].out in done["learn"].out


@pytest.mark.parametrize("command", [name for name in COMMANDS if name != LATER])
def test_json_is_one_document_alone_on_stdout(chain: tuple[Path, dict[str, Done]], command: str) -> None:
    folder, _ = chain
    done = run(folder, *example_of(command), "--json", *FEWER.get(command, ()))
    assert done.status == 0
    summary = json.loads(done.out)
    assert isinstance(summary, dict)
    key = {
        "pair": "out",
        "learn": "prior",
        "check": "prior",
        "solve": "out",
        "compare": "directory",
        "report": "report",
    }[command]
    assert summary[key] in {"pairs.nc", "prior.nc", "solved", "solved/report.html"}
    assert "NaN" not in done.out


@pytest.mark.parametrize("command", [name for name in COMMANDS if name != LATER])
def test_quiet_says_nothing(chain: tuple[Path, dict[str, Done]], command: str) -> None:
    folder, _ = chain
    assert run(folder, *example_of(command), "--quiet", *FEWER.get(command, ())) == Done(0, "", "")


def test_json_of_a_run_counts_frames_and_names_trials(chain: tuple[Path, dict[str, Done]]) -> None:
    folder, _ = chain
    words = ("solve", "study.toml", "--prior", "prior.nc", "--out", "solved-json", "--json")
    summary = json.loads(run(folder, *words, "--subjects", "K02,K10").out)
    assert [(item["subject"], item["trial"]) for item in summary["trials"]] == [
        ("K02", "level-walk_01"),
        ("K10", "level-walk_01"),
    ]
    assert [item["status"] for item in summary["trials"]] == ["solved", "solved"]
    assert summary["failed"] == 0
    informed = [item["frames_informed"] for item in summary["trials"]]
    assert informed[0] > 0
    assert informed[1] == 0


def test_json_writes_null_where_a_number_is_not_known(capsys: pytest.CaptureFixture[str]) -> None:
    summary = {"rows": [{"error": float("nan"), "peak": float("inf")}], "share": (0.5, float("nan")), "n": 3}
    Screen(quiet=True, as_json=True).finish(summary, "not printed")
    assert json.loads(capsys.readouterr().out) == {
        "rows": [{"error": None, "peak": None}],
        "share": [0.5, None],
        "n": 3,
    }


def test_json_of_a_prior_that_nothing_validates(tmp_path: Path) -> None:
    """A prior of one subject with one trial has nothing to leave out."""
    make_leg_study(tmp_path)
    assert run(tmp_path, "pair", "study.toml", "--out", "p.nc").status == 0
    done = run(tmp_path, "learn", "p.nc", "--out", "q.nc", "--json")
    assert done.status == 0
    summary = json.loads(done.out, parse_constant=lambda name: pytest.fail(name))
    assert summary["personal"] is True
    assert summary["subjects"] == ["P01"]


def test_a_prior_is_tested_on_other_subjects(chain: tuple[Path, dict[str, Done]]) -> None:
    folder, _ = chain
    words = ("learn", "pairs.nc", "--out", "one.nc", "--hold-out", "K02")
    assert run(folder, *words).status == 0
    done = run(folder, "check", "one.nc", "--pairs", "pairs.nc", "--json")
    assert done.status == 0
    summary = json.loads(done.out)
    assert summary["subjects"] == ["K01"]
    assert {name: item["units"] for name, item in summary["other_pairs"].items()} == {
        "thigh": ["K02"],
        "shank": ["K02"],
    }


def test_a_warning_is_a_note_on_stderr_and_said_once(tmp_path: Path) -> None:
    make_leg_study(tmp_path, ("stairs_01", "stairs_02"))
    study = (tmp_path / "study.toml").read_text(encoding="utf-8")
    (tmp_path / "study.toml").write_text(
        study.replace("bone_sd = { mm = 0.5, deg = 0.5 }\n", ""), encoding="utf-8"
    )
    done = run(tmp_path, "pair", "study.toml", "--out", "p.nc")
    assert done.status == 0
    assert done.err.startswith("Note. P01, stairs_01: bone_sd is not declared here and in 1 more trials")
    assert len(done.err.splitlines()) == 1
    assert "bone_sd" not in done.out


@pytest.fixture
def one_bad_trial(tmp_path: Path) -> Path:
    """Three trials, the second truncated."""
    make_leg_study(tmp_path, ("stairs_01", "stairs_02", "stairs_03"))
    cut(tmp_path / "stairs_02.c3d", 4000)
    return tmp_path


def test_one_bad_trial_leaves_the_others_solved(one_bad_trial: Path) -> None:
    done = run(one_bad_trial, "solve", "study.toml", "--out", "s", "--estimator", "rigid")
    assert done.status == 3
    assert done.err.startswith("Failed. stairs_02.c3d: truncated, expected ")
    assert len(done.err.splitlines()) == 1
    written = {path.name for path in (one_bad_trial / "s" / "P01").iterdir()}
    assert written == {
        f"stairs_0{n}{suffix}" for n in (1, 3) for suffix in (".solution.nc", ".angles.csv", ".c3d")
    }
    rows = (one_bad_trial / "s" / "summary.csv").read_text(encoding="utf-8").splitlines()
    assert [row.split(",")[3] for row in rows] == ["status", "solved", "failed", "solved"]


def test_failures_are_told_even_when_quiet_and_beside_json(one_bad_trial: Path) -> None:
    words = ("solve", "study.toml", "--out", "s", "--estimator", "linked")
    quiet = run(one_bad_trial, *words, "--quiet")
    assert quiet.status == 3
    assert quiet.out == ""
    assert quiet.err.startswith("Failed. stairs_02.c3d: truncated")
    done = run(one_bad_trial, *words, "--json")
    assert done.status == 3
    summary = json.loads(done.out)
    assert summary["failed"] == 1
    assert [bool(item["reason"]) for item in summary["trials"]] == [False, True, False]


def test_one_bad_trial_leaves_the_others_paired(one_bad_trial: Path) -> None:
    done = run(one_bad_trial, "pair", "study.toml", "--out", "p.nc")
    assert done.status == 3
    assert done.err.startswith("P01, stairs_02: stairs_02.c3d: truncated, expected ")
    assert len(done.err.splitlines()) == 1
    with xr.open_dataset(one_bad_trial / "p.nc", engine="h5netcdf") as file:
        assert list(file["trial_id"].values) == ["stairs_01", "stairs_03"]


def test_a_trial_whose_reference_does_not_belong_is_named(tmp_path: Path) -> None:
    make_leg_study(tmp_path, ("stairs_01", "stairs_02"))
    poses = leg_motion()
    write_leg_trial(tmp_path, "stairs_02", poses)
    points = leg_points(poses)
    points["SA"], points["SD"] = points["SD"], points["SA"]
    write_c3d(tmp_path / "stairs_02.c3d", points)
    done = run(tmp_path, "pair", "study.toml", "--out", "p.nc", "--json")
    assert done.status == 3
    assert [(item["subject"], item["trial"]) for item in json.loads(done.out)["refused"]] == [
        ("P01", "stairs_02")
    ]
    assert done.err.startswith("P01, stairs_02: shank marker distances differ from the reference by ")


def test_one_bad_solution_leaves_the_others_compared(tmp_path: Path) -> None:
    make_leg_study(tmp_path, ("stairs_01", "stairs_02"))
    words = ("solve", "study.toml", "--out", "s", "--estimator", "rigid")
    assert run(tmp_path, *words).status == 0
    cut(tmp_path / "s" / "P01" / "stairs_01.solution.nc", 9000)
    done = run(tmp_path, "compare", "s", "study.toml", "--json")
    assert done.status == 3
    summary = json.loads(done.out)
    assert {row["trial"] for row in summary["trials"]} == {"stairs_02"}
    (reason,) = summary["refused"]
    assert reason.startswith("s/P01/stairs_01.solution.nc: damaged or truncated NetCDF")
    assert reason in done.err


def test_an_interruption_keeps_what_was_finished(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    make_leg_study(tmp_path, ("stairs_01", "stairs_02"))
    count = 0

    def interrupted(job: object) -> object:
        nonlocal count
        count += 1
        if count == 2:
            raise KeyboardInterrupt
        return solve_job(job)  # type: ignore[arg-type]

    monkeypatch.setattr(batch_run, "solve_job", interrupted)
    done = run(tmp_path, "solve", "study.toml", "--out", "s", "--estimator", "rigid")
    assert done == Done(
        130, "", "Interrupted. What was finished is kept; solve --resume goes on from there.\n"
    )
    assert (tmp_path / "s" / "P01" / "stairs_01.solution.nc").is_file()
    assert not (tmp_path / "s" / "P01" / "stairs_02.solution.nc").exists()
    assert json.loads((tmp_path / "s" / "run.json").read_text(encoding="utf-8"))["interrupted"] is True


def started(folder: Path, *words: str, **environment: str) -> subprocess.CompletedProcess[str]:
    """Run ``python -m sta_prior`` as a process of its own."""
    threads = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"), "1")
    return subprocess.run(
        [sys.executable, "-m", "sta_prior", *words],
        cwd=folder,
        env={**os.environ, **threads, "MPLBACKEND": "Agg", **environment},
        capture_output=True,
        text=True,
        encoding="utf-8",
        check=False,
    )


def test_the_module_runs_as_a_program(tmp_path: Path) -> None:
    done = started(tmp_path, "check", "prior.nc")
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr == "Error. prior.nc: no such file. Check the name and the folder.\n"


def test_a_terminal_without_special_signs_stops_nothing(tmp_path: Path) -> None:
    make_leg_study(tmp_path)
    words = ("solve", "study.toml", "--out", "s", "--estimator", "rigid")
    done = started(tmp_path, *words, PYTHONIOENCODING="ascii", PYTHONUTF8="0")
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout.rstrip().endswith("Wrote s; report: s/report.html")
    assert done.stdout.isascii()

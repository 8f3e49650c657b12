"""Every documented command runs: README.md and docs/*.md are read, and what they say is executed.

The study is the small invented one, cut to one task; it lies in the folder the commands run in.
"""

from __future__ import annotations

import os
import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest
import typer
import xarray as xr

from sta_prior.cli import app
from sta_prior.simulate import write_study
from sta_prior.study import read_study

ROOT = Path(__file__).parents[1]
PAGES = [ROOT / "README.md", *sorted((ROOT / "docs").glob("*.md"))]
PROGRAM = "sta-prior"
FENCE = re.compile(r"^```(\w*)\n(.*?)^```$", re.MULTILINE | re.DOTALL)
TASK = "stair-up"


def blocks(text: str, language: str) -> list[str]:
    """Fenced blocks of one language, in reading order."""
    return [block for name, block in FENCE.findall(text) if name == language]


def commands(text: str) -> list[list[str]]:
    """Words after the program's name, of every line in an sh block that starts with it."""
    found = []
    for block in blocks(text, "sh"):
        for line in block.replace("\\\n", " ").splitlines():
            words = shlex.split(line, comments=True)
            if words and words[0] == PROGRAM:
                found.append(words[1:])
    return found


DOCUMENTED = {page: commands(page.read_text(encoding="utf-8")) for page in PAGES}


def program_commands() -> dict[str, set[str]]:
    """Options of each command that the program has."""
    group = typer.main.get_command(app)
    return {
        name: {option for parameter in command.params for option in parameter.opts} | {"--help"}
        for name, command in getattr(group, "commands", {}).items()
    }


def cut_to_task(study_file: Path) -> None:
    """Keep the trials of TASK."""
    first, *subjects = study_file.read_text(encoding="utf-8").split("[[subject]]\n")
    kept = [first]
    for subject in subjects:
        head, *trials = subject.split("[[subject.trial]]\n")
        wanted = [trial for trial in trials if f'activity = "{TASK}"' in trial]
        kept.append("[[subject.trial]]\n".join([head, *wanted]))
    study_file.write_text("[[subject]]\n".join(kept), encoding="utf-8")


@pytest.fixture(scope="module")
def laboratory(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the small invented study, after every documented command has run in it."""
    folder = tmp_path_factory.mktemp("laboratory")
    write_study(folder, seed=7, size="small")
    cut_to_task(folder / "study.toml")
    for page, found in DOCUMENTED.items():
        for words in found:
            done = run([sys.executable, "-m", "sta_prior", *words], folder)
            assert done.returncode == 0, f"{page.name}: {shlex.join([PROGRAM, *words])}\n{done.stderr}"
    return folder


def run(words: list[str], folder: Path) -> subprocess.CompletedProcess[str]:
    threads = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"), "1")
    environment = {**os.environ, **threads, "MPLBACKEND": "Agg"}
    return subprocess.run(words, cwd=folder, env=environment, capture_output=True, text=True, check=False)


def test_reading_the_pages_finds_commands() -> None:
    text = "```sh\n. x\nsta-prior pair s.toml \\\n  --out p.nc  # a remark\n```\n```csv\nsta-prior no\n```\n"
    assert commands(text) == [["pair", "s.toml", "--out", "p.nc"]]
    assert len(DOCUMENTED[ROOT / "README.md"]) >= 6


def test_documented_commands_and_options_exist() -> None:
    known = program_commands()
    for page, found in DOCUMENTED.items():
        for words in found:
            assert words[0] in known, f"{page.name}: no command {words[0]}"
            options = {word.split("=")[0] for word in words if word.startswith("--")}
            assert options <= known[words[0]], f"{page.name}: {shlex.join(words)}"


def test_options_named_in_the_text_exist() -> None:
    known = set().union(*program_commands().values())
    for page in PAGES:
        named = set(re.findall(r"(?<![\w-])--[a-z][a-z-]+", page.read_text(encoding="utf-8")))
        assert named <= known, f"{page.name}: {sorted(named - known)}"


def test_every_command_of_the_program_is_documented() -> None:
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    missing = [name for name in program_commands() if not re.search(rf"{PROGRAM} {name}\b", text)]
    assert missing == []


def test_documented_commands_leave_what_the_pages_promise(laboratory: Path) -> None:
    for name, kind in (("pairs.nc", "pairs"), ("prior.nc", "prior")):
        with xr.open_dataset(laboratory / name, engine="h5netcdf") as file:
            assert file.attrs["sta_prior_kind"] == kind
            assert file.attrs["invented_data"] == 1
    solved = laboratory / "solved"
    assert (solved / "report.html").stat().st_size > 0
    assert {path.name for path in solved.iterdir() if path.is_file()} >= {"summary.csv", "run.json"}
    assert (laboratory / "errors.csv").read_text(encoding="utf-8").count("\n") > 1
    trial = solved / "K01" / "stair-up_01"
    for suffix in (".solution.nc", ".angles.csv", ".c3d"):
        assert Path(f"{trial}{suffix}").is_file()
    temporary = [path.name for path in laboratory.rglob(".*")]
    assert temporary == []


def test_lab_and_study_of_the_files_page_are_read(tmp_path: Path) -> None:
    """The examples are whole: every file they name is made, empty, and read_study asks for no more."""
    lab_text, study_text = blocks((ROOT / "docs" / "files.md").read_text(encoding="utf-8"), "toml")
    (tmp_path / "lab.toml").write_text(lab_text, encoding="utf-8")
    (tmp_path / "study.toml").write_text(study_text, encoding="utf-8")
    for name in re.findall(r'"([^"]+/[^"]+)"', study_text):
        (tmp_path / name).parent.mkdir(exist_ok=True)
        (tmp_path / name).touch()
    study = read_study(tmp_path / "study.toml")
    assert study.invented
    assert study.lab.markers == ("TA", "TB", "TC", "TD", "SA", "SB", "SC", "SD")
    assert study.lab.joints[0].travel_sd == 0.005
    imaged, archived = study.subjects
    assert imaged.covariates == {"mass_kg": 71.5, "height_m": 1.78}
    assert [trial.has_bone for trial in (*imaged.trials, *archived.trials)] == [True, False]


def test_variables_of_a_solution_are_those_of_the_files_page(laboratory: Path) -> None:
    page = (ROOT / "docs" / "files.md").read_text(encoding="utf-8")
    for heading, path in (
        ("### Pairs", laboratory / "pairs.nc"),
        ("### Solution", laboratory / "solved" / "K01" / "stair-up_01.solution.nc"),
    ):
        section = page.split(heading)[1].split("\n### ")[0]
        rows = re.findall(r"^\| (`[a-z_]+`(?:, `[a-z_]+`)*) \|.*\|.*\|$", section, re.MULTILINE)
        named = {name for row in rows for name in re.findall(r"`([a-z_]+)`", row)}
        with xr.open_dataset(path, engine="h5netcdf") as file:
            assert len(named) > 5
            assert named <= set(file.variables), f"{heading}: {sorted(named - set(file.variables))}"
            assert all("units" in variable.attrs for variable in file.data_vars.values())


# The blocks of extend.md are parts of one plug-in package: tests/test_plugin.py installs and runs them.
RUN_ALONE = [page for page in PAGES if page.name != "extend.md"]


@pytest.mark.parametrize("page", [page for page in RUN_ALONE if blocks(page.read_text("utf-8"), "python")])
def test_python_in_the_pages_runs(page: Path, laboratory: Path) -> None:
    for block in blocks(page.read_text(encoding="utf-8"), "python"):
        done = run([sys.executable, "-c", block], laboratory)
        assert done.returncode == 0, f"{page.name}\n{block}\n{done.stderr}"

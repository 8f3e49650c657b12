"""A prior family from an installed package: found, tested, learned, solved with, and missed where it is gone.

The package is tests/plugin_package, the one that docs/extend.md explains. It is put in place without a
network, as an installer leaves it: the module and a folder with its metadata.
"""

from __future__ import annotations

import json
import os
import re
import shutil
import subprocess
import sys
import tomllib
from importlib.metadata import entry_points
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from made_laboratory import Done, make_courier_study, run
from made_studies import says

from sta_prior.errors import InputError
from sta_prior.prior import known_families, learn, load_prior
from sta_prior.prior.families import BUILT_IN, GROUP, find_family
from sta_prior.prior.feature_model import LINEAR
from sta_prior.study import read_study
from sta_prior.testing import check_prior, example_pairs
from sta_prior.testing.battery import CHECKS

ROOT = Path(__file__).parents[1]
PACKAGE = Path(__file__).parent / "plugin_package"
MODULE = "proportional_artifact"
NAME = "proportional"
PAGE = (ROOT / "docs" / "extend.md").read_text(encoding="utf-8")
FENCE = re.compile(r"^```(\w*)\n(.*?)^```$", re.MULTILINE | re.DOTALL)
GONE = f"no family {NAME} here, known: {', '.join(BUILT_IN)}"  # no nearest name: none is like it


def blocks(language: str) -> list[str]:
    """Fenced blocks of the page in one language.

    Not python and sh, which test_readme runs where no package is installed.
    """
    return [block for name, block in FENCE.findall(PAGE) if name == language]


def install(target: Path, settings: str, module: bool = True) -> Path:
    """Leave what an installer leaves: the module, and the metadata that the settings ask for."""
    project = tomllib.loads(settings)["project"]
    folder = target / f"{project['name'].replace('-', '_')}-{project['version']}.dist-info"
    folder.mkdir(parents=True)
    head = f"Metadata-Version: 2.1\nName: {project['name']}\nVersion: {project['version']}\n"
    (folder / "METADATA").write_text(head, encoding="utf-8")
    lines = []
    for group, points in project["entry-points"].items():
        lines += [f"[{group}]", *(f"{name} = {where}" for name, where in points.items())]
    (folder / "entry_points.txt").write_text("\n".join([*lines, ""]), encoding="utf-8")
    if module:
        shutil.copy(PACKAGE / f"{MODULE}.py", target)
    return target


@pytest.fixture(scope="module")
def installed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the package of the page installed in it."""
    return install(tmp_path_factory.mktemp("packages"), blocks("toml")[0])


@pytest.fixture(scope="module")
def laboratory(installed: Path, tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, Done]]:
    """A laboratory in which the commands of the page have run with the package installed."""
    folder = tmp_path_factory.mktemp("laboratory")
    make_courier_study(folder)
    done = {}
    with pytest.MonkeyPatch.context() as patch:
        patch.syspath_prepend(installed)
        patch.delitem(sys.modules, MODULE, raising=False)
        assert run(folder, "pair", "study.toml", "--out", "pairs.nc").status == 0
        for block in blocks("console"):
            for line in block.splitlines():
                words = line.removeprefix("$ sta-prior ").split()
                done[words[0]] = run(folder, *words)
    return folder, done


@pytest.fixture
def plugin(installed: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The package is installed during the test."""
    monkeypatch.syspath_prepend(installed)
    monkeypatch.delitem(sys.modules, MODULE, raising=False)


def python(folder: Path, packages: Path, *words: str) -> subprocess.CompletedProcess[str]:
    """A fresh interpreter that sees the packages of a folder."""
    threads = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"), "1")
    environment = {**os.environ, **threads, "PYTHONPATH": os.pathsep.join(map(str, [packages, ROOT]))}
    return subprocess.run(
        [sys.executable, "-W", "error", *words],
        cwd=folder,
        env=environment,
        capture_output=True,
        text=True,
        check=False,
    )


@pytest.mark.usefixtures("plugin")
def test_an_installed_family_is_found_after_the_built_in_ones() -> None:
    assert known_families() == [*BUILT_IN, NAME]
    assert find_family(NAME).name == NAME


def test_without_the_package_it_is_not_there() -> None:
    assert [point.name for point in entry_points(group=GROUP)] == []
    assert known_families() == list(BUILT_IN)
    with says(InputError, f"--family: {GONE}."):
        learn(example_pairs(subjects=2, frames=20), NAME)


@pytest.mark.usefixtures("plugin")
@pytest.mark.parametrize("seed", [1, 2])
def test_an_installed_family_passes_the_battery(seed: int) -> None:
    pairs = example_pairs(seed, left=["S02"])
    assert set(check_prior(learn(pairs, NAME), pairs)) == set(CHECKS)


def test_the_page_shows_the_package() -> None:
    (settings,) = blocks("toml")
    assert settings == (PACKAGE / "pyproject.toml").read_text(encoding="utf-8")
    source = (PACKAGE / f"{MODULE}.py").read_text(encoding="utf-8")
    shown = [block for block in blocks("py") if block in source]
    assert len(shown) == 3
    assert f"{len(source.splitlines())} lines" in PAGE
    assert {name for name, _ in FENCE.findall(PAGE)} == {"toml", "py", "console"}


def test_code_of_the_page_runs_in_a_fresh_interpreter(installed: Path, tmp_path: Path) -> None:
    source = (PACKAGE / f"{MODULE}.py").read_text(encoding="utf-8")
    (script,) = [block for block in blocks("py") if block not in source]
    (tmp_path / "script.py").write_text(script, encoding="utf-8")
    done = python(tmp_path, installed, "script.py")
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")


def test_commands_of_the_page_run(laboratory: tuple[Path, dict[str, Done]]) -> None:
    folder, done = laboratory
    assert list(done) == ["learn", "check", "solve"]
    assert {name: (one.status, one.err) for name, one in done.items()} == dict.fromkeys(done, (0, ""))
    assert f"Prior of family {NAME}, learned from 2 subjects: K01, K02\n" in done["check"].out
    assert "slopes of 2 subjects on the flexion of joint 0" in done["check"].out
    with xr.open_dataset(folder / "prior.nc", engine="h5netcdf") as file:
        assert file.attrs["family"] == NAME
        assert file["thigh_slopes"].attrs["units"] == "m rad-1"
    solutions = sorted((folder / "solved").rglob("*.solution.nc"))
    assert [path.parent.name for path in solutions] == [
        subject.id for subject in read_study(folder / "study.toml").subjects
    ]
    with xr.open_dataset(solutions[-1], engine="h5netcdf") as file:
        angle, sd = file["angle"].values, file["angle_sd"].values
        assert np.isfinite(angle).all()
        assert (sd > 0.0).all()


def test_help_names_an_installed_family(installed: Path, tmp_path: Path) -> None:
    done = python(tmp_path, installed, "-m", "sta_prior", "learn", "--help")
    assert done.returncode == 0
    assert f"{', '.join([*BUILT_IN, NAME])}." in " ".join(done.stdout.split())


def test_a_prior_whose_package_is_gone_is_refused(laboratory: tuple[Path, dict[str, Done]]) -> None:
    folder, _ = laboratory
    with says(InputError, f"family of the prior: {GONE}."):
        load_prior(folder / "prior.nc")
    for words in (["check", "prior.nc"], ["solve", "study.toml", "--prior", "prior.nc", "--out", "again"]):
        done = run(folder, *words)
        assert (done.status, done.out, done.err) == (2, "", f"Error. family of the prior: {GONE}.\n")
    assert not (folder / "again").exists()


def test_a_package_that_cannot_be_loaded_is_told(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    settings = blocks("toml")[0].replace(f"{MODULE}:FAMILY", "proportional_artefact:FAMILY")
    monkeypatch.syspath_prepend(install(tmp_path / "no module", settings, module=False))
    with says(
        InputError,
        "--family: plug-in proportional cannot be loaded (No module named 'proportional_artefact'). "
        "Install it again.",
    ):
        find_family(NAME)


def test_a_package_without_the_object_is_told(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    settings = blocks("toml")[0].replace(f"{MODULE}:FAMILY", f"{MODULE}:FAMILIES")
    monkeypatch.syspath_prepend(install(tmp_path / "no object", settings))
    monkeypatch.delitem(sys.modules, MODULE, raising=False)
    with says(
        InputError,
        "--family: plug-in proportional cannot be loaded "
        f"(module '{MODULE}' has no attribute 'FAMILIES'). Install it again.",
    ):
        find_family(NAME)


def test_a_package_cannot_take_the_name_of_a_built_in_family(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    settings = blocks("toml")[0].replace(f"{NAME} =", "linear =")
    monkeypatch.syspath_prepend(install(tmp_path / "linear", settings))
    assert [point.name for point in entry_points(group=GROUP)] == ["linear"]
    assert find_family("linear") is LINEAR
    assert known_families() == list(BUILT_IN)


def test_json_of_check_names_the_family(laboratory: tuple[Path, dict[str, Done]], installed: Path) -> None:
    folder, _ = laboratory
    with pytest.MonkeyPatch.context() as patch:
        patch.syspath_prepend(installed)
        done = run(folder, "check", "prior.nc", "--json")
    assert done.status == 0
    assert json.loads(done.out)["family"] == NAME

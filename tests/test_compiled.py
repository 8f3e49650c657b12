"""Compiled kernels have a place to be kept, also in a read-only installation without a home."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from sta_prior.compiled import VARIABLE, keep_compiled

NOWHERE = Path("/nowhere/at/all")


@pytest.mark.parametrize("writable", ["package", "home"])
def test_where_a_usual_place_can_be_written_nothing_is_changed(tmp_path: Path, writable: str) -> None:
    environment: dict[str, str] = {}
    places = {"package": NOWHERE, "home": NOWHERE, writable: tmp_path}
    keep_compiled(places["package"], places["home"], environment)
    assert environment == {}


def test_a_choice_of_the_user_stands() -> None:
    environment = {VARIABLE: "mine"}
    keep_compiled(NOWHERE, NOWHERE, environment)
    assert environment == {VARIABLE: "mine"}


def test_else_temporary_files_serve(tmp_path: Path) -> None:
    environment: dict[str, str] = {}
    keep_compiled(NOWHERE, NOWHERE, environment, tmp_path)
    assert Path(environment[VARIABLE]).parent == tmp_path


def test_the_place_is_known_before_the_compiler() -> None:
    """The compiler reads the variable when it is imported."""
    words = "import sys, sta_prior; names = list(sys.modules); "
    words += "assert names.index('sta_prior.compiled') < names.index('numba')"
    subprocess.run([sys.executable, "-c", words], check=True, env={**os.environ})

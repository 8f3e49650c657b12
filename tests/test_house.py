"""Order in the house: length of files, docstrings, forbidden calls, tracked names, scripts, references."""

from __future__ import annotations

import ast
import os
import re
import shutil
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / "sta_prior"
SOURCES = sorted(PACKAGE.rglob("*.py"))
TOP_LEVEL = {
    *("README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE"),
    *("sta_prior", "tests", "priors", "demo", "docs"),
}
FORBIDDEN_MODULES = {"pickle", "cloudpickle", "dill", "shelve", "marshal"}
FORBIDDEN_CALLS = {"eval", "exec", "compile"}
LONGEST_FILE = 400
# The name right before a year in brackets: the last author, or the first of "et al.".
CITATION = re.compile(r"([A-Z][\w'’-]+)(?: et al\.)?,? \(((?:19|20)\d\d)\)")
# A path that exists on one machine only. Web addresses and "/path/to/…" are no such path.
MACHINE_PATH = re.compile(r"(?<![\w./:])(/(?:work|root|home|Users|opt|mnt|srv)/\w|[A-Z]:\\\\?\w)")
DOI = re.compile(r"\b10\.\d{4,9}/[^\s,;`\"'|\]]+")


def relative(path: Path) -> str:
    return str(path.relative_to(ROOT))


def tree_of(path: Path) -> ast.Module:
    return ast.parse(path.read_text(encoding="utf-8"))


def tracked_files() -> list[str]:
    """What git tracks; skips where there is no git or no clone (an unpacked archive)."""
    if shutil.which("git") is None or not (ROOT / ".git").exists():
        pytest.skip("no git or no clone: tracked files cannot be listed")
    done = subprocess.run(["git", "ls-files", "-z"], cwd=ROOT, capture_output=True, text=True, check=False)
    if done.returncode != 0:
        pytest.skip(f"git ls-files: {done.stderr.strip()}")
    return [name for name in done.stdout.split("\0") if name]


def public_definitions(
    body: list[ast.stmt], prefix: str = ""
) -> Iterator[tuple[str, ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef]]:
    """Public functions, classes and methods; what is defined inside a function is private."""
    for node in body:
        if not isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef):
            continue
        if node.name.startswith("_"):
            continue
        yield prefix + node.name, node
        if isinstance(node, ast.ClassDef):
            yield from public_definitions(node.body, f"{node.name}.")


def called_names(tree: ast.Module) -> set[str]:
    """Names called directly: ``print`` of ``print(…)``."""
    return {n.func.id for n in ast.walk(tree) if isinstance(n, ast.Call) and isinstance(n.func, ast.Name)}


def weak_handlers(tree: ast.Module) -> list[int]:
    """Lines of handlers that catch everything, or that pass without a word."""
    lines = []
    for node in ast.walk(tree):
        if isinstance(node, ast.ExceptHandler):
            catches_all = node.type is None
            silent = len(node.body) == 1 and isinstance(node.body[0], ast.Pass)
            if catches_all or silent:
                lines.append(node.lineno)
    return lines


def undocumented(tree: ast.Module) -> list[str]:
    bare = [name for name, node in public_definitions(tree.body) if not ast.get_docstring(node)]
    return bare if ast.get_docstring(tree) else ["the module itself", *bare]


per_source = pytest.mark.parametrize("path", SOURCES, ids=relative)


@per_source
def test_files_stay_short(path: Path) -> None:
    length = len(path.read_text(encoding="utf-8").splitlines())
    assert length < LONGEST_FILE


@per_source
def test_everything_public_has_a_docstring(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    if text.strip():
        assert undocumented(ast.parse(text)) == []


@per_source
def test_nothing_unpickles_evaluates_or_prints(path: Path) -> None:
    tree = tree_of(path)
    modules = {
        name.split(".")[0]
        for node in ast.walk(tree)
        if isinstance(node, ast.Import | ast.ImportFrom)
        for name in (
            [node.module or ""] if isinstance(node, ast.ImportFrom) else [a.name for a in node.names]
        )
    }
    assert modules & FORBIDDEN_MODULES == set()
    assert called_names(tree) & FORBIDDEN_CALLS == set()
    allowed = {node.arg for node in ast.walk(tree) if isinstance(node, ast.keyword)}
    assert "allow_pickle" not in allowed
    if path.relative_to(PACKAGE).parts[0] not in {"cli.py", "cli"}:
        assert "print" not in called_names(tree)


@per_source
def test_errors_are_neither_bare_nor_swallowed(path: Path) -> None:
    tree = tree_of(path)
    assert weak_handlers(tree) == []
    asserted = [node.lineno for node in ast.walk(tree) if isinstance(node, ast.Assert)]
    assert asserted == [], "input is checked with the errors of sta_prior/errors.py"
    raised = {
        node.exc.func.id
        for node in ast.walk(tree)
        if isinstance(node, ast.Raise)
        and isinstance(node.exc, ast.Call)
        and isinstance(node.exc.func, ast.Name)
    }
    assert raised & {"Exception", "RuntimeError", "NotImplementedError", "BaseException"} == set()


def test_the_checks_of_this_file_see_a_planted_fault() -> None:
    tree = ast.parse("def open_it():\n    try:\n        eval('1')\n    except ValueError:\n        pass\n")
    assert undocumented(tree) == ["the module itself", "open_it"]
    assert weak_handlers(tree) == [4]
    assert called_names(tree) == {"eval"}
    assert MACHINE_PATH.search("read it from " + "/" + "home/ann/trial.c3d")
    assert not MACHINE_PATH.search("PYTHON=/path/to/python3.12 sh demo/run")


def test_top_level_holds_only_what_was_agreed() -> None:
    top = {name.split("/")[0] for name in tracked_files()}
    assert {name for name in top if not name.startswith(".")} - TOP_LEVEL == set()


def test_no_tracked_text_holds_a_path_of_one_machine() -> None:
    found = []
    for name in tracked_files():
        path = ROOT / name
        if not path.is_file() or path.stat().st_size > 500_000:
            continue
        try:
            text = path.read_text(encoding="utf-8")
        except UnicodeDecodeError:
            continue
        found += [f"{name}:{n}" for n, line in enumerate(text.splitlines(), 1) if MACHINE_PATH.search(line)]
    assert found == []


def test_every_doi_in_the_code_stands_in_the_literature_page() -> None:
    page = (ROOT / "docs" / "literature.md").read_text(encoding="utf-8").lower()
    missing = {
        f"{relative(path)}: {doi}"
        for path in SOURCES
        for doi in (
            match.rstrip(".)") if match.count("(") < match.count(")") else match.rstrip(".")
            for match in DOI.findall(path.read_text(encoding="utf-8"))
        )
        if doi.lower() not in page
    }
    assert missing == set()


def test_every_author_cited_in_the_code_stands_in_the_literature_page() -> None:
    lines = (ROOT / "docs" / "literature.md").read_text(encoding="utf-8").splitlines()
    missing = {
        f"{relative(path)}: {name} ({year})"
        for path in SOURCES
        for name, year in CITATION.findall(" ".join(path.read_text(encoding="utf-8").split()))
        if not any(name in line and year in line for line in lines)
    }
    assert missing == set()


def test_links_between_the_pages_lead_somewhere() -> None:
    pages = [
        ROOT / "README.md",
        ROOT / "DEVELOPERS.md",
        *sorted((ROOT / "docs").glob("*.md")),
        *sorted((ROOT / "priors").glob("*.md")),
    ]
    broken = []
    for page in pages:
        for target in re.findall(r"\]\(([^)#\s]+)(?:#[^)]*)?\)", page.read_text(encoding="utf-8")):
            if "://" not in target and not (page.parent / target).exists():
                broken.append(f"{relative(page)} → {target}")
    assert broken == []


@pytest.mark.parametrize("name", ["demo/run", "tests/run", ".ci/run", ".ci/environment.sh"])
def test_scripts_parse(name: str) -> None:
    shell = "bash" if name == ".ci/run" else "sh"
    if shutil.which(shell) is None:
        pytest.skip(f"no {shell} on this machine")
    done = subprocess.run([shell, "-n", str(ROOT / name)], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stderr) == (0, "")


@pytest.mark.parametrize("script", ["demo/run", "tests/run"])
def test_scripts_refuse_an_old_python_in_one_line(script: str, tmp_path: Path) -> None:
    if shutil.which("sh") is None:
        pytest.skip("no sh on this machine")
    old = tmp_path / "python"
    old.write_text('#!/bin/sh\ncase "$2" in *exit*) exit 1 ;; esac\necho 3.9.18\n', encoding="utf-8")
    old.chmod(0o755)
    done = subprocess.run(
        ["sh", str(ROOT / script)],
        env={"PATH": os.environ["PATH"], "PYTHON": str(old)},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 2
    assert done.stderr == (
        f"PYTHON={old}: expected Python 3.11 or newer, got 3.9.18. Set PYTHON to a newer one.\n"
    )
    assert done.stdout == ""

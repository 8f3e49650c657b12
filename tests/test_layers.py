"""The order of the layers, and what a kernel may import. Both are read from the source with ast."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "sta_prior"

# Left to right: a module may import what stands in a column to its left, or its own module.
# Inside one column no module may import one that comes after it.
ORDER: tuple[str, ...] = (
    "compiled",
    *("errors", "checks"),
    *("se3", "gaussian", "angles", "rigid"),
    "io",
    *("study", "pairs", "simulate"),
    "prior",
    "solve",
    "support",
    *("compare", "report"),
    *("testing", "calibrate"),
    *("batch", "words", "screen", "demo", "cli"),
    "__init__",
    "__main__",
)
KERNELS = (
    *("se3", "gaussian", "angles", "rigid"),
    *("prior/interface", "prior/linear", "prior/hierarchy", "prior/fitting"),
    *("prior/complete", "prior/shrinkage"),
    *("solve/terms", "solve/frame", "solve/posterior"),
    *("solve/chain", "solve/chain_kernels", "solve/chain_marginals"),
    *("solve/motion", "solve/motion_kernels", "solve/constants", "solve/rows", "solve/spans"),
    *("solve/span_kernels", "solve/trajectory", "solve/smoother", "solve/trajectory_posterior"),
    *("calibrate/draw", "calibrate/joined", "calibrate/ranks", "calibrate/uniformity"),
)
NOT_IN_A_KERNEL = {"xarray", "pathlib", "matplotlib", "h5netcdf", "ezc3d", "typer", "rich"}


def sources(module: str) -> list[Path]:
    """The files of a module, whether it is one file or a folder."""
    folder, file = PACKAGE / module, PACKAGE / f"{module}.py"
    return sorted(folder.rglob("*.py")) if folder.is_dir() else [file] if file.is_file() else []


def imported(tree: ast.Module, package: tuple[str, ...]) -> set[str]:
    """Full dotted names that a source imports; ``package`` is the package it stands in."""
    names: set[str] = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            names.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                base = ".".join(
                    [*package[: len(package) - node.level + 1], *([node.module] if node.module else [])]
                )
            names.add(base)
            names.update(f"{base}.{alias.name}" for alias in node.names)
    return names


def imports_of(path: Path) -> set[str]:
    package = path.relative_to(PACKAGE.parent).parent.parts
    return imported(ast.parse(path.read_text(encoding="utf-8")), package)


def public_names_used(tree: ast.Module) -> list[str]:
    """What a source takes from the package's own ``__init__``."""
    used = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            used += [alias.name for alias in node.names if alias.name == "sta_prior"]
        elif isinstance(node, ast.ImportFrom) and node.module == "sta_prior" and not node.level:
            used += [alias.name for alias in node.names if alias.name not in ORDER]
    return used


def layers_in(names: set[str]) -> set[str]:
    """The modules directly below the package that these names lead to."""
    return {name.split(".")[1] for name in names if name.startswith("sta_prior.")} & set(ORDER)


def arrows_to_the_right(module: str, names: set[str]) -> list[str]:
    place = ORDER.index(module)
    return sorted(name for name in layers_in(names) if ORDER.index(name) > place)


def layer_of(path: Path) -> str:
    first = path.relative_to(PACKAGE).parts[0]
    return first.removesuffix(".py")


ALL_SOURCES = sorted(PACKAGE.rglob("*.py"))


@pytest.mark.parametrize("path", ALL_SOURCES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_every_source_belongs_to_a_layer_and_imports_only_to_its_left(path: Path) -> None:
    layer = layer_of(path)
    assert layer in ORDER, f"{layer} has no place in the order of tests/test_layers.py"
    assert arrows_to_the_right(layer, imports_of(path)) == []


@pytest.mark.parametrize("path", ALL_SOURCES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_only_the_outermost_modules_import_the_package_itself(path: Path) -> None:
    """``from sta_prior import pair`` inside the package would draw an arrow from everything to everything."""
    used = public_names_used(ast.parse(path.read_text(encoding="utf-8")))
    assert used == [] or layer_of(path) in {"cli", "__main__"}


@pytest.mark.parametrize("kernel", KERNELS)
def test_a_kernel_knows_only_arrays(kernel: str) -> None:
    files = sources(kernel)
    assert files, f"{kernel} is gone; tests/test_layers.py must name its successor"
    for path in files:
        foreign = {name.split(".")[0] for name in imports_of(path)} & NOT_IN_A_KERNEL
        assert foreign == set(), f"{path.relative_to(PACKAGE)} imports {sorted(foreign)}"
        tree = ast.parse(path.read_text(encoding="utf-8"))
        calls = {
            node.func.id
            for node in ast.walk(tree)
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)
        }
        assert not calls & {"print", "open"}, f"{path.relative_to(PACKAGE)} prints or opens a file"


def test_an_arrow_to_the_right_is_seen() -> None:
    tree = ast.parse("def late():\n    from ..solve.terms import residual\n    import sta_prior.cli\n")
    names = imported(tree, ("sta_prior", "prior"))
    assert arrows_to_the_right("prior", names) == ["cli", "solve"]
    assert arrows_to_the_right("demo", names) == ["cli"]
    assert public_names_used(ast.parse("from sta_prior import pair, io")) == ["pair"]

"""Whole files: dispatch by suffix, digests, writing in one piece or not at all."""

from __future__ import annotations

import hashlib
import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest
from made_c3d import cloud, make_c3d

from sta_prior.errors import InputError
from sta_prior.io import atomic_path, file_digest, read_points, write_points_csv, write_points_netcdf


def test_points_are_read_by_the_suffix_of_the_name(tmp_path: Path) -> None:
    points = read_points(make_c3d(tmp_path / "a.C3D", cloud()))
    write_points_csv(tmp_path / "a.csv", points)
    write_points_netcdf(tmp_path / "a.nc", points)
    assert read_points(tmp_path / "a.nc").identical(points)
    assert read_points(tmp_path / "a.csv")["position"].equals(points["position"])


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        (
            "a.trc",
            "expected a file name ending in .c3d, .csv, .nc, got .trc. Export the trial as C3D or CSV.",
        ),
        (
            "a",
            "expected a file name ending in .c3d, .csv, .nc, got no suffix. Export the trial as C3D or CSV.",
        ),
        ("a.c3d", "no such file. Check the name and the folder."),
        ("a.csv", "no such file. Check the name and the folder."),
        ("a.nc", "no such file. Check the name and the folder."),
        ("a\0.nc", "cannot be read (embedded null byte). Check its name and permissions."),
    ],
)
def test_other_names_are_refused(tmp_path: Path, name: str, expected: str) -> None:
    with pytest.raises(InputError) as caught:
        read_points(tmp_path / name)
    assert str(caught.value) == f"{tmp_path / name}: {expected}"


def test_digest_is_the_sha256_of_the_bytes(tmp_path: Path) -> None:
    """Value for "abc": FIPS 180-2, appendix B.1."""
    (tmp_path / "a").write_bytes(b"abc")
    digest = file_digest(tmp_path / "a")
    assert digest == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    (tmp_path / "a").write_bytes(bytes(300))
    assert file_digest(tmp_path / "a") == hashlib.sha256(bytes(300)).hexdigest()


def test_a_file_appears_whole_with_the_rights_of_any_new_file(tmp_path: Path) -> None:
    path = tmp_path / "a.txt"
    path.write_text("old")
    with atomic_path(path) as temporary:
        assert temporary.parent == tmp_path
        assert temporary.suffix == ".txt"
        temporary.write_text("new")
        assert path.read_text() == "old"
    assert path.read_text() == "new"
    (tmp_path / "b.txt").write_text("")
    assert path.stat().st_mode == (tmp_path / "b.txt").stat().st_mode
    assert sorted(file.name for file in tmp_path.iterdir()) == ["a.txt", "b.txt"]


@pytest.mark.parametrize("error", [ValueError, KeyboardInterrupt, SystemExit])
def test_a_failure_leaves_the_old_file_and_nothing_else(tmp_path: Path, error: type[BaseException]) -> None:
    path = tmp_path / "a.txt"
    path.write_text("old")

    def fail() -> None:
        with atomic_path(path) as temporary:
            temporary.write_text("half")
            raise error

    with pytest.raises(error):
        fail()
    assert path.read_text() == "old"
    assert [file.name for file in tmp_path.iterdir()] == ["a.txt"]


@pytest.mark.skipif(os.name != "posix", reason="signals of POSIX")
def test_what_a_killed_process_left_is_removed_by_the_next(tmp_path: Path) -> None:
    path = tmp_path / "a.txt"
    path.write_text("old")
    script = (
        "import os, signal, sys\n"
        "from sta_prior.io.files import atomic_path\n"
        "with atomic_path(sys.argv[1]) as temporary:\n"
        "    temporary.write_text('half')\n"
        "    os.kill(os.getpid(), signal.SIGKILL)\n"
    )
    root = str(Path(__file__).parents[1])
    done = subprocess.run([sys.executable, "-c", script, str(path)], cwd=root, check=False, timeout=60)
    assert done.returncode == -signal.SIGKILL
    assert path.read_text() == "old"
    assert len(list(tmp_path.iterdir())) == 2
    with atomic_path(path) as outer, atomic_path(path) as temporary:
        assert len(list(tmp_path.iterdir())) == 3  # those of this living process stay
        outer.write_text("first")
        temporary.write_text("second")
    assert path.read_text() == "first"
    assert [file.name for file in tmp_path.iterdir()] == ["a.txt"]


def test_a_place_that_cannot_be_written_is_refused(tmp_path: Path) -> None:
    for path, expected in (
        (tmp_path, "a folder, expected a file name. Name the file itself."),
        (
            tmp_path / "no" / "a.nc",
            "cannot be written (No such file or directory). Name a folder that exists and is writable.",
        ),
    ):
        with pytest.raises(InputError) as caught, atomic_path(path):
            pass
        assert str(caught.value) == f"{path}: {expected}"

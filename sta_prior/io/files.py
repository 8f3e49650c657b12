"""Whole files: which reader a file needs, its digest, and writing it in one piece.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

import contextlib
import glob
import hashlib
import os
import secrets
import socket
from collections.abc import Iterator
from pathlib import Path

import xarray as xr

from sta_prior.errors import InputError, message

POINT_SUFFIXES = (".c3d", ".csv", ".nc")


def read_content(path: str | Path, most: int = -1) -> bytes:
    """Return the bytes of a file, or say in one line why there are none.

    Parameters
    ----------
    path : the file
    most : how many bytes from its start; all if negative

    Raises
    ------
    InputError : missing, a folder, not readable, or empty.
    """
    path = Path(path)
    if path.is_dir():
        raise InputError(message(path, "a folder, expected a file", "Name the file itself."))
    try:
        with path.open("rb") as file:
            content = file.read(most)
    except FileNotFoundError:
        raise InputError(message(path, "no such file", "Check the name and the folder.")) from None
    except (OSError, ValueError) as error:
        wrong = f"cannot be read ({getattr(error, 'strerror', None) or error})"
        raise InputError(message(path, wrong, "Check its name and permissions.")) from None
    if not content:
        raise InputError(message(path, "the file is empty", "Export or copy it again."))
    return content


def read_text(path: str | Path) -> str:
    """Return the text of a UTF-8 file (a byte-order mark is dropped).

    Raises
    ------
    InputError : as read_content, or not UTF-8 text.
    """
    content = read_content(path)
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content[: error.start].count(b"\n") + 1
        raise InputError(
            message((path, f"line {line}"), "not UTF-8 text", "Save the file as UTF-8 text.")
        ) from None
    if "\0" in text:
        line = text[: text.index("\0")].count("\n") + 1
        raise InputError(
            message((path, f"line {line}"), "a zero byte, expected text", "Save the file as UTF-8 text.")
        )
    return text


def file_digest(path: str | Path) -> str:
    """Return the SHA-256 of a file's bytes as 64 hexadecimal digits.

    Raises
    ------
    InputError : as read_content.
    """
    return hashlib.sha256(read_content(path)).hexdigest()


@contextlib.contextmanager
def atomic_path(path: str | Path) -> Iterator[Path]:
    """Give a temporary name in the target's folder and move it into place on success.

    A reader sees the old file or the new one, never a part. On any failure, interruption included,
    nothing is left behind; what a killed process left for the same target is removed by the next.

    Parameters
    ----------
    path : the file to be written; its folder must exist

    Yields
    ------
    The temporary path, with the suffix of the target.

    Raises
    ------
    InputError : a folder, or in a folder that does not exist or cannot be written.
    """
    path = Path(path)
    if path.is_dir():
        raise InputError(message(path, "a folder, expected a file name", "Name the file itself."))
    stem = f".{path.name}.{socket.gethostname()}-"
    temporary = path.with_name(f"{stem}{os.getpid()}-{secrets.token_hex(4)}{path.suffix}")
    try:
        temporary.open("xb").close()
    except OSError as error:
        wrong = f"cannot be written ({error.strerror})"
        raise InputError(message(path, wrong, "Name a folder that exists and is writable.")) from None
    try:
        _remove_orphans(path.parent, stem)
        yield temporary
        with temporary.open("rb+") as written:
            os.fsync(written.fileno())
        os.replace(temporary, path)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise


def _remove_orphans(folder: Path, stem: str) -> None:
    """Remove temporary files of this target whose process, on this computer, has ended."""
    if os.name != "posix":
        return
    for orphan in folder.glob(f"{glob.escape(stem)}*"):
        number = orphan.name.removeprefix(stem).split("-")[0]
        if not number.isdecimal():
            continue
        try:
            os.kill(int(number), 0)  # signal 0 only asks whether the process is there
        except (ProcessLookupError, OverflowError):
            orphan.unlink(missing_ok=True)
        except PermissionError:
            continue


def read_points(path: str | Path) -> xr.Dataset:
    """Read a trial's points from C3D, CSV or NetCDF, by the suffix of the name.

    Parameters
    ----------
    path : a .c3d, .csv or .nc file

    Returns
    -------
    Points Dataset: dims time, point, axis; `position` (m, lab frame, NaN occluded),
    `residual` (m, 0 calculated, NaN unknown or occluded); coordinate time (s);
    attributes rate (Hz), source, units_declared, events.

    Raises
    ------
    InputError : missing, empty, truncated or foreign file, or another suffix.
    """
    from sta_prior.io import c3d, netcdf, tables  # here, since these readers use this module

    path = Path(path)
    suffix = path.suffix.lower()
    if suffix == ".c3d":
        return c3d.read_c3d(path)
    if suffix == ".csv":
        return tables.read_points_csv(path)
    if suffix == ".nc":
        return netcdf.read_points_netcdf(path)
    raise InputError(
        message(
            path,
            f"expected a file name ending in {', '.join(POINT_SUFFIXES)}, got {suffix or 'no suffix'}",
            "Export the trial as C3D or CSV.",
        )
    )

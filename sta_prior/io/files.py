"""Whole files: which reader a file needs, its digest, and writing it in one piece.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import tempfile
from collections.abc import Iterator
from pathlib import Path

import xarray as xr

from sta_prior.errors import InputError, message

POINT_SUFFIXES = (".c3d", ".csv", ".nc")


def read_content(path: str | Path) -> bytes:
    """Return the bytes of a file, or say in one line why there are none.

    Parameters
    ----------
    path : the file

    Raises
    ------
    InputError : missing, a folder, not readable, or empty.
    """
    path = Path(path)
    if path.is_dir():
        raise InputError(message(path, "a folder, expected a file", "Name the file itself."))
    try:
        content = path.read_bytes()
    except FileNotFoundError:
        raise InputError(message(path, "no such file", "Check the name and the folder.")) from None
    except OSError as error:
        raise InputError(
            message(path, f"cannot be read ({error.strerror})", "Check its permissions.")
        ) from None
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

    A reader sees the old file or the new one, never a part; on any failure,
    interruption included, nothing is left behind.

    Parameters
    ----------
    path : the file to be written; its folder must exist

    Yields
    ------
    The temporary path, with the suffix of the target.

    Raises
    ------
    InputError : the folder does not exist or cannot be written.
    """
    path = Path(path)
    try:
        handle, name = tempfile.mkstemp(prefix=f".{path.stem}.", suffix=path.suffix, dir=path.parent)
    except OSError as error:
        raise InputError(
            message(
                path, f"cannot be written ({error.strerror})", "Name a folder that exists and is writable."
            )
        ) from None
    os.close(handle)
    temporary = Path(name)
    try:
        yield temporary
        # mkstemp makes the file private; a result has the permissions of any new file
        mask = os.umask(0)
        os.umask(mask)
        temporary.chmod(0o666 & ~mask)
        with temporary.open("rb+") as written:
            os.fsync(written.fileno())
        os.replace(temporary, path)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise


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
    from sta_prior.io import c3d, netcdf, tables

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

"""NetCDF files in and out: SI units on each variable, schema version, digests, one piece or nothing.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

import hashlib
import importlib.metadata
import json
import math
import warnings
from collections.abc import Hashable, Mapping
from pathlib import Path
from typing import Any, Literal

import h5py
import numpy as np
import xarray as xr

from sta_prior.errors import InputError, ShapeError, message
from sta_prior.io.files import atomic_path, read_content
from sta_prior.io.points import check_extent

Kind = Literal["pairs", "prior", "solution"]
SCHEMA_VERSION = 1
HIGHEST_BYTES = 8 * 1024**3
HIGHEST_LENGTH = 10**8
_SIGNATURE = b"\x89HDF\r\n\x1a\n"
_COMPRESSION = {"zlib": True, "complevel": 4, "shuffle": True}
_EXPORT_AGAIN = "Copy it again or make it anew."
_ADDED = ("sta_prior_kind", "schema_version", "created_by", "input_digests")


def _version() -> str:
    try:
        return importlib.metadata.version("sta-prior")
    except importlib.metadata.PackageNotFoundError:
        return "unknown"


def write_dataset(path: str | Path, dataset: xr.Dataset, kind: Kind, digests: Mapping[str, str]) -> None:
    """Write a Dataset as NetCDF 4, in one piece.

    Parameters
    ----------
    path : the file to write
    dataset : SI values; each data variable has an attribute `units`, and so has each numeric coordinate
    kind : pairs, prior or solution
    digests : SHA-256 of what it was made from, by name

    Raises
    ------
    ShapeError : a variable without units, or of object type.
    InputError : the folder does not exist or cannot be written.
    """
    for name, variable in dataset.variables.items():
        _check_variable(str(path), name, variable)
    attributes = {
        **dataset.attrs,
        "sta_prior_kind": kind,
        "schema_version": SCHEMA_VERSION,
        "created_by": f"sta_prior {_version()}",
        "input_digests": json.dumps(dict(digests), sort_keys=True),
    }
    _write(path, dataset.assign_attrs(attributes))


def _check_variable(place: str, name: Hashable, variable: xr.Variable) -> None:
    """Refuse what a plain reader could not understand."""
    if variable.dtype.kind not in "biufUS":
        raise ShapeError(
            message(
                (place, f"variable {name}"), f"type {variable.dtype}, expected numbers or text", "Convert it."
            )
        )
    if variable.dtype.kind in "biuf" and not str(variable.attrs.get("units", "")).strip():
        raise ShapeError(
            message((place, f"variable {name}"), "no attribute units", "Set it ('1' for a ratio).")
        )


def _write(path: str | Path, dataset: xr.Dataset) -> None:
    """Write with compressed floats; a half-written file never carries the name."""
    plain = dataset.copy()
    encoding: dict[Hashable, dict[str, Any]] = {}
    for name in plain.variables:
        plain[name].encoding = {}
        kind, size = plain[name].dtype.kind, plain[name].size
        encoding[name] = {"_FillValue": None}
        if kind in "biuf" and plain[name].ndim and size:
            encoding[name].update(_COMPRESSION)
    with atomic_path(path) as temporary:
        plain.to_netcdf(temporary, engine="h5netcdf", encoding=encoding)


def write_points_netcdf(path: str | Path, points: xr.Dataset) -> None:
    """Write a Points Dataset as NetCDF, in one piece; read_points reads it."""
    _write(
        path,
        points.assign_attrs({**points.attrs, "sta_prior_kind": "points", "schema_version": SCHEMA_VERSION}),
    )


def read_dataset(path: str | Path, kind: Kind) -> xr.Dataset:
    """Read a NetCDF file that this program wrote, all of it into memory.

    Parameters
    ----------
    path : the file
    kind : what it must hold: pairs, prior or solution

    Returns
    -------
    The Dataset, SI units; the file is closed.

    Raises
    ------
    InputError : missing, empty, truncated or foreign file; another kind; a newer schema; a variable without
        units or of object type; a declared size beyond 8 GB or 1e8 along a dimension.
    """
    return _read(path, kind)


def read_points_netcdf(path: str | Path) -> xr.Dataset:
    """Read a Points Dataset from NetCDF; InputError as read_dataset, or where it holds no points."""
    dataset = _read(path, "points")
    position = dataset.get("position")
    if position is None or set(position.dims) != {"time", "point", "axis"} or "residual" not in dataset:
        raise InputError(
            message(
                path, "expected position (time, point, axis) and residual (time, point)", "Write it anew."
            )
        )
    dataset = dataset.transpose("time", "point", "axis", ...)
    values = dataset["position"].to_numpy()
    if not np.isfinite(values).any():
        raise InputError(message(path, f"none of its {values.shape[1]} points is seen", _EXPORT_AGAIN))
    check_extent(values, str(dataset["position"].attrs.get("units", "m")), path)
    return dataset


def _read(path: str | Path, kind: str) -> xr.Dataset:
    path = Path(path)
    if not read_content(path).startswith(_SIGNATURE):
        raise InputError(message(path, "not a NetCDF 4 file", "Name a file that this program wrote."))
    try:
        _check_sizes(path)
        with warnings.catch_warnings():
            warnings.simplefilter("error", xr.SerializationWarning)
            with xr.open_dataset(path, engine="h5netcdf") as opened:
                _check_head(path, opened, kind)
                dataset = opened.load()
    except InputError:
        raise
    except (OSError, ValueError, KeyError, TypeError, RuntimeError, AttributeError, UnicodeError) as error:
        what = " ".join(str(error).split())[:120]
        raise InputError(message(path, f"damaged or truncated NetCDF ({what})", _EXPORT_AGAIN)) from None
    for variable in dataset.variables.values():
        variable.encoding = {}
    return dataset


def _check_sizes(path: Path) -> None:
    """Refuse declared sizes that would exhaust the memory, and types that need more than plain reading."""

    def visit(name: str, item: object) -> None:
        if not isinstance(item, h5py.Dataset):
            return
        place = (path, f"variable {name}")
        length = max(item.shape or (0,))
        if length > HIGHEST_LENGTH:
            raise InputError(
                message(place, f"{length} long, expected at most {HIGHEST_LENGTH}", _EXPORT_AGAIN)
            )
        size = math.prod(item.shape or (0,)) * item.dtype.itemsize
        if size > HIGHEST_BYTES:
            raise InputError(
                message(
                    place,
                    f"{size / 1e9:.3g} GB, expected at most {HIGHEST_BYTES / 1e9:.3g} GB",
                    _EXPORT_AGAIN,
                )
            )
        text = h5py.check_string_dtype(item.dtype) is not None
        if item.dtype.kind not in "biufSUV" and not text:
            raise InputError(message(place, f"type {item.dtype}, expected numbers or text", _EXPORT_AGAIN))

    with h5py.File(path, "r") as file:
        file.visititems(visit)


def _check_head(path: Path, opened: xr.Dataset, kind: str) -> None:
    """Refuse another kind, a newer schema, or variables that a reader would have to guess about."""
    got = opened.attrs.get("sta_prior_kind")
    if got is None:
        raise InputError(message(path, "no attribute sta_prior_kind", "Name a file that this program wrote."))
    if got != kind:
        raise InputError(message(path, f"expected a file of kind {kind}, got {got}", f"Name a {kind} file."))
    version = opened.attrs.get("schema_version")
    if not isinstance(version, int | np.integer) or version < 1:
        raise InputError(
            message(path, f"schema version {version!r}, expected 1 … {SCHEMA_VERSION}", _EXPORT_AGAIN)
        )
    if version > SCHEMA_VERSION:
        raise InputError(
            message(
                path,
                f"schema version {version}, this program reads up to {SCHEMA_VERSION}",
                "Update the program.",
            )
        )
    for name, variable in opened.variables.items():
        numeric = variable.dtype.kind in "biuf"
        if numeric and not str(variable.attrs.get("units", "")).strip():
            raise InputError(message((path, f"variable {name}"), "no attribute units", _EXPORT_AGAIN))


def dataset_digest(dataset: xr.Dataset) -> str:
    """Return a SHA-256 of a Dataset's content as 64 hexadecimal digits.

    Parameters
    ----------
    dataset : variables and coordinates; attributes that write_dataset adds do not count

    Returns
    -------
    The same text for the same names, dimensions, values, units and attributes, in whatever order the
    variables stand, before writing and after reading.
    """
    digest = hashlib.sha256()
    for name in sorted(map(str, dataset.variables)):
        variable = dataset.variables[name]
        values = np.asarray(variable.to_numpy())
        digest.update(json.dumps([name, list(map(str, variable.dims)), list(values.shape)]).encode())
        digest.update(_canonical_attributes(variable.attrs).encode())
        if values.dtype.kind in "biuf":
            digest.update(np.ascontiguousarray(_plain(values)).tobytes())
        else:
            digest.update(json.dumps([str(value) for value in values.ravel()]).encode())
    attributes = {key: value for key, value in dataset.attrs.items() if key not in _ADDED}
    digest.update(_canonical_attributes(attributes).encode())
    return digest.hexdigest()


def _plain(values: np.ndarray[Any, Any]) -> np.ndarray[Any, Any]:
    """Return little-endian float64 or int64, one NaN and one zero: equal values become equal bytes."""
    if values.dtype.kind == "f":
        plain = np.asarray(values.astype("<f8") + 0.0)  # adding 0.0 makes −0 into 0; a scalar stays an array
        plain[np.isnan(plain)] = np.nan
        return plain
    return values.astype("<i8")


def _canonical_attributes(attributes: Mapping[Any, Any]) -> str:
    """Return attributes as one text, whatever number types a file turned them into."""
    plain = {}
    for key, value in attributes.items():
        array = np.asarray(value)
        numeric = array.dtype.kind in "biuf"
        plain[str(key)] = (
            np.atleast_1d(array).astype(np.float64).tolist()
            if numeric
            else [str(v) for v in np.atleast_1d(array)]
        )
    return json.dumps(plain, sort_keys=True)

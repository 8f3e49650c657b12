"""NetCDF files in and out: SI units on each variable, schema version, digests, one piece or nothing.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

import hashlib
import importlib.metadata
import json
import math
from collections.abc import Hashable, Mapping, Sequence
from pathlib import Path
from typing import Any, Literal

import h5py
import numpy as np
import xarray as xr

from sta_prior.errors import InputError, message
from sta_prior.io.files import atomic_path, read_content
from sta_prior.io.points import AXES, check_extent, check_unique

Kind = Literal["pairs", "prior", "solution"]
SCHEMA_VERSION = 1
HIGHEST_BYTES = 8 * 1024**3
HIGHEST_LENGTH = 10**8
NUMERIC, TEXT = "biuf", "SU"  # kinds of NumPy types
_SIGNATURE = b"\x89HDF\r\n\x1a\n"
_COMPRESSION = {"zlib": True, "complevel": 4, "shuffle": True}
EXPORT_AGAIN = "Copy it again or make it anew."
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
    InputError : a variable without units or of object type; a folder that cannot be written.

    Notes
    -----
    A text variable has no unit of its own and gets the unit 1.
    """
    attributes = {
        **dataset.attrs,
        "sta_prior_kind": kind,
        "schema_version": SCHEMA_VERSION,
        "created_by": f"sta_prior {_version()}",
        "input_digests": json.dumps(dict(digests), sort_keys=True),
    }
    _write(path, dataset.assign_attrs(attributes))


def _write(path: str | Path, dataset: xr.Dataset) -> None:
    """Write with compressed numbers; a half-written file never carries the name."""
    plain = dataset.copy()
    encoding: dict[Hashable, dict[str, Any]] = {}
    for name, variable in plain.variables.items():
        _check_variable(str(path), name, variable)
        numeric = variable.dtype.kind in NUMERIC
        variable.encoding = {}
        variable.attrs = {**({} if numeric else {"units": "1"}), **variable.attrs}
        encoding[name] = {"_FillValue": None, **(_COMPRESSION if numeric and variable.size > 1 else {})}
    with atomic_path(path) as temporary:
        plain.to_netcdf(temporary, engine="h5netcdf", encoding=encoding)


def _check_variable(place: str, name: Hashable, variable: xr.Variable) -> None:
    """Refuse what a plain reader could not understand."""
    if variable.dtype.kind not in NUMERIC + TEXT:
        wrong = f"type {variable.dtype}, expected numbers or text"
        raise InputError(message((place, f"variable {name}"), wrong, "Convert it."))
    if variable.dtype.kind in NUMERIC and not str(variable.attrs.get("units", "")).strip():
        wrong = "no attribute units"
        raise InputError(message((place, f"variable {name}"), wrong, "Set it, '1' for what has no unit."))


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
        units or of object type; a declared size beyond 8 GB, or beyond 1e8 along a dimension.
    """
    return _read(path, kind)


def write_points_netcdf(path: str | Path, points: xr.Dataset) -> None:
    """Write a Points Dataset as NetCDF, in one piece; read_points reads it."""
    attributes = {**points.attrs, "sta_prior_kind": "points", "schema_version": SCHEMA_VERSION}
    _write(path, points.assign_attrs(attributes))


def read_points_netcdf(path: str | Path) -> xr.Dataset:
    """Read a Points Dataset from NetCDF.

    Raises
    ------
    InputError : as read_dataset; other variables, time that does not rise, a label twice, nothing seen, or
        a size that contradicts the unit.
    """
    dataset = _read(path, "points")
    for name in ("sta_prior_kind", "schema_version"):
        del dataset.attrs[name]
    layout = {"position": ("time", "point", "axis"), "residual": ("time", "point")}
    for name, dims in layout.items():
        if name not in dataset or set(dataset[name].dims) != set(dims):
            raise InputError(message((path, f"variable {name}"), f"expected it with dims {', '.join(dims)}"))
        if dataset[name].attrs["units"] != "m":
            wrong = f"expected units m, got {dataset[name].attrs['units']}"
            raise InputError(message((path, f"variable {name}"), wrong, EXPORT_AGAIN))
    for name in ("time", "point", "axis"):
        if name not in dataset.coords:
            raise InputError(message((path, f"coordinate {name}"), "missing", EXPORT_AGAIN))
    dataset = dataset.transpose("time", "point", "axis", ...)
    if [str(axis) for axis in dataset["axis"].to_numpy()] != list(AXES):
        raise InputError(message((path, "coordinate axis"), f"expected {', '.join(AXES)}", EXPORT_AGAIN))
    if not (np.diff(dataset["time"].to_numpy()) > 0).all():
        raise InputError(message((path, "coordinate time"), "does not rise", "Sort the frames by time."))
    check_unique([str(label) for label in dataset["point"].to_numpy()], path, "label")
    position = dataset["position"].to_numpy()
    if not np.isfinite(position).any():
        wrong = f"none of its {position.shape[1]} points is seen in any frame"
        raise InputError(message(path, wrong, EXPORT_AGAIN))
    check_extent(position, "m", path)
    return dataset


def _read(path: str | Path, kind: str) -> xr.Dataset:
    """Read and load a file of any kind."""
    path = Path(path)
    if read_content(path, len(_SIGNATURE)) != _SIGNATURE:
        raise InputError(message(path, "not a NetCDF 4 file", "Name a file that this program wrote."))
    try:
        _check_sizes(path)
        with xr.open_dataset(path, engine="h5netcdf", decode_times=False) as opened:
            _check_head(path, opened, kind)
            dataset = opened.load()
    except (OSError, ValueError, KeyError, TypeError, RuntimeError, AttributeError) as error:
        what = " ".join(str(error).split())[:120]
        raise InputError(message(path, f"damaged or truncated NetCDF ({what})", EXPORT_AGAIN)) from None
    for variable in dataset.variables.values():
        variable.encoding = {}
        if variable.dtype.kind in TEXT:  # the unit that _write gave it
            variable.attrs.pop("units", None)
    return dataset


def _check_sizes(path: Path) -> None:
    """Refuse declared sizes that would exhaust the memory, and what reaches beyond the file itself."""
    total = 0
    with h5py.File(path, "r") as file:
        for name in file:
            place = (path, f"variable {name}")
            if not isinstance(file.get(name, getlink=True), h5py.HardLink):
                raise InputError(message(place, "a link, expected data in the file itself", EXPORT_AGAIN))
            item = file[name]
            if not isinstance(item, h5py.Dataset):
                raise InputError(message(place, "a group, expected a variable", EXPORT_AGAIN))
            if item.external:
                raise InputError(message(place, "data in another file, expected them here", EXPORT_AGAIN))
            if item.dtype.kind not in NUMERIC + TEXT and h5py.check_string_dtype(item.dtype) is None:
                wrong = f"type {item.dtype}, expected numbers or text"
                raise InputError(message(place, wrong, EXPORT_AGAIN))
            shape = item.shape or ()
            if max(shape, default=0) > HIGHEST_LENGTH:
                wrong = f"declared {max(shape)} long, expected at most {HIGHEST_LENGTH}"
                raise InputError(message(place, wrong, EXPORT_AGAIN))
            total += math.prod(shape) * item.dtype.itemsize
            if total > HIGHEST_BYTES:
                most = f"expected at most {HIGHEST_BYTES / 1e9:.3g} GB"
                wrong = f"declared size with those before it {total / 1e9:.3g} GB, {most}"
                raise InputError(message(place, wrong, EXPORT_AGAIN))


def _check_head(path: Path, opened: xr.Dataset, kind: str) -> None:
    """Refuse another kind, a newer schema, or variables that a reader would have to guess about."""
    got = opened.attrs.get("sta_prior_kind")
    if got is None:
        wrong = "no attribute sta_prior_kind"
        raise InputError(message(path, wrong, "Name a file that this program wrote."))
    if got != kind:
        raise InputError(message(path, f"expected a file of kind {kind}, got {got}", f"Name a {kind} file."))
    version = opened.attrs.get("schema_version")
    if not isinstance(version, int | np.integer) or version < 1:
        wrong = f"schema version {version!r}, expected 1 … {SCHEMA_VERSION}"
        raise InputError(message(path, wrong, EXPORT_AGAIN))
    if version > SCHEMA_VERSION:
        wrong = f"schema version {version}, this program reads up to {SCHEMA_VERSION}"
        raise InputError(message(path, wrong, "Update the program."))
    for name, variable in opened.variables.items():
        _check_variable(str(path), name, variable)


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
        numeric = values.dtype.kind in NUMERIC
        ignored = () if numeric else ("units",)
        digest.update(_canonical_attributes(variable.attrs, ignored).encode())
        if numeric:
            digest.update(np.ascontiguousarray(_plain(values)).tobytes())
        else:
            digest.update(json.dumps([str(value) for value in values.ravel()]).encode())
    digest.update(_canonical_attributes(dataset.attrs, _ADDED).encode())
    return digest.hexdigest()


def _plain(values: np.ndarray[Any, Any]) -> np.ndarray[Any, Any]:
    """Return little-endian float64 or int64, one NaN and one zero: equal values become equal bytes."""
    if values.dtype.kind == "f":
        plain = np.asarray(values.astype("<f8") + 0.0)  # adding 0.0 makes −0 into 0; a scalar stays an array
        plain[np.isnan(plain)] = np.nan
        return plain
    return values.astype("<i8")


def _canonical_attributes(attributes: Mapping[Any, Any], ignored: Sequence[str]) -> str:
    """Return attributes as one text, whatever number types a file turned them into."""
    plain: dict[str, list[Any]] = {}
    for key, value in attributes.items():
        array = np.atleast_1d(np.asarray(value))
        numeric = array.dtype.kind in NUMERIC
        plain[str(key)] = array.astype(np.float64).tolist() if numeric else [str(item) for item in array]
    return json.dumps({key: plain[key] for key in sorted(plain) if key not in ignored})

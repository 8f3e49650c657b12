"""Priors to and from NetCDF: data only.

Shell: holds the labels. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import xarray as xr

from sta_prior.errors import InputError, message
from sta_prior.io.netcdf import dataset_digest, read_dataset, write_dataset
from sta_prior.prior.base import JointLabel, Prior
from sta_prior.prior.families import find_family
from sta_prior.prior.family import SegmentModel, Values, Variable
from sta_prior.prior.inputs import check_inputs
from sta_prior.prior.personal import LearnedTrial

Variables = dict[str, tuple[tuple[str, ...], object, dict[str, str]]]
_ONE = {"units": "1"}


def _segment_variables(name: str, model: SegmentModel) -> Variables:
    """What a model stores, under the segment's name; layout, markers and inflation are every family's."""
    stored = {
        **model.variables(),
        "markers": Variable(("marker",), np.array(model.markers, dtype=str)),
        "layout": Variable(("place", "axis"), model.layout, "m"),
        "inflation": Variable((), np.array(model.inflation)),
    }
    return {
        f"{name}_{key}": (
            tuple(dim if dim == "axis" else f"{dim}_{name}" for dim in variable.dims),
            variable.values,
            {"units": variable.units},
        )
        for key, variable in stored.items()
    }


def prior_to_dataset(prior: Prior) -> xr.Dataset:
    """The prior as a Dataset; features carry rad to their power, weights m."""
    variables: Variables = {}
    for name, model in prior.segments.items():
        variables.update(_segment_variables(name, model))
    times = [trial.times for trial in prior.trials]
    variables["learned_time"] = (("learned_frame",), np.concatenate([np.zeros(0), *times]), {"units": "s"})
    counts = np.array([time.size for time in times], dtype=np.int64)
    variables["learned_frames"] = (("learned_trial",), counts, _ONE)
    for field in ("subject", "trial", "activity", "digest"):
        values = np.array([getattr(trial, field) for trial in prior.trials], dtype=str)
        variables[f"learned_{field}"] = (("learned_trial",), values, _ONE)
    data = xr.Dataset(variables)
    for figure in prior.validation.data_vars:
        array = prior.validation[figure]
        data[f"validation_{figure}"] = array.rename({dim: f"validation_{dim}" for dim in array.dims})
    data["segment_names"] = (("segment",), np.array(list(prior.segments)), _ONE)
    data.attrs = {
        "family": prior.family,
        "joints": json.dumps([label.__dict__ for label in prior.joints]),
        "notes": json.dumps(list(prior.notes), ensure_ascii=False),
        "covariates": json.dumps({name: dict(values) for name, values in prior.covariates.items()}),
        "pairs_digest": prior.pairs_digest,
        "inputs": json.dumps(list(prior.inputs)),
    }
    if prior.invented:
        data.attrs["invented_data"] = 1
    return data


def prior_digest(prior: Prior) -> str:
    """Digest of a prior's content."""
    return dataset_digest(prior_to_dataset(prior))


def write_prior(path: Path, prior: Prior) -> None:
    """Write a prior, atomically."""
    write_dataset(path, prior_to_dataset(prior), "prior", {"pairs": prior.pairs_digest})


def _stored(data: xr.Dataset, name: str) -> dict[str, Values]:
    """Arrays that a segment's model stored, by their own names."""
    prefix = f"{name}_"
    return {
        str(key).removeprefix(prefix): np.asarray(data[key].values)
        for key in data.variables
        if str(key).startswith(prefix)
    }


def load_prior(path: str | Path) -> Prior:
    """Read a prior from NetCDF.

    Raises
    ------
    InputError : not a prior, of a newer schema, or damaged.
    """
    place = Path(path)
    data = read_dataset(place, "prior")
    try:
        return _from_dataset(data)
    except (KeyError, ValueError, IndexError, TypeError, AttributeError) as error:
        raise InputError(
            message(place, f"not a whole prior file ({str(error).rstrip('.')})", "Learn the prior again.")
        ) from error


def _from_dataset(data: xr.Dataset) -> Prior:
    family = find_family(str(data.attrs["family"]), "family of the prior")
    names = [str(name) for name in data["segment_names"].values]
    segments = {name: family.read(name, _stored(data, name)) for name in names}
    ends = np.cumsum(data["learned_frames"].values)
    times = (
        np.split(np.asarray(data["learned_time"].values, dtype=np.float64), ends[:-1]) if ends.size else []
    )
    columns = [
        [str(value) for value in data[f"learned_{field}"].values]
        for field in ("subject", "trial", "activity", "digest")
    ]
    trials = tuple(LearnedTrial(*row) for row in zip(*columns, times, strict=True))
    figures = [name for name in data.variables if str(name).startswith("validation_")]
    validation = data[figures].rename(
        {name: str(name).removeprefix("validation_") for name in {*figures, *data[figures].dims}}
    )
    validation.attrs = {}
    joints = [JointLabel(**{**item, "dof": tuple(item["dof"])}) for item in json.loads(data.attrs["joints"])]
    return Prior(
        family=str(data.attrs["family"]),
        joints=tuple(joints),
        segments=segments,
        trials=trials,
        validation=validation,
        notes=tuple(json.loads(data.attrs["notes"])),
        invented=bool(data.attrs.get("invented_data", 0)),
        pairs_digest=str(data.attrs["pairs_digest"]),
        covariates=json.loads(data.attrs["covariates"]),
        inputs=check_inputs(json.loads(data.attrs["inputs"])),
    )

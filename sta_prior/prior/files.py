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
from sta_prior.prior.base import JointLabel, LearnedTrial, Prior, SegmentModel
from sta_prior.prior.basis import Basis, Term
from sta_prior.prior.hierarchy import Block, Hierarchy, TrialStatistics, Weights

_ONE, _METRE, _SQUARE = {"units": "1"}, {"units": "m"}, {"units": "m2"}
Variables = dict[str, tuple[tuple[str, ...], object, dict[str, str]]]


def _segment_variables(name: str, model: SegmentModel) -> Variables:
    fit = model.hierarchy
    blocks = [(trial, block) for trial in model.trials for block in trial.blocks]
    feature, output, weight = f"feature_{name}", f"output_{name}", f"weight_{name}"
    feature2, output2, weight2 = f"feature2_{name}", f"output2_{name}", f"weight2_{name}"
    block, term, marker = f"block_{name}", f"term_{name}", f"marker_{name}"

    def stack(field: str) -> object:
        return np.array([getattr(item, field) for _, item in blocks])

    terms = model.basis.terms
    items: Variables = {
        "layout": ((marker, "axis"), model.layout, _METRE),
        "term_joint": ((term,), np.array([t.joint for t in terms], dtype=np.int64), _ONE),
        "term_dof": ((term,), np.array([t.dof for t in terms], dtype=np.int64), _ONE),
        "term_power": ((term,), np.array([t.power for t in terms], dtype=np.int64), _ONE),
        "term_mixing": ((term, f"term2_{name}"), model.basis.mixing, _ONE),
        "population_mean": ((feature, output), fit.population.mean, _METRE),
        "population_covariance": ((weight, weight2), fit.population.covariance, _SQUARE),
        "subject_features": ((feature, feature2), fit.subject_features, _SQUARE),
        "subject_outputs": ((output, output2), fit.subject_outputs, _ONE),
        "trial_features": ((feature, feature2), fit.trial_features, _SQUARE),
        "trial_outputs": ((output, output2), fit.trial_outputs, _ONE),
        "residual": ((output, output2), fit.residual, _SQUARE),
        "observed_residual": ((output, output2), fit.observed_residual, _SQUARE),
        "iterations": ((), np.int64(fit.iterations), _ONE),
        "time_constant": ((), np.float64(model.time_constant), {"units": "s"}),
        "inflation": ((), np.float64(model.inflation), _ONE),
        "block_seen": ((block, output), np.asarray(stack("seen"), dtype=np.int8), _ONE),
        "block_feature_gram": ((block, feature, feature2), stack("feature_gram"), _ONE),
        "block_cross": ((block, feature, output), stack("cross"), _METRE),
        "block_output_gram": ((block, output, output2), stack("output_gram"), _SQUARE),
        "block_noise_gram": ((block, output, output2), stack("noise_gram"), _SQUARE),
        "block_weight": ((block,), stack("weight"), _ONE),
        "block_frames": ((block,), np.asarray(stack("frames"), dtype=np.int64), _ONE),
        "block_subject": ((block,), np.array([trial.subject for trial, _ in blocks]), _ONE),
        "block_trial": ((block,), np.array([trial.trial for trial, _ in blocks]), _ONE),
        "markers": ((marker,), np.array(model.markers), _ONE),
    }
    return {f"{name}_{key}": value for key, value in items.items()}


def prior_to_dataset(prior: Prior) -> xr.Dataset:
    """The prior as a Dataset; features carry rad to their power, weights m."""
    variables: Variables = {}
    for name, model in prior.segments.items():
        variables.update(_segment_variables(name, model))
    times = [trial.times for trial in prior.trials]
    variables["learned_time"] = (("learned_frame",), np.concatenate(times), {"units": "s"})
    counts = np.array([time.size for time in times], dtype=np.int64)
    variables["learned_frames"] = (("learned_trial",), counts, _ONE)
    for field in ("subject", "trial", "activity", "digest"):
        values = np.array([getattr(trial, field) for trial in prior.trials])
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
        "stop_reasons": json.dumps({n: m.hierarchy.stop_reason for n, m in prior.segments.items()}),
        "covariates": json.dumps({name: dict(values) for name, values in prior.covariates.items()}),
        "pairs_digest": prior.pairs_digest,
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


def _read_segment(data: xr.Dataset, name: str, stop_reason: str) -> SegmentModel:
    def get(key: str) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
        return np.asarray(data[f"{name}_{key}"].values, dtype=np.float64)

    def texts(key: str) -> list[str]:
        return [str(value) for value in data[f"{name}_{key}"].values]

    grouped: dict[tuple[str, str], list[Block]] = {}
    arrays = {
        key: get(f"block_{key}")
        for key in ("seen", "feature_gram", "cross", "output_gram", "noise_gram", "weight", "frames")
    }
    for index, key in enumerate(zip(texts("block_subject"), texts("block_trial"), strict=True)):
        grouped.setdefault(key, []).append(
            Block(
                seen=arrays["seen"][index] > 0,
                feature_gram=arrays["feature_gram"][index],
                cross=arrays["cross"][index],
                output_gram=arrays["output_gram"][index],
                noise_gram=arrays["noise_gram"][index],
                weight=float(arrays["weight"][index]),
                frames=int(arrays["frames"][index]),
            )
        )
    terms = zip(get("term_joint"), get("term_dof"), get("term_power"), strict=True)
    return SegmentModel(
        name=name,
        markers=tuple(texts("markers")),
        layout=get("layout"),
        basis=Basis(
            tuple(Term(int(joint), int(dof), int(power)) for joint, dof, power in terms), get("term_mixing")
        ),
        hierarchy=Hierarchy(
            population=Weights(get("population_mean"), get("population_covariance")),
            subject_features=get("subject_features"),
            subject_outputs=get("subject_outputs"),
            trial_features=get("trial_features"),
            trial_outputs=get("trial_outputs"),
            residual=get("residual"),
            observed_residual=get("observed_residual"),
            iterations=int(get("iterations")),
            stop_reason=stop_reason,
        ),
        trials=tuple(TrialStatistics(s, t, tuple(blocks)) for (s, t), blocks in grouped.items()),
        time_constant=float(get("time_constant")),
        inflation=float(get("inflation")),
    )


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
            message(place, f"not a whole prior file ({error})", "Learn the prior again.")
        ) from error


def _from_dataset(data: xr.Dataset) -> Prior:
    if data.attrs["family"] != "linear":
        raise ValueError(f"family {data.attrs['family']} is not known here")
    reasons = json.loads(data.attrs["stop_reasons"])
    segments = {
        str(name): _read_segment(data, str(name), reasons[str(name)]) for name in data["segment_names"].values
    }
    ends = np.cumsum(data["learned_frames"].values)
    times = np.split(np.asarray(data["learned_time"].values, dtype=np.float64), ends[:-1])
    columns = [
        [str(value) for value in data[f"learned_{field}"].values]
        for field in ("subject", "trial", "activity", "digest")
    ]
    trials = tuple(LearnedTrial(*row) for row in zip(*columns, times, strict=True))
    names = [name for name in data.variables if str(name).startswith("validation_")]
    validation = data[names].rename(
        {name: str(name).removeprefix("validation_") for name in {*names, *data[names].dims}}
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
    )

"""Test a finished prior on paired data that it has not learned from.

Shell: holds the labels. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import numpy as np
import xarray as xr

from sta_prior.errors import InputError, MismatchError, message
from sta_prior.prior.base import Prior
from sta_prior.prior.learning import joint_labels
from sta_prior.prior.statistics import segment_frames
from sta_prior.prior.validate import predict_others, summarise_validation


def examine(prior: Prior, pairs: xr.Dataset) -> xr.Dataset:
    """Predict the displacement of subjects in other paired data as if they had never been imaged.

    Parameters
    ----------
    prior : learned prior
    pairs : paired data; trials of subjects that the prior learned from are left out

    Returns
    -------
    Dataset like the prior's own validation.

    Raises
    ------
    InputError : every subject is one that the prior learned from.
    MismatchError : a joint or a segment of the prior is not in the paired data.
    """
    digests = {trial.digest for trial in prior.trials}
    known = {
        str(subject)
        for subject, digest in zip(pairs["trial_subject"].values, pairs["trial_digest"].values, strict=True)
        if str(digest) in digests
    }
    new = [i for i, name in enumerate(pairs["trial_subject"].values) if str(name) not in known]
    if not new:
        raise InputError(
            message("--pairs", "the prior learned from every subject in it", "Give other subjects' pairs.")
        )
    theirs = {label.name: label for label in joint_labels(pairs)}
    for joint in prior.joints:
        if joint.name not in theirs or theirs[joint.name].kind != joint.kind:
            raise MismatchError(message("--pairs", f"prior needs joint {joint.name} of kind {joint.kind}"))
    ours = [joint.name for joint in prior.joints]
    chosen = pairs.isel(trial=new).sel(joint=ours)
    figures = []
    for name, model in prior.segments.items():
        if name not in chosen["segment"].values:
            raise MismatchError(message("--pairs", f"prior expects segment {name}, the pairs lack it"))
        markers = np.intersect1d(list(model.markers), chosen["marker"].values)
        if markers.size == 0:
            raise MismatchError(
                message(
                    "--pairs", f"prior expects {name} markers {' '.join(model.markers)}, the pairs have none"
                )
            )
        dof = {joint.name: joint.dof for joint in prior.joints}
        left_out = predict_others(model, segment_frames(chosen, name, model.markers, dof))
        widths = None
        if prior.validation.sizes.get("unit", 0):
            widths = prior.validation["half_width"].sel(segment=name).values
        figures.append(summarise_validation(name, left_out, model.inflation, widths))
    return xr.concat(figures, dim="segment", join="outer")

"""Test a finished prior on paired data that it has not learned from.

Shell: holds the labels. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import numpy as np
import xarray as xr

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, MismatchError, message
from sta_prior.prior.base import Prior
from sta_prior.prior.learning import joint_labels, layout_of, markers_of
from sta_prior.prior.statistics import segment_frames
from sta_prior.prior.validate import FEWEST_TO_CALIBRATE, predict_others, summarise_validation


def stored_half_widths(prior: Prior, segment: str) -> FloatArray | None:
    """Half-widths that a prior was calibrated to, in predicted SD; None where it had too few subjects."""
    figures = prior.validation
    units = figures.sizes.get("unit", 0)
    if units < FEWEST_TO_CALIBRATE or not bool(figures["by_subject"].sel(segment=segment)):
        return None
    return np.asarray(figures["half_width"].sel(segment=segment).values, dtype=np.float64)


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
    # A prior of published sizes may need no joint; the frames are placed by the pairs' own.
    used = prior.joints or tuple(theirs.values())
    ours = [joint.name for joint in used]
    dof = {joint.name: joint.dof for joint in used}
    chosen = pairs.isel(trial=new).sel(joint=ours)
    figures = []
    for name, model in prior.segments.items():
        if name not in chosen["segment"].values:
            if not model.markers and set(prior.segments) & set(chosen["segment"].values):
                continue  # published sizes of a segment that nobody wore markers on
            raise MismatchError(message("--pairs", f"prior expects segment {name}, the pairs lack it"))
        theirs_here = markers_of(chosen, name)
        if model.markers and not set(model.markers) & set(theirs_here):
            raise MismatchError(
                message(
                    "--pairs", f"prior expects {name} markers {' '.join(model.markers)}, the pairs have none"
                )
            )
        markers = model.markers or theirs_here
        # Published sizes take any markers, where they are in these pairs.
        layout = None if model.markers else layout_of(chosen, name, markers)
        left_out = predict_others(
            model, segment_frames(chosen, name, markers, dof, prior.inputs), layout=layout
        )
        widths = stored_half_widths(prior, name)
        figures.append(summarise_validation(name, left_out, model.inflation, widths, calibrated=False))
    return xr.concat(figures, dim="segment", join="outer")

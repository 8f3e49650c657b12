"""Learn a prior from paired data.

Shell: holds the labels. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from typing import cast

import numpy as np
import xarray as xr

from sta_prior.angles import JointConvention, JointKind
from sta_prior.checks import FloatArray, nearest
from sta_prior.errors import InputError, message
from sta_prior.io.netcdf import dataset_digest
from sta_prior.prior.base import JointLabel, Prior
from sta_prior.prior.families import DEFAULT_FAMILY, find_family
from sta_prior.prior.family import Family, SegmentData, SegmentModel
from sta_prior.prior.inputs import check_inputs, extra_drivers
from sta_prior.prior.personal import LearnedTrial
from sta_prior.prior.statistics import SegmentFrames, adjacent_joints, segment_frames
from sta_prior.prior.validate import calibrate_inflation, leave_one_out, summarise_validation

REGION = np.radians(15.0)
"""Width of the regions by which training frames are counted, rad."""


def joint_labels(pairs: xr.Dataset) -> tuple[JointLabel, ...]:
    """Joints of paired data with their degrees of freedom, in the order of each joint's convention."""
    labels = []
    for index, joint in enumerate(pairs["joint"].values):
        kind = str(pairs["joint_kind"].values[index])
        labels.append(
            JointLabel(
                name=str(joint),
                kind=kind,
                proximal=str(pairs["joint_proximal"].values[index]),
                distal=str(pairs["joint_distal"].values[index]),
                # The columns of the pairs stand in the order of the whole lab, not of this joint.
                dof=JointConvention(cast(JointKind, kind), "right").dof,
            )
        )
    return tuple(labels)


def _without(pairs: xr.Dataset, hold_out: Sequence[str]) -> xr.Dataset:
    subjects = [str(name) for name in pairs["subject_id"].values]
    for name in hold_out:
        if name not in subjects:
            raise InputError(
                message(
                    "--hold-out",
                    f"subject {name} is not in the paired data, which has {', '.join(subjects)}",
                    nearest(name, subjects),
                )
            )
    keep = [index for index, name in enumerate(subjects) if name not in hold_out]
    if not keep:
        raise InputError(message("--hold-out", "leaves no subject to learn from"))
    kept = {subjects[index] for index in keep}
    frames = np.flatnonzero([str(name) in kept for name in pairs["subject"].values])
    trials = [i for i, name in enumerate(pairs["trial_subject"].values) if str(name) in kept]
    return pairs.isel(subject=keep, frame=frames, trial=trials)


def markers_of(pairs: xr.Dataset, segment: str) -> tuple[str, ...]:
    """Markers of a segment, in the order of the pairs."""
    rows = zip(pairs["marker"].values, pairs["marker_segment"].values, strict=True)
    return tuple(str(marker) for marker, own in rows if str(own) == segment)


def layout_of(pairs: xr.Dataset, segment: str, markers: Sequence[str]) -> FloatArray:
    """Mean reference position of every marker, (m, 3) m, right side."""
    columns = [list(pairs["marker"].values).index(marker) for marker in markers]
    positions = pairs["reference"].values[:, columns].copy()
    names = [str(name) for name in pairs["segment"].values]
    left = pairs["segment_side"].values[:, names.index(segment)] == "left"
    positions[left, :, 2] *= -1.0
    mean: FloatArray = positions.mean(axis=0)
    return mean


def _segment_data(
    pairs: xr.Dataset, segment: str, joints: tuple[JointLabel, ...], inputs: tuple[str, ...] = ()
) -> SegmentData:
    markers = markers_of(pairs, segment)
    dof = {joint.name: joint.dof for joint in joints}
    frames = segment_frames(pairs, segment, markers, dof, inputs)
    if not frames:
        raise InputError(
            message(("pairs", segment), "no frame has both a visible marker and all joint angles")
        )
    _refuse_unseen(segment, markers, frames)
    adjacent = adjacent_joints(pairs, segment, tuple(dof))
    return SegmentData(
        name=segment,
        markers=markers,
        layout=layout_of(pairs, segment, markers),
        frames=frames,
        adjacent=adjacent,
        extra=extra_drivers(inputs, adjacent, len(joints)),
    )


def _refuse_unseen(segment: str, markers: tuple[str, ...], frames: list[SegmentFrames]) -> None:
    seen = np.any([np.isfinite(item.displacement).any(axis=0) for item in frames], axis=0)
    for index, marker in enumerate(markers):
        if not seen[3 * index]:
            raise InputError(
                message(
                    ("pairs", segment, f"marker {marker}"),
                    "never seen together with bone truth",
                    "Drop it from the lab file or pair a trial that shows it.",
                )
            )


def _check_inputs(names: Sequence[str], family: str, chosen: Family) -> tuple[str, ...]:
    inputs = check_inputs(names)
    if inputs and not getattr(chosen, "takes_inputs", False):
        raise InputError(
            message(
                "--inputs",
                f"family {family} is driven by the joint angles only, got {', '.join(inputs)}",
                "Leave --inputs out, or take another family.",
            )
        )
    return inputs


def learn(
    pairs: xr.Dataset,
    family: str = DEFAULT_FAMILY,
    hold_out: Sequence[str] = (),
    inputs: Sequence[str] = (),
) -> Prior:
    """Learn an artifact prior and validate it on subjects left out.

    Parameters
    ----------
    pairs : paired data, as from `pair`
    family : "reduced-rank-gp", "linear", "exact-gp", "magnitude", or the name of a plug-in
    hold_out : subjects that must not be learned from
    inputs : what may drive the artifact beside flexion: "tilt" of the segment against gravity,
        "angular-velocity" of the adjacent joints

    Returns
    -------
    Prior with its validation inside. With one subject it is a personal prior and its notes say so.

    Raises
    ------
    InputError : unknown family, subject or input, or no usable frame.
    MismatchError : the pairs lack what an input needs.
    """
    chosen_family = find_family(family)
    known_inputs = _check_inputs(inputs, family, chosen_family)
    chosen = _without(pairs, hold_out) if hold_out else pairs
    joints = joint_labels(chosen)
    if not joints:
        raise InputError(message("pairs", "no joint, so no angle can drive the artifact", "Add a joint."))
    segments: dict[str, SegmentModel] = {}
    figures, used = [], set()
    for name in (str(segment) for segment in chosen["segment"].values):
        data = _segment_data(chosen, name, joints, known_inputs)
        model = chosen_family.learn(data)
        left_out = leave_one_out(model, data.frames, data.adjacent)
        segments[name] = model.with_inflation(calibrate_inflation(left_out))
        # Trials left out of one subject are predicted with that subject's own weights, unwidened.
        by_subject = bool(left_out) and left_out[0].by_subject
        figures.append(summarise_validation(name, left_out, segments[name].inflation if by_subject else 1.0))
        used |= {(item.subject, item.trial) for item in data.frames}
    trials = tuple(
        LearnedTrial(
            subject=str(chosen["trial_subject"].values[index]),
            trial=str(chosen["trial_id"].values[index]),
            activity=str(chosen["trial_activity"].values[index]),
            digest=str(chosen["trial_digest"].values[index]),
            times=chosen["time"].values[
                (chosen["subject"].values == chosen["trial_subject"].values[index])
                & (chosen["trial"].values == chosen["trial_id"].values[index])
            ],
        )
        for index in range(chosen.sizes["trial"])
        if (str(chosen["trial_subject"].values[index]), str(chosen["trial_id"].values[index])) in used
    )
    return Prior(
        family=family,
        joints=joints,
        segments=segments,
        trials=trials,
        validation=xr.merge(
            [xr.concat(figures, dim="segment", join="outer"), frames_by_angle(chosen, joints)]
        ),
        notes=_notes(trials),
        inputs=known_inputs,
        invented=bool(chosen.attrs.get("invented_data", 0)),
        pairs_digest=dataset_digest(pairs),
        covariates={
            name: values
            for name, values in json.loads(str(pairs.attrs.get("covariates", "{}"))).items()
            if name in {trial.subject for trial in trials}
        },
    )


def frames_by_angle(pairs: xr.Dataset, joints: tuple[JointLabel, ...]) -> xr.Dataset:
    """How many paired frames lie in each region of every joint's first angle (flexion), REGION wide."""
    edges = np.arange(-np.pi, np.pi + REGION, REGION)
    names = [joint.name for joint in joints]
    counts = [
        np.histogram(pairs["angle"].sel(joint=joint.name, dof=joint.dof[0]).values, edges)[0]
        for joint in joints
    ]
    used = np.flatnonzero(np.sum(counts, axis=0))
    kept = np.arange(used.min(), used.max() + 1) if used.size else used
    one, radian = {"units": "1"}, {"units": "rad"}
    return xr.Dataset(
        {
            "frames_by_angle": (("joint", "region"), np.array(counts, dtype=np.int64)[:, kept], one),
            "region_dof": (("joint",), np.array([joint.dof[0] for joint in joints])),
            "region_low": (("region",), edges[kept], radian),
            "region_high": (("region",), edges[kept + 1], radian),
        },
        coords={"joint": np.array(names)},
    )


def _notes(trials: tuple[LearnedTrial, ...]) -> tuple[str, ...]:
    count = len({trial.subject for trial in trials})
    if count == 1:
        return (
            f"Personal prior: it learned from one subject, {trials[0].subject}, and holds for that subject. "
            "The spread between subjects is assumed, not learned; for anyone else its intervals are wide "
            "and unverified.",
        )
    notes = []
    if count < 9:
        notes.append(
            f"{count} subjects: too few to certify a 90 % band without assumptions, which needs at least "
            "nine (n ≥ 1/α − 1 exchangeable subjects)."
        )
    elif count < 19:
        notes.append(
            f"{count} subjects cannot certify a 95 % band without assumptions, which needs at least nineteen."
        )
    return tuple(notes)

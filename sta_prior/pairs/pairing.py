"""Build the paired data set of a study.

Shell: holds the labels. Conventions: docs/conventions.md; variables: docs/files.md.
"""

from __future__ import annotations

import json
import warnings
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import xarray as xr

from sta_prior.angles import joint_angles
from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, StaPriorError, StaPriorWarning, message
from sta_prior.pairs.align import skin_at
from sta_prior.pairs.belonging import Belonging, check_belonging, distance_misfit
from sta_prior.se3 import inverse, transform_points
from sta_prior.study import Lab, Reference, Study, Subject, Trial

AXES = ("x", "y", "z")


@dataclass(frozen=True)
class PairingReport:
    """Which trials were left out of the paired data, and why, by name."""

    refused: tuple[tuple[str, str, str], ...]

    def lines(self) -> list[str]:
        """One line a trial."""
        return [message((subject, trial), reason) for subject, trial, reason in self.refused]


@dataclass(frozen=True)
class _PairedTrial:
    """One trial at its instants of bone truth."""

    trial: Trial
    time: FloatArray
    displacement: FloatArray
    pose: FloatArray
    angle: FloatArray
    fits: list[Belonging]
    seen_share: FloatArray


def dof_names(lab: Lab) -> list[str]:
    """Names of the degrees of freedom of all joints, in first-seen order."""
    return list(dict.fromkeys(name for joint in lab.joints for name in joint.convention.dof))


def spread_over_dof(lab: Lab, values: FloatArray) -> FloatArray:
    """Put three angles a joint, shape (..., J, 3), in the columns of dof_names; NaN elsewhere."""
    names = dof_names(lab)
    result = np.full((*values.shape[:-1], len(names)), np.nan)
    for index, joint in enumerate(lab.joints):
        columns = [names.index(name) for name in joint.convention.dof]
        result[..., index, columns] = values[..., index, :]
    return result


def gather_from_dof(lab: Lab, values: FloatArray) -> FloatArray:
    """Undo spread_over_dof: shape (..., J, dof) to (..., J, 3)."""
    names = dof_names(lab)
    result = np.empty((*values.shape[:-1], 3))
    for index, joint in enumerate(lab.joints):
        columns = [names.index(name) for name in joint.convention.dof]
        result[..., index, :] = values[..., index, columns]
    return result


def segment_side(lab: Lab, segment: str) -> str:
    """Side of the body a segment lies on, from the joints that touch it; right where none says."""
    for joint in lab.joints:
        if segment in (joint.proximal, joint.distal):
            return joint.convention.side
    return "right"


def angles_of_poses(lab: Lab, poses: FloatArray) -> FloatArray:
    """Joint angles of poses, shape (..., S, 4, 4), as (..., J, 3) rad; NaN where a pose is missing."""
    angles = np.full((*poses.shape[:-3], len(lab.joints), 3), np.nan)
    for index, joint in enumerate(lab.joints):
        proximal = poses[..., lab.segment_index(joint.proximal), :3, :3]
        distal = poses[..., lab.segment_index(joint.distal), :3, :3]
        angles[..., index, :] = joint_angles(joint.convention, np.swapaxes(proximal, -1, -2) @ distal)
    return angles


def posture_distance(angles: FloatArray, reference: FloatArray) -> FloatArray:
    """Angle from the reference posture over all joints, (F, J, 3) and (J, 3) to (F,) rad."""
    wrapped = np.angle(np.exp(1j * (angles - reference)))
    result: FloatArray = np.sqrt((wrapped**2).sum(axis=(-1, -2)))
    return result


def _bone_at_skin(trial: Trial, reference: Reference) -> tuple[FloatArray, FloatArray] | None:
    """Times and poses of bone truth in the segments' own frames, (B,) and (B, S, 4, 4)."""
    bone = trial.bone()
    if bone is None:
        return None
    rotation, position = bone["rotation"].values, bone["position"].values
    pose = np.zeros((*rotation.shape[:2], 4, 4))
    pose[..., :3, :3], pose[..., :3, 3], pose[..., 3, 3] = rotation, position, 1.0
    missing = np.isnan(rotation).any(axis=(-1, -2)) | np.isnan(position).any(axis=-1)
    # The table's frame is the imaging one; the recipe's frame differs by a constant.
    pose = pose @ reference.frame_offset
    pose[missing] = np.nan
    return bone["time"].values.astype(np.float64), pose


def _pair_trial(trial: Trial, reference: Reference) -> _PairedTrial:
    lab = trial.subject.lab
    for name, value in (("clock", trial.clock), ("space", trial.space)):
        if value != "shared":
            raise InputError(
                message(
                    (trial.subject.id, trial.id),
                    f'{name} = "{value}" cannot be paired by this version, expected "shared"',
                    "Bring the bone truth to the skin system's clock and lab frame first.",
                )
            )
    found = _bone_at_skin(trial, reference)
    if found is None:
        raise InputError(message((trial.subject.id, trial.id), "no bone truth in the study", "Add bone = …"))
    time, pose = found
    skin = trial.skin()
    points, inside = skin_at(skin["time"].values.astype(np.float64), skin["position"].values, time)
    if not inside.any():
        first, last = float(skin["time"][0]), float(skin["time"][-1])
        raise InputError(
            message(
                (trial.subject.id, trial.id),
                f"bone truth from {time[0]:.3f} to {time[-1]:.3f} s lies outside the skin trial, "
                f"expected within {first:.3f} to {last:.3f} s",
                "Check the bone table's clock.",
            )
        )
    if not inside.all():
        warnings.warn(
            message(
                (trial.subject.id, trial.id),
                f"{int((~inside).sum())} of {inside.size} bone frames lie outside the skin trial",
                "They are left out.",
            ),
            StaPriorWarning,
            stacklevel=3,
        )
    seen = inside & np.isfinite(pose[:, :, 0, 0]).any(axis=1)
    time, pose, points = time[seen], pose[seen], points[seen]
    segment_of = lab.marker_segment
    displacement = np.full_like(points, np.nan)
    for index in range(len(lab.segments)):
        own = segment_of == index
        bone_points = transform_points(inverse(pose[:, index]), points[:, own])
        displacement[:, own] = bone_points - reference.markers[own]
    angle = angles_of_poses(lab, pose)
    away = posture_distance(angle, reference.angles)
    whole = skin["position"].values
    fits = []
    for index in range(len(lab.segments)):
        own = segment_of == index
        fit = check_belonging(points[:, own], reference.markers[own], pose[:, index], away)
        # Distances need no bone truth: the best frames are sought in the whole trial.
        fits.append(replace(fit, distance_misfit=distance_misfit(whole[:, own], reference.markers[own])))
    share = np.isfinite(points[..., 0]).sum(axis=0) / max(time.size, 1)
    return _PairedTrial(trial, time, displacement, pose, angle, fits, share)


def pair(
    study: Study, subjects: Sequence[str] | None = None, trials: Sequence[str] | None = None
) -> xr.Dataset:
    """Pair skin markers with bone truth over a study.

    Parameters
    ----------
    study : as read by read_study
    subjects, trials : identifiers to keep; all by default

    Returns
    -------
    Dataset of docs/files.md, "pairs", SI units. A trial whose reference does not belong to it is
    left out with a warning that names it.

    Raises
    ------
    InputError : no trial with bone truth, or none left.
    """
    data, report = pair_with_report(study, subjects, trials)
    for line in report.lines():
        warnings.warn(line, StaPriorWarning, stacklevel=2)
    return data


def pair_with_report(
    study: Study, subjects: Sequence[str] | None = None, trials: Sequence[str] | None = None
) -> tuple[xr.Dataset, PairingReport]:
    """Pair as `pair` does, returning the refused trials instead of warning of them.

    A trial whose files cannot be used is refused like one whose reference does not belong to it.
    """
    chosen = [trial for trial in study.select(subjects, trials) if trial.has_bone]
    if not chosen:
        raise InputError(
            message(study.path, "no chosen trial has bone truth", "Add bone = … to a trial or choose others.")
        )
    paired: list[_PairedTrial] = []
    refused: list[tuple[str, str, str]] = []
    errors: list[StaPriorError] = []
    for trial in chosen:
        try:
            result = _pair_trial(trial, trial.subject.reference())
        except StaPriorError as error:
            errors.append(error)
            refused.append(
                (trial.subject.id, trial.id, str(error).removeprefix(message(trial.place, "")[:-1]))
            )
            continue
        reason = _why_refused(study, result)
        if reason:
            refused.append((trial.subject.id, trial.id, reason))
        else:
            paired.append(result)
    _note_assumed_accuracy([item.trial for item in paired])
    report = PairingReport(tuple(refused))
    if not paired:
        if len(errors) == len(chosen) == 1:
            raise errors[0]
        more = f"{len(refused) - 1} more trials cannot be paired either." if len(refused) > 1 else ""
        raise InputError(message(study.path, f"no trial is left to pair: {report.lines()[0]}", more))
    return _dataset(study, paired), report


def _why_refused(study: Study, result: _PairedTrial) -> str:
    """Words for what does not fit a trial's reference; empty where all is well."""
    if result.time.size == 0:
        return "no frame with bone truth in view. Not paired: check its bone table"
    reasons = [
        reason
        for segment, fit in zip(study.lab.segments, result.fits, strict=True)
        for reason in fit.reasons(segment.name)
    ]
    advice = ". Not paired: its reference does not belong to it; give it a reference of its own"
    return "; ".join(reasons) + advice if reasons else ""


def _note_assumed_accuracy(trials: list[Trial]) -> None:
    """Say once where the accuracy of the bone truth is assumed, for it shapes what is learned."""
    assumed = [trial for trial in trials if not trial.bone_sd_declared]
    if assumed:
        first = assumed[0]
        more = f" and in {len(assumed) - 1} more trials" if len(assumed) > 1 else ""
        warnings.warn(
            message(
                (first.subject.id, first.id),
                f"bone_sd is not declared here{more}, taken as "
                f"{1000 * first.bone_sd_position:g} mm and {np.degrees(first.bone_sd_rotation):g}°",
                "Declare the accuracy of your bone truth in motion: it is taken out of the artifact.",
            ),
            StaPriorWarning,
            stacklevel=3,
        )


def input_digests(data: xr.Dataset) -> dict[str, str]:
    """SHA-256 of the skin file of every paired trial, by "subject/trial"."""
    rows = zip(
        data["trial_subject"].values, data["trial_id"].values, data["trial_digest"].values, strict=True
    )
    return {f"{subject}/{trial}": str(digest) for subject, trial, digest in rows}


def _dataset(study: Study, paired: list[_PairedTrial]) -> xr.Dataset:
    lab = study.lab
    subjects: list[Subject] = list({item.trial.subject.id: item.trial.subject for item in paired}.values())
    references = [subject.reference() for subject in subjects]
    poses = np.concatenate([item.pose for item in paired])
    displacement = np.concatenate([item.displacement for item in paired])
    frames = [item.time.size for item in paired]
    length = np.sqrt((displacement**2).sum(axis=-1))
    trial_of = np.repeat(np.arange(len(paired)), frames)
    rms = np.full((len(paired), len(lab.markers)), np.nan)
    peak = np.full_like(rms, np.nan)
    for index in range(len(paired)):
        own = length[trial_of == index]
        seen = np.isfinite(own)
        counts = np.maximum(seen.sum(axis=0), 1)
        any_seen = seen.any(axis=0)
        rms[index] = np.where(any_seen, np.sqrt(np.where(seen, own**2, 0.0).sum(axis=0) / counts), np.nan)
        peak[index] = np.where(any_seen, np.where(seen, own, 0.0).max(axis=0), np.nan)

    def fit_figures(name: str) -> FloatArray:
        return np.array([[getattr(fit, name) for fit in item.fits] for item in paired])

    metre, radian, second, one = {"units": "m"}, {"units": "rad"}, {"units": "s"}, {"units": "1"}
    identity = np.broadcast_to(np.eye(3), (len(paired), 3, 3)).copy()
    variables = {
        "displacement": (("frame", "marker", "axis"), displacement, metre),
        "bone_rotation": (("frame", "segment", "row", "col"), poses[..., :3, :3], one),
        "bone_position": (("frame", "segment", "axis"), poses[..., :3, 3], metre),
        "angle": (
            ("frame", "joint", "dof"),
            spread_over_dof(lab, np.concatenate([item.angle for item in paired])),
            radian,
        ),
        "reference": (
            ("subject", "marker", "axis"),
            np.array([reference.markers for reference in references]),
            metre,
        ),
        "reference_angle": (
            ("subject", "joint", "dof"),
            spread_over_dof(lab, np.array([reference.angles for reference in references])),
            radian,
        ),
        "reference_rotation": (
            ("subject", "segment", "row", "col"),
            np.array([reference.poses[:, :3, :3] for reference in references]),
            one,
        ),
        "clock_lag": (("trial",), np.zeros(len(paired)), second),
        "clock_lag_sd": (("trial",), np.zeros(len(paired)), second),
        "space_rotation": (("trial", "row", "col"), identity, one),
        "space_position": (("trial", "axis"), np.zeros((len(paired), 3)), metre),
        "bone_sd_position": (("trial",), np.array([item.trial.bone_sd_position for item in paired]), metre),
        "bone_sd_rotation": (("trial",), np.array([item.trial.bone_sd_rotation for item in paired]), radian),
        "frames_used": (("trial",), np.array(frames, dtype=np.int64), one),
        "displacement_rms": (("trial", "marker"), rms, metre),
        "displacement_peak": (("trial", "marker"), peak, metre),
        "marker_seen_share": (("trial", "marker"), np.array([item.seen_share for item in paired]), one),
        "distance_misfit": (("trial", "segment"), fit_figures("distance_misfit"), metre),
        "cluster_offset": (("trial", "segment"), fit_figures("offset"), metre),
        "cluster_rotation": (("trial", "segment"), fit_figures("rotation"), radian),
    }
    coordinates = {
        "subject": ("frame", np.repeat([item.trial.subject.id for item in paired], frames)),
        "trial": ("frame", np.repeat([item.trial.id for item in paired], frames)),
        "activity": ("frame", np.repeat([item.trial.activity for item in paired], frames)),
        "time": ("frame", np.concatenate([item.time for item in paired]), second),
        "segment": list(lab.segment_names),
        "marker": list(lab.markers),
        "joint": [joint.name for joint in lab.joints],
        "dof": dof_names(lab),
        "axis": list(AXES),
        "marker_segment": ("marker", [lab.segments[index].name for index in lab.marker_segment]),
        "joint_proximal": ("joint", [joint.proximal for joint in lab.joints]),
        "joint_distal": ("joint", [joint.distal for joint in lab.joints]),
        "joint_kind": ("joint", [joint.convention.kind for joint in lab.joints]),
        "subject_id": ("subject", [subject.id for subject in subjects]),
        "segment_side": (
            ("subject", "segment"),
            [[segment_side(subject.lab, name) for name in lab.segment_names] for subject in subjects],
        ),
        "trial_id": ("trial", [item.trial.id for item in paired]),
        "trial_subject": ("trial", [item.trial.subject.id for item in paired]),
        "trial_activity": ("trial", [item.trial.activity for item in paired]),
        "trial_digest": ("trial", [item.trial.digest() for item in paired]),
    }
    data = xr.Dataset(variables, coordinates)
    covariates = {subject.id: dict(subject.covariates) for subject in subjects if subject.covariates}
    data.attrs = {
        "title": lab.title,
        "study": study.path.name,
        "up": lab.up if lab.up_declared else "",
        "covariates": json.dumps(covariates, sort_keys=True),
    }
    if study.invented:
        data.attrs["invented_data"] = 1
    return data

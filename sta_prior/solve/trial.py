"""Solve one trial: from a Trial and a Prior to the Dataset of docs/files.md, "solution".

Shell: holds the labels. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import time
from dataclasses import replace
from typing import Literal, cast

import numpy as np
import xarray as xr
from scipy.stats import chi2

from sta_prior.checks import FloatArray, nearest
from sta_prior.errors import InputError, message
from sta_prior.pairs.pairing import AXES, angles_of_poses, dof_names, segment_side, spread_over_dof
from sta_prior.prior.base import Binding, Prior
from sta_prior.prior.inputs import TILT, VELOCITY, angle_changes
from sta_prior.prior.interface import IsotropicArtifact
from sta_prior.rigid import RigidFit
from sta_prior.solve.frame import MARKER_SD, bridge, first_look, solve_frames
from sta_prior.solve.notes import reference_notes, warn_of_gimbal, warn_of_misfit, warn_of_suspects
from sta_prior.solve.observability import describe_bridged, describe_observability, observe
from sta_prior.solve.posterior import SOURCES, FrameSolution
from sta_prior.solve.suspects import Suspect, find_suspects, hide, name_suspects
from sta_prior.solve.terms import Gravity, JointProblem, SegmentProblem
from sta_prior.solve.timeline import even_grid, on_grid
from sta_prior.solve.trajectory_posterior import CONSTANTS, Constants, solve_trajectory
from sta_prior.study import Reference, Trial

Estimator = Literal["rigid", "linked", "frame-map", "smoother"]
ESTIMATORS: tuple[str, ...] = ("rigid", "linked", "frame-map", "smoother")
WITH_PRIOR = ("frame-map", "smoother")
DEFAULT_ESTIMATOR = "smoother"
POSE = ("rx", "ry", "rz", "tx", "ty", "tz")

SMALLEST_SPREAD = 0.001
"""Marker SD that least squares assumes at least, m: shells deform less than skin moves."""

_SAME_INSTANT = 0.5
_ROUNDING = 1e-6  # s, of times in a file

SCATTER = "scatter of the markers about the fit; silent about artifact that a cluster's markers share"


def solve(
    trial: Trial,
    prior: Prior | None = None,
    estimator: str = DEFAULT_ESTIMATOR,
    personal: xr.Dataset | None = None,
    constants: str = "bounded",
    exclude_suspects: bool = False,
) -> xr.Dataset:
    """Solve one skin trial. Bone truth in the study, if any, is never read here.

    Parameters
    ----------
    trial : from a study
    prior : needed by ``frame-map`` and ``smoother``; ``rigid`` and ``linked`` work without
    estimator : "rigid" (frame-wise least squares), "linked" (least squares with joint
        constraints), "frame-map" (frame-wise maximum a posteriori) or "smoother" (maximum a posteriori of the
        whole trial, the default)
    personal : paired data with frames of the trial's own subject
    constants : what the smoother learns of the subject's own deviation from the trial: "bounded", "full" or
        "none", see `solve_trajectory`
    exclude_suspects : solve without the markers that do not fit the prior; they are named in any case

    Returns
    -------
    Dataset of docs/files.md, "solution", SI units.

    Raises
    ------
    InputError : unknown estimator, no prior where one is needed, or unusable files.
    MismatchError : the prior does not fit the lab file.
    """
    started = time.perf_counter()
    _check_choice("--estimator", "estimator", estimator, ESTIMATORS)
    _check_choice("--constants", "choice", constants, CONSTANTS)
    if estimator in WITH_PRIOR and prior is None:
        raise InputError(
            message(
                f"--estimator {estimator}",
                "needs a prior",
                "Give --prior, or use --estimator rigid or linked.",
            )
        )
    lab, reference = trial.subject.lab, trial.subject.reference()
    skin = trial.skin()
    points = skin["position"].values
    binding = prior.bind(trial, personal) if prior is not None and estimator in WITH_PRIOR else None
    segments = _segments(trial, points, reference, binding)
    joints = _joints(trial, reference)
    count = len(segments)
    rigid_poses, fits = first_look(segments, count)
    notes = reference_notes(trial, points, reference)
    suspects: list[Suspect] = []
    if binding is not None:
        start = bridge(rigid_poses, joints)
        segments = _with_inputs(segments, trial, binding, start, skin["time"].values)
        suspects = find_suspects(segments, joints, start, MARKER_SD)
        warn_of_suspects(trial, suspects, exclude_suspects)
    if suspects and exclude_suspects:
        segments = hide(segments, suspects)
        rigid_poses, fits = first_look(segments, count)
    if estimator == "rigid":
        result = _rigid_solution(segments, joints, rigid_poses, fits)
    else:
        if estimator == "linked":
            segments = [_with_scatter(segment, fit) for segment, fit in zip(segments, fits, strict=True)]
        start = bridge(rigid_poses, joints)
        if binding is not None and suspects and exclude_suspects:
            segments = _with_inputs(segments, trial, binding, start, skin["time"].values)
        if estimator == "smoother":
            result = _smooth(segments, joints, start, skin["time"].values, constants)
            warn_of_misfit(trial, result.misfit, result.stop_reason)
        else:
            result = solve_frames(segments, joints, start)
    data = _dataset(trial, skin, result, rigid_poses, estimator)
    held = [replace(joint, travel_sd=np.inf) for joint in joints] if estimator == "rigid" else joints
    seen = observe(segments, held, bridge(rigid_poses, joints), MARKER_SD)
    data["pose_rank"] = (
        ("time", "segment"),
        seen.rank.astype(np.int8),
        {"units": "1", "long_name": "pose directions of six that the frame's own markers and joints fix"},
    )
    _mark_informed(data, binding)
    data.attrs.update(
        {
            "estimator": estimator,
            "iterations": result.iterations,
            "stop_reason": result.stop_reason,
            "seconds": round(time.perf_counter() - started, 3),
            "prior_digest": prior.digest if binding is not None and prior is not None else "",
            "input_digest": trial.digest(),
            "observability": describe_observability(segments, result.determined, lab),
            "bridged": describe_bridged(seen, result.determined, lab),
            "suspects": name_suspects(suspects, lab, exclude_suspects),
            "reference_notes": "; ".join([*reference.notes, *notes]),
            "belief": binding.basis_of_belief if binding is not None else "no prior",
            "covariance": "posterior" if estimator in WITH_PRIOR else SCATTER,
            "subject": trial.subject.id,
            "trial": trial.id,
            "activity": trial.activity,
        }
    )
    if np.isfinite(result.misfit):
        data.attrs["misfit"] = result.misfit
    if trial.subject.invented or (prior is not None and prior.invented):
        data.attrs["invented_data"] = 1
    return data


def _check_choice(option: str, what: str, chosen: str, known: tuple[str, ...]) -> None:
    if chosen not in known:
        raise InputError(
            message(option, f"no {what} {chosen} here, known: {', '.join(known)}", nearest(chosen, known))
        )


def _smooth(
    segments: list[SegmentProblem],
    joints: list[JointProblem],
    start: FloatArray,
    instants: FloatArray,
    constants: str,
) -> FrameSolution:
    """The smoother's solution at the file's own instants; frames that the file lacks are lost frames."""
    timeline = even_grid(instants)
    whole = [
        replace(
            segment,
            points=on_grid(segment.points, timeline),
            changes=None if segment.changes is None else np.nan_to_num(on_grid(segment.changes, timeline)),
        )
        for segment in segments
    ]
    first = bridge(on_grid(start, timeline), joints)
    return solve_trajectory(whole, joints, first, timeline.step, constants=cast(Constants, constants)).at(
        timeline.at
    )


def _segments(
    trial: Trial, points: FloatArray, reference: Reference, binding: Binding | None
) -> list[SegmentProblem]:
    lab = trial.subject.lab
    problems = []
    for index, segment in enumerate(lab.segments):
        own = lab.marker_segment == index
        artifact = (
            binding.artifacts[segment.name]
            if binding is not None
            else IsotropicArtifact(3 * int(own.sum()), SMALLEST_SPREAD)
        )
        problems.append(SegmentProblem(index, points[:, own], reference.markers[own], artifact))
    return problems


def _with_inputs(
    segments: list[SegmentProblem], trial: Trial, binding: Binding, start: FloatArray, instants: FloatArray
) -> list[SegmentProblem]:
    """The segments with what their prior takes beside the joint angles; changes are those of a first look."""
    lab = trial.subject.lab
    if TILT in binding.inputs:
        up = "xyz".index(lab.up)
        names = [segment.name for segment in lab.segments]
        segments = [
            replace(segment, gravity=Gravity(up, segment_side(lab, names[segment.index])))
            for segment in segments
        ]
    if VELOCITY in binding.inputs:
        changes = angle_changes(instants, angles_of_poses(lab, start))
        segments = [replace(segment, changes=np.nan_to_num(changes)) for segment in segments]
    return segments


def _joints(trial: Trial, reference: Reference) -> list[JointProblem]:
    lab = trial.subject.lab
    return [
        JointProblem(
            proximal=lab.segment_index(joint.proximal),
            distal=lab.segment_index(joint.distal),
            convention=joint.convention,
            centre_proximal=reference.joint_centres[index, 0],
            centre_distal=reference.joint_centres[index, 1],
            travel_sd=joint.travel_sd,
        )
        for index, joint in enumerate(lab.joints)
    ]


def _pooled_spread(fit: RigidFit) -> float:
    """Marker SD from the scatter about the rigid fit, pooled over the trial, m."""
    spread = fit.spread[np.isfinite(fit.spread)]
    pooled = float(np.sqrt((spread**2).mean())) if spread.size else SMALLEST_SPREAD
    return max(pooled, SMALLEST_SPREAD)


def _with_scatter(segment: SegmentProblem, fit: RigidFit, alone: bool = False) -> SegmentProblem:
    """The segment with isotropic artifact; alone, markers that fix no pose by themselves are left out."""
    artifact = IsotropicArtifact(3 * segment.reference.shape[0], _pooled_spread(fit))
    points = np.where(fit.determined[:, None, None], segment.points, np.nan) if alone else segment.points
    return SegmentProblem(segment.index, points, segment.reference, artifact)


def _rigid_solution(
    segments: list[SegmentProblem], joints: list[JointProblem], poses: FloatArray, fits: list[RigidFit]
) -> FrameSolution:
    """The rigid fit itself, told as a solution: every segment alone, closed form, no joint."""
    free = [
        JointProblem(j.proximal, j.distal, j.convention, j.centre_proximal, j.centre_distal, np.inf)
        for j in joints
    ]
    scattered = [_with_scatter(segment, fit, alone=True) for segment, fit in zip(segments, fits, strict=True)]
    # One solve that starts at the optimum gives covariance, angles and travel; the poses stay as fitted.
    result = solve_frames(scattered, free, bridge(poses, free), marker_sd=0.0)
    poses = np.where(result.determined[..., None, None], poses, np.nan)
    return replace(result, poses=poses, stop_reason="closed form")


def _mark_informed(data: xr.Dataset, binding: Binding | None) -> None:
    times = data["time"].values
    informed = np.zeros(times.size, dtype=np.int8)
    if binding is not None and binding.informed_times.size:
        slack = _SAME_INSTANT * float(np.median(np.diff(times))) if times.size > 1 else _ROUNDING
        known = np.sort(binding.informed_times)
        right = np.clip(np.searchsorted(known, times), 0, known.size - 1)
        gap = np.minimum(np.abs(known[right] - times), np.abs(known[np.maximum(right - 1, 0)] - times))
        informed = (gap <= slack).astype(np.int8)
    data["informed"] = (
        "time",
        informed,
        {"units": "1", "long_name": "bone truth of this frame informed the prior"},
    )


def _dataset(
    trial: Trial, skin: xr.Dataset, result: FrameSolution, rigid_poses: FloatArray, estimator: str
) -> xr.Dataset:
    lab = trial.subject.lab
    frames, count = result.poses.shape[:2]
    warn_of_gimbal(trial, result.poses)
    blocks = np.stack(
        [result.covariance[:, 6 * i : 6 * i + 6, 6 * i : 6 * i + 6] for i in range(count)], axis=1
    )
    blocks = np.where(result.determined[..., None, None], blocks, np.nan)
    artifact = np.full((frames, len(lab.markers), 3), np.nan)
    artifact_sd = np.full_like(artifact, np.nan)
    for index in range(count):
        own = np.flatnonzero(lab.marker_segment == index)
        artifact[:, own] = result.artifact[index].reshape(frames, own.size, 3)
        artifact_sd[:, own] = result.artifact_sd[index].reshape(frames, own.size, 3)
    conflict = chi2.sf(result.conflict, np.maximum(result.conflict_freedom, 1.0))
    metre, radian, one = {"units": "m"}, {"units": "rad"}, {"units": "1"}
    variables = {
        "rotation": (("time", "segment", "row", "col"), result.poses[..., :3, :3], one),
        "position": (("time", "segment", "axis"), result.poses[..., :3, 3], metre),
        "pose_covariance": (
            ("time", "segment", "pose", "pose2"),
            blocks,
            {"units": "rad2, rad m, m2", "long_name": "blocks of rotation, mixed and translation"},
        ),
        "rigid_rotation": (("time", "segment", "row", "col"), rigid_poses[..., :3, :3], one),
        "rigid_position": (("time", "segment", "axis"), rigid_poses[..., :3, 3], metre),
        "angle": (("time", "joint", "dof"), spread_over_dof(lab, result.angles), radian),
        "angle_sd": (("time", "joint", "dof"), spread_over_dof(lab, result.angle_sd), radian),
        "angle_rigid": (
            ("time", "joint", "dof"),
            spread_over_dof(lab, angles_of_poses(lab, rigid_poses)),
            radian,
        ),
        "joint_travel": (("time", "joint", "axis"), result.travel, metre),
        "joint_travel_sd": (("time", "joint", "axis"), result.travel_sd, metre),
        "artifact": (("time", "marker", "axis"), artifact, metre),
        "artifact_sd": (("time", "marker", "axis"), artifact_sd, metre),
        "information_share": (("time", "segment", "pose", "source"), result.share, one),
        "marker_seen": (
            ("time", "marker"),
            np.isfinite(skin["position"].values[..., 0]).astype(np.int8),
            one,
        ),
    }
    if estimator in WITH_PRIOR:
        # Least squares has no law for the deformation that a p-value could refer to.
        variables["conflict_p"] = (("time", "segment"), conflict, one)
    data = xr.Dataset(
        variables,
        coords={
            "time": ("time", skin["time"].values.astype(np.float64), {"units": "s"}),
            "segment": list(lab.segment_names),
            "marker": list(lab.markers),
            "joint": [joint.name for joint in lab.joints],
            "dof": dof_names(lab),
            "axis": list(AXES),
            "pose": list(POSE),
            "pose2": list(POSE),
            "source": list(SOURCES),
            "marker_segment": ("marker", [lab.segments[index].name for index in lab.marker_segment]),
            "joint_sequence": ("joint", [joint.convention.sequence for joint in lab.joints]),
            "joint_side": ("joint", [joint.convention.side for joint in lab.joints]),
        },
    )
    return data

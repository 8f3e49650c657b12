"""Scores of one solved trial against its bone truth."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

import numpy as np
import xarray as xr

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.compare.scores import (
    NAN,
    Errors,
    Score,
    Unit,
    coverage,
    describe_errors,
    effective_frames,
    normalised_square,
    rms_ratio,
)
from sta_prior.compare.truth import BoneTruth
from sta_prior.errors import MismatchError, message
from sta_prior.se3 import make_pose, relative_difference, skew, transform_points
from sta_prior.study import Trial

FrameSet = Literal["hidden", "informed", "all"]
POSE_NAMES = ("rx", "ry", "rz", "tx", "ty", "tz")


@dataclass(frozen=True)
class _Series:
    """One component over the matched frames: errors (n, k), their covariance (n, k, k), rad or m."""

    part: str
    component: str
    unit: Unit
    error: FloatArray
    covariance: FloatArray
    rigid_error: FloatArray
    values: tuple[FloatArray, FloatArray, FloatArray] | None = None
    """Estimate, truth and rigid fit themselves, shape (n,), where a range of motion has a meaning."""
    judged: FloatArray | None = None
    """The error in the coordinates of the covariance, (n, k), where ``error`` is not."""


def score_trial(solution: xr.Dataset, trial: Trial, truth: BoneTruth, frames: FrameSet) -> list[Score]:
    """Score one solution on the chosen frames.

    Parameters
    ----------
    solution : as CONTRACT's solution, with ``informed`` (time)
    trial : whose lab and reference the solution was made with
    truth : bone truth at the solution's frames
    frames : "hidden" scores frames whose bone truth did not inform the prior,
        "informed" the others, "all" both

    Returns
    -------
    Scores of level "trial"; a part without a single scored frame has none.

    Raises
    ------
    MismatchError : the solution has other segments or joints than the study's lab.
    """
    lab = trial.subject.lab
    place = trial.place
    _same_names(place, "segment", lab.segment_names, solution["segment"].values)
    _same_names(place, "joint", [joint.name for joint in lab.joints], solution["joint"].values)
    informed = np.zeros(solution.sizes["time"], dtype=bool)
    if "informed" in solution:
        informed = solution["informed"].values.astype(bool)
    informed = informed[truth.frames]
    chosen = {"hidden": ~informed, "informed": informed, "all": np.ones_like(informed)}[frames]
    times = np.asarray(solution["time"].values, dtype=np.float64)[truth.frames]
    matched = solution.isel(time=truth.frames)
    scores = []
    for series in (*_segment_series(matched, trial, truth), *_joint_series(matched, trial, truth)):
        score = _score(series, trial, chosen, informed, times)
        if score.frames:
            scores.append(score)
    return scores


def _same_names(place: tuple[object, ...], what: str, expected: object, got: object) -> None:
    wanted, found = (sorted(str(name) for name in names) for names in (expected, got))  # type: ignore[attr-defined]
    if wanted != found:
        raise MismatchError(
            message(
                place,
                f"{what}s expected {' '.join(wanted)}, solution has {' '.join(found)}",
                "Compare with the study that the trial was solved from.",
            )
        )


def _segment_series(solution: xr.Dataset, trial: Trial, truth: BoneTruth) -> Iterator[_Series]:
    lab, reference = trial.subject.lab, trial.subject.reference()
    noise = np.diag([truth.sd_rotation**2] * 3 + [truth.sd_position**2] * 3)
    for index, name in enumerate(lab.segment_names):
        own = solution.sel(segment=name)
        true = truth.poses[:, index]
        pose = make_pose(own["rotation"].values, own["position"].values)
        rigid = make_pose(own["rigid_rotation"].values, own["rigid_position"].values)
        error = relative_difference(pose, true)
        rigid_error = relative_difference(rigid, true)
        covariance = own["pose_covariance"].values + noise
        rotation = (error[:, :3], covariance[:, :3, :3], rigid_error[:, :3])
        yield _Series(name, "rotation", "rad", *rotation)
        points = {"origin": np.zeros(3)}
        for number, joint in enumerate(lab.joints):
            if name in (joint.proximal, joint.distal):
                side = 0 if name == joint.proximal else 1
                points[f"{joint.name} centre"] = reference.joint_centres[number, side]
        for label, point in points.items():
            lever = np.concatenate([-skew(point), np.eye(3)], axis=1)
            spread = lever @ covariance @ lever.T
            apart, rigid_apart = _point_error(pose, true, point), _point_error(rigid, true, point)
            # The covariance is that of the tangent vector: its image is judged, not
            # the chord, which differs by the square of the rotation times the lever.
            judged = error @ lever.T
            yield _Series(name, label, "m", apart, spread, rigid_apart, judged=judged)
        for column, label in enumerate(POSE_NAMES):
            one = slice(column, column + 1)
            unit: Unit = "rad" if column < 3 else "m"
            yield _Series(name, label, unit, error[:, one], covariance[:, one, one], rigid_error[:, one])
        yield _Series(name, "pose", "1", error, covariance, rigid_error)


def _point_error(pose: FloatArray, true: FloatArray, point: FloatArray) -> FloatArray:
    """Position error of a bone-fixed point, along the axes of the pose that is scored, m."""
    apart = (transform_points(pose, point[None]) - transform_points(true, point[None]))[..., 0, :]
    along: FloatArray = np.einsum("...ji,...j->...i", pose[..., :3, :3], apart)
    return along


def _joint_series(solution: xr.Dataset, trial: Trial, truth: BoneTruth) -> Iterator[_Series]:
    for index, joint in enumerate(trial.subject.lab.joints):
        own = solution.sel(joint=joint.name)
        for column, dof in enumerate(joint.convention.dof):
            here = own.sel(dof=dof)
            true = truth.angles[:, index, column]
            estimate, rigid = here["angle"].values, here["angle_rigid"].values
            error, rigid_error = _wrapped(estimate - true), _wrapped(rigid - true)
            variance = here["angle_sd"].values ** 2 + truth.angle_sd[:, index, column] ** 2
            yield _Series(
                joint.name,
                dof,
                "rad",
                error[:, None],
                variance[:, None, None],
                rigid_error[:, None],
                # Errors added to the truth, so that a jump by a whole turn is not a range.
                (true + error, true, true + rigid_error),
            )


def _wrapped(angle: FloatArray) -> FloatArray:
    return np.asarray((angle + np.pi) % (2 * np.pi) - np.pi, dtype=np.float64)


def _score(series: _Series, trial: Trial, chosen: BoolArray, informed: BoolArray, times: FloatArray) -> Score:
    known = np.isfinite(series.error).all(axis=-1)
    seen = known & chosen
    error, rigid_error = series.error[seen], series.rigid_error[seen]
    covariance = series.covariance[seen]
    square = normalised_square(error if series.judged is None else series.judged[seen], covariance)
    size = error.shape[-1]
    values = None if series.values is None else [value[seen] for value in series.values]
    whole_pose = series.unit == "1"
    trace = np.trace(covariance, axis1=-2, axis2=-1)
    trace = trace[np.isfinite(trace)]
    return Score(
        level="trial",
        part=series.part,
        component=series.component,
        unit=series.unit,
        subject=trial.subject.id,
        trial=trial.id,
        activity=trial.activity,
        frames=int(seen.sum()),
        frames_informed=int((known & informed & ~chosen).sum()),
        frames_effective=NAN if whole_pose else effective_frames(error, _adjacent(times[seen], times)),
        estimate=Errors(frames=len(error))
        if whole_pose
        else describe_errors(error, None if values is None else (values[0], values[1])),
        rigid=Errors(frames=int(np.isfinite(rigid_error).all(axis=-1).sum()))
        if whole_pose
        else describe_errors(rigid_error, None if values is None else (values[2], values[1])),
        ratio=NAN if whole_pose else rms_ratio(error, rigid_error),
        predicted_sd=NAN if whole_pose or not len(trace) else float(np.sqrt(np.mean(trace))),
        coverage=coverage(square, size),
        normalised_error=float(np.nanmean(square) / size) if np.isfinite(square).any() else NAN,
    )


def _adjacent(chosen_times: FloatArray, times: FloatArray) -> BoolArray:
    """Which chosen frames follow the one before without a gap, judged by the usual spacing."""
    if len(times) < 2:
        return np.zeros(max(len(chosen_times) - 1, 0), dtype=bool)
    return np.asarray(np.diff(chosen_times) <= 1.5 * np.median(np.diff(times)), dtype=bool)

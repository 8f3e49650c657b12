"""Bone truth of a trial at the frames of its solution: read, restated and matched, never interpolated."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.angles import joint_angle_pose_jacobians, joint_angles
from sta_prior.checks import FloatArray, IntArray
from sta_prior.errors import MismatchError, message
from sta_prior.se3 import inverse
from sta_prior.study import Lab, Trial
from sta_prior.study.sources import bone_poses


@dataclass(frozen=True)
class BoneTruth:
    """Measured bone poses and joint angles at the solution's frames that have them.

    Attributes
    ----------
    frames : shape (n,), index into the solution's time axis
    poses : shape (n, S, 4, 4), lab_from_bone, m; NaN where the bone is not in view
    angles : shape (n, J, 3), rad, in the order of each joint's own dof names
    angle_sd : shape (n, J, 3), rad, what the declared accuracy of both bones'
        rotations makes of each angle
    sd_position, sd_rotation : accuracy of the bone truth, m and rad
    sd_declared : whether the study declares it; else it is the default
    largest_offset : s, largest distance in time between a truth frame and its solution frame
    step : s, frame interval of the solution
    """

    frames: IntArray
    poses: FloatArray
    angles: FloatArray
    angle_sd: FloatArray
    sd_position: float
    sd_rotation: float
    sd_declared: bool
    largest_offset: float
    step: float


def match_times(solution_time: FloatArray, truth_time: FloatArray) -> tuple[IntArray, IntArray, float]:
    """Pair each solution frame with the nearest truth frame within half a frame interval.

    Parameters
    ----------
    solution_time, truth_time : shape (n,), (m,), s, one clock, rising

    Returns
    -------
    solution index, truth index : shape (k,) each, rising; every frame at most once
    step : s, the solution's frame interval, on which the tolerance rests

    Examples
    --------
    >>> found = match_times(np.array([0.0, 0.01, 0.02]), np.array([0.009, 0.013, 0.5]))
    >>> found[0].tolist(), found[1].tolist(), round(found[2], 6)
    ([1], [0], 0.01)
    """
    step = float(np.median(np.diff(solution_time))) if len(solution_time) > 1 else 0.0
    if not len(solution_time) or not len(truth_time):
        empty = np.empty(0, dtype=np.int64)
        return empty, empty, step
    right = np.clip(np.searchsorted(solution_time, truth_time), 1, max(len(solution_time) - 1, 1))
    left = right - 1
    right = np.minimum(right, len(solution_time) - 1)
    near = np.where(
        np.abs(truth_time - solution_time[left]) <= np.abs(truth_time - solution_time[right]), left, right
    )
    offset = np.abs(truth_time - solution_time[near])
    # A millionth of a frame of slack: times printed in a table are rounded.
    truth_index = np.flatnonzero(offset <= step * (0.5 + 1e-6) + 1e-9)
    order = truth_index[np.lexsort((offset[truth_index], near[truth_index]))]
    solution_index, first = np.unique(near[order], return_index=True)
    return solution_index.astype(np.int64), order[first].astype(np.int64), step


def bone_truth(trial: Trial, solution_time: FloatArray) -> BoneTruth:
    """Bone truth of a trial, restated in the study's bone frames, at the solution's frames.

    Parameters
    ----------
    trial : with bone truth on the clock and in the lab frame of its skin markers
    solution_time : shape (n,), s, skin clock

    Returns
    -------
    BoneTruth of the frames that match within half a frame interval.

    Raises
    ------
    MismatchError : no bone truth; clock or space is "estimate"; no frame matches.
    """
    place = trial.place
    bone = trial.bone() if trial.has_bone else None
    if bone is None:
        raise MismatchError(
            message(place, "no bone truth in the study", "Name it in the trial's bone key to compare.")
        )
    for what, declared in (("clock", trial.clock), ("space", trial.space)):
        if declared != "shared":
            raise MismatchError(
                message(
                    place,
                    f'{what} expected "shared", got "{declared}"',
                    f"An alignment estimated from skin markers would enter the error; "
                    f"align the bone truth first, then declare the {what} shared.",
                )
            )
    truth_time = np.asarray(bone["time"].values, dtype=np.float64)
    frames, rows, step = match_times(solution_time, truth_time)
    if not len(frames):
        raise MismatchError(
            message(
                place,
                f"no bone-truth frame within half a frame ({500 * step:.3g} ms) of a solution frame, "
                f"solution from {_span(solution_time)}, bone truth from {_span(truth_time)}",
                "Check that both times count from the same instant, in seconds.",
            )
        )
    poses = bone_poses(bone)[rows] @ trial.subject.reference().frame_offset
    angles, angle_sd = joint_angle_truth(trial.subject.lab, poses, trial.bone_sd_rotation)
    return BoneTruth(
        frames=frames,
        poses=poses,
        angles=angles,
        angle_sd=angle_sd,
        sd_position=trial.bone_sd_position,
        sd_rotation=trial.bone_sd_rotation,
        sd_declared=trial.bone_sd_declared,
        largest_offset=float(np.abs(truth_time[rows] - solution_time[frames]).max()),
        step=step,
    )


def joint_angle_truth(lab: Lab, poses: FloatArray, sd_rotation: float) -> tuple[FloatArray, FloatArray]:
    """Joint angles of bone poses, and the SD that the poses' own accuracy gives them.

    Parameters
    ----------
    lab : with joints whose convention is already that of the subject's side
    poses : shape (n, S, 4, 4), lab_from_bone
    sd_rotation : rad, of each bone about each of its axes, independent

    Returns
    -------
    angles, sd : shape (n, J, 3) each, rad; NaN where a bone is missing. Away from
        the singular posture the SD is about √2 · sd_rotation.
    """
    angles = np.full((len(poses), len(lab.joints), 3), np.nan)
    spread = np.full_like(angles, np.nan)
    for index, joint in enumerate(lab.joints):
        proximal = poses[:, lab.segment_index(joint.proximal)]
        distal = poses[:, lab.segment_index(joint.distal)]
        angles[:, index] = joint_angles(joint.convention, (inverse(proximal) @ distal)[..., :3, :3])
        _, by_proximal, by_distal = joint_angle_pose_jacobians(joint.convention, proximal, distal)
        power = np.sum(by_proximal[..., :3] ** 2, axis=-1) + np.sum(by_distal[..., :3] ** 2, axis=-1)
        spread[:, index] = sd_rotation * np.sqrt(power)
    return angles, spread


def _span(times: FloatArray) -> str:
    return f"{times.min():.3f} to {times.max():.3f} s" if len(times) else "no frame"

"""Simulated couriers as paired data and as solved trials, without files; shared by the studies here.

Conventions: docs/conventions.md. Reference positions are the mean of the static trial; the bone frames are
the true ones, which the recipes of the lab file find to a few hundredths of a degree.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import xarray as xr

from sta_prior.angles import JointConvention, joint_angles
from sta_prior.checks import FloatArray
from sta_prior.prior.family import Posture, SegmentModel
from sta_prior.prior.inputs import TILT, VELOCITY, angle_changes, tilt
from sta_prior.prior.interface import Artifact
from sta_prior.se3 import inverse, transform_points
from sta_prior.simulate import MARKERS, SEGMENTS, TASKS, Population, simulate_population
from sta_prior.simulate.subject import MARKER_COUNTS, SimulatedSubject, SimulatedTrial, simulate_subject
from sta_prior.solve.frame import bridge, first_look, solve_frames
from sta_prior.solve.posterior import FrameSolution
from sta_prior.solve.terms import Gravity, JointProblem, SegmentProblem

KNEE = JointConvention("knee", "right")
TRAVEL_SD = 0.005
UP = 1
SPLIT = MARKER_COUNTS[0]
EACH_TASK_TWICE = tuple((task, repetition) for repetition in (1, 2) for task in TASKS)


@dataclass(frozen=True)
class Couriers:
    """A population and its subjects: those that a prior may learn from, and fresh ones; all imaged."""

    population: Population
    learned: tuple[SimulatedSubject, ...]
    fresh: tuple[SimulatedSubject, ...]


def make_couriers(seed: int, mechanism: str, learned: int, fresh: int) -> Couriers:
    """Draw a population and its subjects, each task twice; the fresh ones do not depend on ``learned``."""
    first, *children = np.random.default_rng(seed).spawn(1 + 64)
    population = simulate_population(first, None, mechanism)
    people = [
        simulate_subject(f"K{number + 1:02d}", True, population, EACH_TASK_TWICE, children[number])
        for number in [*range(fresh), *range(32, 32 + learned)]
    ]
    return Couriers(population, tuple(people[fresh:]), tuple(people[:fresh]))


def only_tasks(subjects: Sequence[SimulatedSubject], tasks: Sequence[str]) -> tuple[SimulatedSubject, ...]:
    """The same subjects with the trials of some tasks."""
    return tuple(
        replace(subject, trials=tuple(trial for trial in subject.trials if trial.activity in tasks))
        for subject in subjects
    )


def reference_markers(subject: SimulatedSubject) -> FloatArray:
    """Marker positions in the bone frames from the static trial, (10, 3) m."""
    mean = subject.static_points[:, : len(MARKERS)].mean(axis=0)
    pose = inverse(subject.reference_pose)
    return np.concatenate([transform_points(pose[0], mean[:SPLIT]), transform_points(pose[1], mean[SPLIT:])])


def knee_angles(poses: FloatArray) -> FloatArray:
    """Knee angles (..., 3) rad of poses (..., 2, 4, 4)."""
    rotation = np.swapaxes(poses[..., 0, :3, :3], -1, -2) @ poses[..., 1, :3, :3]
    return joint_angles(KNEE, rotation)


def pairs_of(subjects: Sequence[SimulatedSubject], population: Population) -> xr.Dataset:
    """Paired data as `pair` makes them from files, from the windows of noisy bone truth."""
    settings = population.settings
    trials = [(subject, trial) for subject in subjects for trial in subject.trials]
    used = [np.isfinite(trial.imaged_pose[:, 0, 0, 0]) for _, trial in trials]
    kept = [(*item, mask) for item, mask in zip(trials, used, strict=True) if mask.any()]
    frames = [int(mask.sum()) for _, _, mask in kept]
    references = {subject.id: reference_markers(subject) for subject in subjects}
    displacement, angle = [], []
    for subject, trial, mask in kept:
        pose = inverse(trial.imaged_pose[mask])
        in_bone = [
            transform_points(pose[:, 0], trial.points[mask, :SPLIT]),
            transform_points(pose[:, 1], trial.points[mask, SPLIT:]),
        ]
        displacement.append(np.concatenate(in_bone, axis=1) - references[subject.id])
        angle.append(knee_angles(trial.imaged_pose[mask])[:, None])
    count = len(kept)
    segment_of = [SEGMENTS[0]] * SPLIT + [SEGMENTS[1]] * (len(MARKERS) - SPLIT)
    names = [subject.id for subject, _, _ in kept], [trial.id for _, trial, _ in kept]
    return xr.Dataset(
        {
            "displacement": (("frame", "marker", "axis"), np.concatenate(displacement), {"units": "m"}),
            "angle": (("frame", "joint", "dof"), np.concatenate(angle), {"units": "rad"}),
            "reference": (
                ("subject", "marker", "axis"),
                np.array([references[subject.id] for subject in subjects]),
                {"units": "m"},
            ),
            "reference_angle": (
                ("subject", "joint", "dof"),
                np.array([[subject.style.reference_angles] for subject in subjects]),
                {"units": "rad"},
            ),
            "bone_rotation": (
                ("frame", "segment", "row", "col"),
                np.concatenate([trial.imaged_pose[mask][..., :3, :3] for _, trial, mask in kept]),
                {"units": "1"},
            ),
            "reference_rotation": (
                ("subject", "segment", "row", "col"),
                np.array([subject.reference_pose[..., :3, :3] for subject in subjects]),
                {"units": "1"},
            ),
            "bone_sd_position": (("trial",), np.full(count, settings.bone_sd_position), {"units": "m"}),
            "bone_sd_rotation": (("trial",), np.full(count, settings.bone_sd_rotation), {"units": "rad"}),
        },
        coords={
            "subject": ("frame", np.repeat(names[0], frames)),
            "trial": ("frame", np.repeat(names[1], frames)),
            "activity": ("frame", np.repeat([trial.activity for _, trial, _ in kept], frames)),
            "time": ("frame", np.concatenate([t.time[m] for _, t, m in kept]), {"units": "s"}),
            "segment": list(SEGMENTS),
            "marker": list(MARKERS),
            "joint": ["knee"],
            "dof": list(KNEE.dof),
            "axis": ["x", "y", "z"],
            "marker_segment": ("marker", segment_of),
            "joint_kind": ("joint", ["knee"]),
            "joint_proximal": ("joint", [SEGMENTS[0]]),
            "joint_distal": ("joint", [SEGMENTS[1]]),
            "subject_id": ("subject", [subject.id for subject in subjects]),
            "segment_side": (("subject", "segment"), np.full((len(subjects), 2), "right")),
            "trial_id": ("trial", names[1]),
            "trial_subject": ("trial", names[0]),
            "trial_activity": ("trial", [trial.activity for _, trial, _ in kept]),
            "trial_digest": ("trial", [f"{a}/{b}" for a, b in zip(*names, strict=True)]),
        },
        attrs={"invented_data": 1, "up": "xyz"[UP]},
    )


def artifacts_for(
    models: Mapping[str, SegmentModel],
    subject: SimulatedSubject,
    inflation: float | None = None,
    inputs: Sequence[str] = (),
) -> list[Artifact]:
    """Artifact of thigh and shank of a subject never imaged; the models' own inflation by default."""
    reference = reference_markers(subject)
    artifacts: list[Artifact] = []
    for index, (name, markers) in enumerate(
        zip(SEGMENTS, (reference[:SPLIT], reference[SPLIT:]), strict=True)
    ):
        rows = [subject.style.reference_angles]
        if TILT in inputs:
            rows.append(tilt(subject.reference_pose[index, :3, :3], UP, "right"))
        if VELOCITY in inputs:
            rows.append(np.zeros(3))
        artifacts.append(models[name].for_new_subject(Posture(np.array(rows), markers), inflation))
    return artifacts


def solve_trial(
    artifacts: Sequence[Artifact],
    subject: SimulatedSubject,
    trial: SimulatedTrial,
    frames: slice,
    travel_sd: float = TRAVEL_SD,
    inputs: Sequence[str] = (),
) -> FrameSolution:
    """Solve some frames of a skin trial with the estimator frame-map."""
    reference = reference_markers(subject)
    points = trial.points
    segments = [
        SegmentProblem(0, points[:, :SPLIT], reference[:SPLIT], artifacts[0]),
        SegmentProblem(1, points[:, SPLIT:], reference[SPLIT:], artifacts[1]),
    ]
    proximal, distal = subject.body.centres
    joints = [JointProblem(0, 1, KNEE, proximal, distal, travel_sd)]
    start = bridge(first_look(segments, 2)[0], joints)
    changes = angle_changes(trial.time, knee_angles(start)[:, None])[frames] if VELOCITY in inputs else None
    gravity = Gravity(UP, "right") if TILT in inputs else None
    segments = [
        replace(item, points=item.points[frames], gravity=gravity, changes=changes) for item in segments
    ]
    return solve_frames(segments, joints, start[frames])

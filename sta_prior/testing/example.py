"""Invented paired data in memory, and a trial to bind a prior to. Nothing here was measured.

Shell: holds the labels. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import cast

import numpy as np
import xarray as xr

from sta_prior.angles import JointConvention, JointKind
from sta_prior.checks import BoolArray, FloatArray
from sta_prior.errors import InputError, message
from sta_prior.pairs.pairing import segment_side
from sta_prior.prior.base import JointLabel, Prior
from sta_prior.rigid import marker_jacobian
from sta_prior.study import Lab, Reference, Subject, Trial
from sta_prior.study.frames import Side
from sta_prior.study.lab import Joint, Segment

RATE = 100.0
JOINTS = (("hip", "pelvis", "thigh"), ("knee", "thigh", "shank"))
SEGMENTS = ("thigh", "shank")

SIZE, OWN, LATER, RESIDUAL = 0.006, 0.35, 0.1, 0.0008
"""Artifact far from the reference, m; parts of it that are a subject's own and a trial's own; the rest, m."""

SATURATION = 0.5
"""Flexion over which the skin gives way, rad."""

BONE_SD = (0.0002, 0.001)


def example_pairs(
    seed: int = 1,
    subjects: int = 8,
    trials: int = 2,
    frames: int = 60,
    left: Sequence[str] = (),
    markers: int = 4,
) -> xr.Dataset:
    """Invent paired data of thigh and shank, like those of `pair`.

    The skin gives way with flexion and then no more (1 − exp(−Δq/0.5)), by another amount in every subject
    and a little other in every trial; about a millimetre wobbles on top. No family has this law.

    Parameters
    ----------
    seed : of the random numbers; the same seed gives the same data
    subjects : how many, named S01, S02, …
    trials : recordings of each
    frames : of each recording, at 100 Hz
    left : subjects measured on their left side; their data is the mirror image
    markers : of each segment

    Returns
    -------
    Dataset with the variables and coordinates of docs/files.md.

    Raises
    ------
    InputError : no subject, trial, frame or marker, or an unknown subject in ``left``.
    """
    for name, count in (("subjects", subjects), ("trials", trials), ("frames", frames), ("markers", markers)):
        if count < 1:
            raise InputError(message(("example_pairs", name), f"expected 1 or more, got {count}"))
    names = [f"S{index + 1:02d}" for index in range(subjects)]
    for name in left:
        if name not in names:
            raise InputError(message("example_pairs, left", f"no subject {name}, has {' '.join(names)}"))
    generator = np.random.default_rng(seed)
    labels = [f"{segment[0].upper()}{index + 1}" for segment in SEGMENTS for index in range(markers)]
    position = _layout(generator, len(labels), markers)
    shape = (len(JOINTS), len(labels), 3)
    # A segment's skin follows the joints next to it.
    follows = np.array([[segment in ends for segment in SEGMENTS for _ in range(markers)] for ends in JOINTS])
    shared = SIZE * generator.standard_normal(shape) * follows[..., None]
    own = OWN * SIZE * generator.standard_normal((subjects, *shape)) * follows[..., None]
    later = LATER * SIZE * generator.standard_normal((subjects, trials, *shape)) * follows[..., None]
    place = position + 0.005 * generator.standard_normal((subjects, *position.shape))
    reference = 0.05 * generator.standard_normal((subjects, len(JOINTS), 3))
    angle = _motion(generator, (subjects, trials, frames))
    bent = 1.0 - np.exp(-np.maximum(angle[..., 0] - reference[:, None, None, :, 0], 0.0) / SATURATION)
    weights = shared + own[:, None] + later
    displacement = np.einsum("stfj,stjmx->stfmx", bent, weights)
    displacement += RESIDUAL * generator.standard_normal(displacement.shape)
    displacement += _bone_error(generator, place, displacement.shape, markers)
    mirrored = np.isin(names, list(left))
    displacement[mirrored, ..., 2] *= -1.0
    place[mirrored, :, 2] *= -1.0
    return _labelled(names, trials, labels, markers, displacement, angle, place, reference, mirrored)


def _layout(generator: np.random.Generator, count: int, markers: int) -> FloatArray:
    """Positions about a bone that points down from its joint, (count, 3) m."""
    turn = 2.0 * np.pi * np.arange(count) / markers + generator.uniform(0.0, 6.0)
    down = -0.1 - 0.2 * (np.arange(count) % markers + 0.5) / markers
    return np.stack([0.06 * np.cos(turn), down, 0.06 * np.sin(turn)], axis=1)


def _motion(generator: np.random.Generator, shape: tuple[int, int, int]) -> FloatArray:
    """Angles of hip and knee, (subjects, trials, frames, joints, 3) rad: a step, each its own."""
    subjects, trials, frames = shape
    start = generator.uniform(0.0, 6.0, (subjects, trials, 1))
    phase = 2.0 * np.pi * np.arange(frames) / frames + start
    reach = generator.uniform(0.8, 1.1, (subjects, trials, 1))
    angle = 0.05 * generator.standard_normal((*shape, len(JOINTS), 3)).cumsum(axis=2) / np.sqrt(frames)
    angle[..., 0, 0] += 0.25 + 0.35 * reach * np.sin(phase)
    angle[..., 1, 0] += 0.6 - 0.5 * reach * np.cos(phase)
    return np.asarray(angle)


def _bone_error(
    generator: np.random.Generator, place: FloatArray, shape: tuple[int, ...], markers: int
) -> FloatArray:
    """Displacement that errors of the bone truth make, of the size that the data declares."""
    result = np.zeros(shape)
    for index in range(len(SEGMENTS)):
        own = slice(index * markers, (index + 1) * markers)
        error = generator.standard_normal((*shape[:3], 6)) * np.repeat([BONE_SD[1], BONE_SD[0]], 3)
        lever = marker_jacobian(place[:, own])
        result[..., own, :] = np.einsum("sax,stfx->stfa", lever, error).reshape(*shape[:3], markers, 3)
    return result


def _labelled(
    names: list[str],
    trials: int,
    labels: list[str],
    markers: int,
    displacement: FloatArray,
    angle: FloatArray,
    place: FloatArray,
    reference: FloatArray,
    mirrored: BoolArray,
) -> xr.Dataset:
    count, frames = len(names) * trials, displacement.shape[2]
    numbers = np.tile(np.arange(trials), len(names))
    activities = np.array(["walk", "squat"])[numbers % 2]
    trial_names = np.array([f"{name}_{1 + n // 2:02d}" for name, n in zip(activities, numbers, strict=True)])
    owners = np.repeat(names, trials)
    sides = np.where(mirrored, "left", "right")
    metre, radian = {"units": "m"}, {"units": "rad"}
    return xr.Dataset(
        {
            "displacement": (("frame", "marker", "axis"), displacement.reshape(-1, len(labels), 3), metre),
            "angle": (("frame", "joint", "dof"), angle.reshape(-1, len(JOINTS), 3), radian),
            "reference": (("subject", "marker", "axis"), place, metre),
            "reference_angle": (("subject", "joint", "dof"), reference, radian),
            "bone_sd_position": (("trial",), np.full(count, BONE_SD[0]), metre),
            "bone_sd_rotation": (("trial",), np.full(count, BONE_SD[1]), radian),
        },
        coords={
            "subject": ("frame", np.repeat(owners, frames)),
            "trial": ("frame", np.repeat(trial_names, frames)),
            "activity": ("frame", np.repeat(activities, frames)),
            "time": ("frame", np.tile(np.arange(frames) / RATE, count), {"units": "s"}),
            "segment": list(SEGMENTS),
            "marker": labels,
            "joint": [name for name, *_ in JOINTS],
            "dof": list(JointConvention("knee", "right").dof),
            "axis": ["x", "y", "z"],
            "marker_segment": ("marker", np.repeat(list(SEGMENTS), markers)),
            "joint_kind": ("joint", [name for name, *_ in JOINTS]),
            "joint_proximal": ("joint", [proximal for _, proximal, _ in JOINTS]),
            "joint_distal": ("joint", [distal for *_, distal in JOINTS]),
            "subject_id": ("subject", names),
            "segment_side": (("subject", "segment"), np.repeat(sides[:, None], len(SEGMENTS), axis=1)),
            "trial_id": ("trial", trial_names),
            "trial_subject": ("trial", owners),
            "trial_activity": ("trial", activities),
            "trial_digest": ("trial", [f"{a}/{b}" for a, b in zip(owners, trial_names, strict=True)]),
        },
        attrs={"invented_data": 1},
    )


@dataclass(frozen=True, eq=False)
class _ExampleSubject(Subject):
    """A subject without files."""

    posture: Reference | None = field(default=None, repr=False)

    def reference(self) -> Reference:
        """The posture that it was made with."""
        return cast(Reference, self.posture)


@dataclass(frozen=True, eq=False)
class _ExampleTrial(Trial):
    """A trial without files, of nothing that a prior has learned from."""

    def digest(self) -> str:
        """A digest that no recording has."""
        return "of a trial without files"


@dataclass(frozen=True)
class Setting:
    """What a trial looks like to a prior.

    segments: markers by segment, in the trial's order; positions: (m, 3) m by segment, right side, in that
    order; joints: in the trial's order; angles: (joints, 3) rad, at the reference posture; side: of the body.
    """

    segments: Mapping[str, tuple[str, ...]]
    positions: Mapping[str, FloatArray]
    joints: tuple[JointLabel, ...]
    angles: FloatArray
    side: Side = "right"
    subject: str = "never imaged"
    activity: str = "walk"


def setting_of(prior: Prior, angles: FloatArray) -> Setting:
    """All markers and joints of a prior; where any markers do, four of them about the bone.

    angles: (joints, 3) rad, at the reference posture.
    """
    markers, positions = {}, {}
    generator = np.random.default_rng(0)
    for name, model in prior.segments.items():
        own = model.markers or tuple(f"{name}_{index + 1}" for index in range(4))
        markers[name] = own
        positions[name] = model.layout if model.markers else _layout(generator, len(own), len(own))
    return Setting(markers, positions, prior.joints, angles)


def example_trial(setting: Setting) -> Trial:
    """A trial without files that a prior can be bound to."""
    joints = tuple(
        Joint(
            label.name,
            label.proximal,
            label.distal,
            JointConvention(cast(JointKind, label.kind), setting.side),
            (),
            0.005,
        )
        for label in setting.joints
    )
    segments = tuple(Segment(name, own, None) for name, own in setting.segments.items())
    place = Path("example")
    lab = Lab("example", "y", segments, joints, place)
    positions = [
        setting.positions[name] * ([1.0, 1.0, -1.0] if segment_side(lab, name) == "left" else 1.0)
        for name in setting.segments
    ]
    reference = Reference(
        markers=np.concatenate(positions),
        joint_centres=np.full((len(joints), 2, 3), np.nan),
        angles=setting.angles,
        poses=np.broadcast_to(np.eye(4), (len(segments), 4, 4)),
        marker_sd=np.full(len(lab.markers), np.nan),
        kind="points",
        notes=(),
        frame_offset=np.broadcast_to(np.eye(4), (len(segments), 4, 4)),
    )
    subject = _ExampleSubject(
        setting.subject, setting.side, lab, {}, None, None, None, place, True, posture=reference
    )
    return _ExampleTrial(
        id="example",
        activity=setting.activity,
        session="",
        subject=subject,
        clock="shared",
        space="shared",
        clock_window=0.0,
        bone_sd_position=BONE_SD[0],
        bone_sd_rotation=BONE_SD[1],
        bone_sd_declared=True,
        skin_path=place,
        bone_source=None,
        declared_cycles=None,
    )

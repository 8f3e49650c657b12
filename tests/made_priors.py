"""Made-up hierarchies, frames and paired data for the tests of the prior layer. Nothing here was measured."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from types import SimpleNamespace
from typing import cast

import numpy as np
import xarray as xr
from numpy.random import Generator

from sta_prior.angles import JointConvention, JointKind
from sta_prior.checks import BoolArray, FloatArray
from sta_prior.prior.hierarchy import Hierarchy, TrialStatistics, Weights, make_block
from sta_prior.study import Trial
from sta_prior.study.lab import Joint, Lab, Segment

SEGMENTS: Mapping[str, tuple[str, ...]] = {"thigh": ("TA", "TB", "TC"), "shank": ("SA", "SB", "SC")}
KNEE = ("knee", "knee", "thigh", "shank")
HIP = ("hip", "hip", "pelvis", "thigh")
ANKLE = ("ankle", "ankle", "shank", "foot")
RATE = 100.0


def random_covariance(generator: Generator, size: int) -> FloatArray:
    """A full covariance with a mean variance near one and a condition number of at most a few hundred."""
    root = generator.standard_normal((size, 2 * size))
    return np.asarray(root @ root.T / (2 * size), dtype=np.float64)


def random_hierarchy(generator: Generator, features: int, outputs: int) -> Hierarchy:
    """Covariances of every level, full and unlike each other; a population of no spread."""
    size = features * outputs
    return Hierarchy(
        population=Weights(np.zeros((features, outputs)), np.zeros((size, size))),
        subject_features=random_covariance(generator, features),
        subject_outputs=random_covariance(generator, outputs),
        trial_features=0.3 * random_covariance(generator, features),
        trial_outputs=random_covariance(generator, outputs),
        residual=0.2 * random_covariance(generator, outputs),
        observed_residual=0.3 * random_covariance(generator, outputs),
        iterations=0,
        stop_reason="made up",
    )


def known_truth(correlated: bool) -> Hierarchy:
    """Two features, two markers; between subjects 1 and 0.5, between trials 0.2 and 0.1, residual 0.3."""
    share = 0.5 if correlated else 0.0
    outputs = (1 - share) * np.eye(6) + share * np.kron(np.ones((2, 2)), np.eye(3))
    features = np.array([[1.0, 0.5 * share], [0.5 * share, 0.5]])
    base = random_hierarchy(np.random.default_rng(0), 2, 6)
    return replace(
        base,
        subject_features=features,
        subject_outputs=outputs,
        trial_features=0.2 * features,
        trial_outputs=outputs,
        residual=0.3 * outputs,
        observed_residual=0.3 * outputs,
    )


@dataclass(frozen=True)
class MadeTrial:
    """Frames of one trial: features (F, K), outputs (F, n) with NaN hidden, weights (F,), noise (F, n, n)."""

    subject: str
    trial: str
    features: FloatArray
    outputs: FloatArray
    weights: FloatArray
    noise: FloatArray

    @property
    def seen(self) -> BoolArray:
        """Outputs that were measured, shape (F, n)."""
        return np.isfinite(self.outputs)

    def statistics(self) -> TrialStatistics:
        """The same as sufficient statistics, a block for every set of outputs seen together."""
        blocks = []
        for pattern in np.unique(self.seen, axis=0):
            here = (self.seen == pattern).all(axis=1)
            parts = (self.features[here], self.outputs[here], self.noise[here], self.weights[here])
            blocks.append(make_block(*parts, pattern))
        return TrialStatistics(self.subject, self.trial, tuple(blocks))


def draw_trials(
    generator: Generator,
    truth: Hierarchy,
    counts: Sequence[int],
    frames: int,
    *,
    mean: FloatArray | None = None,
    noise: FloatArray | None = None,
    hidden: bool = False,
) -> list[MadeTrial]:
    """Draw trials from a hierarchy; the first feature is the constant.

    counts: trials of each subject; mean: (K, n) population weights, 0 by default; noise: (n, n) of
    the bone truth, added to residual; hidden: lose a marker in some frames.
    """
    features, outputs = truth.population.mean.shape
    centre = np.zeros((features, outputs)) if mean is None else mean
    added = np.zeros((outputs, outputs)) if noise is None else noise
    roots = [
        np.linalg.cholesky(part)
        for part in (
            truth.subject_features,
            truth.subject_outputs,
            truth.trial_features,
            truth.trial_outputs,
            truth.residual,
        )
    ]
    noise_root = np.linalg.cholesky(added + 1e-30 * np.eye(outputs)) if added.any() else added
    made = []
    for number, count in enumerate(counts):
        deviation = roots[0] @ generator.standard_normal((features, outputs)) @ roots[1].T
        for index in range(count):
            own = roots[2] @ generator.standard_normal((features, outputs)) @ roots[3].T
            design = generator.standard_normal((frames, features))
            design[:, 0] = 1.0
            values = design @ (centre + deviation + own)
            values += generator.standard_normal((frames, outputs)) @ roots[4].T
            values += generator.standard_normal((frames, outputs)) @ noise_root.T
            if hidden:
                marker = generator.integers(0, outputs // 3, frames)
                lost = np.arange(outputs) // 3 == marker[:, None]
                values[lost & (generator.uniform(size=(frames, 1)) < 0.4)] = np.nan
            everywhere = np.broadcast_to(added, (frames, outputs, outputs))
            made.append(
                MadeTrial(f"S{number + 1:03d}", f"t{index}", design, values, np.ones(frames), everywhere)
            )
    return made


def with_weights(trials: list[MadeTrial], generator: Generator) -> list[MadeTrial]:
    """The same frames, each counting as 0.3 to 1 of an independent one."""
    return [replace(item, weights=generator.uniform(0.3, 1.0, item.weights.size)) for item in trials]


def statistics_of(trials: list[MadeTrial]) -> list[TrialStatistics]:
    """Sufficient statistics of all trials."""
    return [item.statistics() for item in trials]


def make_pairs(
    generator: Generator,
    subjects: Sequence[str],
    *,
    trials: int = 2,
    frames: int = 40,
    joints: Sequence[tuple[str, str, str, str]] = (KNEE,),
    segments: Mapping[str, tuple[str, ...]] = SEGMENTS,
    left: Sequence[str] = (),
    bone_sd: tuple[float, float] = (0.0002, 0.001),
) -> xr.Dataset:
    """Paired data in memory: millimetres of displacement that follow the first angle of every joint.

    joints: name, kind, proximal, distal; left: subjects measured on their left side, whose artifact
    is the mirror image; bone_sd: m and rad.
    """
    markers = [marker for own in segments.values() for marker in own]
    columns = list(dict.fromkeys(d for _, kind, *_ in joints for d in dof_of(kind)))
    count = len(subjects) * trials
    time = np.tile(
        np.concatenate([np.arange(frames // 2), 3 * frames + np.arange(frames // 2)]) / RATE, count
    )
    total = time.size
    who, which = np.repeat(subjects, total // len(subjects)), np.repeat(np.arange(count), total // count)
    angle = np.full((total, len(joints), len(columns)), np.nan)
    reference_angle = np.full((len(subjects), len(joints), len(columns)), np.nan)
    mean = 0.004 * generator.standard_normal((len(joints), len(markers) * 3))
    own = mean + 0.002 * generator.standard_normal((len(subjects), *mean.shape))
    displacement = 0.0007 * generator.standard_normal((total, len(markers) * 3))
    subject_of = np.repeat(np.arange(len(subjects)), total // len(subjects))
    for index, (_, kind, *_) in enumerate(joints):
        at = [columns.index(name) for name in dof_of(kind)]
        phase = 2 * np.pi * (0.7 + 0.3 * index) * time + generator.uniform(0, 6, count)[which]
        angle[:, index, at] = np.stack([0.6 - 0.5 * np.cos(phase), 0.1 * np.sin(phase), 0.1 * phase**0], 1)
        reference_angle[:, index, at] = 0.05 * generator.standard_normal((len(subjects), 3))
        change = angle[:, index, at[0]] - reference_angle[subject_of, index, at[0]]
        displacement += change[:, None] * own[subject_of, index]
    position = 0.1 * generator.standard_normal((len(markers), 3)) + [0.0, -0.2, 0.0]
    reference = position + 0.005 * generator.standard_normal((len(subjects), len(markers), 3))
    displacement = displacement.reshape(total, len(markers), 3)
    is_left = np.isin(subjects, list(left))
    displacement[is_left[subject_of], :, 2] *= -1.0
    reference[is_left, :, 2] *= -1.0
    sides = np.where(is_left, "left", "right")
    trial_subject = np.repeat(subjects, trials)
    names = np.array([f"walk_{index + 1}" for index in range(trials)] * len(subjects))
    return xr.Dataset(
        {
            "displacement": (("frame", "marker", "axis"), displacement, {"units": "m"}),
            "angle": (("frame", "joint", "dof"), angle, {"units": "rad"}),
            "reference": (("subject", "marker", "axis"), reference, {"units": "m"}),
            "reference_angle": (("subject", "joint", "dof"), reference_angle, {"units": "rad"}),
            "bone_sd_position": (("trial",), np.full(count, bone_sd[0]), {"units": "m"}),
            "bone_sd_rotation": (("trial",), np.full(count, bone_sd[1]), {"units": "rad"}),
        },
        coords={
            "subject": ("frame", who),
            "trial": ("frame", names[which]),
            "time": ("frame", time, {"units": "s"}),
            "segment": list(segments),
            "marker": markers,
            "joint": [name for name, *_ in joints],
            "dof": columns,
            "axis": ["x", "y", "z"],
            "marker_segment": ("marker", [name for name, own in segments.items() for _ in own]),
            "joint_kind": ("joint", [kind for _, kind, *_ in joints]),
            "joint_proximal": ("joint", [ends[0] for _, _, *ends in joints]),
            "joint_distal": ("joint", [ends[1] for _, _, *ends in joints]),
            "subject_id": ("subject", list(subjects)),
            "segment_side": (("subject", "segment"), np.repeat(sides[:, None], len(segments), 1)),
            "trial_id": ("trial", names),
            "trial_subject": ("trial", trial_subject),
            "trial_activity": ("trial", ["walk"] * count),
            "trial_digest": (
                "trial",
                [f"digest of {a} {b}" for a, b in zip(trial_subject, names, strict=True)],
            ),
        },
    )


def dof_of(kind: str) -> tuple[str, ...]:
    """Names of the angles of a kind of joint."""
    return JointConvention(cast(JointKind, kind), "right").dof


def subjects_of(count: int) -> list[str]:
    """Identifiers P01, P02, …."""
    return [f"P{index + 1:02d}" for index in range(count)]


def only(pairs: xr.Dataset, subjects: Sequence[str], trials: Sequence[str] | None = None) -> xr.Dataset:
    """Paired data of some subjects and, where given, some of their trials."""

    def wanted(subject: FloatArray, trial: FloatArray) -> BoolArray:
        return np.asarray(np.isin(subject, subjects) & (trials is None or np.isin(trial, trials or [])))

    return pairs.isel(
        subject=np.flatnonzero(np.isin(pairs["subject_id"].values, subjects)),
        trial=np.flatnonzero(wanted(pairs["trial_subject"].values, pairs["trial_id"].values)),
        frame=np.flatnonzero(wanted(pairs["subject"].values, pairs["trial"].values)),
    )


def made_lab(
    joints: Sequence[tuple[str, str, str, str]] = (KNEE,),
    segments: Mapping[str, tuple[str, ...]] = SEGMENTS,
    side: str = "right",
) -> Lab:
    """A lab in memory that fits make_pairs."""
    parts = tuple(Segment(name, own, None) for name, own in segments.items())
    made = tuple(
        Joint(name, first, second, JointConvention(cast(JointKind, kind), side), ("C",), 0.005)  # type: ignore[arg-type]
        for name, kind, first, second in joints
    )
    return Lab("made up", "y", parts, made, Path("lab.toml"))


def made_trial(lab: Lab, subject: str, trial: str, reference_angles: FloatArray, digest: str = "") -> Trial:
    """Stand-in for a trial: what a prior asks of one to be bound to it, and nothing else."""
    markers = 0.1 * np.random.default_rng(0).standard_normal((len(lab.markers), 3))
    reference = SimpleNamespace(angles=reference_angles, markers=markers)
    owner = SimpleNamespace(id=subject, lab=lab, reference=lambda: reference)
    whole = digest or f"digest of {subject} {trial}"
    return cast(Trial, SimpleNamespace(id=trial, subject=owner, activity="walk", digest=lambda: whole))

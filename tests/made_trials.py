"""A made-up leg in files, moving with artifact, and a prior of known content, for the tests of `solve`."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import cast

import numpy as np
import xarray as xr
from made_problems import draw_artifact, draw_trial_artifact, made_artifact
from made_studies import LAB, STUDY, leg_points, leg_poses, make_study, write_points

from sta_prior.angles import JointConvention, joint_angles
from sta_prior.checks import FloatArray
from sta_prior.prior import Prior
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.base import Binding
from sta_prior.se3 import transform_points
from sta_prior.study import Lab, Study, Trial, read_study

RATE = 100.0
# Markers in an order of their own: a lab file may list them in another.
MARKERS = {"thigh": ("TA", "TB", "TC", "TD"), "shank": ("SA", "SB", "SC", "SD")}
STUDY_WITHOUT_BONE = STUDY.replace('bone = "stairs_bone.csv"\n', "")

Change = Callable[[dict[str, FloatArray]], None]


def chosen_outputs(artifact: FeatureArtifact, markers: list[int]) -> FeatureArtifact:
    """The artifact of some markers, in the order given."""
    features, n = artifact.weights.mean.shape
    outputs = (3 * np.array(markers)[:, None] + np.arange(3)).reshape(-1)
    columns = (n * np.arange(features)[:, None] + outputs).reshape(-1)
    weights = type(artifact.weights)(
        artifact.weights.mean[:, outputs], artifact.weights.covariance[np.ix_(columns, columns)]
    )
    return FeatureArtifact(
        basis=artifact.basis,
        weights=weights,
        residual=artifact.residual[np.ix_(outputs, outputs)],
        time_scales=artifact.time_scales,
        reference=artifact.reference,
        magnitude=artifact.magnitude[np.ix_(outputs, outputs)],
    )


def whole_artifacts() -> dict[str, FeatureArtifact]:
    """Artifact of thigh and shank, markers in the order of MARKERS."""
    return {
        segment: made_artifact(
            np.random.default_rng(seed), 4, [0], slope=0.008, subject_sd=0.003, residual_sd=0.002
        )
        for seed, segment in enumerate(MARKERS)
    }


def leg_artifacts(lab: Lab) -> dict[str, FeatureArtifact]:
    """The same by the names of a lab file, whatever its order of markers."""
    return {
        segment: chosen_outputs(
            whole, [MARKERS[segment].index(name) for name in lab.segments[lab.segment_index(segment)].markers]
        )
        for segment, whole in whole_artifacts().items()
    }


class FixedPrior:
    """Stands where a learned prior would: artifacts by segment, and instants that informed it."""

    def __init__(self, informed: FloatArray | None = None, invented: bool = False) -> None:
        self.informed = np.zeros(0) if informed is None else informed
        self.invented = invented
        self.digest = "d" * 64

    def bind(self, trial: Trial, personal: xr.Dataset | None = None) -> Binding:
        return Binding(dict(leg_artifacts(trial.subject.lab)), self.informed, "made up")


def fixed_prior(informed: FloatArray | None = None, invented: bool = False) -> Prior:
    """The stand-in, typed as what it stands for."""
    return cast(Prior, FixedPrior(informed, invented))


def moving_poses(frames: int = 40) -> FloatArray:
    """Poses (F, 2, 4, 4) of a right leg that bends from 5° to 60° and walks off."""
    turns = zip(
        np.linspace(5, 60, frames), np.linspace(2, -4, frames), np.linspace(-3, 6, frames), strict=True
    )
    poses = np.stack([leg_poses(angles) for angles in turns])
    poses[..., 0, 3] += np.linspace(0.0, 0.5, frames)[:, None]
    return poses


def moved_points(poses: FloatArray, seed: int = 1, alone: bool = False) -> dict[str, FloatArray]:
    """Markers (F, 3) in the lab with artifact from the prior: weights once, the rest decaying in time.

    alone: every frame on its own instead.
    """
    rng = np.random.default_rng(seed)
    frames = len(poses)
    points = leg_points(poses)
    rotation = np.swapaxes(poses[:, 0, :3, :3], -1, -2) @ poses[:, 1, :3, :3]
    angles = joint_angles(JointConvention("knee", "right"), rotation)[:, None]
    for index, (segment, artifact) in enumerate(whole_artifacts().items()):
        if alone:
            moves = draw_artifact(rng, artifact, angles)
        else:
            moves = draw_trial_artifact(rng, artifact, angles, 1.0 / RATE)
        drawn = moves.reshape(frames, -1, 3)
        for place, name in enumerate(MARKERS[segment]):
            points[name] = points[name] + np.einsum("fij,fj->fi", poses[:, index, :3, :3], drawn[:, place])
    return points


def write_moving_leg(
    folder: Path,
    *,
    lab: str = LAB,
    study: str = STUDY_WITHOUT_BONE,
    frames: int = 40,
    change: Change | None = None,
    move: FloatArray | None = None,
    side: str = "right",
    alone: bool = False,
) -> Study:
    """Write a study whose one trial has artifact; `change` edits its points, `move` (4, 4) moves its lab.

    alone: the artifact of every frame is drawn on its own.
    """
    path = make_study(folder, lab=lab, study=study, side=side)
    points = moved_points(moving_poses(frames), alone=alone)
    if move is not None:
        points = {name: transform_points(move, xyz) for name, xyz in points.items()}
    if change is not None:
        change(points)
    write_points(folder / "stairs.csv", points, RATE)
    return read_study(path)


def hide(points: Mapping[str, FloatArray], names: str, frames: slice) -> None:
    """Hide markers, names parted by blanks, in some frames."""
    for name in names.split():
        points[name][frames] = np.nan

"""From paired data to the sufficient statistics that a segment's prior learns from.

Shell over arrays: reads the labels of a pairs Dataset. Conventions: docs/conventions.md.

Left sides are mirrored here, once: displacement and positions z → −z. Joint angles already have
the same signs on both sides.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.errors import MismatchError, message
from sta_prior.prior.basis import Basis
from sta_prior.prior.hierarchy import TrialStatistics, frame_weights, make_block
from sta_prior.rigid import marker_jacobian

LONGEST_TIME_CONSTANT = 0.1
"""Cap of the residual's decay time, s: a single fitted exponential otherwise runs to the longest
constant allowed and soaks up what the basis does not fit."""

GAP = 1.5
"""A time step this many times the usual one ends a window."""


@dataclass(frozen=True)
class SegmentFrames:
    """Frames of one segment in one trial, mirrored to the right side.

    subject, trial: identifiers; angles: (F, J, 3) rad; reference_angles: (J, 3) rad; displacement:
    (F, n) m, NaN hidden; noise: (F, n, n) m², bone truth projected on the outputs; time: (F,) s.
    """

    subject: str
    trial: str
    angles: FloatArray
    reference_angles: FloatArray
    displacement: FloatArray
    noise: FloatArray
    time: FloatArray

    @property
    def window(self) -> FloatArray:
        """Index of the unbroken window each frame lies in, shape (F,)."""
        return windows(self.time)

    @property
    def step(self) -> float:
        """Usual time step, s."""
        return float(np.median(np.diff(self.time))) if self.time.size > 1 else LONGEST_TIME_CONSTANT


def windows(time: FloatArray) -> FloatArray:
    """Index of the unbroken window each instant lies in, shape (F,)."""
    if time.size < 2:
        return np.zeros(time.size)
    steps = np.diff(time)
    broken = np.concatenate([[0], (steps > GAP * np.median(steps)).astype(int)])
    return np.cumsum(broken).astype(np.float64)


def mirror_signs(markers: int) -> FloatArray:
    """Signs that mirror stacked outputs across the sagittal plane, shape (3·markers,)."""
    return np.tile([1.0, 1.0, -1.0], markers)


def bone_noise(points_bone: FloatArray, rotation_sd: float, position_sd: float) -> FloatArray:
    """Covariance of displacement that errors of the bone truth make, through each lever arm.

    Parameters
    ----------
    points_bone : shape (F, m, 3), m, bone frame; NaN counts as the bone's origin
    rotation_sd, position_sd : of the bone truth, rad and m, about and along each bone axis

    Returns
    -------
    shape (F, 3m, 3m), m²
    """
    lever = marker_jacobian(np.nan_to_num(points_bone))
    variance = np.repeat([rotation_sd**2, position_sd**2], 3)
    result: FloatArray = (lever * variance) @ np.swapaxes(lever, -1, -2)
    return result


def gather_angles(pairs: xr.Dataset, name: str, dof: dict[str, tuple[str, ...]]) -> FloatArray:
    """Angles of a variable with dims (..., joint, dof) as (..., J, 3): joints and angles in the order of dof.

    Raises
    ------
    MismatchError : a joint or one of its angles is not in the paired data.
    """
    values = pairs[name].values
    columns = [str(column) for column in pairs["dof"].values]
    joints = [str(joint) for joint in pairs["joint"].values]
    for joint, wanted in dof.items():
        if joint not in joints or not set(wanted) <= set(columns):
            raise MismatchError(
                message(
                    ("pairs", f"joint {joint}"),
                    f"expected it with {', '.join(wanted)}, the pairs have {', '.join(joints)} "
                    f"with {', '.join(columns)}",
                    "Pair with a lab file that has it.",
                )
            )
    return np.stack(
        [values[..., joints.index(joint), [columns.index(d) for d in dof[joint]]] for joint in dof], axis=-2
    )


def adjacent_joints(pairs: xr.Dataset, segment: str, joints: tuple[str, ...]) -> tuple[int, ...]:
    """Positions among the named joints of those that touch a segment."""
    names = [str(joint) for joint in pairs["joint"].values]
    ends = [
        {str(pairs["joint_proximal"].values[at]), str(pairs["joint_distal"].values[at])}
        for at in (names.index(joint) for joint in joints)
    ]
    return tuple(index for index, bones in enumerate(ends) if segment in bones)


def segment_frames(
    pairs: xr.Dataset, segment: str, markers: tuple[str, ...], dof: dict[str, tuple[str, ...]]
) -> list[SegmentFrames]:
    """Split paired data of a segment by trial.

    Parameters
    ----------
    pairs : paired data
    segment : its name
    markers : the outputs' markers in order; a marker that the pairs lack is hidden throughout
    dof : names of the three degrees of freedom of every joint; their order is that of the angles

    Returns
    -------
    One item for each trial with usable frames, these in order of time; none where the pairs lack the segment.
    """
    labels = [str(marker) for marker in pairs["marker"].values]
    columns = np.array([labels.index(marker) if marker in labels else -1 for marker in markers])
    angles = gather_angles(pairs, "angle", dof)
    references = gather_angles(pairs, "reference_angle", dof)
    subjects = [str(name) for name in pairs["subject_id"].values]
    touching = adjacent_joints(pairs, segment, tuple(dof))
    names = [str(name) for name in pairs["segment"].values]
    if segment not in names:
        return []
    sides = [str(side) for side in pairs["segment_side"].values[:, names.index(segment)]]
    frame_subject, frame_trial = pairs["subject"].values, pairs["trial"].values
    frame_time = pairs["time"].values
    result = []
    for index in range(pairs.sizes["trial"]):
        subject, trial = str(pairs["trial_subject"].values[index]), str(pairs["trial_id"].values[index])
        at = subjects.index(subject)
        own = np.flatnonzero((frame_subject == subject) & (frame_trial == trial))
        # Windows are told by steps in time, whatever order the frames stand in.
        own = own[np.argsort(frame_time[own], kind="stable")]
        displacement = pairs["displacement"].values[own][:, columns].copy()
        displacement[:, columns < 0] = np.nan
        # A displacement without the angles that drive it cannot be placed and is dropped.
        both = angles[own] + references[at]
        known = np.isfinite(both[:, list(touching)]).all(axis=(1, 2))
        usable = known & np.isfinite(displacement).any(axis=(1, 2))
        position = displacement + pairs["reference"].values[at][columns]
        if sides[at] == "left":
            displacement[..., 2] *= -1.0
            position[..., 2] *= -1.0
        displacement, position = displacement[usable], position[usable]
        noise = bone_noise(
            position,
            float(pairs["bone_sd_rotation"].values[index]),
            float(pairs["bone_sd_position"].values[index]),
        )
        if usable.any():
            result.append(
                SegmentFrames(
                    subject=subject,
                    trial=trial,
                    angles=angles[own][usable],
                    reference_angles=references[at],
                    displacement=displacement.reshape(int(usable.sum()), -1),
                    noise=noise,
                    time=frame_time[own][usable],
                )
            )
    return result


def patterns(seen: BoolArray) -> BoolArray:
    """Sets of outputs seen together, shape (patterns, n), each once; sorting is saved where all are seen."""
    return seen[:1] if seen.all() else np.unique(seen, axis=0)


def summarise(
    frames: SegmentFrames, basis: Basis, time_constant: float = LONGEST_TIME_CONSTANT
) -> TrialStatistics:
    """Sufficient statistics of one trial, a block for every set of markers seen together.

    Frames count as if the residual decayed as slowly as it may: a constant fitted to short windows comes out
    too small, and then each window counts as more than it is worth.
    """
    features = basis.values(frames.angles, frames.reference_angles)
    correlation = np.full(frames.time.size, np.exp(-frames.step / max(time_constant, 1e-6)))
    weights = frame_weights(frames.window, correlation)
    seen = np.isfinite(frames.displacement)
    blocks = []
    found = patterns(seen)
    for pattern in found:
        # Noise is large; a trial that shows the same outputs throughout is not copied.
        here = (seen == pattern).all(axis=1) if len(found) > 1 else slice(None)
        blocks.append(
            make_block(features[here], frames.displacement[here], frames.noise[here], weights[here], pattern)
        )
    return TrialStatistics(frames.subject, frames.trial, tuple(blocks))


def estimate_time_constant(trials: list[SegmentFrames], basis: Basis) -> float:
    """Decay time of what the basis leaves over, s, from frames of unbroken windows.

    Each trial is fitted by itself with a weak ridge. White noise, of the bone truth or the markers, adds to
    the variance of the residuals but not to their products at lags of one and two frames, so the ratio of
    these, pooled over trials and outputs, gives the decay. Capped at LONGEST_TIME_CONSTANT.
    """
    products, counts, steps = np.zeros(2), np.zeros(2), []
    for frames in trials:
        features = basis.values(frames.angles, frames.reference_angles)
        outputs = np.where(np.isfinite(frames.displacement), frames.displacement, 0.0)
        seen: BoolArray = np.isfinite(frames.displacement)
        gram = features.T @ features
        ridge = 1e-3 * np.trace(gram) / gram.shape[0] * np.eye(gram.shape[0])
        fitted = features @ np.linalg.solve(gram + ridge, features.T @ outputs)
        residual = np.where(seen, outputs - fitted, 0.0)
        for lag in (1, 2):
            same = frames.window[lag:] == frames.window[:-lag]
            both = seen[lag:] & seen[:-lag] & same[:, None]
            products[lag - 1] += float((residual[lag:] * residual[:-lag])[both].sum())
            counts[lag - 1] += int(both.sum())
        steps.append(frames.step)
    if (products <= 0.0).any():
        return LONGEST_TIME_CONSTANT
    near, far = products / counts
    constant = -float(np.median(steps)) / np.log(min(far / near, 0.999))
    return float(np.clip(constant, 1e-3, LONGEST_TIME_CONSTANT))

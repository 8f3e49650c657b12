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
from sta_prior.pairs.pairing import AXES
from sta_prior.prior.basis import Basis
from sta_prior.prior.hierarchy import TrialStatistics, frame_weights, make_block
from sta_prior.prior.inputs import TILT, VELOCITY, angle_changes, tilt, windows
from sta_prior.prior.time_scales import LONGEST_TIME_CONSTANT
from sta_prior.rigid import marker_jacobian


@dataclass(frozen=True)
class SegmentFrames:
    """Frames of one segment in one trial, mirrored to the right side.

    subject, trial: identifiers; angles: (F, R, 3) rad, of the joints and below them other inputs
    (prior/inputs.py); reference_angles: (R, 3) rad, the same in the reference posture; displacement: (F, n)
    m, NaN hidden; noise: (F, n, n) m², bone truth projected on the outputs; time: (F,) s.
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
    pairs: xr.Dataset,
    segment: str,
    markers: tuple[str, ...],
    dof: dict[str, tuple[str, ...]],
    inputs: tuple[str, ...] = (),
) -> list[SegmentFrames]:
    """Split paired data of a segment by trial.

    Parameters
    ----------
    pairs : paired data
    segment : its name
    markers : the outputs' markers in order; a marker that the pairs lack is hidden throughout
    dof : names of the three degrees of freedom of every joint; their order is that of the angles
    inputs : optional inputs beside the angles, from INPUTS

    Returns
    -------
    One item for each trial with usable frames, these in order of time; none where the pairs lack the segment.

    Raises
    ------
    MismatchError : the pairs lack a joint or what an input needs.
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
    gravity = _gravity(pairs, names.index(segment)) if TILT in inputs else None
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
        driving, reference = [angles[own]], [references[at]]
        known = np.isfinite((angles[own] + references[at])[:, list(touching)]).all(axis=(1, 2))
        if gravity is not None:
            driving.append(tilt(gravity.rotation[own], gravity.up, sides[at])[:, None])
            reference.append(tilt(gravity.reference[at], gravity.up, sides[at])[None])
            known &= np.isfinite(driving[-1] + reference[-1]).all(axis=(1, 2))
        if VELOCITY in inputs:
            driving.append(angle_changes(frame_time[own], angles[own]))
            reference.append(np.zeros(references[at].shape))
            known &= np.isfinite(driving[-1][:, list(touching)]).all(axis=(1, 2))
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
                    angles=np.concatenate(driving, axis=1)[usable],
                    reference_angles=np.concatenate(reference),
                    displacement=displacement.reshape(int(usable.sum()), -1),
                    noise=noise,
                    time=frame_time[own][usable],
                )
            )
    return result


@dataclass(frozen=True)
class _Gravity:
    """Rotations lab ← bone, (F, 3, 3), and at every subject's reference; the lab axis that points up."""

    rotation: FloatArray
    reference: FloatArray
    up: int


def _gravity(pairs: xr.Dataset, segment: int) -> _Gravity:
    """What the tilt of a segment is told from.

    Raises
    ------
    MismatchError : the pairs do not say which way is up or how the bone lay in the reference posture.
    """
    name = str(pairs["segment"].values[segment])
    known = "reference_rotation" in pairs and str(pairs.attrs.get("up", "")) in AXES
    if known:
        reference = pairs["reference_rotation"].values[:, segment]
        known = bool(np.isfinite(reference).all())
    if not known:
        raise MismatchError(
            message(
                ("pairs", f"segment {name}"),
                f"input {TILT} needs the pose of every subject's reference posture in the lab",
                f"Pair again, from static trials, or learn without {TILT}.",
            )
        )
    return _Gravity(pairs["bone_rotation"].values[:, segment], reference, AXES.index(str(pairs.attrs["up"])))


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

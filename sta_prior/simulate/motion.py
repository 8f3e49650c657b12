"""Invented knee and thigh motion of four tasks: smooth, plausible, of no real person.

Level walking and stairs are periodic sums of smooth bumps, the lift is made of
minimum-jerk pieces. Conventions: docs/conventions.md; the lab has x forward,
y up, z to the right, and so have both bones in upright standing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.random import Generator

from sta_prior.angles import JointConvention, rotation_from_angles
from sta_prior.checks import FloatArray, nearest
from sta_prior.errors import InputError, message
from sta_prior.se3 import make_pose

TASKS = ("stair-up", "stair-down", "parcel-lift", "level-walk")
RATE = 100.0  # Hz
KNEE = JointConvention(kind="knee", side="right")
_HIP = JointConvention(kind="hip", side="right")
_DEGREE = np.pi / 180.0
_PEAK_LIMIT = {
    "stair-up": 95.0 * _DEGREE,
    "stair-down": 93.0 * _DEGREE,
    "parcel-lift": 100.0 * _DEGREE,
    "level-walk": 62.0 * _DEGREE,
}
_DURATION = {"stair-up": 2.7, "stair-down": 2.5, "parcel-lift": 3.0, "level-walk": 2.4}  # s
_PERIOD = {"stair-up": 1.35, "stair-down": 1.25, "parcel-lift": 3.0, "level-walk": 1.10}  # s
_BASE = {"stair-up": 8.0, "stair-down": 9.0, "parcel-lift": 5.0, "level-walk": 4.0}  # deg
# Bumps (height, centre in cycles, sharpness) of knee flexion; the sum is scaled to the peak.
_BUMPS = {
    "stair-up": ((0.52, 0.02, 2.5), (0.88, 0.80, 4.0)),
    "stair-down": ((0.25, 0.12, 4.0), (1.0, 0.68, 3.0)),
    "level-walk": ((0.24, 0.14, 6.0), (1.0, 0.71, 2.5)),
}
# Thigh pitch: mean deg, amplitude deg, cycle of its maximum.
_PITCH = {"stair-up": (32.0, 26.0, 0.93), "stair-down": (22.0, 13.0, 0.80), "level-walk": (6.0, 18.0, 0.95)}
# Mean velocity of the hip in m/s: forward, up.
_VELOCITY = {"stair-up": (0.42, 0.25), "stair-down": (0.45, -0.27), "level-walk": (1.20, 0.0)}
_HARMONICS = 2


@dataclass(frozen=True)
class MotionStyle:
    """How one subject moves: constants behind every trial.

    Attributes
    ----------
    reference_angles : shape (3,), rad, knee flexion, adduction, internal rotation in the static trial
    amplitude : shape (4,), unitless, peak knee flexion over the task's limit, below 1
    cadence : unitless, about 1
    thigh_offset : shape (3,), rad, pitch, roll and turn of the thigh against the average
    coupling : shape (2,), rad, adduction and internal rotation gained in deep flexion
    wiggle : shape (4, 2, 2, 2), rad; task, dof (adduction, rotation), harmonic, (cosine, sine)
    travel : shape (3,), m, joint-centre travel of the distal centre: backwards at deep
        flexion, upwards at 60°, sideways at 5° of internal rotation
    """

    reference_angles: FloatArray
    amplitude: FloatArray
    cadence: float
    thigh_offset: FloatArray
    coupling: FloatArray
    wiggle: FloatArray
    travel: FloatArray


@dataclass(frozen=True)
class TaskMotion:
    """One trial's true motion before any marker is attached.

    Attributes
    ----------
    time : shape (n,), s
    angles : shape (n, 3), rad, knee flexion, adduction, internal rotation
    thigh_angles : shape (n, 3), rad, pitch, roll, turn of the thigh in the lab (Z-X-Y)
    hip_position : shape (n, 3), m, lab
    cycles : (start s, end s) of each whole movement cycle
    """

    time: FloatArray
    angles: FloatArray
    thigh_angles: FloatArray
    hip_position: FloatArray
    cycles: tuple[tuple[float, float], ...]


def draw_style(generator: Generator) -> MotionStyle:
    """Draw one subject's way of moving.

    Parameters
    ----------
    generator : source of all randomness

    Returns
    -------
    MotionStyle, angles rad, lengths m.

    Notes
    -----
    Bounded draws keep every peak of flexion under the limit of its task. Spreads of
    the secondary rotations and of the travel are common practice, no source.
    """
    spread = np.array([1.0, 2.2]) * _DEGREE
    return MotionStyle(
        reference_angles=np.array([generator.uniform(1.0, 6.0), *(generator.uniform(-1, 1, 2) * [1.0, 2.0])])
        * _DEGREE,
        amplitude=generator.uniform(0.92, 0.985, len(TASKS)),
        cadence=float(generator.uniform(0.94, 1.06)),
        thigh_offset=generator.uniform(-1, 1, 3) * np.array([3.0, 2.0, 4.0]) * _DEGREE,
        coupling=(np.array([-1.5, 5.0]) + generator.uniform(-1, 1, 2) * np.array([1.2, 3.0])) * _DEGREE,
        wiggle=generator.standard_normal((len(TASKS), 2, _HARMONICS, 2))
        * (spread[:, None] / np.array([1.0, 2.0]) / 2)[None, :, :, None],
        travel=(np.array([-5.0, 1.5, 0.0]) + generator.uniform(-1, 1, 3) * np.array([2.0, 1.5, 1.5])) * 1e-3,
    )


def secondary_angles(style: MotionStyle, flexion: FloatArray, wiggle: FloatArray) -> FloatArray:
    """Complete knee flexion to three angles.

    Parameters
    ----------
    style : the subject
    flexion : shape (...,), rad
    wiggle : shape (..., 2), rad, adduction and internal rotation that flexion does not explain

    Returns
    -------
    shape (..., 3), rad. At the reference flexion and zero wiggle: the reference angles.
    """
    saturating = np.tanh(flexion / (40 * _DEGREE)) - np.tanh(style.reference_angles[0] / (40 * _DEGREE))
    secondary = style.reference_angles[1:] + style.coupling * saturating[..., None] + wiggle
    return np.concatenate([flexion[..., None], secondary], axis=-1)


def joint_travel(style: MotionStyle, angles: FloatArray) -> FloatArray:
    """Travel of the knee centre, distal minus proximal.

    Parameters
    ----------
    style : the subject
    angles : shape (..., 3), rad, knee angles

    Returns
    -------
    shape (..., 3), m, thigh frame; zero at the reference angles.
    """

    def drive(angle: FloatArray) -> FloatArray:
        return np.stack(
            [
                np.tanh(angle[..., 0] / (50 * _DEGREE)),
                angle[..., 0] / (60 * _DEGREE),
                angle[..., 2] / (5 * _DEGREE),
            ],
            axis=-1,
        )

    return np.asarray(style.travel * (drive(angles) - drive(style.reference_angles)), dtype=np.float64)


def minimum_jerk(time: FloatArray, start: float, end: float) -> FloatArray:
    """Rise from 0 to 1 between two instants with least jerk, constant outside.

    Parameters
    ----------
    time : shape (...,), s
    start, end : s

    Returns
    -------
    shape (...,), unitless.

    References
    ----------
    Flash & Hogan (1985), J. Neurosci. 5(7), 1688–1703.
    """
    share = np.clip((time - start) / (end - start), 0.0, 1.0)
    return np.asarray(share**3 * (10 - 15 * share + 6 * share**2), dtype=np.float64)


def task_motion(
    task: str, style: MotionStyle, leg_lengths: tuple[float, float], generator: Generator
) -> TaskMotion:
    """Make one trial of one task.

    Parameters
    ----------
    task : one of TASKS
    style : the subject
    leg_lengths : m, thigh (hip to knee) and shank (knee to ankle)
    generator : source of the trial's own variation (peak, pace, phase, wiggle)

    Returns
    -------
    TaskMotion at 100 Hz.

    Raises
    ------
    InputError : no such task.
    """
    if task not in TASKS:
        raise InputError(
            message("task", f"expected one of {', '.join(TASKS)}, got {task}", nearest(task, TASKS))
        )
    index = TASKS.index(task)
    frames = round(_DURATION[task] * RATE) + 1
    time = np.arange(frames) / RATE
    period = _PERIOD[task] * style.cadence * generator.uniform(0.98, 1.02)
    peak = _PEAK_LIMIT[task] * style.amplitude[index] * generator.uniform(0.985, 1.012)
    lead = generator.uniform(0.05, 0.25)  # of a cycle, before the first whole one
    variation = 1.0 + 0.2 * generator.standard_normal((2, _HARMONICS, 2))
    if task == "parcel-lift":
        period = _DURATION[task]
        phase = time / period
        start, rest = generator.uniform(0.25, 0.40), generator.uniform(0.15, 0.35)
        lowering, rising = generator.uniform(0.80, 0.95), generator.uniform(0.85, 1.0)
        bottom = start + lowering
        shape = minimum_jerk(time, start, bottom) - minimum_jerk(time, bottom + rest, bottom + rest + rising)
        base = float(style.reference_angles[0])
    else:
        phase = time / period - lead
        shape = _bumps(task, phase) / _bumps(task, np.linspace(0, 1, 1001)).max()
        base = _BASE[task] * _DEGREE
    flexion = base + (peak - base) * shape
    angles = secondary_angles(style, flexion, _wiggle(style.wiggle[index] * variation, phase))
    thigh_angles, hip_position = _root(task, style, leg_lengths, time, phase, angles)
    hip_position = hip_position + generator.uniform(-0.1, 0.1, 3) * np.array([1.0, 0.0, 1.0])
    return TaskMotion(time, angles, thigh_angles, hip_position, _cycles(time, phase, period))


def leg_poses(
    thigh_angles: FloatArray,
    hip_position: FloatArray,
    angles: FloatArray,
    travel: FloatArray,
    centres: FloatArray,
) -> FloatArray:
    """Place thigh and shank in the lab.

    Parameters
    ----------
    thigh_angles : shape (..., 3), rad, pitch, roll, turn (Z-X-Y)
    hip_position : shape (..., 3), m, lab, origin of the thigh
    angles : shape (..., 3), rad, knee angles
    travel : shape (..., 3), m, thigh frame
    centres : shape (2, 3), m, knee centre in the thigh and in the shank frame

    Returns
    -------
    shape (..., 2, 4, 4), lab_from_bone of thigh and shank.
    """
    lab_from_thigh = make_pose(rotation_from_angles(_HIP, thigh_angles), hip_position)
    rotation = rotation_from_angles(KNEE, angles)
    thigh_from_shank = make_pose(
        rotation, centres[0] + travel - np.einsum("...ij,j->...i", rotation, centres[1])
    )
    return np.stack([lab_from_thigh, lab_from_thigh @ thigh_from_shank], axis=-3)


def _bumps(task: str, phase: FloatArray) -> FloatArray:
    """Sum of periodic bumps; its maximum is about 1."""
    parts = [h * np.exp(k * (np.cos(2 * np.pi * (phase - c)) - 1)) for h, c, k in _BUMPS[task]]
    return np.asarray(np.sum(parts, axis=0), dtype=np.float64)


def _wiggle(coefficients: FloatArray, phase: FloatArray) -> FloatArray:
    """Fourier series of two harmonics, coefficients (2 dof, harmonic, cosine/sine), to (n, 2) rad."""
    turns = 2 * np.pi * phase[:, None] * np.arange(1, _HARMONICS + 1)
    waves = np.stack([np.cos(turns), np.sin(turns)], axis=-1)
    return np.asarray(np.einsum("dhc,nhc->nd", coefficients, waves), dtype=np.float64)


def _root(
    task: str,
    style: MotionStyle,
    leg_lengths: tuple[float, float],
    time: FloatArray,
    phase: FloatArray,
    angles: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Thigh pitch, roll, turn (n, 3) rad and hip position (n, 3) m in the lab."""
    turn = 2 * np.pi * phase
    if task == "parcel-lift":
        pitch = 0.62 * angles[:, 0]
        sway = 0.2
    else:
        mean, amplitude, top = _PITCH[task]
        pitch = (mean + amplitude * np.cos(turn - 2 * np.pi * top)) * _DEGREE
        sway = 1.0
    roll = sway * 3.0 * _DEGREE * np.cos(turn - 1.0)
    axial = sway * 4.0 * _DEGREE * np.cos(turn + 0.7)
    thigh_angles = np.stack([pitch, roll, axial], axis=-1) + style.thigh_offset
    if task == "parcel-lift":
        # The ankle stays where it is; the hip goes down and back above it.
        thigh, shank = leg_lengths
        shank_pitch = thigh_angles[:, 0] - angles[:, 0]
        forward = -thigh * np.sin(thigh_angles[:, 0]) - shank * np.sin(shank_pitch)
        upward = 0.08 + thigh * np.cos(thigh_angles[:, 0]) + shank * np.cos(shank_pitch)
        return thigh_angles, np.stack([forward, upward, np.full_like(time, 0.09)], axis=-1)
    speed, climb = _VELOCITY[task]
    height = 0.08 + 0.97 * sum(leg_lengths)
    hip_position = np.stack(
        [
            speed * time / style.cadence + 0.01 * np.sin(2 * turn),
            height + climb * time / style.cadence + 0.02 * np.cos(2 * turn + 0.5),
            0.09 + 0.02 * np.cos(turn),
        ],
        axis=-1,
    )
    return thigh_angles, hip_position


def _cycles(time: FloatArray, phase: FloatArray, period: float) -> tuple[tuple[float, float], ...]:
    """Whole cycles inside the trial; each starts where the phase is a whole number."""
    first = float((np.ceil(phase[0] - 1e-9) - phase[0]) * period)
    count = int(np.floor((time[-1] - first) / period + 1e-9))
    return tuple((first + k * period, min(first + (k + 1) * period, float(time[-1]))) for k in range(count))

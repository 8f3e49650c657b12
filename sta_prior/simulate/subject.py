"""One invented subject: body, static trial, movement trials with artifact and bone truth.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.random import Generator

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.se3 import exp, transform_points
from sta_prior.simulate.artifact import (
    Population,
    draw_weights,
    drives,
    residual_displacement,
    systematic_displacement,
)
from sta_prior.simulate.mechanisms import (
    HIDDEN_SHARE,
    SegmentTissue,
    bulge_and_slide,
    draw_tissue,
    scattered_windows,
    strikes_of,
    wobble,
)
from sta_prior.simulate.motion import (
    RATE,
    MotionStyle,
    TaskMotion,
    draw_style,
    joint_travel,
    leg_poses,
    secondary_angles,
    task_motion,
)

SEGMENTS = ("thigh", "shank")
MARKERS = ("TA", "TB", "TC", "TD", "TE", "SA", "SB", "SC", "SD", "SE")
MARKER_COUNTS = (5, 5)
LANDMARKS = ("HJC", "LEP", "MEP", "LMA", "MMA", "LCO", "MCO")
SESSIONS = ("morning", "afternoon")
STATIC_FRAMES = 60
_DEGREE = np.pi / 180.0
_AVERAGE_HEIGHT = 1.74  # m
_THIGH_LENGTH, _SHANK_LENGTH = 0.42, 0.40  # m, hip to knee centre, knee centre to ankle, at average height
_PLACEMENT_SD = 8e-3  # m, of a marker along and around the segment
_SHORTEST_WINDOW, _LONGEST_WINDOW = 0.6, 0.8  # s in view of the imaging system


@dataclass(frozen=True)
class Body:
    """Invented body of one subject.

    Attributes
    ----------
    height, mass : m, kg
    markers : shape (10, 3), m, reference positions in the bone frame of their segment
    landmarks : shape (7, 3), m, in the bone frame of their segment at the reference posture
    centres : shape (2, 3), m, knee centre in the thigh and in the shank frame
    leg_lengths : m, thigh and shank
    """

    height: float
    mass: float
    markers: FloatArray
    landmarks: FloatArray
    centres: FloatArray
    leg_lengths: tuple[float, float]


@dataclass(frozen=True)
class SimulatedTrial:
    """One movement trial of n frames with its truth; segments thigh, shank; ten markers.

    Attributes
    ----------
    id, activity, session : names
    time : shape (n,), s
    points : shape (n, 10, 3), m, lab, measured; NaN where occluded
    lab_from_bone : shape (n, 2, 4, 4), true poses
    imaged_pose : shape (n, 2, 4, 4), noisy bone truth, NaN outside the imaging windows;
        all NaN for an archived subject
    angles : shape (n, 3), rad, true knee flexion, adduction, internal rotation
    travel : shape (n, 3), m, true travel of the knee centre, thigh frame
    displacement : shape (n, 10, 3), m, bone frame, true artifact
    systematic : shape (n, 10, 3), m, bone frame, the part of it that the angles explain
    cycles : (start s, end s) of each whole movement cycle
    """

    id: str
    activity: str
    session: str
    time: FloatArray
    points: FloatArray
    lab_from_bone: FloatArray
    imaged_pose: FloatArray
    angles: FloatArray
    travel: FloatArray
    displacement: FloatArray
    systematic: FloatArray
    cycles: tuple[tuple[float, float], ...]


@dataclass(frozen=True)
class SimulatedSubject:
    """One invented subject.

    Attributes
    ----------
    id : K01 …
    imaged : whether windows of bone truth are in view
    body, style : constants of the body and of the way of moving
    weights : two of shape (4, 15), m a drive, this subject's artifact on thigh and shank
    tissue_factor : unitless
    reference_pose : shape (2, 4, 4), lab_from_bone in the static trial
    static_points : shape (k, 17, 3), m, lab: ten markers, then seven landmarks
    trials : movement trials
    tissue : of thigh and shank in the mechanism bulge-slide-wobble, which then replaces the weights
    """

    id: str
    imaged: bool
    body: Body
    style: MotionStyle
    weights: tuple[FloatArray, FloatArray]
    tissue_factor: float
    reference_pose: FloatArray
    static_points: FloatArray
    trials: tuple[SimulatedTrial, ...]
    tissue: tuple[SegmentTissue, SegmentTissue] | None = None


def average_layouts() -> tuple[FloatArray, FloatArray]:
    """Average marker positions on thigh and shank, two of shape (5, 3), m, bone frames.

    The thigh frame starts at the hip centre, the shank frame between the malleoli; markers
    lie on the front and outer side.
    """
    thigh = np.array(
        [
            [0.065, -0.130, 0.040],
            [0.080, -0.235, 0.005],
            [0.015, -0.170, 0.085],
            [0.010, -0.285, 0.075],
            [0.060, -0.330, 0.045],
        ]
    )
    shank = np.array(
        [
            [0.045, 0.310, 0.020],
            [0.000, 0.285, 0.055],
            [0.035, 0.220, -0.025],
            [0.005, 0.165, 0.050],
            [0.030, 0.130, 0.010],
        ]
    )
    return thigh, shank


def draw_body(generator: Generator, tissue_factor: float) -> Body:
    """Draw one body, right leg.

    Parameters
    ----------
    generator : source of all randomness
    tissue_factor : unitless; more soft tissue makes the body heavier

    Returns
    -------
    Body.
    """
    height = float(_AVERAGE_HEIGHT + 0.07 * np.clip(generator.standard_normal(), -2.5, 2.5))
    size = height / _AVERAGE_HEIGHT
    mass = float(23.0 * height**2 * tissue_factor**0.5 * generator.uniform(0.94, 1.06))
    thigh, shank = _THIGH_LENGTH * size, _SHANK_LENGTH * size
    half_knee, half_ankle, half_condyle = (
        np.array([0.041, 0.036, 0.035]) * size * generator.uniform(0.95, 1.05, 3)
    )
    # Frames are those of the landmarks: the recipes of the lab file find them again.
    landmarks = np.array(
        [
            [0.0, 0.0, 0.0],
            [0.0, -thigh, half_knee],
            [0.0, -thigh, -half_knee],
            [0.0, 0.0, half_ankle],
            [0.0, 0.0, -half_ankle],
            [0.0, shank - 0.025 * size, half_condyle],
            [0.0, shank - 0.025 * size, -half_condyle],
        ]
    )
    centres = np.array([[0.0, -thigh, 0.0], [0.004 * size, shank, 0.003 * size]])
    placement = _PLACEMENT_SD * np.clip(generator.standard_normal((len(MARKERS), 3)), -2, 2)
    markers = np.concatenate(average_layouts()) * size + placement * np.array([0.4, 1.0, 1.0])
    return Body(height, mass, markers, landmarks, centres, (thigh, shank))


def simulate_subject(
    identifier: str,
    imaged: bool,
    population: Population,
    schedule: tuple[tuple[str, int], ...],
    generator: Generator,
) -> SimulatedSubject:
    """Make one subject with a static trial and all movement trials.

    Parameters
    ----------
    identifier : subject id
    imaged : whether trials get windows of bone truth
    population : what all subjects share
    schedule : (task, repetition from 1) of each trial
    generator : source of all randomness; each trial gets a child of its own

    Returns
    -------
    SimulatedSubject.

    Raises
    ------
    InputError : an unknown task.
    """
    weights, tissue_factor = draw_weights(population, generator)
    body = draw_body(generator, tissue_factor)
    style = draw_style(generator)
    pose = _standing_pose(body, style)
    settings = population.settings
    bone_points = _in_segments(pose, body.markers, body.landmarks)
    static_points = bone_points + settings.instrument_sd * generator.standard_normal(
        (STATIC_FRAMES, *bone_points.shape)
    )
    subject = SimulatedSubject(
        identifier, imaged, body, style, weights, tissue_factor, pose, static_points, trials=()
    )
    if population.tissue is not None:
        own = _by_segment(body.markers)
        thigh, shank = (
            draw_tissue(average, markers, tissue_factor, generator)
            for average, markers in zip(population.tissue, own, strict=True)
        )
        subject = replace(subject, tissue=(thigh, shank))
    children = generator.spawn(len(schedule))
    trials = tuple(
        simulate_trial(subject, population, task, repetition, child)
        for (task, repetition), child in zip(schedule, children, strict=True)
    )
    return replace(subject, trials=trials)


def simulate_trial(
    subject: SimulatedSubject, population: Population, task: str, repetition: int, generator: Generator
) -> SimulatedTrial:
    """Make one movement trial of a subject.

    Parameters
    ----------
    subject : body, style and artifact; its own trials are not read
    population : what all subjects share
    task : one of motion.TASKS
    repetition : from 1; odd ones are filmed in the morning, even ones in the afternoon,
        with the markers left where they are
    generator : source of all randomness

    Returns
    -------
    SimulatedTrial.

    Raises
    ------
    InputError : an unknown task.
    """
    settings = population.settings
    style, body = subject.style, subject.body
    motion = task_motion(task, style, body.leg_lengths, generator)
    travel = joint_travel(style, motion.angles)
    poses = leg_poses(motion.thigh_angles, motion.hip_position, motion.angles, travel, body.centres)
    frames = len(motion.time)
    systematic, residual = _artifact(subject, population, task, motion, poses, generator)
    displacement = systematic + residual
    split = MARKER_COUNTS[0]
    exact = np.concatenate(
        [
            transform_points(poses[:, 0], body.markers[:split] + displacement[:, :split]),
            transform_points(poses[:, 1], body.markers[split:] + displacement[:, split:]),
        ],
        axis=1,
    )
    points = exact + settings.instrument_sd * generator.standard_normal(exact.shape)
    points[_occlusions(frames, generator, HIDDEN_SHARE if subject.tissue else 1 / 6)] = np.nan
    noise = np.array([settings.bone_sd_rotation] * 3 + [settings.bone_sd_position] * 3)
    imaged_pose = poses @ exp(noise * generator.standard_normal((frames, len(SEGMENTS), 6)))
    windows = scattered_windows(frames, generator) if subject.tissue else _windows(motion.time, generator)
    in_view = windows & subject.imaged
    imaged_pose[~in_view] = np.nan
    return SimulatedTrial(
        id=f"{task}_{repetition:02d}",
        activity=task,
        session=SESSIONS[(repetition - 1) % len(SESSIONS)],
        time=motion.time,
        points=points,
        lab_from_bone=poses,
        imaged_pose=imaged_pose,
        angles=motion.angles,
        travel=travel,
        displacement=displacement,
        systematic=systematic,
        cycles=motion.cycles,
    )


def _by_segment(values: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Values of the ten markers, first axis, as those of thigh and shank."""
    split = MARKER_COUNTS[0]
    return values[:split], values[split:]


def _artifact(
    subject: SimulatedSubject,
    population: Population,
    task: str,
    motion: TaskMotion,
    poses: FloatArray,
    generator: Generator,
) -> tuple[FloatArray, FloatArray]:
    """Artifact that the angles explain and the rest, each (n, 10, 3) m."""
    settings, reference = population.settings, subject.style.reference_angles
    if subject.tissue is not None:
        strikes = strikes_of(task, motion.cycles)
        systematic = [bulge_and_slide(tissue, motion.angles, reference) for tissue in subject.tissue]
        rest = [
            wobble(tissue, poses[:, index], motion.time, strikes, generator)
            for index, tissue in enumerate(subject.tissue)
        ]
    else:
        drive = drives(motion.angles, reference)
        systematic = [systematic_displacement(weights, drive) for weights in subject.weights]
        rest = [
            residual_displacement(
                segment.residual_factor, len(motion.time), 1 / RATE, settings.correlation_time, generator
            )
            for segment in population.segments
        ]
    return np.concatenate(systematic, axis=1), np.concatenate(rest, axis=1)


def _standing_pose(body: Body, style: MotionStyle) -> FloatArray:
    """Poses (2, 4, 4) of the static trial: upright, knee at the reference angles."""
    angles = secondary_angles(style, style.reference_angles[0], np.zeros(2))
    thigh_angles = np.array([0.5 * style.reference_angles[0], 0.0, style.thigh_offset[2]])
    hip = np.array([0.0, 0.08 + 0.995 * sum(body.leg_lengths), 0.09])
    return leg_poses(thigh_angles, hip, angles, np.zeros(3), body.centres)


def _in_segments(pose: FloatArray, markers: FloatArray, landmarks: FloatArray) -> FloatArray:
    """Markers and landmarks (17, 3) m in the lab for poses (2, 4, 4)."""
    split, thigh_landmarks = MARKER_COUNTS[0], 3
    return np.concatenate(
        [
            transform_points(pose[0], markers[:split]),
            transform_points(pose[1], markers[split:]),
            transform_points(pose[0], landmarks[:thigh_landmarks]),
            transform_points(pose[1], landmarks[thigh_landmarks:]),
        ]
    )


def _occlusions(frames: int, generator: Generator, share: float) -> BoolArray:
    """Hidden (frames, 10): in a share of the trials one or two markers are lost for 0.1–0.3 s."""
    hidden = np.zeros((frames, len(MARKERS)), dtype=np.bool_)
    chosen = generator.permutation(len(MARKERS))[: generator.integers(1, 3)]
    starts = generator.integers(0, frames - 30, len(chosen))
    lengths = generator.integers(10, 31, len(chosen))
    if generator.uniform() < share:
        frame = np.arange(frames)[:, None]
        hidden[:, chosen] = (frame >= starts) & (frame < starts + lengths)
    return hidden


def _windows(time: FloatArray, generator: Generator) -> BoolArray:
    """In view (n,): one window in each half of the trial, 0.6 to 0.8 s long."""
    half = time[-1] / 2
    lengths = generator.uniform(_SHORTEST_WINDOW, _LONGEST_WINDOW, 2)
    starts = generator.uniform(0, 1, 2) * (half - lengths) + np.array([0.0, half])
    inside = (time[:, None] >= starts) & (time[:, None] < starts + lengths)
    return np.asarray(inside.any(axis=1), dtype=np.bool_)

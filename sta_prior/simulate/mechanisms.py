"""A second invented soft-tissue mechanism, written so that no family of priors contains it.

    d(t) = s · (bulge · B(θ) + slide · S(θ) + turn · (ρ − ρ₀)) + s · gain · x(t)

B: logistic in knee flexion θ with the subject's own onset and width, so nonlinear in what differs
between subjects; S: saturating slide of the skin towards the knee, which dies out exponentially with
distance from it; ρ: internal rotation, which drags the skin round the segment; s: one lognormal tissue
factor for a subject's whole artifact; x: offset of a wobbling mass on a damped spring,

    x″ + 2ζωx′ + ω²x = −a(t),

driven by the acceleration a of the segment and by an impact at every foot strike. B, S, ρ − ρ₀ and x
are zero in the static trial.

Simplifications, on purpose: the mass hangs from the middle of its segment and feels neither gravity nor
the turning of the frame; the hip drags no skin; the spring is linear and alike in all directions.
Frequencies of 4–8 Hz and a damping of 0.2–0.4 are common practice, no source. Bone truth comes in windows
of 20–80 frames, none to three a trial. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.random import Generator
from scipy.signal import cont2discrete, lfilter, lfilter_zi

from sta_prior.checks import BoolArray, FloatArray, nearest
from sta_prior.errors import InputError, message
from sta_prior.se3 import rotation_of, transform_points

MECHANISMS = ("drives", "bulge-slide-wobble")
TISSUE_SD = 0.25
"""Spread of the logarithm of the tissue factor in this mechanism."""

FREQUENCY_RANGE = (4.0, 8.0)  # Hz
DAMPING_RANGE = (0.2, 0.4)  # of the critical one
FEWEST_FRAMES, MOST_FRAMES = 20, 80  # of bone truth in one window
HIDDEN_SHARE = 1 / 3  # trials in which one or two markers are lost for a while
_WINDOW_COUNT_SHARE = (0.15, 0.35, 0.30, 0.20)  # none to three windows a trial
_DEGREE = np.pi / 180.0
_SLIDE_ANGLE = 45.0 * _DEGREE
_IMPACT_TIME = 0.025  # s
_FINE_STEP = 1e-3  # s, of the spring's integration


@dataclass(frozen=True)
class AverageTissue:
    """What the subjects of a population have in common on one segment.

    Attributes
    ----------
    knee, middle : m, height of the knee and of the segment's middle in the bone frame
    belly, belly_length : m, height of the muscle belly and its spread along the segment
    bulge, slide : m, outward at full bulge, along the segment at full slide beside the knee
    slide_length : m, distance over which the slide dies out
    turn : unitless, part of the rotation that the skin beside the knee does not follow
    onset, width : rad, of the bulge in flexion
    wobble : unitless, part of the mass's offset that a marker in the middle shows
    impact : m/s², peak acceleration at foot strike
    """

    knee: float
    middle: float
    belly: float
    belly_length: float
    bulge: float
    slide: float
    slide_length: float
    turn: float
    onset: float
    width: float
    wobble: float
    impact: float


@dataclass(frozen=True)
class SegmentTissue:
    """One subject's tissue on one segment of m markers, tissue factor included.

    Attributes
    ----------
    bulge : shape (m, 3), m, bone frame, displacement at full bulge
    slide : shape (m, 3), m, the same at full slide
    turn : shape (m, 3), m/rad, by internal rotation
    gain : shape (m,), unitless, part of the wobbling mass's offset
    onset, width : rad, of the bulge in flexion
    frequency, damping : Hz, and share of the critical damping
    impact : m/s², peak acceleration at foot strike
    middle : m, height of the mass in the bone frame
    """

    bulge: FloatArray
    slide: FloatArray
    turn: FloatArray
    gain: FloatArray
    onset: float
    width: float
    frequency: float
    damping: float
    impact: float
    middle: float


AVERAGE = (
    AverageTissue(
        knee=-0.42, middle=-0.22, belly=-0.22, belly_length=0.13, bulge=0.014, slide=-0.018,
        slide_length=0.14, turn=0.30, onset=38 * _DEGREE, width=11 * _DEGREE, wobble=0.5, impact=25.0,
    ),
    AverageTissue(
        knee=0.40, middle=0.24, belly=0.27, belly_length=0.09, bulge=0.004, slide=0.007,
        slide_length=0.12, turn=0.12, onset=32 * _DEGREE, width=10 * _DEGREE, wobble=0.2, impact=40.0,
    ),
)  # fmt: skip
"""Thigh and shank before scaling to the sizes asked for; invented."""


def check_mechanism(mechanism: str) -> str:
    """Return the name of a mechanism; InputError with the nearest known name otherwise."""
    if mechanism not in MECHANISMS:
        known = ", ".join(MECHANISMS)
        raise InputError(
            message("mechanism", f"expected one of {known}, got {mechanism}", nearest(mechanism, MECHANISMS))
        )
    return mechanism


def draw_average(generator: Generator) -> tuple[AverageTissue, AverageTissue]:
    """Draw what a population has in common on thigh and shank: AVERAGE, each size within about 20 %."""

    def vary(average: AverageTissue) -> AverageTissue:
        factor = np.exp(0.2 * generator.standard_normal(5))
        return replace(
            average,
            bulge=average.bulge * float(factor[0]),
            slide=average.slide * float(factor[1]),
            turn=average.turn * float(factor[2]),
            onset=average.onset * float(np.sqrt(factor[3])),
            width=average.width * float(np.sqrt(factor[4])),
        )

    thigh, shank = (vary(average) for average in AVERAGE)
    return thigh, shank


def draw_tissue(
    average: AverageTissue, markers: FloatArray, tissue_factor: float, generator: Generator
) -> SegmentTissue:
    """Draw one subject's tissue on one segment.

    Parameters
    ----------
    average : of the population
    markers : shape (m, 3), m, bone frame, the subject's reference positions
    tissue_factor : unitless, multiplies the whole artifact
    generator : source of all randomness

    Returns
    -------
    SegmentTissue.
    """
    count = markers.shape[0]
    outward = markers * np.array([1.0, 0.0, 1.0])
    outward /= np.linalg.norm(outward, axis=1, keepdims=True)
    around = np.stack([outward[:, 2], np.zeros(count), -outward[:, 0]], axis=1)
    along = np.array([0.0, 1.0, 0.0])

    # Muscles lie differently under the same marker: tilt of the bulge and of the slide, rad.
    bulge_tilt, slide_tilt = np.array([0.5, 0.35]) * generator.standard_normal(2)
    sizes = np.exp(np.array([0.35, 0.40, 0.25]) * generator.standard_normal(3))
    local = np.exp(0.15 * generator.standard_normal((2, count)))
    belly = average.belly + 0.03 * generator.standard_normal()
    profile = np.exp(-0.5 * ((markers[:, 1] - belly) / average.belly_length) ** 2)
    decay = np.exp(-np.abs(markers[:, 1] - average.knee) / (average.slide_length * sizes[2]))
    bulge_direction = np.cos(bulge_tilt) * outward + np.sin(bulge_tilt) * around
    slide_direction = np.cos(slide_tilt) * along + np.sin(slide_tilt) * around
    radius = np.linalg.norm(markers[:, [0, 2]], axis=1)
    turn = average.turn * (1.0 + 0.4 * generator.standard_normal())
    depth = np.exp(0.25 * generator.standard_normal()) * (0.5 + 0.5 * profile)
    return SegmentTissue(
        bulge=tissue_factor * average.bulge * sizes[0] * (local[0] * profile)[:, None] * bulge_direction,
        slide=tissue_factor * average.slide * sizes[1] * (local[1] * decay)[:, None] * slide_direction,
        turn=tissue_factor * turn * (decay * radius)[:, None] * around,
        gain=tissue_factor * average.wobble * depth,
        onset=float(average.onset + 10 * _DEGREE * np.clip(generator.standard_normal(), -2, 2)),
        width=float(average.width * np.exp(0.25 * generator.standard_normal())),
        frequency=float(generator.uniform(*FREQUENCY_RANGE)),
        damping=float(generator.uniform(*DAMPING_RANGE)),
        impact=float(average.impact * np.exp(0.25 * generator.standard_normal())),
        middle=average.middle,
    )


def bulge_and_slide(tissue: SegmentTissue, angles: FloatArray, reference_angles: FloatArray) -> FloatArray:
    """Artifact that the knee angles explain.

    Parameters
    ----------
    tissue : of the subject
    angles : shape (..., 3), rad, knee flexion, adduction, internal rotation
    reference_angles : shape (3,), rad

    Returns
    -------
    shape (..., m, 3), m, bone frame; exactly zero at the reference angles.
    """

    def drive(angle: FloatArray) -> FloatArray:
        bulge = 1.0 / (1.0 + np.exp(-(angle[..., 0] - tissue.onset) / tissue.width))
        return np.stack([bulge, np.tanh(angle[..., 0] / _SLIDE_ANGLE), angle[..., 2]], axis=-1)

    change = drive(angles) - drive(reference_angles)
    return np.asarray(
        np.einsum("...k,kmi->...mi", change, np.stack([tissue.bulge, tissue.slide, tissue.turn]))
    )


def wobble(
    tissue: SegmentTissue,
    lab_from_bone: FloatArray,
    time: FloatArray,
    strikes: Sequence[float],
    generator: Generator,
) -> FloatArray:
    """Offset of the markers with the wobbling mass.

    Parameters
    ----------
    tissue : of the subject
    lab_from_bone : shape (n, 4, 4), true poses of the segment
    time : shape (n,), s, evenly spaced
    strikes : s, instants of foot strike
    generator : source of the impacts' variation, 20 % from strike to strike

    Returns
    -------
    shape (n, m, 3), m, bone frame.
    """
    step = float(time[1] - time[0])
    middle = transform_points(lab_from_bone, np.array([[0.0, tissue.middle, 0.0]]))[:, 0]
    acceleration = np.gradient(np.gradient(middle, step, axis=0), step, axis=0)
    # One-sided differences at the ends are rough: hold the nearest central one.
    acceleration[:2], acceleration[-2:] = acceleration[2], acceleration[-3]
    fine = time[0] + _FINE_STEP * np.arange(round((time[-1] - time[0]) / _FINE_STEP) + 1)
    drive = np.stack([np.interp(fine, time, acceleration[:, axis]) for axis in range(3)], axis=1)
    for strike in strikes:
        share = (fine - strike) / _IMPACT_TIME
        pulse = np.where((share >= 0) & (share <= 1), np.sin(np.pi * np.clip(share, 0, 1)), 0.0)
        peak = tissue.impact * np.exp(0.2 * generator.standard_normal())
        drive += peak * pulse[:, None] * np.array([-0.3, 1.0, 0.0])
    nearest_frame = np.clip(np.round((fine - time[0]) / step).astype(int), 0, time.size - 1)
    felt = np.einsum("nji,nj->ni", rotation_of(lab_from_bone)[nearest_frame], drive)
    offset = spring_response(-felt, _FINE_STEP, tissue.frequency, tissue.damping)
    shown = np.stack([np.interp(time, fine, offset[:, axis]) for axis in range(3)], axis=1)
    return np.asarray(tissue.gain[:, None] * shown[:, None, :], dtype=np.float64)


def spring_response(force: FloatArray, step: float, frequency: float, damping: float) -> FloatArray:
    """Solve x″ + 2ζωx′ + ω²x = f along the first axis, from the resting place of the first force.

    Parameters
    ----------
    force : shape (n, ...), m/s², held between samples
    step : s
    frequency : Hz, of the undamped spring
    damping : ζ, share of the critical one

    Returns
    -------
    shape (n, ...), m.
    """
    rate = 2 * np.pi * frequency
    numerator, denominator, _ = cont2discrete(([1.0], [1.0, 2 * damping * rate, rate**2]), step, method="zoh")
    start = lfilter_zi(numerator[0], denominator)
    at_rest = start.reshape(-1, *([1] * (force.ndim - 1))) * force[:1]
    response, _ = lfilter(numerator[0], denominator, force, axis=0, zi=at_rest)
    return np.asarray(response, dtype=np.float64)


def strikes_of(activity: str, cycles: Sequence[tuple[float, float]]) -> tuple[float, ...]:
    """Instants of foot strike, s: the starts and ends of whole cycles; a lift has none."""
    if activity == "parcel-lift":
        return ()
    return tuple(sorted({instant for cycle in cycles for instant in cycle}))


def scattered_windows(frames: int, generator: Generator) -> BoolArray:
    """In view of the imaging system, shape (n,): none to three windows of 20–80 frames, anywhere."""
    inside = np.zeros(frames, dtype=np.bool_)
    count = int(generator.choice(len(_WINDOW_COUNT_SHARE), p=_WINDOW_COUNT_SHARE))
    for _ in range(count):
        length = int(generator.integers(FEWEST_FRAMES, MOST_FRAMES + 1))
        start = int(generator.integers(0, frames - length + 1))
        inside[start : start + length] = True
    return inside


def scaled(average: AverageTissue, systematic: float, wobbling: float) -> AverageTissue:
    """The same tissue with bulge, slide and turn times one factor and wobble times another."""
    return replace(
        average,
        bulge=systematic * average.bulge,
        slide=systematic * average.slide,
        turn=systematic * average.turn,
        wobble=wobbling * average.wobble,
    )

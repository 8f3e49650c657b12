"""Simulator of an invented study: couriers on stairs, with the truth known.

Nothing here was measured. Physical simplifications, on purpose:

- Motion is kinematic: no forces, no foot contact, no muscle activity, no impact. The foot
  slides a little in walking and on stairs.
- Only thigh and shank of the right leg exist. Landmarks are exact but for the noise of the
  static trial; bone frames are those of the landmarks.
- Secondary knee rotations and the travel of the joint centre are smooth functions of
  flexion with subject-specific size, plus a Fourier series of the movement's phase.
- The artifact depends on the knee angles alone (flexion, saturating flexion, rotation,
  adduction), not on hip angles, muscle state, velocity or the task. Flexing and
  extending trace the same path: no hysteresis. The residual is AR(1) in time, so it is
  rougher than skin. It is absent in the static trial.
- Subjects are normal about the population but for one lognormal tissue factor;
  markers that wobble after impact, slip or swap do not occur.
- Bone truth has white noise; image registration errs in smoother, pose-dependent ways.
- Clocks and lab frames of skin and bone systems are the same.

A second mechanism, ``bulge-slide-wobble``, stands in simulate/mechanisms.py.

Sizes: thigh 10–15 mm and shank 4–6 mm RMS, about 45 % of the mean square between subjects
(common practice, no source). The part of them that falls into walking has the order of
Andersen et al. (2012), doi 10.1016/j.gaitpost.2011.11.032 (largest artifact), and Benoit
et al. (2006), doi 10.1016/j.gaitpost.2005.04.012 (knee error of the rigid fit). That is
plausibility, not validation. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from sta_prior.simulate.artifact import Population, PopulationSettings, SegmentSettings
from sta_prior.simulate.mechanisms import MECHANISMS
from sta_prior.simulate.motion import TASKS, MotionStyle, TaskMotion
from sta_prior.simulate.study import SimulatedStudy, simulate_population, simulate_study, write_study
from sta_prior.simulate.subject import (
    LANDMARKS,
    MARKERS,
    SEGMENTS,
    Body,
    SimulatedSubject,
    SimulatedTrial,
    simulate_subject,
    simulate_trial,
)

__all__ = [
    "LANDMARKS",
    "MARKERS",
    "MECHANISMS",
    "SEGMENTS",
    "TASKS",
    "Body",
    "MotionStyle",
    "Population",
    "PopulationSettings",
    "SegmentSettings",
    "SimulatedStudy",
    "SimulatedSubject",
    "SimulatedTrial",
    "TaskMotion",
    "simulate_population",
    "simulate_study",
    "simulate_subject",
    "simulate_trial",
    "write_study",
]

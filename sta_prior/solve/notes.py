"""What a user should know of a trial: warnings and notes of the solver.

Shell: holds the labels. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import warnings

import numpy as np

from sta_prior.angles import GIMBAL_WARNING, gimbal_margin
from sta_prior.checks import FloatArray
from sta_prior.errors import StaPriorWarning, message
from sta_prior.pairs.belonging import DISTANCE_LIMIT, distance_misfit
from sta_prior.solve.suspects import Suspect, name_suspects
from sta_prior.study import Reference, Trial

LARGEST_MISFIT = 4.0
"""Mean square of the markers' innovations above which a warning says that the smoother does not fit."""


def reference_notes(trial: Trial, points: FloatArray, reference: Reference) -> list[str]:
    """Words where a segment's marker distances do not fit its reference in any frame."""
    lab = trial.subject.lab
    notes = []
    for index, segment in enumerate(lab.segments):
        own = lab.marker_segment == index
        misfit = distance_misfit(points[:, own], reference.markers[own])
        if misfit > DISTANCE_LIMIT:
            words = (
                f"{segment.name} marker distances differ from the reference by {1000 * misfit:.1f} mm RMS "
                f"even in the best tenth of the frames, expected at most {1000 * DISTANCE_LIMIT:.0f} mm: "
                "the reference does not belong to this trial"
            )
            notes.append(words)
            warnings.warn(
                message(
                    (trial.subject.id, trial.id), words, "Its poses are solved but should not be trusted."
                ),
                StaPriorWarning,
                stacklevel=4,
            )
    return notes


def warn_of_suspects(trial: Trial, suspects: list[Suspect], excluded: bool) -> None:
    """Name markers that do not fit the prior."""
    if suspects:
        words = name_suspects(suspects, trial.subject.lab, excluded)
        advice = "Solved without." if excluded else "Look at them; --exclude-suspects solves without."
        warnings.warn(
            message((trial.subject.id, trial.id), f"markers do not fit the prior: {words}", advice),
            StaPriorWarning,
            stacklevel=4,
        )


def warn_of_misfit(trial: Trial, misfit: float, stop_reason: str) -> None:
    """Say so where the smoother did not settle, or the markers jump more than its model allows."""
    if stop_reason.startswith("not converged"):
        warnings.warn(
            message(
                (trial.subject.id, trial.id),
                f"the smoother did {stop_reason}".replace("did not converged", "has not converged"),
                "Does the reference belong to this trial? Compare with --estimator frame-map.",
            ),
            StaPriorWarning,
            stacklevel=4,
        )
    if misfit > LARGEST_MISFIT:
        warnings.warn(
            message(
                (trial.subject.id, trial.id),
                f"from frame to frame the markers move {np.sqrt(misfit):.1f} times as far as the prior's "
                "residual allows",
                "Look for noisy or mislabelled markers, and compare with --estimator frame-map.",
            ),
            StaPriorWarning,
            stacklevel=4,
        )


def warn_of_gimbal(trial: Trial, poses: FloatArray) -> None:
    """Say where a joint is near the posture in which its angles are not defined."""
    lab = trial.subject.lab
    for joint in lab.joints:
        proximal = poses[:, lab.segment_index(joint.proximal), :3, :3]
        distal = poses[:, lab.segment_index(joint.distal), :3, :3]
        margin = gimbal_margin(joint.convention, np.swapaxes(proximal, -1, -2) @ distal)
        near = int((margin < GIMBAL_WARNING).sum())
        if near:
            warnings.warn(
                message(
                    (trial.subject.id, trial.id, f"joint {joint.name}"),
                    f"{near} of {margin.size} frames lie within {np.degrees(GIMBAL_WARNING):.0f}° of the "
                    "posture where its first and third angle cannot be told apart",
                    "Trust the poses there, not the angles.",
                ),
                StaPriorWarning,
                stacklevel=4,
            )

"""The even grid of instants that a trajectory needs.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from sta_prior.checks import FloatArray, IntArray
from sta_prior.errors import InputError, message

UNEVEN = 0.1
"""Part of a step by which an instant may lie off the grid."""

LONGEST = 20
"""A trial of mostly lost frames: the grid may have this many times the frames of the file."""


class Timeline(NamedTuple):
    """Grid of instants: step, s; frames of the grid; at: (F,), place of each of the file's frames on it."""

    step: float
    frames: int
    at: IntArray


def even_grid(time: FloatArray) -> Timeline:
    """Find the even grid on which a trial's instants lie; frames that the file lacks are lost frames.

    Parameters
    ----------
    time : shape (F,), s, rising

    Raises
    ------
    InputError : the instants lie on no even grid.
    """
    if time.size < 2:
        return Timeline(0.01, int(time.size), np.arange(time.size))
    step = float(np.median(np.diff(time)))
    # A median step is good to rounding in the file only; steps are counted one by one, and the whole length
    # then tells how long they are.
    at = np.concatenate([[0.0], np.cumsum(np.rint(np.diff(time) / step))])
    if at[-1] > 0:
        step = float((time[-1] - time[0]) / at[-1])
        at = np.rint((time - time[0]) / step)
    off = np.abs((time - time[0]) / step - at)
    if (np.diff(at) < 1).any() or off.max() > UNEVEN or at[-1] > LONGEST * time.size:
        worst = int(np.argmax(off))
        raise InputError(
            message(
                ("skin trial", f"{time[worst]:g} s"),
                f"the frames are not evenly spaced, expected steps of {step:g} s",
                "Resample the trial, or take --estimator frame-map.",
            )
        )
    return Timeline(step, int(at[-1]) + 1, at.astype(np.int64))


def on_grid(values: FloatArray, timeline: Timeline) -> FloatArray:
    """Values (F, ...) on the grid, NaN where the file has no frame."""
    if timeline.frames == values.shape[0]:
        return values
    result = np.full((timeline.frames, *values.shape[1:]), np.nan)
    result[timeline.at] = values
    return result

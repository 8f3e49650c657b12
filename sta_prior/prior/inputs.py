"""Inputs that may drive the artifact beside the joint angles: a segment's tilt, angular velocity.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

Inputs of a segment stand below the joint angles, in the same array (frames, rows, 3), all in rad: first
a row for each joint, then, where asked for, one row for the segment's tilt, then a row for each joint's
change in CHANGE_TIME. Skin hangs and muscles tighten with the tilt against gravity; it helps most where the
joint above the segment is not observed.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.signal import savgol_filter

from sta_prior.checks import FloatArray, nearest
from sta_prior.errors import InputError, message
from sta_prior.se3 import skew

TILT, VELOCITY = "tilt", "angular-velocity"
INPUTS = (TILT, VELOCITY)

CHANGE_TIME = 0.1
"""Angular velocity is told as the change of an angle in this time, s: all inputs are in rad."""

SMOOTHING = 0.1
"""Stretch of time over which a parabola is fitted for the velocity, s."""

GAP = 1.5
"""A time step this many times the usual one ends a window."""

_STEEP = 1e-3


@dataclass(frozen=True)
class Driver:
    """One input that features are made of.

    row, column: place in the inputs; powers: of the trend; wave: whether it has a Gaussian-process deviation;
    kind: "angle", "tilt" or "angular-velocity".
    """

    row: int
    column: int
    powers: tuple[int, ...]
    wave: bool
    kind: str = "angle"


def check_inputs(names: Sequence[str]) -> tuple[str, ...]:
    """Names of optional inputs, each once, in the order of INPUTS.

    Raises
    ------
    InputError : a name is unknown.
    """
    for name in names:
        if name not in INPUTS:
            raise InputError(
                message("--inputs", f"no input {name}, known: {', '.join(INPUTS)}", nearest(name, INPUTS))
            )
    return tuple(name for name in INPUTS if name in names)


def extra_drivers(inputs: Sequence[str], adjacent: Sequence[int], joints: int) -> tuple[Driver, ...]:
    """Drivers that optional inputs add.

    Parameters
    ----------
    inputs : names, from INPUTS
    adjacent : positions of the joints that touch the segment
    joints : number of joints, the first rows
    """
    drivers: list[Driver] = []
    row = joints
    if TILT in inputs:
        drivers += [Driver(row, 0, (1, 2), True, TILT), Driver(row, 1, (1,), False, TILT)]
        row += 1
    if VELOCITY in inputs:
        drivers += [Driver(row + joint, 0, (1,), False, VELOCITY) for joint in adjacent]
    return tuple(drivers)


def row_count(inputs: Sequence[str], joints: int) -> int:
    """Rows of the inputs array."""
    return joints + (TILT in inputs) + joints * (VELOCITY in inputs)


def input_columns(inputs: Sequence[str], own_joints: Sequence[int], joints: int) -> list[int]:
    """Place of each of a prior's input rows among a trial's.

    Parameters
    ----------
    inputs : names of the optional inputs
    own_joints : position of each of the prior's joints among the trial's
    joints : number of the trial's joints
    """
    rows = list(own_joints)
    first = joints
    if TILT in inputs:
        rows.append(first)
        first += 1
    if VELOCITY in inputs:
        rows += [first + joint for joint in own_joints]
    return rows


def tilt(rotation: FloatArray, up: int, side: str) -> FloatArray:
    """Tilt of a bone against gravity.

    Parameters
    ----------
    rotation : shape (..., 3, 3), lab ← bone
    up : lab axis that points up, 0 … 2
    side : "left" mirrors, so that both sides have the same signs

    Returns
    -------
    shape (..., 3), rad: forward tilt (turn about the bone's z axis, positive where its front rises),
    sideways tilt (positive where its lateral side rises), and 0.
    """
    direction = np.asarray(rotation, dtype=np.float64)[..., up, :]
    sign = -1.0 if side == "left" else 1.0
    forward = np.arctan2(direction[..., 0], direction[..., 1])
    sideways = np.arcsin(np.clip(sign * direction[..., 2], -1.0, 1.0))
    return np.stack([forward, sideways, np.zeros_like(forward)], axis=-1)


def tilt_jacobian(rotation: FloatArray, up: int, side: str) -> FloatArray:
    """Derivative of the tilt for R ← R·Exp(ω), shape (..., 3, 3), last axis ω in bone axes.

    Where the bone's z axis points straight up or down the forward tilt is not defined and its derivative
    is cut to 1000.
    """
    direction = np.asarray(rotation, dtype=np.float64)[..., up, :]
    sign = -1.0 if side == "left" else 1.0
    turned = skew(direction)  # Rᵀe turns by u × ω
    flat = np.maximum(direction[..., 0] ** 2 + direction[..., 1] ** 2, _STEEP**2)[..., None]
    result = np.zeros((*direction.shape[:-1], 3, 3))
    result[..., 0, :] = (
        direction[..., 1, None] * turned[..., 0, :] - direction[..., 0, None] * turned[..., 1, :]
    ) / flat
    result[..., 1, :] = sign * turned[..., 2, :] / np.sqrt(flat)
    return result


def windows(time: FloatArray) -> FloatArray:
    """Index of the unbroken window each instant lies in, shape (F,)."""
    if time.size < 2:
        return np.zeros(time.size)
    steps = np.diff(time)
    broken = np.concatenate([[0], (steps > GAP * np.median(steps)).astype(int)])
    return np.cumsum(broken).astype(np.float64)


def angle_changes(time: FloatArray, angles: FloatArray) -> FloatArray:
    """Change of angles in CHANGE_TIME at the present velocity.

    Parameters
    ----------
    time : shape (F,), s, rising
    angles : shape (F, ...), rad; NaN where missing

    Returns
    -------
    Same shape, rad; NaN at missing instants and where a stretch is a single frame.

    References
    ----------
    Savitzky & Golay (1964), Anal Chem 36, 1627–1639 (derivative of a moving parabola; from memory). Never
    across a gap.
    """
    flat = angles.reshape(time.size, -1)
    result = np.full(flat.shape, np.nan)
    whole = np.isfinite(flat).all(axis=1)
    stretch = windows(time) + np.concatenate([[0], np.cumsum(np.diff(whole.astype(int)) != 0)])
    for part in np.unique(stretch[whole]):
        own = np.flatnonzero(whole & (stretch == part))
        if own.size < 2:
            continue
        unbroken, step = np.unwrap(flat[own], axis=0), float(np.diff(time[own]).mean())
        length = 2 * round(0.5 * SMOOTHING / step) + 1
        if 3 <= length <= own.size:
            slope = savgol_filter(unbroken, length, 2, deriv=1, delta=step, axis=0)
        else:
            slope = np.gradient(unbroken, step, axis=0)
        result[own] = CHANGE_TIME * slope
    return result.reshape(angles.shape)

"""Bring skin markers and bone truth of one trial to the same instants and the same lab frame.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. Clock and space are shared in
this version; alignment of separate systems is refused by the shell.
"""

from __future__ import annotations

import numpy as np

from sta_prior.checks import BoolArray, FloatArray

SAME_INSTANT = 0.02
"""Part of the skin period within which a bone frame and a skin frame are the same instant."""


def skin_at(skin_time: FloatArray, points: FloatArray, bone_time: FloatArray) -> tuple[FloatArray, BoolArray]:
    """Marker positions at the instants of bone truth.

    Parameters
    ----------
    skin_time : shape (F,), s, increasing
    points : shape (F, m, 3), m, lab, NaN hidden
    bone_time : shape (B,), s

    Returns
    -------
    positions : shape (B, m, 3), m, lab
        The very frame where a skin frame falls on the instant, otherwise straight-line
        interpolation between two neighbouring frames that both show the marker: at 100 Hz and
        20 m/s² that is good to 0.25 mm. Never across a gap.
    inside : shape (B,), instants within the trial
    """
    period = float(np.median(np.diff(skin_time))) if skin_time.size > 1 else 1.0
    slack = SAME_INSTANT * period
    inside = (bone_time >= skin_time[0] - slack) & (bone_time <= skin_time[-1] + slack)
    right = np.clip(np.searchsorted(skin_time, bone_time), 1, max(skin_time.size - 1, 1))
    right = np.minimum(right, skin_time.size - 1)
    left = np.maximum(right - 1, 0)
    span = np.where(right > left, skin_time[right] - skin_time[left], 1.0)
    share = np.clip((bone_time - skin_time[left]) / span, 0.0, 1.0)
    near_left, near_right = share * span <= slack, (1.0 - share) * span <= slack
    blend = share[:, None, None]
    mixed = (1.0 - blend) * points[left] + blend * points[right]
    mixed = np.where(near_left[:, None, None], points[left], mixed)
    mixed = np.where(near_right[:, None, None], points[right], mixed)
    # Frames may be missing from the file itself: no interpolation across that either.
    hole = (span > 1.5 * period) & ~near_left & ~near_right
    positions = np.where((inside & ~hole)[:, None, None], mixed, np.nan)
    return positions, inside

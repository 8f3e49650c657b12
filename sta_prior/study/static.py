"""Static trials: average positions, and the frames where skin and bone were seen together.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

import re
import warnings
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
import xarray as xr

from sta_prior.checks import BoolArray, FloatArray, IntArray, nearest
from sta_prior.errors import InputError, StaPriorWarning, message
from sta_prior.se3 import mean_pose, position_of, relative_difference
from sta_prior.study.lab import Lab

Place = tuple[object, ...]

# Limits below: common practice, no source.
LARGEST_SD = 0.005  # m, of one coordinate of a point over a static trial
LARGEST_TURN = np.deg2rad(2.0)  # of a bone over the rows of bone_static
FEWEST_COMMON = 10  # frames that show every point; with fewer, each point uses its own
FIRST_SPAN = 0.1  # s, bone-truth frames that count as "at the reference"
FIRST_FRAMES = 10
# A normal sample's SD over its median absolute deviation: 1 / Φ⁻¹(3/4).
SD_PER_MAD = 1.482602218505602
JOINT_CENTRE = re.compile(r"hjc|jc$|jc_|_jc|joint|centre|center", re.IGNORECASE)


class Average(NamedTuple):
    """Average of a static trial: positions shape (1, 3) m and spread m of each point, and notes."""

    points: dict[str, FloatArray]
    spread: dict[str, float]
    notes: tuple[str, ...]


class PairedFrames(NamedTuple):
    """Frames with skin and bone: positions shape (n, 3) m, spread NaN, poses shape (n, S, 4, 4), notes."""

    points: dict[str, FloatArray]
    spread: dict[str, float]
    imaging: FloatArray
    notes: tuple[str, ...]


def check_points(points: xr.Dataset, lab: Lab, place: Place) -> tuple[str, ...]:
    """Return the names of all points the lab needs at the reference, once the file has them.

    Raises
    ------
    InputError : names file, what needs the point, the point, and the nearest label there.
    """
    labels = [str(label) for label in points["point"].to_numpy()]
    for segment in lab.segments:
        _require(segment.markers, labels, (*place, f"segment.{segment.name}.markers"))
        if segment.frame is not None:
            _require(segment.frame.points, labels, (*place, f"segment.{segment.name}.frame"))
    for joint in lab.joints:
        _require(joint.centre, labels, (*place, f"joint.{joint.name}.centre"))
    centres = (name for joint in lab.joints for name in joint.centre)
    return tuple(dict.fromkeys((*lab.markers, *lab.frame_points, *centres)))


def average_static(points: xr.Dataset, names: Sequence[str], place: Place) -> Average:
    """Average a static trial: the median of each coordinate, over frames that show every point.

    Parameters
    ----------
    points : Points Dataset
    names : points to average
    place : of the file, for messages

    Returns
    -------
    Average; the spread is that of one coordinate (root mean square over x, y, z), from
    the median absolute deviation, so that a stray frame counts for nothing.

    Raises
    ------
    InputError : a point that no frame shows.

    Warns
    -----
    StaPriorWarning : the subject moved, a coordinate's SD is over 5 mm.
    """
    position, seen = _positions(points, names, place)
    common: BoolArray = np.asarray(seen.all(axis=1))
    notes: tuple[str, ...] = ()
    if common.sum() >= min(FEWEST_COMMON, len(common)):
        position = position[common]
    else:
        notes = (
            f"{common.sum()} of {len(common)} static frames show every point: "
            "each point is averaged over its own frames",
        )
    median = np.nanmedian(position, axis=0)
    deviation = SD_PER_MAD * np.nanmedian(np.abs(position - median), axis=0)
    worst = int(deviation.max(axis=1).argmax())
    if deviation[worst].max() > LARGEST_SD:
        moving = int((deviation.max(axis=1) > LARGEST_SD).sum())
        warnings.warn(
            message(
                (*place, f"point {names[worst]}"),
                f"the subject moved, SD {deviation[worst].max() * 1e3:.1f} mm, expected at most "
                f"{LARGEST_SD * 1e3:.0f} mm ({moving} of {len(names)} points)",
                "Use a quieter static trial.",
            ),
            StaPriorWarning,
            stacklevel=2,
        )
        notes = (*notes, "the subject moved in the static trial")
    spread = np.sqrt(np.mean(deviation**2, axis=1)) if len(position) > 1 else np.full(len(names), np.nan)
    return Average(
        {name: median[None, index] for index, name in enumerate(names)},
        {name: float(spread[index]) for index, name in enumerate(names)},
        notes,
    )


def average_bones(poses: FloatArray, lab: Lab, place: Place) -> FloatArray:
    """Average the rows of a bone_static table.

    Parameters
    ----------
    poses : shape (time, S, 4, 4), m, lab ← bone; NaN where not in view
    lab, place : names for messages

    Returns
    -------
    shape (S, 4, 4), m; NaN where a bone is in no row.

    Warns
    -----
    StaPriorWarning : a bone turned by more than 2° or moved by more than 5 mm (SD).
    """
    means = np.stack([mean_pose(poses[:, index]) for index in range(poses.shape[1])])
    for index, name in enumerate(lab.segment_names):
        seen = poses[~np.isnan(poses[:, index]).any(axis=(1, 2)), index]
        if len(seen) < 2:
            continue
        turn = np.sqrt(np.mean(np.sum(relative_difference(seen, means[index])[:, :3] ** 2, axis=1)))
        shift = float(np.std(position_of(seen), axis=0).max())
        if turn > LARGEST_TURN or shift > LARGEST_SD:
            warnings.warn(
                message(
                    (*place, f"segment {name}"),
                    f"the bone moved, SD {np.rad2deg(turn):.1f}° and {shift * 1e3:.1f} mm, expected at most "
                    f"{np.rad2deg(LARGEST_TURN):.0f}° and {LARGEST_SD * 1e3:.0f} mm",
                    "Keep only the rows of the reference posture.",
                ),
                StaPriorWarning,
                stacklevel=2,
            )
    return means


def first_bone_frames(
    points: xr.Dataset, names: Sequence[str], time: FloatArray, poses: FloatArray, lab: Lab, place: Place
) -> PairedFrames:
    """Choose the first frames of a trial that show the bones and every point.

    Parameters
    ----------
    points : Points Dataset of the trial
    names : points needed
    time, poses : shape (n,) s, (n, S, 4, 4) m, bone truth on the points' clock and lab frame
    lab : segments with imaging axes must be in view
    place : of the trial, for messages

    Returns
    -------
    PairedFrames: at most ten, within 0.1 s of the first.

    Raises
    ------
    InputError : no frame shows all of it.
    """
    position, seen = _positions(points, names, place)
    skin_time = points["time"].to_numpy()
    step = float(np.median(np.diff(skin_time))) if len(skin_time) > 1 else 0.0
    nearest_frame = _nearest_index(skin_time, time)
    # Half a frame, and a little for times that a table rounds.
    matched = np.abs(skin_time[nearest_frame] - time) <= 0.5 * step * (1 + 1e-6) + 1e-9
    wanted = [index for index, segment in enumerate(lab.segments) if segment.frame is None]
    bone_seen = ~np.isnan(poses[:, wanted]).any(axis=(1, 2, 3)) & ~np.isnan(poses).all(axis=(1, 2, 3))
    whole: BoolArray = np.asarray(seen.all(axis=1))
    usable = np.flatnonzero(matched & bone_seen & whole[nearest_frame])
    if not len(usable):
        raise InputError(
            message(
                place,
                f"no frame shows every point and the bones: {int(whole.sum())} frames show every "
                f"point, {int(bone_seen.sum())} bone-truth rows show the bones",
                "Give bone_static for the static trial.",
            )
        )
    usable = usable[time[usable] <= time[usable[0]] + FIRST_SPAN][:FIRST_FRAMES]
    chosen = position[nearest_frame[usable]]
    start, end = time[usable[0]], time[usable[-1]]
    note = f"bone truth at the reference: {len(usable)} frames of the static file, {start:.3f}–{end:.3f} s"
    return PairedFrames(
        {name: chosen[:, index] for index, name in enumerate(names)},
        dict.fromkeys(names, float("nan")),
        poses[usable],
        (note,),
    )


def _nearest_index(times: FloatArray, wanted: FloatArray) -> IntArray:
    """Return the index of the rising time nearest to each wanted one."""
    after = np.clip(np.searchsorted(times, wanted), 0, len(times) - 1)
    before = np.maximum(after - 1, 0)
    index: IntArray = np.where(np.abs(times[before] - wanted) <= np.abs(times[after] - wanted), before, after)
    return index


def _positions(points: xr.Dataset, names: Sequence[str], place: Place) -> tuple[FloatArray, BoolArray]:
    """Return positions (time, name, 3) and where they are seen (time, name)."""
    position = points["position"].transpose("time", "point", "axis").sel(point=list(names)).to_numpy()
    seen = np.isfinite(position).all(axis=-1)
    position = np.where(seen[..., None], position, np.nan)
    never = [name for name, any_frame in zip(names, seen.any(axis=0), strict=True) if not any_frame]
    if never:
        raise InputError(
            message(
                (*place, f"point {never[0]}"),
                f"not seen in any of {len(position)} frames",
                "Take another static trial, or leave the point out of the lab file.",
            )
        )
    return position, seen


def _require(names: Sequence[str], labels: Sequence[str], place: Place) -> None:
    """Raise for points that a file does not have."""
    absent = [name for name in names if name not in labels]
    if not absent:
        return
    do = nearest(absent[0], labels)
    if all(JOINT_CENTRE.search(name) for name in absent):
        centres = [label for label in labels if JOINT_CENTRE.search(label)]
        do = nearest(absent[0], centres) or (
            "A joint centre is no marker: add it to the file as a calculated point."
        )
    noun = "point" if len(absent) == 1 else "points"
    raise InputError(
        message(place, f"no {noun} {' '.join(absent)}", do or f"Its points: {' '.join(labels)}.")
    )

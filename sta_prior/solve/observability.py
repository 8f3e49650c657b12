"""What the markers and joints of a frame leave open, and how it is said.

Kernel: arrays in, arrays and text out. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.checks import BoolArray, FloatArray, IntArray
from sta_prior.solve.posterior import UNDETERMINED
from sta_prior.solve.terms import ANCHOR, JointProblem, SegmentProblem, assemble, segment_at
from sta_prior.study import Lab

_CHUNK = 1000


@dataclass(frozen=True)
class Observability:
    """Which directions of the poses a frame's own markers and joints fix.

    rank: (F, S), directions of six that they fix; axis: (F, S, 3), unit vector in the bone's axes about which
    the rotation is least known, NaN where all is fixed or nothing is.
    """

    rank: IntArray
    axis: FloatArray


def observe(
    segments: list[SegmentProblem], joints: list[JointProblem], poses: FloatArray, marker_sd: float
) -> Observability:
    """Directions that every frame's own markers and joints fix, before anything is solved.

    Parameters
    ----------
    segments, joints : of the trial
    poses : shape (F, S, 4, 4), lab ← bone, a first look
    marker_sd : instrument noise, m

    Notes
    -----
    A direction counts as fixed where its SD, of the segment's pose whatever the others are, is below
    UNDETERMINED (0.6 rad, 0.3 m). The prior's spread is in it: a line of markers that artifact alone moves
    off the line fixes no turn about it.
    """
    frames, count = poses.shape[:2]
    rank = np.zeros((frames, count), dtype=np.int64)
    axis = np.full((frames, count, 3), np.nan)
    for first in range(0, frames, _CHUNK):
        own = slice(first, min(first + _CHUNK, frames))
        here = [segment_at(segment, own) for segment in segments]
        system = assemble(here, joints, poses[own], marker_sd)
        information = system.joint_normal.copy()
        # The levers alone: what a neighbour's artifact tells of a bone is not its own markers' doing.
        for term in system.markers:
            information += np.swapaxes(term.lever, 1, 2) @ term.precision @ term.lever
        covariance = np.linalg.inv(information + ANCHOR * np.eye(6 * count))
        for index in range(count):
            at = slice(6 * index, 6 * index + 6)
            scaled = covariance[:, at, at] / np.outer(UNDETERMINED, UNDETERMINED)
            size, directions = np.linalg.eigh(scaled)
            fixed = size < 1.0
            rank[own, index] = fixed.sum(axis=1)
            turn = directions[:, :3, -1]
            length = np.sqrt((turn**2).sum(axis=1, keepdims=True))
            partly = ~fixed[:, -1] & (size[:, 0] < 1.0) & (length[:, 0] > 0.1)
            axis[own, index] = np.where(partly[:, None], turn / np.maximum(length, 1e-12), np.nan)
    return Observability(rank, axis)


def describe_bridged(found: Observability, determined: BoolArray, lab: Lab) -> str:
    """Say per segment which frames are known only through their neighbours; empty where none are.

    Parameters
    ----------
    found : from observe
    determined : shape (F, S), in the solution
    lab : names of the segments
    """
    sentences = []
    for index, segment in enumerate(lab.segments):
        carried = (found.rank[:, index] < 6) & determined[:, index]
        if not carried.any():
            continue
        frames = f"{int(carried.sum())} of {carried.size} frames"
        words = f"{segment.name}: {frames} are carried by their neighbours"
        axes = found.axis[carried, index]
        axes = axes[np.isfinite(axes).all(axis=1)]
        if axes.size:
            # The axis has no sign: the main direction of its squares.
            main = np.linalg.eigh(axes.T @ axes)[1][:, -1]
            main = main * np.sign(main[np.argmax(np.abs(main))])
            words += f", their own markers leave open the turn about {_axis_words(main)}"
        sentences.append(words)
    return "; ".join(sentences)


def _axis_words(axis: FloatArray) -> str:
    """An axis in the bone's own axes, with the name of one that it nearly is."""
    place = int(np.argmax(np.abs(axis)))
    name = ("forward", "long", "sideways")[place]
    vector = ", ".join(f"{value:.2f}" for value in axis)
    near = f", nearly its {name} axis" if abs(axis[place]) > np.cos(np.radians(15.0)) else ""
    return f"the bone's axis ({vector}){near}"


def describe_observability(segments: list[SegmentProblem], determined: BoolArray, lab: Lab) -> str:
    """Say per segment in how many frames its pose is not determined, and why.

    Parameters
    ----------
    segments : the problem, in lab order
    determined : shape (F, S)
    lab : names of segments and markers

    Returns
    -------
    One sentence a segment and cause; empty where every frame is determined.
    """
    sentences = []
    for segment in segments:
        missing = ~determined[:, segment.index]
        if not missing.any():
            continue
        seen = np.isfinite(segment.points[..., 0])
        count = seen.sum(axis=1)
        markers = np.array(lab.segments[segment.index].markers)
        name = lab.segments[segment.index].name
        total = missing.size
        for visible, words in ((0, "no marker is seen"), (1, "one marker is seen: rotation is open")):
            frames = int((missing & (count == visible)).sum())
            if frames:
                sentences.append(f"{name}: not determined in {frames} of {total} frames, {words}")
        two = missing & (count == 2)
        for pair in np.unique(seen[two], axis=0):
            frames = int((two & (seen == pair).all(axis=1)).sum())
            line = "–".join(markers[pair])
            sentences.append(
                f"{name}: not determined in {frames} of {total} frames, "
                f"rotation about the line {line} is open"
            )
        more = int((missing & (count > 2)).sum())
        if more:
            sentences.append(
                f"{name}: not determined in {more} of {total} frames, the markers seen lie near one line, "
                "an adjoining segment is not determined, or the iteration did not settle"
            )
    return "; ".join(sentences)

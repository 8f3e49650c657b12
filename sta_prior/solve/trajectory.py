"""The trajectory problem: all frames of a trial together, as a block-tridiagonal system with an arrow.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

Unknowns of a frame: poses (6 a segment), the artifact of every marker that is hidden there, and rates (see
solve/motion.py). Unknowns of the trial (the arrow): subject deviations, reduced to modes
(solve/constants.py), and a constant offset of every joint centre.

The residual artifact r decays with its own time constant: with ρ = exp(−Δ/τ) the rows

    e_t − ρ e_{t−1},   e = T⁻¹y − a − μ(q) − Z(q)Vu,   covariance (1 − ρ²)R + (1 + ρ²)σ²

are independent from frame to frame, R full over the segment's markers. A hidden marker keeps its rows with
its artifact as an unknown, which drops exactly what was not measured.

References
----------
Prewhitening a first-order process: Box, Jenkins & Reinsel (2008), Time Series Analysis, ch. 3 (from memory).
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace

import numpy as np

from sta_prior import se3
from sta_prior.checks import BoolArray, FloatArray, IntArray
from sta_prior.solve.constants import ConstantModes
from sta_prior.solve.motion import MotionPrior
from sta_prior.solve.terms import JointProblem, SegmentProblem

JOINT_TIME = 0.3
"""Decay time of the joint centre's travel about its constant offset, s. Taken as white in time a joint makes
the thigh over-confident."""

OFFSET_SHARE = 0.5
"""Part of the variance of a joint centre's travel that is constant over a trial."""

RATE_SD = np.repeat([50.0, 20.0], 3)
"""Spread of the velocity in the first frame, rad/s and m/s: says nothing."""


@dataclass(frozen=True)
class Trajectory:
    """State of a trial: poses (F, S, 4, 4), rates (F, S, order − 1, 6), hidden (F, h) m, constants (c,)."""

    poses: FloatArray
    rates: FloatArray
    hidden: FloatArray
    constants: FloatArray


@dataclass(frozen=True)
class TrajectoryProblem:
    """A trial to be smoothed.

    segments, joints: as for the frame-wise problem; motions: of every segment; modes: of every segment's
    constants; step: s; marker_sd: m.
    """

    segments: list[SegmentProblem]
    joints: list[JointProblem]
    motions: list[MotionPrior]
    modes: list[ConstantModes]
    step: float
    marker_sd: float

    @property
    def frames(self) -> int:
        """Number of frames."""
        return int(self.segments[0].points.shape[0])

    @property
    def order(self) -> int:
        """Derivatives in a segment's state, the pose among them."""
        return self.motions[0].order

    @property
    def moving(self) -> int:
        """Pose and rate unknowns of a frame."""
        return 6 * len(self.segments) * self.order

    @property
    def constant_slices(self) -> list[slice]:
        """Places of every segment's modes among the constants."""
        ends = np.cumsum([0, *(mode.modes.shape[2] for mode in self.modes)])
        return [slice(int(a), int(b)) for a, b in itertools.pairwise(ends)]

    @property
    def joint_slices(self) -> list[slice | None]:
        """Places of every joint's offset among the constants; None for one that constrains nothing."""
        first = self.constant_slices[-1].stop
        result: list[slice | None] = []
        for joint in self.joints:
            result.append(slice(first, first + 3) if joint.constrains else None)
            first += 3 if joint.constrains else 0
        return result

    @property
    def constants(self) -> int:
        """Number of trial-constant unknowns."""
        joints = [int(own.stop) for own in self.joint_slices if own is not None]
        return max(int(self.constant_slices[-1].stop), *joints, 0)

    def decay(self, segment: int) -> float:
        """ρ, correlation of a segment's residual from one frame to the next."""
        return float(np.exp(-self.step / max(self.segments[segment].artifact.time_constant, 1e-6)))

    @property
    def poses(self) -> int:
        """Pose unknowns of a frame."""
        return 6 * len(self.segments)

    def state(self, segment: int, hidden: int) -> IntArray:
        """Columns of a segment's pose and rates among a frame's unknowns; hidden: how many of these."""
        extra = self.order - 1
        first = self.poses + hidden + 6 * extra * segment
        return np.concatenate([6 * segment + np.arange(6), first + np.arange(6 * extra)])


@dataclass(frozen=True)
class HiddenOutputs:
    """Where the hidden outputs of each segment stand among a frame's unknowns.

    column: (F, n) by segment, −1 where seen; restart: (F,) by segment, frames before which the chain of
    residuals begins anew; active: (F,) by segment, frames with rows; count: hidden unknowns of a frame.
    """

    column: list[IntArray]
    restart: list[BoolArray]
    active: list[BoolArray]
    count: int


FORGOTTEN = 0.01
"""A segment hidden until its residual's correlation has fallen to this starts anew."""


def place_hidden(problem: TrajectoryProblem) -> HiddenOutputs:
    """Find the hidden outputs; a segment out of view for long has no rows there."""
    columns, restarts, actives = [], [], []
    used: IntArray = np.zeros(problem.frames, dtype=np.int64)
    for segment in problem.segments:
        seen: BoolArray = np.asarray(np.isfinite(segment.points).all(axis=2))
        any_seen: BoolArray = np.asarray(seen.any(axis=1))
        longest = -np.log(FORGOTTEN) * max(segment.artifact.time_constant, 1e-6) / problem.step
        active: BoolArray = any_seen.copy()
        restart: BoolArray = np.zeros(problem.frames, dtype=bool)
        shown = np.flatnonzero(any_seen)
        if shown.size:
            restart[shown[0]] = True
            for before, after in itertools.pairwise(shown):
                if after - before > 1 + longest:
                    restart[after] = True
                elif after - before > 1:
                    active[before:after] = True
        hidden = np.repeat(~seen, 3, axis=1) & active[:, None]
        rank = np.cumsum(hidden, axis=1) - 1
        columns.append(np.where(hidden, used[:, None] + rank, -1))
        used = used + hidden.sum(axis=1)
        restarts.append(restart)
        actives.append(active)
    return HiddenOutputs(columns, restarts, actives, int(used.max(initial=0)))


def moved(
    problem: TrajectoryProblem, state: Trajectory, step: FloatArray, constants: FloatArray
) -> Trajectory:
    """State after a step, (F, p) and (c,)."""
    count, hidden = len(problem.segments), state.hidden.shape[1]
    turn = step[:, : problem.poses].reshape(-1, count, 6)
    rates = step[:, problem.poses + hidden :].reshape(state.rates.shape)
    return replace(
        state,
        poses=state.poses @ se3.exp(turn),
        rates=state.rates + rates,
        hidden=state.hidden + step[:, problem.poses : problem.poses + hidden],
        constants=state.constants + constants,
    )

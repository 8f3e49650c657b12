"""The trajectory problem: all frames of a trial together, as a block-tridiagonal system with an arrow.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

Unknowns of a frame: poses (6 a segment), rates (see solve/motion.py), and the artifact of every marker that is
hidden there. Unknowns of the trial (the arrow): subject deviations, reduced to modes (solve/constants.py), and
a constant offset of every joint centre.

The residual artifact r decays with its own time constant: with ρ = exp(−Δ/τ) the rows

    e_t − ρ e_{t−1},   e = T⁻¹y − a − μ(q) − Z(q)Vu,   covariance (1 − ρ²)R + (1 + ρ²)σ²

are independent from frame to frame, R full over the segment's markers. A hidden marker keeps its rows with
its artifact as an unknown, which drops exactly what was not measured.

References
----------
Prewhitening a first-order process: Box, Jenkins & Reinsel (2008), Time Series Analysis, ch. 3 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from sta_prior import se3
from sta_prior.checks import BoolArray, FloatArray, IntArray
from sta_prior.prior.interface import design_of
from sta_prior.rigid import marker_jacobian
from sta_prior.solve.constants import ConstantModes
from sta_prior.solve.motion import MotionPrior, motion_term
from sta_prior.solve.terms import (
    BALL_JOINT_SD,
    JointProblem,
    SegmentProblem,
    angles_and_jacobians,
    drive,
    joint_travel,
)

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
        return self.segments[0].points.shape[0]

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
        return [slice(int(a), int(b)) for a, b in zip(ends[:-1], ends[1:], strict=True)]

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
        joints = [own.stop for own in self.joint_slices if own is not None]
        return max([self.constant_slices[-1].stop, *joints])

    def state(self, segment: int) -> IntArray:
        """Columns of a segment's pose and rates among a frame's unknowns."""
        count, extra = len(self.segments), self.order - 1
        first = 6 * count + 6 * extra * segment
        return np.concatenate([6 * segment + np.arange(6), first + np.arange(6 * extra)])


@dataclass(frozen=True)
class HiddenOutputs:
    """Where the hidden outputs of each segment stand among a frame's unknowns.

    column: (F, n) by segment, −1 where seen; restart: (F,) by segment, frames before which the chain of residuals
    begins anew; active: (F,) by segment, frames with rows; count: hidden unknowns of a frame at most.
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
    used = np.zeros(problem.frames, dtype=np.int64)
    for segment in problem.segments:
        seen = np.isfinite(segment.points).all(axis=2)
        any_seen = seen.any(axis=1)
        longest = -np.log(FORGOTTEN) * max(segment.artifact.time_constant, 1e-6) / problem.step
        active, restart = any_seen.copy(), np.zeros(problem.frames, dtype=bool)
        shown = np.flatnonzero(any_seen)
        if shown.size:
            restart[shown[0]] = True
            for before, after in zip(shown[:-1], shown[1:], strict=True):
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


@dataclass
class Blocks:
    """Normal equations: A block tridiagonal, B arrow, C corner; all of a half squared cost.

    diagonal: (F, p, p); below: (F − 1, p, p), rows of the later frame; arrow: (F, p, c); gradient: (F, p);
    corner: (c, c) and corner_gradient: (c,), of the data alone; cost: without the constants' own prior.
    """

    diagonal: FloatArray
    below: FloatArray
    arrow: FloatArray
    gradient: FloatArray
    corner: FloatArray
    corner_gradient: FloatArray
    cost: float


def _empty(frames: int, size: int, constants: int) -> Blocks:
    return Blocks(
        np.zeros((frames, size, size)),
        np.zeros((max(frames - 1, 0), size, size)),
        np.zeros((frames, size, constants)),
        np.zeros((frames, size)),
        np.zeros((constants, constants)),
        np.zeros(constants),
        0.0,
    )


@dataclass(frozen=True)
class Rows:
    """A chain of correlated residuals before whitening.

    residual: (F, n); jacobian: (F, n, p) in the frame's own unknowns; constant: (F, n, k) in some constants,
    at: (k,) their places; decay: (F,) ρ towards the frame before, 0 where the chain begins; covariance:
    (n, n), or (F, n, n), of the innovations; active: (F,).
    """

    residual: FloatArray
    jacobian: FloatArray
    constant: FloatArray
    at: IntArray
    decay: FloatArray
    covariance: FloatArray
    active: BoolArray


def whitener(covariance: FloatArray) -> FloatArray:
    """Factor L with L C Lᵀ = 1, lower triangular, shape (..., n, n)."""
    factor = np.linalg.cholesky(covariance)
    identity = np.broadcast_to(np.eye(covariance.shape[-1]), covariance.shape)
    return np.asarray(np.linalg.solve(factor, identity))


def add_rows(blocks: Blocks, rows: Rows) -> None:
    """Add a chain of residuals to the normal equations."""
    decay = np.where(rows.active, rows.decay, 0.0)[1:, None, None]
    factor = whitener(rows.covariance)
    factor = np.broadcast_to(factor, (rows.residual.shape[0], *factor.shape[-2:]))
    factor = factor * rows.active[:, None, None]
    now = factor @ rows.jacobian
    past = decay * (factor[1:] @ rows.jacobian[:-1])
    change = rows.residual.copy()
    change[1:] -= decay[..., 0] * rows.residual[:-1]
    white = np.einsum("fab,fb->fa", factor, change)
    blocks.cost += 0.5 * float((white**2).sum())
    later = np.swapaxes(now, 1, 2)
    earlier = np.swapaxes(past, 1, 2)
    blocks.diagonal += later @ now
    blocks.diagonal[:-1] += earlier @ past
    blocks.below -= later[1:] @ past
    blocks.gradient += np.einsum("fnp,fn->fp", now, white)
    blocks.gradient[:-1] -= np.einsum("fnp,fn->fp", past, white[1:])
    if rows.at.size:
        moved = rows.constant.copy()
        moved[1:] -= decay * rows.constant[:-1]
        moved = factor @ moved
        blocks.arrow[..., rows.at] += later @ moved
        blocks.arrow[:-1][..., rows.at] -= earlier @ moved[1:]
        flat = moved.reshape(-1, rows.at.size)
        blocks.corner[np.ix_(rows.at, rows.at)] += flat.T @ flat
        blocks.corner_gradient[rows.at] += flat.T @ white.reshape(-1)


def marker_rows(
    problem: TrajectoryProblem,
    index: int,
    state: Trajectory,
    hidden: HiddenOutputs,
    angles: FloatArray,
    angle_jacobian: FloatArray,
) -> Rows:
    """Markers of one segment against reference, prior mean and constants."""
    segment, modes = problem.segments[index], problem.modes[index]
    frames, markers = segment.points.shape[:2]
    n, poses = 3 * markers, state.poses
    inputs, input_jacobian = drive(segment, poses, angles, angle_jacobian)
    design = design_of(segment.artifact, inputs)
    own = problem.constant_slices[index]
    weights = modes.modes @ state.constants[own]
    points_bone = se3.transform_points(se3.inverse(poses[:, segment.index]), segment.points)
    residual = (points_bone - segment.reference).reshape(frames, n) - design.mean - design.features @ weights
    slope = design.mean_derivative
    if weights.size:
        slope = slope + np.einsum("fkjd,kn->fnjd", design.feature_derivative, weights, optimize=True)
    inner = slope.reshape(frames, n, -1)
    size = problem.moving + hidden.count
    jacobian = np.zeros((frames, n, size))
    poses_size = input_jacobian.shape[-1]
    jacobian[..., :poses_size] = -inner @ input_jacobian.reshape(frames, -1, poses_size)
    first = 6 * segment.index
    jacobian[..., first : first + 6] -= marker_jacobian(np.nan_to_num(points_bone))
    features = design.features
    count = modes.modes.shape[0]
    constant = -(features @ modes.modes.reshape(count, -1)).reshape(frames, n, -1)
    place = hidden.column[index]
    at_frame, at_output = np.nonzero(place >= 0)
    jacobian[at_frame, at_output] = 0.0
    constant[at_frame, at_output] = 0.0
    slots = place[at_frame, at_output]
    jacobian[at_frame, at_output, problem.moving + slots] = 1.0
    residual[at_frame, at_output] = state.hidden[at_frame, slots]
    active = hidden.active[index]
    residual[~active] = 0.0
    decay = np.exp(-problem.step / max(segment.artifact.time_constant, 1e-6))
    spread = segment.artifact.residual + modes.rest
    noise = problem.marker_sd**2 * np.eye(n)
    begins = hidden.restart[index]
    chain = np.where(begins, 0.0, decay)
    whole = spread if design.growth is None else spread + design.growth
    kept = (1.0 - chain**2)[:, None, None]
    covariance = kept * whole + (1.0 + chain**2)[:, None, None] * noise
    if design.growth is None and begins.sum() == 1 and begins[0]:
        # One factor for all frames but the first.
        covariance = covariance[: min(2, frames)]
        covariance = np.concatenate(
            [covariance[:1], np.broadcast_to(covariance[-1:], (frames - 1, n, n))]
        )
    return Rows(residual, jacobian, constant, np.arange(own.start, own.stop), chain, covariance, active)


def joint_rows(problem: TrajectoryProblem, index: int, state: Trajectory, size: int) -> Rows | None:
    """Travel of one joint centre about its constant offset; None for a joint that constrains nothing."""
    joint, own = problem.joints[index], problem.joint_slices[index]
    if own is None:
        return None
    sd = max(joint.travel_sd, BALL_JOINT_SD)
    travel, slope = joint_travel(joint, state.poses)
    frames = travel.shape[0]
    jacobian = np.zeros((frames, 3, size))
    jacobian[..., : slope.shape[-1]] = slope
    offset = np.sqrt(OFFSET_SHARE) * sd
    decay = np.where(np.arange(frames) == 0, 0.0, np.exp(-problem.step / JOINT_TIME))
    variance = (1.0 - OFFSET_SHARE) * sd**2 * (1.0 - decay**2)
    return Rows(
        residual=travel - offset * state.constants[own],
        jacobian=jacobian,
        constant=np.broadcast_to(-offset * np.eye(3), (frames, 3, 3)),
        at=np.arange(own.start, own.stop),
        decay=decay,
        covariance=variance[:, None, None] * np.eye(3),
        active=np.ones(frames, dtype=bool),
    )


def _add_motion(blocks: Blocks, problem: TrajectoryProblem, state: Trajectory) -> None:
    order = problem.order
    for index, motion in enumerate(problem.motions):
        at = problem.state(index)
        first = np.zeros(6 * order)
        first[6:12] = 1.0 / RATE_SD**2
        if order == 3:
            first[12:] = 1.0 / (50.0 * RATE_SD) ** 2
        start = np.concatenate([np.zeros(6), state.rates[0, index].reshape(-1)])
        blocks.diagonal[0][at, at] += first
        blocks.gradient[0, at] += first * start
        blocks.cost += 0.5 * float(first @ start**2)
        if problem.frames < 2:
            continue
        term = motion_term(motion, state.poses[:, index], state.rates[:, index])
        precision = motion.precision
        pull = term.residual @ precision
        blocks.cost += 0.5 * float((pull * term.residual).sum())
        after, before = precision @ term.after, precision @ term.before
        grid = np.ix_(at, at)
        blocks.diagonal[1:, grid[0], grid[1]] += np.swapaxes(term.after, 1, 2) @ after
        blocks.diagonal[:-1, grid[0], grid[1]] += np.swapaxes(term.before, 1, 2) @ before
        blocks.below[:, grid[0], grid[1]] += np.swapaxes(term.after, 1, 2) @ before
        blocks.gradient[1:, at] += np.einsum("fab,fa->fb", term.after, pull)
        blocks.gradient[:-1, at] += np.einsum("fab,fa->fb", term.before, pull)


def assemble_trajectory(problem: TrajectoryProblem, state: Trajectory, hidden: HiddenOutputs) -> Blocks:
    """Add up all terms of a trial at a given state."""
    size = problem.moving + hidden.count
    blocks = _empty(problem.frames, size, problem.constants)
    # A hidden unknown without a hidden output in this frame is held at zero.
    for frame_slots in range(hidden.count):
        used = np.any([(column == frame_slots).any(axis=1) for column in hidden.column], axis=0)
        place = problem.moving + frame_slots
        blocks.diagonal[~used, place, place] = 1.0
    angles, angle_jacobian = angles_and_jacobians(problem.joints, state.poses)
    for index in range(len(problem.segments)):
        add_rows(blocks, marker_rows(problem, index, state, hidden, angles, angle_jacobian))
    for index in range(len(problem.joints)):
        rows = joint_rows(problem, index, state, size)
        if rows is not None:
            add_rows(blocks, rows)
    _add_motion(blocks, problem, state)
    return blocks


def moved(problem: TrajectoryProblem, state: Trajectory, step: FloatArray, constants: FloatArray) -> Trajectory:
    """State after a step, (F, p) and (c,)."""
    count, extra = len(problem.segments), problem.order - 1
    turn = step[:, : 6 * count].reshape(-1, count, 6)
    rates = step[:, 6 * count : problem.moving].reshape(-1, count, extra, 6)
    return replace(
        state,
        poses=state.poses @ se3.exp(turn),
        rates=state.rates + rates,
        hidden=state.hidden + step[:, problem.moving :],
        constants=state.constants + constants,
    )

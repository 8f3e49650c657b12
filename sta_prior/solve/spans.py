"""All terms of a trajectory problem at a given state, a span of frames at a time.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: solve/trajectory.py; what becomes
of the spans: solve/chain.py.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from sta_prior import se3
from sta_prior.checks import BoolArray, FloatArray, IntArray
from sta_prior.prior.interface import design_of
from sta_prior.rigid import marker_jacobian
from sta_prior.solve.chain import Span
from sta_prior.solve.motion import motion_term
from sta_prior.solve.terms import BALL_JOINT_SD, angles_and_jacobians, drive, joint_travel
from sta_prior.solve.trajectory import (
    JOINT_TIME,
    OFFSET_SHARE,
    RATE_SD,
    HiddenOutputs,
    Trajectory,
    TrajectoryProblem,
)

ANCHOR, WHOLE_ANCHOR = 1e-4, 5e-2
"""Precision that anchors a pose in every frame, and at most over the whole trial, 1/rad² and 1/m²: a spread
of metres and radians, far from what counts as determined."""


@dataclass(frozen=True)
class Rows:
    """A chain of correlated residuals over the frames of a span and one to either side.

    residual: (F, n) e; jacobian: (F, n, m) in the first m unknowns of the frame; through: (F, n, m), the part
    of it that the prior's mean makes, 0 for a joint; constant: (F, n, k) in the constants at ``at`` (k,);
    decay: (F,) ρ towards the frame before, 0 where the chain begins; whitener: L with L Q Lᵀ = 1 for the
    innovations' covariance Q, (1, n, n) or (F, n, n); active: (F,).
    """

    residual: FloatArray
    jacobian: FloatArray
    through: FloatArray | None
    constant: FloatArray
    at: IntArray
    decay: FloatArray
    whitener: FloatArray
    active: BoolArray

    def whitened(self) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Innovations (F, n), their derivatives in the frame's unknowns, in those before, in the constants.

        The first frame of the rows has nothing before it here and counts as the beginning of a chain.
        """
        factor = self.whitener * self.active[:, None, None]
        decay = self.kept_decay
        residual, constant = self.residual.copy(), self.constant.copy()
        residual[1:] -= decay[1:, :, 0] * self.residual[:-1]
        constant[1:] -= decay[1:] * self.constant[:-1]
        now, past = self.derivatives(self.jacobian)
        return np.einsum("fab,fb->fa", factor, residual), now, past, factor @ constant

    @property
    def kept_decay(self) -> FloatArray:
        """Decay where there are rows, (F, 1, 1)."""
        return np.where(self.active, self.decay, 0.0)[:, None, None]

    def derivatives(self, jacobian: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Whitened derivatives (F, n, m) in the frame's unknowns and, sign turned, in those before."""
        factor = self.whitener * self.active[:, None, None]
        past = np.zeros_like(jacobian)
        past[1:] = self.kept_decay[1:] * (factor[1:] @ jacobian[:-1])
        return factor @ jacobian, past


def whitener(covariance: FloatArray) -> FloatArray:
    """Factor L with L C Lᵀ = 1, lower triangular, shape (..., n, n)."""
    factor = np.linalg.cholesky(covariance)
    identity = np.broadcast_to(np.eye(covariance.shape[-1]), covariance.shape)
    return np.asarray(np.linalg.solve(factor, identity))


@dataclass(frozen=True)
class Part:
    """The frames that a span is made from: its own, start … stop − 1, and one to either side.

    first, last: of all frames, last exclusive; own: the span's among them.
    """

    start: int
    stop: int
    first: int
    last: int

    @property
    def frames(self) -> slice:
        """All of them among the trial's."""
        return slice(self.first, self.last)

    @property
    def own(self) -> slice:
        """The span's among them."""
        return slice(self.start - self.first, self.stop - self.first)

    @property
    def after(self) -> slice:
        """The frames that follow one of the span's."""
        return slice(self.start - self.first + 1, min(self.stop + 1, self.last) - self.first)


@dataclass
class TrajectorySystem:
    """A trajectory problem at a state, to be handed over in spans; adds up its cost on the way.

    cost: half the squared residuals of the spans asked for since it was set to zero, without the prior of the
    constants; expected: take the markers where the prior expects them, for the information (see marker_term).
    """

    problem: TrajectoryProblem
    state: Trajectory
    hidden: HiddenOutputs
    expected: bool = False
    cost: float = 0.0

    def part(self, start: int, stop: int) -> Part:
        """Frames of a span and one to either side."""
        return Part(start, stop, max(start - 1, 0), min(stop + 1, self.problem.frames))

    def __call__(self, start: int, stop: int) -> Span:
        """Give what the frames start … stop − 1 add to the information and its gradient."""
        problem = self.problem
        part = self.part(start, stop)
        count, size, constants = stop - start, problem.moving + self.hidden.count, problem.constants
        span = Span(
            np.zeros((count, size, size)),
            np.zeros((count, size, size)),
            np.zeros((count, size, constants)),
            np.zeros((count, size)),
            np.zeros((constants, constants)),
            np.zeros(constants),
        )
        for rows in self.rows(part):
            self._add(span, part, rows)
        self._add_motion(span, part)
        return span

    def rows(self, part: Part) -> list[Rows]:
        """Chains of residuals of all segments and joints that constrain, in this order."""
        problem, frames = self.problem, part.frames
        poses = self.state.poses[frames]
        angles, slope = angles_and_jacobians(problem.joints, poses)
        rows = [self._markers(index, part, angles, slope) for index in range(len(problem.segments))]
        for index, own in enumerate(problem.joint_slices):
            if own is not None:
                rows.append(self._joint(index, own, part, poses))
        return rows

    def _add(self, span: Span, part: Part, rows: Rows) -> None:
        white, now, past, moved = rows.whitened()
        own, after = part.own, part.after
        follow = after.stop - after.start
        self.cost += 0.5 * float((white[own] ** 2).sum())
        width = rows.jacobian.shape[-1]
        later, earlier = np.swapaxes(now[own], 1, 2), np.swapaxes(past[after], 1, 2)
        block = later @ now[own]
        block[:follow] += earlier @ past[after]
        span.diagonal[:, :width, :width] += block
        span.lower[:follow, :width, :width] -= np.swapaxes(now[after], 1, 2) @ past[after]
        pull = np.einsum("fnp,fn->fp", now[own], white[own])
        pull[:follow] -= np.einsum("fnp,fn->fp", past[after], white[after])
        span.gradient[:, :width] += pull
        if not rows.at.size:
            return
        mixed = later @ moved[own]
        mixed[:follow] -= earlier @ moved[after]
        span.coupling[:, :width, rows.at] += mixed
        flat = moved[own].reshape(-1, rows.at.size)
        assert span.constants_information is not None
        assert span.constants_gradient is not None
        span.constants_information[np.ix_(rows.at, rows.at)] += flat.T @ flat
        span.constants_gradient[rows.at] += flat.T @ white[own].reshape(-1)

    def _markers(self, index: int, part: Part, angles: FloatArray, angle_jacobian: FloatArray) -> Rows:
        """Markers of one segment against reference, prior mean and constants."""
        problem, state, frames = self.problem, self.state, part.frames
        segment, modes = problem.segments[index], problem.modes[index].modes
        changes = None if segment.changes is None else segment.changes[frames]
        segment = replace(segment, points=segment.points[frames], changes=changes)
        poses = state.poses[frames]
        count, markers = segment.points.shape[:2]
        n, at = 3 * markers, problem.constant_slices[index]
        inputs, input_jacobian = drive(segment, poses, angles, angle_jacobian)
        design = design_of(segment.artifact, inputs)
        weights = modes @ state.constants[at]
        points_bone = se3.transform_points(se3.inverse(poses[:, segment.index]), segment.points)
        residual = (points_bone - segment.reference).reshape(count, n)
        residual = residual - design.mean - design.features @ weights
        slope = design.mean_derivative
        if weights.size:
            slope = slope + np.einsum("fkjd,kn->fnjd", design.feature_derivative, weights, optimize=True)
        width = input_jacobian.shape[-1]
        through = np.zeros((count, n, width + self.hidden.count))
        through[..., :width] = -slope.reshape(count, n, -1) @ input_jacobian.reshape(count, -1, width)
        jacobian, first = through.copy(), 6 * segment.index
        place_of = np.nan_to_num(points_bone)
        if self.expected:
            mean = design.mean + design.features @ weights
            place_of = segment.reference + mean.reshape(count, markers, 3)
        jacobian[..., first : first + 6] -= marker_jacobian(place_of)
        constant = -(design.features @ modes.reshape(modes.shape[0], -1)).reshape(count, n, -1)
        place = self.hidden.column[index][frames]
        at_frame, at_output = np.nonzero(place >= 0)
        slots = place[at_frame, at_output]
        jacobian[at_frame, at_output] = through[at_frame, at_output] = 0.0
        constant[at_frame, at_output] = 0.0
        jacobian[at_frame, at_output, width + slots] = 1.0
        residual[at_frame, at_output] = state.hidden[frames][at_frame, slots]
        active = self.hidden.active[index][frames]
        residual[~active] = 0.0
        decay = np.where(self.hidden.restart[index][frames], 0.0, problem.decay(index))
        return Rows(
            residual=residual,
            jacobian=jacobian,
            through=through,
            constant=constant,
            at=np.arange(at.start, at.stop),
            decay=decay,
            whitener=self._marker_whitener(index, decay, design.growth),
            active=active,
        )

    def _marker_whitener(self, index: int, decay: FloatArray, growth: FloatArray | None) -> FloatArray:
        """Of the innovations at frames with the given decay, (F, n, n), or (1, n, n) where all are alike."""
        spread = self.problem.segments[index].artifact.residual + self.problem.modes[index].rest
        noise = self.problem.marker_sd**2 * np.eye(spread.shape[0])

        def innovation(decays: FloatArray, grown: FloatArray) -> FloatArray:
            square = (decays**2)[:, None, None]
            return np.asarray((1.0 - square) * grown + (1.0 + square) * noise)

        if growth is not None:
            return whitener(innovation(decay, spread + growth))
        values, which = np.unique(decay, return_inverse=True)
        factors = whitener(innovation(values, np.broadcast_to(spread, (values.size, *spread.shape))))
        return factors if values.size == 1 else factors[which]

    def _joint(self, index: int, own: slice, part: Part, poses: FloatArray) -> Rows:
        """Travel of one joint centre about its constant offset."""
        joint = self.problem.joints[index]
        sd = max(joint.travel_sd, BALL_JOINT_SD)
        travel, slope = joint_travel(joint, poses)
        frames = travel.shape[0]
        begins = np.arange(part.first, part.last) == 0
        decay = np.where(begins, 0.0, np.exp(-self.problem.step / JOINT_TIME))
        offset, left = np.sqrt(OFFSET_SHARE) * sd, np.sqrt((1.0 - OFFSET_SHARE) * (1.0 - decay**2)) * sd
        return Rows(
            residual=travel - offset * self.state.constants[own],
            jacobian=slope,
            through=None,
            constant=np.broadcast_to(-offset * np.eye(3), (frames, 3, 3)),
            at=np.arange(own.start, own.stop),
            decay=decay,
            whitener=np.eye(3) / left[:, None, None],
            active=np.ones(frames, dtype=bool),
        )

    def _add_motion(self, span: Span, part: Part) -> None:
        problem, state = self.problem, self.state
        self._hold(span, part)
        for index, motion in enumerate(problem.motions):
            at = problem.state(index, self.hidden.count)
            if part.start == 0:
                self._begin(span, index, at)
            frames = slice(part.first, part.last)
            if part.last - part.first < 2:
                continue
            term = motion_term(motion, state.poses[frames, index], state.rates[frames, index])
            precision = motion.precision
            pull = term.residual @ precision
            # Step i leads from local frame i to i + 1: into the span's frames, and out of them.
            into = slice(max(part.own.start - 1, 0), part.own.stop - 1)
            out = slice(part.own.start, part.after.stop - 1)
            follow, lead = out.stop - out.start, part.own.stop - part.own.start - (into.stop - into.start)
            self.cost += 0.5 * float((pull[into] * term.residual[into]).sum())
            grid = np.ix_(at, at)
            turned = np.swapaxes(term.after[into], 1, 2)
            span.diagonal[lead:, grid[0], grid[1]] += turned @ (precision @ term.after[into])
            span.gradient[lead:, at] += np.einsum("fab,fa->fb", term.after[into], pull[into])
            turned = np.swapaxes(term.before[out], 1, 2)
            weighed = precision @ term.before[out]
            span.diagonal[:follow, grid[0], grid[1]] += turned @ weighed
            span.gradient[:follow, at] += np.einsum("fab,fa->fb", term.before[out], pull[out])
            span.lower[:follow, grid[0], grid[1]] += np.swapaxes(term.after[out], 1, 2) @ weighed

    def _begin(self, span: Span, index: int, at: IntArray) -> None:
        """Prior of the rates in the first frame: says nothing, but lets a single frame have an answer."""
        order = self.problem.order
        weight = np.zeros(6 * order)
        weight[6:12] = 1.0 / RATE_SD**2
        if order == 3:
            weight[12:] = 1.0 / (50.0 * RATE_SD) ** 2
        start = np.concatenate([np.zeros(6), self.state.rates[0, index].reshape(-1)])
        span.diagonal[0][at, at] += weight
        span.gradient[0, at] += weight * start
        self.cost += 0.5 * float(weight @ start**2)

    def _hold(self, span: Span, part: Part) -> None:
        """Anchor the poses, and the hidden unknowns that no hidden output uses in a frame, which stay zero.

        The anchor holds a direction that nothing else does; it has no gradient and moves no optimum.
        """
        poses = np.arange(self.problem.poses)
        span.diagonal[:, poses, poses] += min(ANCHOR, WHOLE_ANCHOR / self.problem.frames)
        own = slice(part.start, part.stop)
        for slot in range(self.hidden.count):
            used = np.any([(column[own] == slot).any(axis=1) for column in self.hidden.column], axis=0)
            place = self.problem.poses + slot
            span.diagonal[~used, place, place] = 1.0

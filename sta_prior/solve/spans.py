"""All terms of a trajectory problem at a given state, a span of frames at a time.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: solve/trajectory.py; what becomes
of the spans: solve/chain.py.
"""

from __future__ import annotations

import math
import weakref
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from sta_prior.checks import FloatArray, IntArray
from sta_prior.prior.interface import Design, design_of, time_scales_of
from sta_prior.solve import span_kernels as kernels
from sta_prior.solve.chain import Span
from sta_prior.solve.chain_kernels import LETTERS, NUMBERS
from sta_prior.solve.motion_kernels import add_motion
from sta_prior.solve.rows import Rows, fast_part, whitener
from sta_prior.solve.terms import (
    BALL_JOINT_SD,
    SegmentProblem,
    angles_and_jacobians,
    drive,
    joint_travel,
    segment_at,
)
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


class SpanMemory:
    """Memory for spans, given again once nobody holds what was given: new memory costs as much as filling it.

    Two are kept, as one span is used while the next is made.
    """

    def __init__(self) -> None:
        self._kept: list[tuple[FloatArray, weakref.ref[FloatArray]]] = []

    def __call__(self, count: int, states: int, constants: int) -> Span:
        """Span of zeros, without the constants' own part."""
        square = (count, states, states)
        shapes = (square, square, (count, states, constants), (count, states))
        ends = np.cumsum([math.prod(shape) for shape in shapes])
        pieces = np.split(self._zeros(int(ends[-1])), ends[:-1])
        blocks = [piece.reshape(shape) for piece, shape in zip(pieces, shapes, strict=True)]
        return Span(blocks[0], blocks[1], blocks[2], blocks[3])

    def _zeros(self, size: int) -> FloatArray:
        free = [memory for memory, given in self._kept if given() is None and memory.size >= size]
        memory = free[-1] if free else np.empty(size)
        # Its views refer to this array, and not to the memory, which to it is a buffer.
        array: FloatArray = np.frombuffer(memory.data, count=size)
        array[:] = 0.0
        others = [kept for kept in self._kept if kept[0] is not memory]
        self._kept = [*others[-1:], (memory, weakref.ref(array))]
        return array


@dataclass
class TrajectorySystem:
    """A trajectory problem at a state, to be handed over in spans; adds up its cost on the way.

    cost: half the squared residuals of the spans asked for since it was set to zero, without the prior of the
    constants; marker_cost: the markers' part of it; expected: take the markers where the prior expects them,
    for the information (see marker_term); held: the state at which the covariance is taken where it follows
    the angles, by default the same; grows: whether it does in a span asked for so far.
    """

    problem: TrajectoryProblem
    state: Trajectory
    hidden: HiddenOutputs
    expected: bool = False
    held: Trajectory | None = None
    grows: bool = False
    cost: float = 0.0
    marker_cost: float = 0.0
    _memory: SpanMemory = field(default_factory=SpanMemory, repr=False)

    def part(self, start: int, stop: int) -> Part:
        """Frames of a span and one to either side."""
        return Part(start, stop, max(start - 1, 0), min(stop + 1, self.problem.frames))

    def __call__(self, start: int, stop: int) -> Span:
        """Give what the frames start … stop − 1 add to the information and its gradient."""
        problem = self.problem
        part = self.part(start, stop)
        span = self._memory(stop - start, problem.moving + self.hidden.count, problem.constants)
        information, gradient = np.zeros((problem.constants, problem.constants)), np.zeros(problem.constants)
        for rows in self.rows(part):
            own, pull = self._add(span, part, rows)
            information[rows.at, rows.at] += own
            gradient[rows.at] += pull
        self._add_motion(span, part)
        return span._replace(constants_information=information, constants_gradient=gradient)

    def rows(self, part: Part) -> list[Rows]:
        """Chains of residuals of all segments and joints that constrain, in this order."""
        problem, frames = self.problem, part.frames
        poses = self.state.poses[frames]
        angles, slope = angles_and_jacobians(problem.joints, poses)
        rows = [self._markers(index, part, angles, slope) for index in range(len(problem.segments))]
        for index, own in enumerate(self._constants[1]):
            if own is not None:
                rows.append(self._joint(index, own, part, poses))
        return rows

    def _add(self, span: Span, part: Part, rows: Rows) -> tuple[FloatArray, FloatArray]:
        """Add rows to the frames' blocks; give the information and gradient of their own constants."""
        white, own, follow = rows.white, part.own, part.after
        size, outputs, count = rows.modes.shape
        cost = 0.5 * float((white[own] ** 2).sum())
        self.cost += cost
        self.marker_cost += cost if rows.through is not None else 0.0
        if rows.alike:
            # The constants' share has sums over features instead of outputs.
            once, turned = rows.prewhitened, rows.turned(int(rows.which[0]))
            twice = once[own].copy()
            twice[: follow.stop - follow.start] -= rows.decay[follow, None] * once[follow]
            moved = np.empty((kernels.BLOCK, outputs, count))
            tall = turned.reshape(size * outputs, count)
            information = tall.T @ ((once[own].T @ once[own]) @ turned).reshape(tall.shape)
            gradient = tall.T @ (once[own].T @ white[own]).reshape(-1)
        else:
            twice, turned, moved = np.zeros((0, 0)), np.zeros((0, 0)), rows.moved
            flat = moved[own].reshape(white[own].size, count)
            information, gradient = flat.T @ flat, flat.T @ white[own].reshape(-1)
        room = kernels.room(rows.jacobian.shape[1:], count, span.coupling.shape[1:], size)
        chain = (rows.decay, rows.whiteners, rows.which, own.start, rows.at.start)
        kernels.add_rows(
            rows.jacobian, white, moved, twice, turned, *chain, *span[:4], *room, LETTERS, NUMBERS
        )
        return information, gradient

    def _markers(self, index: int, part: Part, angles: FloatArray, angle_jacobian: FloatArray) -> Rows:
        """Markers of one segment against reference, prior mean and constants."""
        problem, state, frames = self.problem, self.state, part.frames
        segment, modes = problem.segments[index], problem.modes[index].modes
        segment = segment_at(segment, frames)
        poses, at = state.poses[frames], self._constants[0][index]
        inputs, input_jacobian = drive(segment, poses, angles, angle_jacobian)
        design = design_of(segment.artifact, inputs)
        weights = modes @ state.constants[at]
        count, n, width = *design.mean.shape, input_jacobian.shape[-1]
        place, active = self.hidden.column[index][frames], self.hidden.active[index][frames]
        residual, jacobian = np.zeros((count, n)), np.zeros((count, n, width + self.hidden.count))
        through = np.zeros_like(jacobian)
        kernels.marker_rows(
            np.ascontiguousarray(poses[:, segment.index]),
            np.ascontiguousarray(segment.points),
            segment.reference,
            design.mean + design.features @ weights,
            design.mean,
            np.ascontiguousarray(design.mean_derivative.reshape(count, n, -1)),
            np.ascontiguousarray(
                design.feature_derivative.reshape(count, modes.shape[0], 3 * inputs.shape[1])
            ),
            weights,
            np.ascontiguousarray(input_jacobian.reshape(count, -1, width)),
            place,
            state.hidden[frames],
            active,
            6 * segment.index,
            self.expected,
            residual,
            jacobian,
            through,
        )
        decay = np.where(self.hidden.restart[index][frames], 0.0, problem.decay(index))
        growth = self._growth(segment, design, frames)
        whiteners, which = self._marker_whiteners(index, decay, growth)
        which, decay = np.where(active, which, -1), np.where(active, decay, 0.0)
        return Rows(
            *(residual, jacobian, through, design.features, modes, place >= 0, at, decay, whiteners, which)
        )

    def _growth(self, segment: SegmentProblem, design: Design, frames: slice) -> FloatArray | None:
        """Growth of the covariance at the state held, (F, n, n); None where nothing grows."""
        self.grows |= design.growth is not None
        if self.held is None:
            return design.growth
        poses = self.held.poses[frames]
        inputs, _ = drive(segment, poses, *angles_and_jacobians(self.problem.joints, poses))
        return design_of(segment.artifact, inputs).growth

    def _marker_whiteners(
        self, index: int, decay: FloatArray, growth: FloatArray | None
    ) -> tuple[FloatArray, IntArray]:
        """Of the innovations at frames with the given decay, (U, n, n), and which is whose, (F,)."""
        if growth is None:
            return self._usual_whiteners[index], (decay == 0.0).astype(np.int64)
        return self._whiteners(index, decay, growth), np.arange(decay.size)

    def _whiteners(self, index: int, decay: FloatArray, growth: FloatArray) -> FloatArray:
        spread = self.problem.segments[index].artifact.residual + self.problem.modes[index].rest
        square = (decay**2)[:, None, None]
        fast, white = fast_part(time_scales_of(self.problem.segments[index].artifact), self.problem.step)
        noise = self.problem.marker_sd**2 * np.eye(spread.shape[0]) + white * spread
        return whitener((1.0 - square) * ((1.0 - fast) * spread + growth) + (1.0 + square) * noise)

    @cached_property
    def _usual_whiteners(self) -> list[FloatArray]:
        """By segment, within a chain and where one begins, (2, n, n)."""
        count = range(len(self.problem.segments))
        return [self._whiteners(i, np.array([self.problem.decay(i), 0.0]), np.zeros((1, 1))) for i in count]

    @cached_property
    def _constants(self) -> tuple[list[slice], list[slice | None]]:
        """Places of the segments' and of the joints' among the constants."""
        return self.problem.constant_slices, self.problem.joint_slices

    def _joint(self, index: int, own: slice, part: Part, poses: FloatArray) -> Rows:
        """Travel of one joint centre about its constant offset."""
        joint = self.problem.joints[index]
        sd = max(joint.travel_sd, BALL_JOINT_SD)
        travel, slope = joint_travel(joint, poses)
        begins = np.arange(part.first, part.last) == 0
        decays = np.array([np.exp(-self.problem.step / JOINT_TIME), 0.0])
        offset, left = np.sqrt(OFFSET_SHARE) * sd, np.sqrt((1.0 - OFFSET_SHARE) * (1.0 - decays**2)) * sd
        which = begins.astype(np.int64)
        return Rows(
            residual=travel - offset * self.state.constants[own],
            jacobian=slope,
            through=None,
            features=np.ones((which.size, 1)),
            modes=offset * np.eye(3)[None],
            hidden=np.zeros(travel.shape, dtype=bool),
            at=own,
            decay=decays[which],
            whiteners=np.eye(3) / left[:, None, None],
            which=which,
        )

    def _add_motion(self, span: Span, part: Part) -> None:
        """Motion priors of all segments, and what holds the first rates and the unknowns without rows."""
        problem, state = self.problem, self.state
        self._hold(span, part)
        for index, motion in enumerate(problem.motions):
            at = problem.state(index, self.hidden.count)
            if part.start == 0:
                self._begin(span, index, at)
            poses = np.ascontiguousarray(state.poses[part.frames, index])
            rates = np.ascontiguousarray(state.rates[part.frames, index])
            self.cost += add_motion(
                poses,
                rates,
                motion.transition,
                motion.precision,
                1.0 / motion.density,
                part.own.start,
                self.expected,
                at[::6].copy(),
                span.diagonal,
                span.lower,
                span.gradient,
                np.array([at.size, 2 * at.size]),
                LETTERS,
                NUMBERS,
            )

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

"""What the smoother reports, span by span, from the covariances at the optimum.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Literal, cast

import numpy as np

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.prior.interface import design_of
from sta_prior.solve.chain_marginals import Marginals, marginal_spans
from sta_prior.solve.constants import Lumped
from sta_prior.solve.frame import MARKER_SD
from sta_prior.solve.posterior import (
    SOURCES,
    UNDETERMINED,
    FrameSolution,
    conflict_of,
    describe_joints,
    join,
    variance_along,
)
from sta_prior.solve.rows import Rows
from sta_prior.solve.smoother import CONSTANT_TIME, Smoothed, make_problem, smooth
from sta_prior.solve.spans import TrajectorySystem
from sta_prior.solve.terms import (
    JointProblem,
    Linearised,
    SegmentProblem,
    angles_and_jacobians,
    drive,
    marker_term,
    segment_at,
)

Constants = Literal["bounded", "full", "none"]
CONSTANTS: tuple[str, ...] = ("bounded", "full", "none")

MARKERS, PRIOR, JOINT, MOTION = range(len(SOURCES))


def solve_trajectory(
    segments: list[SegmentProblem],
    joints: list[JointProblem],
    start: FloatArray,
    time_step: float,
    marker_sd: float = MARKER_SD,
    constants: Constants = "bounded",
    order: int = 2,
) -> FrameSolution:
    """Smooth a trial: maximum a posteriori over all frames, with posterior covariance.

    Parameters
    ----------
    segments, joints : as for `solve_frames`
    start : shape (F, S, 4, 4), lab ← bone, finite (see bridge)
    time_step : s
    marker_sd : instrument noise of a marker, m
    constants : "bounded" (the default) takes at most CONSTANT_TIME of information about the trial-constant
        unknowns, "full" all, "none" counts them as residual
    order : 2 for white noise on acceleration, 3 on jerk
    """
    if constants == "none":
        segments = [replace(segment, artifact=Lumped(segment.artifact)) for segment in segments]
    problem = make_problem(segments, joints, start, time_step, marker_sd, order)
    limit = math.inf if constants == "full" else CONSTANT_TIME
    return describe_trajectory(smooth(problem, start, limit))


def describe_trajectory(smoothed: Smoothed) -> FrameSolution:
    """Turn a smoothed trial into everything that is reported.

    Parameters
    ----------
    smoothed : from `smooth`

    Notes
    -----
    Angles, travel and artifact carry the share of the trial-constant unknowns. The information of frame t
    about its poses is split over the sources row by row: with C the covariance of everything and G the rows
    of a source, its share is diag(C Gᵀ W G) over the frame's poses; what is left to 1 is motion's.
    """
    problem, hidden = smoothed.problem, smoothed.hidden
    system = TrajectorySystem(problem, smoothed.state, hidden, expected=True)
    leading = problem.poses + hidden.count
    pieces: list[FrameSolution] = []
    part: Marginals | None = None
    # Spans come last first; what leads into one is known with the span before it.
    for before in marginal_spans(
        smoothed.factor, smoothed.constants, leading, lagged=True, with_constants=True
    ):
        if part is not None:
            pieces.append(_describe(smoothed, system, part, before))
        part = before
    if part is not None:
        pieces.append(_describe(smoothed, system, part, None))
    return join(pieces[::-1])


def _describe(
    smoothed: Smoothed,
    system: TrajectorySystem,
    part: Marginals,
    before: Marginals | None,
) -> FrameSolution:
    problem, state = smoothed.problem, smoothed.state
    frames, count = slice(part.start, part.stop), len(problem.segments)
    poses = state.poses[frames]
    covariance = part.covariance[:, : problem.poses, : problem.poses]
    sd = np.sqrt(np.einsum("fxx->fx", covariance)).reshape(-1, count, 6)
    determined: BoolArray = np.asarray((sd < UNDETERMINED).all(axis=2) & smoothed.fixed)
    angles, slope = angles_and_jacobians(problem.joints, poses)
    shown, angle_sd, travel, travel_sd = describe_joints(
        problem.joints, poses, angles, slope, covariance, determined
    )
    artifact, artifact_sd = [], []
    conflict = np.full((poses.shape[0], count), np.nan)
    freedom = np.zeros_like(conflict)
    for index, segment in enumerate(problem.segments):
        here = segment_at(segment, frames)
        seen = determined[:, segment.index]
        term = marker_term(here, poses, angles, slope, problem.marker_sd)
        mean, spread = _artifact(smoothed, index, here, part, term, (angles, slope))
        artifact.append(np.where(seen[:, None], mean, np.nan))
        artifact_sd.append(np.where(seen[:, None], spread, np.nan))
        conflict[:, segment.index], freedom[:, segment.index] = conflict_of(term, segment.index, seen)
    share = _shares(problem.poses, system, part, before).reshape(-1, count, 6, len(SOURCES))
    return FrameSolution(
        poses=np.where(determined[..., None, None], poses, np.nan),
        covariance=covariance,
        angles=shown,
        angle_sd=angle_sd,
        travel=travel,
        travel_sd=travel_sd,
        artifact=artifact,
        artifact_sd=artifact_sd,
        share=np.where(determined[..., None, None], share, np.nan),
        conflict=conflict,
        conflict_freedom=freedom,
        determined=determined,
        iterations=smoothed.iterations,
        stop_reason=smoothed.stop_reason,
        misfit=smoothed.misfit,
    )


def _artifact(
    smoothed: Smoothed,
    index: int,
    segment: SegmentProblem,
    part: Marginals,
    term: Linearised,
    angles: tuple[FloatArray, FloatArray],
) -> tuple[FloatArray, FloatArray]:
    """Posterior mean and SD of a segment's artifact, hidden markers included, (F, n) m.

    What is seen: d = T⁻¹y − a − instrument noise. What is hidden: d = μ(q) + Z(q)Vu + r with r an unknown of
    the frame, or, where a segment is out of view for long, r as the prior has it.
    """
    problem, state, frames = smoothed.problem, smoothed.state, slice(part.start, part.stop)
    poses, modes, at = state.poses[frames], problem.modes[index].modes, problem.constant_slices[index]
    inputs, slope = drive(segment, poses, *angles)
    design = design_of(segment.artifact, inputs)
    weights = modes @ state.constants[at]
    count, n = design.mean.shape
    expected = design.mean + design.features @ weights
    bend = design.mean_derivative + np.einsum("fkjd,kn->fnjd", design.feature_derivative, weights)
    pose_slope = bend.reshape(count, n, -1) @ slope.reshape(count, -1, problem.poses)
    seen, place = term.seen, smoothed.hidden.column[index][frames]
    # Hidden: derivative of d in poses, hidden unknowns and constants.
    leading = part.states.shape[-1]
    along = np.zeros((count, n, leading))
    along[..., : problem.poses] = np.where(seen[..., None], -term.lever, pose_slope)
    rest = np.zeros((count, n))
    at_frame, at_output = np.nonzero(place >= 0)
    slots = place[at_frame, at_output]
    along[at_frame, at_output, problem.poses + slots] = 1.0
    rest[at_frame, at_output] = state.hidden[frames][at_frame, slots]
    flat = modes.reshape(modes.shape[0], n * modes.shape[2])
    fan = (design.features @ flat).reshape(count, n, modes.shape[2])
    fan = np.where(seen[..., None], 0.0, fan)
    cross = cast(FloatArray, part.with_constants)[:, :, at]
    own = smoothed.constants.covariance[at, at]
    variance = variance_along(along, part.covariance)
    variance += 2.0 * np.einsum("fnl,flc,fnc->fn", along, cross, fan, optimize=True)
    variance += np.einsum("fnc,cd,fnd->fn", fan, own, fan, optimize=True)
    spread = np.diag(segment.artifact.residual + problem.modes[index].rest)
    alone = ~seen & (place < 0)
    variance += np.where(alone, spread, 0.0)
    noise = problem.marker_sd**2
    variance += np.where(seen, noise * spread / (spread + noise), 0.0)
    gained = np.where(seen, term.residual + term.mean, expected + rest)
    return gained, np.sqrt(np.maximum(variance, 0.0))


def _shares(poses: int, system: TrajectorySystem, part: Marginals, before: Marginals | None) -> FloatArray:
    """Part of the information about every pose component by source, (F, 6S, sources)."""
    reach = system.part(part.start, part.stop)
    own, follow = reach.own, reach.after
    count = own.stop - own.start
    result = np.zeros((count, poses, len(SOURCES)))
    for rows in system.rows(reach):
        _, now, past, moved = rows.whitened()
        source = MARKERS if rows.through is not None else JOINT
        parts = [(now, past, source)]
        if rows.through is not None:
            lever = rows.derivatives(rows.jacobian - rows.through)
            through = rows.derivatives(rows.through)
            parts = [(*lever, MARKERS), (*through, PRIOR)]
        pull_now, pull_past = _pulls(rows, now, past, moved, part, before, own, follow)
        for at_now, at_past, kind in parts:
            result[..., kind] += np.einsum("fxn,fnx->fx", pull_now[:, :poses], at_now[own][..., :poses])
            result[: pull_past.shape[0], :, kind] -= np.einsum(
                "fxn,fnx->fx", pull_past[:, :poses], at_past[follow][..., :poses]
            )
    result[..., MOTION] = 1.0 - result.sum(axis=-1)
    return result


def _pulls(
    rows: Rows,
    now: FloatArray,
    past: FloatArray,
    moved: FloatArray,
    part: Marginals,
    before: Marginals | None,
    own: slice,
    follow: slice,
) -> tuple[FloatArray, FloatArray]:
    """C Gᵀ of a frame's own rows and of the next frame's, (F, m, n) each, over the frame's leading unknowns.

    A row is G = (now at its frame, −past at the frame before, moved in the constants).
    """
    lagged = cast(FloatArray, part.lagged)
    width = now.shape[-1]
    covariance = part.covariance[:, :, :width]
    # cov(x_t, x_{t+1}), and cov(x_t, x_{t−1}).
    ahead = lagged[: follow.stop - follow.start, :, :width]
    behind = np.zeros((*part.covariance.shape[:2], width))
    behind[1:] = np.swapaxes(lagged[: behind.shape[0] - 1], 1, 2)[..., :width]
    if before is not None and before.lagged is not None:
        behind[0] = before.lagged[-1].T[:, :width]
    cross = cast(FloatArray, part.with_constants)[:, :, rows.at]
    pull_now = covariance @ np.swapaxes(now[own], 1, 2) - behind @ np.swapaxes(past[own], 1, 2)
    pull_now += cross @ np.swapaxes(moved[own], 1, 2)
    reach = follow.stop - follow.start
    pull_past = ahead @ np.swapaxes(now[follow], 1, 2)
    pull_past -= covariance[:reach] @ np.swapaxes(past[follow], 1, 2)
    pull_past += cross[:reach] @ np.swapaxes(moved[follow], 1, 2)
    return pull_now, pull_past

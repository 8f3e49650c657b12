"""Maximum a posteriori trajectories: all frames of a trial together, with posterior covariance.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: solve/trajectory.py.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.prior.interface import design_of
from sta_prior.rigid import fit_poses
from sta_prior.solve.chain import ChainFactor, ConstantsPosterior, bounded_constants, factor, step
from sta_prior.solve.constants import reduce_constants
from sta_prior.solve.motion import first_rates, make_motion
from sta_prior.solve.posterior import UNDETERMINED
from sta_prior.solve.relaxation import relaxation
from sta_prior.solve.spans import TrajectorySystem
from sta_prior.solve.terms import (
    ANCHOR,
    JointProblem,
    SegmentProblem,
    angles_and_jacobians,
    assemble,
    drive,
    segment_at,
)
from sta_prior.solve.trajectory import HiddenOutputs, Trajectory, TrajectoryProblem, moved, place_hidden

CONSTANT_TIME = 1.0
"""Longest stretch of a trial whose information about the trial-constant unknowns counts in full, s."""

TOLERANCE = 1e-7
MAXIMUM_ITERATIONS = 40
LOOKED_AT = 200
"""Frames of a trial, evenly spread, that tell whether its markers fix a pose at all."""

_SHORTEST, _LENGTHS = 1e-3, (0.2, 4.0)


@dataclass(frozen=True)
class Smoothed:
    """Optimum of a trajectory problem.

    problem, hidden, state; fixed: (S,) segments that the markers and joints fix at all; factor, constants: of
    the information at the optimum, constants by bounded information; misfit: mean square of what the markers'
    innovations are in their predicted SDs, 1 where the prior's residual moves as the markers do; iterations,
    stop_reason.
    """

    problem: TrajectoryProblem
    hidden: HiddenOutputs
    state: Trajectory
    fixed: BoolArray
    factor: ChainFactor
    constants: ConstantsPosterior
    misfit: float
    iterations: int
    stop_reason: str


def fixed_by_markers(problem: TrajectoryProblem, look: FloatArray) -> BoolArray:
    """Segments whose pose the markers and joints fix in the average frame, shape (S,); look: (F, S, 4, 4).

    The motion prior carries a pose over frames that lack markers. It must not fix a direction that no marker
    fixes in any frame: the innovations of a turning bone depend on how its axes lie, and would seem to.
    """
    frames = np.unique(np.linspace(0, problem.frames - 1, LOOKED_AT).round().astype(np.int64))
    poses = look[frames]
    here = [segment_at(segment, frames) for segment in problem.segments]
    information = assemble(here, problem.joints, poses, problem.marker_sd).information.mean(axis=0)
    covariance = np.linalg.inv(information + ANCHOR * np.eye(problem.poses))
    sd = np.sqrt(np.diag(covariance)).reshape(-1, 6)
    return np.asarray((sd < UNDETERMINED).all(axis=1))


def make_problem(
    segments: list[SegmentProblem],
    joints: list[JointProblem],
    start: FloatArray,
    time_step: float,
    marker_sd: float,
    order: int = 2,
) -> TrajectoryProblem:
    """Reduce the constants and estimate the motion priors from a first look, start (F, S, 4, 4)."""
    angles, slope = angles_and_jacobians(joints, start)
    modes = []
    for segment in segments:
        inputs, _ = drive(segment, start, angles, slope)
        features = design_of(segment.artifact, inputs).features
        covariance = segment.artifact.constant_covariance
        modes.append(reduce_constants(covariance, features, segment.reference.size))
    # From what a segment's own markers show: a bridged pose stands still where nothing was seen.
    looks = [fit_poses(segment.reference, segment.points).pose for segment in segments]
    motions = [make_motion(look, time_step, order) for look in looks]
    return TrajectoryProblem(segments, joints, motions, modes, time_step, marker_sd)


def begin(problem: TrajectoryProblem, hidden: HiddenOutputs, start: FloatArray) -> Trajectory:
    """State to begin the iteration from."""
    rates = np.stack(
        [first_rates(start[:, s.index], problem.step, problem.order) for s in problem.segments], axis=1
    )
    nothing = np.zeros((problem.frames, hidden.count))
    return Trajectory(start.copy(), rates, nothing, np.zeros(problem.constants))


def _left_over(problem: TrajectoryProblem) -> float:
    """Measured values less those that the poses themselves can follow, six a segment and frame."""
    seen = [np.isfinite(segment.points).sum(axis=(1, 2)) for segment in problem.segments]
    return float(sum(np.maximum(values - 6, 0).sum() for values in seen))


def smooth(problem: TrajectoryProblem, start: FloatArray, constant_time: float = CONSTANT_TIME) -> Smoothed:
    """Maximum a posteriori trajectory by Gauss-Newton with step control.

    Parameters
    ----------
    problem : from make_problem
    start : shape (F, S, 4, 4), lab ← bone, finite
    constant_time : s; information about the constants is divided by κ = max(1, duration/constant_time), so
        that a trial teaches no more of them than so long a stretch does; infinite for all of it

    Notes
    -----
    With bounded information the constants minimise ½|u|² + cost(x, u)/κ and the poses the cost itself given
    them; P = A⁻¹ + A⁻¹B S⁻¹ BᵀA⁻¹ with S = 1 + H/κ is then the spread of the poses. At κ = 1 both are the
    model's own posterior.

    References
    ----------
    Bell (1994), SIAM J Optim 4, 626–636 (iterated smoother and Gauss-Newton; from memory).
    """
    hidden = place_hidden(problem)
    bound = max(1.0, problem.frames * problem.step / constant_time)
    state = begin(problem, hidden, start)
    fixed = fixed_by_markers(problem, start)
    judged = np.flatnonzero(np.repeat(fixed, 6))

    def solved(at: Trajectory, held: Trajectory | None = None) -> tuple[float, ChainFactor, bool]:
        system = TrajectorySystem(problem, at, hidden, held=held)
        found = factor(system, problem.frames)
        return system.cost / bound + 0.5 * float(at.constants @ at.constants), found, system.grows

    merit, system, grows = solved(state)
    posterior = bounded_constants(system, bound)
    made = before = np.full((1, problem.frames * judged.size), np.nan)
    reason, iterations = f"not converged in {MAXIMUM_ITERATIONS} iterations", 0
    while iterations < MAXIMUM_ITERATIONS:
        iterations += 1
        change = step(system, posterior, state.constants)
        # A pose that nothing fixes may wander: it is not reported.
        full = change.states[:, judged].reshape(1, -1)
        # Curvature that Gauss-Newton leaves out makes it crawl or swing along one direction.
        length = float(np.clip(relaxation(made, before - full)[0], *_LENGTHS))
        while True:
            ahead = moved(problem, state, length * change.states, length * change.constants)
            # A covariance that follows the angles is held while steps are compared.
            value, there, now = solved(ahead, state if grows else None)
            if value <= merit * (1.0 + 1e-10) or length < _SHORTEST:
                break
            length *= 0.5
        before, made = full, length * full
        size = float(np.abs(full).max(initial=0.0))
        state, merit, system, grows = ahead, value, there, grows or now
        if grows:
            merit, system, _ = solved(state)
        posterior = bounded_constants(system, bound)
        if size < TOLERANCE:
            reason = f"step below {TOLERANCE:g} rad and m in every frame"
            break
    # Steps see the markers where they are, the information where the prior expects them.
    final = TrajectorySystem(problem, state, hidden, expected=True)
    informed = factor(final, problem.frames)
    misfit = 2.0 * final.marker_cost / max(_left_over(problem), 1.0)
    constants = bounded_constants(informed, bound)
    return Smoothed(problem, hidden, state, fixed, informed, constants, misfit, iterations, reason)

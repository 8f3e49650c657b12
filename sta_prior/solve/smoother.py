"""Maximum a posteriori trajectories: all frames of a trial together, with posterior covariance.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: solve/trajectory.py.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.interface import design_of
from sta_prior.rigid import fit_poses
from sta_prior.solve.chain import ChainFactor, ConstantsPosterior, bounded_constants, factor, step
from sta_prior.solve.constants import reduce_constants
from sta_prior.solve.motion import first_rates, make_motion
from sta_prior.solve.relaxation import relaxation
from sta_prior.solve.spans import TrajectorySystem
from sta_prior.solve.terms import JointProblem, SegmentProblem, angles_and_jacobians, drive
from sta_prior.solve.trajectory import HiddenOutputs, Trajectory, TrajectoryProblem, moved, place_hidden

CONSTANT_TIME = 1.0
"""Longest stretch of a trial whose information about the trial-constant unknowns counts in full, s."""

TOLERANCE = 1e-7
MAXIMUM_ITERATIONS = 40
_SHORTEST, _LONGEST = 1e-3, 4.0


@dataclass(frozen=True)
class Smoothed:
    """Optimum of a trajectory problem.

    problem, hidden, state; factor, constants: of the information at the optimum, constants by bounded
    information; misfit: mean square of what the markers' innovations are in their predicted SDs, 1 where the
    prior's residual moves as the markers do; iterations, stop_reason.
    """

    problem: TrajectoryProblem
    hidden: HiddenOutputs
    state: Trajectory
    factor: ChainFactor
    constants: ConstantsPosterior
    misfit: float
    iterations: int
    stop_reason: str


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
    """Maximum a posteriori trajectory by Gauss-Newton with step control."""
    hidden = place_hidden(problem)
    bound = max(1.0, problem.frames * problem.step / constant_time)
    state = begin(problem, hidden, start)

    def solved(at: Trajectory, held: Trajectory | None = None) -> tuple[float, ChainFactor, bool]:
        system = TrajectorySystem(problem, at, hidden, held=held)
        found = factor(system, problem.frames)
        return system.cost / bound + 0.5 * float(at.constants @ at.constants), found, system.grows

    merit, system, grows = solved(state)
    posterior = bounded_constants(system, bound)
    made = before = np.full((1, problem.frames * 6 * len(problem.segments)), np.nan)
    reason, iterations = f"not converged in {MAXIMUM_ITERATIONS} iterations", 0
    while iterations < MAXIMUM_ITERATIONS:
        iterations += 1
        change = step(system, posterior, state.constants)
        full = change.states[:, : 6 * len(problem.segments)].reshape(1, -1)
        # Curvature that Gauss-Newton leaves out makes it crawl along one direction: lengthen the step there.
        length = float(np.clip(relaxation(made, before - full)[0], 1.0, _LONGEST))
        while True:
            ahead = moved(problem, state, length * change.states, length * change.constants)
            # A covariance that follows the angles is held while steps are compared.
            value, there, now = solved(ahead, state if grows else None)
            if value <= merit * (1.0 + 1e-10) or length < _SHORTEST:
                break
            length *= 0.5
        before, made = full, length * full
        size = float(np.abs(full).max())
        state, merit, system, grows = ahead, value, there, grows or now
        if grows:
            merit, system, _ = solved(state)
        posterior = bounded_constants(system, bound)
        if length >= 1.0 and size < TOLERANCE:
            reason = f"step below {TOLERANCE:g} rad and m in every frame"
            break
    # Steps see the markers where they are, the information where the prior expects them.
    final = TrajectorySystem(problem, state, hidden, expected=True)
    informed = factor(final, problem.frames)
    misfit = 2.0 * final.marker_cost / max(_left_over(problem), 1.0)
    constants = bounded_constants(informed, bound)
    return Smoothed(problem, hidden, state, informed, constants, misfit, iterations, reason)

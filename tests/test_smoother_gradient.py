"""Gradient of a whole trajectory problem against differences of its cost; spans of any length."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from differences import STEP as DIFFERENCE
from made_problems import made_artifact
from made_trajectories import MadeTrial, Widened, dense_from, made_trial, wobbled

from sta_prior.checks import FloatArray, IntArray
from sta_prior.prior.interface import Artifact
from sta_prior.prior.time_scales import TimeScales
from sta_prior.solve.chain import Span
from sta_prior.solve.smoother import smooth
from sta_prior.solve.spans import TrajectorySystem
from sta_prior.solve.trajectory import Trajectory, TrajectoryProblem, moved, place_hidden

FRAMES = 10
BOUND = 2.5


def three_segments(frames: int = FRAMES) -> MadeTrial:
    """Markers hidden here and there, the shank out of view twice, the second time for long; the thigh's
    artifact grows where the knee bends further than in half of the frames.
    """
    hidden = np.zeros((frames, 11), dtype=bool)
    hidden[0, 0] = hidden[2:4, 1] = hidden[5, 9] = hidden[-1, 3] = True
    hidden[2:4, 4:8] = hidden[6:9, 4:8] = True
    rng = np.random.default_rng(11)
    artifacts: list[Artifact] = [made_artifact(rng, 4, [0]), made_artifact(rng, 4, [0, 1])]
    artifacts.append(made_artifact(rng, 3, [1]))
    artifacts[0] = Widened(artifacts[0], 0.6, np.diag(np.linspace(1e-6, 3e-5, 12)))
    # Forgotten after 2.3 frames: the second time out of view begins a new chain, the first one does not.
    artifacts[1] = replace(artifacts[1], time_scales=TimeScales.single(0.005))
    return made_trial(12, 3, frames, hidden=hidden, artifacts=artifacts)


def soft(problem: TrajectoryProblem, density: float) -> TrajectoryProblem:
    """The same with motion priors that are not short of time: a trial this short tells them nothing."""
    motions = [replace(motion, density=np.full(6, density)) for motion in problem.motions]
    return replace(problem, motions=motions)


def slowed(state: Trajectory, rate: float) -> Trajectory:
    """The same poses with small random rates."""
    rng = np.random.default_rng(13)
    return replace(state, rates=rate * rng.standard_normal(state.rates.shape))


def merit(problem: TrajectoryProblem, state: Trajectory) -> float:
    """Cost with the bounded prior of the constants, times the bound."""
    system = TrajectorySystem(problem, state, place_hidden(problem))
    system(0, problem.frames)
    return system.cost + 0.5 * BOUND * float(state.constants @ state.constants)


@dataclass(frozen=True)
class Compared:
    """Derivatives of the merit along random directions, from the gradient and by central differences.

    floor: what rounding of the merit makes of a difference.
    """

    got: FloatArray
    wanted: FloatArray
    floor: float


def compared(problem: TrajectoryProblem, state: Trajectory) -> dict[str, Compared]:
    """By kind of unknown: two directions over all of that kind in each frame."""
    hidden = place_hidden(problem)
    width = problem.moving + hidden.count
    states = problem.frames * width
    _, gradient = dense_from(TrajectorySystem(problem, state, hidden)(0, problem.frames), problem.frames)
    gradient[states:] += BOUND * state.constants
    rng = np.random.default_rng(19)
    floor = 8.0 * float(np.finfo(np.float64).eps) * merit(problem, state) / DIFFERENCE
    found = {}
    for name, own in kinds(problem, hidden.count).items():
        # Rates move the innovations by far less than a step of the pose does.
        size = 10.0 if name == "rates" else 1.0
        got, wanted = [], []
        for places in np.repeat(own, 2, 0):
            direction = np.zeros(gradient.size)
            direction[places] = rng.standard_normal(places.size)
            values = []
            for step in (DIFFERENCE * size * direction, -DIFFERENCE * size * direction):
                ahead = moved(problem, state, step[:states].reshape(problem.frames, width), step[states:])
                values.append(merit(problem, ahead))
            got.append(gradient @ direction)
            wanted.append((values[0] - values[1]) / (2.0 * DIFFERENCE * size))
        found[name] = Compared(np.array(got), np.array(wanted), floor / size)
    return found


def check(found: dict[str, Compared], tolerances: dict[str, float]) -> None:
    for name, both in found.items():
        largest = np.abs(both.wanted).max()
        assert largest > 10.0 * both.floor, name
        tolerance = tolerances.get(name, 1e-7) * largest + both.floor
        np.testing.assert_allclose(both.got, both.wanted, rtol=0, atol=tolerance, err_msg=name)


@pytest.mark.parametrize("order", [2, 3])
def test_gradient_is_the_difference_of_the_cost_in_every_unknown(order: int) -> None:
    """With rates all but zero the whole derivative is exact: poses, hidden outputs, rates, constants."""
    trial = three_segments()
    problem = soft(trial.problem(order), 1e3 if order == 2 else 1e5)
    state = slowed(wobbled(problem, trial.poses, 14), 1e-5)
    hidden = place_hidden(problem)
    assert hidden.count >= 12
    assert [int(restart.sum()) for restart in hidden.restart] == [1, 2, 1]
    assert not hidden.active[1].all()
    check(compared(problem, state), {})


def kinds(problem: TrajectoryProblem, hidden: int) -> dict[str, IntArray]:
    """Positions of the kinds of unknowns among all of them, by frame; constants in four groups."""
    width = problem.moving + hidden
    grid = np.arange(problem.frames * width).reshape(problem.frames, width)
    return {
        "poses": grid[:, : problem.poses],
        "hidden": grid[:, problem.poses : problem.poses + hidden],
        "rates": grid[:, problem.poses + hidden :],
        "constants": problem.frames * width + np.arange(problem.constants).reshape(4, -1),
    }


@pytest.mark.parametrize("order", [2, 3])
def test_gradient_at_the_rates_of_gait_is_right_but_for_the_series_of_the_jacobian(order: int) -> None:
    """J_r(ξ)⁻¹ϖ′ is differentiated by a series in ξ: what it leaves out is all that may be missing."""
    trial = three_segments()
    problem = soft(trial.problem(order), 50.0 if order == 2 else 5e3)
    check(compared(problem, wobbled(problem, trial.poses, 15, size=0.2)), {"poses": 1e-3})


@pytest.mark.parametrize("expected", [False, True])
def test_the_anchor_and_unused_places_have_no_gradient_and_the_information_is_symmetric(
    expected: bool,
) -> None:
    trial = three_segments()
    problem = soft(trial.problem(), 50.0)
    hidden = place_hidden(problem)
    system = TrajectorySystem(problem, wobbled(problem, trial.poses, 16), hidden, expected)
    span = system(0, FRAMES)
    information, gradient = dense_from(span, FRAMES)
    np.testing.assert_allclose(information, information.T, rtol=0, atol=1e-12 * np.abs(information).max())
    assert np.linalg.eigvalsh(information + np.eye(len(information)) * 1e-9)[0] > 0.0
    used = np.zeros((FRAMES, hidden.count), dtype=bool)
    for column in hidden.column:
        at_frame, at_output = np.nonzero(column >= 0)
        used[at_frame, column[at_frame, at_output]] = True
    places = kinds(problem, hidden.count)["hidden"][~used]
    assert 0 < places.size < used.size
    assert np.abs(gradient[places]).max() == 0.0
    np.testing.assert_array_equal(information[np.ix_(places, places)], np.eye(places.size))


def joined(system: TrajectorySystem, frames: int, length: int) -> tuple[Span, float]:
    """One span of all frames from spans of some length, and the cost."""
    system.cost = 0.0
    parts = [system(start, min(start + length, frames)) for start in range(0, frames, length)]
    arrays = [np.concatenate([part[index] for part in parts]) for index in range(4)]
    information = np.sum([part.constants_information for part in parts], axis=0)
    gradient = np.sum([part.constants_gradient for part in parts], axis=0)
    return Span(arrays[0], arrays[1], arrays[2], arrays[3], information, gradient), system.cost


@pytest.mark.parametrize("expected", [False, True])
@pytest.mark.parametrize("order", [2, 3])
def test_spans_of_any_length_make_the_same_system(order: int, expected: bool) -> None:
    """Borders fall within a stretch out of view, before and after a hidden marker, on growth."""
    trial = three_segments()
    problem = soft(trial.problem(order), 50.0)
    state = wobbled(problem, trial.poses, 17)
    system = TrajectorySystem(problem, state, place_hidden(problem), expected)
    whole, cost = joined(system, FRAMES, FRAMES)
    for length in (1, 2, 3, 7, 9):
        parts, same = joined(system, FRAMES, length)
        assert abs(same - cost) < 1e-12 * cost
        for index, name in enumerate(Span._fields):
            got, wanted = parts[index], whole[index]
            assert got is not None
            assert wanted is not None
            if name == "lower":
                got, wanted = got[:-1], wanted[:-1]
            tolerance = 1e-12 * np.abs(wanted).max()
            np.testing.assert_allclose(got, wanted, rtol=0, atol=tolerance, err_msg=f"{name}, {length}")


def test_the_cost_is_counted_once_however_often_it_is_asked_for() -> None:
    """It adds up over the spans, and begins anew where it is set to zero."""
    trial = three_segments()
    problem = soft(trial.problem(), 50.0)
    system = TrajectorySystem(problem, wobbled(problem, trial.poses, 18), place_hidden(problem))
    system(0, FRAMES)
    first = system.cost
    system(0, FRAMES)
    assert system.cost == pytest.approx(2.0 * first, rel=1e-14)


def test_the_optimum_has_no_gradient() -> None:
    """At the end of the iteration, in units of the posterior: a hundredth of an SD at most."""
    trial = three_segments(20)
    problem = soft(trial.problem(), 50.0)
    smoothed = smooth(problem, trial.poses)
    assert smoothed.stop_reason.startswith("step below")
    information, gradient = dense_from(TrajectorySystem(problem, smoothed.state, smoothed.hidden)(0, 20), 20)
    constants = problem.constants
    information[-constants:, -constants:] += np.eye(constants)
    gradient[-constants:] += smoothed.state.constants
    step = np.linalg.solve(information, gradient)
    assert np.sqrt(gradient @ step) < 1e-2

"""The smoother against an independent factor-graph library: cost, optimum and marginals of two segments.

The model is written once more here, from its definition, on the library's own poses: its exponential,
logarithm and the logarithm's derivative, with numeric derivatives of the factors.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from made_problems import random_covariance
from made_trajectories import MadeTrial, all_modes, made_trial

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.basis import Basis, Term
from sta_prior.prior.hierarchy import Weights
from sta_prior.prior.time_scales import TimeScales
from sta_prior.solve.chain import bounded_constants, factor
from sta_prior.solve.chain_marginals import marginals
from sta_prior.solve.motion import MotionPrior
from sta_prior.solve.smoother import Smoothed, smooth
from sta_prior.solve.spans import TrajectorySystem
from sta_prior.solve.trajectory import RATE_SD, TrajectoryProblem

gtsam = pytest.importorskip("gtsam", reason="the factor-graph library of the test extra is not installed")

FRAMES = 5
HIDDEN_FRAMES = (1, 2)
"""Frames that hide marker 1 of the thigh."""

DIFFERENCE = 1e-6
Residual = Callable[[list[Any]], FloatArray]


def made() -> tuple[MadeTrial, TrajectoryProblem]:
    """Two segments that move slowly, one hidden marker; artifact linear in the knee's flexion."""
    rng = np.random.default_rng(51)
    artifacts = []
    for time in (0.1, 0.03):
        mean = 0.02 * rng.standard_normal((2, 12))
        mean[0] = 0.0
        covariance = np.kron(random_covariance(rng, 2, 1.0), random_covariance(rng, 12, 0.006))
        artifacts.append(
            FeatureArtifact(
                basis=Basis((Term(0, 0, 1),), np.eye(1)),
                weights=Weights(mean, np.asarray(covariance)),
                residual=random_covariance(rng, 12, 0.003),
                time_scales=TimeScales.single(time),
                reference=np.radians([[8.0, 0.0, 0.0]]),
                magnitude=np.zeros((12, 12)),
            )
        )
    hidden = np.zeros((FRAMES, 8), dtype=bool)
    hidden[list(HIDDEN_FRAMES), 1] = True
    trial = made_trial(52, 2, FRAMES, hidden=hidden, artifacts=artifacts, cycle=6.0)
    problem = TrajectoryProblem(
        trial.segments,
        trial.joints,
        [MotionPrior(2, trial.step, np.linspace(20.0, 70.0, 6))] * 2,
        [all_modes(artifact.constant_covariance, 12) for artifact in artifacts],
        trial.step,
        trial.marker_sd,
    )
    return trial, problem


# --- the model on the library's poses ---------------------------------------------------------------


def flexion(thigh: Any, shank: Any) -> float:
    """Right knee, intrinsic Z-X-Y: minus the first angle."""
    rotation = thigh.rotation().between(shank.rotation()).matrix()
    return float(-np.arctan2(-rotation[0, 1], rotation[1, 1]))


class Graph:
    """Factors of the whole problem; keys of poses, rates, the hidden marker and the constants."""

    def __init__(self, problem: TrajectoryProblem) -> None:
        self.problem = problem
        self.graph = gtsam.NonlinearFactorGraph()
        self.constants = gtsam.symbol("u", 0)
        for frame in range(FRAMES):
            for index in range(2):
                self._markers(frame, index)
                if frame:
                    self._motion(frame, index)
            self._joint(frame)
        for index in range(2):
            rate = gtsam.noiseModel.Diagonal.Sigmas(RATE_SD)
            self._add(rate, [self.rate(0, index)], lambda values: values[0])
        unit = gtsam.noiseModel.Unit.Create(problem.constants)
        self._add(unit, [self.constants], lambda values: values[0])

    def pose(self, frame: int, index: int) -> int:
        return int(gtsam.symbol("ts"[index], frame))

    def rate(self, frame: int, index: int) -> int:
        return int(gtsam.symbol("vw"[index], frame))

    def hidden(self, frame: int) -> int:
        return int(gtsam.symbol("h", frame))

    def _add(self, noise: Any, keys: list[int], residual: Residual) -> None:
        def error(_: Any, values: Any, jacobians: Any) -> FloatArray:
            here = [value_of(values, key) for key in keys]
            if jacobians is not None:
                for position in range(len(keys)):
                    jacobians[position] = slope(residual, here, position)
            return residual(here)

        self.graph.add(gtsam.CustomFactor(noise, keys, error))

    def _deviation(self, frame: int, index: int, values: list[Any]) -> FloatArray:
        """e = T⁻¹y − a − μ(q) − Z(q)Vu, or the unknown where hidden; values: thigh, shank, u, hidden."""
        segment, modes = self.problem.segments[index], self.problem.modes[index].modes
        artifact = segment.artifact
        assert isinstance(artifact, FeatureArtifact)
        thigh, shank, constants = values[:3]
        bend = flexion(thigh, shank) - float(artifact.reference[0, 0])
        own = constants[self.problem.constant_slices[index]]
        weights = artifact.weights.mean + modes @ own
        result = np.empty((4, 3))
        for marker, point in enumerate(segment.points[frame]):
            if np.isfinite(point).all():
                result[marker] = (thigh, shank)[index].transformTo(point) - segment.reference[marker]
            else:
                result[marker] = values[3]
        seen = np.isfinite(segment.points[frame])
        return np.asarray(
            np.where(seen, result - (weights[0] + bend * weights[1]).reshape(4, 3), result)
        ).ravel()

    def _markers(self, frame: int, index: int) -> None:
        problem = self.problem
        artifact = problem.segments[index].artifact
        decay = np.exp(-problem.step / artifact.time_constant) if frame else 0.0
        covariance = (1.0 - decay**2) * artifact.residual
        covariance = covariance + (1.0 + decay**2) * problem.marker_sd**2 * np.eye(12)
        frames = [frame, frame - 1] if frame else [0]
        keys, places = [self.constants], []
        for at in frames:
            place = [len(keys), len(keys) + 1, 0]
            keys += [self.pose(at, 0), self.pose(at, 1)]
            if index == 0 and at in HIDDEN_FRAMES:
                place.append(len(keys))
                keys.append(self.hidden(at))
            places.append(place)

        def residual(values: list[Any]) -> FloatArray:
            now = self._deviation(frame, index, [values[i] for i in places[0]])
            if not frame:
                return now
            return now - decay * self._deviation(frame - 1, index, [values[i] for i in places[1]])

        self._add(gtsam.noiseModel.Gaussian.Covariance(covariance), keys, residual)

    def _joint(self, frame: int) -> None:
        """Travel of the centre: half its variance constant, the rest with a decay of 0.3 s."""
        joint, at = self.problem.joints[0], self.problem.joint_slices[0]
        decay = np.exp(-self.problem.step / 0.3) if frame else 0.0
        offset = np.sqrt(0.5) * joint.travel_sd
        noise = gtsam.noiseModel.Isotropic.Sigma(3, offset * np.sqrt(1.0 - decay**2))

        def travel(thigh: Any, shank: Any) -> FloatArray:
            centre = shank.transformFrom(joint.centre_distal)
            return np.asarray(thigh.transformTo(centre) - joint.centre_proximal)

        def residual(values: list[Any]) -> FloatArray:
            now = travel(*values[1:3]) - offset * values[0][at]
            return now - decay * (travel(*values[3:5]) - offset * values[0][at]) if frame else now

        keys = [self.constants] + [
            self.pose(i, s) for i in ([frame, frame - 1] if frame else [0]) for s in (0, 1)
        ]
        self._add(noise, keys, residual)

    def _motion(self, frame: int, index: int) -> None:
        """White noise on acceleration from the frame before."""
        step, density = self.problem.step, self.problem.motions[index].density
        noise = np.kron([[step**3 / 3.0, step**2 / 2.0], [step**2 / 2.0, step]], np.diag(density))

        def residual(values: list[Any]) -> FloatArray:
            before, after, first, second = values
            move = gtsam.Pose3.Logmap(before.between(after))
            turned = gtsam.Pose3.LogmapDerivative(gtsam.Pose3.Expmap(move)) @ second
            return np.concatenate([move - step * first, turned - first])

        keys = [make(at, index) for make in (self.pose, self.rate) for at in (frame - 1, frame)]
        self._add(gtsam.noiseModel.Gaussian.Covariance(noise), keys, residual)


def value_of(values: Any, key: int) -> Any:
    return values.atPose3(key) if chr(gtsam.symbolChr(key)) in "ts" else values.atVector(key)


def slope(residual: Residual, values: list[Any], position: int) -> FloatArray:
    """Central differences in one of the values, a pose moved by the library's own step."""
    value = values[position]
    pose = hasattr(value, "retract")
    columns = []
    for unit in np.eye(6 if pose else value.size):
        ends = []
        for sign in (DIFFERENCE, -DIFFERENCE):
            other = list(values)
            other[position] = value.retract(sign * unit) if pose else value + sign * unit
            ends.append(residual(other))
        columns.append((ends[0] - ends[1]) / (2.0 * DIFFERENCE))
    return np.asfortranarray(np.stack(columns, axis=1))


def values_at(
    graph: Graph, poses: FloatArray, rates: FloatArray, hidden: FloatArray, constants: FloatArray
) -> Any:
    values = gtsam.Values()
    for frame in range(FRAMES):
        for index in range(2):
            values.insert(graph.pose(frame, index), gtsam.Pose3(poses[frame, index]))
            values.insert(graph.rate(frame, index), rates[frame, index])
        if frame in HIDDEN_FRAMES:
            values.insert(graph.hidden(frame), hidden[frame])
    values.insert(graph.constants, constants)
    return values


@pytest.fixture(scope="module")
def ours() -> Smoothed:
    trial, problem = made()
    smoothed = smooth(problem, trial.poses, constant_time=1e9)
    assert smoothed.stop_reason.startswith("step below")
    return smoothed


@pytest.fixture(scope="module")
def graph(ours: Smoothed) -> Graph:
    return Graph(ours.problem)


@pytest.fixture(scope="module")
def theirs(graph: Graph) -> Any:
    """Their optimum, from rest at the true poses."""
    trial, problem = made()
    start = values_at(
        graph, trial.poses, np.zeros((FRAMES, 2, 6)), np.zeros((FRAMES, 3)), np.zeros(problem.constants)
    )
    parameters = gtsam.GaussNewtonParams()
    parameters.setMaxIterations(40)
    parameters.setRelativeErrorTol(1e-15)
    parameters.setAbsoluteErrorTol(1e-13)
    return gtsam.GaussNewtonOptimizer(graph.graph, start, parameters).optimize()


def test_the_cost_is_theirs(ours: Smoothed, graph: Graph) -> None:
    """At the optimum, and where every unknown is off."""
    rng = np.random.default_rng(53)
    for size in (0.0, 1.0):
        state = replace(
            ours.state,
            poses=ours.state.poses @ se3.exp(size * 0.02 * rng.standard_normal((FRAMES, 2, 6))),
            rates=ours.state.rates + size * rng.standard_normal((FRAMES, 2, 1, 6)),
            hidden=ours.state.hidden + size * 0.004 * rng.standard_normal((FRAMES, 3)),
            constants=ours.state.constants + size * rng.standard_normal(ours.problem.constants),
        )
        system = TrajectorySystem(ours.problem, state, ours.hidden)
        system(0, FRAMES)
        cost = system.cost + 0.5 * float(state.constants @ state.constants)
        values = values_at(graph, state.poses, state.rates[:, :, 0], state.hidden, state.constants)
        # The unused place of frames that show all markers is held at zero, and costs nothing.
        assert cost == pytest.approx(graph.graph.error(values), rel=1e-9)


def test_the_optimum_is_theirs(ours: Smoothed, graph: Graph, theirs: Any) -> None:
    """Poses in units of their SD."""
    poses = np.array(
        [[theirs.atPose3(graph.pose(frame, index)).matrix() for index in range(2)] for frame in range(FRAMES)]
    )
    difference = se3.relative_difference(ours.state.poses, poses)
    spread = np.sqrt(np.einsum("fxx->fx", covariances(ours))).reshape(FRAMES, 2, 6)
    assert np.abs(difference / spread).max() < 1e-5
    assert np.abs(difference).max() < 2e-7
    assert np.abs(theirs.atVector(graph.constants) - ours.state.constants).max() < 1e-4


def covariances(smoothed: Smoothed) -> FloatArray:
    """Of a frame's poses, from the information that the steps see: markers where they are."""
    observed = factor(TrajectorySystem(smoothed.problem, smoothed.state, smoothed.hidden), FRAMES)
    return marginals(observed, bounded_constants(observed), smoothed.problem.poses).covariance


def test_the_marginals_are_theirs(ours: Smoothed, graph: Graph) -> None:
    """Both poses of each frame, at our optimum; the tangent is rotation first and on the right for both."""
    state = ours.state
    values = values_at(graph, state.poses, state.rates[:, :, 0], state.hidden, state.constants)
    found = gtsam.Marginals(graph.graph, values)
    got = covariances(ours)
    for frame in range(FRAMES):
        keys = [graph.pose(frame, 0), graph.pose(frame, 1)]
        joint = found.jointMarginalCovariance(keys)
        wanted = np.block([[joint.at(a, b) for b in keys] for a in keys])
        spread = np.sqrt(np.diag(wanted))
        np.testing.assert_allclose(
            got[frame] / np.outer(spread, spread), wanted / np.outer(spread, spread), atol=1e-5
        )

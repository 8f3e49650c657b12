"""How long the smoother takes, and how much memory, against other ways to the same answer in one run.

    python docs/benchmarks/smoother.py [--frames 2000] [--small 150] [--long 1000 5000 20000 50000]

Prints Markdown tables. One thread; processor time, the least of several repetitions. An invented leg: two
segments with six markers each, a joint whose centre travels, an artifact with ten features, knee angles that
repeat every second at 100 frames a second.

- One iteration against LAPACK's band factorisation (`dpbtrf`) of the states' matrix alone.
- A whole solve against `scipy.optimize.least_squares` on the same residuals from the same start, with their
  analytic Jacobian as a sparse matrix, trust region and LSMR. The script stops where the two optima differ.
- A whole solve with its intervals, per frame, against filterpy's unscented Kalman smoother over poses and
  rates (it then knows no deviations of the subject), and over these and the constants. Its functions are
  plain arithmetic for one frame, it passes once, and its residual is white.
- Time and peak memory of a whole solve with its intervals over the length of a trial, each in a process of
  its own.
"""

from __future__ import annotations

import argparse
import json
import os
import subprocess
import sys
import time
import warnings
from collections.abc import Callable
from dataclasses import dataclass

for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[name] = "1"

import numpy as np  # noqa: E402
from chain import bands, least, peak_memory  # noqa: E402
from filterpy.kalman import MerweScaledSigmaPoints, UnscentedKalmanFilter  # noqa: E402
from scipy.linalg import lapack  # noqa: E402
from scipy.optimize import least_squares  # noqa: E402
from scipy.sparse import coo_matrix, csr_matrix, hstack, identity, vstack  # noqa: E402
from scipy.spatial.transform import Rotation  # noqa: E402

from sta_prior import se3  # noqa: E402
from sta_prior.angles import JointConvention, rotation_from_angles  # noqa: E402
from sta_prior.checks import FloatArray  # noqa: E402
from sta_prior.prior.artifact import FeatureArtifact  # noqa: E402
from sta_prior.prior.basis import Basis, Term, Wave  # noqa: E402
from sta_prior.prior.hierarchy import Weights  # noqa: E402
from sta_prior.prior.interface import design_of  # noqa: E402
from sta_prior.prior.time_scales import TimeScales  # noqa: E402
from sta_prior.solve.chain import SPAN, bounded_constants, factor, step  # noqa: E402
from sta_prior.solve.chain_marginals import marginals  # noqa: E402
from sta_prior.solve.frame import bridge, first_look  # noqa: E402
from sta_prior.solve.smoother import CONSTANT_TIME, begin, make_problem, smooth  # noqa: E402
from sta_prior.solve.spans import TrajectorySystem  # noqa: E402
from sta_prior.solve.terms import JointProblem, SegmentProblem  # noqa: E402
from sta_prior.solve.trajectory import (  # noqa: E402
    RATE_SD,
    HiddenOutputs,
    Trajectory,
    TrajectoryProblem,
    moved,
    place_hidden,
)
from sta_prior.solve.trajectory_posterior import describe_trajectory  # noqa: E402

WANTED = {"iteration": 6.0, "marginals": 1.5}
"""Times dpbtrf."""
WANTED_SOLVE, WANTED_FILTER, WANTED_SLOPE, WANTED_MEMORY = 20.0, 50.0, 1.1, 1200.0

KNEE = JointConvention("knee", "right")
STEP, MARKER_SD, TRAVEL_SD = 0.01, 0.0005, 0.005
CENTRES = (np.array([0.0, -0.40, 0.0]), np.array([0.0, 0.395, 0.0]))
REACH = ((0.05, -0.08, -0.32), (0.04, 0.32, 0.08))
"""Markers lie on a spiral about the bone: distance from its axis, first and last height, m."""


@dataclass(frozen=True)
class Trial:
    """A problem and poses to begin from, with its segments."""

    problem: TrajectoryProblem
    start: FloatArray


def covariance(rng: np.random.Generator, size: int, sd: float, share: float) -> FloatArray:
    """A share of it in three directions."""
    factors = rng.standard_normal((size, 3))
    full = factors @ factors.T
    return np.asarray(sd**2 * (share * full * size / np.trace(full) + (1.0 - share) * np.eye(size)))


def made_artifact(rng: np.random.Generator, outputs: int) -> FeatureArtifact:
    """Constant, flexion and its square, the other angles, and five waves over flexion."""
    terms = (Term(0, 0, 1), Term(0, 0, 2), Term(0, 1, 1), Term(0, 2, 1))
    wave = Wave(0, 0, centre=0.6, limit=1.2, length=0.4, count=5)
    variance = np.array([0.1, 1.0, 0.3, 0.1, 0.1, *[0.02] * 5])
    mean = 0.02 * np.sqrt(variance)[:, None] * rng.standard_normal((10, outputs))
    mean[0] = 0.0
    return FeatureArtifact(
        basis=Basis(terms, np.eye(4), (wave,)),
        weights=Weights(mean, np.kron(np.diag(variance), covariance(rng, outputs, 0.006, 0.9))),
        residual=covariance(rng, outputs, 0.003, 0.5),
        time_scales=TimeScales.single(0.1),
        reference=np.zeros((1, 3)),
        magnitude=np.zeros((outputs, outputs)),
    )


def made_trial(frames: int, markers: int = 6) -> Trial:
    """The same motion however long, with an artifact drawn from the prior."""
    rng = np.random.default_rng(3)
    phase = 2.0 * np.pi * STEP * np.arange(frames)
    angles = np.radians(
        np.stack(
            [35.0 + 30.0 * np.sin(phase), 4.0 * np.sin(phase + 1.0), 6.0 * np.sin(2.0 * phase + 2.0)], axis=1
        )
    )
    turn = 0.3 * np.stack([np.sin(phase), np.cos(phase), np.sin(phase + 1.0)], axis=1)
    place = np.stack([0.6 * np.sin(phase), 0.9 + 0.03 * np.sin(2.0 * phase), 0.02 * np.cos(phase)], axis=1)
    thigh = se3.make_pose(Rotation.from_rotvec(turn).as_matrix(), place)
    knee = rotation_from_angles(KNEE, angles)
    travel = 0.003 * np.stack([np.sin(phase), np.cos(phase), np.sin(phase)], axis=1)
    shank = thigh @ se3.make_pose(knee, CENTRES[0] + travel - knee @ CENTRES[1])
    segments = []
    for index, pose in enumerate((thigh, shank)):
        wide, top, bottom = REACH[index]
        round_it = 2.4 * np.arange(markers)
        height = np.linspace(top, bottom, markers)
        reference = np.stack([wide * np.cos(round_it), height, wide * np.sin(round_it)], axis=1)
        artifact = made_artifact(rng, 3 * markers)
        design = design_of(artifact, angles[:, None])
        weights = np.linalg.cholesky(artifact.constant_covariance) @ rng.standard_normal(10 * 3 * markers)
        white = rng.standard_normal((frames, 3 * markers)) @ np.linalg.cholesky(artifact.residual).T
        decay = np.exp(-STEP / artifact.time_constant)
        for frame in range(1, frames):
            white[frame] = decay * white[frame - 1] + np.sqrt(1.0 - decay**2) * white[frame]
        artifacts = design.mean + design.features @ weights.reshape(10, -1) + white
        points = se3.transform_points(pose, reference + artifacts.reshape(frames, -1, 3))
        points += MARKER_SD * rng.standard_normal(points.shape)
        segments.append(SegmentProblem(index, points, reference, artifact))
    joints = [JointProblem(0, 1, KNEE, *CENTRES, TRAVEL_SD)]
    start = bridge(first_look(segments, 2)[0], joints)
    return Trial(make_problem(segments, joints, start, STEP, MARKER_SD), start)


def row(what: str, spent: float, measure: float, wanted: str = "") -> str:
    """Of a table: µs a frame, and how often the measure goes into it."""
    return f"| {what}{wanted} | {spent:.1f} | {spent / measure:.2f} |"


def iteration(frames: int) -> None:
    """Parts of one iteration, and what follows the last, in units of the band factorisation."""
    trial = made_trial(frames)
    problem, hidden = trial.problem, place_hidden(trial.problem)
    state = begin(problem, hidden, trial.start)
    whole = TrajectorySystem(problem, state, hidden)(0, frames)
    stored = bands(whole.diagonal, whole.lower[:-1])
    kept = [
        TrajectorySystem(problem, state, hidden)(a, min(a + SPAN, frames)) for a in range(0, frames, SPAN)
    ]
    bound = max(1.0, frames * STEP / CONSTANT_TIME)
    eliminated = factor(lambda start, stop: kept[start // SPAN], frames, memory=np.inf)
    constants = bounded_constants(eliminated, bound)
    smoothed = smooth(problem, trial.start)

    def assembled() -> None:
        system = TrajectorySystem(problem, state, hidden)
        for start in range(0, frames, SPAN):
            system(start, min(start + SPAN, frames))

    def iterated() -> None:
        step(factor(TrajectorySystem(problem, state, hidden), frames, memory=np.inf), constants)

    jobs: dict[str, Callable[[], object]] = {
        "dpbtrf": lambda: lapack.dpbtrf(stored, lower=1),
        "assembly": assembled,
        "factor": lambda: factor(lambda start, stop: kept[start // SPAN], frames, memory=np.inf),
        "step": lambda: step(eliminated, constants),
        "iteration": iterated,
        "marginals": lambda: marginals(eliminated, constants, problem.poses),
        "marginals and all that is reported": lambda: describe_trajectory(smoothed),
    }
    spent = dict.fromkeys(jobs, np.inf)
    # In turn, so that what else the machine does meets all alike.
    for _ in range(5):
        for what, job in jobs.items():
            spent[what] = min(spent[what], least(job, frames, 1))
    print(
        f"One iteration: T = {frames}, p = {problem.moving}, c = {problem.constants}\n\n"
        "| what | µs a frame | times dpbtrf |\n|---|---|---|"
    )
    for what, value in spent.items():
        goal = f" (wanted ≤ {WANTED[what]:g})" if what in WANTED else ""
        print(row(what, value, spent["dpbtrf"], goal))
    print()


@dataclass(frozen=True)
class Residuals:
    """The objective as whitened residuals of a step away from a state, for a general solver."""

    problem: TrajectoryProblem
    hidden: HiddenOutputs
    state: Trajectory
    bound: float

    def at(self, unknowns: FloatArray) -> Trajectory:
        """State after a step, (T·p + c,)."""
        ends = self.problem.frames * self.problem.moving
        change = unknowns[:ends].reshape(self.problem.frames, -1)
        return moved(self.problem, self.state, change, unknowns[ends:])

    def motion(self, state: Trajectory, index: int) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Innovations of a segment's motion, whitened, and their derivatives in the two states."""
        prior = self.problem.motions[index]
        poses, rates = state.poses[:, index], state.rates[:, index, 0]
        tangent = se3.log(se3.inverse(poses[:-1]) @ poses[1:])
        right, left = se3.right_jacobian_inverse(tangent), se3.left_jacobian_inverse(tangent)
        half = np.zeros((len(tangent), 6, 6))
        half[:, :3, :3] = half[:, 3:, 3:] = -0.5 * se3.skew(rates[1:, :3])
        half[:, 3:, :3] = -0.5 * se3.skew(rates[1:, 3:])
        after, before = np.zeros((len(tangent), 12, 12)), np.zeros((len(tangent), 12, 12))
        after[:, :6, :6] = after[:, 6:, 6:] = right
        after[:, 6:, :6], before[:, 6:, :6] = half @ right, -half @ left
        before[:, :6, :6] = -left
        before[:, :6, 6:] = -prior.step * np.eye(6)
        before[:, 6:, 6:] = -np.eye(6)
        arrived = np.concatenate([tangent, np.einsum("fab,fb->fa", right, rates[1:])], axis=1)
        residual = arrived - np.concatenate([prior.step * rates[:-1], rates[:-1]], axis=1)
        white = np.kron(np.linalg.cholesky(prior.precision).T, np.diag(prior.density**-0.5))
        return residual @ white.T, white @ before, white @ after

    def __call__(self, unknowns: FloatArray) -> FloatArray:
        """All residuals."""
        state = self.at(unknowns)
        system = TrajectorySystem(self.problem, state, self.hidden)
        parts = [rows.white.reshape(-1) for rows in system.rows(system.part(0, self.problem.frames))]
        for index in range(len(self.problem.motions)):
            parts += [self.motion(state, index)[0].reshape(-1), state.rates[0, index, 0] / RATE_SD]
        return np.concatenate([np.concatenate(parts) / np.sqrt(self.bound), state.constants])

    def jacobian(self, unknowns: FloatArray) -> csr_matrix:
        """Their derivatives, sparse."""
        problem, state = self.problem, self.at(unknowns)
        frames, size, constants = problem.frames, problem.moving, problem.constants
        # A step of the unknowns turns a pose that is already turned by some.
        turn = se3.right_jacobian(
            unknowns[: frames * size].reshape(frames, -1)[:, : problem.poses].reshape(-1, 6)
        )
        turned = np.zeros((frames, size, size))
        turned[:, np.arange(size), np.arange(size)] = 1.0
        for index, block in enumerate(turn.reshape(frames, -1, 6, 6).swapaxes(0, 1)):
            own = slice(6 * index, 6 * index + 6)
            turned[:, own, own] = block
        system = TrajectorySystem(problem, state, self.hidden)
        blocks = []
        for rows in system.rows(system.part(0, frames)):
            _, now, past, fan = rows.whitened()
            at = np.arange(problem.poses)
            count = now.shape[1]
            here = (now @ turned[:, : problem.poses, : problem.poses], 0, at)
            before = (-past[1:] @ turned[:-1, : problem.poses, : problem.poses], 1, at)
            wide = scattered(frames * count, frames * size + constants, [here, before], size)
            at_rows, at_columns = np.indices((frames * count, fan.shape[2]))
            columns = at_columns + frames * size + rows.at.start
            fans = coo_matrix((fan.reshape(-1), (at_rows.reshape(-1), columns.reshape(-1))), shape=wide.shape)
            blocks.append(wide + fans)
        for index in range(len(problem.motions)):
            at = problem.state(index, 0)
            _, before_, after_ = self.motion(state, index)
            now_, past_ = after_ @ turned[1:, at[:, None], at], before_ @ turned[:-1, at[:, None], at]
            first = np.zeros((1, 6, 6))
            first[0] = np.diag(1.0 / RATE_SD)
            width = frames * size + constants
            blocks.append(scattered((frames - 1) * 12, width, [(now_, -1, at), (past_, 0, at)], size))
            blocks.append(scattered(6, width, [(first, 0, at[6:])], size))
        states = csr_matrix(vstack(blocks)) / np.sqrt(self.bound)
        own = hstack([coo_matrix((constants, frames * size)), identity(constants)])
        return csr_matrix(vstack([states, own]))


def scattered(
    height: int, width: int, parts: list[tuple[FloatArray, int, FloatArray]], size: int
) -> coo_matrix:
    """Blocks (f, n, m), the last of them in the last rows, some frames behind them, in columns of a frame."""
    data, at_rows, at_columns = [], [], []
    for block, behind, columns in parts:
        count, rows, _ = block.shape
        first = height // rows - count
        frame = np.arange(count)[:, None, None]
        row_at = (first + frame) * rows + np.arange(rows)[:, None] + 0 * columns
        column_at = (first + frame - behind) * size + columns + 0 * np.arange(rows)[:, None]
        data.append(block.reshape(-1))
        at_rows.append(row_at.reshape(-1))
        at_columns.append(column_at.reshape(-1))
    where = (np.concatenate(at_rows), np.concatenate(at_columns))
    return coo_matrix((np.concatenate(data), where), shape=(height, width))


def whole_solve(frames: int) -> None:
    """Against a general solver at the same optimum."""
    trial = made_trial(frames)
    problem, hidden = trial.problem, place_hidden(trial.problem)
    bound = max(1.0, frames * STEP / CONSTANT_TIME)
    ours = smooth(problem, trial.start)
    spent = least(lambda: smooth(problem, trial.start), 1, 3) * 1e-6
    task = Residuals(problem, hidden, begin(problem, hidden, trial.start), bound)
    began = time.process_time()
    found = least_squares(
        task,
        np.zeros(frames * problem.moving + problem.constants),
        jac=task.jacobian,
        x_scale="jac",
        tr_solver="lsmr",
        tr_options={"atol": 1e-8, "btol": 1e-8, "maxiter": 3000},
        xtol=1e-9,
        ftol=1e-14,
        gtol=1e-10,
        max_nfev=300,
    )
    theirs = time.process_time() - began
    away = float(np.abs(task.at(found.x).poses - ours.state.poses).max())
    print(
        f"Whole solve: T = {frames}, c = {problem.constants}\n\n"
        "| what | s | iterations | ratio |\n|---|---|---|---|\n"
        f"| smooth | {spent:.3f} | {ours.iterations} | 1 |\n"
        f"| scipy.optimize.least_squares (wanted ≥ {WANTED_SOLVE:g}) | {theirs:.2f} | {found.njev} | {theirs / spent:.0f} |\n\nThe two optima differ by {away:.1g} rad and m.\n"
    )
    if away > 1e-4:
        sys.exit("the two solvers do not have the same answer")


def turned_by(vector: FloatArray) -> FloatArray:
    """Rotation by a vector, (3, 3): for one, without checks."""
    angle = float(np.sqrt(vector @ vector))
    cross = np.array(
        [[0.0, -vector[2], vector[1]], [vector[2], 0.0, -vector[0]], [-vector[1], vector[0], 0.0]]
    )
    if angle < 1e-8:
        return np.eye(3) + cross
    return np.eye(3) + np.sin(angle) / angle * cross + (1.0 - np.cos(angle)) / angle**2 * (cross @ cross)


def unscented(trial: Trial, frames: int, constants: bool) -> float:
    """Seconds a frame of filterpy's unscented Kalman filter and smoother over the same unknowns.

    A pose is a turn and a shift from the first frame's; velocities are along the lab's axes.
    """
    problem = trial.problem
    size = problem.moving + (problem.constants if constants else 0)
    first = trial.start[0]
    modes = [mode.modes for mode in problem.modes]
    slices = problem.constant_slices

    def ahead(state: FloatArray, step_: float) -> FloatArray:
        result = state.copy()
        result[:12] += step_ * state[12:24]
        return result

    def seen(state: FloatArray) -> FloatArray:
        rotations = [turned_by(state[6 * i : 6 * i + 3]) @ first[i, :3, :3] for i in range(2)]
        relative = rotations[0].T @ rotations[1]
        angles = np.array(
            [
                [
                    [
                        np.arctan2(-relative[0, 1], relative[1, 1]),
                        relative[2, 1],
                        np.arctan2(-relative[2, 0], 1.0),
                    ]
                ]
            ]
        )
        points = []
        for i, segment in enumerate(problem.segments):
            artifact = segment.artifact
            features = artifact.basis.values(angles, artifact.reference)[0]
            shift = features @ artifact.weights.mean
            if constants:
                shift = shift + features @ (modes[i] @ state[24:][slices[i]])
            place = (segment.reference + shift.reshape(-1, 3)) @ rotations[i].T
            points.append(place + first[i, :3, 3] + state[6 * i + 3 : 6 * i + 6])
        return np.concatenate(points).reshape(-1)

    measured = np.concatenate([s.points[:frames] for s in problem.segments], axis=1).reshape(frames, -1)
    points = MerweScaledSigmaPoints(size, alpha=0.1, beta=2.0, kappa=0.0)
    unscented_ = UnscentedKalmanFilter(size, measured.shape[1], problem.step, seen, ahead, points)
    noise = np.zeros((size, size))
    for i, motion in enumerate(problem.motions):
        at = problem.state(i, 0)
        noise[np.ix_(at, at)] = np.kron(np.linalg.inv(motion.precision), np.diag(motion.density))
    unscented_.Q = noise + 1e-12 * np.eye(size)
    unscented_.P = np.diag(np.concatenate([np.full(12, 1e-3), np.full(12, 1.0), np.ones(size - 24)]))
    unscented_.R = np.kron(np.eye(measured.shape[1] // 3), np.eye(3)) * (0.004**2 + MARKER_SD**2)
    began = time.process_time()
    means, covariances = unscented_.batch_filter(measured)
    unscented_.rts_smoother(means, covariances)
    return (time.process_time() - began) / frames


def against_filter(frames: int) -> None:
    """A whole solve with its intervals per frame, against one pass of an unscented smoother."""
    trial = made_trial(frames)
    spent = least(lambda: describe_trajectory(smooth(trial.problem, trial.start)), frames, 3) * 1e-6
    size, whole = trial.problem.moving, trial.problem.moving + trial.problem.constants
    print(
        "Per frame, whole solve with intervals\n\n"
        "| what | unknowns of a frame | ms a frame | ratio |\n|---|---|---|---|\n"
        f"| smooth and all that is reported, T = {frames} | {size}, and {whole - size} constants | "
        f"{1e3 * spent:.3f} | 1 |"
    )
    short = made_trial(30)
    for constants, count in ((False, size), (True, whole)):
        theirs = unscented(short, 30, constants)
        goal = f" (wanted ≥ {WANTED_FILTER:g})" if constants else ""
        print(
            f"| filterpy, unscented, one pass{goal} | {count} | {1e3 * theirs:.1f} | {theirs / spent:.0f} |"
        )
    print()


def alone(frames: int) -> None:
    """Solve one trial in this process and tell time and memory."""
    trial = made_trial(frames)
    describe_trajectory(smooth(made_trial(300).problem, made_trial(300).start))  # Compiles.
    before, began = peak_memory(), time.process_time()
    smoothed = smooth(trial.problem, trial.start)
    solved = time.process_time()
    describe_trajectory(smoothed)
    told = {
        "frames": frames,
        "smooth": solved - began,
        "describe": time.process_time() - solved,
        "iterations": smoothed.iterations,
        "constants": trial.problem.constants,
        "before": before,
        "peak": peak_memory(),
    }
    print(json.dumps(told))


def long_trials(lengths: list[int]) -> None:
    """Time and memory over the length of a trial."""
    print(
        "Length of the trial\n\n"
        "| T | c | iterations | smooth, s | µs a frame and iteration | all that is reported, s | peak, MB |"
        "\n|---|---|---|---|---|---|---|"
    )
    lines = []
    for frames in lengths:
        command = [sys.executable, __file__, "--alone", str(frames)]
        lines.append(json.loads(subprocess.run(command, check=True, capture_output=True, text=True).stdout))
        last = lines[-1]
        each = 1e6 * last["smooth"] / frames / (last["iterations"] + 2)
        print(
            f"| {frames} | {last['constants']} | {last['iterations']} | {last['smooth']:.2f} | {each:.1f} | "
            f"{last['describe']:.2f} | {last['peak']:.0f} |"
        )
    length = np.log([line["frames"] for line in lines])
    for what, spent in (
        ("smooth, an iteration", [line["smooth"] / (line["iterations"] + 2) for line in lines]),
        ("smooth", [line["smooth"] for line in lines]),
        ("all that is reported", [line["describe"] for line in lines]),
    ):
        if len(lines) > 1:
            print(
                f"\nSlope of time over length, {what}: {np.polyfit(length, np.log(spent), 1)[0]:.2f}", end=""
            )
    print(f" (wanted ≤ {WANTED_SLOPE:g}); peak of memory wanted ≤ {WANTED_MEMORY:.0f} MB.\n")


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description="Time the smoother.")
    parser.add_argument("--frames", type=int, default=2000)
    parser.add_argument("--small", type=int, default=150)
    parser.add_argument("--long", type=int, nargs="*", default=[1000, 5000, 20_000, 50_000])
    parser.add_argument("--alone", type=int, default=0, help=argparse.SUPPRESS)
    given = parser.parse_args()
    warnings.simplefilter("ignore")
    if given.alone:
        alone(given.alone)
        return
    iteration(given.frames)
    whole_solve(given.small)
    against_filter(given.frames)
    if given.long:
        long_trials(given.long)


if __name__ == "__main__":
    main()

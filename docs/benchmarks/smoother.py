"""How long the smoother takes, and how much memory, against other ways to the same answer in one run.

    python docs/benchmarks/smoother.py [--frames 2000] [--small 150] [--long 1000 5000 20000 50000]

Prints Markdown tables. One thread; processor time, the least of several repetitions. An invented leg: two
segments with six markers each, a joint whose centre travels, an artifact with ten features, knee angles that
repeat every second at 100 frames a second.

- One iteration against LAPACK's band factorisation (`dpbtrf`) of the states' matrix alone.
- A whole solve against `scipy.optimize.least_squares` on the same residuals from the same start, with their
  analytic Jacobian as a sparse matrix, trust region and LSMR. The script stops where the two optima differ.
- A whole solve with its intervals, per frame, against one pass of filterpy's unscented Kalman smoother: over
  poses and rates (it then knows no deviations of the subject); over the constants too; and over the residual
  artifact too, which a filter needs among its unknowns to have the same model. Its functions are plain
  arithmetic for one frame.
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

for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[name] = "1"

import numpy as np  # noqa: E402
from chain import bands, least, peak_memory  # noqa: E402
from scipy.linalg import lapack  # noqa: E402
from scipy.optimize import least_squares  # noqa: E402
from smoother_rivals import Residuals, unscented  # noqa: E402
from smoother_trial import STEP, made_trial  # noqa: E402

from sta_prior.solve.chain import SPAN, bounded_constants, factor, step  # noqa: E402
from sta_prior.solve.chain_marginals import marginals  # noqa: E402
from sta_prior.solve.smoother import CONSTANT_TIME, begin, smooth  # noqa: E402
from sta_prior.solve.spans import TrajectorySystem  # noqa: E402
from sta_prior.solve.trajectory import place_hidden  # noqa: E402
from sta_prior.solve.trajectory_posterior import describe_trajectory  # noqa: E402

WANTED = {"iteration": 6.0, "marginals": 1.5}
"""Times dpbtrf."""
WANTED_SOLVE, WANTED_FILTER, WANTED_SLOPE, WANTED_MEMORY = 20.0, 50.0, 1.1, 1200.0


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
        tr_options={"atol": 1e-10, "btol": 1e-10, "maxiter": 3000},
        xtol=1e-9,
        ftol=1e-14,
        gtol=1e-10,
        max_nfev=300,
    )
    theirs = time.process_time() - began
    away = float(np.abs(task.at(found.x).poses - ours.state.poses).max())
    goal = f" (wanted ≥ {WANTED_SOLVE:g})"
    print(
        f"Whole solve: T = {frames}, c = {problem.constants}\n\n"
        "| what | s | iterations | ratio |\n|---|---|---|---|\n"
        f"| smooth | {spent:.3f} | {ours.iterations} | 1 |\n"
        f"| scipy.optimize.least_squares{goal} | {theirs:.2f} | {found.njev} | {theirs / spent:.0f} |\n\n"
        f"The two optima differ by {away:.1g} rad and m.\n"
    )
    if away > 1e-4:
        sys.exit("the two solvers do not have the same answer")


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
    outputs, constants = sum(s.reference.size for s in trial.problem.segments), whole - size
    for what, asked in (
        ("poses and rates", (0, 0)),
        ("the constants too", (constants, 0)),
        (f"the residual too (wanted ≥ {WANTED_FILTER:g})", (constants, outputs)),
    ):
        count, theirs = unscented(trial, 30, *asked)
        print(f"| filterpy, {what} | {count} | {1e3 * theirs:.1f} | {theirs / spent:.0f} |")
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
        "| T | c | iterations | smooth, s | µs a frame and elimination | all that is reported, s | peak, MB |"
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
    # First: a child begins with the peak of memory of its parent.
    if given.long:
        long_trials(given.long)
    iteration(given.frames)
    whole_solve(given.small)
    against_filter(given.frames)


if __name__ == "__main__":
    main()

"""How long the linear algebra of a trajectory takes, against other solvers of the same system in one run.

    python docs/benchmarks/chain.py [--frames 1000 2000 5000] [--states 24 48] [--constants 60] [--long 50000]

Prints Markdown tables. One thread; microseconds of processor time a frame, the least of several repetitions.
The measure is LAPACK's band factorisation (`dpbtrf`, through SciPy) of the states' matrix at half-bandwidth
2p − 1, which knows of no constants. Where the factor-graph library GTSAM is installed, it eliminates the same
system in the same order, from the same blocks of information with the constants as one variable, so that
neither it nor this package is charged for making them.
"""

from __future__ import annotations

import argparse
import gc
import importlib
import os
import sys
import time
from collections.abc import Callable
from typing import Any

for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[name] = "1"

import numpy as np  # noqa: E402
from scipy.linalg import lapack  # noqa: E402

from sta_prior.checks import FloatArray  # noqa: E402
from sta_prior.solve.chain import (  # noqa: E402
    Span,
    Spans,
    bounded_constants,
    factor,
    from_arrays,
    step,
)
from sta_prior.solve.chain_marginals import marginal_spans, marginals  # noqa: E402

GOALS = {"factor": 1.5, "marginals": 1.5, "factor with constants": 4.0}
"""Times dpbtrf, wanted at p = 24 and c = 60."""

Blocks = tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]
"""Diagonal, lower, coupling, gradient, and the constants' own information."""


def made(frames: int, states: int, constants: int) -> Blocks:
    """A positive definite system."""
    rng = np.random.default_rng(0)
    rows = 0.1 * rng.normal(size=(frames, states, states))
    coupling = 0.05 * rng.normal(size=(frames, states, constants))
    return (
        rows @ rows.swapaxes(-1, -2) + 4.0 * np.eye(states),
        0.1 * rng.normal(size=(frames - 1, states, states)),
        coupling,
        rng.normal(size=(frames, states)),
        np.einsum("tpc,tpd->cd", coupling, coupling),
    )


def bands(diagonal: FloatArray, lower: FloatArray) -> FloatArray:
    """The states' matrix in LAPACK's lower band storage."""
    frames, states = diagonal.shape[:2]
    stored = np.zeros((2 * states, frames * states), order="F")
    for i in range(states):
        for j in range(states):
            if j <= i:
                stored[i - j, j::states] = diagonal[:, i, j]
            stored[states + i - j, j : (frames - 1) * states : states] = lower[:, i, j]
    return stored


def least(work: Callable[[], object], frames: int, repetitions: int = 5) -> float:
    """Least processor time of some repetitions, µs a frame."""
    times = []
    for _ in range(repetitions):
        began = time.process_time()
        work()
        times.append(time.process_time() - began)
    return 1e6 * min(times) / frames


def ours(blocks: Blocks, leading: int) -> list[tuple[str, float]]:
    """The parts of the job with and without constants."""
    diagonal, lower, coupling, gradient, own = blocks
    frames, states, constants = coupling.shape
    told = []
    for label, spans in (
        ("", from_arrays(diagonal, lower, np.empty((frames, states, 0)), gradient)),
        (" with constants", from_arrays(diagonal, lower, coupling, gradient, own)),
    ):
        if label and not constants:
            continue
        eliminated = factor(spans, frames, memory=np.inf)
        posterior = bounded_constants(eliminated)
        told += [
            (f"factor{label}", least(lambda spans=spans: factor(spans, frames, memory=np.inf), frames)),
            (f"step{label}", least(lambda e=eliminated, p=posterior: step(e, p), frames)),
            (
                f"marginals{label}",
                least(lambda e=eliminated, p=posterior: marginals(e, p, leading), frames),
            ),
        ]
    return told


def graph(gtsam: Any, blocks: Blocks, constants: int) -> tuple[Any, Any]:
    """The same system as a graph, and the order of elimination: frames, then the constants."""
    diagonal, lower, coupling, gradient, own = blocks
    frames, states = gradient.shape
    nothing, square = np.zeros(states), np.zeros((states, states))
    whole, order = gtsam.GaussianFactorGraph(), gtsam.Ordering()
    for t in range(frames):
        order.push_back(t)
        # Its gradient has the other sign.
        here = (diagonal[t], lower[t].T if t < frames - 1 else None, coupling[t], -gradient[t])
        if t < frames - 1 and constants:
            rest = (square, np.zeros((states, constants)), nothing, 0.0 * own, np.zeros(constants), 0.0)
            whole.push_back(gtsam.HessianFactor(t, t + 1, frames, *here, *rest))
        elif t < frames - 1:
            whole.push_back(gtsam.HessianFactor(t, t + 1, here[0], here[1], here[3], square, nothing, 0.0))
        elif constants:
            rest = (own + np.eye(constants), np.zeros(constants), 0.0)
            whole.push_back(gtsam.HessianFactor(t, frames, here[0], here[2], here[3], *rest))
        else:
            whole.push_back(gtsam.HessianFactor(t, here[0], here[3], 0.0))
    if constants:
        order.push_back(frames)
    return whole, order


def theirs(gtsam: Any, blocks: Blocks) -> list[tuple[str, float]]:
    """Elimination by the factor-graph library, after a check that it has the same solution."""
    diagonal, lower, coupling, gradient, own = blocks
    frames, _, constants = coupling.shape
    told = []
    for label, count in (("", 0), (" with constants", constants)):
        if label and not constants:
            continue
        arrow = coupling[:, :, :count]
        eliminated = factor(from_arrays(diagonal, lower, arrow, gradient, own[:count, :count]), frames)
        wanted = step(eliminated, bounded_constants(eliminated)).states
        whole, order = graph(gtsam, blocks, count)
        solution = whole.eliminateMultifrontal(order).optimize()
        away = max(float(np.abs(solution.at(t) - wanted[t]).max()) for t in range(frames))
        if away > 1e-9:
            sys.exit(f"the two solvers differ by {away:.2g}")
        sequential = least(lambda w=whole, o=order: w.eliminateSequential(o), frames, 3)
        multifrontal = least(lambda w=whole, o=order: w.eliminateMultifrontal(o), frames, 3)
        told += [
            (f"GTSAM, sequential{label}", sequential),
            (f"GTSAM, multifrontal{label}", multifrontal),
        ]
    return told


def periodic(blocks: Blocks) -> Spans:
    """A system as long as one likes that repeats these frames, never there as a whole."""
    diagonal, lower, coupling, gradient, own = blocks
    period = len(gradient)
    links = np.concatenate([lower, lower[:1]])

    def spans(start: int, stop: int) -> Span:
        frames = np.arange(start, stop) % period
        share = own * (stop - start) / period
        return Span(diagonal[frames], links[frames], coupling[frames], gradient[frames], share)

    return spans


def peak_memory() -> float:
    """Largest memory of this process so far, MB; NaN where the system does not tell."""
    try:
        import resource
    except ImportError:
        return float("nan")
    used = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return used / (1e6 if sys.platform == "darwin" else 1e3)


def long_trial(frames: int, states: int, constants: int) -> None:
    """One trial whose arrow would not fit. Measured before all else: a peak of memory only grows."""
    system = periodic(made(512, states, constants))
    warm = factor(system, 300, memory=0.0)
    for _ in marginal_spans(warm, bounded_constants(warm), states // 2):
        pass
    step(warm, bounded_constants(warm))
    before = peak_memory()
    print(f"T = {frames}, p = {states}, c = {constants}, spans handed over and computed anew\n")
    print("| what | µs a frame |\n|---|---|")
    began = time.process_time()
    eliminated = factor(system, frames)
    times = [time.process_time()]
    posterior = bounded_constants(eliminated)
    step(eliminated, posterior)
    times.append(time.process_time())
    marginals(eliminated, posterior, states // 2)
    times.append(time.process_time())
    for what, spent in zip(("factor", "step", "marginals"), np.diff([began, *times]), strict=True):
        print(f"| {what} with constants | {1e6 * spent / frames:.1f} |")
    whole = 8e-6 * frames * states * constants
    print(
        f"\nPeak of memory rose by {peak_memory() - before:.0f} MB, results included; B alone as a whole "
        f"would be {whole:.0f} MB.\n"
    )


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description="Time the linear algebra of a trajectory.")
    parser.add_argument("--frames", type=int, nargs="+", default=[1000, 2000, 5000])
    parser.add_argument("--states", type=int, nargs="+", default=[24, 48])
    parser.add_argument("--constants", type=int, default=60)
    parser.add_argument("--long", type=int, default=50_000, help="frames of the long trial, 0 for none")
    given = parser.parse_args()
    if given.long:
        long_trial(given.long, given.states[0], given.constants)
    try:
        gtsam = importlib.import_module("gtsam")
    except ImportError:
        gtsam = None
        print("GTSAM is not installed: not compared.\n")
    for states in given.states:
        print(f"p = {states}, c = {given.constants}\n")
        print("| what | " + " | ".join(f"T = {frames}: µs a frame, ratio" for frames in given.frames) + " |")
        print("|---|" + "---|" * len(given.frames))
        table: dict[str, list[str]] = {}
        for frames in given.frames:
            blocks = made(frames, states, given.constants)
            stored = bands(blocks[0], blocks[1])
            ours(made(300, states, given.constants), states // 2)  # Compiles.
            measure = least(lambda stored=stored: lapack.dpbtrf(stored, lower=1), frames)
            rows = [("dpbtrf", measure), *ours(blocks, states // 2)]
            if gtsam is not None:
                rows += theirs(gtsam, blocks)
            for what, value in rows:
                table.setdefault(what, []).append(f"{value:.1f}, {value / measure:.2f}")
            gc.collect()
        for what, cells in table.items():
            goal = f" (wanted ≤ {GOALS[what]:g})" if what in GOALS and states == 24 else ""
            print(f"| {what}{goal} | " + " | ".join(cells) + " |")
        print()


if __name__ == "__main__":
    main()

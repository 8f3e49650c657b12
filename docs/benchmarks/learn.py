"""How long learning takes, against scikit-learn's exact Gaussian process in the same run.

    python docs/benchmarks/learn.py [--subjects 10] [--frames 1000] [--points 2000]

Prints a Markdown table. One thread; seconds are processor time, so that what else the machine does matters
little. The peak of memory is that of the whole process before scikit-learn starts: interpreter, libraries and
the invented data included. What is compared, and the numbers of one run: docs/benchmarks/README.md.
"""

from __future__ import annotations

import argparse
import os
import sys
import time
import warnings
from collections.abc import Callable
from dataclasses import dataclass

for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[name] = "1"

import numpy as np  # noqa: E402
import xarray as xr  # noqa: E402
from sklearn.exceptions import ConvergenceWarning  # noqa: E402
from sklearn.gaussian_process import GaussianProcessRegressor  # noqa: E402
from sklearn.gaussian_process.kernels import RBF, ConstantKernel, WhiteKernel  # noqa: E402

from sta_prior.checks import FloatArray  # noqa: E402
from sta_prior.prior import DEFAULT_FAMILY, learn  # noqa: E402
from sta_prior.testing import example_pairs  # noqa: E402

MARKERS = 12
OUTPUTS = 3 * MARKERS
"""One segment with all outputs in one covariance: the hardest way to have so many."""

WANTED_RATIO, WANTED_MEMORY = 1 / 100, 1000.0


@dataclass(frozen=True)
class Measured:
    """Processor and wall time, s."""

    processor: float
    wall: float


def measure(work: Callable[[], object]) -> Measured:
    """Do the work once and time it."""
    wall, processor = time.perf_counter(), time.process_time()
    work()
    return Measured(time.process_time() - processor, time.perf_counter() - wall)


def peak_memory() -> float:
    """Largest memory of this process so far, MB; NaN where the system does not tell."""
    try:
        import resource
    except ImportError:
        return float("nan")
    used = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return used / (1e6 if sys.platform == "darwin" else 1e3)


def one_output(pairs: xr.Dataset, points: int) -> tuple[FloatArray, FloatArray]:
    """Flexion of both joints (points, 2) rad and one standardised output (points,) at even steps."""
    chosen = np.linspace(0, pairs.sizes["frame"] - 1, points).astype(int)
    output = pairs["displacement"].values[chosen, 0, 0]
    return pairs["angle"].values[chosen, :, 0], (output - output.mean()) / output.std()


def fit_exact(angles: FloatArray, output: FloatArray) -> GaussianProcessRegressor:
    """Hyper-parameters by the marginal likelihood from one start, as scikit-learn does by default."""
    kernel = ConstantKernel(1.0, (1e-3, 1e3)) * RBF([0.5, 0.5], (0.05, 10.0)) + WhiteKernel(0.1, (1e-4, 10.0))
    with warnings.catch_warnings():
        # A length scale on its bound is an answer here, too.
        warnings.simplefilter("ignore", ConvergenceWarning)
        return GaussianProcessRegressor(kernel, alpha=0.0).fit(angles, output)


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description="Time learning against scikit-learn's exact process.")
    parser.add_argument("--subjects", type=int, default=10)
    parser.add_argument("--trials", type=int, default=3)
    parser.add_argument("--frames", type=int, default=1000)
    parser.add_argument("--points", type=int, default=2000)
    parser.add_argument("--family", default=DEFAULT_FAMILY)
    given = parser.parse_args()
    pairs = example_pairs(1, given.subjects, given.trials, given.frames, markers=MARKERS)
    pairs = pairs.isel(segment=[0], marker=slice(0, MARKERS))
    learned = measure(lambda: learn(pairs, given.family))
    memory = peak_memory()
    angles, output = one_output(pairs, given.points)
    exact = measure(lambda: fit_exact(angles, output))
    whole = OUTPUTS * exact.processor
    size = f"{given.subjects} subjects × {given.trials} trials × {given.frames} frames × {OUTPUTS} outputs"
    rows = [
        (f"`learn`, {given.family}, validation included: {size}", learned.processor, learned.wall),
        (f"scikit-learn, exact, one output on {given.points} points", exact.processor, exact.wall),
        (f"the same for {OUTPUTS} outputs (times {OUTPUTS})", whole, OUTPUTS * exact.wall),
    ]
    print("| what | processor time, s | wall time, s |\n|---|---|---|")
    for what, processor, wall in rows:
        print(f"| {what} | {processor:.1f} | {wall:.1f} |")
    ratio = learned.processor / whole
    print(f"\nRatio 1/{1 / ratio:.0f}, wanted at most 1/{1 / WANTED_RATIO:.0f}: {held(ratio, WANTED_RATIO)}.")
    print(f"Peak memory {memory:.0f} MB, wanted below {WANTED_MEMORY:.0f}: {held(memory, WANTED_MEMORY)}.")


def held(value: float, limit: float) -> str:
    """Whether a limit is kept, in a word."""
    return "held" if value <= limit else "missed"


if __name__ == "__main__":
    main()

"""How long the rigid fit of many frames takes, and how near it comes to the fit by singular values.

    python docs/benchmarks/rigid.py [--frames 1000000] [--loop 20000] [--cases 20000]

Prints two Markdown tables. One thread, one run; processor time. The measure is a Python loop over SciPy's
`Rotation.align_vectors`: it wants centred vectors, so the loop takes the means and the position too. It runs
on some frames only, and so do singular values, whose time is the same for each frame. Memory that the machine
has not given out before may cost more than the fit, so it is asked for first, and that time told by itself.
tests/test_rigid_many.py takes its cases from here.
"""

from __future__ import annotations

import argparse
import os
import time
import tracemalloc
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[name] = "1"

import numpy as np  # noqa: E402
from scipy.spatial.transform import Rotation  # noqa: E402

from sta_prior import se3  # noqa: E402
from sta_prior.checks import BoolArray, FloatArray  # noqa: E402
from sta_prior.rigid import MINIMUM_LINE_RATIO, fit_poses, fit_rigid  # noqa: E402
from sta_prior.rigid.kernels import fit_frames  # noqa: E402
from sta_prior.rigid.singular import fit_singular  # noqa: E402

WANTED_RATIO, WANTED_ACCURACY = 200.0, 1e-12
MOST_SINGULAR = 50_000
"""Frames on which singular values are timed: at a million their arrays would take gigabytes."""
RESULTS = 70
"""Numbers a frame that `fit_rigid` returns for five markers, about."""

THIGH = np.array(
    [[0.06, 0.25, 0.05], [0.09, 0.15, 0.02], [0.02, 0.12, 0.09], [-0.02, 0.2, 0.085], [0.08, 0.3, -0.01]]
)
"""Five markers, m."""
TETRAHEDRON = 0.05 * np.array([[1.0, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]])
SQUARE = 0.05 * np.array([[1.0, 1, 0], [-1, 1, 0], [-1, -1, 0], [1, -1, 0]])
LINE_RATIOS = (1e-1, 5e-2, 3e-2, 1e-2, 1e-3, 1e-4, 1e-5, 1e-6)


@dataclass(frozen=True)
class Case:
    """A cluster (m, 3) or (F, m, 3) and its measurement (F, m, 3), m; the poses (F, 4, 4) if noise-free."""

    reference: FloatArray
    points: FloatArray
    minimum_line_ratio: float = MINIMUM_LINE_RATIO
    poses: FloatArray | None = None


def nearly_on_a_line(ratio: float) -> FloatArray:
    """Five markers over 0.3 m with this line ratio to first order, (5, 3) m."""
    along = np.linspace(-0.15, 0.15, 5)
    # Across it, without a part that would only tilt the line.
    across = np.array([1.0, -1.0, 0.0, -1.0, 1.0])[:, None] * [0.0, 0.6, 0.0]
    across += np.array([-1.0, 2.0, 0.0, -2.0, 1.0])[:, None] * [0.0, 0.0, 0.4]
    across *= ratio * np.linalg.norm(along) / np.linalg.norm(across)
    axes = se3.rotation_of(se3.exp([0.4, -0.8, 0.3, 0.0, 0.0, 0.0]))
    placed: FloatArray = (np.column_stack([along, np.zeros((5, 2))]) + across) @ axes.T
    return placed


def cases(frames: int, seed: int = 0) -> dict[str, Case]:
    """Return clusters and measurements, easy and hard, by name."""
    rng = np.random.default_rng(seed)

    def measured(
        reference: FloatArray,
        sd: float = 0.0,
        of: FloatArray | None = None,
        minimum: float = MINIMUM_LINE_RATIO,
    ) -> Case:
        poses = se3.exp(np.concatenate([1.5 * rng.normal(size=(frames, 3)), rng.normal(size=(frames, 3))], 1))
        points = se3.transform_points(poses, reference)
        points = points + sd * rng.normal(size=points.shape)
        return Case(reference if of is None else of, points, minimum, None if sd or of is not None else poses)

    hidden = measured(THIGH, 0.005)
    hidden.points[rng.random(hidden.points.shape[:2]) < 0.3] = np.nan
    far, tiny = measured(THIGH, 0.005), measured(THIGH / 300, 2e-5)
    many = 0.1 * rng.normal(size=(frames, 5, 3))
    # Seven markers that show the cluster at 1/10 000, the rest of their motion being orthogonal to it.
    seven = 0.1 * rng.normal(size=(7, 3))
    others = 0.1 * rng.normal(size=(frames, 7, 3))
    seen = np.linalg.qr(np.column_stack([np.ones(7), seven]))[0]
    others -= seen @ (seen.T @ others)
    hardly = se3.transform_points(se3.exp(rng.normal(size=(frames, 6))), 1e-4 * seven + others)
    made = {
        "noise-free": measured(THIGH),
        "noise of 5 mm": measured(THIGH, 0.005),
        "three markers, 5 mm": measured(THIGH[:3], 0.005),
        "two markers twice, 5 mm": measured(THIGH[[0, 0, 1, 2, 2]], 0.005),
        "three in ten markers hidden, 5 mm": hidden,
        "square": measured(SQUARE),
        "square, 3 mm": measured(SQUARE, 0.003),
        "tetrahedron": measured(TETRAHEDRON),
        "cluster of 1 mm, 0.02 mm": tiny,
        "2 km away, 5 mm": Case(THIGH, far.points + np.array([1e3, -2e3, 500.0])),
        "cluster of 1 mm, 2 km away": Case(tiny.reference, tiny.points + np.array([1e3, -2e3, 500.0])),
        "noise of 30 mm": measured(THIGH, 0.03),
        "noise of 100 mm, as large as the cluster": measured(THIGH, 0.1),
        "points that have nothing to do with it": Case(THIGH, rng.normal(size=(frames, 5, 3))),
        "another reference in each frame, points unrelated": Case(many, rng.normal(size=(frames, 5, 3))),
        "points that hardly follow the cluster": Case(seven, hardly),
        "mirrored": measured(THIGH * [1.0, 1.0, -1.0], of=THIGH),
        "mirrored, 5 mm": measured(THIGH * [1.0, 1.0, -1.0], 0.005, of=THIGH),
        "mirrored tetrahedron, 1 mm": measured(-TETRAHEDRON, 0.001, of=TETRAHEDRON),
    }
    for ratio in LINE_RATIOS:
        line = nearly_on_a_line(ratio)
        made[f"line ratio {ratio:g}"] = measured(line, minimum=0.0)
        made[f"line ratio {ratio:g}, 2 mm"] = measured(line, 0.002)
    return made


def in_doubt(case: Case) -> BoolArray:
    """Frames that the compiled fit leaves to the singular values, shape (F,)."""
    frames, markers = case.points.shape[:2]
    doubtful = np.empty(frames, dtype=np.bool_)
    fit_frames(
        case.reference.reshape(-1, markers, 3),
        case.points,
        case.minimum_line_ratio,
        np.empty((frames, 4, 4)),
        np.empty(frames),
        np.empty(frames, dtype=np.bool_),
        np.empty(frames),
        doubtful,
        np.empty((0, markers, 3)),
        np.empty((0, 6, 6)),
    )
    return doubtful


def differences(case: Case) -> dict[str, float]:
    """Largest difference from the fit by singular values; `determined` is the number of frames that differ.

    Rotation in rad; position and residual by the largest coordinate; spread by that or the cluster's size;
    the line ratio as it is; covariance by its largest entry. NaN where no frame is determined.
    """
    fit = fit_rigid(case.reference, case.points, case.minimum_line_ratio)
    exact = fit_singular(case.reference, case.points, case.minimum_line_ratio)
    both = fit.determined & exact.determined
    found = {"determined": float((fit.determined != exact.determined).sum())}
    found["line ratio"] = float(np.abs(fit.line_ratio - exact.line_ratio).max(initial=0.0))
    if not both.any():
        return found | dict.fromkeys(("rotation", "position", "residual", "spread", "covariance"), np.nan)
    turn = (fit.pose - exact.pose)[both][:, :3, :3].reshape(-1, 9)
    far = np.nanmax(np.abs(case.points), axis=(1, 2), initial=1e-300)[both]
    centred = case.reference - np.nanmean(case.reference, axis=-2, keepdims=True)
    size = np.broadcast_to(np.sqrt((centred**2).sum(axis=(-2, -1))), both.shape)[both]
    residual = np.nan_to_num(fit.residual - exact.residual)[both].reshape(len(far), -1)
    covariance = np.abs(fit.unit_covariance - exact.unit_covariance)[both].max(axis=(1, 2))
    largest = np.abs(exact.unit_covariance[both]).max(axis=(1, 2))
    for label, values in {
        "rotation": np.linalg.norm(turn, axis=1) / np.sqrt(2.0),
        "position": np.linalg.norm((fit.pose - exact.pose)[both][:, :3, 3], axis=1) / far,
        "residual": np.abs(residual).max(axis=1) / far,
        "spread": np.abs(fit.spread - exact.spread)[both] / np.maximum(far, size),
        "covariance": covariance / largest,
    }.items():
        found[label] = float(values.max())
    return found


def loop(reference: FloatArray, points: FloatArray) -> None:
    """Fit frame by frame with SciPy, poses and all."""
    for target in points:
        mean, own_mean = target.mean(axis=0), reference.mean(axis=0)
        rotation, _ = Rotation.align_vectors(target - mean, reference - own_mean)
        pose = np.eye(4)
        pose[:3, :3] = rotation.as_matrix()
        pose[:3, 3] = mean - rotation.apply(own_mean)


def bare_loop(reference: FloatArray, points: FloatArray) -> None:
    """Nothing but SciPy's call, on vectors centred beforehand."""
    for target in points:
        Rotation.align_vectors(target, reference)


def spent(work: Callable[[], object]) -> float:
    """Processor time of the work, s."""
    began = time.process_time()
    work()
    return time.process_time() - began


def taken(work: Callable[[], object]) -> float:
    """Most memory that the work held at a time, MB."""
    tracemalloc.start()
    work()
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    return peak / 1e6


def held(good: bool) -> str:
    """Whether a limit is kept, in a word."""
    return "held" if good else "missed"


def shown(difference: float) -> str:
    """A difference as a cell."""
    return "none determined" if np.isnan(difference) else f"{difference:.0e}" if difference else "same bits"


def print_speed(frames: int, looped: int) -> None:
    """Measure and print the table of times."""
    rng = np.random.default_rng(1)
    # Compiled code is read, or made once after installation: no part of a frame's time.
    start = spent(lambda: fit_rigid(THIGH, np.repeat(THIGH[None], 100, axis=0)))
    points = np.empty((frames, 5, 3))
    for first in range(0, frames, 100_000):
        part = points[first : first + 100_000]
        poses = se3.exp(rng.normal(size=(len(part), 6)))
        part[:] = se3.transform_points(poses, THIGH) + 0.005 * rng.normal(size=part.shape)
    few, some = points[:looped], points[: min(frames, MOST_SINGULAR)]
    centred = few - few.mean(axis=1, keepdims=True)
    scale = 1e6
    wholly = scale * spent(lambda: loop(THIGH, few)) / looped
    barely = scale * spent(lambda: bare_loop(THIGH - THIGH.mean(axis=0), centred)) / looped
    singular = scale * spent(lambda: fit_singular(THIGH, some, MINIMUM_LINE_RATIO)) / len(some)
    fresh = spent(lambda: np.ones(frames * RESULTS))
    lean, full = ([spent(partial(fit, THIGH, points)) for _ in range(4)] for fit in (fit_poses, fit_rigid))
    rows = [
        (f"loop over `align_vectors`, means and position included ({looped} frames)", wholly),
        (f"`align_vectors` alone, centred beforehand ({looped} frames)", barely),
        (f"singular values of this package ({len(some)} frames)", singular),
        (f"`fit_poses`, first call ({frames} frames)", scale * lean[0] / frames),
        ("`fit_poses`, least of three more", scale * min(lean[1:]) / frames),
        ("`fit_rigid`, with residuals and covariances, first call", scale * full[0] / frames),
        ("`fit_rigid`, least of three more", scale * min(full[1:]) / frames),
    ]
    print("| 5 markers, noise of 5 mm | µs a frame | loop takes | `align_vectors` alone | singular values |")
    print("|---|---|---|---|---|")
    for what, each in rows:
        print(
            f"| {what} | {each:.3f} | ×{wholly / each:.1f} | ×{barely / each:.1f} | ×{singular / each:.1f} |"
        )
    ratio = wholly * frames / (scale * lean[0])
    wanted = f"wanted at least {WANTED_RATIO:.0f}: {held(ratio >= WANTED_RATIO)}"
    print(f"\nRatio of the first call of `fit_poses` {ratio:.0f}, {wanted}.")
    memory = [taken(partial(fit, THIGH, points)) for fit in (fit_poses, fit_rigid)]
    print(f"Memory beside the input of {points.nbytes / 1e6:.0f} MB, results included: ", end="")
    print(f"`fit_poses` {memory[0]:.0f} MB, `fit_rigid` {memory[1]:.0f} MB.")
    print(
        f"Touching {8e-6 * RESULTS * frames:.0f} MB of new memory: {scale * fresh / frames:.3f} µs a frame."
    )
    print(f"Reading the compiled code, or making it after installation: {start:.1f} s.\n")


def print_accuracy(frames: int) -> None:
    """Measure and print the table of differences from singular values, and the time of each case."""
    labels = ("rotation", "position", "residual", "spread", "line ratio", "covariance")
    print("| case | in doubt, % | `determined` differs | " + " | ".join(labels) + " | µs a frame |")
    print("|---" * (len(labels) + 4) + "|")
    worst = changed = 0.0
    for title, case in cases(frames).items():
        found = differences(case)
        each = spent(partial(fit_poses, case.reference, case.points, case.minimum_line_ratio))
        shares = " | ".join(shown(found[label]) for label in labels)
        doubt = 100 * in_doubt(case).mean()
        print(f"| {title} | {doubt:.2f} | {found['determined']:.0f} | {shares} | {1e6 * each / frames:.2f} |")
        worst = np.fmax(worst, max(found["rotation"], found["position"]))
        changed += found["determined"]
    kept = held(bool(worst <= WANTED_ACCURACY))
    print(f"\nLargest difference of a rotation, rad, or a position: {worst:.1e}, ", end="")
    print(f"wanted at most {WANTED_ACCURACY:g}: {kept}. Frames whose `determined` differs: {changed:.0f}.")


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description="Time the rigid fit, and hold it against singular values.")
    parser.add_argument("--frames", type=int, default=1_000_000)
    parser.add_argument("--loop", type=int, default=20_000)
    parser.add_argument("--cases", type=int, default=20_000)
    given = parser.parse_args()
    print_speed(given.frames, given.loop)
    print_accuracy(given.cases)


if __name__ == "__main__":
    main()

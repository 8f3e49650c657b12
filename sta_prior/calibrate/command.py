"""The command of the calibration: arguments, the trials, the table, the file.

Shell. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import argparse
import math
import sys
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from joblib import Parallel, delayed

from sta_prior.calibrate.draw import FRAMES, MARKER_SD, STEP, Recipe
from sta_prior.calibrate.ranks import QUANTITIES, Ranked, rank_one
from sta_prior.calibrate.uniformity import (
    LEVELS,
    Band,
    Uniformity,
    coverage_range,
    judge_uniformity,
    simultaneous_band,
)
from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, StaPriorError, message
from sta_prior.io.csv_table import write_rows
from sta_prior.solve.smoother import CONSTANT_TIME

FALSE_ALARM = 0.05
"""Probability that a right posterior is called wrong by any of three bounds of any quantity, at most."""

BOUNDS = 3
FEWEST_TRIALS, FEWEST_FRAMES = 20, 20

LONG_FRAMES = 200
"""Frames of a trial where information about the constants is bounded: shorter ones are not."""


@dataclass(frozen=True)
class Calibration:
    """Result of a calibration.

    places: (trials, quantities), of one frame a trial; band; judged: by quantity.
    """

    ranked: tuple[Ranked, ...]
    places: FloatArray
    band: Band
    judged: tuple[Uniformity, ...]

    @property
    def uniform(self) -> bool:
        """Whether every quantity keeps every bound."""
        return all(judged.uniform for judged in self.judged)


def calibrate(
    trials: int,
    seed: int,
    recipe: Recipe | None = None,
    *,
    constant_time: float = math.inf,
    workers: int = 1,
) -> Calibration:
    """Draw trials from the model, solve them, and judge where the truth stands in the posteriors.

    Parameters
    ----------
    trials : 20 or more
    seed : of the random numbers; the answer does not depend on the workers
    recipe : how trials are drawn
    constant_time : information about the constants that counts, s; infinite for all
    workers : processes

    Raises
    ------
    InputError : too few trials, frames or workers.

    Notes
    -----
    One frame of each trial is judged, so that values are independent: the first look of the first trial, the
    second of the second, and so on.

    References
    ----------
    Talts et al. (2018), Validating Bayesian inference algorithms with simulation-based calibration,
    doi 10.48550/arXiv.1804.06788.
    """
    recipe = recipe or Recipe()
    for name, least, got in (
        ("--trials", FEWEST_TRIALS, trials),
        ("--frames", FEWEST_FRAMES, recipe.frames),
        ("--seed", 0, seed),
        ("--workers", 1, workers),
    ):
        if got < least:
            raise InputError(message(name, f"expected {least} or more, got {got}"))
    jobs = (delayed(rank_one)(seed, number, recipe, constant_time) for number in range(trials))
    return judge(tuple(Parallel(n_jobs=workers)(jobs)))


def judge(ranked: tuple[Ranked, ...]) -> Calibration:
    """Judge where the truth stands in the posteriors, one frame a trial.

    Parameters
    ----------
    ranked : of each trial
    """
    places = np.stack([own.places[number % own.places.shape[0]] for number, own in enumerate(ranked)])
    band = simultaneous_band(len(ranked), FALSE_ALARM / (BOUNDS * len(QUANTITIES)))
    return Calibration(ranked, places, band, tuple(judge_uniformity(own, band) for own in places.T))


def table(found: Calibration, verdict: bool) -> str:
    """The table that is printed; without a verdict where none is due."""
    count = found.places.shape[0]
    ranges = [coverage_range(count, level) for level in LEVELS]
    low, high = found.judged[0].squared_range
    heads = [f"{100 * level:g} %" for level in LEVELS]
    lines = [
        f"{'quantity':<18}{heads[0]:>7}{heads[1]:>7}{heads[2]:>7}"
        f"{'χ² p':>9}{'ECDF':>8}{'bound':>7}{'z²':>7}{'z':>7}" + ("  verdict" if verdict else "")
    ]
    for name, own in zip(QUANTITIES, found.judged, strict=True):
        shares = "".join(f"{100 * share:7.1f}" for share in own.covered)
        numbers = (
            f"{own.chi_square_p:9.4f}{own.deviation:8.3f}{own.bound:7.3f}{own.squared:7.2f}{own.shift:7.2f}"
        )
        word = ("  uniform" if own.uniform else "  NOT UNIFORM") if verdict else ""
        lines.append(f"{name:<18}{shares}{numbers}{word}")
    chance = ", ".join(f"{100 * low:.1f}–{100 * high:.1f}" for low, high in ranges)
    stopped = sum(not own.converged for own in found.ranked)
    return "\n".join(
        [
            *lines,
            f"Coverage that chance allows, 95 % of times: {chance} %.",
            f"z: normal deviates of the places, an SD of their mean is {count**-0.5:.2f}.",
            f"Bounds: χ² p at least {found.band.level:.5f}; z² within {low:.2f}–{high:.2f}; a false alarm "
            f"anywhere in at most {100 * FALSE_ALARM:g} % of runs.",
            f"Trials: {count}, of which the iteration did not converge in {stopped}.",
        ]
    )


def _write(path: Path, found: Calibration) -> None:
    rows = []
    for number, own in enumerate(found.ranked):
        for look, frame in enumerate(own.frames):
            judged = "1" if look == number % len(own.frames) else "0"
            for name, place, sd in zip(QUANTITIES, own.places[look], own.sd[look], strict=True):
                rows.append((str(number), str(frame), judged, name, f"{place:.9g}", f"{sd:.6g}"))
    write_rows(path, "m", ("trial", "frame", "judged", "quantity", "place", "sd"), rows)


def parser() -> argparse.ArgumentParser:
    """The arguments."""
    result = argparse.ArgumentParser(
        prog="python -m sta_prior.calibrate",
        description="Simulation-based calibration of the smoother: trials are drawn from its own model; the "
        "truth must stand anywhere in the posterior equally often.",
    )
    result.add_argument("--trials", type=int, default=300, help="trials to draw (300)")
    result.add_argument(
        "--frames", type=int, help=f"frames of a trial, {STEP:g} s each ({FRAMES}; bounded {LONG_FRAMES})"
    )
    result.add_argument("--seed", type=int, default=1, help="of the random numbers (1)")
    result.add_argument("--workers", type=int, default=1, help="processes (1)")
    result.add_argument(
        "--constants",
        choices=("full", "bounded"),
        default="full",
        help=f"bounded: at most {CONSTANT_TIME:g} s of information about them, which covers too much "
        "(long trials); no verdict",
    )
    result.add_argument(
        "--joint",
        choices=("free", "soft"),
        default="free",
        help="free: drawn exactly; soft: a knee that travels, drawn approximately",
    )
    result.add_argument(
        "--noise",
        choices=("model", "white"),
        default="model",
        help=f"instrument noise of {1000 * MARKER_SD:g} mm as the model has it, or truly white, which it "
        "approximates; no verdict",
    )
    result.add_argument("--artifact", type=float, default=1.0, help="factor on all of the artifact (1)")
    result.add_argument("--out", type=Path, help="CSV file of all places")
    return result


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command; 0: calibrated, 1: not, 2: arguments that cannot be used."""
    asked = parser().parse_args(arguments)
    usual = FRAMES if asked.constants == "full" else LONG_FRAMES
    frames = usual if asked.frames is None else asked.frames
    recipe = Recipe(frames, asked.joint, asked.noise, asked.artifact)
    limit = math.inf if asked.constants == "full" else CONSTANT_TIME
    try:
        if not 0.0 < asked.artifact < math.inf:
            raise InputError(message("--artifact", f"expected a number above 0, got {asked.artifact:g}"))
        if asked.out is not None and not asked.out.parent.is_dir():
            raise InputError(
                message(asked.out, "expected a file in a folder that exists, got no such folder")
            )
        found = calibrate(asked.trials, asked.seed, recipe, constant_time=limit, workers=asked.workers)
        if asked.out is not None:
            _write(asked.out, found)
    except StaPriorError as error:
        sys.stderr.write(f"{error}\n")
        return 2
    verdict = asked.constants == "full" and asked.noise == "model"
    sys.stdout.write(table(found, verdict) + "\n")
    if not verdict:
        return 0
    sys.stdout.write("Calibrated.\n" if found.uniform else "Not calibrated.\n")
    return 0 if found.uniform else 1

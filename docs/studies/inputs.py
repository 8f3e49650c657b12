"""Whether a segment's tilt or the angular velocity, as inputs of a prior, help subjects never imaged.

    python docs/studies/inputs.py --studies 6 > table.md

One study: a new population; priors with each set of inputs from nine of its subjects; eight fresh subjects
solved frame by frame. The hip is not observed. Results: docs/inputs.md.
"""

from __future__ import annotations

import argparse
import warnings

import numpy as np
from scipy.stats import norm
from study_in_memory import artifacts_for, knee_angles, make_couriers, pairs_of, solve_trial

from sta_prior.checks import FloatArray
from sta_prior.errors import StaPriorWarning
from sta_prior.prior import learn
from sta_prior.se3 import inverse, log
from sta_prior.simulate import MECHANISMS, TASKS

VARIANTS: dict[str, tuple[str, ...]] = {
    "flexion alone": (),
    "and tilt": ("tilt",),
    "and angular velocity": ("angular-velocity",),
    "and both": ("tilt", "angular-velocity"),
}
SUBJECTS, FRESH, EVERY = 9, 8, 10
QUANTILE = float(norm.ppf(0.95))


def run_study(seed: int, mechanism: str) -> dict[str, FloatArray]:
    """Run one study.

    By variant: left-out RMS, mm, and coverage at 90 % of thigh and shank; RMS error of three angles, degrees,
    of the thigh's and the shank's position, mm; coverage of three angles.
    """
    couriers = make_couriers(seed, mechanism, SUBJECTS, FRESH)
    pairs = pairs_of(couriers.learned, couriers.population)
    result = {}
    for name, inputs in VARIANTS.items():
        prior = learn(pairs, inputs=inputs)
        table = prior.validation
        left_out = 1e3 * np.sqrt((table["rms_error"].values ** 2).mean(axis=1))
        covered = 100 * table["coverage"].sel(level=0.90).values.mean(axis=1)
        error, place, inside = [], [], []
        for subject in couriers.fresh:
            artifacts = artifacts_for(prior.segments, subject, inputs=inputs)
            for trial in subject.trials[: len(TASKS)]:
                frames = slice(0, None, EVERY)
                found = solve_trial(artifacts, subject, trial, frames, inputs=inputs)
                off = found.angles[:, 0] - knee_angles(trial.lab_from_bone[frames])
                error.append(off**2)
                inside.append(np.abs(off) <= QUANTILE * found.angle_sd[:, 0])
                away = log(inverse(trial.lab_from_bone[frames]) @ found.poses)[..., 3:]
                place.append((away**2).sum(axis=-1))
        angle = np.degrees(np.sqrt(np.concatenate(error).mean(axis=0)))
        position = 1e3 * np.sqrt(np.concatenate(place).mean(axis=0))
        share = 100 * np.concatenate(inside).mean(axis=0)
        result[name] = np.concatenate([left_out, covered, angle, position, share])
    return result


def main() -> None:
    """Read the arguments, run the studies, print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--studies", type=int, default=6)
    parser.add_argument("--first-seed", type=int, default=5000)
    chosen = parser.parse_args()
    warnings.simplefilter("ignore", StaPriorWarning)
    print(
        "| mechanism | inputs | left out, RMS, mm (thigh / shank) | covered at 90 % | knee error, degrees "
        "(flexion / adduction / rotation) | position error, mm (thigh / shank) | covered at 90 % |"
    )
    print("|---|---|---|---|---|---|---|")
    for mechanism in MECHANISMS:
        found = [run_study(chosen.first_seed + study, mechanism) for study in range(chosen.studies)]
        for name in VARIANTS:
            mean = np.mean([study[name] for study in found], axis=0)
            parts = np.split(mean, [2, 4, 7, 9])
            digits = (1, 0, 2, 1, 0)
            cells = [
                " / ".join(f"{value:.{digit}f}" for value in part)
                for part, digit in zip(parts, digits, strict=True)
            ]
            print(f"| {mechanism} | {name} | " + " | ".join(cells) + " |", flush=True)


if __name__ == "__main__":
    main()

"""Coverage of subjects that a prior has not learned from, over many simulated populations.

    python docs/studies/left_out_coverage.py --studies 20 --subjects 9 > table.md

One study: a new population; a prior from some of its subjects; every one of them left out in turn; eight
fresh subjects predicted by the finished prior; their trials solved. Coverage is the mean over subjects,
then over studies. Results: docs/left-out-coverage.md.
"""

from __future__ import annotations

import argparse
import warnings
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.stats import norm
from scipy.stats import t as student
from study_in_memory import KNEE, artifacts_for, make_couriers, pairs_of, solve_trial

from sta_prior.checks import FloatArray
from sta_prior.errors import StaPriorWarning
from sta_prior.prior.calibration import calibrate, few_subjects_factor, nested_coverage
from sta_prior.prior.families import find_family
from sta_prior.prior.family import SegmentModel
from sta_prior.prior.learning import _segment_data, joint_labels
from sta_prior.prior.statistics import segment_frames
from sta_prior.prior.validate import LeftOut, leave_one_out, predict_others
from sta_prior.simulate import MECHANISMS, SEGMENTS, TASKS, SimulatedSubject

LEVELS = np.array([0.50, 0.90, 0.95])
FAMILIES = ("linear", "reduced-rank-gp")
FRESH = 8
EVERY = 10  # frames of a fresh trial between those that are solved
FORMER_LARGEST = 4.0
CALIBRATED = "calibrated on left-out subjects"
Rule = Callable[[FloatArray, FloatArray], FloatArray]


@dataclass(frozen=True)
class Outcome:
    """One study and family; coverage in the order of LEVELS, mean over subjects and segments.

    left_out, fresh: by rule, (segments, 3); width: by rule, m, mean half-width at 90 % for fresh subjects;
    solved: by inflation's name, (3 levels, 3 angles); solved_sd: by name, (3 angles,) rad.
    """

    left_out: dict[str, FloatArray]
    fresh: dict[str, FloatArray]
    width: dict[str, float]
    solved: dict[str, FloatArray]
    solved_sd: dict[str, FloatArray]


def former_factor(subjects: int) -> float:
    """The factor with n − 1 degrees of freedom, which forgets the weak prior's own."""
    if subjects < 2:
        return FORMER_LARGEST
    return float(min((student.ppf(0.95, subjects - 1) / norm.ppf(0.95)) ** 2, FORMER_LARGEST))


def normal_rule(factor: float) -> Rule:
    """Normal intervals, the trial-constant variance times a factor; half-widths (3, values) m."""
    quantiles = norm.ppf(0.5 + 0.5 * LEVELS)
    return lambda constant, rest: quantiles[:, None] * np.sqrt(factor * constant + rest)


def satterthwaite_rule(freedom: float) -> Rule:
    """Student intervals; degrees of freedom by Satterthwaite, for only the constant part is uncertain."""

    def half_widths(constant: FloatArray, rest: FloatArray) -> FloatArray:
        variance = constant + rest
        own = np.minimum(freedom * (variance / np.maximum(constant, 1e-12)) ** 2, 1e4)
        return np.stack([student.ppf(0.5 + 0.5 * level, own) for level in LEVELS]) * np.sqrt(variance)

    return half_widths


def coverage(units: Sequence[LeftOut], rule: Rule) -> FloatArray:
    """Mean over subjects, (3,)."""
    inside = [(np.abs(u.error) <= rule(u.constant, u.rest)).mean(axis=1) for u in units]
    return np.asarray(np.mean(inside, axis=0), dtype=np.float64)


def ratios(units: Sequence[LeftOut], factor: float) -> list[FloatArray]:
    """Error over predicted SD of every subject."""
    return [unit.error / np.sqrt(factor * unit.constant + unit.rest) for unit in units]


def run_study(seed: int, mechanism: str, family: str, subjects: int, solving: bool = True) -> Outcome:
    """Make, learn, leave out and predict one study; solving: the fresh subjects' trials too."""
    couriers = make_couriers(seed, mechanism, subjects, FRESH)
    pairs = pairs_of(couriers.learned, couriers.population)
    others = pairs_of(couriers.fresh, couriers.population)
    factor = few_subjects_factor(subjects)
    rules = {
        "normal": normal_rule(1.0),
        "normal, factor of n − 1": normal_rule(former_factor(subjects)),
        "normal, factor of n + 1": normal_rule(factor),
        "Student, Satterthwaite": satterthwaite_rule(max(subjects - 1, 3)),
    }
    names = (*rules, CALIBRATED)
    models: dict[str, SegmentModel] = {}
    left_out: dict[str, list[FloatArray]] = {name: [] for name in names}
    fresh: dict[str, list[FloatArray]] = {name: [] for name in names}
    width: dict[str, list[float]] = {name: [] for name in names}
    for name in SEGMENTS:
        data = _segment_data(pairs, name, joint_labels(pairs))
        models[name] = find_family(family).learn(data)
        out = leave_one_out(models[name], data.frames, data.adjacent)
        new = predict_others(models[name], segment_frames(others, name, data.markers, {"knee": KNEE.dof}))
        for words, rule in rules.items():
            left_out[words].append(coverage(out, rule))
            fresh[words].append(coverage(new, rule))
            width[words].append(float(np.mean([rule(u.constant, u.rest)[1].mean() for u in new])))
        known = ratios(out, factor)
        factors = calibrate(known, subjects, LEVELS).factors
        left_out[CALIBRATED].append(nested_coverage(known, LEVELS).mean(axis=0))
        inside = [(np.abs(ratio)[:, None] <= factors).mean(axis=0) for ratio in ratios(new, factor)]
        fresh[CALIBRATED].append(np.mean(inside, axis=0))
        sd = [np.sqrt(factor * unit.constant + unit.rest).mean() for unit in new]
        width[CALIBRATED].append(float(factors[1] * np.mean(sd)))
    solved, solved_sd = {}, {}
    for words, inflation in (
        ("1", 1.0),
        ("factor of n − 1", former_factor(subjects)),
        ("factor of n + 1", factor),
    ):
        if not solving:
            break
        solved[words], solved_sd[words] = _solve(couriers.fresh, models, inflation)
    return Outcome(
        {name: np.array(left_out[name]) for name in names},
        {name: np.array(fresh[name]) for name in names},
        {name: float(np.mean(width[name])) for name in names},
        solved,
        solved_sd,
    )


def _solve(
    subjects: Sequence[SimulatedSubject], models: dict[str, SegmentModel], inflation: float
) -> tuple[FloatArray, FloatArray]:
    """Coverage (3 levels, 3 angles) and mean SD (3,) rad of the solved knee angles, one trial a task."""
    error, sd = [], []
    for subject in subjects:
        artifacts = artifacts_for(models, subject, inflation)
        for trial in subject.trials[: len(TASKS)]:
            solution = solve_trial(artifacts, subject, trial, slice(0, None, EVERY))
            error.append(solution.angles[:, 0] - trial.angles[::EVERY])
            sd.append(solution.angle_sd[:, 0])
    errors, spreads = np.concatenate(error), np.concatenate(sd)
    known = np.isfinite(errors).all(axis=1)
    inside = np.abs(errors[known]) <= norm.ppf(0.5 + 0.5 * LEVELS)[:, None, None] * spreads[known]
    return inside.mean(axis=1), spreads[known].mean(axis=0)


def three(values: FloatArray) -> str:
    """Percent with one digit, at the three levels."""
    return " / ".join(f"{100 * value:.1f}" for value in values)


def tables(outcomes: dict[tuple[str, str], list[Outcome]], subjects: int) -> str:
    """Markdown tables of coverage, widths and solved angles."""
    studies = len(next(iter(outcomes.values())))
    lines = [
        f"{subjects} subjects, {studies} studies each; coverage in % at 50 / 90 / 95.",
        "",
        "| mechanism | family | intervals | left out | fresh | worst segment | 90 % half-width, mm |",
        "|---|---|---|---|---|---|---|",
    ]
    for (mechanism, family), found in outcomes.items():
        for name in found[0].fresh:
            both = {k: np.mean([getattr(o, k)[name] for o in found], axis=0) for k in ("left_out", "fresh")}
            worst = max(float(np.abs(values - LEVELS).max()) for values in both.values())
            lines.append(
                f"| {mechanism} | {family} | {name} | {three(both['left_out'].mean(axis=0))} | "
                f"{three(both['fresh'].mean(axis=0))} | {100 * worst:.1f} | "
                f"{1e3 * np.mean([o.width[name] for o in found]):.1f} |"
            )
    lines += [
        "",
        "| mechanism | family | solver's inflation | knee angles, mean "
        "| 90 %: flexion / adduction / rotation | SD, degrees |",
        "|---|---|---|---|---|---|",
    ]
    for (mechanism, family), found in outcomes.items():
        for name in found[0].solved:
            share = np.mean([o.solved[name] for o in found], axis=0)
            sd = np.degrees(np.mean([o.solved_sd[name] for o in found], axis=0))
            lines.append(
                f"| {mechanism} | {family} | {name} | {three(share.mean(axis=1))} | {three(share[1])} | "
                f"{' / '.join(f'{value:.1f}' for value in sd)} |"
            )
    return "\n".join(lines)


def main() -> None:
    """Read the arguments, run the studies, print the tables."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--studies", type=int, default=20)
    parser.add_argument("--subjects", type=int, default=9)
    parser.add_argument("--families", nargs="+", default=list(FAMILIES))
    parser.add_argument("--first-seed", type=int, default=1000)
    chosen = parser.parse_args()
    warnings.simplefilter("ignore", StaPriorWarning)
    outcomes = {
        (mechanism, family): [
            run_study(chosen.first_seed + study, mechanism, family, chosen.subjects)
            for study in range(chosen.studies)
        ]
        for mechanism in MECHANISMS
        for family in chosen.families
    }
    print(tables(outcomes, chosen.subjects))


if __name__ == "__main__":
    main()

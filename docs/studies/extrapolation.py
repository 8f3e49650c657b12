"""The hard case: learned on level walking, asked about deep lifts.

    python docs/studies/extrapolation.py --studies 12 > table.md

One study: a new population; a prior from the walking trials of nine subjects; deep lifts (peak flexion
99–105°) of fresh subjects solved with it. Variants differ only in what happens beyond the walking range.
Results: docs/extrapolation.md.
"""

from __future__ import annotations

import argparse
import warnings
from collections.abc import Mapping
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.random import Generator
from scipy.stats import norm
from study_in_memory import (
    SPLIT,
    TRAVEL_SD,
    artifacts_for,
    make_couriers,
    only_tasks,
    pairs_of,
    solve_trial,
)

from sta_prior.checks import FloatArray
from sta_prior.errors import StaPriorWarning
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.calibration import few_subjects_factor
from sta_prior.prior.families import find_family
from sta_prior.prior.family import SegmentData, SegmentModel
from sta_prior.prior.interface import Artifact, Moments
from sta_prior.prior.learning import _segment_data, joint_labels
from sta_prior.simulate import MECHANISMS, SEGMENTS, TASKS, Population, SimulatedSubject, SimulatedTrial
from sta_prior.simulate.subject import simulate_trial

LIFT = "parcel-lift"
SUBJECTS, FRESH, EVERY = 9, 8, 5
EDGES = np.radians([0.0, 62.0, 75.0, 85.0, 95.0, 110.0])
DEEP = np.radians(85.0)
QUANTILE = float(norm.ppf(0.95))
LOOSENING = 0.3  # rad beyond the range at which the joint's travel variance has doubled
STEP = 0.05  # rad, of the loosened travel SD


@dataclass(frozen=True)
class Variant:
    """What happens beyond the walking range.

    family; held: features stay at the edge; growth_length: rad, over which the covariance grows, infinite
    for not at all; size: factor on what it grows by; loosened: whether the joint's travel is let go.
    """

    family: str
    held: bool = True
    growth_length: float = 0.25
    size: float = 1.0
    loosened: bool = False


VARIANTS: Mapping[str, Variant] = {
    "gp, held, no growth": Variant("reduced-rank-gp", growth_length=np.inf),
    "gp, held, growth over 0.5": Variant("reduced-rank-gp", growth_length=0.5),
    "gp, held, growth over 0.25": Variant("reduced-rank-gp"),
    "gp, held, growth over 0.25 to twice": Variant("reduced-rank-gp", size=2.0),
    "gp, held, growth over 0.25, joint loosened": Variant("reduced-rank-gp", loosened=True),
    "linear, held, growth over 0.25": Variant("linear"),
    "linear, not held": Variant("linear", held=False),
}


@dataclass(frozen=True)
class Beyond:
    """An artifact whose covariance grows otherwise beyond the training data; see Variant."""

    inner: FeatureArtifact
    growth_length: float
    size: float

    @property
    def residual(self) -> FloatArray:
        """Residual covariance, shape (n, n), m²."""
        return self.inner.residual

    @property
    def time_constant(self) -> float:
        """Decay time of the residual's correlation, s."""
        return self.inner.time_constant

    @property
    def constant_covariance(self) -> FloatArray:
        """Covariance of the trial-constant unknowns, shape (K·n, K·n), m²."""
        return self.inner.constant_covariance

    def moments(self, angles: FloatArray) -> Moments:
        """Moments at joint angles of shape (F, joints, 3), rad."""
        plain = replace(self.inner, magnitude=0.0 * self.inner.magnitude).moments(angles)
        excess = self.inner.basis.excess(angles)
        growth = self.size * -np.expm1(-0.5 * (excess / self.growth_length) ** 2)
        return replace(plain, covariance=plain.covariance + growth[:, None, None] * self.inner.magnitude)


@dataclass(frozen=True)
class Solved:
    """Frames of lifts: error, sd, true angles (F, 3) rad; inside (F, n) of displacement; its sd (F,) m."""

    error: FloatArray
    sd: FloatArray
    angles: FloatArray
    inside: FloatArray
    displacement_sd: FloatArray


def deep_lift(subject: SimulatedSubject, population: Population, generator: Generator) -> SimulatedTrial:
    """A lift of the subject with peak flexion 99–105°."""
    amplitude = subject.style.amplitude.copy()
    amplitude[TASKS.index(LIFT)] = generator.uniform(1.0, 1.04)
    deeper = replace(subject, style=replace(subject.style, amplitude=amplitude))
    return simulate_trial(deeper, population, LIFT, 1, generator)


def _models(family: str, data: Mapping[str, SegmentData]) -> dict[str, SegmentModel]:
    factor = few_subjects_factor(SUBJECTS)
    return {name: find_family(family).learn(own).with_inflation(factor) for name, own in data.items()}


def _solve(
    artifacts: list[Artifact], subject: SimulatedSubject, trial: SimulatedTrial, high: float, loosened: bool
) -> tuple[FloatArray, FloatArray]:
    """Error and SD of the knee angles; loosened: again, with a travel SD by the first solution's flexion."""
    first = solve_trial(artifacts, subject, trial, slice(0, None, EVERY))
    angles, sd = first.angles[:, 0].copy(), first.angle_sd[:, 0].copy()
    if loosened:
        excess = np.round(np.maximum(angles[:, 0] - high, 0.0) / STEP) * STEP
        for value in np.unique(excess[excess > 0.0]):
            travel_sd = TRAVEL_SD * float(np.sqrt(1.0 + (value / LOOSENING) ** 2))
            again = solve_trial(artifacts, subject, trial, slice(0, None, EVERY), travel_sd)
            here = excess == value
            angles[here], sd[here] = again.angles[here, 0], again.angle_sd[here, 0]
    return angles - trial.angles[::EVERY], sd


def run_study(seed: int, mechanism: str) -> dict[str, Solved]:
    """Learn on walking, solve deep lifts, with every variant."""
    couriers = make_couriers(seed, mechanism, SUBJECTS, FRESH)
    pairs = pairs_of(only_tasks(couriers.learned, ("level-walk",)), couriers.population)
    data = {name: _segment_data(pairs, name, joint_labels(pairs)) for name in SEGMENTS}
    models = {family: _models(family, data) for family in ("linear", "reduced-rank-gp")}
    generator = np.random.default_rng(seed)
    parts: dict[str, list[Solved]] = {name: [] for name in VARIANTS}
    for subject in couriers.fresh:
        trial = deep_lift(subject, couriers.population, generator)
        angles = trial.angles[::EVERY, None]
        truth = trial.displacement[::EVERY]
        for name, variant in VARIANTS.items():
            artifacts: list[Artifact] = []
            inside, spread = [], []
            for index, inner in enumerate(artifacts_for(models[variant.family], subject)):
                assert isinstance(inner, FeatureArtifact)
                high = inner.basis.reaches[0].high
                basis = inner.basis if variant.held else replace(inner.basis, reaches=())
                artifact = Beyond(replace(inner, basis=basis), variant.growth_length, variant.size)
                artifacts.append(artifact)
                moments = artifact.moments(angles)
                sd = np.sqrt(np.einsum("faa->fa", moments.covariance))
                own = truth[:, :SPLIT] if index == 0 else truth[:, SPLIT:]
                inside.append(np.abs(own.reshape(sd.shape) - moments.mean) <= QUANTILE * sd)
                spread.append(sd)
            error, angle_sd = _solve(artifacts, subject, trial, high, variant.loosened)
            parts[name].append(
                Solved(
                    error,
                    angle_sd,
                    trial.angles[::EVERY],
                    np.concatenate(inside, axis=1).astype(np.float64),
                    np.sqrt((spread[0] ** 2).mean(axis=1)),
                )
            )
    return {name: _joined(found) for name, found in parts.items()}


def _joined(parts: list[Solved]) -> Solved:
    fields = ("error", "sd", "angles", "inside", "displacement_sd")
    return Solved(*(np.concatenate([getattr(part, field) for part in parts]) for field in fields))


def tables(mechanism: str, studies: list[dict[str, Solved]]) -> str:
    """Markdown tables of one mechanism."""

    def triple(values: FloatArray, digits: int = 0) -> str:
        return " / ".join(f"{value:.{digits}f}" for value in values)

    head = f"{mechanism}, {len(studies)} studies"
    lines = [
        f"| {head}: beyond 85° | 90 % of flexion / adduction / rotation | worst study | RMS error, ° "
        "| mean SD, ° | displacement, 90 % |",
        "|---|---|---|---|---|---|",
    ]
    for name in VARIANTS:
        shares = []
        for study in studies:
            found = study[name]
            deep = (found.angles[:, 0] > DEEP) & np.isfinite(found.error[:, 0])
            shares.append((np.abs(found.error[deep]) <= QUANTILE * found.sd[deep]).mean(axis=0))
        whole = _joined([study[name] for study in studies])
        deep = (whole.angles[:, 0] > DEEP) & np.isfinite(whole.error[:, 0])
        lines.append(
            f"| {name} | {triple(100 * np.mean(shares, axis=0))} | {triple(100 * np.min(shares, axis=0))} | "
            f"{triple(np.degrees(np.sqrt((whole.error[deep] ** 2).mean(axis=0))), 1)} | "
            f"{triple(np.degrees(whole.sd[deep].mean(axis=0)), 1)} | {100 * whole.inside[deep].mean():.0f} |"
        )
    regions = [f"{np.degrees(a):.0f}–{np.degrees(b):.0f}°" for a, b in pairwise(EDGES)]
    lines += [
        "",
        f"| {head}: mean SD by flexion | {' | '.join(regions)} |",
        "|---|" + "---|" * len(regions),
    ]
    for name in VARIANTS:
        whole = _joined([study[name] for study in studies])
        cells = []
        for low, high in pairwise(EDGES):
            here = (whole.angles[:, 0] >= low) & (whole.angles[:, 0] < high) & np.isfinite(whole.error[:, 0])
            cells.append(
                f"{triple(np.degrees(whole.sd[here].mean(axis=0)), 1)}°, "
                f"{1e3 * whole.displacement_sd[here].mean():.1f} mm"
            )
        lines.append(f"| {name} | {' | '.join(cells)} |")
    return "\n".join(lines)


def main() -> None:
    """Read the arguments, run the studies, print the tables."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--studies", type=int, default=12)
    parser.add_argument("--first-seed", type=int, default=2000)
    chosen = parser.parse_args()
    warnings.simplefilter("ignore", StaPriorWarning)
    for mechanism in MECHANISMS:
        studies = [run_study(chosen.first_seed + index, mechanism) for index in range(chosen.studies)]
        print(tables(mechanism, studies), end="\n\n", flush=True)


if __name__ == "__main__":
    main()

"""Choose by left-out subjects how strongly deviations are shrunk towards independence.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: prior/hierarchy.py; the shrinkage
itself: prior/fitting.py.

Subjects are left out in turn, some at a time. The hierarchy is fitted to the others with each strength, and
the score of a left-out subject is the log density of all its frames given the others' frames, the weights of
population, subject and trials integrated out. The usual strengths are kept unless others score better by
more than one standard error of the differences over subjects: a choice made by a few subjects must not
follow their noise. First the features' strength is chosen, then the outputs' beside it. No choice is as far
as none at all, or as independence.

References
----------
Breiman et al. (1984), Classification and Regression Trees (the rule of one standard error; from memory).
Ledoit & Wolf (2004), J Multivar Anal 88, 365–411 (covariances drawn towards a plainer one; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.evidence import LeftOutScore
from sta_prior.prior.fitting import FitSettings, fit_covariances, state_of
from sta_prior.prior.hierarchy import Hierarchy, TrialStatistics

FEATURE_CHOICES = (0.2, 0.4, 0.7)
OUTPUT_CHOICES = (0.1, 0.2, 0.4)
FEWEST_SUBJECTS = 4
FOLDS = 5
"""Subjects are left out in at most so many groups."""

FIRST_ITERATIONS, FURTHER_ITERATIONS = 15, 5
"""Of a fit with the usual strengths, from the fit of all subjects; and of others, from that one."""

CHOSEN = "chosen by left-out subjects"
NO_BETTER = "kept: no others are clearly better for left-out subjects"
TOO_FEW = "kept: fewer than four subjects"
FIXED = "fixed"


@dataclass(frozen=True)
class Shrinkage:
    """How far deviations between units are drawn towards independence: shares 0 … 1, and why these."""

    features: float
    outputs: float
    reason: str

    def settings(self, base: FitSettings) -> FitSettings:
        """The same settings of a fit, with these strengths."""
        return replace(base, feature_shrinkage=self.features, output_shrinkage=self.outputs)

    @property
    def words(self) -> str:
        """For people."""
        return (
            f"between-subject shrinkage {100 * self.features:.0f} % between features, "
            f"{100 * self.outputs:.0f} % between outputs, {self.reason}"
        )


USUAL = Shrinkage(FitSettings().feature_shrinkage, FitSettings().output_shrinkage, FIXED)
"""What priors learned before there was a choice were fitted with."""


def choose_shrinkage(
    trials: list[TrialStatistics],
    relative: FloatArray,
    total: float,
    start: Hierarchy,
    settings: FitSettings | None = None,
) -> Shrinkage:
    """Strengths of shrinkage, by left-out subjects.

    Parameters
    ----------
    trials, relative, total : as fit_hierarchy takes them
    start : the fit of all subjects with the usual strengths, from which the fits to fewer begin
    settings : with the usual strengths; FitSettings() by default

    Returns
    -------
    Shrinkage: the usual strengths where there are fewer than FEWEST_SUBJECTS subjects, or where no others are
    better by more than one standard error over subjects.

    Notes
    -----
    Where frames that show every output have at least half the weight of every subject, they alone decide,
    which is much faster.
    """
    settings = settings or FitSettings()
    usual = (settings.feature_shrinkage, settings.output_shrinkage)
    judged = _complete_frames(trials)
    score = LeftOutScore(judged, relative)
    if len(score.subjects) < FEWEST_SUBJECTS:
        return Shrinkage(*usual, TOO_FEW)
    count = min(FOLDS, len(score.subjects))
    folds = [score.subjects[first::count] for first in range(count)]
    kept = [[trial for trial in judged if trial.subject not in fold] for fold in folds]
    plain = replace(settings, maximum_iterations=FIRST_ITERATIONS)
    states = [fit_covariances(rest, relative, total, state_of(start), plain)[0] for rest in kept]

    def scores(strengths: tuple[float, float]) -> FloatArray:
        own = Shrinkage(*strengths, "").settings(replace(settings, maximum_iterations=FURTHER_ITERATIONS))
        parts = [
            score(fit_covariances(rest, relative, total, state, own)[0], fold)
            for rest, state, fold in zip(kept, states, folds, strict=True)
        ]
        return np.concatenate(parts)

    best, known = usual, scores(usual)
    for others in ([(value, usual[1]) for value in FEATURE_CHOICES], None):
        rivals = others or [(best[0], value) for value in OUTPUT_CHOICES]
        found = {rival: scores(rival) for rival in rivals if rival != best}
        better = {rival: gained for rival, own in found.items() if (gained := clear_gain(own - known)) > 0.0}
        if better:
            best = max(better, key=lambda rival: better[rival])
            known = found[best]
    return Shrinkage(*best, NO_BETTER if best == usual else CHOSEN)


def clear_gain(differences: FloatArray) -> float:
    """Mean of the subjects' differences, shape (S,), if it is above its standard error; else 0."""
    mean = float(differences.mean())
    error = float(differences.std(ddof=1)) / np.sqrt(differences.size)
    return mean if mean > error else 0.0


def _complete_frames(trials: list[TrialStatistics]) -> list[TrialStatistics]:
    """The blocks that show every output, where they have half the weight of every subject; else all."""
    whole, complete = dict[str, float](), dict[str, float]()
    kept = []
    for trial in trials:
        blocks = tuple(block for block in trial.blocks if block.seen.all())
        for weights, own in ((whole, trial.blocks), (complete, blocks)):
            weights[trial.subject] = weights.get(trial.subject, 0.0) + sum(block.weight for block in own)
        if blocks:
            kept.append(replace(trial, blocks=blocks))
    return kept if all(complete[name] >= 0.5 * whole[name] for name in whole) else trials

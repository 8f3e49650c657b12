"""Marginal likelihood of the hierarchy: how probable the frames are under its covariances.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: prior/hierarchy.py.

References
----------
Patterson & Thompson (1971), Biometrika 58, 545–554 (restricted likelihood; from memory).
Bates et al. (2015), J Stat Softw 67(1), doi 10.18637/jss.v067.i01 (REML criterion, the same constants).
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.complete import CompleteTrials, complete_trials
from sta_prior.prior.expectation import State
from sta_prior.prior.hierarchy import (
    POPULATION_WIDTH,
    Hierarchy,
    Message,
    TrialStatistics,
    population_prior,
    population_width,
    through,
    total_message,
    trial_message,
    without_subject,
)
from sta_prior.prior.ladder import invert_information, make_rung, make_split, population_covariance

_LOG_TWO_PI = math.log(2.0 * math.pi)


def _log_determinant(matrix: FloatArray) -> float:
    return float(np.linalg.slogdet(matrix)[1])


def _of_frames(trial: TrialStatistics, residual: FloatArray) -> float:
    """Log likelihood of the frames if all weights were zero."""
    total = 0.0
    for block in trial.blocks:
        inner = residual[np.ix_(block.seen, block.seen)]
        moment = block.output_gram[np.ix_(block.seen, block.seen)]
        total -= 0.5 * block.weight * (len(inner) * _LOG_TWO_PI + _log_determinant(inner))
        total -= 0.5 * float(np.trace(np.linalg.solve(inner, moment)))
    return total


def _integrated(message: Message, spread: FloatArray) -> float:
    """Log of the integral of the message over a weight vector of N(0, spread)."""
    inner = np.eye(spread.shape[0]) + message.precision @ spread
    gain = float(message.shift @ spread @ np.linalg.solve(inner, message.shift))
    return 0.5 * (gain - _log_determinant(inner))


def marginal_log_likelihood(
    hierarchy: Hierarchy,
    trials: list[TrialStatistics],
    relative: FloatArray,
    width: float = POPULATION_WIDTH,
    free_constant: bool = False,
    point_population: bool = False,
) -> float:
    """Log likelihood of all frames with subject, trial and population weights integrated out.

    Parameters
    ----------
    hierarchy : its covariances; the residual is the observed one, its population is not used
    trials : what it is asked about
    relative, width, free_constant : prior of the population, as for population_width
    point_population : population weights at their maximum instead of integrated out, which needs an
        infinite width: maximum likelihood

    Returns
    -------
    Constants included. With an infinite width this is the restricted log likelihood, −½ times the REML
    criterion; with ``point_population`` −½ times the deviance.

    Raises
    ------
    NotDeterminedError : population weights without a prior that the data do not determine.

    Notes
    -----
    A frame of weight κ counts as the κ-th power of its density.
    """
    n, size = hierarchy.residual.shape[0], hierarchy.subject_covariance.shape[0]
    total = 0.0
    above = []
    for name in dict.fromkeys(trial.subject for trial in trials):
        own = []
        for trial in trials:
            if trial.subject == name:
                told = trial_message(trial, hierarchy.observed_residual)
                total += _of_frames(trial, hierarchy.observed_residual)
                total += _integrated(told, hierarchy.trial_covariance)
                own.append(through(told, hierarchy.trial_covariance))
        joint = total_message(own, size)
        total += _integrated(joint, hierarchy.subject_covariance)
        above.append(through(joint, hierarchy.subject_covariance))
    whole = total_message(above, size)
    prior = population_width(trials, relative, width, free_constant)
    if np.isfinite(prior).all():
        return total + _integrated(whole, np.asarray(np.kron(np.diag(prior), hierarchy.subject_outputs)))
    free = np.flatnonzero(np.repeat(prior > 0.0, n))
    covariance = invert_information(whole.precision[np.ix_(free, free)])
    total += 0.5 * float(whole.shift[free] @ covariance @ whole.shift[free])
    if not point_population:
        total += 0.5 * (free.size * _LOG_TWO_PI + _log_determinant(covariance))
    return total


class LeftOutScore:
    """Log density of subjects' frames given the frames of others.

    trials : statistics of all trials of all subjects
    relative : shape (K,), prior variance of each feature's weight against the mean square displacement
    """

    def __init__(self, trials: list[TrialStatistics], relative: FloatArray) -> None:
        self._trials, self._relative = trials, relative
        self.subjects = sorted({trial.subject for trial in trials})
        self._complete: CompleteTrials | None = None
        if all(block.seen.all() for trial in trials for block in trial.blocks):
            self._complete = complete_trials(trials, self.subjects)

    def __call__(self, state: State, left_out: Sequence[str]) -> FloatArray:
        """Scores of the subjects left out, each alone, shape (len(left_out),), nats.

        Parameters
        ----------
        state : covariances, fitted to the others
        left_out : names; the population learns from all other subjects
        """
        others = [trial for trial in self._trials if trial.subject not in left_out]
        own = [[trial for trial in self._trials if trial.subject == name] for name in left_out]
        frames = [sum(_of_frames(trial, state.residual) for trial in mine) for mine in own]
        if self._complete is None:
            weights = self._dense(state, others, own)
        else:
            weights = self._split(self._complete, state, others, left_out)
        return np.asarray(np.add(frames, weights), dtype=np.float64)

    def _split(
        self, complete: CompleteTrials, state: State, others: list[TrialStatistics], left_out: Sequence[str]
    ) -> list[float]:
        """Output by output, where every frame shows every output."""
        split = make_split(state.outputs, state.residual)
        trial = complete.rung(state.trial, state.residual, split)
        told, shift = trial.above(), trial.up()
        kept = [index for index, name in enumerate(self.subjects) if name not in left_out]
        rung = make_rung(state.subject, told[kept])
        width = population_width(others, self._relative)
        population = population_covariance(rung.above.sum(axis=0), width)
        mean = np.einsum("nkl,nl->nk", population, rung.up(shift[kept]).sum(axis=0))
        spread, result = population + state.subject, []
        for index in (self.subjects.index(name) for name in left_out):
            reach = np.einsum("nkl,nl->nk", told[index], mean)
            inner = np.eye(mean.shape[1]) + told[index] @ spread
            rest = shift[index] - reach
            solved = np.linalg.solve(inner, rest[..., None])[..., 0]
            gain = np.einsum("nk,nkl,nl->", rest, spread, solved)
            known = float(((shift[index] - 0.5 * reach) * mean).sum())
            size = float(np.linalg.slogdet(inner)[1].sum())
            result.append(trial.log_integral(index) + known + 0.5 * (float(gain) - size))
        return result

    def _dense(
        self, state: State, others: list[TrialStatistics], own: list[list[TrialStatistics]]
    ) -> list[float]:
        """In one vector of all weights, where outputs are hidden."""
        prior = population_prior(others, self._relative)
        hierarchy = Hierarchy(
            prior, state.subject, state.outputs, state.trial, state.outputs, state.residual, state.residual,
            0, "",
        )  # fmt: skip
        population = without_subject(hierarchy, others, self._relative, "").population
        mean, spread = population.mean.reshape(-1), population.covariance + hierarchy.subject_covariance
        result = []
        for mine in own:
            told = [trial_message(trial, state.residual) for trial in mine]
            trials = sum(_integrated(message, hierarchy.trial_covariance) for message in told)
            whole = total_message(
                [through(message, hierarchy.trial_covariance) for message in told], mean.size
            )
            reach = whole.precision @ mean
            known = float((whole.shift - 0.5 * reach) @ mean)
            about = Message(whole.precision, whole.shift - reach)
            result.append(trials + known + _integrated(about, spread))
        return result

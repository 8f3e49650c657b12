"""Marginal likelihood of the hierarchy: how probable the frames are under its covariances.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: prior/hierarchy.py.

References
----------
Patterson & Thompson (1971), Biometrika 58, 545–554 (restricted likelihood; from memory).
Bates et al. (2015), J Stat Softw 67(1), doi 10.18637/jss.v067.i01 (REML criterion, the same constants).
"""

from __future__ import annotations

import math

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.hierarchy import (
    POPULATION_WIDTH,
    Hierarchy,
    Message,
    TrialStatistics,
    population_width,
    through,
    total_message,
    trial_message,
)
from sta_prior.prior.ladder import invert_information

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

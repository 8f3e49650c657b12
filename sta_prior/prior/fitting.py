"""Fit the hierarchy of artifact weights by expectation–maximisation.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: prior/hierarchy.py.

References
----------
Laird & Ware (1982), Biometrics 38, 963–974 (random effects by EM; from memory).
Dutilleul (1999), J Stat Comput Simul 64, 105–123 (alternating estimates of a matrix-normal law; from
memory).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.gaussian import nearest_psd, subtract_psd, symmetrise
from sta_prior.prior.hierarchy import (
    Block,
    Hierarchy,
    Message,
    TrialStatistics,
    Weights,
    condition_on,
    population_prior,
    scale_of,
    through,
    total_message,
    trial_message,
    unison_covariance,
)

PSEUDO_UNITS = 2.0
"""Weight of the prior on every covariance, in subjects, trials or independent frames."""

FEATURE_SHRINKAGE = 0.4
OUTPUT_SHRINKAGE = 0.2
"""Parts of the way that a between-unit covariance is drawn towards its diagonal."""

BETWEEN_SHARE = 0.5
"""Part of the mean square displacement that the prior gives to the spread between units."""

INSTRUMENT_SD = 0.0005
"""Joins the bone-truth noise in the metric in which that is taken out, m; the residual has no floor."""

MAXIMUM_ITERATIONS = 60
TOLERANCE = 1e-3


def _shrink(matrix: FloatArray, share: float) -> FloatArray:
    return (1.0 - share) * matrix + share * np.diag(np.diag(matrix))


def _structured(
    second_moment: FloatArray, units: float, features: FloatArray, outputs: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """One flip-flop step of the matrix-normal fit to Σ E[u uᵀ], shape (K, n, K, n)."""
    count, n = features.shape[0], outputs.shape[0]
    output_precision = np.linalg.solve(outputs, np.eye(n))
    features = np.einsum("kalb,ab->kl", second_moment, output_precision) / (n * units)
    features = _shrink(symmetrise(features), FEATURE_SHRINKAGE)
    feature_precision = np.linalg.solve(features, np.eye(count))
    outputs = np.einsum("kalb,kl->ab", second_moment, feature_precision) / (count * units)
    outputs = _shrink(symmetrise(outputs), OUTPUT_SHRINKAGE)
    size = float(np.trace(outputs)) / n
    return features * size, outputs / size


def _residual_moment(block: Block, weights: Weights, residual: FloatArray) -> FloatArray:
    """Expected Σκ r rᵀ of a block, hidden outputs completed from the seen ones (EM)."""
    count, n = weights.mean.shape
    mean = weights.mean
    spread = weights.covariance.reshape(count, n, count, n)
    moment = block.output_gram - mean.T @ block.cross - block.cross.T @ mean
    moment = moment + mean.T @ block.feature_gram @ mean
    moment = moment + np.einsum("kalb,kl->ab", spread, block.feature_gram)
    if block.seen.all():
        return symmetrise(moment)
    seen, hidden = np.flatnonzero(block.seen), np.flatnonzero(~block.seen)
    inner = moment[np.ix_(seen, seen)]
    gain = np.linalg.solve(residual[np.ix_(seen, seen)], residual[np.ix_(seen, hidden)]).T
    rest = residual[np.ix_(hidden, hidden)] - gain @ residual[np.ix_(seen, hidden)]
    full = np.zeros((n, n))
    full[np.ix_(seen, seen)] = inner
    full[np.ix_(hidden, seen)] = gain @ inner
    full[np.ix_(seen, hidden)] = (gain @ inner).T
    full[np.ix_(hidden, hidden)] = block.weight * rest + gain @ inner @ gain.T
    return symmetrise(full)


def fit_hierarchy(
    trials: list[TrialStatistics],
    fixed_at_reference: BoolArray,
    start: Hierarchy | None = None,
    maximum_iterations: int = MAXIMUM_ITERATIONS,
) -> Hierarchy:
    """Fit the hierarchy by expectation–maximisation with weak, proper priors on every covariance.

    Parameters
    ----------
    trials : statistics of all trials of all subjects
    fixed_at_reference : shape (K,), features whose population weight is zero by definition
        (the constant one: artifact is zero in the reference posture)
    start : a fit of nearly the same data, to begin from
    maximum_iterations : cap

    Returns
    -------
    Hierarchy; ``stop_reason`` says whether the tolerance was reached.

    Notes
    -----
    The covariance priors weigh as two units: with one subject, the between-subject spread is
    that prior's, sized by the data's own magnitude and labelled so by the caller.
    """
    scale = scale_of(trials)
    n = trials[0].blocks[0].seen.size
    count = scale.features.size
    size = count * n
    base_outputs = unison_covariance(n)
    base_features = BETWEEN_SHARE / count * np.diag(scale.features)
    prior = population_prior(trials, fixed_at_reference)
    pseudo = PSEUDO_UNITS * np.einsum("kl,ab->kalb", base_features, base_outputs)
    residual_prior = PSEUDO_UNITS * scale.residual * unison_covariance(n, 0.5)
    state = start or Hierarchy(
        prior, base_features, base_outputs, base_features, base_outputs,
        residual_prior / PSEUDO_UNITS, residual_prior / PSEUDO_UNITS, 0, "start",
    )  # fmt: skip
    subjects = sorted({trial.subject for trial in trials})
    groups = {name: [trial for trial in trials if trial.subject == name] for name in subjects}
    stop_reason = f"not converged in {maximum_iterations} iterations"
    iterations = 0
    while iterations < maximum_iterations:
        iterations += 1
        state, change = _expectation_maximisation(state, prior, groups, pseudo, residual_prior, size)
        if change < TOLERANCE:
            stop_reason = f"relative change of the covariances below {TOLERANCE:g}"
            break
    blocks = [block for trial in trials for block in trial.blocks]
    # Bone-truth noise of a hidden output is unknown there: average over the frames that saw it.
    seen_weight = sum(block.weight * np.outer(block.seen, block.seen) for block in blocks)
    noise = nearest_psd(sum(block.noise_gram for block in blocks) / np.maximum(seen_weight, 1e-12))
    residual = subtract_psd(state.observed_residual, noise, INSTRUMENT_SD**2)
    return replace(state, residual=residual, iterations=iterations, stop_reason=stop_reason)


def _expectation_maximisation(
    state: Hierarchy,
    prior: Weights,
    groups: dict[str, list[TrialStatistics]],
    pseudo: FloatArray,
    residual_prior: FloatArray,
    size: int,
) -> tuple[Hierarchy, float]:
    """One iteration; returns the new state and the largest relative change of its covariances."""
    count, n = prior.mean.shape
    between, within = state.subject_covariance, state.trial_covariance
    raw = {
        name: [trial_message(trial, state.observed_residual) for trial in trials]
        for name, trials in groups.items()
    }
    up = {name: [through(item, within) for item in items] for name, items in raw.items()}
    to_population = {name: through(total_message(items, size), between) for name, items in up.items()}
    total = total_message(list(to_population.values()), size)
    population = condition_on(prior, total)

    subject_moment, trial_moment = pseudo.copy(), pseudo.copy()
    residual_moment, weight, trial_count = residual_prior.copy(), PSEUDO_UNITS, 0
    for name, trials in groups.items():
        own = to_population[name]
        others = Message(total.precision - own.precision, total.shift - own.shift)
        cavity = condition_on(prior, others)
        reach = Weights(cavity.mean, cavity.covariance + between)
        subject_moment += _deviation_moment(reach, total_message(up[name], size), between, (count, n))
        for index, trial in enumerate(trials):
            rest = total_message([item for other, item in enumerate(up[name]) if other != index], size)
            around = condition_on(reach, rest)
            around = Weights(around.mean, around.covariance + within)
            trial_moment += _deviation_moment(around, raw[name][index], within, (count, n))
            trial_count += 1
            weights = condition_on(around, raw[name][index])
            for block in trial.blocks:
                residual_moment = residual_moment + _residual_moment(block, weights, state.observed_residual)
                weight += block.weight
    subject_features, subject_outputs = _structured(
        subject_moment, len(groups) + PSEUDO_UNITS, state.subject_features, state.subject_outputs
    )
    trial_features, trial_outputs = _structured(
        trial_moment, trial_count + PSEUDO_UNITS, state.trial_features, state.trial_outputs
    )
    observed = symmetrise(residual_moment / weight)
    new = Hierarchy(
        population, subject_features, subject_outputs, trial_features, trial_outputs,
        observed, observed, 0, "",
    )  # fmt: skip
    pairs = (
        (np.diag(subject_features), np.diag(state.subject_features)),
        (np.diag(trial_features), np.diag(state.trial_features)),
        (np.diag(observed), np.diag(state.observed_residual)),
    )
    change = max(float(np.max(np.abs(now - before) / np.abs(before))) for now, before in pairs)
    return new, change


def _deviation_moment(
    reach: Weights, message: Message, spread: FloatArray, shape: tuple[int, int]
) -> FloatArray:
    """E[e eᵀ] of a deviation e ~ N(0, spread) that is part of ``reach``, shape (K, n, K, n)."""
    size = spread.shape[0]
    mean = reach.mean.reshape(-1)
    right = np.column_stack([message.precision, message.shift - message.precision @ mean])
    solved = np.linalg.solve(np.eye(size) + message.precision @ reach.covariance, right)
    expected = spread @ solved[:, -1]
    moment = spread - spread @ solved[:, :-1] @ spread + np.outer(expected, expected)
    return symmetrise(moment).reshape(*shape, *shape)

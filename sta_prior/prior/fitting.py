"""Fit the hierarchy of artifact weights by expectation–maximisation.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: prior/hierarchy.py.

Subject and trial deviations share one covariance M over the outputs. Then a change of outputs that
makes Σ the unit matrix and M diagonal splits the problem into n independent ones of K weights each, and
an iteration costs n·K³ a trial instead of (n·K)³. Outputs that a frame hides are completed with their
expectation, and their own spread enters Σ; the beliefs that are reported are then computed from the
seen outputs alone.

References
----------
Laird & Ware (1982), Biometrics 38, 963–974 (random effects by EM; from memory).
Dutilleul (1999), J Stat Comput Simul 64, 105–123 (alternating estimates of a matrix-normal law; from
memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.gaussian import nearest_psd, subtract_psd, symmetrise
from sta_prior.prior.hierarchy import (
    POPULATION_WIDTH,
    Block,
    Hierarchy,
    TrialStatistics,
    Weights,
    population_prior,
    scale_of,
    unison_covariance,
    without_subject,
)

INSTRUMENT_SD = 0.0005
"""Floor of the residual after bone-truth noise is taken out, m."""


@dataclass(frozen=True)
class FitSettings:
    """How strongly weak priors and shrinkage act, and when to stop.

    pseudo_units: weight of the prior on every covariance, in subjects, trials or independent frames;
    feature_shrinkage, output_shrinkage: part of the way that a between-unit covariance is drawn towards
    its diagonal; between_share: part of the mean square displacement that the prior gives to the spread
    between units; trial_level: whether trials of a subject deviate from each other; population_width:
    prior variance of population weights against the mean square displacement, very large for REML.
    """

    pseudo_units: float = 2.0
    feature_shrinkage: float = 0.4
    output_shrinkage: float = 0.2
    between_share: float = 0.5
    trial_level: bool = True
    population_width: float = POPULATION_WIDTH
    maximum_iterations: int = 60
    tolerance: float = 1e-3


@dataclass(frozen=True)
class _State:
    """Current covariances: A_u, A_v (K, K) m²; M (n, n) unitless, trace n; Σ (n, n) m²."""

    subject: FloatArray
    trial: FloatArray
    outputs: FloatArray
    residual: FloatArray


@dataclass(frozen=True)
class _Split:
    """Outputs that make Σ the unit matrix and M diagonal: to (n, n), back (n, n), spread (n,)."""

    to: FloatArray
    back: FloatArray
    spread: FloatArray


@dataclass(frozen=True)
class _Belief:
    """n independent beliefs about K weights: mean (n, K), covariance (n, K, K)."""

    mean: FloatArray
    covariance: FloatArray

    def spread_by(self, covariance: FloatArray) -> _Belief:
        """The belief about the sum with an independent deviation."""
        return _Belief(self.mean, self.covariance + covariance)


@dataclass(frozen=True)
class _Information:
    """n independent messages about K weights: precision (n, K, K), shift (n, K)."""

    precision: FloatArray
    shift: FloatArray

    def __add__(self, other: _Information) -> _Information:
        return _Information(self.precision + other.precision, self.shift + other.shift)

    def __sub__(self, other: _Information) -> _Information:
        return _Information(self.precision - other.precision, self.shift - other.shift)


def _split(state: _State) -> _Split:
    factor = np.linalg.cholesky(state.residual)
    inverse = np.linalg.solve(factor, np.eye(factor.shape[0]))
    spread, axes = np.linalg.eigh(symmetrise(inverse @ state.outputs @ inverse.T))
    return _Split(inverse.T @ axes, axes.T @ factor.T, np.maximum(spread, 1e-12 * spread[-1]))


def _solve(
    information: _Information, covariance: FloatArray, mean: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """(1 + ΛC)⁻¹ applied to Λ and to η − Λ·mean: needs no inverse of either."""
    innovation = information.shift - np.einsum("nkl,nl->nk", information.precision, mean)
    right = np.concatenate([information.precision, innovation[..., None]], axis=-1)
    identity = np.eye(covariance.shape[-1])
    solved = np.linalg.solve(identity + information.precision @ covariance, right)
    return solved[..., :-1], solved[..., -1]


def _condition(belief: _Belief, information: _Information) -> _Belief:
    gain, pull = _solve(information, belief.covariance, belief.mean)
    mean = belief.mean + np.einsum("nkl,nl->nk", belief.covariance, pull)
    return _Belief(mean, belief.covariance - belief.covariance @ gain @ belief.covariance)


def _through(information: _Information, deviation: FloatArray) -> _Information:
    precision, shift = _solve(information, deviation, np.zeros(information.shift.shape))
    return _Information(precision, shift)


def _deviation(reach: _Belief, information: _Information, deviation: FloatArray) -> _Belief:
    """Posterior of a deviation that is part of ``reach``."""
    gain, pull = _solve(information, reach.covariance, reach.mean)
    mean = np.einsum("nkl,nl->nk", deviation, pull)
    return _Belief(mean, deviation - deviation @ gain @ deviation)


@dataclass(frozen=True)
class _Completed:
    """A trial with hidden outputs filled: gram (K, K), cross (K, n), output_gram (n, n)."""

    gram: FloatArray
    cross: FloatArray
    output_gram: FloatArray


def _complete(block: Block, mean: FloatArray, residual: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Cross and output moments of a block with hidden outputs at their expectation, given weights."""
    if block.seen.all():
        return block.cross, block.output_gram
    seen, hidden = np.flatnonzero(block.seen), np.flatnonzero(~block.seen)
    gram, at_seen, at_hidden = block.feature_gram, mean[:, seen], mean[:, hidden]
    inner = residual[np.ix_(seen, seen)]
    gain = np.linalg.solve(inner, residual[np.ix_(seen, hidden)]).T
    # Sums over frames of z rᵀ, d rᵀ and r rᵀ, r what the weights leave of the seen outputs.
    feature_rest = block.cross[:, seen] - gram @ at_seen
    output_rest = block.output_gram[np.ix_(seen, seen)] - block.cross[:, seen].T @ at_seen
    rest = output_rest - at_seen.T @ feature_rest
    cross = block.cross.copy()
    cross[:, hidden] = gram @ at_hidden + feature_rest @ gain.T
    moment = block.output_gram.copy()
    moment[np.ix_(seen, hidden)] = block.cross[:, seen].T @ at_hidden + output_rest @ gain.T
    moment[np.ix_(hidden, seen)] = moment[np.ix_(seen, hidden)].T
    mixed = at_hidden.T @ feature_rest @ gain.T
    own = residual[np.ix_(hidden, hidden)] - gain @ residual[np.ix_(seen, hidden)]
    moment[np.ix_(hidden, hidden)] = (
        at_hidden.T @ gram @ at_hidden + mixed + mixed.T + gain @ rest @ gain.T + block.weight * own
    )
    return cross, moment


def _completed(trial: TrialStatistics, mean: FloatArray, residual: FloatArray) -> _Completed:
    parts = [_complete(block, mean, residual) for block in trial.blocks]
    return _Completed(
        gram=np.sum([block.feature_gram for block in trial.blocks], axis=0),
        cross=np.sum([cross for cross, _ in parts], axis=0),
        output_gram=np.sum([moment for _, moment in parts], axis=0),
    )


def _shrink(matrix: FloatArray, share: float) -> FloatArray:
    return (1.0 - share) * matrix + share * np.diag(np.diag(matrix))


@dataclass(frozen=True)
class _Prior:
    """Weak priors: features (K, K) m² and outputs (n, n) of a deviation, residual (n, n) m², width (K,) m²."""

    features: FloatArray
    outputs: FloatArray
    residual: FloatArray
    width: FloatArray


def _weak_prior(
    trials: list[TrialStatistics], relative: FloatArray, total: float, settings: FitSettings
) -> _Prior:
    scale, n = scale_of(trials), trials[0].blocks[0].seen.size
    width = settings.population_width * scale.displacement * relative
    width[0] = 0.0
    return _Prior(
        features=settings.between_share / total * scale.displacement * np.diag(relative),
        outputs=unison_covariance(n),
        residual=scale.residual * unison_covariance(n, 0.5),
        width=width,
    )


def fit_hierarchy(
    trials: list[TrialStatistics],
    relative: FloatArray,
    total: float | None = None,
    start: Hierarchy | None = None,
    settings: FitSettings | None = None,
) -> Hierarchy:
    """Fit the hierarchy with weak, proper priors on every covariance.

    Parameters
    ----------
    trials : statistics of all trials of all subjects
    relative : shape (K,), prior variance of each feature's weight against the mean square displacement
    total : relative mean square of all features together; the sum of ``relative`` by default
    start : a fit of nearly the same data, to begin from
    settings : see FitSettings

    Returns
    -------
    Hierarchy; ``stop_reason`` says whether the tolerance was reached.

    Notes
    -----
    With one subject, the between-subject spread is the weak prior's, sized by the data's own magnitude and
    labelled so by the caller.
    """
    settings = settings or FitSettings()
    prior = _weak_prior(trials, relative, total or float(relative.sum()), settings)
    state = _State(prior.features, prior.features, prior.outputs, prior.residual)
    if start is not None:
        state = _State(
            start.subject_features, start.trial_features, start.subject_outputs, start.observed_residual
        )
    means = [np.zeros((relative.size, prior.outputs.shape[0])) for _ in trials]
    iterations, stop_reason = 0, f"not converged in {settings.maximum_iterations} iterations"
    while iterations < settings.maximum_iterations:
        iterations += 1
        new, means = _iteration(state, prior, trials, means, settings)
        change = max(
            float(np.max(np.abs(np.diag(now) / np.diag(before) - 1.0)))
            for now, before in (
                (new.subject, state.subject),
                (new.trial, state.trial),
                (new.residual, state.residual),
            )
            if np.diag(before).min() > 0.0
        )
        state = new
        if change < settings.tolerance:
            stop_reason = f"relative change of the covariances below {settings.tolerance:g}"
            break
    return _as_hierarchy(state, trials, relative, iterations, stop_reason)


def _as_hierarchy(
    state: _State, trials: list[TrialStatistics], relative: FloatArray, iterations: int, stop_reason: str
) -> Hierarchy:
    """Beliefs from the seen outputs alone, and the residual without bone-truth noise."""
    blocks = [block for trial in trials for block in trial.blocks]
    # Bone-truth noise of a hidden output is unknown there: average over the frames that saw it.
    seen_weight = sum(block.weight * np.outer(block.seen, block.seen) for block in blocks)
    noise = nearest_psd(sum(block.noise_gram for block in blocks) / np.maximum(seen_weight, 1e-12))
    empty: Weights = population_prior(trials, relative)
    hierarchy = Hierarchy(
        empty, state.subject, state.outputs, state.trial, state.outputs,
        subtract_psd(state.residual, noise, INSTRUMENT_SD**2), state.residual, iterations, stop_reason,
    )  # fmt: skip
    return without_subject(hierarchy, trials, relative, "")


def _iteration(
    state: _State,
    prior: _Prior,
    trials: list[TrialStatistics],
    means: list[FloatArray],
    settings: FitSettings,
) -> tuple[_State, list[FloatArray]]:
    """One expectation and one maximisation; returns the new state and the trials' weights, (K, n) each."""
    split = _split(state)
    filled = [_completed(trial, mean, state.residual) for trial, mean in zip(trials, means, strict=True)]
    scale = split.spread[:, None, None]
    between, within = scale * state.subject, scale * state.trial
    n = split.spread.size
    raw = [
        _Information(
            np.broadcast_to(item.gram, (n, *item.gram.shape)), np.ascontiguousarray((item.cross @ split.to).T)
        )
        for item in filled
    ]
    up = [_through(item, within) for item in raw]
    groups: dict[str, list[int]] = {}
    for index, trial in enumerate(trials):
        groups.setdefault(trial.subject, []).append(index)
    sums = {name: _total([up[index] for index in own]) for name, own in groups.items()}
    to_population = {name: _through(item, between) for name, item in sums.items()}
    everything = _total(list(to_population.values()))
    start = _Belief(np.zeros((n, prior.width.size)), scale * np.diag(prior.width))
    subjects, deviations, new_means = [], [], list(means)
    rest = split.to.T @ np.sum([item.output_gram for item in filled], axis=0) @ split.to
    for name, own in groups.items():
        cavity = _condition(start, everything - to_population[name])
        reach = cavity.spread_by(between)
        subjects.append(_deviation(reach, sums[name], between))
        for index in own:
            around = _condition(reach, sums[name] - up[index]).spread_by(within)
            deviations.append(_deviation(around, raw[index], within))
            weights = _condition(around, raw[index])
            cross, mean = filled[index].cross @ split.to, weights.mean.T
            rest += mean.T @ filled[index].gram @ mean - mean.T @ cross - cross.T @ mean
            rest += np.diag(np.einsum("nkl,kl->n", weights.covariance, filled[index].gram))
            new_means[index] = mean @ split.back
    counted = sum(block.weight for trial in trials for block in trial.blocks)
    residual = split.back.T @ rest @ split.back + settings.pseudo_units * prior.residual
    return (
        _maximise(
            state, prior, split, subjects, deviations, settings,
            symmetrise(residual / (counted + settings.pseudo_units)),
        ),
        new_means,
    )  # fmt: skip


def _total(items: list[_Information]) -> _Information:
    total = items[0]
    for item in items[1:]:
        total = total + item
    return total


def _maximise(
    state: _State,
    prior: _Prior,
    split: _Split,
    subjects: list[_Belief],
    trials: list[_Belief],
    settings: FitSettings,
    residual: FloatArray,
) -> _State:
    """Covariances of the deviations: one alternating step of the matrix-normal fit at each level."""
    pseudo, n = settings.pseudo_units, split.spread.size
    agreement = float(np.trace(np.linalg.solve(state.outputs, prior.outputs))) / n

    def features(units: list[_Belief]) -> FloatArray:
        moment = pseudo * n * agreement * prior.features
        for unit in units:
            moment = moment + np.einsum("nk,nl,n->kl", unit.mean, unit.mean, 1.0 / split.spread)
            moment = moment + np.einsum("nkl,n->kl", unit.covariance, 1.0 / split.spread)
        return _shrink(symmetrise(moment / (n * (len(units) + pseudo))), settings.feature_shrinkage)

    def outputs(units: list[_Belief], matrix: FloatArray) -> FloatArray:
        precision = np.linalg.solve(matrix, np.eye(matrix.shape[0]))
        moment = np.zeros((n, n))
        for unit in units:
            moment += unit.mean @ precision @ unit.mean.T
            moment += np.diag(np.einsum("nkl,kl->n", unit.covariance, precision))
        weak = pseudo * float(np.trace(precision @ prior.features)) * prior.outputs
        back: FloatArray = split.back.T @ moment @ split.back + weak
        return back

    by_subject = features(subjects)
    levels, units = [(subjects, by_subject)], len(subjects) + pseudo
    by_trial = np.zeros_like(by_subject)
    if settings.trial_level:
        by_trial = features(trials)
        levels.append((trials, by_trial))
        units += len(trials) + pseudo
    moment = np.sum([outputs(*level) for level in levels], axis=0)
    shared = _shrink(symmetrise(moment / (by_subject.shape[0] * units)), settings.output_shrinkage)
    size = float(np.trace(shared)) / n
    return _State(by_subject * size, by_trial * size, shared / size, residual)

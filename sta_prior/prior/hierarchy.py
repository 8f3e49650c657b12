"""Hierarchical Gaussian model of artifact weights: population, subject, trial.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

Model of one segment with n outputs (three per marker) and K features z of the angles:

    d_t = z_tᵀ w + r_t,   w = W + u_subject + v_trial,   w of shape (K, n)
    u ~ N(0, D_u),  v ~ N(0, D_v),  D = A ⊗ M  (features ⊗ outputs),  r ~ N(0, Σ)

Frames are correlated in time. Each frame counts as κ = n_eff/n of an independent one, which is
exact for a constant and nearly so for features that vary more slowly than the residual; unlike
prewhitening it needs no unbroken chain of frames, so gaps and hidden markers change nothing.

References
----------
Laird & Ware (1982), Biometrics 38, 963–974 (random effects by EM; from memory).
Dawid (1981), Biometrika 68, 265–274 (matrix-normal law; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.gaussian import nearest_psd, subtract_psd, symmetrise

PSEUDO_UNITS = 2.0
FEATURE_SHRINKAGE = 0.4
OUTPUT_SHRINKAGE = 0.2
UNISON_SHARE = 0.6
MAXIMUM_ITERATIONS = 60
TOLERANCE = 1e-3
INSTRUMENT_SD = 0.0005


@dataclass(frozen=True)
class Block:
    """Sufficient statistics of the frames of one trial that show the same markers.

    seen: (n,) outputs measured; feature_gram: (K, K) Σκzzᵀ; cross: (K, n) Σκzdᵀ, m;
    output_gram: (n, n) Σκddᵀ, m²; noise_gram: (n, n) Σκ × bone-truth covariance projected on
    the outputs, m²; weight: Σκ; frames: how many.
    """

    seen: BoolArray
    feature_gram: FloatArray
    cross: FloatArray
    output_gram: FloatArray
    noise_gram: FloatArray
    weight: float
    frames: int


@dataclass(frozen=True)
class TrialStatistics:
    """The blocks of one trial, with the subject and trial they belong to."""

    subject: str
    trial: str
    blocks: tuple[Block, ...]


@dataclass(frozen=True)
class Weights:
    """Gaussian belief about weights: mean (K, n) m, covariance (K·n, K·n) m², feature-major."""

    mean: FloatArray
    covariance: FloatArray


@dataclass(frozen=True)
class Hierarchy:
    """Learned parameters of one segment.

    population: posterior of W; subject_features, subject_outputs: A and M of D_u;
    trial_features, trial_outputs: of D_v; residual: (n, n) covariance of r without bone-truth
    noise, m²; observed_residual: with it; iterations, stop_reason: how the fit ended.
    """

    population: Weights
    subject_features: FloatArray
    subject_outputs: FloatArray
    trial_features: FloatArray
    trial_outputs: FloatArray
    residual: FloatArray
    observed_residual: FloatArray
    iterations: int
    stop_reason: str

    @property
    def subject_covariance(self) -> FloatArray:
        """D_u, shape (K·n, K·n), m²."""
        return np.kron(self.subject_features, self.subject_outputs)

    @property
    def trial_covariance(self) -> FloatArray:
        """D_v, shape (K·n, K·n), m²."""
        return np.kron(self.trial_features, self.trial_outputs)


@dataclass(frozen=True)
class _Message:
    """Gaussian information about a weight vector: precision and precision × mean."""

    precision: FloatArray
    shift: FloatArray

    def __add__(self, other: _Message) -> _Message:
        return _Message(self.precision + other.precision, self.shift + other.shift)


def frame_weights(window: FloatArray, correlation: FloatArray) -> FloatArray:
    """Weight κ of each frame so that a window counts as its effective number of frames.

    Parameters
    ----------
    window : shape (frames,), index of the unbroken window that a frame lies in
    correlation : shape (frames,), correlation of the residual with the frame before, 0 … 1

    Returns
    -------
    shape (frames,): (1 + (n − 1)(1 − ρ)/(1 + ρ))/n with ρ the window's mean correlation.
    """
    weights = np.ones(window.shape[0])
    for index in np.unique(window):
        here = window == index
        count = int(here.sum())
        rho = float(correlation[here].mean())
        weights[here] = (1.0 + (count - 1) * (1.0 - rho) / (1.0 + rho)) / count
    return weights


def make_block(
    features: FloatArray, outputs: FloatArray, noise: FloatArray, weights: FloatArray, seen: BoolArray
) -> Block:
    """Sum frames that show the same outputs into a block.

    Parameters
    ----------
    features : shape (frames, K)
    outputs : shape (frames, n), displacement m; hidden entries are ignored
    noise : shape (frames, n, n), bone-truth covariance on the outputs, m²
    weights : shape (frames,), κ
    seen : shape (n,)
    """
    clean = np.where(seen, outputs, 0.0)
    weighted = features * weights[:, None]
    mask = np.outer(seen, seen)
    return Block(
        seen=seen,
        feature_gram=weighted.T @ features,
        cross=weighted.T @ clean,
        output_gram=(clean * weights[:, None]).T @ clean,
        noise_gram=np.einsum("t,tab->ab", weights, noise) * mask,
        weight=float(weights.sum()),
        frames=features.shape[0],
    )


def _condition(belief: Weights, message: _Message) -> Weights:
    """Belief after a message, in a form that needs no inverse of either covariance."""
    size = belief.covariance.shape[0]
    mean = belief.mean.reshape(-1)
    right = np.column_stack([message.precision, message.shift - message.precision @ mean])
    solved = np.linalg.solve(np.eye(size) + message.precision @ belief.covariance, right)
    covariance = belief.covariance - belief.covariance @ solved[:, :-1] @ belief.covariance
    mean = mean + belief.covariance @ solved[:, -1]
    return Weights(mean.reshape(belief.mean.shape), symmetrise(covariance))


def _through(message: _Message, spread: FloatArray) -> _Message:
    """Message about x + e turned into one about x, with e ~ N(0, spread)."""
    size = spread.shape[0]
    right = np.column_stack([message.precision, message.shift])
    solved = np.linalg.solve(np.eye(size) + message.precision @ spread, right)
    return _Message(symmetrise(solved[:, :-1]), solved[:, -1])


def _trial_message(trial: TrialStatistics, observed_residual: FloatArray) -> _Message:
    """Information of a trial's frames about its own weights."""
    n = observed_residual.shape[0]
    size = trial.blocks[0].feature_gram.shape[0] * n
    precision = np.zeros((size, size))
    shift = np.zeros(size)
    for block in trial.blocks:
        seen = np.flatnonzero(block.seen)
        output_precision = np.zeros((n, n))
        inner = observed_residual[np.ix_(seen, seen)]
        output_precision[np.ix_(seen, seen)] = np.linalg.solve(inner, np.eye(seen.size))
        output_precision = symmetrise(output_precision)
        precision += np.kron(block.feature_gram, output_precision)
        shift += (block.cross @ output_precision).reshape(-1)
    return _Message(precision, shift)


def _sum(messages: list[_Message], size: int) -> _Message:
    total = _Message(np.zeros((size, size)), np.zeros(size))
    for item in messages:
        total = total + item
    return total


def subject_posterior(hierarchy: Hierarchy, trials: list[TrialStatistics]) -> Weights:
    """Posterior of one subject's weights W + u, given that subject's own paired trials."""
    prior = Weights(hierarchy.population.mean, hierarchy.population.covariance + hierarchy.subject_covariance)
    spread = hierarchy.trial_covariance
    messages = [_through(_trial_message(trial, hierarchy.observed_residual), spread) for trial in trials]
    return _condition(prior, _sum(messages, spread.shape[0]))


def trial_posterior(hierarchy: Hierarchy, trials: list[TrialStatistics], trial: str) -> Weights:
    """Posterior of the weights of one trial of a subject.

    Parameters
    ----------
    hierarchy : learned parameters; its population must not have learned from ``trials``
    trials : the subject's own paired trials; may be empty
    trial : identifier; where it is among ``trials`` its own frames sharpen its own weights
    """
    own = [item for item in trials if item.trial == trial]
    others = subject_posterior(hierarchy, [item for item in trials if item.trial != trial])
    belief = Weights(others.mean, others.covariance + hierarchy.trial_covariance)
    for item in own:
        belief = _condition(belief, _trial_message(item, hierarchy.observed_residual))
    return belief


def population_prior(trials: list[TrialStatistics], fixed_at_reference: BoolArray) -> Weights:
    """Weak, proper belief about the population weights, sized by the data's own magnitude."""
    scale = _scale(trials)
    n = trials[0].blocks[0].seen.size
    free = np.where(fixed_at_reference, 0.0, 4.0 * scale.features)
    covariance = np.kron(np.diag(free), unison_covariance(n))
    return Weights(np.zeros((scale.features.size, n)), covariance)


def without_subject(
    hierarchy: Hierarchy, trials: list[TrialStatistics], fixed_at_reference: BoolArray, subject: str
) -> Hierarchy:
    """Same covariances, population conditioned on every subject but one: nothing is counted twice."""
    size = hierarchy.population.covariance.shape[0]
    messages = []
    for name in sorted({trial.subject for trial in trials} - {subject}):
        own = [
            _through(_trial_message(trial, hierarchy.observed_residual), hierarchy.trial_covariance)
            for trial in trials
            if trial.subject == name
        ]
        messages.append(_through(_sum(own, size), hierarchy.subject_covariance))
    belief = population_prior(trials, fixed_at_reference)
    return replace(hierarchy, population=_condition(belief, _sum(messages, size)))


def new_subject(hierarchy: Hierarchy, inflation: float = 1.0) -> Weights:
    """Belief about a trial of a subject never imaged: population, subject and trial spread."""
    spread = hierarchy.population.covariance + hierarchy.subject_covariance + hierarchy.trial_covariance
    return Weights(hierarchy.population.mean, inflation * spread)


def unison_covariance(n: int, share: float = UNISON_SHARE) -> FloatArray:
    """Covariance (n, n), unit variance: ``share`` common to all markers of an axis, the rest own."""
    common = np.kron(np.ones((n // 3, n // 3)), np.eye(3))
    return share * common + (1.0 - share) * np.eye(n)


@dataclass(frozen=True)
class _Scale:
    """Weak prior sizes, from the data's own magnitude: features (K,) m², residual m²."""

    features: FloatArray
    residual: float


def _scale(trials: list[TrialStatistics]) -> _Scale:
    blocks = [block for trial in trials for block in trial.blocks]
    weight = sum(block.weight for block in blocks)
    # Bounded below by a millimetre, so that data without artifact still gives a proper prior.
    size = sum(float(np.trace(block.output_gram)) for block in blocks)
    counted = sum(block.weight * int(block.seen.sum()) for block in blocks)
    variance = max(size / counted, 0.001**2)
    power = np.diag(sum(block.feature_gram for block in blocks)) / weight
    return _Scale(features=variance / np.maximum(power, 1e-4), residual=0.1 * variance)


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
    scale = _scale(trials)
    n = trials[0].blocks[0].seen.size
    count = scale.features.size
    size = count * n
    base_outputs = unison_covariance(n)
    base_features = 0.5 * np.diag(scale.features)
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
        name: [_trial_message(trial, state.observed_residual) for trial in trials]
        for name, trials in groups.items()
    }
    up = {name: [_through(item, within) for item in items] for name, items in raw.items()}
    to_population = {name: _through(_sum(items, size), between) for name, items in up.items()}
    total = _sum(list(to_population.values()), size)
    population = _condition(prior, total)

    subject_moment, trial_moment = pseudo.copy(), pseudo.copy()
    residual_moment, weight, trial_count = residual_prior.copy(), PSEUDO_UNITS, 0
    for name, trials in groups.items():
        own = to_population[name]
        others = _Message(total.precision - own.precision, total.shift - own.shift)
        cavity = _condition(prior, others)
        reach = Weights(cavity.mean, cavity.covariance + between)
        subject_moment += _deviation_moment(reach, _sum(up[name], size), between, (count, n))
        for index, trial in enumerate(trials):
            rest = _sum([item for other, item in enumerate(up[name]) if other != index], size)
            around = _condition(reach, rest)
            around = Weights(around.mean, around.covariance + within)
            trial_moment += _deviation_moment(around, raw[name][index], within, (count, n))
            trial_count += 1
            weights = _condition(around, raw[name][index])
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
    reach: Weights, message: _Message, spread: FloatArray, shape: tuple[int, int]
) -> FloatArray:
    """E[e eᵀ] of a deviation e ~ N(0, spread) that is part of ``reach``, shape (K, n, K, n)."""
    size = spread.shape[0]
    mean = reach.mean.reshape(-1)
    right = np.column_stack([message.precision, message.shift - message.precision @ mean])
    solved = np.linalg.solve(np.eye(size) + message.precision @ reach.covariance, right)
    expected = spread @ solved[:, -1]
    moment = spread - spread @ solved[:, :-1] @ spread + np.outer(expected, expected)
    return symmetrise(moment).reshape(*shape, *shape)

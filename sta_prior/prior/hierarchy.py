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
from sta_prior.gaussian import symmetrise
from sta_prior.prior.ladder import invert_information, make_ladder, make_split

UNISON_SHARE = 0.6
POPULATION_WIDTH = 4.0


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


def _kronecker(features: FloatArray, outputs: FloatArray) -> FloatArray:
    """Covariance of feature-major weights, shape (K·n, K·n)."""
    return np.asarray(np.kron(features, outputs), dtype=np.float64)


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
        return _kronecker(self.subject_features, self.subject_outputs)

    @property
    def trial_covariance(self) -> FloatArray:
        """D_v, shape (K·n, K·n), m²."""
        return _kronecker(self.trial_features, self.trial_outputs)


@dataclass(frozen=True)
class Message:
    """Gaussian information about a weight vector: precision and precision × mean."""

    precision: FloatArray
    shift: FloatArray

    def __add__(self, other: Message) -> Message:
        return Message(self.precision + other.precision, self.shift + other.shift)


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
        noise_gram=np.tensordot(weights, noise, axes=1) * mask,
        weight=float(weights.sum()),
        frames=features.shape[0],
    )


def condition_on(belief: Weights, message: Message) -> Weights:
    """Belief after a message, in a form that needs no inverse of either covariance."""
    size = belief.covariance.shape[0]
    mean = belief.mean.reshape(-1)
    right = np.column_stack([message.precision, message.shift - message.precision @ mean])
    solved = np.linalg.solve(np.eye(size) + message.precision @ belief.covariance, right)
    covariance = belief.covariance - belief.covariance @ solved[:, :-1] @ belief.covariance
    mean = mean + belief.covariance @ solved[:, -1]
    return Weights(mean.reshape(belief.mean.shape), symmetrise(covariance))


def through(message: Message, spread: FloatArray) -> Message:
    """Message about x + e turned into one about x, with e ~ N(0, spread)."""
    size = spread.shape[0]
    right = np.column_stack([message.precision, message.shift])
    solved = np.linalg.solve(np.eye(size) + message.precision @ spread, right)
    return Message(symmetrise(solved[:, :-1]), np.asarray(solved[:, -1], dtype=np.float64))


def trial_message(trial: TrialStatistics, observed_residual: FloatArray) -> Message:
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
    return Message(precision, shift)


def total_message(messages: list[Message], size: int) -> Message:
    """Sum of messages about one vector of the given size; none is no information."""
    total = Message(np.zeros((size, size)), np.zeros(size))
    for item in messages:
        total = total + item
    return total


def subject_posterior(hierarchy: Hierarchy, trials: list[TrialStatistics]) -> Weights:
    """Posterior of one subject's weights W + u, given that subject's own paired trials."""
    prior = Weights(hierarchy.population.mean, hierarchy.population.covariance + hierarchy.subject_covariance)
    spread = hierarchy.trial_covariance
    messages = [through(trial_message(trial, hierarchy.observed_residual), spread) for trial in trials]
    return condition_on(prior, total_message(messages, spread.shape[0]))


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
        belief = condition_on(belief, trial_message(item, hierarchy.observed_residual))
    return belief


@dataclass(frozen=True)
class Scale:
    """Sizes of the weak priors, from the data's own magnitude: mean square displacement and residual, m²."""

    displacement: float
    residual: float


def scale_of(trials: list[TrialStatistics]) -> Scale:
    """Mean square displacement of one output, and a tenth of it for the residual."""
    blocks = [block for trial in trials for block in trial.blocks]
    # Bounded below by a millimetre, so that data without artifact still gives a proper prior.
    size = sum(float(np.trace(block.output_gram)) for block in blocks)
    counted = sum(block.weight * int(block.seen.sum()) for block in blocks)
    variance = max(size / counted, 0.001**2)
    return Scale(variance, 0.1 * variance)


def population_width(
    trials: list[TrialStatistics],
    relative: FloatArray,
    width: float = POPULATION_WIDTH,
    free_constant: bool = False,
) -> FloatArray:
    """Prior variance of the population weights, shape (K,), m².

    Parameters
    ----------
    trials : what is learned from
    relative : shape (K,), prior variance of each feature's weight against the mean square displacement
    width : prior variance of the population against that; infinite for no prior at all (REML)
    free_constant : the first feature, the constant, has no population weight unless this is set:
        artifact is zero at the reference
    """
    free = width * scale_of(trials).displacement * relative
    if not free_constant:
        free[0] = 0.0
    return free


def population_prior(
    trials: list[TrialStatistics],
    relative: FloatArray,
    outputs: FloatArray | None = None,
    free_constant: bool = False,
) -> Weights:
    """Weak, proper belief about the population weights, sized by the data's own magnitude.

    Parameters
    ----------
    trials, relative, free_constant : as for population_width
    outputs : shape (n, n), how outputs go together, trace n; UNISON_SHARE by default. A hierarchy's
        population has its M here
    """
    n = trials[0].blocks[0].seen.size
    free = population_width(trials, relative, free_constant=free_constant)
    covariance = _kronecker(np.diag(free), unison_covariance(n) if outputs is None else outputs)
    return Weights(np.zeros((relative.size, n)), covariance)


def without_subject(
    hierarchy: Hierarchy,
    trials: list[TrialStatistics],
    relative: FloatArray,
    subject: str,
    width: float = POPULATION_WIDTH,
    free_constant: bool = False,
) -> Hierarchy:
    """Same covariances, population conditioned on every subject but one: nothing is counted twice.

    The arguments are those of population_width. Where every frame shows every output the outputs are split
    (prior/ladder.py), which is as exact and much faster.
    """
    others = [trial for trial in trials if trial.subject != subject]
    prior = population_width(trials, relative, width, free_constant)
    alike = np.array_equal(hierarchy.subject_outputs, hierarchy.trial_outputs)
    whole = all(block.seen.all() for trial in others for block in trial.blocks)
    learn = _split_population if alike and whole and others else _dense_population
    return replace(hierarchy, population=learn(hierarchy, others, prior))


def population_message(hierarchy: Hierarchy, trials: list[TrialStatistics]) -> Message:
    """What trials tell of the population weights."""
    size = hierarchy.subject_features.shape[0] * hierarchy.residual.shape[0]
    spread, between = hierarchy.trial_covariance, hierarchy.subject_covariance
    messages = []
    for name in sorted({trial.subject for trial in trials}):
        own = [
            through(trial_message(trial, hierarchy.observed_residual), spread)
            for trial in trials
            if trial.subject == name
        ]
        messages.append(through(total_message(own, size), between))
    return total_message(messages, size)


def _dense_population(hierarchy: Hierarchy, trials: list[TrialStatistics], width: FloatArray) -> Weights:
    n = hierarchy.residual.shape[0]
    told = population_message(hierarchy, trials)
    free = np.flatnonzero(np.repeat(width > 0.0, n))
    mean, covariance = np.zeros(told.shift.size), np.zeros(told.precision.shape)
    if np.isfinite(width).all():
        prior = Weights(mean.reshape(-1, n), _kronecker(np.diag(width), hierarchy.subject_outputs))
        return condition_on(prior, told)
    inside = np.ix_(free, free)
    covariance[inside] = symmetrise(invert_information(told.precision[inside]))
    return Weights((covariance @ told.shift).reshape(-1, n), covariance)


def _split_population(hierarchy: Hierarchy, trials: list[TrialStatistics], width: FloatArray) -> Weights:
    split = make_split(hierarchy.subject_outputs, hierarchy.observed_residual)
    names = list(dict.fromkeys(trial.subject for trial in trials))
    gram = np.array([sum(block.feature_gram for block in trial.blocks) for trial in trials])
    cross = np.array([sum(block.cross for block in trial.blocks) for trial in trials])
    n, count = split.precision.size, width.size
    ladder = make_ladder(
        gram[:, None] * split.precision[:, None, None],
        np.array([names.index(trial.subject) for trial in trials], dtype=np.intp),
        hierarchy.subject_features,
        hierarchy.trial_features,
        width,
    )
    told = np.linalg.solve(hierarchy.observed_residual, split.back.T)
    mean = ladder.means(np.swapaxes(cross @ told, -1, -2)).population
    covariance = np.einsum("ia,ikl,ib->kalb", split.back, ladder.population, split.back, optimize=True)
    return Weights(mean.T @ split.back, symmetrise(covariance.reshape(count * n, count * n)))


def new_subject(hierarchy: Hierarchy, inflation: float = 1.0) -> Weights:
    """Belief about a trial of a subject never imaged: population, subject and trial spread."""
    spread = hierarchy.population.covariance + hierarchy.subject_covariance + hierarchy.trial_covariance
    return Weights(hierarchy.population.mean, inflation * spread)


def unison_covariance(n: int, share: float = UNISON_SHARE) -> FloatArray:
    """Covariance (n, n), unit variance: ``share`` common to all markers of an axis, the rest own.

    Outputs that are no markers of three axes each have nothing in common.
    """
    if n % 3:
        return np.eye(n)
    common = np.kron(np.ones((n // 3, n // 3)), np.eye(3))
    return share * common + (1.0 - share) * np.eye(n)

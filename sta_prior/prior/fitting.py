"""Fit the hierarchy of artifact weights by accelerated expectation–maximisation.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: prior/hierarchy.py; the
expectation step: prior/expectation.py; the acceleration: prior/acceleration.py.

With weak priors on every covariance a fit is proper from one subject on. Without them (RESTRICTED) it is
restricted maximum likelihood, the usual fit of a linear mixed model.

References
----------
Laird & Ware (1982), Biometrics 38, 963–974 (random effects by EM; from memory).
Liu & Rubin (1994), Biometrika 81, 633–648 (conditional maximisation; from memory).
Dutilleul (1999), J Stat Comput Simul 64, 105–123 (alternating estimates of a matrix-normal law; from
memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.gaussian import nearest_psd, subtract_psd, symmetrise
from sta_prior.prior.acceleration import Anderson, from_logarithm, to_logarithm
from sta_prior.prior.expectation import Expectation, Moments, State
from sta_prior.prior.hierarchy import (
    POPULATION_WIDTH,
    Hierarchy,
    TrialStatistics,
    population_prior,
    population_width,
    scale_of,
    unison_covariance,
    without_subject,
)

INSTRUMENT_SD = 0.0005
"""Joins the bone-truth noise in the metric in which that is taken out, m; the residual has no floor."""

BOUNDARY = 1e-8
"""A variance below this part of the mean square displacement counts as zero, if no prior holds it."""

EXACT_FIT = 1e-14
"""Smallest residual variance against the mean square displacement, if no prior holds it: rounding."""


@dataclass(frozen=True)
class FitSettings:
    """How strongly weak priors and shrinkage act, and when to stop.

    pseudo_units: weight of the prior on every covariance, in subjects, trials or independent frames;
    feature_shrinkage, output_shrinkage: part of the way that a between-unit covariance is drawn towards
    its diagonal; between_share: part of the mean square displacement that the prior gives to the spread
    between units; trial_level: whether trials of a subject deviate from each other; population_width:
    prior variance of population weights against the mean square displacement, infinite for REML;
    free_constant: whether the constant has a population weight; point_population: maximum likelihood,
    which takes the population weights for known, instead of REML; memory: steps that the acceleration
    fits together, 0 for plain expectation–maximisation; tolerance: relative change of every variance in
    one step.
    """

    pseudo_units: float = 2.0
    feature_shrinkage: float = 0.4
    output_shrinkage: float = 0.2
    between_share: float = 0.5
    trial_level: bool = True
    population_width: float = POPULATION_WIDTH
    free_constant: bool = False
    point_population: bool = False
    memory: int = 5
    maximum_iterations: int = 60
    tolerance: float = 1e-3


RESTRICTED = FitSettings(
    pseudo_units=0.0, feature_shrinkage=0.0, output_shrinkage=0.0, trial_level=False,
    population_width=math.inf, free_constant=True, maximum_iterations=500, tolerance=1e-9,
)  # fmt: skip
"""Restricted maximum likelihood: no prior, no shrinkage; with replace(…, trial_level=True) three levels."""


@dataclass(frozen=True)
class _Prior:
    """Weak priors: features (K, K) m² and outputs (n, n) of a deviation, residual (n, n) m²."""

    features: FloatArray
    outputs: FloatArray
    residual: FloatArray


def _weak_prior(
    trials: list[TrialStatistics], relative: FloatArray, total: float, settings: FitSettings
) -> _Prior:
    scale, n = scale_of(trials), trials[0].blocks[0].seen.size
    return _Prior(
        features=settings.between_share / total * scale.displacement * np.diag(relative),
        outputs=unison_covariance(n),
        residual=scale.residual * unison_covariance(n, 0.5),
    )


def fit_hierarchy(
    trials: list[TrialStatistics],
    relative: FloatArray,
    total: float | None = None,
    start: Hierarchy | None = None,
    settings: FitSettings | None = None,
) -> Hierarchy:
    """Fit the hierarchy, by default with weak, proper priors on every covariance.

    Parameters
    ----------
    trials : statistics of all trials of all subjects
    relative : shape (K,), prior variance of each feature's weight against the mean square displacement
    total : relative mean square of all features together; the sum of ``relative`` by default
    start : a fit of nearly the same data, to begin from; a feature without spread there has none here
        either, so that a model of fixed effects can be fitted
    settings : see FitSettings

    Returns
    -------
    Hierarchy; ``stop_reason`` says whether the tolerance was reached, and which spreads ended at zero.

    Raises
    ------
    NotDeterminedError : population weights without a prior that the data do not determine.

    Notes
    -----
    With one subject, the between-subject spread is the weak prior's, sized by the data's own magnitude and
    labelled so by the caller.
    """
    settings = settings or FitSettings()
    before = None if start is None else state_of(start)
    state, iterations, reason = fit_covariances(trials, relative, total, before, settings)
    return _as_hierarchy(state, trials, relative, settings, (iterations, reason))


def state_of(hierarchy: Hierarchy) -> State:
    """Covariances of a hierarchy, to begin another fit from."""
    return State(
        hierarchy.subject_features,
        hierarchy.trial_features,
        hierarchy.subject_outputs,
        hierarchy.observed_residual,
    )


def fit_covariances(
    trials: list[TrialStatistics],
    relative: FloatArray,
    total: float | None,
    start: State | None,
    settings: FitSettings,
) -> tuple[State, int, str]:
    """Covariances alone, with iterations and why they stopped; the arguments are those of fit_hierarchy."""
    prior = _weak_prior(trials, relative, total or float(relative.sum()), settings)
    state = start or State(prior.features, prior.features, prior.outputs, prior.residual)
    if not settings.trial_level:
        state = replace(state, trial=np.zeros_like(state.subject))
    width = population_width(trials, relative, settings.population_width, settings.free_constant)
    expect = Expectation(trials, width, settings.point_population)
    floor = BOUNDARY * scale_of(trials).displacement * relative
    return _iterate(state, expect, prior, settings, floor)


def _iterate(
    state: State, expect: Expectation, prior: _Prior, settings: FitSettings, floor: FloatArray
) -> tuple[State, int, str]:
    """Accelerated steps to the tolerance; floor: (K,) m², what counts as no variance."""
    anderson, lost = Anderson(settings.memory), [set[int](), set[int]()]
    reason = f"not converged in {settings.maximum_iterations} iterations"
    iterations, new = 0, state
    while iterations < settings.maximum_iterations:
        iterations += 1
        new = _maximise(state, prior, expect(state), expect.counted, settings)
        if settings.pseudo_units == 0.0:
            residual = nearest_psd(new.residual, EXACT_FIT / BOUNDARY * float(floor.max()))
            new, gone = _without_vanished(replace(new, residual=residual), state, floor)
            if any(gone):
                lost = [before | now for before, now in zip(lost, gone, strict=True)]
                anderson.clear()
                state = new
                continue
        change = max(
            float(np.max(np.abs(after - before) / np.maximum(before, least), initial=0.0))
            for after, before, least in (
                (np.diag(new.subject), np.diag(state.subject), floor),
                (np.diag(new.trial), np.diag(state.trial), floor),
                (np.diag(new.residual), np.diag(state.residual), np.array(1e-300)),
            )
        )
        if change < settings.tolerance:
            reason = f"relative change of the covariances below {settings.tolerance:g}"
            break
        state = _decode(anderson.next(_encode(state), _encode(new)), new)
    for level, indices in zip(("subjects", "trials"), lost, strict=True):
        if indices:
            names = ", ".join(str(index) for index in sorted(indices))
            reason += f"; spread between {level} at its boundary, zero, for feature {names}"
    return new, iterations, reason


def _without_vanished(state: State, before: State, floor: FloatArray) -> tuple[State, list[set[int]]]:
    """Set variances that have all but vanished and still fall to zero, and say which.

    So close to zero a plain step falls where the likelihood does: no long step took it there in error.
    """
    result, gone = state, []
    for name in ("subject", "trial"):
        matrix = getattr(state, name)
        variance = np.diag(matrix)
        small: BoolArray = (variance > 0.0) & (variance < floor) & (variance < np.diag(getattr(before, name)))
        gone.append(set(np.flatnonzero(small).tolist()))
        result = replace(result, **{name: np.where(small[:, None] | small, 0.0, matrix)})
    return result, gone


def _parts(state: State) -> list[FloatArray]:
    """The covariances without the rows that are zero for good."""
    inner = [
        matrix[np.ix_(*2 * (np.flatnonzero(np.diag(matrix) > 0.0),))]
        for matrix in (state.subject, state.trial)
    ]
    return [*inner, state.outputs, state.residual]


def _encode(state: State) -> FloatArray:
    return np.concatenate([to_logarithm(part).reshape(-1) for part in _parts(state) if part.size])


def _decode(flat: FloatArray, like: State) -> State:
    """The state of logarithms, with zeros where ``like`` has them and M of trace n."""
    parts = []
    for part in _parts(like):
        parts.append(from_logarithm(flat[: part.size].reshape(part.shape)) if part.size else part)
        flat = flat[part.size :]
    size = float(np.trace(parts[2])) / parts[2].shape[0]
    found = []
    for matrix, inner in zip((like.subject, like.trial), parts[:2], strict=True):
        active = np.flatnonzero(np.diag(matrix) > 0.0)
        whole = np.zeros_like(matrix)
        whole[np.ix_(active, active)] = size * inner
        found.append(whole)
    return State(found[0], found[1], parts[2] / size, parts[3])


def _as_hierarchy(
    state: State,
    trials: list[TrialStatistics],
    relative: FloatArray,
    settings: FitSettings,
    ended: tuple[int, str],
) -> Hierarchy:
    """Beliefs from the seen outputs alone, and the residual without bone-truth noise."""
    blocks = [block for trial in trials for block in trial.blocks]
    # Bone-truth noise of a hidden output is unknown there: average over the frames that saw it.
    seen_weight = sum(block.weight * np.outer(block.seen, block.seen) for block in blocks)
    noise = nearest_psd(sum(block.noise_gram for block in blocks) / np.maximum(seen_weight, 1e-12))
    hierarchy = Hierarchy(
        population_prior(trials, relative), state.subject, state.outputs, state.trial, state.outputs,
        subtract_psd(state.residual, noise, INSTRUMENT_SD**2), state.residual, *ended,
    )  # fmt: skip
    return without_subject(hierarchy, trials, relative, "", settings.population_width, settings.free_constant)


def _shrink(matrix: FloatArray, share: float) -> FloatArray:
    return (1.0 - share) * matrix + share * np.diag(np.diag(matrix))


def _maximise(state: State, prior: _Prior, moments: Moments, counted: float, settings: FitSettings) -> State:
    """Covariances of the moments: the residual, and one alternating matrix-normal step at each level.

    A given M, then M given the new A: each a maximum, so that the likelihood cannot fall.
    """
    pseudo, split = settings.pseudo_units, moments.split
    n = split.precision.size
    residual = (moments.residual + pseudo * prior.residual) / (counted + pseudo)
    weak = np.zeros((n, n))
    agreement = float(np.trace(np.linalg.solve(state.outputs, prior.outputs))) / n if pseudo else 0.0
    shared, weight = np.zeros((n, n)), 0.0
    found: list[FloatArray] = []
    for mean, around in (moments.subjects, moments.trials):
        at_trials = len(found) == 1
        if at_trials and not settings.trial_level:
            found.append(np.zeros_like(state.trial))
            continue
        flat = mean.reshape(-1, mean.shape[-1])
        moment = flat.T @ flat + around.total()
        moment += pseudo * n * agreement * prior.features
        units = len(mean) + pseudo
        features = _shrink(symmetrise(moment / (n * units)), settings.feature_shrinkage)
        precision, rank = _inverse_on_range(features)
        by_output = np.swapaxes(mean, 0, 1)
        shared += (by_output @ precision).reshape(n, -1) @ by_output.reshape(n, -1).T
        shared += around.along(precision)
        weak += pseudo * float(np.trace(precision @ prior.features)) * prior.outputs
        weight += rank * units
        found.append(features)
    if not weight:
        return State(found[0], found[1], state.outputs, symmetrise(residual))
    outputs = split.back.T @ shared @ split.back + weak
    outputs = _shrink(symmetrise(outputs / weight), settings.output_shrinkage)
    size = float(np.trace(outputs)) / n
    return State(size * found[0], size * found[1], outputs / size, symmetrise(residual))


def _inverse_on_range(matrix: FloatArray) -> tuple[FloatArray, int]:
    """Pseudo-inverse of a covariance and its rank: deviations lie in its range."""
    spread = np.sqrt(np.diag(matrix))
    active = np.flatnonzero(spread > 0.0)
    scale = np.outer(spread[active], spread[active])
    values, vectors = np.linalg.eigh(matrix[np.ix_(active, active)] / scale)
    kept = values > 1e-12
    inverse = np.zeros_like(matrix)
    inverse[np.ix_(active, active)] = (vectors[:, kept] / values[kept]) @ vectors[:, kept].T / scale
    return inverse, int(kept.sum())

"""Expectation step of the hierarchy of artifact weights: moments of everything that was not measured.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: prior/hierarchy.py; outputs that
do not mix: prior/ladder.py.

Exact where every frame shows every output. Where outputs are hidden, the means stay exact: they solve the
joint linear equations. Covariances are then taken block-diagonal over outputs, each trial, subject and the
population in those axes in which what is known of it is nearly diagonal: exact for a trial that hides the
same outputs throughout, and off by little for outputs that are hidden now and then.

References
----------
Laird & Ware (1982), Biometrics 38, 963–974 (random effects by EM; from memory).
Saad & Schultz (1986), SIAM J Sci Stat Comput 7, 856–869 (GMRES; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.sparse.linalg import LinearOperator, gmres

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.gaussian import symmetrise
from sta_prior.prior.complete import CompleteTrials, TrialSpread, climb, complete_trials
from sta_prior.prior.hierarchy import TrialStatistics
from sta_prior.prior.ladder import (
    Ladder,
    Split,
    add_up,
    make_ladder,
    make_rung,
    make_split,
    population_covariance,
)

Indices = NDArray[np.intp]


@dataclass(frozen=True)
class State:
    """Covariances: subject A_u and trial A_v (K, K) m²; outputs M (n, n), trace n; residual Σ (n, n) m²."""

    subject: FloatArray
    trial: FloatArray
    outputs: FloatArray
    residual: FloatArray


@dataclass(frozen=True)
class Spread:
    """Covariances that are block-diagonal in axes of their own.

    axes: (units, n, n), columns in split outputs; covariance: (units, n, K, K) along them.
    """

    axes: FloatArray
    covariance: FloatArray

    def seen_from(self, axes: FloatArray) -> FloatArray:
        """Blocks along other axes, (units, n, K, K); what is off the blocks there is left out."""
        return turned(self.covariance, self.axes, axes)

    def total(self) -> FloatArray:
        """Sum over units and outputs, (K, K)."""
        return np.asarray(self.covariance.sum(axis=(0, 1)))

    def along(self, precision: FloatArray) -> FloatArray:
        """Σ tr(precision · covariance) over units, (n, n) in split outputs."""
        own = np.einsum("unkl,kl->un", self.covariance, precision)
        return np.asarray(_spanned(self.axes, own).sum(axis=0))


def turned(blocks: FloatArray, axes: FloatArray, other: FloatArray) -> FloatArray:
    """Diagonal blocks (units, n, K, K) along one set of axes, (units, n, n), along another."""
    share = (np.swapaxes(other, -1, -2) @ axes) ** 2
    flat = share @ blocks.reshape(*blocks.shape[:-2], -1)
    return np.asarray(flat.reshape(*flat.shape[:-1], *blocks.shape[-2:]))


def principal_axes(information: FloatArray) -> FloatArray:
    """Axes in which the information of each unit, (units, n, n), is diagonal.

    Where it is the same in several directions they are told apart by a little of all units' information:
    else they would be as rounding has it.
    """
    whole = information + 1e-3 * information.mean(axis=0)
    return np.asarray(np.linalg.eigh(symmetrise(whole))[1], dtype=np.float64)


def _spanned(axes: FloatArray, size: FloatArray) -> FloatArray:
    """Matrices (units, n, n) of the given size (units, n) along axes."""
    return np.asarray((axes * size[:, None]) @ np.swapaxes(axes, -1, -2))


@dataclass(frozen=True)
class Moments:
    """Second moments after an expectation step.

    subjects, trials: means (units, n, K) of the deviations in split outputs, and their covariances;
    residual: (n, n) Σκ E[rrᵀ] in measured outputs, m².
    """

    split: Split
    subjects: tuple[FloatArray, Spread]
    trials: tuple[FloatArray, Spread | TrialSpread]
    residual: FloatArray


@dataclass(frozen=True)
class _Pattern:
    """What a set of outputs seen together makes of Σ.

    precision: (n, n) Σ_ss⁻¹, 0 elsewhere; fill: (n, n), residual of the seen outputs to expectation of all;
    own: (n, n) spread of the hidden about it.
    """

    precision: FloatArray
    fill: FloatArray
    own: FloatArray


def _pattern(seen: BoolArray, residual: FloatArray) -> _Pattern:
    n = residual.shape[0]
    at, hidden = np.flatnonzero(seen), np.flatnonzero(~seen)
    precision, fill, own = np.zeros((n, n)), np.zeros((n, n)), np.zeros((n, n))
    inner = np.linalg.solve(residual[np.ix_(at, at)], np.eye(at.size))
    gain = residual[np.ix_(hidden, at)] @ inner
    precision[np.ix_(at, at)] = symmetrise(inner)
    fill[at, at] = 1.0
    fill[np.ix_(hidden, at)] = gain
    own[np.ix_(hidden, hidden)] = residual[np.ix_(hidden, hidden)] - gain @ residual[np.ix_(at, hidden)]
    return _Pattern(precision, fill, own)


@dataclass
class Expectation:
    """Statistics of all trials, stacked once, and the expectation step on them.

    trials: as fit_hierarchy takes them; width: (K,) prior variance of the population weights, m²;
    point_population: leave out the spread of the population weights, as maximum likelihood does;
    accuracy: of the means where outputs are hidden, relative.
    """

    trials: list[TrialStatistics]
    width: FloatArray
    point_population: bool = False
    accuracy: float = 1e-10
    subjects: list[str] = field(init=False)
    _owner: Indices = field(init=False)
    _seen: BoolArray = field(init=False)
    _which: list[Indices] = field(init=False)
    _grams: list[FloatArray] = field(init=False)
    _crosses: list[FloatArray] = field(init=False)
    _moments: FloatArray = field(init=False)
    _counted: FloatArray = field(init=False)
    _weights: FloatArray | None = field(init=False, default=None)
    _complete: CompleteTrials | None = field(init=False, default=None)

    def __post_init__(self) -> None:
        """Stack the blocks of each trial, and sum over all what depends on the pattern alone."""
        self.subjects = list(dict.fromkeys(trial.subject for trial in self.trials))
        self._owner = np.array([self.subjects.index(trial.subject) for trial in self.trials], dtype=np.intp)
        blocks = [block for trial in self.trials for block in trial.blocks]
        if all(block.seen.all() for block in blocks):
            self._complete = complete_trials(self.trials, self.subjects)
        self._seen, which = np.unique(np.array([block.seen for block in blocks]), axis=0, return_inverse=True)
        counts = np.cumsum([len(trial.blocks) for trial in self.trials])[:-1]
        self._which = np.split(which.reshape(-1), counts)
        self._grams = [np.stack([block.feature_gram for block in trial.blocks]) for trial in self.trials]
        self._crosses = [np.stack([block.cross for block in trial.blocks]) for trial in self.trials]
        n = self._seen.shape[1]
        self._moments, self._counted = np.zeros((len(self._seen), n, n)), np.zeros(len(self._seen))
        np.add.at(self._moments, which.reshape(-1), np.stack([block.output_gram for block in blocks]))
        np.add.at(self._counted, which.reshape(-1), np.array([block.weight for block in blocks]))

    @property
    def counted(self) -> float:
        """Independent frames in all."""
        return float(self._counted.sum())

    def _precision(self, shares: list[FloatArray]) -> FloatArray:
        """Trials' precision along outputs, (T, n, K, K), from the share (blocks, n) of each block in it."""
        count = self.width.size
        parts = [
            (share.T @ gram.reshape(len(gram), -1)).reshape(-1, count, count)
            for share, gram in zip(shares, self._grams, strict=True)
        ]
        return np.stack(parts)

    def _solve(self, ladder: Ladder, shift: FloatArray, views: FloatArray) -> FloatArray:
        """Shift with which the ladder, whose precision is block-diagonal, gives the exact means."""
        partial = [at for at, which in enumerate(self._which) if not self._seen[which].all()]
        if not partial:
            return shift

        def missing(weights: FloatArray) -> FloatArray:
            """What block-diagonal precision has more than the exact one, times weights."""
            result = np.zeros(shift.shape)
            for at in partial:
                kept = np.einsum("nkl,nl->nk", ladder.trial.precision[at], weights[at])
                exact = self._grams[at] @ weights[at].T @ views[self._which[at]]
                result[at] = kept - exact.sum(axis=0).T
            return result

        def operate(flat: FloatArray) -> FloatArray:
            weights = flat.reshape(shift.shape)
            return np.asarray((weights - ladder.weights(missing(weights))).reshape(-1), dtype=np.float64)

        right = ladder.weights(shift)
        start = right if self._weights is None else self._weights
        found, _ = gmres(
            LinearOperator((right.size, right.size), matvec=operate, dtype=np.float64),
            right.reshape(-1), start.reshape(-1), rtol=self.accuracy, restart=60, maxiter=5,
        )  # fmt: skip
        self._weights = found.reshape(shift.shape)
        return np.asarray(shift + missing(self._weights))

    def __call__(self, state: State) -> Moments:
        """Moments under the current covariances."""
        split = make_split(state.outputs, state.residual)
        if self._complete is not None:
            return self._of_complete(self._complete, state, split)
        patterns = [_pattern(seen, state.residual) for seen in self._seen]
        told = np.stack([pattern.precision @ split.back.T for pattern in patterns])
        # Σ⁻¹ of what a pattern shows, in split outputs; diagonal where it shows all.
        views = split.back @ told
        shift = np.stack(
            [
                (cross @ told[which]).sum(axis=0).T
                for cross, which in zip(self._crosses, self._which, strict=True)
            ]
        )
        own = np.einsum("pii->pi", views)
        precision = self._precision([own[which] for which in self._which])
        ladder = make_ladder(precision, self._owner, state.subject, state.trial, self.width)
        shift = self._solve(ladder, shift, views)
        means = ladder.means(shift)
        weights = means.population + means.subjects[self._owner] + means.trials
        of_subjects, of_trials, around = self._spreads(state, ladder, views)
        return Moments(
            split,
            (means.subjects, of_subjects),
            (means.trials, of_trials),
            self._residual(split, patterns, weights, around),
        )

    def _of_complete(self, trials: CompleteTrials, state: State, split: Split) -> Moments:
        """The same where every frame shows every output."""
        found = climb(trials, (state.subject, state.trial), state.residual, split, self.width)
        population, n = found.mean(), split.precision.size
        subjects = found.subject.down(found.told, np.broadcast_to(population, found.told.shape))
        own = found.trial.down(population + subjects)
        above = np.zeros_like(found.population) if self.point_population else found.population
        of_subjects, reach = found.subject.spread(above[None])
        of_trials, uncertain = found.trial.spread(reach)
        residual = trials.residual((population + subjects)[self._owner] + own, split)
        return Moments(
            split,
            (subjects, Spread(np.broadcast_to(np.eye(n), (len(subjects), n, n)), of_subjects)),
            (own, of_trials),
            symmetrise(residual + split.back.T @ (uncertain[:, None] * split.back)),
        )

    def _spreads(self, state: State, ladder: Ladder, views: FloatArray) -> tuple[Spread, Spread, Spread]:
        """Covariances of the subjects' deviations, the trials' and the trials' weights."""
        n, owner = views.shape[-1], self._owner
        below, above, population = ladder.trial, ladder.subject, ladder.population
        trials = np.broadcast_to(np.eye(n), (len(owner), n, n))
        subjects, whole = np.broadcast_to(np.eye(n), (len(self.subjects), n, n)), np.eye(n)[None]
        if not self._seen.all():
            known = [views[which] for which in self._which]
            reach = state.subject + state.trial
            weights = [np.einsum("bkl,kl->b", gram, reach) for gram in self._grams]
            trials = principal_axes(
                np.stack([np.tensordot(size, view, 1) for size, view in zip(weights, known, strict=True)])
            )
            shares = [((view @ axes) * axes).sum(axis=-2) for axes, view in zip(trials, known, strict=True)]
            below = make_rung(state.trial, self._precision(shares))
            told = below.above
            size = np.einsum("unkl,kl->un", told, state.subject)
            subjects = principal_axes(add_up(_spanned(trials, size), owner))
            above = make_rung(state.subject, add_up(turned(told, trials, subjects[owner]), owner))
            told = above.above
            size = np.einsum("unkk->un", told)
            whole = principal_axes(_spanned(subjects, size).sum(axis=0, keepdims=True))
            population = population_covariance(turned(told, subjects, whole).sum(axis=0), self.width)
        if self.point_population:
            population = np.zeros_like(population)
        base = Spread(whole, population[None]).seen_from(subjects)
        of_subjects, reach = above.spread(base)
        parent = Spread(subjects[owner], reach[owner]).seen_from(trials)
        of_trials, around = below.spread(parent)
        return Spread(subjects, of_subjects), Spread(trials, of_trials), Spread(trials, around)

    def _residual(
        self, split: Split, patterns: list[_Pattern], weights: FloatArray, around: Spread
    ) -> FloatArray:
        """Σκ E[rrᵀ], (n, n): residuals of what was seen, carried over to what was hidden."""
        moments, uncertain = self._moments.copy(), np.zeros(self._moments.shape)
        for which, gram, cross, own, axes, spread in zip(
            self._which, self._grams, self._crosses, weights, around.axes, around.covariance, strict=True
        ):
            mean = own.T @ split.back
            mixed = np.swapaxes(cross, -1, -2) @ mean
            rest = mean.T @ gram @ mean - mixed - np.swapaxes(mixed, -1, -2)
            np.add.at(moments, which, rest)
            of_block = gram.reshape(len(gram), -1) @ spread.reshape(len(spread), -1).T
            np.add.at(uncertain, which, (axes * of_block[:, None]) @ axes.T)
        total = np.zeros(moments.shape[1:])
        for pattern, moment, trace, weight in zip(patterns, moments, uncertain, self._counted, strict=True):
            seen = moment + split.back.T @ trace @ split.back
            total += pattern.fill @ seen @ pattern.fill.T + weight * pattern.own
        return symmetrise(total)

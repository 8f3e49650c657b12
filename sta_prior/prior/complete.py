"""Trials whose every frame shows every output: their part of the expectation step, without a large array.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: prior/hierarchy.py; split outputs:
prior/ladder.py.

In split outputs i what a trial tells of its weights has the precision pᵢG, with G the same for all outputs.
With G = CCᵀ and CᵀAC = Q diag(a) Qᵀ, A the covariance of trials' deviations, everything there is diagonal
along H = CQ: one small eigenvalue problem a trial stands for a system of equations for each of its outputs.
The results are those of the ladder. Axes: trial or subject (a unit), split output, feature.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from sta_prior.checks import FloatArray
from sta_prior.gaussian import symmetrise
from sta_prior.prior.hierarchy import TrialStatistics
from sta_prior.prior.ladder import Rung, Split, make_rung, population_covariance

Indices = NDArray[np.intp]


@dataclass(frozen=True)
class CompleteTrials:
    """Statistics of trials that hide nothing.

    owner: (T,) subject of each, 0 … S − 1; root: C, (T, K, K), with G = CCᵀ the sum of Σκzzᵀ; told: (T, K, n)
    C⁺Σκzdᵀ in measured outputs, m; cross: (n, T, K) Σκzdᵀ; moment: (n, n) Σκddᵀ of all, m²; counted: Σκ.
    """

    owner: Indices
    root: FloatArray
    told: FloatArray
    cross: FloatArray
    moment: FloatArray
    counted: float

    def rung(self, deviation: FloatArray, residual: FloatArray, split: Split) -> TrialRung:
        """Trials deviating by N(0, A), A = deviation (K, K), with the residual Σ (n, n)."""
        inverse = np.linalg.solve(residual, split.back.T)
        stiffness, axes = np.linalg.eigh(symmetrise(np.swapaxes(self.root, -1, -2) @ deviation @ self.root))
        score = np.swapaxes(self.told @ inverse, -1, -2) @ axes
        reach = self.root @ axes
        return TrialRung(deviation, self.owner, split.precision, reach, np.maximum(stiffness, 0.0), score)

    def residual(self, weights: FloatArray, split: Split) -> FloatArray:
        """Σκrrᵀ of all frames in measured outputs, (n, n) m², for weights (T, n, K) in split outputs."""
        n = split.precision.size
        fitted = np.swapaxes(weights @ self.root, 0, 1).reshape(n, -1)
        mixed = self.cross.reshape(n, -1) @ np.swapaxes(weights, 0, 1).reshape(n, -1).T @ split.back
        return np.asarray(self.moment + split.back.T @ (fitted @ fitted.T) @ split.back - mixed - mixed.T)


def complete_trials(trials: list[TrialStatistics], subjects: list[str]) -> CompleteTrials:
    """Sum the blocks of each trial, all of which show every output, and factor them once."""
    gram = np.stack([np.sum([block.feature_gram for block in trial.blocks], axis=0) for trial in trials])
    cross = np.stack([np.sum([block.cross for block in trial.blocks], axis=0) for trial in trials])
    scale = np.sqrt(np.einsum("tkk->tk", gram))
    scale[scale == 0.0] = 1.0
    values, vectors = np.linalg.eigh(symmetrise(gram / (scale[:, :, None] * scale[:, None, :])))
    # A direction without frames tells nothing, rather than what rounding left of it.
    values = np.where(values > gram.shape[-1] * np.finfo(float).eps * values[:, -1:], values, 0.0)
    root = np.sqrt(values)
    shrunk = np.divide(1.0, root, out=np.zeros_like(root), where=root > 0.0)
    blocks = [block for trial in trials for block in trial.blocks]
    return CompleteTrials(
        owner=np.array([subjects.index(trial.subject) for trial in trials], dtype=np.intp),
        root=scale[:, :, None] * vectors * root[:, None],
        told=np.swapaxes(vectors * shrunk[:, None], -1, -2) @ (cross / scale[:, :, None]),
        cross=np.ascontiguousarray(np.moveaxis(cross, -1, 0)),
        moment=np.sum([block.output_gram for block in blocks], axis=0),
        counted=sum(block.weight for block in blocks),
    )


@dataclass(frozen=True)
class TrialRung:
    """Trials' deviations N(0, A) below their subjects' weights; H, a as above.

    deviation: A (K, K); precision: p (n,); reach: H (T, K, K); stiffness: a (T, K); score: (T, n, K), H⁺ of
    the trials' shift.
    """

    deviation: FloatArray
    owner: Indices
    precision: FloatArray
    reach: FloatArray
    stiffness: FloatArray
    score: FloatArray

    @cached_property
    def kept(self) -> FloatArray:
        """Along H, what is left of information on its way up: 1/(1 + pa), (T, n, K)."""
        return np.asarray(1.0 / (1.0 + self.precision[:, None] * self.stiffness[:, None]))

    def above(self) -> FloatArray:
        """Precision of what is known of the subjects' weights, (S, n, K, K)."""
        count, n = self.deviation.shape[0], self.precision.size
        size = self.precision[:, None] * self.kept
        outer = np.swapaxes(self.reach, -1, -2)
        squares = (outer[..., None] * outer[..., None, :]).reshape(*outer.shape[:2], -1)
        parts = []
        for subject in range(int(self.owner.max(initial=-1)) + 1):
            own = np.flatnonzero(self.owner == subject)
            flat = np.swapaxes(size[own], 0, 1).reshape(n, -1) @ squares[own].reshape(-1, count * count)
            parts.append(flat.reshape(n, count, count))
        return np.stack(parts)

    def up(self) -> FloatArray:
        """Shift told of the subjects' weights, (S, n, K)."""
        told = (self.kept * self.score) @ np.swapaxes(self.reach, -1, -2)
        return np.stack(
            [told[self.owner == subject].sum(axis=0) for subject in range(int(self.owner.max()) + 1)]
        )

    def down(self, parent: FloatArray) -> FloatArray:
        """Mean of the deviations, (T, n, K), given the means (S, n, K) of the subjects' weights."""
        innovation = self.score - self.precision[:, None] * (parent[self.owner] @ self.reach)
        return np.asarray((self.kept * innovation) @ np.swapaxes(self.reach, -1, -2) @ self.deviation)

    def spread(self, parent: FloatArray) -> tuple[TrialSpread, FloatArray]:
        """Covariance of the deviations given the parents' (S, n, K, K), and Σ tr(G · that of the weights).

        Returns
        -------
        TrialSpread, and the sum over trials, (n,), of what the spread of the trials' weights adds to Σκrrᵀ.
        """
        share, count, n = self.kept, self.deviation.shape[0], self.precision.size
        size = self.precision[:, None] * share
        carried = np.empty((len(self.owner), n, count, count))
        for at, (owner, reach) in enumerate(zip(self.owner, self.reach, strict=True)):
            half = np.swapaxes((parent[owner].reshape(-1, count) @ reach).reshape(n, count, count), -1, -2)
            carried[at] = (half.reshape(-1, count) @ reach).reshape(n, count, count)
        of_weights = share**2 * np.einsum("tnkk->tnk", carried) + self.stiffness[:, None] * share
        carried *= size[..., :, None] * size[..., None, :]
        return TrialSpread(self.deviation, self.reach, size, carried), of_weights.sum(axis=(0, 2))

    def log_integral(self, subject: int) -> float:
        """Log of the integrals of what each trial of a subject tells, over its weights of N(0, A)."""
        share, score = self.kept[self.owner == subject], self.score[self.owner == subject]
        gain = self.stiffness[self.owner == subject][:, None] * share * score**2
        return 0.5 * float(gain.sum() + np.log(share).sum())


@dataclass(frozen=True)
class TrialSpread:
    """Covariances A − AHDHᵀA + AHXHᵀA of deviations; deviation: A; size: D (T, n, K); carried: X."""

    deviation: FloatArray
    reach: FloatArray
    size: FloatArray
    carried: FloatArray

    def total(self) -> FloatArray:
        """Sum over trials and outputs, (K, K)."""
        number = self.size.shape[0] * self.size.shape[1]
        change = self.carried.sum(axis=1)
        index = np.arange(self.size.shape[-1])
        change[:, index, index] -= self.size.sum(axis=1)
        inside = (self.reach @ change @ np.swapaxes(self.reach, -1, -2)).sum(axis=0)
        return np.asarray(number * self.deviation + self.deviation @ inside @ self.deviation)

    def along(self, precision: FloatArray) -> FloatArray:
        """Σ tr(precision · covariance) over trials, (n, n) diagonal over split outputs."""
        inner = self.deviation @ precision @ self.deviation
        view = np.swapaxes(self.reach, -1, -2) @ inner @ self.reach
        carried = np.einsum("tnkl,tkl->n", self.carried, view, optimize=True)
        lost = np.einsum("tnk,tkk->n", self.size, view)
        start = self.size.shape[0] * float(np.trace(precision @ self.deviation))
        return np.diag(start + carried - lost)


@dataclass(frozen=True)
class Climb:
    """What complete trials tell, passed up to the population.

    trial, subject: the rungs; told: (S, n, K) shift of the subjects' weights; population: (n, K, K)
    posterior covariance of the population weights.
    """

    trial: TrialRung
    subject: Rung
    told: FloatArray
    population: FloatArray

    def mean(self) -> FloatArray:
        """Posterior mean of the population weights, (n, K)."""
        up = self.subject.up(self.told).sum(axis=0)
        return np.asarray(np.einsum("nkl,nl->nk", self.population, up))


def climb(
    trials: CompleteTrials, levels: tuple[FloatArray, FloatArray], residual: FloatArray, split: Split,
    width: FloatArray,
) -> Climb:  # fmt: skip
    """Pass everything up; levels: A of subjects and of trials, (K, K); residual: Σ; width: as make_ladder."""
    below = trials.rung(levels[1], residual, split)
    above = make_rung(levels[0], below.above())
    return Climb(below, above, below.up(), population_covariance(above.above.sum(axis=0), width))

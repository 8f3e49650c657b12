"""Message passing between trial, subject and population where outputs do not mix.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: prior/hierarchy.py.

Subject and trial deviations share one covariance M over the outputs. A change of outputs that makes M the
unit matrix and Σ diagonal then splits the problem into n independent ones of K weights each, and the cost
is n·K³ a trial instead of (n·K)³. Axes here: trial or subject (a unit), split output, feature.

References
----------
Laird & Ware (1982), Biometrics 38, 963–974 (random effects; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from sta_prior.checks import FloatArray
from sta_prior.errors import NotDeterminedError, message
from sta_prior.gaussian import symmetrise


@dataclass(frozen=True)
class Split:
    """Outputs that make M the unit matrix and Σ diagonal.

    back: (n, n), split outputs times ``back`` are measured ones, so that M is backᵀ back; precision: (n,),
    diagonal of Σ⁻¹ in split outputs.
    """

    back: FloatArray
    precision: FloatArray


def make_split(outputs: FloatArray, residual: FloatArray) -> Split:
    """Split of M = outputs and Σ = residual, both (n, n)."""
    factor = np.linalg.cholesky(residual)
    inverse = np.linalg.solve(factor, np.eye(factor.shape[0]))
    spread, axes = np.linalg.eigh(symmetrise(inverse @ outputs @ inverse.T))
    # A direction without spread stays one, but must not be divided by.
    spread = np.maximum(spread, 1e-12 * spread[-1])
    return Split((factor @ axes * np.sqrt(spread)).T, spread)


@dataclass(frozen=True)
class Rung:
    """One level of deviations, N(0, D), below parents that they are added to.

    deviation: D, (K, K); precision: Λ of what is known of parent + deviation, (units, n, K, K);
    kept: (1 + ΛD)⁻¹, same shape. Needs no inverse of D or Λ.
    """

    deviation: FloatArray
    precision: FloatArray
    kept: FloatArray

    @cached_property
    def above(self) -> FloatArray:
        """Precision of what is known of the parents, (units, n, K, K)."""
        return symmetrise(self.kept @ self.precision)

    def up(self, shift: FloatArray) -> FloatArray:
        """Shift η (units, n, K) of the deviated, told of the parents."""
        return np.asarray(np.einsum("unkl,unl->unk", self.kept, shift))

    def down(self, shift: FloatArray, parent: FloatArray) -> FloatArray:
        """Mean of the deviations, (units, n, K), given the parents' means."""
        innovation = shift - np.einsum("unkl,unl->unk", self.precision, parent)
        return np.asarray(self.up(innovation) @ self.deviation)

    def spread(self, parent: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Covariance of the deviations, and of parent + deviation, given the parents' (units, n, K, K)."""
        pull = self.deviation @ self.above
        own = self.deviation - pull @ self.deviation
        rest = np.eye(self.deviation.shape[-1]) - pull
        carried = pull @ parent @ np.swapaxes(pull, -1, -2)
        kept = rest @ parent @ np.swapaxes(rest, -1, -2)
        return symmetrise(own + carried), symmetrise(own + kept)


def make_rung(deviation: FloatArray, precision: FloatArray) -> Rung:
    """Rung of deviations N(0, D), D (K, K), over what is known of the deviated, Λ (units, n, K, K)."""
    identity = np.eye(deviation.shape[-1])
    kept = np.linalg.solve(identity + precision @ deviation, np.broadcast_to(identity, precision.shape))
    return Rung(deviation, precision, np.asarray(kept, dtype=np.float64))


@dataclass(frozen=True)
class Means:
    """Posterior means: population (n, K), subject deviations (S, n, K), trial deviations (T, n, K)."""

    population: FloatArray
    subjects: FloatArray
    trials: FloatArray


@dataclass(frozen=True)
class Ladder:
    """Trials on subjects on a population.

    owner: (T,), subject of each trial; population: (n, K, K), posterior covariance of W.
    """

    trial: Rung
    subject: Rung
    owner: NDArray[np.intp]
    population: FloatArray

    def means(self, shift: FloatArray) -> Means:
        """Posterior means for shifts η of the trials, (T, n, K)."""
        of_subject = add_up(self.trial.up(shift), self.owner)
        of_population = self.subject.up(of_subject).sum(axis=0)
        population = np.einsum("nkl,nl->nk", self.population, of_population)
        subjects = self.subject.down(of_subject, np.broadcast_to(population, of_subject.shape))
        trials = self.trial.down(shift, (population + subjects)[self.owner])
        return Means(population, subjects, trials)

    def weights(self, shift: FloatArray) -> FloatArray:
        """Posterior means of the trials' weights W + u + v, (T, n, K)."""
        found = self.means(shift)
        return found.population + found.subjects[self.owner] + found.trials


def add_up(values: FloatArray, owner: NDArray[np.intp]) -> FloatArray:
    """Sums over the trials of each subject, (S, …)."""
    total = np.zeros((owner.max(initial=-1) + 1, *values.shape[1:]))
    np.add.at(total, owner, values)
    return total


def make_ladder(
    precision: FloatArray,
    owner: NDArray[np.intp],
    subject: FloatArray,
    trial: FloatArray,
    width: FloatArray,
) -> Ladder:
    """Pass all precisions up.

    Parameters
    ----------
    precision : shape (T, n, K, K), of each trial's weights in split outputs
    owner : shape (T,), subject of each trial, 0 … S − 1
    subject, trial : shape (K, K), A_u and A_v
    width : shape (K,), prior variance of the population weights: 0 fixes one, infinity leaves it free
    """
    below = make_rung(trial, precision)
    above = make_rung(subject, add_up(below.above, owner))
    return Ladder(below, above, owner, population_covariance(above.above.sum(axis=0), width))


def population_covariance(precision: FloatArray, width: FloatArray) -> FloatArray:
    """Posterior covariance of W, (n, K, K), from the data's precision and the prior of make_ladder."""
    free = np.flatnonzero(width > 0.0)
    result = np.zeros(precision.shape)
    inner = precision[:, free[:, None], free] + np.diag(1.0 / width[free])
    result[:, free[:, None], free] = symmetrise(invert_information(inner))
    return result


def invert_information(precision: FloatArray) -> FloatArray:
    """Covariance of population weights from their precision, shape (..., K, K).

    Raises
    ------
    NotDeterminedError : the data say nothing about a weight, and no prior does.
    """
    scale = np.sqrt(np.einsum("...kk->...k", precision))
    with np.errstate(divide="ignore", invalid="ignore"):
        unit = precision / (scale[..., :, None] * scale[..., None, :])
    if precision.size and not (np.isfinite(unit).all() and np.linalg.eigvalsh(unit).min() > 1e-14):
        raise NotDeterminedError(
            message(
                "population weights",
                "not determined by the trials and without a prior",
                "Give population_width a finite value or leave out features.",
            )
        )
    inverse = np.linalg.solve(unit, np.broadcast_to(np.eye(unit.shape[-1]), unit.shape))
    return np.asarray(inverse / (scale[..., :, None] * scale[..., None, :]))

"""Products of the left-over of trials at several lags, for the decay times of the residual.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. What is made of them:
prior/time_scale_fit.py.

Each trial is fitted by itself with a weak ridge, and what is left is whitened across outputs. The fit takes
the mean, and all that looks like its features, out of short windows: products at long lags come out too
small, even negative. How much it takes of a residual of given decay time is known, for the fit is linear:
with R the correlation between frames and H the fit, the left-over has the correlation (I − H) R (I − H)ᵀ.
The products are held against that, so windows may be short.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.fft import irfft, next_fast_len, rfft

from sta_prior.checks import BoolArray, FloatArray, IntArray
from sta_prior.prior.basis import Basis
from sta_prior.prior.statistics import SegmentFrames
from sta_prior.prior.time_scale_fit import GRID, LagProducts, choose_time_scales
from sta_prior.prior.time_scales import TimeScales

LONGEST_LAG = 0.3
"""s: three of the longest decay times."""

MOST_LAGS = 12
MOST_FRAMES = 400
"""Of one trial: more say little more, since subjects count."""

RIDGE = 1e-3
SMALLEST_DIRECTION = 1e-3
"""Part of the mean variance below which an output direction does not count in full: it is mere noise."""


@dataclass(frozen=True)
class _Group:
    """Outputs of a trial that are seen and hidden together.

    outputs: indices; seen: (W, L); left: (W, L, outputs), m, left-over of the fit; directions: (W, L, K),
    orthonormal over the frames seen; kept: (K,), part of each that the fit takes.
    """

    outputs: IntArray
    seen: BoolArray
    left: FloatArray
    directions: FloatArray
    kept: FloatArray


def learn_time_scales(trials: Sequence[SegmentFrames], basis: Basis) -> TimeScales:
    """Decay times of what the basis leaves over, from frames of unbroken windows.

    Parameters
    ----------
    trials : paired frames by trial, right side; NaN outputs are hidden
    basis : features that every trial is fitted with

    Returns
    -------
    TimeScales: one or two, see choose_time_scales.
    """
    return choose_time_scales(lag_products(trials, basis))


def lag_products(trials: Sequence[SegmentFrames], basis: Basis) -> LagProducts:
    """Sums over pairs of frames of every subject, or of every trial where there is one subject.

    Notes
    -----
    Outputs that are hidden at other instants than the rest are fitted and whitened by themselves, so that all
    pairs of frames that show an output count, and none that does not.
    """
    grouped = [tuple(_groups(item, basis)) for item in trials]
    whiten = _whitening(grouped, trials[0].displacement.shape[1])
    subjects = {item.subject for item in trials}
    names = [item.subject if len(subjects) > 1 else item.trial for item in trials]
    numbers = {name: number for number, name in enumerate(sorted(set(names)))}
    rows: list[tuple[float, ...]] = []
    lost: list[FloatArray] = []
    for item, name, groups in zip(trials, names, grouped, strict=True):
        for group in groups:
            lags = _lags(item.step, group.seen.shape[1])
            taken = _taken(group, lags, item.step)
            white = group.left @ whiten(group.outputs)
            for index, lag in enumerate(lags):
                pairs = group.seen[:, lag:] & group.seen[:, :-lag]
                early, late = white[:, :-lag], white[:, lag:]
                squares = 0.5 * float(((early**2).sum(axis=2) + (late**2).sum(axis=2))[pairs].sum())
                count = float(pairs.sum() * group.outputs.size)
                rows.append((numbers[name], lag * item.step, count, squares, float(np.vdot(early, late))))
                lost.append(taken[index] * group.outputs.size)
    return _summed(rows, lost, min(item.step for item in trials))


def _kept_frames(window: IntArray) -> IntArray:
    """Frames of a trial to use, at most MOST_FRAMES: windows evenly chosen, cut where they are too long."""
    if window.size <= MOST_FRAMES:
        return np.arange(window.size)
    chosen = np.flatnonzero(window % int(np.ceil(window.size / MOST_FRAMES)) == 0)
    _, number, length = np.unique(window[chosen], return_inverse=True, return_counts=True)
    place = np.arange(chosen.size) - (np.cumsum(length) - length)[number]
    return chosen[place < MOST_FRAMES // length.size] if chosen.size > MOST_FRAMES else chosen


def _groups(frames: SegmentFrames, basis: Basis) -> Iterator[_Group]:
    keep = _kept_frames(frames.window.astype(np.int64))
    displacement = frames.displacement[keep]
    features = basis.values(frames.angles[keep], frames.reference_angles)
    _, window, length = np.unique(frames.window[keep], return_inverse=True, return_counts=True)
    place = np.arange(window.size) - (np.cumsum(length) - length)[window]
    shown = np.isfinite(displacement)
    if shown.all():
        masks, member = shown[:, :1], np.zeros(shown.shape[1], dtype=np.int64)
    else:
        masks, member = np.unique(shown, axis=1, return_inverse=True)
    shape = (int(window.max()) + 1, int(place.max()) + 1)
    for index in np.flatnonzero(masks.any(axis=0)):
        mask = masks[:, index]
        own = np.flatnonzero(member == index)
        directions, kept = _fit_directions(features * mask[:, None])
        values = np.where(mask[:, None], displacement[:, own], 0.0)
        values -= directions @ (kept[:, None] * (directions.T @ values))
        left, along = np.zeros((*shape, own.size)), np.zeros((*shape, kept.size))
        seen = np.zeros(shape, dtype=bool)
        left[window, place], along[window, place], seen[window, place] = values, directions, mask
        yield _Group(own, seen, left, along, kept)


def _fit_directions(features: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Orthonormal directions over frames that a ridge fit takes out, (F, K), and how much of each, (K,)."""
    gram = features.T @ features
    values, vectors = np.linalg.eigh(gram)
    kept = values / (values + RIDGE * values.mean())
    large = kept > 0.01
    return features @ (vectors[:, large] / np.sqrt(values[large])), kept[large]


def _whitening(grouped: Sequence[Sequence[_Group]], outputs: int) -> Callable[[IntArray], FloatArray]:
    """Root that whitens the left-over of chosen outputs, pooled over trials."""
    total, count = np.zeros((outputs, outputs)), np.zeros((outputs, outputs))
    for groups in grouped:
        for one in groups:
            for other in groups:
                at = np.ix_(one.outputs, other.outputs)
                total[at] += np.tensordot(one.left, other.left, axes=([0, 1], [0, 1]))
                count[at] += np.count_nonzero(one.seen & other.seen)
    covariance = total / np.maximum(count, 1.0)

    def root(chosen: IntArray) -> FloatArray:
        values, vectors = np.linalg.eigh(covariance[np.ix_(chosen, chosen)])
        floor = max(SMALLEST_DIRECTION * float(values.mean()), np.finfo(np.float64).tiny)
        return np.asarray(vectors / np.sqrt(np.maximum(values, floor)))

    return root


def _lags(step: float, length: int) -> list[int]:
    """Lags in frames, spaced by their logarithm."""
    longest = max(LONGEST_LAG / step, 1.0)
    spaced = np.unique(np.rint(np.geomspace(1.0, longest, MOST_LAGS)).astype(int))
    return [int(lag) for lag in spaced if lag < length]


def _taken(group: _Group, lags: Sequence[int], step: float) -> FloatArray:
    """What the fit takes of Σ r_t² (mean of both ends) and Σ r_t r_{t+lag}, (lags, 2, 1 + GRID).

    With B = U h and G = R U, row t for frame t: (I − H) R (I − H)ᵀ is R less B Qᵀ and Q Bᵀ,
    Q = G − B UᵀG/2. Frames of different windows count as independent.
    """
    length = group.seen.shape[1]
    size = next_fast_len(2 * length, real=True)
    distance = np.minimum(np.arange(size), size - np.arange(size))
    decay = np.vstack([distance == 0, np.exp(-distance * step / GRID[:, None])])
    # Windows are padded with zeros to twice their length: the product of spectra does not wrap round.
    spectrum = rfft(group.directions, size, axis=1) * rfft(decay, axis=1).real[:, None, :, None]
    along = irfft(spectrum, size, axis=2)[:, :, :length] * group.seen[:, :, None]
    parts = group.directions * group.kept
    q = along - 0.5 * parts @ np.tensordot(along, group.directions, axes=([1, 2], [0, 1]))[:, None]
    squares = 2.0 * np.einsum("wlk,twlk->twl", parts, q)
    taken = np.empty((len(lags), 2, decay.shape[0]))
    for index, lag in enumerate(lags):
        pairs = (group.seen[:, lag:] & group.seen[:, :-lag]).astype(np.float64)
        ends = squares[:, :, lag:] + squares[:, :, :-lag]
        taken[index, 0] = 0.5 * np.tensordot(ends, pairs, axes=([1, 2], [0, 1]))
        taken[index, 1] = np.einsum("wlk,twlk->t", parts[:, :-lag], q[:, :, lag:])
        taken[index, 1] += np.einsum("twlk,wlk->t", q[:, :, :-lag], parts[:, lag:])
    return taken


def _summed(rows: Sequence[tuple[float, ...]], lost: Sequence[FloatArray], step: float) -> LagProducts:
    """A row for each unit and lag; lags that differ by less than a tenth of a millisecond are one."""
    table = np.array(rows).reshape(-1, 5)
    table, taken = table[table[:, 2] > 0.0], np.array(lost).reshape(-1, 2, 1 + GRID.size)[table[:, 2] > 0.0]
    key = np.stack([table[:, 0], np.rint(table[:, 1] / 1e-4)], axis=1)
    distinct, row = np.unique(key, axis=0, return_inverse=True)
    sums, whole = np.zeros((distinct.shape[0], 3)), np.zeros((distinct.shape[0], *taken.shape[1:]))
    np.add.at(sums, row, table[:, 2:])
    np.add.at(whole, row, taken)
    return LagProducts(
        unit=distinct[:, 0].astype(np.int64),
        lag=distinct[:, 1] * 1e-4,
        count=sums[:, 0],
        squares=sums[:, 1],
        products=sums[:, 2],
        lost=whole / sums[:, 0][:, None, None],
        step=step,
    )

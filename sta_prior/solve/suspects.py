"""Markers that do not move with their segment as the prior has it: slipped, swapped or mislabelled.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

Judged by deformation alone, so no bone truth is needed: what no pose of the segment explains is whitened by
the prior's covariance, and every marker is asked how far it lies from where the others put it. A
whole cluster that slips together is a rigid misfit and cannot be seen so.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np
from scipy.stats import chi2

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.rigid import fit_rigid
from sta_prior.solve.terms import (
    JointProblem,
    Linearised,
    SegmentProblem,
    angles_and_jacobians,
    marker_term,
    precision_of_seen,
    segment_at,
)
from sta_prior.study import Lab

FALSE_ALARM = 0.01
"""Nominal chance that a trial of good markers has a suspect: shared among its markers. Subjects whose tissue
differs more than the prior expects raise more alarms than that."""

MOST_FRAMES = 200
FEWEST_LEFT = 4
"""A segment keeps at least so many markers: with fewer no deformation tells which is wrong."""

_OPEN = 1e-8


@dataclass(frozen=True)
class Suspect:
    """A marker that does not fit.

    segment, marker: positions; partner: the marker that it seems to have been swapped with, −1 if none;
    distance: m, from where the others put it, in the median frame; p: of that frame.
    """

    segment: int
    marker: int
    partner: int
    distance: float
    p: float


def unexplained(term: Linearised, own: slice) -> tuple[FloatArray, FloatArray]:
    """Precision (F, n, n) of what no pose of the segment explains, and the residual so weighted, (F, n)."""
    slope = term.slope[:, :, own]
    weighted = term.precision @ slope
    inner = np.swapaxes(slope, 1, 2) @ weighted
    scale = np.sqrt(np.maximum(np.einsum("fxx->fx", inner), 1e-300))
    size, directions = np.linalg.eigh(inner / (scale[:, :, None] * scale[:, None, :]))
    told = size > _OPEN
    axes = np.where(told[:, None, :], directions / np.sqrt(np.where(told, size, 1.0))[:, None, :], 0.0)
    pulled = (weighted / scale[:, None, :]) @ axes
    precision = term.precision - pulled @ np.swapaxes(pulled, 1, 2)
    return precision, np.einsum("fnm,fm->fn", precision, term.residual)


def marker_conflict(term: Linearised, own: slice) -> tuple[FloatArray, FloatArray, FloatArray]:
    """How far every marker lies from where the others put it.

    Parameters
    ----------
    term : of the segment, at poses near the optimum
    own : its columns among the pose unknowns

    Returns
    -------
    squared distance in its own predicted SDs, shape (F, m), NaN where hidden; degrees of freedom, (F, m);
    distance, (F, m), m.

    Notes
    -----
    With K the precision of the deformation, the other markers put marker j K_jj⁻¹(K r)_j away from where it
    is, with covariance K_jj⁻¹: no refit is needed.
    """
    precision, weighted = unexplained(term, own)
    frames, n = weighted.shape
    m = n // 3
    blocks = precision.reshape(frames, m, 3, m, 3)[:, np.arange(m), :, np.arange(m)].transpose(1, 0, 2, 3)
    pull = weighted.reshape(frames, m, 3)
    size, directions = np.linalg.eigh(blocks)
    told = size > 1e-6 * np.maximum(size[..., -1:], 1e-300)
    along = np.einsum("fmad,fma->fmd", directions, pull)
    shift = np.where(told, along / np.where(told, size, 1.0), 0.0)
    seen = term.seen.reshape(frames, m, 3).all(axis=2)
    squared = np.where(seen, (shift * along).sum(axis=2), np.nan)
    return squared, told.sum(axis=2), np.where(seen, np.sqrt((shift**2).sum(axis=2)), np.nan)


def _with_seen(term: Linearised, seen: BoolArray, noise: FloatArray) -> Linearised:
    """The term with more markers hidden."""
    return replace(
        term,
        seen=seen,
        residual=np.where(seen, term.residual, 0.0),
        slope=np.where(seen[..., None], term.slope, 0.0),
        precision=precision_of_seen(term.artifact_covariance + noise, seen),
    )


def _typical(squared: FloatArray, freedom: FloatArray) -> FloatArray:
    """Tail probability of the median frame of every marker, (m,); 1 where it is hardly seen."""
    known = np.isfinite(squared).sum(axis=0) > 0
    middle = np.array(
        [np.nanmedian(column) if ok else 0.0 for column, ok in zip(squared.T, known, strict=True)]
    )
    dimensions = np.maximum(np.median(freedom, axis=0), 1.0)
    return np.where(known, chi2.sf(middle, dimensions), 1.0)


def find_suspects(
    segments: list[SegmentProblem], joints: list[JointProblem], poses: FloatArray, marker_sd: float
) -> list[Suspect]:
    """Find markers that do not fit, one after the other, the worst first.

    Parameters
    ----------
    segments, joints : of the trial
    poses : shape (F, S, 4, 4), lab ← bone, a first look
    marker_sd : instrument noise, m
    """
    frames = np.unique(np.linspace(0, poses.shape[0] - 1, MOST_FRAMES).round().astype(np.int64))
    angles, slope = angles_and_jacobians(joints, poses[frames])
    total = sum(segment.reference.shape[0] for segment in segments)
    found: list[Suspect] = []
    for segment in segments:
        here = segment_at(segment, frames)
        found += _of_segment(here, poses[frames], angles, slope, marker_sd, FALSE_ALARM / total)
    return found


def _of_segment(
    segment: SegmentProblem,
    poses: FloatArray,
    angles: FloatArray,
    slope: FloatArray,
    marker_sd: float,
    level: float,
) -> list[Suspect]:
    term = marker_term(segment, poses, angles, slope, marker_sd)
    own = slice(6 * segment.index, 6 * segment.index + 6)
    noise = marker_sd**2 * np.eye(term.residual.shape[1])
    found: list[Suspect] = []
    markers = segment.reference.shape[0]
    while markers - len(found) >= FEWEST_LEFT + 1:
        squared, freedom, distance = marker_conflict(term, own)
        p = _typical(squared, freedom)
        worst = int(np.argmin(p))
        if p[worst] >= level:
            break
        far = float(np.nanmedian(distance[:, worst]))
        found.append(Suspect(segment.index, worst, -1, far, float(p[worst])))
        seen = term.seen.copy()
        seen[:, 3 * worst : 3 * worst + 3] = False
        term = _with_seen(term, seen, noise)
    return _name_swap(segment, found, poses, angles, slope, marker_sd, level) if found else found


def _name_swap(
    segment: SegmentProblem,
    found: list[Suspect],
    poses: FloatArray,
    angles: FloatArray,
    slope: FloatArray,
    marker_sd: float,
    level: float,
) -> list[Suspect]:
    """If one exchange of labels makes all markers of the segment fit, the two exchanged are the suspects."""
    own = slice(6 * segment.index, 6 * segment.index + 6)
    best, pair = level, (-1, -1)
    for one, other in combinations(range(segment.reference.shape[0]), 2):
        points = segment.points.copy()
        points[:, [one, other]] = points[:, [other, one]]
        there = poses.copy()
        fitted = fit_rigid(segment.reference, points).pose
        known = np.isfinite(fitted[:, 0, 0])
        there[known, segment.index] = fitted[known]
        term = marker_term(replace(segment, points=points), there, angles, slope, marker_sd)
        lowest = float(_typical(*marker_conflict(term, own)[:2]).min())
        if lowest > best:
            best, pair = lowest, (one, other)
    if pair[0] < 0:
        return found
    known_as = {item.marker: item for item in found}
    return [
        replace(known_as.get(marker, found[0]), marker=marker, partner=partner)
        for marker, partner in (pair, pair[::-1])
    ]


def name_suspects(suspects: list[Suspect], lab: Lab, excluded: bool = False) -> str:
    """Suspects in words, worst first in each segment; empty where there is none."""
    words = []
    for item in suspects:
        markers = lab.segments[item.segment].markers
        why = f"{1000.0 * item.distance:.0f} mm from where the others put it"
        if item.partner >= 0:
            why = f"swapped with {markers[item.partner]}?"
        words.append(f"{markers[item.marker]} ({why})")
    return ", ".join(words) + (" [left out]" if words and excluded else "")


def hide(segments: list[SegmentProblem], suspects: list[Suspect]) -> list[SegmentProblem]:
    """The segments without their suspects."""
    result = []
    for segment in segments:
        own = [item.marker for item in suspects if item.segment == segment.index]
        points = segment.points.copy()
        points[:, own] = np.nan
        result.append(replace(segment, points=points))
    return result

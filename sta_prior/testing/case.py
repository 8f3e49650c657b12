"""A prior under test, and what its checks share.

Shell over arrays. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import xarray as xr

from sta_prior.checks import FloatArray
from sta_prior.errors import StaPriorWarning, message
from sta_prior.prior.base import Prior
from sta_prior.prior.family import Posture, SegmentModel
from sta_prior.prior.inputs import row_count
from sta_prior.prior.interface import Artifact
from sta_prior.prior.statistics import gather_angles
from sta_prior.testing.example import Setting, example_trial, setting_of

ROUNDING = 1e-9
"""Part of the largest value by which two ways to the same moments may differ."""

FRAMES = 24
STEPS = 6
PARTS = ("mean", "mean_derivative", "features", "covariance")


class FailedCheckError(AssertionError):
    """A prior does not keep what every family must keep; the message says what, in words."""


@dataclass(frozen=True)
class Case:
    """A prior under test and the angles it is asked about.

    pairs: what it learned from, or None; inside, beyond: (F, joints, 3) rad, within the range of the
    pairs and outside it; outward: (paths, STEPS, joints, 3) rad, away from the edge of the data one joint at
    a time, none where the edge is not known; reference: (joints, 3) rad. Other inputs stand below the joints.
    """

    prior: Prior
    pairs: xr.Dataset | None
    inside: FloatArray
    beyond: FloatArray
    outward: FloatArray
    reference: FloatArray

    @property
    def angles(self) -> FloatArray:
        """Angles within and beyond the data, and the reference posture."""
        return np.concatenate([self.inside, self.beyond, self.reference[None]])

    @cached_property
    def setting(self) -> Setting:
        """All markers and joints of the prior, right side."""
        return setting_of(self.prior, self.reference[: len(self.prior.joints)])

    @property
    def learned_subjects(self) -> list[str]:
        """Subjects that any segment's model has learned from."""
        models = self.prior.segments.values()
        return [name for name in self.prior.subjects if any(model.knows(name) for model in models)]

    def posture(self, segment: str) -> Posture:
        """Reference of a trial on the right side with all markers."""
        return Posture(self.reference, self.setting.positions[segment], self.setting.activity)

    def artifacts(self, setting: Setting, prior: Prior | None = None) -> dict[str, Artifact]:
        """What the solver would get in such a trial."""
        with warnings.catch_warnings():
            # A personal prior warns of anybody else, and is asked about one on purpose.
            warnings.simplefilter("ignore", StaPriorWarning)
            return (prior or self.prior).bind(example_trial(setting)).artifacts

    def new(self, segment: str, model: SegmentModel | None = None) -> Artifact:
        """Artifact of a subject never imaged."""
        return (model or self.prior.segments[segment]).for_new_subject(self.posture(segment))

    def fail(self, segment: str, wrong: str, do: str = "") -> FailedCheckError:
        """An error that names family and segment."""
        return FailedCheckError(message((self.prior.family, segment), wrong, do))


def make_case(prior: Prior, pairs: xr.Dataset | None) -> Case:
    """Choose the angles: some of the pairs' own, or a plain bend; and others beyond them."""
    generator = np.random.default_rng(0)
    count = len(prior.joints)
    if pairs is None:
        known = generator.uniform(-0.1, 0.1, (200, count, 3))
        known[..., 0] = generator.uniform(0.0, 1.0, (200, count))
        references = generator.uniform(-0.05, 0.05, (1, count, 3))
    else:
        dof = {joint.name: joint.dof for joint in prior.joints}
        known, references = (gather_angles(pairs, name, dof) for name in ("angle", "reference_angle"))
        known = known[np.isfinite(known).all(axis=(1, 2))]
        references = references[np.isfinite(references).all(axis=(1, 2))]
    # Other inputs than the angles stay near those of the reference posture.
    extra = row_count(prior.inputs, count) - count
    known = np.concatenate([known, generator.uniform(-0.01, 0.01, (known.shape[0], extra, 3))], axis=1)
    references = np.concatenate([references, np.zeros((references.shape[0], extra, 3))], axis=1)
    reference = references.mean(axis=0)
    inside = known[generator.permutation(known.shape[0])[:FRAMES]]
    beyond = inside[: FRAMES // 2].copy()
    both = np.concatenate([known, references])[:, :count, 0]
    low, high = both.min(axis=0), both.max(axis=0)
    away = generator.uniform(0.15, 0.6, (beyond.shape[0], count))
    order = np.arange(beyond.shape[0])
    beyond[:, :count, 0] = np.where(order[:, None] % 2, high + away, low - away)
    # In every other pair of frames the first joint alone is beyond.
    beyond[order % 4 > 1, 1:] = inside[: beyond.shape[0]][order % 4 > 1, 1:]
    outward = np.tile(np.median(known, axis=0), (2 * count, STEPS, 1, 1))
    for joint in range(count):
        outward[2 * joint, :, joint, 0] = low[joint] - np.linspace(0.0, 1.0, STEPS)
        outward[2 * joint + 1, :, joint, 0] = high[joint] + np.linspace(0.0, 1.0, STEPS)
    return Case(prior, pairs, inside, beyond, outward if pairs is not None else outward[:0], reference)


def spread(artifact: Artifact, angles: FloatArray) -> float:
    """Mean SD of the artifact over frames and outputs, m."""
    covariance = artifact.moments(angles).covariance
    return float(np.sqrt(np.einsum("faa->fa", covariance)).mean())


def differ(one: FloatArray, other: FloatArray) -> bool:
    """Whether two arrays differ by more than rounding."""
    if one.shape != other.shape:
        return True
    scale = max(float(np.abs(other).max(initial=0.0)), 1e-12)
    return float(np.abs(one - other).max(initial=0.0)) > ROUNDING * scale


def lowest(matrix: FloatArray) -> float:
    """Smallest eigenvalue over the largest size of any, of symmetric matrices (..., n, n)."""
    if not matrix.size:
        return 0.0
    values = np.linalg.eigvalsh(matrix)
    return float(values.min() / max(float(np.abs(values).max()), 1e-300))

"""What a family of priors provides, and how a segment's prior is fitted to a trial.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. A family learns a SegmentModel of
one segment; the model gives an Artifact for a subject, always for the right side of the body, with all
markers that it knows. The shell then keeps the trial's markers and mirrors.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple, Protocol

import numpy as np
from numpy.typing import NDArray

from sta_prior.checks import FloatArray, IntArray
from sta_prior.prior.inputs import Driver
from sta_prior.prior.interface import Artifact, Design, Moments, design_of, time_scales_of
from sta_prior.prior.statistics import SegmentFrames, mirror_signs
from sta_prior.prior.time_scales import TimeScales

Values = NDArray[Any]


class Variable(NamedTuple):
    """A stored array: names of its dimensions, values, unit."""

    dims: tuple[str, ...]
    values: Values
    units: str = "1"


@dataclass(frozen=True)
class SegmentData:
    """What a family learns one segment from.

    Attributes
    ----------
    name : of the segment
    markers : in output order, three outputs each
    layout : shape (m, 3), m, mean reference positions, right side
    frames : paired frames by trial, mirrored to the right side
    adjacent : positions of the joints that touch the segment
    extra : other inputs than the joint angles, for families with takes_inputs
    """

    name: str
    markers: tuple[str, ...]
    layout: FloatArray
    frames: Sequence[SegmentFrames]
    adjacent: tuple[int, ...]
    extra: tuple[Driver, ...] = ()


@dataclass(frozen=True)
class Posture:
    """Reference of the trial to be solved, right side.

    angles: (rows, 3) rad, of the prior's joints in its order, then its other inputs; markers: (m, 3) m,
    reference positions of the trial's markers; activity: name of the task.
    """

    angles: FloatArray
    markers: FloatArray
    activity: str = ""


@dataclass(frozen=True)
class Own:
    """Paired frames of the very subject to be solved.

    subject: name, for frames that the prior learned from; frames: new ones; trial: key of the trial to be
    solved where its own frames are among them, else empty; widened: whether the spread between subjects
    takes the factor for few subjects.
    """

    subject: str
    frames: Sequence[SegmentFrames]
    trial: str
    widened: bool = True


class SegmentModel(Protocol):
    """A learned prior of one segment.

    markers: in output order; none means that any markers do. inflation: factor on the spread of a subject
    never imaged. freedom: degrees of freedom of that spread.
    """

    @property
    def name(self) -> str:
        """Name of the segment."""

    @property
    def markers(self) -> tuple[str, ...]:
        """Markers in output order; none means that any markers do."""

    @property
    def layout(self) -> FloatArray:
        """Mean reference positions, shape (m, 3), m, right side."""

    @property
    def inflation(self) -> float:
        """Factor on the variance of the trial-constant weights of a subject never imaged."""

    def for_new_subject(self, posture: Posture, inflation: float | None = None) -> Artifact:
        """Artifact of a subject never imaged; the model's own inflation by default."""

    def for_subject(self, posture: Posture, own: Own) -> Artifact:
        """Artifact of a subject with paired frames of its own."""

    def knows(self, subject: str) -> bool:
        """Whether it learned from this subject."""

    def refitted(self, frames: Sequence[SegmentFrames]) -> SegmentModel:
        """The same kind of model learned from other frames; may start from this one."""

    def with_inflation(self, inflation: float) -> SegmentModel:
        """The same model with another factor."""

    def variables(self) -> dict[str, Variable]:
        """All that has to be stored, as arrays."""

    def describe(self) -> str:
        """One line about what was learned."""


class Family(Protocol):
    """A way to learn a SegmentModel; plug-ins provide one under the entry-point group sta_prior.priors."""

    @property
    def name(self) -> str:
        """Name on the command line and in prior files."""

    def learn(self, data: SegmentData) -> SegmentModel:
        """Learn one segment."""

    def read(self, name: str, stored: Mapping[str, Values]) -> SegmentModel:
        """Make the model of a segment from what its ``variables`` stored."""


@dataclass(frozen=True)
class Restricted:
    """An artifact for the markers, the side and the joint order of a trial.

    inner: for the right side, all markers, the prior's joints; outputs: which outputs to keep; signs:
    (kept outputs,) −1 where mirroring turns one round; joints: position of each of the prior's joints
    (and other inputs) among the trial's; total: number of the trial's.
    """

    inner: Artifact
    outputs: IntArray
    signs: FloatArray
    joints: tuple[int, ...]
    total: int

    @property
    def residual(self) -> FloatArray:
        """Residual covariance, shape (n, n), m²."""
        return self._matrix(self.inner.residual)

    @property
    def time_constant(self) -> float:
        """Slowest decay time of the residual's correlation, s."""
        return self.inner.time_constant

    @property
    def time_scales(self) -> TimeScales:
        """Correlation of the residual over time."""
        return time_scales_of(self.inner)

    @property
    def constant_covariance(self) -> FloatArray:
        """Covariance of the trial-constant unknowns, shape (K·n, K·n), m², feature-major."""
        size = self.inner.constant_covariance.shape[0]
        full = self.inner.residual.shape[0]
        count = size // full
        keep = (full * np.arange(count)[:, None] + self.outputs).reshape(-1)
        both = np.tile(self.signs, count)
        kept: FloatArray = self.inner.constant_covariance[np.ix_(keep, keep)] * np.outer(both, both)
        return kept

    def _matrix(self, matrix: FloatArray) -> FloatArray:
        kept: FloatArray = matrix[..., self.outputs[:, None], self.outputs] * np.outer(self.signs, self.signs)
        return kept

    def design(self, angles: FloatArray) -> Design:
        """Design at the trial's joint angles, shape (F, joints, 3), rad."""
        inner = design_of(self.inner, angles[:, list(self.joints)])
        frames, count = inner.features.shape
        derivative = np.zeros((frames, self.outputs.size, self.total, 3))
        kept = inner.mean_derivative[:, self.outputs] * self.signs[:, None, None]
        derivative[:, :, list(self.joints)] = kept
        slopes = np.zeros((frames, count, self.total, 3))
        slopes[:, :, list(self.joints)] = inner.feature_derivative
        return Design(
            mean=inner.mean[:, self.outputs] * self.signs,
            mean_derivative=derivative,
            features=inner.features,
            feature_derivative=slopes,
            growth=None if inner.growth is None else self._matrix(inner.growth),
        )

    def moments(self, angles: FloatArray) -> Moments:
        """Moments at the trial's joint angles, shape (F, joints, 3), rad."""
        inner = self.inner.moments(angles[:, list(self.joints)])
        derivative = np.zeros((angles.shape[0], self.outputs.size, self.total, 3))
        kept = inner.mean_derivative[:, self.outputs] * self.signs[:, None, None]
        derivative[:, :, list(self.joints)] = kept
        return Moments(
            mean=inner.mean[:, self.outputs] * self.signs,
            mean_derivative=derivative,
            features=inner.features,
            covariance=self._matrix(inner.covariance),
        )


def restrict(inner: Artifact, outputs: IntArray, side: str, joints: Sequence[int], total: int) -> Restricted:
    """Keep outputs (indices into the inner artifact's), mirror for a left side, reorder joints."""
    signs = np.ones(outputs.size)
    if side == "left":
        signs = mirror_signs(inner.residual.shape[0] // 3)[outputs]
    return Restricted(inner, outputs, signs, tuple(joints), total)

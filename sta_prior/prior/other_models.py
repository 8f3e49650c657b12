"""The families ``exact-gp`` and ``magnitude`` behind the protocol of prior/family.py.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. What they compute: prior/exact_gp.py,
prior/magnitude.py.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields, replace

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.errors import MismatchError
from sta_prior.prior.exact_core import ExactArtifact
from sta_prior.prior.exact_gp import fit_exact
from sta_prior.prior.exact_model import ExactFit
from sta_prior.prior.family import Own, Posture, SegmentData, Values, Variable
from sta_prior.prior.magnitude import (
    MagnitudeArtifact,
    magnitude_for,
    magnitudes_of,
    packaged_text,
    read_magnitudes,
)
from sta_prior.prior.statistics import SegmentFrames

_UNITS = {
    "outputs": "m2", "residual": "m2", "observed_residual": "m2", "bone": "m2", "magnitude": "m2",
    "displacement": "m", "angles": "rad", "references": "rad", "reach": "rad", "inducing": "rad",
    "scale": "rad", "lengths": "rad", "time_constants": "s", "spacing": "s",
}  # fmt: skip


def beyond_data(segment: str, layout: FloatArray) -> FloatArray:
    """Covariance that the spread of a learned prior grows by, far beyond its data, (3m, 3m) m².

    The magnitude prior's at full size, for the widest task; a segment without published sizes gets the
    foot's, the smallest there are, for nothing larger could be defended.
    """
    try:
        return magnitude_for(segment, layout).full_covariance
    except MismatchError:
        return magnitude_for("foot", layout).full_covariance


@dataclass(frozen=True)
class ExactModel:
    """An exact Gaussian process of one segment."""

    name: str
    markers: tuple[str, ...]
    layout: FloatArray
    fit: ExactFit
    inflation: float = 1.0

    def knows(self, subject: str) -> bool:
        """Whether it learned from this subject."""
        return subject in self.fit.subject_names

    def with_inflation(self, inflation: float) -> ExactModel:
        """The same model with another factor."""
        return replace(self, inflation=inflation)

    def refitted(self, frames: Sequence[SegmentFrames]) -> ExactModel:
        """Learn from other frames, with the covariance over angles kept."""
        adjacent = tuple(int(joint) for joint in self.fit.adjacent)
        return replace(self, fit=fit_exact(frames, adjacent, self.fit.magnitude, self.fit))

    def for_new_subject(self, posture: Posture, inflation: float | None = None) -> ExactArtifact:
        """Artifact of a subject never imaged; the model's own inflation by default."""
        factor = self.inflation if inflation is None else inflation
        return self.fit.artifact(posture.angles, inflation=factor)

    def for_subject(self, posture: Posture, own: Own) -> ExactArtifact:
        """Artifact of a subject with paired frames of its own."""
        if not own.frames and not self.knows(own.subject):
            return self.for_new_subject(posture)
        factor = self.inflation if own.widened else 1.0
        return self.fit.artifact(posture.angles, tuple(own.frames), own.subject, own.trial, factor)

    def describe(self) -> str:
        """One line about what was learned."""
        residual = 1000.0 * float(np.sqrt(np.diag(self.fit.residual).mean()))
        lengths = ", ".join(f"{np.degrees(length):.0f}°" for length in self.fit.lengths)
        return (
            f"residual {residual:.1f} mm SD per axis, {self.fit.time_scales.words()}; "
            f"length scale {lengths}; {self.fit.subject.size} frames; fit: {self.fit.stop_reason}"
        )

    def variables(self) -> dict[str, Variable]:
        """All that has to be stored, as arrays; a dimension for every field of the fit."""
        stored = {}
        for item in fields(ExactFit):
            values = np.asarray(getattr(self.fit, item.name))
            dims = tuple(f"{item.name}_{axis}" for axis in range(values.ndim))
            stored[item.name] = Variable(dims, values, _UNITS.get(item.name, "1"))
        return stored


@dataclass(frozen=True)
class ExactFamily:
    """The ``exact-gp`` family."""

    name: str = "exact-gp"

    def learn(self, data: SegmentData) -> ExactModel:
        """Learn one segment."""
        fit = fit_exact(data.frames, data.adjacent, beyond_data(data.name, data.layout))
        return ExactModel(data.name, data.markers, data.layout, fit)

    def read(self, name: str, stored: Mapping[str, Values]) -> ExactModel:
        """Make the model of a segment from what its ``variables`` stored."""
        items: dict[str, object] = {}
        for item in fields(ExactFit):
            values = stored[item.name]
            if item.type == "tuple[str, ...]":
                items[item.name] = tuple(str(value) for value in values)
            else:
                items[item.name] = values.item() if values.ndim == 0 else values
        return ExactModel(
            name=name,
            markers=tuple(str(marker) for marker in stored["markers"]),
            layout=stored["layout"],
            fit=ExactFit(**items),  # type: ignore[arg-type]
            inflation=float(stored["inflation"]),
        )


@dataclass(frozen=True)
class MagnitudeModel:
    """Published sizes of one segment; any markers do.

    adjacent: positions of the joints that touch the segment; none where no joint is known, and then the
    artifact has its full size at every posture; table: text of the table of sizes, so that a file says
    what it means whatever program reads it.
    """

    name: str
    adjacent: tuple[int, ...] = ()
    markers: tuple[str, ...] = ()
    layout: FloatArray = field(default_factory=lambda: np.zeros((0, 3)))
    inflation: float = 1.0
    table: str = field(default_factory=packaged_text)

    def knows(self, subject: str) -> bool:
        """It learns from nobody."""
        return False

    def with_inflation(self, inflation: float) -> MagnitudeModel:
        """Itself: published sizes are taken as they are."""
        return self

    def refitted(self, frames: Sequence[SegmentFrames]) -> MagnitudeModel:
        """Itself: nothing is learned."""
        return self

    def for_new_subject(self, posture: Posture, inflation: float | None = None) -> MagnitudeArtifact:
        """Artifact of anybody."""
        known = self.adjacent if self.adjacent else None
        return magnitude_for(
            self.name,
            posture.markers,
            posture.activity,
            posture.angles if known else None,
            known,
            magnitudes_of(self.table),
        )

    def for_subject(self, posture: Posture, own: Own) -> MagnitudeArtifact:
        """Artifact of anybody; own frames change nothing."""
        return self.for_new_subject(posture)

    def describe(self) -> str:
        """One line about the sizes."""
        table = magnitudes_of(self.table)
        sizes = table.segments[table.segment(self.name)].size
        told = ", ".join(f"{task.replace('_', ' ')} {item.value:.0f}" for task, item in sizes.items())
        return f"published RMS size of displacement in mm: {told}"

    def variables(self) -> dict[str, Variable]:
        """All that has to be stored: the joints, and the table with every number and its source."""
        return {
            "adjacent": Variable(("adjacent",), np.array(self.adjacent, dtype=np.int64)),
            "table": Variable((), np.array(self.table)),
        }


@dataclass(frozen=True)
class MagnitudeFamily:
    """The ``magnitude`` family."""

    name: str = "magnitude"

    def learn(self, data: SegmentData) -> MagnitudeModel:
        """Take the published sizes of a segment; MismatchError where there are none."""
        read_magnitudes().segment(data.name)
        return MagnitudeModel(data.name, data.adjacent, layout=data.layout)

    def read(self, name: str, stored: Mapping[str, Values]) -> MagnitudeModel:
        """Make the model of a segment from what its ``variables`` stored."""
        return MagnitudeModel(
            name,
            tuple(int(joint) for joint in stored["adjacent"]),
            layout=stored["layout"],
            table=str(stored["table"]),
        )


EXACT = ExactFamily()
MAGNITUDE = MagnitudeFamily()

"""Artifact in proportion to the change of flexion of one joint, by a slope of one's own for everybody."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from sta_prior.gaussian import subtract_psd
from sta_prior.prior.family import Own, Posture, SegmentData, Values, Variable
from sta_prior.prior.interface import Moments
from sta_prior.prior.statistics import SegmentFrames

SLOPE_SD = 0.01  # m/rad; what one subject says about others
FLOOR_SD = 0.0005  # m; the residual is never smaller
INDEPENDENT = 0.1  # s; frames nearer in time than this tell the same


@dataclass(frozen=True)
class Artifact:
    """d = (q − q0)·b + r with b ~ N(slope, slope_covariance), constant in a trial, and r ~ N(0, residual)."""

    joint: int
    reference: float
    slope: np.ndarray
    slope_covariance: np.ndarray
    residual: np.ndarray
    time_constant: float = INDEPENDENT

    @property
    def constant_covariance(self):
        return self.slope_covariance

    def moments(self, angles):
        change = angles[:, self.joint, 0] - self.reference
        derivative = np.zeros((*change.shape, self.slope.size, *angles.shape[1:]))
        derivative[:, :, self.joint, 0] = self.slope
        return Moments(
            mean=change[:, None] * self.slope,
            mean_derivative=derivative,
            features=change[:, None],
            covariance=change[:, None, None] ** 2 * self.slope_covariance + self.residual,
        )


@dataclass(frozen=True)
class Model:
    """What was learned of one segment: the slopes (n,) of every subject, what they rest on, the residual."""

    name: str
    markers: tuple[str, ...]
    layout: np.ndarray
    joint: int
    subjects: tuple[str, ...]
    slopes: np.ndarray  # (subjects, n), m/rad
    information: np.ndarray  # (subjects,), rad²: sum of squared changes over independent frames
    residual: np.ndarray  # (n, n), m²
    inflation: float = 1.0

    def others(self, subject=""):
        """Mean and covariance of the slopes of everybody else."""
        slopes = self.slopes[[name != subject for name in self.subjects]]
        n = self.residual.shape[0]
        if not len(slopes):
            return np.zeros(n), SLOPE_SD**2 * np.eye(n)
        mean = slopes.mean(axis=0)
        # Two made-up subjects of the size SLOPE_SD keep it positive definite; 1/S is what the mean lacks.
        scatter = (slopes - mean).T @ (slopes - mean) + 2 * SLOPE_SD**2 * np.eye(n)
        return mean, scatter / (len(slopes) + 1) * (1 + 1 / len(slopes))

    def artifact(self, posture, slope, covariance):
        return Artifact(self.joint, posture.angles[self.joint, 0], slope, covariance, self.residual)

    def for_new_subject(self, posture: Posture, inflation: float | None = None):
        mean, covariance = self.others()
        return self.artifact(posture, mean, (self.inflation if inflation is None else inflation) * covariance)

    def for_subject(self, posture: Posture, own: Own):
        # Its own frames are taken out of the population first: nothing counts twice.
        mean, covariance = self.others(own.subject)
        covariance = (self.inflation if own.widened else 1.0) * covariance
        parts = [slope_of([item], self.joint) for item in own.frames]
        if self.knows(own.subject):
            at = self.subjects.index(own.subject)
            parts.append((self.slopes[at], self.information[at]))
        told = sum(information for _, information in parts)
        if told > 0:
            slope = sum(slope * information for slope, information in parts) / told
            gain = covariance @ np.linalg.inv(covariance + self.residual / told)
            mean, covariance = mean + gain @ (slope - mean), covariance - gain @ covariance
        return self.artifact(posture, mean, 0.5 * (covariance + covariance.T))

    def knows(self, subject: str) -> bool:
        return subject in self.subjects

    def refitted(self, frames: Sequence[SegmentFrames]):
        return fit(self.name, self.markers, self.layout, self.joint, frames)

    def with_inflation(self, inflation: float):
        return replace(self, inflation=inflation)

    def variables(self) -> dict[str, Variable]:
        return {
            "joint": Variable((), np.array(self.joint)),
            "subjects": Variable(("subject",), np.array(self.subjects)),
            "slopes": Variable(("subject", "output"), self.slopes, "m rad-1"),
            "information": Variable(("subject",), self.information, "rad2"),
            "residual": Variable(("output", "output2"), self.residual, "m2"),
        }

    def describe(self) -> str:
        return f"slopes of {len(self.subjects)} subjects on the flexion of joint {self.joint}"


def slope_of(frames: Sequence[SegmentFrames], joint: int):
    """Least-squares slope (n,) of some trials, hidden outputs left out, and the information behind it."""
    change = np.concatenate([item.angles[:, joint, 0] - item.reference_angles[joint, 0] for item in frames])
    shown = np.concatenate([item.displacement for item in frames])
    seen = np.isfinite(shown)
    square = (change[:, None] ** 2 * seen).sum(axis=0)
    slope = (change[:, None] * np.where(seen, shown, 0.0)).sum(axis=0) / np.maximum(square, 1e-6)
    return slope, square.min() * min(frames[0].step / INDEPENDENT, 1.0)


def fit(name, markers, layout, joint, frames):
    subjects = tuple(sorted({item.subject for item in frames}))
    mine = [[item for item in frames if item.subject == subject] for subject in subjects]
    slopes, information = map(np.array, zip(*(slope_of(own, joint) for own in mine), strict=True))
    rests = []
    for own, slope in zip(mine, slopes, strict=True):
        for item in own:
            change = item.angles[:, joint, 0] - item.reference_angles[joint, 0]
            # A hidden output counts as one that does not deviate.
            rests.append(np.nan_to_num(item.displacement - change[:, None] * slope))
    rest = np.concatenate(rests)
    # What the bone truth got wrong is not artifact.
    noise = np.concatenate([item.noise for item in frames]).mean(axis=0)
    residual = subtract_psd(rest.T @ rest / len(rest), noise, FLOOR_SD**2) + FLOOR_SD**2 * np.eye(len(noise))
    return Model(name, markers, layout, joint, subjects, slopes, information, residual)


class Family:
    name = "proportional"

    def learn(self, data: SegmentData) -> Model:
        joint = data.adjacent[-1] if data.adjacent else 0
        return fit(data.name, data.markers, data.layout, joint, data.frames)

    def read(self, name: str, stored: Mapping[str, Values]) -> Model:
        return Model(
            name=name,
            markers=tuple(str(marker) for marker in stored["markers"]),
            layout=stored["layout"],
            joint=int(stored["joint"]),
            subjects=tuple(str(subject) for subject in stored["subjects"]),
            slopes=stored["slopes"],
            information=stored["information"],
            residual=stored["residual"],
            inflation=float(stored["inflation"]),
        )


FAMILY = Family()

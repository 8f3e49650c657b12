"""A fitted exact Gaussian process of one segment, and its artifact in a trial.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: prior/exact_gp.py; the algebra:
prior/exact_core.py.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from sta_prior.checks import BoolArray, FloatArray, IntArray
from sta_prior.prior.exact_core import FLEXION, AngleKernel, ExactArtifact, JointGaussian, joint_gaussian
from sta_prior.prior.statistics import SegmentFrames
from sta_prior.prior.time_scales import TimeScales


@dataclass(frozen=True)
class Observed:
    """Thinned frames that show every output.

    angles, references: (N, D) rad, flexion; displacement: (N, n) m; bone: (N, n, n) m², bone-truth noise;
    subject, trial: (N,) index of each.
    """

    angles: FloatArray
    references: FloatArray
    displacement: FloatArray
    bone: FloatArray
    subject: IntArray
    trial: IntArray


def thinned(window: FloatArray, step: float, spacing: float) -> IntArray:
    """Indices of frames ``spacing`` seconds apart within every unbroken window, in its middle."""
    stride = max(1, round(spacing / step))
    kept = []
    for index in np.unique(window):
        own = np.flatnonzero(window == index)
        kept.append(own[((own.size - 1) % stride) // 2 :: stride])
    return np.concatenate(kept).astype(np.int64) if kept else np.zeros(0, dtype=np.int64)


def observe(
    frames: Sequence[SegmentFrames],
    adjacent: IntArray,
    spacing: float,
    subjects: Sequence[str],
    trials: Sequence[tuple[str, str]],
) -> Observed:
    """Gather thinned frames of all trials that show every output."""
    parts = []
    for item in frames:
        complete = np.flatnonzero(np.isfinite(item.displacement).all(axis=1))
        keep = complete[thinned(item.window[complete], item.step, spacing)]
        flexion = item.angles[keep][:, adjacent, FLEXION]
        parts.append(
            Observed(
                angles=flexion,
                references=np.tile(item.reference_angles[adjacent, FLEXION], (keep.size, 1)),
                displacement=item.displacement[keep],
                bone=item.noise[keep],
                subject=np.full(keep.size, subjects.index(item.subject)),
                trial=np.full(keep.size, trials.index((item.subject, item.trial))),
            )
        )
    names = ("angles", "references", "displacement", "bone", "subject", "trial")
    return Observed(*(np.concatenate([getattr(part, name) for part in parts]) for name in names))


@dataclass(frozen=True)
class ExactFit:
    """A fitted exact Gaussian process of one segment; arrays, numbers and texts only.

    Attributes
    ----------
    adjacent : shape (D,), positions of the joints whose flexion drives the artifact
    scale, lengths : shape (D,), rad, unit of the trend and length scales
    wave, trend : variances of the squared exponential and of the trend, against M
    levels : shape (4,), shares p, s, t and the offset o
    outputs, residual, observed_residual : shape (n, n), m², M, and Σ without and with bone-truth noise
    bone : shape (n, n), m², mean bone-truth noise of the frames
    angles, references : shape (N, D), rad; displacement : shape (N, n), m; noise : shape (N,), w
    subject, trial : shape (N,), indices into subject_names, trial_names
    trial_subject : shape (T,), index of the subject of each trial
    reach : shape (D, 2), rad; inducing : shape (K, D), rad; magnitude : shape (n, n), m²
    time_constants, time_shares : shape (k,), s and unitless, correlation of the residual over time
    spacing : s, between thinned frames
    log_likelihood, iterations, stop_reason : how the fit ended
    """

    adjacent: IntArray
    scale: FloatArray
    lengths: FloatArray
    wave: float
    trend: float
    levels: FloatArray
    outputs: FloatArray
    residual: FloatArray
    observed_residual: FloatArray
    bone: FloatArray
    angles: FloatArray
    references: FloatArray
    displacement: FloatArray
    noise: FloatArray
    subject: IntArray
    trial: IntArray
    subject_names: tuple[str, ...]
    trial_names: tuple[str, ...]
    trial_subject: IntArray
    reach: FloatArray
    inducing: FloatArray
    magnitude: FloatArray
    time_constants: FloatArray
    time_shares: FloatArray
    spacing: float
    log_likelihood: float
    iterations: int
    stop_reason: str

    @property
    def time_scales(self) -> TimeScales:
        """Correlation of the residual over time."""
        return TimeScales(self.time_constants, self.time_shares)

    @property
    def kernel(self) -> AngleKernel:
        """Covariance over flexion."""
        return AngleKernel(self.scale, self.lengths, self.wave, self.trend)

    @property
    def trial_keys(self) -> tuple[tuple[str, str], ...]:
        """Subject and name of every trial."""
        owners = [self.subject_names[index] for index in self.trial_subject]
        return tuple(zip(owners, self.trial_names, strict=True))

    @cached_property
    def gaussian(self) -> JointGaussian:
        """The training frames, split."""
        own = np.zeros(self.subject.size, dtype=bool)
        gram = self._gram(self.angles, self.references, self.subject, self.trial, own, 1.0)
        return joint_gaussian(gram, self.noise, self.outputs, self.observed_residual, self.displacement)

    def _gram(
        self,
        angles: FloatArray,
        references: FloatArray,
        subject: IntArray,
        trial: IntArray,
        own: BoolArray,
        factor: float,
    ) -> FloatArray:
        """Covariance of the frames; deviations of the ``own`` subject widened by a factor."""
        p, s, t, o = self.levels
        wider = np.where(np.outer(own, own), factor, 1.0)
        same_subject = wider * (subject[:, None] == subject)
        same_trial = wider * (trial[:, None] == trial)
        gram = self.kernel.gram(angles, references, angles, references)
        return np.asarray(gram * (p + s * same_subject + t * same_trial) + o * same_trial)

    def artifact(
        self,
        reference_angles: FloatArray,
        own_frames: Sequence[SegmentFrames] = (),
        subject: str = "",
        trial: str = "",
        inflation: float = 1.0,
    ) -> ExactArtifact:
        """Artifact of one segment in one trial.

        Parameters
        ----------
        reference_angles : shape (joints, 3), rad, at the reference posture
        own_frames : paired frames of the subject that the fit has not learned from
        subject : its name; frames that the fit learned from it count once, as its own
        trial : name of the trial to be solved where its own frames are among these, else empty
        inflation : factor on the spread of a subject: on everything constant in a trial of a subject never
            imaged, on the subject's own deviations where it has frames

        Returns
        -------
        ExactArtifact
        """
        names = [*self.subject_names]
        keys = [*self.trial_keys]
        for item in own_frames:
            if subject not in names:
                names.append(subject)
            if (subject, item.trial) not in keys:
                keys.append((subject, item.trial))
        angles, references, gaussian = self.angles, self.references, self.gaussian
        subjects, trials = self.subject, self.trial
        known = subject in names
        who = names.index(subject) if known else -1
        if own_frames:
            mine = [replace(item, subject=subject) for item in own_frames]
            new = observe(mine, self.adjacent, self.spacing, names, keys)
            angles = np.concatenate([angles, new.angles])
            references = np.concatenate([references, new.references])
            subjects = np.concatenate([subjects, new.subject])
            trials = np.concatenate([trials, new.trial])
        own = subjects == who
        if own_frames or (known and inflation != 1.0):
            noise, shown = self.noise, self.displacement
            if own_frames:
                noise = np.concatenate([noise, noise_factor(self.observed_residual, self.bone, new.bone)])
                shown = np.concatenate([shown, new.displacement])
            gram = self._gram(angles, references, subjects, trials, own, inflation)
            gaussian = joint_gaussian(gram, noise, self.outputs, self.observed_residual, shown)
        p, s, t, o = self.levels
        factor = inflation if known else 1.0
        key = (subject, trial)
        same_trial = (trials == keys.index(key)) if trial and key in keys else np.zeros(own.size, dtype=bool)
        reference = reference_angles[self.adjacent, FLEXION]
        return ExactArtifact(
            kernel=self.kernel,
            gaussian=gaussian,
            angles=angles,
            references=references,
            share=p + factor * (s * own + t * same_trial),
            variance=float(p + factor * (s + t)),
            offset_share=factor * o * same_trial,
            offset=float(factor * o),
            reference=np.clip(reference, self.reach[:, 0], self.reach[:, 1]),
            adjacent=self.adjacent,
            reach=self.reach,
            inducing=self.inducing,
            residual=self.residual,
            time_scales=self.time_scales,
            magnitude=self.magnitude,
            inflation=1.0 if known else inflation,
        )


def noise_factor(residual: FloatArray, mean_bone: FloatArray, bone: FloatArray) -> FloatArray:
    """Noise of each frame against that with the mean bone-truth noise, shape (N,); at least a quarter."""
    more = np.einsum("faa->f", bone) - np.trace(mean_bone)
    return np.asarray(np.maximum(1.0 + more / np.trace(residual), 0.25))

"""Families that are linear in features of the joint angles: ``linear`` and ``reduced-rank-gp``.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The model: prior/hierarchy.py; the
features: prior/basis.py.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.errors import ShapeError, message
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.basis import Basis, Reach, Term, Wave, orthonormal
from sta_prior.prior.family import Own, Posture, SegmentData, Values, Variable
from sta_prior.prior.fitting import FitSettings, fit_hierarchy
from sta_prior.prior.gain import flexion_gains
from sta_prior.prior.hierarchy import (
    Block,
    Hierarchy,
    TrialStatistics,
    Weights,
    new_subject,
    subject_posterior,
    trial_posterior,
    without_subject,
)
from sta_prior.prior.inputs import INPUTS, Driver
from sta_prior.prior.lag_products import learn_time_scales
from sta_prior.prior.linear import linear_basis, reaches_of
from sta_prior.prior.other_models import beyond_data
from sta_prior.prior.reduced_rank import reduced_rank_basis
from sta_prior.prior.shrinkage import USUAL, Shrinkage, choose_shrinkage
from sta_prior.prior.statistics import SegmentFrames, summarise
from sta_prior.prior.time_scales import TimeScales

REFIT = FitSettings(maximum_iterations=20)


_KINDS = ("angle", *INPUTS)


@dataclass(frozen=True)
class FeatureModel:
    """Learned weights of features, with subject and trial levels.

    trials: sufficient statistics of what was learned from; time_scales: of the residual; magnitude: (n, n)
    m², what the covariance gains far beyond the training data; shrinkage: of deviations towards
    independence.
    """

    name: str
    markers: tuple[str, ...]
    layout: FloatArray
    basis: Basis
    hierarchy: Hierarchy
    trials: tuple[TrialStatistics, ...]
    time_scales: TimeScales
    magnitude: FloatArray
    inflation: float = 1.0
    shrinkage: Shrinkage = USUAL

    def knows(self, subject: str) -> bool:
        """Whether it learned from this subject."""
        return any(trial.subject == subject for trial in self.trials)

    def with_inflation(self, inflation: float) -> FeatureModel:
        """The same model with another factor."""
        return replace(self, inflation=inflation)

    def refitted(self, frames: Sequence[SegmentFrames]) -> FeatureModel:
        """Fit the hierarchy to other frames, from where it stood; all else that was learned is kept."""
        trials = tuple(summarise(item, self.basis) for item in frames)
        hierarchy = fit_hierarchy(
            list(trials),
            self.basis.relative_variance,
            self.basis.total_relative_variance,
            self.hierarchy,
            self.shrinkage.settings(REFIT),
        )
        return replace(self, hierarchy=hierarchy, trials=trials)

    def _artifact(self, weights: Weights, posture: Posture) -> FeatureArtifact:
        return FeatureArtifact(
            self.basis,
            weights,
            self.hierarchy.residual,
            self.time_scales,
            posture.angles,
            self.magnitude,
        )

    def for_new_subject(self, posture: Posture, inflation: float | None = None) -> FeatureArtifact:
        """Artifact of a subject never imaged; the model's own inflation by default."""
        factor = self.inflation if inflation is None else inflation
        return self._artifact(new_subject(self.hierarchy, factor), posture)

    def for_subject(self, posture: Posture, own: Own) -> FeatureArtifact:
        """Artifact of a subject with paired frames of its own.

        Frames that the model learned from are taken out of the population first: nothing counts twice.
        """
        known = [trial for trial in self.trials if trial.subject == own.subject]
        hierarchy = self.hierarchy
        if known:
            hierarchy = without_subject(
                hierarchy, list(self.trials), self.basis.relative_variance, own.subject
            )
        known = merged([*known, *(summarise(item, self.basis) for item in own.frames)])
        if not known:
            return self.for_new_subject(posture)
        factor = self.inflation if own.widened else 1.0
        wider = replace(
            hierarchy,
            subject_features=factor * hierarchy.subject_features,
            trial_features=factor * hierarchy.trial_features,
        )
        if own.trial:
            return self._artifact(trial_posterior(wider, known, own.trial), posture)
        belief = subject_posterior(wider, known)
        return self._artifact(Weights(belief.mean, belief.covariance + wider.trial_covariance), posture)

    def describe(self) -> str:
        """One line about what was learned."""
        residual = 1000.0 * float(np.sqrt(np.diag(self.hierarchy.residual).mean()))
        weights = new_subject(self.hierarchy, self.inflation)
        gains = flexion_gains(self.basis, weights, self.layout)
        # With several joints they are told by their place in the lab file; names are the shell's.
        names = [f"flexion of joint {gain.joint + 1}" if len(gains) > 1 else "flexion" for gain in gains]
        return (
            f"residual {residual:.1f} mm SD per axis, {self.time_scales.words()}; "
            + "".join(f"{gain.words(name)}; " for gain, name in zip(gains, names, strict=True))
            + f"{self.shrinkage.words}; fit: {self.hierarchy.stop_reason}"
        )

    def variables(self) -> dict[str, Variable]:
        """All that has to be stored, as arrays."""
        fit, basis = self.hierarchy, self.basis
        blocks = [(trial, block) for trial in self.trials for block in trial.blocks]
        features, outputs, weights = ("feature", "feature2"), ("output", "output2"), ("weight", "weight2")

        def stack(field: str, kind: type = float) -> Values:
            return np.array([getattr(block, field) for _, block in blocks], dtype=kind)

        waves = [
            [w.joint, w.dof, w.centre, w.limit, w.length, w.count, w.kind == "matern-3/2", w.scale]
            for w in basis.waves
        ]
        reaches = [[r.joint, r.dof, r.low, r.high, _KINDS.index(r.kind)] for r in basis.reaches]
        return {
            "terms": Variable(
                ("term", "term_field"),
                np.array([[t.joint, t.dof, t.power] for t in basis.terms], dtype=np.int64).reshape(-1, 3),
            ),
            "mixing": Variable(("term", "term2"), basis.mixing),
            "waves": Variable(("wave", "wave_field"), np.array(waves, dtype=float).reshape(-1, 8)),
            "reaches": Variable(("reach", "reach_field"), np.array(reaches, dtype=float).reshape(-1, 5)),
            "population_mean": Variable(("feature", "output"), fit.population.mean, "m"),
            "population_covariance": Variable(weights, fit.population.covariance, "m2"),
            "subject_features": Variable(features, fit.subject_features, "m2"),
            "subject_outputs": Variable(outputs, fit.subject_outputs),
            "trial_features": Variable(features, fit.trial_features, "m2"),
            "trial_outputs": Variable(outputs, fit.trial_outputs),
            "residual": Variable(outputs, fit.residual, "m2"),
            "observed_residual": Variable(outputs, fit.observed_residual, "m2"),
            "iterations": Variable((), np.array(fit.iterations, dtype=np.int64)),
            "stop_reason": Variable((), np.array(fit.stop_reason)),
            "time_constants": Variable(("scale",), self.time_scales.constants, "s"),
            "time_shares": Variable(("scale",), self.time_scales.shares),
            "magnitude": Variable(outputs, self.magnitude, "m2"),
            "feature_shrinkage": Variable((), np.array(self.shrinkage.features)),
            "output_shrinkage": Variable((), np.array(self.shrinkage.outputs)),
            "shrinkage_reason": Variable((), np.array(self.shrinkage.reason)),
            "block_seen": Variable(("block", "output"), stack("seen").astype(np.int8)),
            "block_feature_gram": Variable(("block", *features), stack("feature_gram")),
            "block_cross": Variable(("block", "feature", "output"), stack("cross"), "m"),
            "block_output_gram": Variable(("block", *outputs), stack("output_gram"), "m2"),
            "block_noise_gram": Variable(("block", *outputs), stack("noise_gram"), "m2"),
            "block_weight": Variable(("block",), stack("weight")),
            "block_frames": Variable(("block",), stack("frames", int)),
            "block_subject": Variable(("block",), np.array([trial.subject for trial, _ in blocks])),
            "block_trial": Variable(("block",), np.array([trial.trial for trial, _ in blocks])),
        }


@dataclass(frozen=True)
class FeatureFamily:
    """A family told by its basis: adjacent joints, training inputs, reference inputs, drivers to a Basis."""

    name: str
    basis: Callable[[tuple[int, ...], list[FloatArray], list[FloatArray], Sequence[Driver]], Basis]
    takes_inputs: bool = True

    def learn(self, data: SegmentData) -> FeatureModel:
        """Learn one segment."""
        angles = [item.angles for item in data.frames]
        references = [item.reference_angles for item in data.frames]
        basis = orthonormal(self.basis(data.adjacent, angles, references, data.extra), angles, references)
        scales = learn_time_scales(data.frames, basis)
        trials = tuple(summarise(item, basis) for item in data.frames)
        given = (list(trials), basis.relative_variance, basis.total_relative_variance)
        hierarchy = fit_hierarchy(*given)
        shrinkage = choose_shrinkage(*given, hierarchy)
        settings = shrinkage.settings(FitSettings())
        if settings != FitSettings():
            hierarchy = fit_hierarchy(*given, settings=settings)
        return FeatureModel(
            name=data.name,
            markers=data.markers,
            layout=data.layout,
            basis=basis,
            hierarchy=hierarchy,
            trials=trials,
            time_scales=scales,
            magnitude=beyond_data(data.name, data.layout),
            shrinkage=shrinkage,
        )

    def read(self, name: str, stored: Mapping[str, Values]) -> FeatureModel:
        """Make the model of a segment from what its ``variables`` stored."""
        return read_feature_model(name, stored)


def _blocks(name: str, stored: Mapping[str, Values]) -> tuple[TrialStatistics, ...]:
    count = stored["block_subject"].shape[0]
    for key in sorted(key for key in stored if key.startswith("block_")):
        if len(stored[key]) != count:
            wrong = f"expected {count} rows, one a block, got {len(stored[key])}"
            raise ShapeError(message((name, key), wrong))
    grouped: dict[tuple[str, str], list[Block]] = {}
    owners = zip(stored["block_subject"].tolist(), stored["block_trial"].tolist(), strict=True)
    for index, owner in enumerate(owners):
        grouped.setdefault(owner, []).append(
            Block(
                seen=stored["block_seen"][index] > 0,
                feature_gram=stored["block_feature_gram"][index],
                cross=stored["block_cross"][index],
                output_gram=stored["block_output_gram"][index],
                noise_gram=stored["block_noise_gram"][index],
                weight=float(stored["block_weight"][index]),
                frames=int(stored["block_frames"][index]),
            )
        )
    return tuple(
        TrialStatistics(subject, trial, tuple(blocks)) for (subject, trial), blocks in grouped.items()
    )


def read_feature_model(name: str, stored: Mapping[str, Values]) -> FeatureModel:
    """Make a FeatureModel from stored arrays.

    Raises
    ------
    KeyError : an array is missing.
    ShapeError : arrays that do not fit each other.
    """
    waves = tuple(
        Wave(
            int(joint), int(dof), centre, limit, length, int(count),
            "matern-3/2" if matern else "squared-exponential", scale,
        )
        for joint, dof, centre, limit, length, count, matern, scale in stored["waves"].tolist()
    )  # fmt: skip
    reaches = tuple(
        Reach(int(joint), int(dof), low, high, _KINDS[int(kind)])
        for joint, dof, low, high, kind in stored["reaches"].tolist()
    )
    terms = tuple(Term(int(joint), int(dof), int(power)) for joint, dof, power in stored["terms"].tolist())
    model = FeatureModel(
        name=name,
        markers=tuple(str(marker) for marker in stored["markers"]),
        layout=stored["layout"],
        basis=Basis(terms, stored["mixing"], waves, reaches),
        hierarchy=Hierarchy(
            population=Weights(stored["population_mean"], stored["population_covariance"]),
            subject_features=stored["subject_features"],
            subject_outputs=stored["subject_outputs"],
            trial_features=stored["trial_features"],
            trial_outputs=stored["trial_outputs"],
            residual=stored["residual"],
            observed_residual=stored["observed_residual"],
            iterations=int(stored["iterations"]),
            stop_reason=str(stored["stop_reason"]),
        ),
        trials=_blocks(name, stored),
        time_scales=TimeScales(stored["time_constants"], stored["time_shares"]),
        magnitude=stored["magnitude"],
        inflation=float(stored["inflation"]),
        shrinkage=_shrinkage(stored),
    )
    _refuse_misfits(model, stored)
    return model


def _refuse_misfits(model: FeatureModel, stored: Mapping[str, Values]) -> None:
    """Features are counted by the basis, outputs by the markers."""
    features, outputs, terms = model.basis.size, 3 * len(model.markers), len(model.basis.terms)
    sizes = {"feature": features, "output": outputs, "weight": features * outputs, "term": terms}
    sizes |= {f"{dim}2": size for dim, size in sizes.items()}
    sizes |= {"place": len(model.markers), "axis": 3}
    layout = Variable(("place", "axis"), model.layout)
    for key, variable in {**model.variables(), "layout": layout}.items():
        got = stored[key].shape if key in stored else variable.values.shape
        free = got if len(got) == len(variable.dims) else (-1,) * len(variable.dims)
        expected = tuple(sizes.get(dim, size) for dim, size in zip(variable.dims, free, strict=True))
        if got != expected:
            shape = str(expected).replace("-1", "any")
            raise ShapeError(message((model.name, key), f"expected shape {shape}, got {got}"))


def _shrinkage(stored: Mapping[str, Values]) -> Shrinkage:
    """What is stored, or the usual strengths in a file that was made before there was a choice."""
    if "feature_shrinkage" not in stored:
        return USUAL
    strengths = float(stored["feature_shrinkage"]), float(stored["output_shrinkage"])
    return Shrinkage(*strengths, str(stored["shrinkage_reason"]))


def merged(trials: Sequence[TrialStatistics]) -> list[TrialStatistics]:
    """One item a trial: new windows of a known recording share that trial's own deviation."""
    blocks: dict[tuple[str, str], tuple[Block, ...]] = {}
    for trial in trials:
        key = (trial.subject, trial.trial)
        blocks[key] = blocks.get(key, ()) + trial.blocks
    return [TrialStatistics(subject, trial, own) for (subject, trial), own in blocks.items()]


def _held_linear_basis(
    adjacent: tuple[int, ...],
    angles: list[FloatArray],
    references: list[FloatArray],
    extra: Sequence[Driver],
) -> Basis:
    reaches = reaches_of(adjacent, angles, references, extra)
    return replace(linear_basis(adjacent, extra), reaches=reaches)


LINEAR = FeatureFamily("linear", _held_linear_basis)
REDUCED_RANK = FeatureFamily("reduced-rank-gp", reduced_rank_basis)

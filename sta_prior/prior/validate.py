"""How well a prior predicts the artifact of subjects that it has not learned from.

Shell over arrays. Conventions: docs/conventions.md.

Every subject in turn is left out; population and covariances are fitted to the others, and the
left-out displacement is predicted frame by frame. With one subject every trial is left out instead,
labelled so, and predicted from its others with the learned covariances. The mixing of the features and
the time constant, a few numbers over all frames, are kept.

References
----------
Gneiting & Raftery (2007), JASA 102, 359–378 (CRPS).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr
from scipy.stats import binom, norm

from sta_prior.checks import FloatArray
from sta_prior.gaussian import cholesky, crps_normal, log_density, nearest_psd, whiten
from sta_prior.prior.basis import Basis
from sta_prior.prior.calibration import LARGEST_INFLATION, calibrate, few_subjects_factor, nested_coverage
from sta_prior.prior.family import Own, Posture, SegmentModel
from sta_prior.prior.interface import Artifact
from sta_prior.prior.linear import linear_basis
from sta_prior.prior.statistics import SegmentFrames, patterns

LEVELS = (0.50, 0.90, 0.95)
FEWEST_TO_CALIBRATE = 3
PIT_BINS = 10
SMALLEST_SD = 0.0003


@dataclass(frozen=True)
class LeftOut:
    """Prediction of one left-out unit.

    unit: subject (or trial) left out; error: (values,) m, measured minus predicted; constant,
    rest: (values,) m², variance from trial-constant weights, and from residual and bone truth;
    size: (values,) m, displacement itself; by_subject: False where only trials could be left out;
    log_score, log_score_zero, log_score_pooled: nats a value, mean log density of whole frames under the
    prior, under a zero-mean law and under one regression for all subjects.
    """

    unit: str
    error: FloatArray
    constant: FloatArray
    rest: FloatArray
    size: FloatArray
    by_subject: bool
    log_score: float = float("nan")
    log_score_zero: float = float("nan")
    log_score_pooled: float = float("nan")


@dataclass(frozen=True)
class Rivals:
    """Two plain laws that a prior must beat, learned from the same frames.

    zero: (n, n) m², second moment of displacement; basis, weights: (K, n) of one regression on flexion
    and its square for all subjects; pooled: (n, n) m², what it leaves over.
    """

    zero: FloatArray
    basis: Basis
    weights: FloatArray
    pooled: FloatArray


def learn_rivals(frames: Sequence[SegmentFrames], adjacent: tuple[int, ...]) -> Rivals:
    """Second moment of displacement, and one least-squares regression for all subjects alike."""
    basis = linear_basis(adjacent)
    features = np.concatenate([basis.values(item.angles, item.reference_angles)[:, 1:] for item in frames])
    outputs = np.concatenate([item.displacement for item in frames])
    seen = np.isfinite(outputs)
    clean = np.where(seen, outputs, 0.0)
    gram = features.T @ features
    ridge = 1e-6 * max(float(np.trace(gram)), 1e-12) * np.eye(gram.shape[0])
    weights = np.linalg.solve(gram + ridge, features.T @ clean)
    rest = np.where(seen, clean - features @ weights, 0.0)
    counts = np.maximum(seen.T.astype(float) @ seen.astype(float), 1.0)
    floor = SMALLEST_SD**2 * np.eye(outputs.shape[1])
    return Rivals(
        zero=nearest_psd(clean.T @ clean / counts) + floor,
        basis=basis,
        weights=np.concatenate([np.zeros((1, outputs.shape[1])), weights]),
        pooled=nearest_psd(rest.T @ rest / counts) + floor,
    )


def _log_score(error: FloatArray, covariance: FloatArray) -> float:
    """Mean log density of whole frames, nats a value; hidden outputs (NaN) are left out exactly.

    covariance: (F, n, n), or (n, n) for one law at every frame.
    """
    seen = np.isfinite(error)
    if covariance.ndim == 3 and seen.all():
        return float(log_density(error, covariance).sum()) / max(error.size, 1)
    total = 0.0
    for pattern in patterns(seen):
        here = (seen == pattern).all(axis=1)
        mine = error[here][:, pattern]
        if covariance.ndim == 2:
            factor = cholesky(covariance[np.ix_(pattern, pattern)])
            white = whiten(factor, mine.T)
            constant = np.log(np.diag(factor)).sum() + 0.5 * mine.shape[1] * np.log(2.0 * np.pi)
            total -= float(0.5 * (white**2).sum() + mine.shape[0] * constant)
        else:
            inner = covariance[here][:, pattern][:, :, pattern]
            total += float(log_density(mine, inner).sum())
    return total / max(int(seen.sum()), 1)


def _predict(
    artifact: Artifact, frames: SegmentFrames, unit: str, by_subject: bool, rivals: Rivals | None = None
) -> LeftOut:
    moments = artifact.moments(frames.angles)
    total = np.einsum("faa->fa", moments.covariance)
    residual = np.diag(artifact.residual)
    rest = residual + np.einsum("faa->fa", frames.noise)
    seen = np.isfinite(frames.displacement)
    error = frames.displacement - moments.mean
    scores = {"log_score": _log_score(error, moments.covariance + frames.noise)}
    if rivals is not None:
        pooled = rivals.basis.values(frames.angles, frames.reference_angles) @ rivals.weights
        scores["log_score_zero"] = _log_score(frames.displacement, rivals.zero)
        scores["log_score_pooled"] = _log_score(frames.displacement - pooled, rivals.pooled)
    return LeftOut(
        unit=unit,
        error=error[seen],
        constant=np.maximum(total - residual, 0.0)[seen],
        rest=rest[seen],
        size=frames.displacement[seen],
        by_subject=by_subject,
        **scores,
    )


def _posture(model: SegmentModel, frames: SegmentFrames, layout: FloatArray | None = None) -> Posture:
    return Posture(frames.reference_angles, model.layout if layout is None else layout)


def leave_one_out(
    model: SegmentModel, frames: Sequence[SegmentFrames], adjacent: tuple[int, ...] = ()
) -> list[LeftOut]:
    """Predict every subject from the others; with one subject, every trial from its others.

    The model is learned again without the left-out unit, from where it stood.
    """
    subjects = sorted({item.subject for item in frames})
    result = []
    if len(subjects) > 1:
        for name in subjects:
            kept = [item for item in frames if item.subject != name]
            mine = [item for item in frames if item.subject == name]
            result += predict_others(model.refitted(kept), mine, learn_rivals(kept, adjacent))
        return result
    if len(frames) < 2:
        return []
    for item in frames:
        rest = [other for other in frames if other.trial != item.trial]
        artifact = model.refitted(rest).for_subject(
            _posture(model, item), Own(subjects[0], (), "", widened=False)
        )
        result.append(_predict(artifact, item, item.trial, False))
    return result


def predict_others(
    model: SegmentModel,
    frames: Sequence[SegmentFrames],
    rivals: Rivals | None = None,
    layout: FloatArray | None = None,
) -> list[LeftOut]:
    """Predict subjects that the prior has not learned from, one unit a subject.

    Parameters
    ----------
    model : of one segment
    frames : of subjects other than those it learned from
    rivals : plain laws to score beside it
    layout : shape (m, 3), m, reference positions, for a model that takes any markers; its own by default
    """
    return [
        _merge(
            [
                _predict(model.for_new_subject(_posture(model, item, layout), 1.0), item, name, True, rivals)
                for item in frames
                if item.subject == name
            ]
        )
        for name in sorted({item.subject for item in frames})
    ]


def _merge(parts: list[LeftOut]) -> LeftOut:
    return LeftOut(
        unit=parts[0].unit,
        error=np.concatenate([part.error for part in parts]),
        constant=np.concatenate([part.constant for part in parts]),
        rest=np.concatenate([part.rest for part in parts]),
        size=np.concatenate([part.size for part in parts]),
        by_subject=parts[0].by_subject,
        log_score=_mean_score(parts, "log_score"),
        log_score_zero=_mean_score(parts, "log_score_zero"),
        log_score_pooled=_mean_score(parts, "log_score_pooled"),
    )


def _mean_score(parts: list[LeftOut], name: str) -> float:
    """Mean over all values of a unit's trials."""
    counts = [part.error.size for part in parts]
    return float(np.average([getattr(part, name) for part in parts], weights=counts))


def coverage(left_out: LeftOut, level: float, inflation: float = 1.0) -> float:
    """Share of a unit's values inside their central interval of the given level."""
    sd = np.sqrt(inflation * left_out.constant + left_out.rest)
    return float((np.abs(left_out.error) <= norm.ppf(0.5 + 0.5 * level) * sd).mean())


def calibrate_inflation(left_out: list[LeftOut]) -> float:
    """Factor ≥ 1 on the trial-constant variance of a subject never imaged.

    At least few_subjects_factor; more where left-out subjects are still not covered: the mean over
    subjects of the coverage at 90 % is brought to 0.90. The covariances behind it are fitted by
    nine subjects as by two, and the factor says which. With one subject there is nobody to leave out:
    the largest, in force for anyone else; the subject's own weights take none.
    """
    if not left_out or not left_out[0].by_subject:
        return few_subjects_factor(1)
    least = few_subjects_factor(len(left_out))
    for factor in np.linspace(least, LARGEST_INFLATION, 61):
        if np.mean([coverage(item, 0.90, float(factor)) for item in left_out]) >= 0.90:
            return float(factor)
    return LARGEST_INFLATION


def binomial_bound(units: int, level: float) -> tuple[float, float]:
    """Central 95 % range of a coverage observed on independent units, were the level true."""
    low, high = binom.interval(0.95, units, level)
    return float(low / units), float(high / units)


def ratios_of(left_out: Sequence[LeftOut]) -> list[FloatArray]:
    """Error over predicted SD of every unit, before any widening."""
    return [item.error / np.sqrt(item.constant + item.rest) for item in left_out]


def half_widths(left_out: Sequence[LeftOut]) -> FloatArray | None:
    """Half-widths of displacement intervals at LEVELS, in predicted SD; None with too few subjects."""
    if len(left_out) < FEWEST_TO_CALIBRATE or not left_out[0].by_subject:
        return None
    return calibrate(ratios_of(left_out), len(left_out)).factor(np.array(LEVELS))


def _covered(
    left_out: Sequence[LeftOut], inflation: float, widths: FloatArray | None, nested: bool
) -> FloatArray:
    """Coverage of every unit, (units, levels): by given half-widths, by nested calibration, or normal."""
    if widths is not None:
        return np.array([(np.abs(ratio)[:, None] <= widths).mean(axis=0) for ratio in ratios_of(left_out)])
    if nested:
        # Calibrated on themselves, subjects would be covered by construction.
        return nested_coverage(ratios_of(left_out), np.array(LEVELS))
    return np.array([[coverage(item, level, inflation) for level in LEVELS] for item in left_out])


def summarise_validation(
    segment: str,
    left_out: list[LeftOut],
    inflation: float,
    widths: FloatArray | None = None,
    calibrated: bool = True,
) -> xr.Dataset:
    """Left-out figures of one segment as a Dataset with dims segment, unit, level.

    Variables: coverage by unit and level, half_width by level (in predicted SD; calibrated on the left-out
    subjects, and then coverage is that of each by the others' calibration, or given, else normal with the
    inflation, and always so where ``calibrated`` is False), rms_error and rms_zero (m, of the prediction
    and of predicting no artifact), crps and crps_zero (m), log_score and its rivals (nats a value), pit
    (share of a unit's probability integral transforms in tenths), by_subject, inflation.
    """
    units = [item.unit for item in left_out]
    found = widths if widths is not None or not calibrated else half_widths(left_out)
    nested = widths is None and found is not None
    covered = _covered(left_out, inflation, widths, nested).reshape(1, len(units), len(LEVELS))
    used = norm.ppf(0.5 + 0.5 * np.array(LEVELS)) if found is None else found
    sd = [np.sqrt(inflation * item.constant + item.rest) for item in left_out]
    rms = [float(np.sqrt((item.error**2).mean())) for item in left_out]
    zero = [float(np.sqrt((item.size**2).mean())) for item in left_out]
    crps = [float(crps_normal(0.0, s, item.error).mean()) for s, item in zip(sd, left_out, strict=True)]
    crps_zero = [
        float(crps_normal(0.0, np.full(item.size.size, z), item.size).mean())
        for z, item in zip(zero, left_out, strict=True)
    ]
    edges = np.linspace(0.0, 1.0, PIT_BINS + 1)
    pit = np.array(
        [
            np.histogram(norm.cdf(item.error / s), edges)[0] / item.error.size
            for s, item in zip(sd, left_out, strict=True)
        ]
    ).reshape(1, len(units), PIT_BINS)
    metre, one = {"units": "m"}, {"units": "1"}
    by_subject = int(bool(left_out) and left_out[0].by_subject)

    def row(
        values: list[float], units_of: dict[str, str] = metre
    ) -> tuple[tuple[str, str], FloatArray, dict[str, str]]:
        return ("segment", "unit"), np.array(values, dtype=np.float64).reshape(1, len(units)), units_of

    scores = {
        name: row([getattr(item, name) for item in left_out], one)
        for name in ("log_score", "log_score_zero", "log_score_pooled")
    }

    return xr.Dataset(
        {
            "coverage": (("segment", "unit", "level"), covered, one),
            "rms_error": row(rms),
            "rms_zero": row(zero),
            "crps": row(crps),
            "crps_zero": row(crps_zero),
            **scores,
            "pit": (("segment", "unit", "bin"), pit, one),
            "half_width": (("segment", "level"), used.reshape(1, -1), one),
            "inflation": (("segment",), np.array([inflation]), one),
            "by_subject": (("segment",), np.array([by_subject]), one),
        },
        coords={
            "segment": [segment],
            "unit": np.array(units, dtype=str),
            "level": ("level", np.array(LEVELS), one),
            "bin": ("bin", 0.5 * (edges[1:] + edges[:-1]), one),
        },
    )

"""Checks of the moments that a prior hands the solver.

Shell over arrays. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.interface import Artifact, Moments, time_scales_of
from sta_prior.prior.time_scales import TimeScales
from sta_prior.testing.case import PARTS, ROUNDING, Case, differ, lowest

SHORT = 1e-3
"""Part of a covariance that it may lack of its parts: constants may be a close approximation."""

NOTHING = 1e-9
"""A mean artifact smaller than this is none, m."""


def check_shapes(case: Case) -> bool:
    """Every array has the shape that the solver relies on, and only finite values."""
    frames, joints = case.angles.shape[:2]
    # What the model gives, before anything is chosen or turned of it.
    for segment in case.prior.segments:
        artifact = case.new(segment)
        n = 3 * len(case.setting.segments[segment])
        moments = artifact.moments(case.angles)
        k = moments.features.shape[-1]
        wanted = {
            "mean": (moments.mean, (frames, n)),
            "mean_derivative": (moments.mean_derivative, (frames, n, joints, 3)),
            "features": (moments.features, (frames, k)),
            "covariance": (moments.covariance, (frames, n, n)),
            "residual": (artifact.residual, (n, n)),
            "constant_covariance": (artifact.constant_covariance, (k * n, k * n)),
        }
        for name, (array, shape) in wanted.items():
            if array.shape != shape:
                raise case.fail(segment, f"{name} has shape {array.shape}, expected {shape}")
            if not np.isfinite(array).all():
                raise case.fail(segment, f"{name} has values that are not finite numbers")
        if not (np.isfinite(artifact.time_constant) and artifact.time_constant >= 0.0):
            raise case.fail(segment, f"time_constant is {artifact.time_constant} s, expected 0 or more")
        _check_time_scales(case, segment, artifact)
    return True


def _check_time_scales(case: Case, segment: str, artifact: Artifact) -> None:
    """Shares of a whole, slowest first; the one decay time that everything else reads is the slowest."""
    own = getattr(artifact, "time_scales", None)
    if own is not None and not isinstance(own, TimeScales):
        raise case.fail(segment, f"time_scales is a {type(own).__name__}, expected TimeScales")
    scales = time_scales_of(artifact)
    constants, shares = scales.constants, scales.shares
    if constants.shape != shares.shape or constants.shape not in ((1,), (2,)):
        raise case.fail(
            segment,
            f"time_scales has constants of shape {constants.shape} and shares of shape {shares.shape}, "
            "expected one or two of each",
        )
    shown = " and ".join(f"{constant:g}" for constant in constants)
    if constants.size == 2 and not (constants[0] > constants[1] > 0.0):
        raise case.fail(segment, f"decay times are {shown} s, expected the slowest first, all above 0")
    if not ((shares > 0.0).all() and abs(float(shares.sum()) - 1.0) < ROUNDING):
        shown = " and ".join(f"{share:g}" for share in shares)
        raise case.fail(segment, f"shares of the decay times are {shown}, expected above 0 and of sum 1")
    if artifact.time_constant != scales.slowest:
        raise case.fail(
            segment,
            f"time_constant is {artifact.time_constant:g} s, the slowest decay time is {scales.slowest:g} s",
        )


def check_frames_alone(case: Case) -> bool:
    """A frame has the same moments alone as among others, and at every call."""
    for segment, artifact in case.artifacts(case.setting).items():
        whole, again = artifact.moments(case.angles), artifact.moments(case.angles)
        alone = artifact.moments(case.angles[3:4])
        for part in PARTS:
            if not np.array_equal(getattr(whole, part), getattr(again, part)):
                raise case.fail(segment, f"{part} differs from one call to the next")
            if differ(getattr(alone, part), getattr(whole, part)[3:4]):
                raise case.fail(segment, f"{part} of a frame alone is not that among others")
    return True


def check_derivative(case: Case) -> bool:
    """The derivative of the mean is that of central differences, within the data and beyond."""
    step = float(np.cbrt(np.finfo(np.float64).eps))
    for where, angles in (("within", case.inside), ("beyond", case.beyond)):
        for segment, artifact in case.artifacts(case.setting).items():
            got = artifact.moments(angles).mean_derivative
            expected = np.empty_like(got)
            for joint, angle in np.ndindex(got.shape[2:]):
                change = np.zeros(angles.shape[1:])
                change[joint, angle] = step
                up, down = artifact.moments(angles + change).mean, artifact.moments(angles - change).mean
                expected[:, :, joint, angle] = (up - down) / (2.0 * step)
            worst = float(np.abs(got - expected).max())
            scale = max(float(np.abs(expected).max()), 1e-3)
            if worst > 1e-5 * scale:
                frame, output, joint, angle = np.unravel_index(np.abs(got - expected).argmax(), got.shape)
                raise case.fail(
                    segment,
                    f"derivative of the mean {where} the range of the data is "
                    f"{got[frame, output, joint, angle]:.4g} m/rad for output {output} by angle {angle} of "
                    f"{case.prior.joints[joint].name}, central differences give "
                    f"{expected[frame, output, joint, angle]:.4g}",
                )
    return True


def check_covariance(case: Case) -> bool:
    """Covariances are symmetric and positive, and the whole is no less than its parts."""
    for segment, artifact in case.artifacts(case.setting).items():
        moments = artifact.moments(case.angles)
        for name, matrix in (
            ("covariance", moments.covariance),
            ("residual", artifact.residual),
            ("constant_covariance", artifact.constant_covariance),
        ):
            if differ(matrix, np.swapaxes(matrix, -1, -2)):
                raise case.fail(segment, f"{name} is not symmetric")
            if lowest(matrix) < -ROUNDING:
                raise case.fail(segment, f"{name} is not positive semi-definite")
        if lowest(moments.covariance) <= 0.0:
            raise case.fail(segment, "covariance is singular", "Give the residual a floor.")
        left = moments.covariance - artifact.residual - _constant_part(artifact, moments)
        if float(np.linalg.eigvalsh(left + SHORT * moments.covariance).min()) < 0.0:
            raise case.fail(segment, "covariance is smaller than residual and trial-constant part together")
    return True


def _constant_part(artifact: Artifact, moments: Moments) -> FloatArray:
    """Covariance that the trial-constant unknowns make, (F, n, n) m²."""
    frames, k = moments.features.shape
    n = moments.mean.shape[1]
    constant = artifact.constant_covariance.reshape(k, n, k, n)
    inner = np.tensordot(moments.features, constant, axes=(1, 0)).reshape(frames, n, k, n)
    return np.asarray(np.einsum("fl,falb->fab", moments.features, inner))


def check_beyond(case: Case) -> bool:
    """Further and further beyond the data the spread does not shrink."""
    for segment in case.prior.segments:
        artifact = case.new(segment)
        for path, angles in enumerate(case.outward):
            variance = np.einsum("faa->f", artifact.moments(angles).covariance)
            if (np.diff(variance) < -ROUNDING * variance[:-1]).any():
                raise case.fail(
                    segment,
                    f"spread shrinks {'above' if path % 2 else 'below'} the range of the data of "
                    f"{case.prior.joints[path // 2].name}, expected growth or none",
                )
    return bool(len(case.outward))


def check_reference(case: Case) -> bool:
    """The mean artifact of a subject never imaged is zero in the reference posture."""
    for segment, artifact in case.artifacts(case.setting).items():
        worst = float(np.abs(artifact.moments(case.reference[None]).mean).max())
        if worst > NOTHING:
            raise case.fail(
                segment,
                f"mean artifact in the reference posture is {1000 * worst:.3g} mm, expected 0",
                "Take differences to the reference angles.",
            )
    return True


def check_inflation(case: Case) -> bool:
    """The factor on the spread of a new subject widens it, and leaves the residual alone."""
    for segment, model in case.prior.segments.items():
        posture = case.posture(segment)
        narrow, wide = (model.for_new_subject(posture, factor) for factor in (1.0, 2.0))
        own, asked = case.new(segment, model.with_inflation(2.0)), case.new(segment)
        given = model.for_new_subject(posture, model.inflation)
        for one, other in ((own, wide), (asked, given)):
            if differ(one.moments(case.angles).covariance, other.moments(case.angles).covariance):
                raise case.fail(segment, "a new subject does not get the model's own inflation by default")
        if differ(narrow.residual, wide.residual):
            raise case.fail(segment, "inflation changes the residual, expected the trial-constant part only")
        more = wide.moments(case.inside).covariance - narrow.moments(case.inside).covariance
        if lowest(more) < -1e-6 and np.abs(more).max() > 1e-15:
            raise case.fail(segment, "twice the inflation makes the covariance smaller somewhere")
    return True

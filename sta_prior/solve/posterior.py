"""What the frame-wise estimators report, computed from the system at the optimum.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np

from sta_prior.checks import BoolArray, FloatArray, IntArray
from sta_prior.gaussian import symmetrise
from sta_prior.solve.terms import ANCHOR, JointProblem, Linearised, SegmentProblem, System, joint_travel

SOURCES = ("markers", "artifact_prior", "joint", "motion")

# A pose is reported as not determined when its SD in some direction exceeds these: rad, m.
UNDETERMINED = np.array([0.6, 0.6, 0.6, 0.3, 0.3, 0.3])

# Part of the largest information below which the markers say nothing about a direction of the pose.
_OPEN_DIRECTION = 1e-8


@dataclass(frozen=True)
class FrameSolution:
    """Posterior of a trial of F frames, S segments and J joints, frame by frame.

    Attributes
    ----------
    poses : shape (F, S, 4, 4), lab ← bone, NaN where not determined
    covariance : shape (F, 6S, 6S), of all poses' right perturbations, bone axes
    angles, angle_sd : shape (F, J, 3), rad
    travel, travel_sd : shape (F, J, 3), m, proximal bone frame
    artifact, artifact_sd : a list over segments of shape (F, n), m, bone frame
    share : shape (F, S, 6, 4), part of the information by source, in the order of SOURCES
    conflict : shape (F, S), squared length of the whitened deformation
    conflict_freedom : shape (F, S), its degrees of freedom
    determined : shape (F, S)
    iterations, stop_reason : of the optimiser
    misfit : mean square of the markers' moves from frame to frame in their predicted SDs; NaN frame by frame
    """

    poses: FloatArray
    covariance: FloatArray
    angles: FloatArray
    angle_sd: FloatArray
    travel: FloatArray
    travel_sd: FloatArray
    artifact: list[FloatArray]
    artifact_sd: list[FloatArray]
    share: FloatArray
    conflict: FloatArray
    conflict_freedom: FloatArray
    determined: BoolArray
    iterations: int
    stop_reason: str
    misfit: float = np.nan

    def at(self, frames: IntArray) -> FrameSolution:
        """The solution at some frames."""
        if frames.size == self.poses.shape[0]:
            return self
        kept: dict[str, object] = {}
        for field in fields(FrameSolution):
            value = getattr(self, field.name)
            if isinstance(value, list):
                kept[field.name] = [part[frames] for part in value]
            else:
                kept[field.name] = value[frames] if isinstance(value, np.ndarray) else value
        return FrameSolution(**kept)  # type: ignore[arg-type]


def _pose_covariance(system: System, count: int, converged: BoolArray) -> tuple[FloatArray, BoolArray]:
    """Posterior covariance of the stacked poses and which segments are determined."""
    frames, size = system.gradient.shape
    identity = np.broadcast_to(np.eye(size), (frames, size, size))
    information = system.information
    covariance = symmetrise(np.linalg.solve(information + ANCHOR * np.eye(size), identity))
    sd = np.sqrt(np.einsum("fxx->fx", covariance)).reshape(frames, count, 6)
    determined = (sd < UNDETERMINED).all(axis=2) & converged[:, None]
    whole = np.flatnonzero(determined.all(axis=1))
    # Where all is determined the anchor is not needed and must not enter the covariance.
    covariance[whole] = symmetrise(np.linalg.solve(information[whole], identity[whole]))
    return covariance, determined


def variance_along(jacobian: FloatArray, covariance: FloatArray) -> FloatArray:
    """Diagonal of J P Jᵀ: jacobian (F, ..., 6S), covariance (F, 6S, 6S)."""
    flat = jacobian.reshape(jacobian.shape[0], -1, jacobian.shape[-1])
    variance = np.einsum("fax,fax->fa", flat @ covariance, flat)
    result: FloatArray = np.maximum(variance, 0.0).reshape(jacobian.shape[:-1])
    return result


def _artifact(term: Linearised, covariance: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Posterior mean and SD of a segment's artifact, hidden markers included, (F, n) m.

    Given the poses, d̂ = μ + C S⁻¹ r; the poses' own uncertainty adds G P Gᵀ, G = ∂d̂/∂x.
    """
    gain = term.artifact_covariance @ term.precision
    mean = term.mean + np.einsum("fab,fb->fa", gain, term.residual)
    slope = term.through_mean + gain @ term.slope
    left = np.einsum("faa->fa", term.artifact_covariance) - np.einsum(
        "fab,fab->fa", gain, term.artifact_covariance
    )
    return mean, np.sqrt(np.maximum(left, 0.0) + variance_along(slope, covariance))


def _shares(term: Linearised, covariance: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Information shares of markers and artifact prior in every pose component, (F, 6S) each.

    With poses x and artifact d as joint unknowns, Σ_k P Λ_k = 1 over the sources k. Eliminating
    d by hand, the rows of x reduce to diag(P Jᵀ S⁻¹ L) for the markers and −diag(P Jᵀ S⁻¹ M)
    for the prior, with J = L − M.
    """
    pull = covariance @ np.swapaxes(term.precision @ term.slope, 1, 2)
    markers = np.einsum("fxn,fnx->fx", pull, term.lever)
    prior = -np.einsum("fxn,fnx->fx", pull, term.through_mean)
    return markers, prior


def conflict_of(term: Linearised, index: int, determined: BoolArray) -> tuple[FloatArray, FloatArray]:
    """Whitened squared deformation that no pose of the segment explains, and its freedom.

    Freedom is 3m − 6 for m markers; markers on a line leave one direction of the pose untouched and
    one more of freedom, hence the rank.
    """
    own = slice(6 * index, 6 * index + 6)
    slope = term.slope[:, :, own]
    inner = np.swapaxes(slope, 1, 2) @ term.precision @ slope
    scale = np.sqrt(np.einsum("fxx->fx", inner))
    scale = np.where(scale > 0.0, scale, 1.0)
    information, directions = np.linalg.eigh(inner / (scale[:, :, None] * scale[:, None, :]))
    told = information > _OPEN_DIRECTION
    weighted = np.einsum("fnm,fm->fn", term.precision, term.residual)
    pulled = np.einsum("fnx,fn->fx", term.jacobian[:, :, own], weighted) / scale
    along = np.einsum("fxd,fx->fd", directions, pulled)
    explained = np.where(told, along**2 / np.where(told, information, 1.0), 0.0).sum(axis=1)
    whole = np.einsum("fn,fn->f", weighted, term.residual)
    freedom = (term.seen.sum(axis=1) - told.sum(axis=1)).astype(np.float64)
    enough = (freedom > 0) & determined
    return np.where(enough, np.maximum(whole - explained, 0.0), np.nan), freedom


def describe_joints(
    joints: list[JointProblem],
    poses: FloatArray,
    angles: FloatArray,
    angle_jacobian: FloatArray,
    covariance: FloatArray,
    determined: BoolArray,
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Angles and travel with their SDs, (F, J, 3) each, rad and m; NaN where a bone is not determined.

    Parameters
    ----------
    joints, poses : as for describe_posterior
    angles, angle_jacobian : at these poses, from angles_and_jacobians
    covariance : shape (F, 6S, 6S), of all poses
    determined : shape (F, S)
    """
    shown, angle_sd = angles.copy(), np.sqrt(variance_along(angle_jacobian, covariance))
    travel = np.full(angles.shape, np.nan)
    travel_sd = np.full(angles.shape, np.nan)
    for index, joint in enumerate(joints):
        unknown = ~(determined[:, joint.proximal] & determined[:, joint.distal])
        if joint.has_centre:
            travel[:, index], jacobian = joint_travel(joint, poses)
            travel_sd[:, index] = np.sqrt(variance_along(jacobian, covariance))
        for array in (shown, angle_sd, travel, travel_sd):
            array[unknown, index] = np.nan
    return shown, angle_sd, travel, travel_sd


def describe_posterior(
    segments: list[SegmentProblem],
    joints: list[JointProblem],
    poses: FloatArray,
    system: System,
    converged: BoolArray,
    iterations: int,
    stop_reason: str,
) -> FrameSolution:
    """Turn the system at the optimum into everything that is reported.

    Parameters
    ----------
    segments, joints, poses : the problem and its optimum
    system : all terms at the optimum
    converged : shape (F,), frames whose iteration reached its tolerance
    iterations, stop_reason : passed on
    """
    frames, count = poses.shape[:2]
    covariance, determined = _pose_covariance(system, count, converged)
    angles, angle_sd, travel, travel_sd = describe_joints(
        joints, poses, system.angles, system.angle_jacobian, covariance, determined
    )
    share = np.zeros((frames, 6 * count, len(SOURCES)))
    conflict = np.full((frames, count), np.nan)
    freedom = np.zeros((frames, count))
    artifact, artifact_sd = [], []
    for segment, term in zip(segments, system.markers, strict=True):
        seen = determined[:, segment.index]
        mean, sd = _artifact(term, covariance)
        artifact.append(np.where(seen[:, None], mean, np.nan))
        artifact_sd.append(np.where(seen[:, None], sd, np.nan))
        markers, prior = _shares(term, covariance)
        share[:, :, 0] += markers
        share[:, :, 1] += prior
        conflict[:, segment.index], freedom[:, segment.index] = conflict_of(term, segment.index, seen)
    share[:, :, 2] = np.einsum("fxy,fyx->fx", covariance, system.joint_normal)
    share = share.reshape(frames, count, 6, len(SOURCES))
    # Where another segment is undetermined the anchor takes part in the inverse: restore the sum.
    partly = determined & ~determined.all(axis=1, keepdims=True)
    share[partly] /= share[partly].sum(axis=-1, keepdims=True)
    return FrameSolution(
        poses=np.where(determined[..., None, None], poses, np.nan),
        covariance=covariance,
        angles=angles,
        angle_sd=angle_sd,
        travel=travel,
        travel_sd=travel_sd,
        artifact=artifact,
        artifact_sd=artifact_sd,
        share=np.where(determined[..., None, None], share, np.nan),
        conflict=conflict,
        conflict_freedom=freedom,
        determined=determined,
        iterations=iterations,
        stop_reason=stop_reason,
    )


def join(pieces: list[FrameSolution]) -> FrameSolution:
    """Put solutions of successive stretches of a trial together along the frames."""
    if len(pieces) == 1:
        return pieces[0]
    joined: dict[str, object] = {}
    for field in fields(FrameSolution):
        values = [getattr(piece, field.name) for piece in pieces]
        if field.name in ("artifact", "artifact_sd"):
            joined[field.name] = [np.concatenate(parts) for parts in zip(*values, strict=True)]
        elif field.name == "misfit":
            joined[field.name] = values[0]
        elif field.name == "iterations":
            joined[field.name] = max(values)
        elif field.name == "stop_reason":
            joined[field.name] = "; ".join(dict.fromkeys(values))
        else:
            joined[field.name] = np.concatenate(values)
    return FrameSolution(**joined)  # type: ignore[arg-type]

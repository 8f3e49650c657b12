"""Invented soft-tissue artifact: population, subjects, residual.

    d(t) = s · (f(q(t)) − f(q0)) (W + U) + r(t)

f: four drives of the knee angles (flexion, saturating flexion, internal rotation,
adduction); W: population weights; U: a subject's deviation, matrix normal (drives ⊗
markers); s: a subject's tissue factor, lognormal with mean 1; r: AR(1) in time with
full covariance over the markers of a segment. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.random import Generator
from scipy.signal import lfilter

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, message
from sta_prior.rigid import marker_jacobian
from sta_prior.simulate.mechanisms import AverageTissue

_DEGREE = np.pi / 180.0
DRIVES = ("flexion", "saturating_flexion", "internal_rotation", "adduction")
# Spread of a subject's deviation over the drives, and its correlation.
_DRIVE_SD = np.array([0.6, 1.1, 0.35, 0.25])
_DRIVE_CORRELATION = np.array(
    [[1.0, 0.2, 0.1, 0.0], [0.2, 1.0, 0.0, 0.1], [0.1, 0.0, 1.0, 0.2], [0.0, 0.1, 0.2, 1.0]]
)
_SMALLEST_SHARE = 0.02  # of the deformation's mean variance that every direction keeps


@dataclass(frozen=True)
class SegmentSettings:
    """Size and shape of the artifact of one segment.

    Attributes
    ----------
    displacement_rms, residual_rms : m, of a marker's displacement vector in the bone frame
    in_unison_sd : shape (6,), rad and m, spread of the common rigid part about the middle of
        the markers (rx, ry, rz, tx, ty, tz); only the proportions count
    in_unison_mean : shape (4, 6), rad and m, the same for the population's mean, one row a
        drive; only the proportions count
    """

    displacement_rms: float
    residual_rms: float
    in_unison_sd: FloatArray
    in_unison_mean: FloatArray


_UNIT = np.array([_DEGREE] * 3 + [1e-3] * 3)
THIGH = SegmentSettings(
    displacement_rms=12.3e-3,
    residual_rms=2.5e-3,
    in_unison_sd=np.array([3.0, 6.0, 4.0, 5.0, 6.0, 4.0]) * _UNIT,
    in_unison_mean=np.array(
        [
            [1.0, -2.0, 3.0, -3.0, 5.0, 2.0],
            [-2.0, -4.0, 4.0, 4.0, 6.0, 3.0],
            [0.4, -3.0, 0.3, 0.5, 0.5, -1.0],
            [-1.0, 0.5, 0.2, 0.3, 0.3, 1.0],
        ]
    )
    * _UNIT,
)
SHANK = SegmentSettings(
    displacement_rms=4.9e-3,
    residual_rms=1.2e-3,
    in_unison_sd=np.array([1.2, 3.0, 1.2, 1.8, 2.4, 1.2]) * _UNIT,
    in_unison_mean=np.array(
        [
            [0.4, 1.2, -0.6, 1.0, -2.0, 0.5],
            [0.5, 2.0, -1.0, 1.8, -2.2, -0.6],
            [0.1, -1.5, 0.1, 0.2, 0.2, 0.4],
            [0.3, 0.2, 0.1, 0.2, 0.2, 0.4],
        ]
    )
    * _UNIT,
)


@dataclass(frozen=True)
class PopulationSettings:
    """Sizes that shape the invented population; the defaults are those of the invented study.

    Attributes
    ----------
    thigh, shank : sizes by segment
    between_share : share of the mean square displacement that differs between subjects
        at the same angles, tissue factor included
    rigid_share : share of the mean square that all markers do in unison, as one rigid body
    coupling : 0 … below 1, how far a subject's (and the residual's) deformation follows its
        rigid part; at 0 deformation tells nothing about the rigid part
    tissue_sd : spread of the logarithm of the tissue factor; 0 switches it off
    correlation_time : s, of the residual
    smooth_length : m, distance over which neighbouring markers deform alike
    instrument_sd : m, an axis, white noise of the marker positions
    bone_sd_position, bone_sd_rotation : m and rad, an axis, white noise of the bone truth

    Raises
    ------
    InputError : a share or a time outside its range.
    """

    thigh: SegmentSettings = field(default_factory=lambda: THIGH)
    shank: SegmentSettings = field(default_factory=lambda: SHANK)
    between_share: float = 0.45
    rigid_share: float = 0.70
    coupling: float = 0.6
    tissue_sd: float = 0.15
    correlation_time: float = 0.10
    smooth_length: float = 0.12
    instrument_sd: float = 0.3e-3
    bone_sd_position: float = 0.5e-3
    bone_sd_rotation: float = 0.5 * _DEGREE

    def __post_init__(self) -> None:
        """Refuse values outside their range."""
        for name in ("rigid_share", "coupling"):
            value = float(getattr(self, name))
            if not 0.0 <= value < 1.0:
                raise InputError(
                    message(f"PopulationSettings.{name}", f"expected 0 to below 1, got {value:g}")
                )
        if not self.correlation_time > 0:
            raise InputError(
                message(
                    "PopulationSettings.correlation_time",
                    f"expected a time above 0 s, got {self.correlation_time:g} s",
                )
            )


@dataclass(frozen=True)
class SegmentPopulation:
    """Drawn artifact of a population, one segment of m markers.

    Attributes
    ----------
    layout : shape (m, 3), m, bone frame, average marker positions
    mean_weights : shape (4, 3m), m a drive, population weights W
    drive_factor : shape (4, 4), unitless, A with A·Aᵀ the covariance over drives
    marker_factor : shape (3m, 3m), m, F with F·Fᵀ the covariance over markers and axes
    residual_factor : shape (3m, 3m), m, the same for the residual r
    """

    layout: FloatArray
    mean_weights: FloatArray
    drive_factor: FloatArray
    marker_factor: FloatArray
    residual_factor: FloatArray


@dataclass(frozen=True)
class Population:
    """Everything subjects have in common: settings and the drawn artifact of thigh and shank.

    tissue: what they share in the mechanism bulge-slide-wobble; None where the drives act.
    """

    settings: PopulationSettings
    segments: tuple[SegmentPopulation, SegmentPopulation]
    tissue: tuple[AverageTissue, AverageTissue] | None = None


def drives(angles: FloatArray, reference_angles: FloatArray) -> FloatArray:
    """Drives of the artifact, as differences to the reference posture.

    Parameters
    ----------
    angles : shape (..., 3), rad, knee flexion, adduction, internal rotation
    reference_angles : shape (..., 3), rad

    Returns
    -------
    shape (..., 4), unitless, exactly zero at the reference angles.
    """

    def drive(angle: FloatArray) -> FloatArray:
        return np.stack(
            [
                angle[..., 0] / (60 * _DEGREE),
                np.tanh(angle[..., 0] / (30 * _DEGREE)),
                angle[..., 2] / (8 * _DEGREE),
                angle[..., 1] / (6 * _DEGREE),
            ],
            axis=-1,
        )

    return np.asarray(drive(angles) - drive(reference_angles), dtype=np.float64)


def draw_population(
    generator: Generator,
    layouts: tuple[FloatArray, FloatArray],
    drive_moment: FloatArray,
    settings: PopulationSettings | None = None,
) -> Population:
    """Draw the artifact that a population has in common, scaled to the sizes asked for.

    Parameters
    ----------
    generator : source of all randomness
    layouts : two of shape (m, 3), m, bone frames, average marker positions of thigh and shank
    drive_moment : shape (4, 4), unitless, mean of f·fᵀ over the motion the sizes refer to
    settings : sizes; the default is the invented study

    Returns
    -------
    Population.

    Raises
    ------
    InputError : residual and shares leave nothing for the population's mean.
    """
    used = settings if settings is not None else PopulationSettings()
    thigh, shank = (
        _draw_segment(generator, name, layout, drive_moment, sizes, used)
        for name, layout, sizes in zip(("thigh", "shank"), layouts, (used.thigh, used.shank), strict=True)
    )
    return Population(used, (thigh, shank))


def draw_weights(population: Population, generator: Generator) -> tuple[tuple[FloatArray, FloatArray], float]:
    """Draw one subject's artifact.

    Returns
    -------
    Weights s·(W + U) of thigh and shank, each of shape (4, 3m), m a drive, and the tissue factor s.
    """
    spread = population.settings.tissue_sd
    tissue_factor = float(np.exp(spread * generator.standard_normal() - spread**2 / 2))
    thigh, shank = (
        tissue_factor
        * (
            segment.mean_weights
            + segment.drive_factor
            @ generator.standard_normal(segment.mean_weights.shape)
            @ segment.marker_factor.T
        )
        for segment in population.segments
    )
    return (thigh, shank), tissue_factor


def systematic_displacement(weights: FloatArray, drive: FloatArray) -> FloatArray:
    """Artifact that the angles explain.

    Parameters
    ----------
    weights : shape (4, 3m), m a drive
    drive : shape (..., 4), unitless

    Returns
    -------
    shape (..., m, 3), m, bone frame.
    """
    flat = drive @ weights
    return np.asarray(flat.reshape(*flat.shape[:-1], -1, 3), dtype=np.float64)


def residual_displacement(
    factor: FloatArray, frames: int, interval: float, correlation_time: float, generator: Generator
) -> FloatArray:
    """Artifact that the angles do not explain: AR(1), stationary from the first frame.

    Parameters
    ----------
    factor : shape (3m, 3m), m
    frames : how many
    interval : s, between frames
    correlation_time : s, after which the autocorrelation has fallen to 1/e
    generator : source of all randomness

    Returns
    -------
    shape (frames, m, 3), m, bone frame.
    """
    memory = float(np.exp(-interval / correlation_time))
    innovation = generator.standard_normal((frames, factor.shape[0]))
    innovation[1:] *= np.sqrt(1 - memory**2)
    latent = lfilter([1.0], [1.0, -memory], innovation, axis=0)
    return np.asarray((latent @ factor.T).reshape(frames, -1, 3), dtype=np.float64)


def _draw_segment(
    generator: Generator,
    name: str,
    layout: FloatArray,
    drive_moment: FloatArray,
    sizes: SegmentSettings,
    settings: PopulationSettings,
) -> SegmentPopulation:
    total = sizes.displacement_rms**2
    explained = total - sizes.residual_rms**2
    mean_square = (1 - settings.between_share) * total - sizes.residual_rms**2
    between_square = explained * np.exp(-(settings.tissue_sd**2)) - mean_square
    if not (mean_square > 0 and between_square > 0):
        raise InputError(
            message(
                ("PopulationSettings", name),
                f"a residual of {1e3 * sizes.residual_rms:g} mm and a between-subject share of "
                f"{settings.between_share:g} do not fit into a displacement of "
                f"{1e3 * sizes.displacement_rms:g} mm",
                "Lower the residual or move the share towards the middle.",
            )
        )
    # Rows of in_unison: displacement of all markers by a unit rotation or translation about their middle.
    in_unison = marker_jacobian(layout - layout.mean(axis=0))
    basis = np.linalg.qr(in_unison, mode="complete")[0]
    deforming = _deformation_factor(layout, basis[:, 6:], settings.smooth_length)
    factor = _coupled_factor(generator, in_unison * sizes.in_unison_sd, deforming, settings)
    count = layout.shape[0]
    factor /= np.sqrt(np.trace(factor @ factor.T) / count)
    drive_factor = np.linalg.cholesky(_DRIVE_CORRELATION * np.outer(_DRIVE_SD, _DRIVE_SD))
    drive_square = float(np.trace(drive_factor.T @ drive_moment @ drive_factor))

    def power(weights: FloatArray) -> float:
        """Mean square of a marker's displacement, m², over the motion behind drive_moment."""
        return float(np.einsum("ki,kl,li->", weights, drive_moment, weights) / count)

    pattern = sizes.in_unison_mean * (1 + 0.2 * generator.standard_normal(sizes.in_unison_mean.shape))
    rigid = pattern @ in_unison.T
    bending = drive_factor @ generator.standard_normal((len(DRIVES), deforming.shape[1])) @ deforming.T
    mean_weights = rigid * np.sqrt(mean_square * settings.rigid_share / power(rigid)) + bending * np.sqrt(
        mean_square * (1 - settings.rigid_share) / power(bending)
    )
    return SegmentPopulation(
        layout=layout,
        mean_weights=mean_weights,
        drive_factor=drive_factor,
        marker_factor=factor * np.sqrt(between_square / drive_square),
        residual_factor=factor * sizes.residual_rms,
    )


def _deformation_factor(layout: FloatArray, directions: FloatArray, smooth_length: float) -> FloatArray:
    """Factor (3m, 3m − 6) of a smooth field over the markers without its rigid part."""
    distance = np.linalg.norm(layout[:, None] - layout[None], axis=-1)
    field_covariance = np.kron(np.exp(-0.5 * (distance / smooth_length) ** 2), np.eye(3))
    covariance = directions.T @ field_covariance @ directions
    # Full rank by construction: a real residual has no direction without any variance.
    covariance += _SMALLEST_SHARE * np.trace(covariance) / len(covariance) * np.eye(len(covariance))
    return np.asarray(directions @ np.linalg.cholesky(covariance), dtype=np.float64)


def _coupled_factor(
    generator: Generator, rigid: FloatArray, deforming: FloatArray, settings: PopulationSettings
) -> FloatArray:
    """Factor (3m, 3m): rigid part and deformation in their shares, the second following the first.

    With latent z of the rigid part and e of its own, the deformation's latent is
    ρ·O·z + √(1 − ρ²O·Oᵀ)·e; O is a random partial isometry, so shares stay as they are.
    """
    rigid = rigid * np.sqrt(settings.rigid_share / np.trace(rigid @ rigid.T))
    deforming = deforming * np.sqrt((1 - settings.rigid_share) / np.trace(deforming @ deforming.T))
    own, shared = deforming.shape[1], rigid.shape[1]
    size = max(own, shared)
    isometry = np.linalg.qr(generator.standard_normal((size, size)))[0][:own, :shared]
    own_factor = np.linalg.cholesky(np.eye(own) - settings.coupling**2 * isometry @ isometry.T)
    return np.concatenate([rigid + settings.coupling * deforming @ isometry, deforming @ own_factor], axis=1)

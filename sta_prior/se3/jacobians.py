"""Jacobians of the exponential of rotations and of rigid motions, and their inverses.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike

from sta_prior.checks import FloatArray, check_shape
from sta_prior.se3.group import skew

# Below this angle (rad) the coefficients come from their series: the closed
# forms lose digits to cancellation.
_SERIES_ANGLE = 0.5


def _series(square: FloatArray, coefficients: list[float]) -> FloatArray:
    """Sum coefficients[k]·square**k by Horner's rule."""
    total = np.zeros_like(square)
    for coefficient in reversed(coefficients):
        total = total * square + coefficient
    return total


def _coefficient(angle: FloatArray, closed: FloatArray, coefficients: list[float]) -> FloatArray:
    """Choose between a closed form and its series in angle²; two axes are added for matrices."""
    small = angle < _SERIES_ANGLE
    return np.where(small, _series(np.where(small, angle, 0.0) ** 2, coefficients), closed)[..., None, None]


_TERMS = range(8)
_SINE_1 = [(-1.0) ** k / math.factorial(2 * k + 2) for k in _TERMS]  # (1 − cos θ)/θ²
_SINE_2 = [(-1.0) ** k / math.factorial(2 * k + 3) for k in _TERMS]  # (θ − sin θ)/θ³
_SINE_3 = [(-1.0) ** k / math.factorial(2 * k + 4) for k in _TERMS]  # (θ²/2 + cos θ − 1)/θ⁴
_SINE_4 = [(-1.0) ** k * (k + 1) / math.factorial(2 * k + 5) for k in _TERMS]
# (1 − (θ/2) cot(θ/2))/θ², Bernoulli numbers
_COTANGENT = [1 / 12, 1 / 720, 1 / 30240, 1 / 1209600, 1 / 47900160, 691 / 1307674368000, 1 / 74724249600]


def _guarded(angle: FloatArray) -> FloatArray:
    """Replace angles that take the series, so that the closed forms divide by no zero."""
    return np.where(angle < _SERIES_ANGLE, 1.0, angle)


def rotation_left_jacobian(vector: ArrayLike) -> FloatArray:
    """Return J with Exp(φ + δ) ≈ Exp(J δ)·Exp(φ) for rotations.

    Parameters
    ----------
    vector : shape (..., 3), rad

    Returns
    -------
    shape (..., 3, 3)

    Raises
    ------
    ShapeError : last axis is not 3.
    """
    vector = check_shape(vector, (3,), "rotation vector")
    angle = np.linalg.norm(vector, axis=-1)
    safe = _guarded(angle)
    matrix = skew(vector)
    first = _coefficient(angle, (1 - np.cos(safe)) / safe**2, _SINE_1)
    second = _coefficient(angle, (safe - np.sin(safe)) / safe**3, _SINE_2)
    result: FloatArray = np.eye(3) + first * matrix + second * (matrix @ matrix)
    return result


def rotation_right_jacobian(vector: ArrayLike) -> FloatArray:
    """Return J with Exp(φ + δ) ≈ Exp(φ)·Exp(J δ), shape (..., 3, 3); see `rotation_left_jacobian`."""
    return rotation_left_jacobian(-np.asarray(vector, dtype=np.float64))


def rotation_left_jacobian_inverse(vector: ArrayLike) -> FloatArray:
    """Return the inverse of `rotation_left_jacobian`, shape (..., 3, 3); angle below 2π."""
    vector = check_shape(vector, (3,), "rotation vector")
    angle = np.linalg.norm(vector, axis=-1)
    half = _guarded(angle) / 2
    matrix = skew(vector)
    second = _coefficient(angle, (1 - half * np.cos(half) / np.sin(half)) / (4 * half**2), _COTANGENT)
    result: FloatArray = np.eye(3) - matrix / 2 + second * (matrix @ matrix)
    return result


def rotation_right_jacobian_inverse(vector: ArrayLike) -> FloatArray:
    """Return the inverse of `rotation_right_jacobian`, shape (..., 3, 3); angle below 2π."""
    return rotation_left_jacobian_inverse(-np.asarray(vector, dtype=np.float64))


def _coupling(tangent: FloatArray) -> FloatArray:
    """Return the block of the SE(3) left Jacobian that turns rotation into translation."""
    angle = np.linalg.norm(tangent[..., :3], axis=-1)
    safe = _guarded(angle)
    f = skew(tangent[..., :3])
    r = skew(tangent[..., 3:])
    sine, cosine = np.sin(safe), np.cos(safe)
    second = _coefficient(angle, (safe - sine) / safe**3, _SINE_2)
    third = _coefficient(angle, (safe**2 / 2 + cosine - 1) / safe**4, _SINE_3)
    fourth = _coefficient(angle, (2 * safe - 3 * sine + safe * cosine) / (2 * safe**5), _SINE_4)
    fr, rf = f @ r, r @ f
    frf = fr @ f
    result: FloatArray = (
        r / 2 + second * (fr + rf + frf) + third * (f @ fr + rf @ f - 3 * frf) + fourth * (frf @ f + f @ frf)
    )
    return result


def left_jacobian(tangent: ArrayLike) -> FloatArray:
    """Return J with Exp(ξ + δ) ≈ Exp(J δ)·Exp(ξ).

    Parameters
    ----------
    tangent : shape (..., 6), rad and m

    Returns
    -------
    shape (..., 6, 6), lower block triangular

    Raises
    ------
    ShapeError : last axis is not 6.

    References
    ----------
    Barfoot & Furgale (2014), IEEE Trans. Robotics 30(3), 679–693.
    """
    tangent = check_shape(tangent, (6,), "tangent")
    block = rotation_left_jacobian(tangent[..., :3])
    result = np.zeros((*tangent.shape, 6))
    result[..., :3, :3] = block
    result[..., 3:, 3:] = block
    result[..., 3:, :3] = _coupling(tangent)
    return result


def right_jacobian(tangent: ArrayLike) -> FloatArray:
    """Return J with Exp(ξ + δ) ≈ Exp(ξ)·Exp(J δ), shape (..., 6, 6); see `left_jacobian`."""
    return left_jacobian(-np.asarray(tangent, dtype=np.float64))


def left_jacobian_inverse(tangent: ArrayLike) -> FloatArray:
    """Return the inverse of `left_jacobian`, shape (..., 6, 6); angle below 2π."""
    tangent = check_shape(tangent, (6,), "tangent")
    block = rotation_left_jacobian_inverse(tangent[..., :3])
    result = np.zeros((*tangent.shape, 6))
    result[..., :3, :3] = block
    result[..., 3:, 3:] = block
    result[..., 3:, :3] = -block @ _coupling(tangent) @ block
    return result


def right_jacobian_inverse(tangent: ArrayLike) -> FloatArray:
    """Return the inverse of `right_jacobian`: Log(T·Exp(δ)) ≈ Log(T) + J⁻¹ δ, shape (..., 6, 6)."""
    return left_jacobian_inverse(-np.asarray(tangent, dtype=np.float64))

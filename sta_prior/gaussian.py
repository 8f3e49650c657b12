"""Gaussian algebra on stacks of vectors and matrices: factors, densities, conditioning, clipping.

No function here adds anything to a diagonal unasked. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
import scipy.special
from numpy.typing import ArrayLike

from sta_prior.checks import FloatArray, check_covariance, check_finite, check_shape
from sta_prior.errors import CovarianceError, ShapeError, message

_LOG_TWO_PI = float(np.log(2.0 * np.pi))


def symmetrise(matrix: ArrayLike) -> FloatArray:
    """Return (A + Aᵀ)/2 of matrices, shape (..., n, n), unit kept; removes rounding, repairs nothing."""
    clean = check_shape(matrix, (None, None), "matrix")
    if clean.shape[-1] != clean.shape[-2]:
        raise ShapeError(message("matrix", f"expected shape (..., n, n), got {clean.shape}"))
    result: FloatArray = 0.5 * (clean + np.swapaxes(clean, -1, -2))
    return result


def _square(matrix: ArrayLike, name: str) -> FloatArray:
    """Return finite square matrices, shape (..., n, n)."""
    clean = check_shape(matrix, (None, None), name)
    size = clean.shape[-1]
    return check_finite(check_shape(clean, (size, size), name), name)


def cholesky(covariance: ArrayLike, name: str = "covariance") -> FloatArray:
    """Factor covariances, Σ = L Lᵀ.

    Parameters
    ----------
    covariance : shape (..., n, n), any unit squared
        Only the lower triangle is read.
    name : how the message calls it

    Returns
    -------
    shape (..., n, n), lower triangular.

    Raises
    ------
    ShapeError : not square, or not finite.
    CovarianceError : not positive definite; names the worst matrix of the stack. Nothing is
        added to the diagonal to hide it.
    """
    covariance = _square(covariance, name)
    try:
        return np.asarray(np.linalg.cholesky(covariance), dtype=np.float64)
    except np.linalg.LinAlgError as error:
        lowest = np.linalg.eigvalsh(covariance)[..., 0]
        # The factorisation also fails where rounding alone makes an eigenvalue negative.
        index = tuple(int(i) for i in np.unravel_index(int(np.argmin(lowest)), lowest.shape))
        raise CovarianceError(
            message(
                (name, f"index {index}" if index else None),
                f"smallest eigenvalue is {float(lowest[index]):.3g}, expected above 0",
                "Give every direction some spread.",
            )
        ) from error


def whiten(factor: FloatArray, matrix: FloatArray) -> FloatArray:
    """Return L⁻¹ A.

    Parameters
    ----------
    factor : shape (..., n, n), lower triangular, from `cholesky`
    matrix : shape (..., n, k), a residual as one column, or a Jacobian
        Leading axes broadcast.

    Returns
    -------
    shape (..., n, k)

    Raises
    ------
    ShapeError : last axes do not fit.
    """
    factor = check_shape(factor, (None, None), "factor")
    matrix = check_shape(matrix, (factor.shape[-1], None), "matrix")
    if factor.ndim == 2 and matrix.ndim == 2:
        single: FloatArray = scipy.linalg.solve_triangular(factor, matrix, lower=True)
        return single
    # NumPy's stacked solver beats SciPy's loop over triangular solves by an order of magnitude.
    return np.asarray(np.linalg.solve(factor, matrix), dtype=np.float64)


def solve_spd(covariance: ArrayLike, matrix: ArrayLike, name: str = "covariance") -> FloatArray:
    """Return Σ⁻¹ A for positive definite Σ.

    Parameters
    ----------
    covariance : shape (..., n, n)
    matrix : shape (..., n, k)
        A vector is one column. Leading axes broadcast.
    name : how messages call the covariance

    Returns
    -------
    shape (..., n, k)

    Raises
    ------
    ShapeError, CovarianceError : as `cholesky`.
    """
    factor = cholesky(covariance, name)
    matrix = check_shape(matrix, (factor.shape[-1], None), "matrix")
    if factor.ndim == 2 and matrix.ndim == 2:
        single: FloatArray = scipy.linalg.cho_solve((factor, True), matrix)
        return single
    half = np.linalg.solve(factor, matrix)
    return np.asarray(np.linalg.solve(np.swapaxes(factor, -1, -2), half), dtype=np.float64)


def _whitened_vector(residual: ArrayLike, covariance: ArrayLike) -> tuple[FloatArray, FloatArray]:
    factor = cholesky(covariance)
    residual = check_shape(residual, (factor.shape[-1],), "residual")
    # Row by row over the whole stack: a vector each needs no factor of a triangular matrix.
    white = np.empty(np.broadcast_shapes(residual.shape, factor.shape[:-1]))
    for row in range(factor.shape[-1]):
        known = np.einsum("...j,...j->...", factor[..., row, :row], white[..., :row])
        white[..., row] = (residual[..., row] - known) / factor[..., row, row]
    return white, factor


def mahalanobis(residual: ArrayLike, covariance: ArrayLike) -> FloatArray:
    """Return the Mahalanobis distance √(rᵀ Σ⁻¹ r); its square is χ² with n degrees of freedom.

    Parameters
    ----------
    residual : shape (..., n), any unit
    covariance : shape (..., n, n), that unit squared
        Leading axes broadcast.

    Returns
    -------
    shape (...), unitless; NaN where the residual has a NaN.

    Raises
    ------
    ShapeError, CovarianceError : as `cholesky`.
    """
    return np.asarray(np.linalg.norm(_whitened_vector(residual, covariance)[0], axis=-1), dtype=np.float64)


def log_density(residual: ArrayLike, covariance: ArrayLike) -> FloatArray:
    """Return the log-density of a zero-mean Gaussian, all constants included.

    Parameters
    ----------
    residual : shape (..., n), any unit
        Observation minus mean.
    covariance : shape (..., n, n), that unit squared
        Leading axes broadcast.

    Returns
    -------
    shape (...): −½ rᵀΣ⁻¹r − ½ log|Σ| − (n/2) log 2π; NaN where the residual has a NaN.

    Raises
    ------
    ShapeError, CovarianceError : as `cholesky`.
    """
    white, factor = _whitened_vector(residual, covariance)
    log_root = np.log(np.diagonal(factor, axis1=-2, axis2=-1)).sum(axis=-1)
    result: FloatArray = (
        -0.5 * np.einsum("...i,...i->...", white, white) - log_root - 0.5 * factor.shape[-1] * _LOG_TWO_PI
    )
    return result


@dataclass(frozen=True)
class Conditional:
    """A Gaussian after a linear observation.

    Attributes
    ----------
    mean : shape (..., n)
    covariance : shape (..., n, n)
    log_evidence : shape (...), log-density of what was observed before it was known
    """

    mean: FloatArray
    covariance: FloatArray
    log_evidence: FloatArray


def condition(
    mean: ArrayLike, covariance: ArrayLike, design: ArrayLike, observed: ArrayLike, noise: ArrayLike
) -> Conditional:
    """Condition x ~ N(mean, covariance) on observed = design·x + e, e ~ N(0, noise).

    Parameters
    ----------
    mean : shape (..., n)
    covariance : shape (..., n, n), positive semi-definite
    design : shape (..., k, n)
    observed : shape (..., k)
        NaN = hidden: its row is dropped.
    noise : shape (..., k, k), positive semi-definite
        Leading axes broadcast.

    Returns
    -------
    Conditional. With everything hidden it is the Gaussian given, with log evidence 0.

    Raises
    ------
    ShapeError : axes that do not fit, or values not finite.
    CovarianceError : design·covariance·designᵀ + noise of the rows seen is not positive definite.

    Notes
    -----
    The covariance is updated in Joseph's form, (I − KH) P (I − KH)ᵀ + K R Kᵀ, which stays
    positive semi-definite.
    """
    design = check_shape(design, (None, None), "design")
    rows, size = design.shape[-2:]
    mean = check_shape(mean, (size,), "mean")
    covariance = check_shape(covariance, (size, size), "covariance")
    observed = check_shape(observed, (rows,), "observed")
    noise = check_shape(noise, (rows, rows), "noise")
    leading = np.broadcast_shapes(
        mean.shape[:-1], covariance.shape[:-2], design.shape[:-2], observed.shape[:-1], noise.shape[:-2]
    )
    seen = np.broadcast_to(~np.isnan(observed), (*leading, rows))
    # A hidden row observes nothing, with unit noise of its own: it drops out of every term.
    design = np.where(seen[..., None], design, 0.0)
    noise = np.where(seen[..., None] & seen[..., None, :], noise, np.eye(rows))
    residual = np.where(seen, observed - np.einsum("...ij,...j->...i", design, mean), 0.0)
    reach = covariance @ np.swapaxes(design, -1, -2)
    innovation = symmetrise(design @ reach + noise)
    gain = np.swapaxes(solve_spd(innovation, np.swapaxes(reach, -1, -2), "innovation"), -1, -2)
    kept = np.eye(size) - gain @ design
    evidence = log_density(residual, innovation) + 0.5 * _LOG_TWO_PI * (~seen).sum(axis=-1)
    return Conditional(
        mean=mean + np.einsum("...ij,...j->...i", gain, residual),
        covariance=symmetrise(
            kept @ covariance @ np.swapaxes(kept, -1, -2) + gain @ noise @ np.swapaxes(gain, -1, -2)
        ),
        log_evidence=evidence,
    )


def nearest_psd(matrix: ArrayLike, floor: float = 0.0) -> FloatArray:
    """Return the nearest matrix whose eigenvalues are at least `floor`.

    Parameters
    ----------
    matrix : shape (..., n, n), any unit squared
    floor : same unit, at least 0

    Returns
    -------
    shape (..., n, n), symmetric.

    Raises
    ------
    ShapeError : not square, or not finite.
    CovarianceError : negative floor.

    References
    ----------
    Higham (1988), Linear Algebra Appl. 103, 103–118: nearest in the Frobenius norm.
    """
    if not floor >= 0:
        raise CovarianceError(message("floor", f"expected at least 0, got {floor:g}"))
    values, vectors = np.linalg.eigh(symmetrise(_square(matrix, "matrix")))
    clipped = np.maximum(values, floor)[..., None, :]
    return symmetrise((vectors * clipped) @ np.swapaxes(vectors, -1, -2))


def subtract_psd(covariance: ArrayLike, noise: ArrayLike, floor: float) -> FloatArray:
    """Take known noise out of an observed covariance, keeping the rest positive semi-definite.

    Parameters
    ----------
    covariance : shape (..., n, n), any unit squared
        Observed, noise included.
    noise : shape (..., n, n), same unit, positive semi-definite
    floor : same unit, above 0
        Variance added to the noise in the metric only, so that directions without noise
        are compared too. It is not subtracted.

    Returns
    -------
    shape (..., n, n), symmetric positive semi-definite: `covariance` − `noise`, with the
    negative eigenvalues it has in the metric of noise + floor·I set to 0.

    Raises
    ------
    ShapeError : axes that do not fit, or values not finite.
    CovarianceError : noise is no covariance, or floor not above 0.

    Notes
    -----
    In that metric an eigenvalue is a ratio of signal to noise, so what is clipped does not
    depend on the unit or size of each coordinate.
    """
    covariance = _square(covariance, "covariance")
    size = covariance.shape[-1]
    noise = check_covariance(noise, size, "noise")
    if not floor > 0:
        raise CovarianceError(message("floor", f"expected above 0, got {floor:g}"))
    factor = cholesky(noise + floor * np.eye(size), "noise")
    half = whiten(factor, symmetrise(covariance) - noise)
    white = symmetrise(whiten(factor, np.swapaxes(half, -1, -2)))
    values, vectors = np.linalg.eigh(white)
    coloured = factor @ (vectors * np.sqrt(np.maximum(values, 0.0))[..., None, :])
    return symmetrise(coloured @ np.swapaxes(coloured, -1, -2))


def crps_normal(mean: ArrayLike, sd: ArrayLike, observed: ArrayLike) -> FloatArray:
    """Return the continuous ranked probability score of a Gaussian forecast; lower is better.

    Parameters
    ----------
    mean, sd, observed : shapes that broadcast, one unit
        sd at least 0; at 0 the score is the absolute error.

    Returns
    -------
    shape (...), same unit; NaN where an input is NaN.

    Raises
    ------
    CovarianceError : negative sd.

    Notes
    -----
    σ [z (2Φ(z) − 1) + 2φ(z) − 1/√π], z = (observed − mean)/σ.

    References
    ----------
    Gneiting & Raftery (2007), J. Am. Stat. Assoc. 102, 359–378.

    Examples
    --------
    >>> round(float(crps_normal(0.0, 1.0, 0.0)), 10)
    0.2336949773
    """
    spread = np.asarray(sd, dtype=np.float64)
    if (spread < 0).any():
        where = tuple(int(i) for i in np.argwhere(spread < 0)[0]) if spread.ndim else ()
        raise CovarianceError(
            message(
                ("sd", f"index {where}" if where else None), f"expected at least 0, got {spread[where]:g}"
            )
        )
    error = np.asarray(observed, dtype=np.float64) - np.asarray(mean, dtype=np.float64)
    positive = spread > 0
    score = error / np.where(positive, spread, 1.0)
    # 2Φ(z) − 1 is the error function of z/√2.
    bracket = (
        score * scipy.special.erf(score / np.sqrt(2.0))
        + np.sqrt(2.0 / np.pi) * np.exp(-0.5 * score**2)
        - 1.0 / np.sqrt(np.pi)
    )
    result: FloatArray = np.where(positive | np.isnan(spread), spread * bracket, np.abs(error))
    return result

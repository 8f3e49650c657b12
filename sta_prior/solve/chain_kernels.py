"""Recursions over the frames of a block tridiagonal system, compiled.

Kernel: arrays in, arrays out; `sta_prior.solve.chain` checks, spans and names. Products and triangular
solves go to the BLAS and LAPACK that SciPy carries: at blocks of 24 and 48 they measured 1.5 to 2 times
faster than compiled loops of our own.

A *panel* holds what elimination leaves of one frame, in rows of one stride:

    [ R | N | Y | y ],   A_tt − N₋ᵀN₋ = RᵀR,   N = R⁻ᵀA_{t,t+1},   Y = R⁻ᵀ(B − N₋ᵀY₋),   y likewise from g,

where ₋ marks the frame before. Fortran reads a row-major matrix as its transpose, so R is *lower* to it.
"""

from __future__ import annotations

from contextlib import AbstractContextManager
from functools import cache
from typing import Any

import llvmlite.binding
import numpy as np
from numba import njit, types
from numba.extending import get_cython_function_address
from numpy.typing import NDArray
from threadpoolctl import ThreadpoolController

from sta_prior.checks import FloatArray, IntArray

ByteArray = NDArray[np.uint8]


def _routine(library: str, name: str, arguments: int) -> Any:
    """A routine of SciPy's BLAS or LAPACK, by a symbol: compiled code that names one can be cached.

    All arguments are addresses. Integers are passed as 64 bits, which a routine that reads 32 takes rightly
    on a little-endian machine.
    """
    symbol = f"sta_prior_{name}"
    llvmlite.binding.add_symbol(symbol, get_cython_function_address(f"scipy.linalg.{library}", name))
    return types.ExternalFunction(symbol, types.void(*[types.intp] * arguments))


_cholesky = _routine("cython_lapack", "dpotrf", 5)
_inverse = _routine("cython_lapack", "dpotri", 5)
_triangular_solve = _routine("cython_blas", "dtrsm", 11)
_square_update = _routine("cython_blas", "dsyrk", 10)
_product = _routine("cython_blas", "dgemm", 13)

LETTERS = np.frombuffer(b"LRNT", dtype=np.uint8).copy()
"""Left or lower, right, not transposed or not unit, transposed."""

NUMBERS = np.array([-1.0, 0.0, 1.0])
"""Factors of the products."""

# Offsets in bytes into LETTERS, NUMBERS and into the integers of `sizes`.
_LEFT, _LOWER, _RIGHT, _PLAIN, _TURNED = 0, 0, 1, 2, 3
_MINUS, _ZERO, _PLUS = 0, 8, 16
_STATES, _STRIDE, _SOLVED, _CARRIED, _TWICE, _CONSTANTS, _INFO = 0, 8, 16, 24, 32, 40, 48
_BYTES = 8


@cache
def _libraries() -> Any:
    return ThreadpoolController()


def one_thread() -> AbstractContextManager[object]:
    """Hold BLAS to one thread meanwhile: on blocks this small more of them only wait for each other.

    With two threads on two busy cores a sweep measured 3 to 60 times slower. Holds for the whole process.
    """
    limited: AbstractContextManager[object] = _libraries().limit(limits=1, user_api="blas")
    return limited


def sizes(states: int, constants: int, stride: int) -> IntArray:
    """Integers that the routines read by address; the last is where they write their verdict."""
    return np.array(
        [states, stride, states + constants + 1, constants + 1, 2 * states, constants, 0], dtype=np.int64
    )


@njit(cache=True, nogil=True, error_model="numpy")
def eliminate(
    diagonal: FloatArray,
    lower: FloatArray,
    coupling: FloatArray,
    gradient: FloatArray,
    before: FloatArray,
    panels: FloatArray,
    size: IntArray,
    letters: ByteArray,
    numbers: FloatArray,
) -> int:
    """Fill the panels of a span of frames, first to last.

    Parameters
    ----------
    diagonal : shape (n, p, p), the upper triangle is read
    lower : shape (n, p, p), A_{t+1,t}
    coupling : shape (n, p, c)
    gradient : shape (n, p)
    before : shape (p, w), panel of the frame before the first; zeros where there is none
    panels : shape (n, p, w), w ≥ 2p + c + 1, written
    size : from `sizes`
    letters, numbers : LETTERS, NUMBERS

    Returns
    -------
    −1, or the first frame of the span whose block is not positive definite; the unknown, counted from 1, is
    then the last of ``size``.
    """
    frames, states = gradient.shape
    constants = coupling.shape[2]
    stride = panels.shape[2]
    integer = size.ctypes.data
    letter = letters.ctypes.data
    number = numbers.ctypes.data
    following = _BYTES * states
    arrow = 2 * _BYTES * states
    earlier = before.ctypes.data
    for frame in range(frames):
        panel = panels[frame]
        for i in range(states):
            for j in range(states):
                panel[i, j] = diagonal[frame, i, j]
            for j in range(states):
                panel[i, states + j] = lower[frame, j, i]
            for j in range(constants):
                panel[i, 2 * states + j] = coupling[frame, i, j]
            panel[i, 2 * states + constants] = gradient[frame, i]
        now = panels.ctypes.data + _BYTES * frame * states * stride
        # A − N₋ᵀN₋, then [B g] − N₋ᵀ[Y₋ y₋].
        _square_update(
            *(letter + _LOWER, letter + _PLAIN, integer + _STATES, integer + _STATES, number + _MINUS),
            *(earlier + following, integer + _STRIDE, number + _PLUS, now, integer + _STRIDE),
        )
        _product(
            *(letter + _PLAIN, letter + _TURNED, integer + _CARRIED, integer + _STATES, integer + _STATES),
            *(number + _MINUS, earlier + arrow, integer + _STRIDE, earlier + following, integer + _STRIDE),
            *(number + _PLUS, now + arrow, integer + _STRIDE),
        )
        _cholesky(letter + _LOWER, integer + _STATES, now, integer + _STRIDE, integer + _INFO)
        # NaN may pass as a pivot; it then reaches the sums that the caller looks at.
        if size[6] != 0:
            return frame
        _triangular_solve(
            *(letter + _RIGHT, letter + _LOWER, letter + _TURNED, letter + _PLAIN, integer + _SOLVED),
            *(integer + _STATES, number + _PLUS, now, integer + _STRIDE, now + following, integer + _STRIDE),
        )
        earlier = now
    return -1


@njit(cache=True, nogil=True, error_model="numpy", fastmath={"contract", "reassoc"})
def substitute(panels: FloatArray, right: FloatArray, after: FloatArray) -> None:
    """Solve R_t x_t = r_t − N_t x_{t+1} over a span, last frame to first.

    Parameters
    ----------
    panels : shape (n, p, w), from `eliminate`
    right : shape (n, p), r; overwritten by x
    after : shape (p,), x of the frame after the last; zeros where there is none
    """
    frames, states = right.shape
    for frame in range(frames - 1, -1, -1):
        panel = panels[frame]
        solution = right[frame]
        later = after if frame == frames - 1 else right[frame + 1]
        for i in range(states - 1, -1, -1):
            total = 0.0
            for j in range(states):
                total += panel[i, states + j] * later[j]
            for j in range(i + 1, states):
                total += panel[i, j] * solution[j]
            solution[i] = (solution[i] - total) / panel[i, i]


@njit(cache=True, nogil=True, error_model="numpy")
def covariances(
    panels: FloatArray,
    covariance: FloatArray,
    responses: FloatArray,
    diagonal: FloatArray,
    lagged: FloatArray,
    work: FloatArray,
    size: IntArray,
    letters: ByteArray,
    numbers: FloatArray,
) -> None:
    """Blocks of A⁻¹, and X = A⁻¹B, over a span, last frame to first.

    Parameters
    ----------
    panels : shape (n, p, w), from `eliminate`
    covariance : shape (p, p), block of A⁻¹ of the frame after the last, zeros where there is none;
        overwritten by that of the first frame
    responses : shape (n + 1, p, c), X; the last is that of the frame after the span, the others are written
    diagonal : shape (n, k, k), k ≤ p: leading parts of the diagonal blocks, written
    lagged : shape (n, k, k), or (0, k, k) where not wanted: blocks (t, t + 1), written
    work : shape (2, p, p), scratch
    size, letters, numbers : as in `eliminate`

    Notes
    -----
    With K = R⁻¹N: P_t = R⁻¹R⁻ᵀ + K P_{t+1} Kᵀ, block (t, t + 1) = −K P_{t+1}, X_t = R⁻¹(Y − N X_{t+1}).
    """
    frames, states, stride = panels.shape
    leading = diagonal.shape[1]
    constants = responses.shape[2]
    integer = size.ctypes.data
    letter = letters.ctypes.data
    number = numbers.ctypes.data
    following = _BYTES * states
    gains = work[0]
    spread = work[1]
    first = work.ctypes.data
    second = first + _BYTES * states * states
    for frame in range(frames - 1, -1, -1):
        panel = panels[frame]
        now = panels.ctypes.data + _BYTES * frame * states * stride
        for i in range(states):
            for j in range(states):
                gains[i, j] = panel[i, states + j]
        _triangular_solve(
            *(letter + _RIGHT, letter + _LOWER, letter + _PLAIN, letter + _PLAIN, integer + _STATES),
            *(integer + _STATES, number + _PLUS, now, integer + _STRIDE, first, integer + _STATES),
        )
        _product(
            *(letter + _PLAIN, letter + _PLAIN, integer + _STATES, integer + _STATES, integer + _STATES),
            *(number + _PLUS, covariance.ctypes.data, integer + _STATES, first, integer + _STATES),
            *(number + _ZERO, second, integer + _STATES),
        )
        if lagged.shape[0] > 0:
            for i in range(leading):
                for j in range(leading):
                    lagged[frame, i, j] = -spread[i, j]
        # (RᵀR)⁻¹ + K (K P)ᵀ; the inverse comes as an upper triangle.
        for i in range(states):
            for j in range(i, states):
                covariance[i, j] = panel[i, j]
        _inverse(
            letter + _LOWER, integer + _STATES, covariance.ctypes.data, integer + _STATES, integer + _INFO
        )
        _product(
            *(letter + _TURNED, letter + _PLAIN, integer + _STATES, integer + _STATES, integer + _STATES),
            *(number + _PLUS, first, integer + _STATES, second, integer + _STATES),
            *(number + _PLUS, covariance.ctypes.data, integer + _STATES),
        )
        for i in range(states):
            for j in range(i):
                covariance[i, j] = covariance[j, i]
        for i in range(leading):
            for j in range(leading):
                diagonal[frame, i, j] = covariance[i, j]
        if constants > 0:
            for i in range(states):
                for j in range(constants):
                    responses[frame, i, j] = panel[i, 2 * states + j]
            own = responses.ctypes.data + _BYTES * frame * states * constants
            later = own + _BYTES * states * constants
            _product(
                *(
                    letter + _PLAIN,
                    letter + _PLAIN,
                    integer + _CONSTANTS,
                    integer + _STATES,
                    integer + _STATES,
                ),
                *(number + _MINUS, later, integer + _CONSTANTS, now + following, integer + _STRIDE),
                *(number + _PLUS, own, integer + _CONSTANTS),
            )
            _triangular_solve(
                *(letter + _RIGHT, letter + _LOWER, letter + _PLAIN, letter + _PLAIN, integer + _CONSTANTS),
                *(integer + _STATES, number + _PLUS, now, integer + _STRIDE, own, integer + _CONSTANTS),
            )

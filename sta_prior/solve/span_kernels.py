"""Terms of a trajectory at a span of frames: residuals, whitening and their sums, compiled.

Kernel: arrays in, arrays out; `sta_prior.solve.spans` knows the problem and gives the arrays. All arrays are
C-contiguous but the views of a span. Products go to BLAS as in `chain_kernels`.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from sta_prior.checks import BoolArray, FloatArray, IntArray
from sta_prior.solve.chain_kernels import ByteArray, _product

# Offsets in bytes into LETTERS, NUMBERS and into the integers of `add_rows`.
_PLAIN, _TURNED = 2, 3
_ZERO, _PLUS = 8, 16
_BYTES = 8
_OUTPUTS, _WIDTH, _SIZE, _CONSTANTS, _STRIDE, _ROWS = 0, 8, 16, 24, 32, 40


@njit(cache=True, nogil=True, error_model="numpy")
def marker_rows(
    poses: FloatArray,
    points: FloatArray,
    reference: FloatArray,
    mean: FloatArray,
    mean_derivative: FloatArray,
    feature_derivative: FloatArray,
    weights: FloatArray,
    input_jacobian: FloatArray,
    column: IntArray,
    hidden: FloatArray,
    active: BoolArray,
    first: int,
    expected: bool,
    residual: FloatArray,
    jacobian: FloatArray,
    through: FloatArray,
) -> None:
    """Residuals of a segment's markers and their derivatives in a frame's unknowns.

    Parameters
    ----------
    poses : shape (F, 4, 4), lab ← bone, of the segment
    points : shape (F, m, 3), m, lab; NaN hidden
    reference : shape (m, 3), m, bone
    mean : shape (F, n), m, of the artifact, constants included
    mean_derivative : shape (F, n, d), m/rad, of what the constants do not make
    feature_derivative : shape (F, K, d), 1/rad
    weights : shape (K, n), m, of the constants
    input_jacobian : shape (F, d, 6S), of the artifact's inputs in the poses
    column : shape (F, n), slot of a hidden output, −1 where seen
    hidden : shape (F, h), m, the hidden unknowns
    active : shape (F,), frames with rows
    first : column of the segment's pose
    expected : take the markers where the prior expects them
    residual, jacobian, through : shapes (F, n), (F, n, 6S + h) twice, zeros; written
    """
    frames, inputs, width = input_jacobian.shape
    outputs = mean.shape[1]
    features = weights.shape[0]
    slope = np.empty((outputs, inputs))
    point = np.empty(3)
    for frame in range(frames):
        if not active[frame]:
            continue
        slope[:] = mean_derivative[frame]
        for feature in range(features):
            for i in range(inputs):
                value = feature_derivative[frame, feature, i]
                # A feature hangs on one input.
                if value != 0.0:
                    for output in range(outputs):
                        slope[output, i] += value * weights[feature, output]
        for output in range(outputs):
            marker, axis = divmod(output, 3)
            slot = column[frame, output]
            if slot >= 0:
                jacobian[frame, output, width + slot] = 1.0
                residual[frame, output] = hidden[frame, slot]
                continue
            for i in range(inputs):
                value = slope[output, i]
                if value != 0.0:
                    for j in range(width):
                        through[frame, output, j] -= value * input_jacobian[frame, i, j]
            for j in range(width):
                jacobian[frame, output, j] = through[frame, output, j]
            for i in range(3):
                point[i] = 0.0
                for j in range(3):
                    point[i] += poses[frame, j, i] * (points[frame, marker, j] - poses[frame, j, 3])
            residual[frame, output] = point[axis] - reference[marker, axis] - mean[frame, output]
            if expected:
                for i in range(3):
                    point[i] = reference[marker, i] + mean[frame, 3 * marker + i]
            # [p]× and −1.
            after, before = (axis + 1) % 3, (axis + 2) % 3
            jacobian[frame, output, first + after] -= point[before]
            jacobian[frame, output, first + before] += point[after]
            jacobian[frame, output, first + 3 + axis] -= 1.0


@njit(cache=True, nogil=True, error_model="numpy")
def innovations(
    residual: FloatArray, decay: FloatArray, whiteners: FloatArray, which: IntArray, white: FloatArray
) -> None:
    """Whitened innovations L(e_t − ρe_{t−1}).

    Parameters
    ----------
    residual : shape (F, n)
    decay : shape (F,), ρ
    whiteners : shape (U, n, n), L, lower triangular
    which : shape (F,), the one that a frame has; −1 for none: no rows
    white : shape (F, n), written
    """
    frames, outputs = residual.shape
    change = np.empty(outputs)
    for frame in range(frames):
        if which[frame] < 0:
            white[frame] = 0.0
            continue
        for i in range(outputs):
            change[i] = residual[frame, i]
            if frame > 0:
                change[i] -= decay[frame] * residual[frame - 1, i]
        whitener = whiteners[which[frame]]
        for i in range(outputs):
            total = 0.0
            for j in range(i + 1):
                total += whitener[i, j] * change[j]
            white[frame, i] = total


@njit(cache=True, nogil=True, error_model="numpy")
def _whiten(
    jacobian: FloatArray,
    frame: int,
    whiteners: FloatArray,
    which: int,
    stacked: FloatArray,
    row: int,
    integer: int,
    letter: int,
    number: int,
) -> None:
    """Write LJ into the rows from ``row`` on; zeros where there is no whitener."""
    outputs, width = jacobian.shape[1:]
    if which < 0:
        stacked[row : row + outputs] = 0.0
        return
    _product(
        *(letter + _PLAIN, letter + _PLAIN, integer + _WIDTH, integer + _OUTPUTS, integer + _OUTPUTS),
        *(number + _PLUS, jacobian.ctypes.data + _BYTES * frame * outputs * width, integer + _WIDTH),
        *(whiteners.ctypes.data + _BYTES * which * outputs * outputs, integer + _OUTPUTS, number + _ZERO),
        *(stacked.ctypes.data + _BYTES * row * width, integer + _WIDTH),
    )


def room(rows: tuple[int, ...], moved: int, coupling: tuple[int, ...]) -> tuple[IntArray, FloatArray]:
    """Integers that BLAS reads by address, and scratch, for `add_rows`.

    rows: (n, m); moved: k; coupling: (p, c).
    """
    outputs, width = rows
    size = np.array([outputs, width, coupling[0], moved, coupling[1], 2 * outputs], dtype=np.int64)
    return size, np.zeros((2, 2 * outputs, width))


@njit(cache=True, nogil=True, error_model="numpy")
def add_rows(
    jacobian: FloatArray,
    white: FloatArray,
    moved: FloatArray,
    decay: FloatArray,
    whiteners: FloatArray,
    which: IntArray,
    start: int,
    column: int,
    diagonal: FloatArray,
    lower: FloatArray,
    coupling: FloatArray,
    gradient: FloatArray,
    size: IntArray,
    stacked: FloatArray,
    letters: ByteArray,
    numbers: FloatArray,
) -> None:
    """Add a chain of rows to the blocks of a span.

    Parameters
    ----------
    jacobian : shape (F, n, m), of the residuals in the first m unknowns of their frame
    white : shape (F, n), from `innovations`
    moved : shape (F, n, k), whitened derivative of the innovations in the constants
    decay, whiteners, which : as `innovations` has them
    start : the span's first frame among the F, of which one more may follow the span
    column : where the k constants begin; no other rows have them
    diagonal, lower : shape (f, p, p), added to
    coupling : shape (f, p, c), written
    gradient : shape (f, p), added to
    size, stacked : from `room`
    letters, numbers : LETTERS, NUMBERS

    Notes
    -----
    With N = L_tJ_t and M = ρL_{t+1}J_t the frame's own rows and the next frame's are, stacked, [N; −M]: one
    product for the diagonal block, and one for the coupling.
    """
    frames, outputs, width = jacobian.shape
    count, states = gradient.shape
    constants = moved.shape[2]
    letter = letters.ctypes.data
    number = numbers.ctypes.data
    integer = size.ctypes.data
    # Two in turn: a frame's rows, and the upper half of the next one's.
    block = _BYTES * 2 * outputs * width
    half = _BYTES * outputs * width
    _whiten(jacobian, start, whiteners, which[start], stacked[0], 0, integer, letter, number)
    for index in range(count):
        frame = start + index
        own = stacked[index % 2]
        now = stacked.ctypes.data + (index % 2) * block
        ahead = stacked.ctypes.data + ((index + 1) % 2) * block
        follows = frame + 1 < frames
        factor = -decay[frame + 1] if follows else 0.0
        if follows:
            later, kind = stacked[(index + 1) % 2], which[frame + 1]
            _whiten(jacobian, frame + 1, whiteners, kind, later, 0, integer, letter, number)
        if factor == 0.0:
            own[outputs:] = 0.0
            rows = _OUTPUTS
        else:
            rows = _ROWS
            if which[frame + 1] == which[frame]:
                for i in range(outputs):
                    for j in range(width):
                        own[outputs + i, j] = factor * own[i, j]
            else:
                _whiten(jacobian, frame, whiteners, which[frame + 1], own, outputs, integer, letter, number)
                for i in range(outputs, 2 * outputs):
                    for j in range(width):
                        own[i, j] *= factor
            # Blocks (t + 1, t): NᵀM of the next frame's rows.
            _product(
                *(letter + _PLAIN, letter + _TURNED, integer + _WIDTH, integer + _WIDTH, integer + _OUTPUTS),
                *(number + _PLUS, now + half, integer + _WIDTH, ahead, integer + _WIDTH),
                *(number + _PLUS, lower.ctypes.data + _BYTES * index * states * states, integer + _SIZE),
            )
        _product(
            *(letter + _PLAIN, letter + _TURNED, integer + _WIDTH, integer + _WIDTH, integer + rows),
            *(number + _PLUS, now, integer + _WIDTH, now, integer + _WIDTH),
            *(number + _PLUS, diagonal.ctypes.data + _BYTES * index * states * states, integer + _SIZE),
        )
        if constants > 0:
            at = coupling.ctypes.data + _BYTES * (index * states * coupling.shape[2] + column)
            _product(
                *(letter + _PLAIN, letter + _TURNED, integer + _CONSTANTS, integer + _WIDTH, integer + rows),
                *(number + _PLUS, moved.ctypes.data + _BYTES * frame * outputs * constants),
                *(integer + _CONSTANTS, now, integer + _WIDTH, number + _ZERO, at, integer + _STRIDE),
            )
        for i in range(outputs):
            for j in range(width):
                gradient[index, j] += own[i, j] * white[frame, i]
            if follows:
                for j in range(width):
                    gradient[index, j] += own[outputs + i, j] * white[frame + 1, i]

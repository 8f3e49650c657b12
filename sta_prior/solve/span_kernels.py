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
_OUTPUTS, _WIDTH, _STATES, _CONSTANTS, _STRIDE, _FELT, _BLOCK, _FEATURES = 0, 8, 16, 24, 32, 40, 48, 56

Room = tuple[IntArray, FloatArray, FloatArray]
"""Integers for BLAS, three factors for it, three matrices."""


@njit(cache=True, nogil=True, error_model="numpy")
def marker_rows(
    poses: FloatArray,
    points: FloatArray,
    reference: FloatArray,
    mean: FloatArray,
    usual: FloatArray,
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
    usual : shape (F, n), m, without the constants
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
                    point[i] = reference[marker, i] + usual[frame, 3 * marker + i]
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
def _transposed_product(
    letter: int,
    rows: int,
    columns: int,
    others: int,
    left: int,
    right: int,
    right_stride: int,
    factor: int,
    kept: int,
    result: int,
    stride: int,
) -> None:
    """Add factor · leftᵀright to kept · result: (rows, columns) and (rows, others), all by address."""
    _product(
        *(letter + _PLAIN, letter + _TURNED, others, columns, rows, factor, right, right_stride),
        *(left, columns, kept, result, stride),
    )


@njit(cache=True, nogil=True, error_model="numpy")
def _whiten(
    jacobian: FloatArray,
    frame: int,
    whiteners: FloatArray,
    which: int,
    result: FloatArray,
    integer: int,
    letter: int,
    number: int,
) -> None:
    """Write LJ; zeros where there is no whitener."""
    outputs, width = jacobian.shape[1:]
    if which < 0:
        result[:] = 0.0
        return
    _product(
        *(letter + _PLAIN, letter + _PLAIN, integer + _WIDTH, integer + _OUTPUTS, integer + _OUTPUTS),
        *(number + _PLUS, jacobian.ctypes.data + _BYTES * frame * outputs * width, integer + _WIDTH),
        *(whiteners.ctypes.data + _BYTES * which * outputs * outputs, integer + _OUTPUTS, number + _ZERO),
        *(result.ctypes.data, integer + _WIDTH),
    )


BLOCK = 16
"""Frames whose derivatives in the constants are made together: they then lie in the nearest cache."""


def room(rows: tuple[int, ...], moved: int, coupling: tuple[int, ...], features: int) -> Room:
    """Integers that BLAS reads by address, and scratch, for `add_rows`.

    rows: (n, m); moved: k; coupling: (p, c); features: K.
    """
    outputs, width = rows
    numbers = [outputs, width, coupling[0], moved, coupling[1], outputs * moved, BLOCK, features]
    return np.array(numbers, dtype=np.int64), np.zeros(3), np.zeros((3, outputs, width))


@njit(cache=True, nogil=True, error_model="numpy")
def add_rows(
    jacobian: FloatArray,
    white: FloatArray,
    moved: FloatArray,
    features: FloatArray,
    turned: FloatArray,
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
    factors: FloatArray,
    work: FloatArray,
    letters: ByteArray,
    numbers: FloatArray,
) -> None:
    """Add a chain of rows to the blocks of a span.

    Parameters
    ----------
    jacobian : shape (F, n, m), of the residuals in the first m unknowns of their frame
    white : shape (F, n), from `innovations`
    moved : shape (F, n, k), whitened derivative M of the innovations in the constants; where all frames are
        alike scratch of shape (BLOCK, n, k)
    features, turned : shapes (f, K) and (K, n·k), whose product is M_t − ρM_{t+1} where all frames are alike;
        else K = 0
    decay, whiteners, which : as `innovations` has them
    start : the span's first frame among the F, of which one more may follow the span
    column : where the k constants begin; no other rows have them
    diagonal, lower : shape (f, p, p), added to
    coupling : shape (f, p, c), written
    gradient : shape (f, p), added to
    size, factors, work : from `room`
    letters, numbers : LETTERS, NUMBERS

    Notes
    -----
    A frame's unknowns are in its own rows with N = L_tJ_t and in the next frame's with −ρP, P = L_{t+1}J_t;
    P is N where the two frames have one whitener.
    """
    frames, outputs, width = jacobian.shape
    count, states = gradient.shape
    constants = moved.shape[2]
    alike = turned.shape[0] > 0
    integer, letter, number = size.ctypes.data, letters.ctypes.data, numbers.ctypes.data
    factor, matrix = factors.ctypes.data, _BYTES * outputs * width
    past = work.ctypes.data + 2 * matrix
    _whiten(jacobian, start, whiteners, which[start], work[0], integer, letter, number)
    for index in range(count):
        frame = start + index
        now = work.ctypes.data + (index % 2) * matrix
        ahead = work.ctypes.data + ((index + 1) % 2) * matrix
        share = 0.0
        if frame + 1 < frames:
            _whiten(
                jacobian,
                frame + 1,
                whiteners,
                which[frame + 1],
                work[(index + 1) % 2],
                integer,
                letter,
                number,
            )
            share = -decay[frame + 1]
        same = share == 0.0 or which[frame + 1] == which[frame]
        again = now if same else past
        kept = work[index % 2] if same else work[2]
        factors[0] = 1.0 + share**2 if same else 1.0
        factors[1] = share
        factors[2] = share**2
        block = _BYTES * index * states * states
        _transposed_product(
            *(letter, integer + _OUTPUTS, integer + _WIDTH, integer + _WIDTH, now, now, integer + _WIDTH),
            *(factor, number + _PLUS, diagonal.ctypes.data + block, integer + _STATES),
        )
        if not same:
            _whiten(jacobian, frame, whiteners, which[frame + 1], work[2], integer, letter, number)
            _transposed_product(
                *(
                    letter,
                    integer + _OUTPUTS,
                    integer + _WIDTH,
                    integer + _WIDTH,
                    past,
                    past,
                    integer + _WIDTH,
                ),
                *(factor + 2 * _BYTES, number + _PLUS, diagonal.ctypes.data + block, integer + _STATES),
            )
        if share != 0.0:
            _transposed_product(
                *(
                    letter,
                    integer + _OUTPUTS,
                    integer + _WIDTH,
                    integer + _WIDTH,
                    ahead,
                    again,
                    integer + _WIDTH,
                ),
                *(factor + _BYTES, number + _PLUS, lower.ctypes.data + block, integer + _STATES),
            )
        for i in range(outputs):
            for j in range(width):
                gradient[index, j] += work[index % 2, i, j] * white[frame, i]
            if share != 0.0:
                for j in range(width):
                    gradient[index, j] += share * kept[i, j] * white[frame + 1, i]
        if constants == 0:
            continue
        own = moved.ctypes.data
        if alike:
            if index % BLOCK == 0:
                size[6] = min(BLOCK, count - index)
                _product(
                    *(
                        letter + _PLAIN,
                        letter + _PLAIN,
                        integer + _FELT,
                        integer + _BLOCK,
                        integer + _FEATURES,
                    ),
                    *(number + _PLUS, turned.ctypes.data, integer + _FELT),
                    *(features.ctypes.data + _BYTES * index * features.shape[1], integer + _FEATURES),
                    *(number + _ZERO, own, integer + _FELT),
                )
            own += _BYTES * (index % BLOCK) * outputs * constants
        else:
            own += _BYTES * frame * outputs * constants
        place = coupling.ctypes.data + _BYTES * (index * states * coupling.shape[2] + column)
        _transposed_product(
            *(
                letter,
                integer + _OUTPUTS,
                integer + _WIDTH,
                integer + _CONSTANTS,
                now,
                own,
                integer + _CONSTANTS,
            ),
            *(number + _PLUS, number + _ZERO, place, integer + _STRIDE),
        )
        if not alike and share != 0.0:
            own += _BYTES * outputs * constants
            _transposed_product(
                *(letter, integer + _OUTPUTS, integer + _WIDTH, integer + _CONSTANTS),
                *(
                    again,
                    own,
                    integer + _CONSTANTS,
                    factor + _BYTES,
                    number + _PLUS,
                    place,
                    integer + _STRIDE,
                ),
            )

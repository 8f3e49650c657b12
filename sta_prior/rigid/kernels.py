"""Rigid fit of many frames, compiled: closed form where it can be trusted, a mark on the frames where not.

Kernel: arrays in, arrays out; `sta_prior.rigid.fit` checks, and fits the marked frames by singular values.

With H = Σ b aᵀ over the centred markers and singular values s₁ ≥ s₂ ≥ |s₃|, s₃ of the sign of det H, the
best rotation reaches λ = s₁ + s₂ + s₃, the largest root of Horn's quartic. Newton's iteration finds it from
above (Theobald), R follows from λ in closed form (Markley), and three things guard its weakness:

1. R is made orthonormal, and turned by the Newton step θ = (tr(M)·1 − M)⁻¹·axis(M), M = RᵀH, which brings
   it to the accuracy of the singular values. Both corrections must be tiny.
2. tr(M)·1 − M must be positive definite, which no other stationary point than the best rotation can pass:
   its least eigenvalue is s₂ + s₃.
3. Its margin is wanted, not its sign: rounding turns R by about 1e-16·√(Σa²·Σb²)/(s₂ + s₃), so frames near
   a line, or near a mirror image that two rotations fit alike, are marked instead.

Frames are taken by `LANES`: the algebra runs without a branch over lanes side by side. No fused or reordered
arithmetic is allowed, so a frame gets the same bits in any company.

References
----------
Horn (1987), J. Optical Society of America A 4, 629–642, doi 10.1364/JOSAA.4.000629.
Theobald (2005), Acta Crystallographica A 61, 478–480, doi 10.1107/S0108767305015266.
Markley (1993), J. Astronautical Sciences 41, 261–280 (R from λ by cofactors, without a
quaternion).
"""

from __future__ import annotations

import numpy as np
from numba import njit, types

from sta_prior.checks import BoolArray, FloatArray

LANES = 32
NEWTON_STEPS = 10
"""Seven do for residuals that are small beside the cluster. A frame that needs more is marked."""
LARGEST_CORRECTION = 1e-9
"""Of R's orthonormality, and of its angle, rad; what is left after it is the square."""
SMALLEST_MARGIN = 2.5e-3
"""(s₂ + s₃)/s₁ at full correlation: a line ratio of 0.05. Below it, singular values."""
THRESHOLD_BAND = 1e-9
"""A line ratio as near as this to the one asked for is left to the singular values."""
_SMALLEST_SQUARE, _LARGEST_SQUARE = 1e-250, 1e250

# Rows of the workspace, LANES values each. The first nine are H and become R.
_BOUND, _MARGIN, _RATIO, _ROWS = 9, 10, 11, 12

_compiled = njit(error_model="numpy")
# A call inside the loop over lanes keeps them from running side by side: the algebra is seven times slower.
# One inside the loops over frames costs half as much again as the whole.
_inlined = njit(inline="always", error_model="numpy")
# One form of each argument, so that nothing is ever compiled twice.
_given = types.Array(types.float64, 3, "C", readonly=True)
_blocks, _line, _marks = types.float64[:, :, ::1], types.float64[::1], types.boolean[::1]
_SIGNATURE = types.boolean(
    _given, _given, types.float64, _blocks, _line, _marks, _line, _marks, _blocks, _blocks
)


@_inlined
def _adjugate(m00, m01, m02, m11, m12, m22):  # type: ignore[no-untyped-def]
    """Adjugate of a symmetric 3×3 matrix, its upper half."""
    return (
        m11 * m22 - m12 * m12,
        m02 * m12 - m01 * m22,
        m01 * m12 - m02 * m11,
        m00 * m22 - m02 * m02,
        m01 * m02 - m00 * m12,
        m00 * m11 - m01 * m01,
    )


@_inlined
def _largest_eigenvalue(m00, m01, m02, m11, m12, m22):  # type: ignore[no-untyped-def]
    """Largest eigenvalue of a symmetric 3×3 matrix, to rounding also where two or three agree.

    The eigenvalue that stands apart, at one end or the other, is a simple root far from the next and comes by
    Newton's iteration; the other two lie about their mean at a distance that is a norm, without cancellation.
    """
    mean = (m00 + m11 + m22) / 3.0
    d0, d1, d2 = m00 - mean, m11 - mean, m22 - mean
    square = (d0 * d0 + d1 * d1 + d2 * d2 + 2.0 * (m01 * m01 + m02 * m02 + m12 * m12)) / 6.0
    size = np.sqrt(square)
    inverse = 1.0 / size if square > 1e-60 else 0.0
    d0, d1, d2 = d0 * inverse, d1 * inverse, d2 * inverse
    e01, e02, e12 = m01 * inverse, m02 * inverse, m12 * inverse
    half = 0.5 * (d0 * (d1 * d2 - e12 * e12) - e01 * (e01 * d2 - e12 * e02) + e02 * (e01 * e12 - d1 * e02))
    side = 1.0 if half >= 0.0 else -1.0
    height = min(abs(half), 1.0)
    # x³ − 3x = 2·height with x from √3 to 2.
    x = 1.7320508075688772 + 0.2679491924311228 * height
    for _ in range(4):
        x -= (x * (x * x - 3.0) - 2.0 * height) / (3.0 * x * x - 3.0)
    alone = side * x
    a00, a01, a02, a11, a12, a22 = _adjugate(d0 - alone, e01, e02, d1 - alone, e12, d2 - alone)
    # What is left without the eigenvector that stands apart: ± half the distance of the other two.
    share, middle = 1.5 * alone / (a00 + a11 + a22), 0.5 * alone
    f00, f11, f22 = d0 + middle - share * a00, d1 + middle - share * a11, d2 + middle - share * a22
    f01, f02, f12 = e01 - share * a01, e02 - share * a02, e12 - share * a12
    apart = np.sqrt(0.5 * (f00 * f00 + f11 * f11 + f22 * f22) + f01 * f01 + f02 * f02 + f12 * f12)
    return mean + size * (alone if side > 0.0 else apart - middle)


@_compiled
def _rotations(w):  # type: ignore[no-untyped-def]
    """Replace H by R in every lane, with the margin of trust (NaN or negative: none) and the line ratio."""
    for i in range(LANES):
        b00, b01, b02 = w[i], w[LANES + i], w[2 * LANES + i]
        b10, b11, b12 = w[3 * LANES + i], w[4 * LANES + i], w[5 * LANES + i]
        b20, b21, b22 = w[6 * LANES + i], w[7 * LANES + i], w[8 * LANES + i]
        square = b00 * b00 + b01 * b01 + b02 * b02 + b10 * b10 + b11 * b11 + b12 * b12
        square += b20 * b20 + b21 * b21 + b22 * b22
        inverse = 1.0 / np.sqrt(square)
        bound = w[_BOUND * LANES + i] * inverse
        b00, b01, b02 = b00 * inverse, b01 * inverse, b02 * inverse
        b10, b11, b12 = b10 * inverse, b11 * inverse, b12 * inverse
        b20, b21, b22 = b20 * inverse, b21 * inverse, b22 * inverse
        # Cofactors.
        c00, c01, c02 = b11 * b22 - b12 * b21, b12 * b20 - b10 * b22, b10 * b21 - b11 * b20
        c10, c11, c12 = b02 * b21 - b01 * b22, b00 * b22 - b02 * b20, b01 * b20 - b00 * b21
        c20, c21, c22 = b01 * b12 - b02 * b11, b02 * b10 - b00 * b12, b00 * b11 - b01 * b10
        determinant = b00 * c00 + b01 * c01 + b02 * c02
        cofactors = c00 * c00 + c01 * c01 + c02 * c02 + c10 * c10 + c11 * c11 + c12 * c12
        cofactors += c20 * c20 + c21 * c21 + c22 * c22
        # The quartic (x² − 1)² − 8 det·x − 4 Σ cofactor², from a bound above its largest root.
        x = min(bound, 1.7320508075688772)
        for _ in range(NEWTON_STEPS):
            t = x * x - 1.0
            x -= (t * t - 8.0 * determinant * x - 4.0 * cofactors) / (4.0 * (x * t - 2.0 * determinant))
        kappa = 0.5 * (x * x - 1.0)
        scale = 1.0 / (kappa * x - determinant)
        # R = ((κ + 1)·B + x·cof(B) − B·BᵀB) / (κ·x − det B).
        p00 = kappa + 1.0 - (b00 * b00 + b10 * b10 + b20 * b20)
        p11 = kappa + 1.0 - (b01 * b01 + b11 * b11 + b21 * b21)
        p22 = kappa + 1.0 - (b02 * b02 + b12 * b12 + b22 * b22)
        p01 = b00 * b01 + b10 * b11 + b20 * b21
        p02 = b00 * b02 + b10 * b12 + b20 * b22
        p12 = b01 * b02 + b11 * b12 + b21 * b22
        r00 = scale * (b00 * p00 - b01 * p01 - b02 * p02 + x * c00)
        r01 = scale * (b01 * p11 - b00 * p01 - b02 * p12 + x * c01)
        r02 = scale * (b02 * p22 - b00 * p02 - b01 * p12 + x * c02)
        r10 = scale * (b10 * p00 - b11 * p01 - b12 * p02 + x * c10)
        r11 = scale * (b11 * p11 - b10 * p01 - b12 * p12 + x * c11)
        r12 = scale * (b12 * p22 - b10 * p02 - b11 * p12 + x * c12)
        r20 = scale * (b20 * p00 - b21 * p01 - b22 * p02 + x * c20)
        r21 = scale * (b21 * p11 - b20 * p01 - b22 * p12 + x * c21)
        r22 = scale * (b22 * p22 - b20 * p02 - b21 * p12 + x * c22)
        # Orthonormal: R ← R·(3 − RᵀR)/2.
        g00 = 0.5 - 0.5 * (r00 * r00 + r10 * r10 + r20 * r20)
        g11 = 0.5 - 0.5 * (r01 * r01 + r11 * r11 + r21 * r21)
        g22 = 0.5 - 0.5 * (r02 * r02 + r12 * r12 + r22 * r22)
        g01 = -0.5 * (r00 * r01 + r10 * r11 + r20 * r21)
        g02 = -0.5 * (r00 * r02 + r10 * r12 + r20 * r22)
        g12 = -0.5 * (r01 * r02 + r11 * r12 + r21 * r22)
        correction = abs(g00) + abs(g11) + abs(g22) + abs(g01) + abs(g02) + abs(g12)
        r00, r01, r02 = (
            r00 + (r00 * g00 + r01 * g01 + r02 * g02),
            r01 + (r00 * g01 + r01 * g11 + r02 * g12),
            r02 + (r00 * g02 + r01 * g12 + r02 * g22),
        )
        r10, r11, r12 = (
            r10 + (r10 * g00 + r11 * g01 + r12 * g02),
            r11 + (r10 * g01 + r11 * g11 + r12 * g12),
            r12 + (r10 * g02 + r11 * g12 + r12 * g22),
        )
        r20, r21, r22 = (
            r20 + (r20 * g00 + r21 * g01 + r22 * g02),
            r21 + (r20 * g01 + r21 * g11 + r22 * g12),
            r22 + (r20 * g02 + r21 * g12 + r22 * g22),
        )
        # M = RᵀB, symmetric at the optimum.
        m00, m11 = r00 * b00 + r10 * b10 + r20 * b20, r01 * b01 + r11 * b11 + r21 * b21
        m22 = r02 * b02 + r12 * b12 + r22 * b22
        m01, m10 = r00 * b01 + r10 * b11 + r20 * b21, r01 * b00 + r11 * b10 + r21 * b20
        m02, m20 = r00 * b02 + r10 * b12 + r20 * b22, r02 * b00 + r12 * b10 + r22 * b20
        m12, m21 = r01 * b02 + r11 * b12 + r21 * b22, r02 * b01 + r12 * b11 + r22 * b21
        v0, v1, v2 = m21 - m12, m02 - m20, m10 - m01
        m01, m02, m12 = 0.5 * (m01 + m10), 0.5 * (m02 + m20), 0.5 * (m12 + m21)
        h00, h11, h22 = m11 + m22, m00 + m22, m00 + m11
        a00, a01, a02, a11, a12, a22 = _adjugate(h00, -m01, -m02, h11, -m12, h22)
        scale = 1.0 / (h00 * a00 - m01 * a01 - m02 * a02)
        turn0 = scale * (a00 * v0 + a01 * v1 + a02 * v2)
        turn1 = scale * (a01 * v0 + a11 * v1 + a12 * v2)
        turn2 = scale * (a02 * v0 + a12 * v1 + a22 * v2)
        correction += abs(turn0) + abs(turn1) + abs(turn2)
        w[i] = r00 + (r01 * turn2 - r02 * turn1)
        w[LANES + i] = r01 + (r02 * turn0 - r00 * turn2)
        w[2 * LANES + i] = r02 + (r00 * turn1 - r01 * turn0)
        w[3 * LANES + i] = r10 + (r11 * turn2 - r12 * turn1)
        w[4 * LANES + i] = r11 + (r12 * turn0 - r10 * turn2)
        w[5 * LANES + i] = r12 + (r10 * turn1 - r11 * turn0)
        w[6 * LANES + i] = r20 + (r21 * turn2 - r22 * turn1)
        w[7 * LANES + i] = r21 + (r22 * turn0 - r20 * turn2)
        w[8 * LANES + i] = r22 + (r20 * turn1 - r21 * turn0)
        largest = _largest_eigenvalue(m00, m01, m02, m11, m12, m22)
        ratio = (m00 + m11 + m22 - largest) / largest
        sound = (correction < LARGEST_CORRECTION) & (square > _SMALLEST_SQUARE) & (square < _LARGEST_SQUARE)
        w[_MARGIN * LANES + i] = ratio / bound if sound else -1.0
        w[_RATIO * LANES + i] = np.sqrt(ratio) if ratio > 0.0 else 0.0


@_inlined
def _unit_covariance(centred, mean, count, out):  # type: ignore[no-untyped-def]
    """Write the 6×6 (JᵀJ)⁻¹ of one frame: `sta_prior.rigid.singular` has the formula."""
    s00 = s01 = s02 = s11 = s12 = s22 = 0.0
    for j in range(centred.shape[0]):
        a0, a1, a2 = centred[j, 0], centred[j, 1], centred[j, 2]
        s00, s01, s02 = s00 + a0 * a0, s01 + a0 * a1, s02 + a0 * a2
        s11, s12, s22 = s11 + a1 * a1, s12 + a1 * a2, s22 + a2 * a2
    # Inverse of the information about the centroid by its factors L·D·Lᵀ.
    pivot0 = s11 + s22
    l10, l20 = -s01 / pivot0, -s02 / pivot0
    pivot1 = s00 + s22 + l10 * s01
    l21 = (-s12 + l10 * s02) / pivot1
    pivot2 = s00 + s11 + l20 * s02 - l21 * l21 * pivot1
    k20, k21 = l10 * l21 - l20, -l21
    v22 = 1.0 / pivot2
    v12, v02 = k21 * v22, k20 * v22
    v11 = 1.0 / pivot1 + k21 * v12
    v01 = -l10 / pivot1 + k20 * v12
    v00 = 1.0 / pivot0 + l10 * l10 / pivot1 + k20 * v02
    out[0, 0], out[0, 1], out[0, 2] = v00, v01, v02
    out[1, 0], out[1, 1], out[1, 2] = v01, v11, v12
    out[2, 0], out[2, 1], out[2, 2] = v02, v12, v22
    for k in range(3):
        out[3, k] = mean[1] * out[2, k] - mean[2] * out[1, k]
        out[4, k] = mean[2] * out[0, k] - mean[0] * out[2, k]
        out[5, k] = mean[0] * out[1, k] - mean[1] * out[0, k]
        for n in range(3, 6):
            out[k, n] = out[n, k]
    for k in range(3, 6):
        out[k, 3] = out[k, 2] * mean[1] - out[k, 1] * mean[2]
        out[k, 4] = out[k, 0] * mean[2] - out[k, 2] * mean[0]
        out[k, 5] = out[k, 1] * mean[0] - out[k, 0] * mean[1]
    for k in range(3, 6):
        for n in range(3, k):
            out[k, n] = out[n, k] = 0.5 * (out[k, n] + out[n, k])
        out[k, k] += 1.0 / count


@_inlined
def _gather(reference, points, source, target, hidden, means):  # type: ignore[no-untyped-def]
    """Centre the markers seen, 0 where hidden; their number, −1 where a coordinate is infinite."""
    count = 0
    a0 = a1 = a2 = b0 = b1 = b2 = 0.0
    for j in range(points.shape[0]):
        p0, p1, p2 = reference[j, 0], reference[j, 1], reference[j, 2]
        q0, q1, q2 = points[j, 0], points[j, 1], points[j, 2]
        total = (p0 + p1 + p2) + (q0 + q1 + q2)
        hidden[j] = False
        if not np.isfinite(total):
            if np.isinf(p0) or np.isinf(p1) or np.isinf(p2) or np.isinf(q0) or np.isinf(q1) or np.isinf(q2):
                return -1
            hidden[j] = p0 != p0 or p1 != p1 or p2 != p2 or q0 != q0 or q1 != q1 or q2 != q2
        if not hidden[j]:
            count += 1
            a0, a1, a2 = a0 + p0, a1 + p1, a2 + p2
            b0, b1, b2 = b0 + q0, b1 + q1, b2 + q2
    share = 1.0 / max(count, 1)
    a0, a1, a2, b0, b1, b2 = a0 * share, a1 * share, a2 * share, b0 * share, b1 * share, b2 * share
    means[0], means[1], means[2], means[3], means[4], means[5] = a0, a1, a2, b0, b1, b2
    for j in range(points.shape[0]):
        if hidden[j]:
            source[j, :] = 0.0
            target[j, :] = 0.0
        else:
            p0, p1, p2 = reference[j, 0] - a0, reference[j, 1] - a1, reference[j, 2] - a2
            source[j, 0], source[j, 1], source[j, 2] = p0, p1, p2
            target[j, 0], target[j, 1], target[j, 2] = points[j, 0] - b0, points[j, 1] - b1, points[j, 2] - b2
    return count


@_inlined
def _cross_moments(source, target, w, i):  # type: ignore[no-untyped-def]
    """Write H = Σ b aᵀ and √(Σa²·Σb²) of one frame into its lane."""
    h00 = h01 = h02 = h10 = h11 = h12 = h20 = h21 = h22 = 0.0
    size_a = size_b = 0.0
    for j in range(source.shape[0]):
        a0, a1, a2 = source[j, 0], source[j, 1], source[j, 2]
        b0, b1, b2 = target[j, 0], target[j, 1], target[j, 2]
        size_a += a0 * a0 + a1 * a1 + a2 * a2
        size_b += b0 * b0 + b1 * b1 + b2 * b2
        h00, h01, h02 = h00 + b0 * a0, h01 + b0 * a1, h02 + b0 * a2
        h10, h11, h12 = h10 + b1 * a0, h11 + b1 * a1, h12 + b1 * a2
        h20, h21, h22 = h20 + b2 * a0, h21 + b2 * a1, h22 + b2 * a2
    w[i], w[LANES + i], w[2 * LANES + i] = h00, h01, h02
    w[3 * LANES + i], w[4 * LANES + i], w[5 * LANES + i] = h10, h11, h12
    w[6 * LANES + i], w[7 * LANES + i], w[8 * LANES + i] = h20, h21, h22
    w[_BOUND * LANES + i] = np.sqrt(size_a * size_b)


@_inlined
def _write_pose(r, means, pose):  # type: ignore[no-untyped-def]
    """Write the 4×4 pose of one frame from its nine rotation entries."""
    for k in range(3):
        for n in range(3):
            pose[k, n] = r[3 * k + n]
        pose[k, 3] = means[3 + k] - (r[3 * k] * means[0] + r[3 * k + 1] * means[1] + r[3 * k + 2] * means[2])
    pose[3, 0], pose[3, 1], pose[3, 2], pose[3, 3] = 0.0, 0.0, 0.0, 1.0


@njit(_SIGNATURE, cache=True, nogil=True, error_model="numpy")
def fit_frames(
    reference: FloatArray,
    points: FloatArray,
    minimum_line_ratio: float,
    pose: FloatArray,
    spread: FloatArray,
    determined: BoolArray,
    line_ratio: FloatArray,
    doubtful: BoolArray,
    residual: FloatArray,
    unit_covariance: FloatArray,
) -> bool:
    """Fit every frame that can be trusted to the closed form; False if any value is infinite.

    Parameters
    ----------
    reference : shape (1 or F, m, 3), m, bone frame; NaN unknown
    points : shape (F, m, 3), m, lab frame; NaN hidden
    minimum_line_ratio : unitless
    pose, spread, determined, line_ratio : shapes (F, 4, 4), (F,), (F,), (F,)
        Written; units and NaN as in `PoseFit`.
    doubtful : shape (F,)
        Written: frames left to the singular values, nothing else of which is written.
    residual, unit_covariance : shapes (F, m, 3) and (F, 6, 6), written; or no frames: not wanted
    """
    frames, markers = points.shape[0], points.shape[1]
    shared, full = reference.shape[0] == 1, residual.shape[0] > 0
    w, r = np.zeros(_ROWS * LANES), np.empty(9)
    source, target = np.empty((LANES, markers, 3)), np.empty((LANES, markers, 3))
    hidden, means = np.zeros((LANES, markers), dtype=np.bool_), np.empty((LANES, 6))
    counts, kept = np.zeros(LANES, dtype=np.int64), np.empty((6, 6))
    # The unit covariance follows from the reference and who is hidden: mostly it is that of the frame before.
    kept_hidden, is_kept = np.zeros(markers, dtype=np.bool_), False
    for first in range(0, frames, LANES):
        lanes = min(LANES, frames - first)
        for i in range(lanes):
            f = first + i
            counts[i] = _gather(
                reference[0 if shared else f], points[f], source[i], target[i], hidden[i], means[i]
            )
            if counts[i] < 0:
                return False
            _cross_moments(source[i], target[i], w, i)
        _rotations(w)
        for i in range(lanes):
            f, count = first + i, counts[i]
            # One marker, or none, is no cluster and has no line: nothing to ask the singular values.
            alone = count < 2
            ratio = 0.0 if alone else w[_RATIO * LANES + i]
            near = abs(ratio - minimum_line_ratio) <= THRESHOLD_BAND * minimum_line_ratio
            unsafe = count < 3 or near or not w[_MARGIN * LANES + i] > SMALLEST_MARGIN
            doubtful[f] = unsafe and not alone
            if doubtful[f]:
                continue
            line_ratio[f] = ratio
            determined[f] = not alone and ratio >= minimum_line_ratio
            if not determined[f]:
                pose[f, :, :] = np.nan
                spread[f] = np.nan
                if full:
                    residual[f, :, :] = np.nan
                    unit_covariance[f, :, :] = np.nan
                continue
            for k in range(9):
                r[k] = w[k * LANES + i]
            _write_pose(r, means[i], pose[f])
            total = 0.0
            for j in range(markers):
                a0, a1, a2 = source[i, j, 0], source[i, j, 1], source[i, j, 2]
                e0 = target[i, j, 0] - (r[0] * a0 + r[1] * a1 + r[2] * a2)
                e1 = target[i, j, 1] - (r[3] * a0 + r[4] * a1 + r[5] * a2)
                e2 = target[i, j, 2] - (r[6] * a0 + r[7] * a1 + r[8] * a2)
                total += e0 * e0 + e1 * e1 + e2 * e2
                if full:
                    mark = np.nan if hidden[i, j] else 0.0
                    residual[f, j, 0], residual[f, j, 1], residual[f, j, 2] = e0 + mark, e1 + mark, e2 + mark
            spread[f] = np.sqrt(total / max(3 * count - 6, 1))
            if full:
                same = is_kept and shared
                for j in range(markers):
                    same = same and kept_hidden[j] == hidden[i, j]
                if not same:
                    _unit_covariance(source[i], means[i], count, kept)
                    kept_hidden[:] = hidden[i]
                    is_kept = True
                unit_covariance[f, :, :] = kept
    return True

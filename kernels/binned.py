"""Bin moments into kernel sums.

A kernel sum G = sum_i a_i g(u_i), with g(u) = K(u) u^j or K(u)^2 u^j and u_i = (x_i - x) / h, is
taken bin by bin. Inside a bin g is replaced by its quadratic least-squares fit over the bin
(Legendre polynomials of degree 0 to 2 in v), so that the bin's sums of a, a v and a v^2 give the
bin's share. Where the kernel has its kink or jump inside a bin, the fit is taken over the covered
part: exact for any density that is quadratic within the bin. Sources: moment corrections to
binned sums, Hall & Wand (1996, J. Multivariate Analysis 56:165); Gonzalez-Manteiga,
Sanchez-Sellero & Wand (1996, Comput. Stat. Data Anal. 22:1); the least-squares fit in place of
their Taylor terms is ours (half the error on smooth designs, and a bounded one at kinks).

All lengths are in bin widths: `bandwidth` is h / width, `points` are (x - origin) / width.
A set of bin moments is an array (3, bins): sums of a, a v, a v^2. Empty bins hold zeros.
"""

import numpy as np

from .compiled import READ_1D, READ_2D, READ_3D, WRITE_2D, WRITE_3D, helper, kernel, types
from .shapes import (
    BIWEIGHT,
    EPANECHNIKOV,
    GAUSSIAN,
    GAUSSIAN_SUPPORT,
    TRIANGULAR,
    TRICUBE,
    TRIWEIGHT,
    UNIFORM,
)

# Gauss-Legendre rules on [-1/2, 1/2]. Eight nodes are exact to degree 15, which covers every
# K u^j times a quadratic; four suffice in whole bins of a smooth kernel (error below 1e-12 at
# 16 bins a bandwidth).
_NODES_8, _WEIGHTS_8 = np.polynomial.legendre.leggauss(8)
_NODES_8, _WEIGHTS_8 = _NODES_8 / 2.0, _WEIGHTS_8 / 2.0
_NODES_4, _WEIGHTS_4 = np.polynomial.legendre.leggauss(4)
_NODES_4, _WEIGHTS_4 = _NODES_4 / 2.0, _WEIGHTS_4 / 2.0
_GAUSSIAN_PEAK = 1.0 / np.sqrt(2.0 * np.pi)
_BLOCK = 1024  # bins worked on at a time: inputs and outputs stay in the first-level cache

# Rows of the output of `point_sums`.
S, T, V, U, DS, DT = 0, 5, 8, 13, 18, 19
POINT_ROWS = 20
# A bin whose rows all lie within this share of its width (squared) is summed at their place.
_POINT_MASS = 1e-9


@helper
def kernel_value(code, u):
    """K(u) for u within the support."""
    distance = abs(u)
    if code == BIWEIGHT:
        return 0.9375 * (1.0 - u * u) ** 2
    if code == EPANECHNIKOV:
        return 0.75 * (1.0 - u * u)
    if code == TRIWEIGHT:
        return 1.09375 * (1.0 - u * u) ** 3
    if code == TRICUBE:
        return 70.0 / 81.0 * (1.0 - distance * distance * distance) ** 3
    if code == TRIANGULAR:
        return 1.0 - distance
    if code == UNIFORM:
        return 0.5
    return _GAUSSIAN_PEAK * np.exp(-0.5 * u * u)


@helper
def kernel_slope(code, u):
    """K'(u) for u within the support; 0 for the uniform kernel, whose jumps have no slope."""
    distance = abs(u)
    if code == BIWEIGHT:
        return -3.75 * u * (1.0 - u * u)
    if code == EPANECHNIKOV:
        return -1.5 * u
    if code == TRIWEIGHT:
        return -6.5625 * u * (1.0 - u * u) ** 2
    if code == TRICUBE:
        return -70.0 / 9.0 * u * distance * (1.0 - distance * distance * distance) ** 2
    if code == TRIANGULAR:
        return -np.sign(u)
    if code == UNIFORM:
        return 0.0
    return -u * _GAUSSIAN_PEAK * np.exp(-0.5 * u * u)


@kernel(types.void(types.int64, types.float64, types.int64, WRITE_3D))
def fill_stencil(code, bandwidth, power, out):
    """Weights of bin moments at bin distance k in sums of K^power u^j, seen from a bin's centre.

    out[j, q, k] multiplies the q-th moment of the bin k to the right; the bin k to the left has
    the same weight times (-1)^(j + q). Shape (powers of u, 3, bins to the right including own).
    """
    support = GAUSSIAN_SUPPORT if code == GAUSSIAN else 1.0
    out[:] = 0.0
    for k in range(out.shape[2]):
        low = k - 0.5
        high = min(k + 0.5, support * bandwidth)
        # Kernels in |u| have a kink at u = 0, in the middle of the own bin: two pieces there.
        pieces = 2 if k == 0 else 1
        if k == 0:
            low = -high
        if high <= low:
            continue
        length = (high - low) / pieces
        for piece in range(pieces):
            middle = low + (piece + 0.5) * length
            for node in range(8):
                t = middle + length * _NODES_8[node]
                u = t / bandwidth
                v = t - k
                g = kernel_value(code, u)
                if power == 2:
                    g *= g
                g *= _WEIGHTS_8[node] * length
                curved = 180.0 * (v * v - 1.0 / 12.0)
                for j in range(out.shape[0]):
                    out[j, 0, k] += g * (1.0 - curved / 12.0)
                    out[j, 1, k] += g * 12.0 * v
                    out[j, 2, k] += g * curved
                    g *= u


@kernel(types.void(READ_2D, READ_3D, WRITE_2D))
def bin_sums(padded, stencil, out):
    """Kernel sums seen from every bin centre.

    out[j, b] = sum over k of stencil[j, q, |k|] (+-1) moment_q[b + k]. `padded` (3, bins + 2 reach)
    are bin moments with `reach` zero bins on both sides; `stencil` (powers, 3, reach + 1);
    `out` (powers, bins).
    """
    reach = stencil.shape[2] - 1
    bins = out.shape[1]
    out[:] = 0.0
    for start in range(0, bins, _BLOCK):
        size = min(_BLOCK, bins - start)
        here = start + reach
        for j in range(out.shape[0]):
            # Moments of even j + q are added left to right, of odd j + q subtracted.
            even = 1.0 if j % 2 == 0 else -1.0
            total = out[j, start : start + size]
            c0 = stencil[j, 0, 0]
            c1 = stencil[j, 1, 0]
            c2 = stencil[j, 2, 0]
            a0 = padded[0, here : here + size]
            a1 = padded[1, here : here + size]
            a2 = padded[2, here : here + size]
            for b in range(size):
                total[b] = c0 * a0[b] + c1 * a1[b] + c2 * a2[b]
            for k in range(1, reach + 1):
                c0 = stencil[j, 0, k]
                c1 = stencil[j, 1, k]
                c2 = stencil[j, 2, k]
                d0 = even * c0
                d1 = -even * c1
                d2 = even * c2
                r0 = padded[0, here + k : here + k + size]
                r1 = padded[1, here + k : here + k + size]
                r2 = padded[2, here + k : here + k + size]
                l0 = padded[0, here - k : here - k + size]
                l1 = padded[1, here - k : here - k + size]
                l2 = padded[2, here - k : here - k + size]
                for b in range(size):
                    total[b] += (
                        c0 * r0[b] + d0 * l0[b] + c1 * r1[b] + d1 * l1[b] + c2 * r2[b] + d2 * l2[b]
                    )


@helper
def _add_node(out, p, code, u, share_s, share_t, share_v, share_u):
    """Add one place u, carrying these shares of the bin's sums, to all the sums of point p."""
    k = kernel_value(code, u)
    d = kernel_slope(code, u)
    g = k * share_s
    out[S, p] += g
    out[S + 1, p] += g * u
    out[S + 2, p] += g * u * u
    out[S + 3, p] += g * u * u * u
    out[S + 4, p] += g * u * u * u * u
    g = k * share_t
    out[T, p] += g
    out[T + 1, p] += g * u
    out[T + 2, p] += g * u * u
    g = k * k * share_v
    out[V, p] += g
    out[V + 1, p] += g * u
    out[V + 2, p] += g * u * u
    out[V + 3, p] += g * u * u * u
    out[V + 4, p] += g * u * u * u * u
    g = k * k * share_u
    out[U, p] += g
    out[U + 1, p] += g * u
    out[U + 2, p] += g * u * u
    out[U + 3, p] += g * u * u * u
    out[U + 4, p] += g * u * u * u * u
    out[DS, p] += d * share_s
    out[DT, p] += d * share_t


@kernel(
    types.void(
        types.int64, types.float64, READ_1D, READ_2D, READ_2D, READ_2D, READ_2D, WRITE_2D
    )
)  # fmt: skip
def point_sums(code, bandwidth, points, weight, response, variance, squares, out):
    """All kernel sums that a local fit needs, at any points.

    `points` (p,) in bin widths from the table's origin; four sets of bin moments (3, bins):
    weights w, responses w y, w sigma^2 (for the standard error), and w^2 (for effective rows).
    `out` (POINT_ROWS, p), rows: S_0..S_4 = sum w K u^j; T_0..T_2 = sum w y K u^j;
    V_0..V_4 = sum w sigma^2 K^2 u^j; U_0..U_4 = sum w^2 K^2 u^j; and sum w K', sum w y K'
    (Wand & Jones 1995, section 5.2 for the sums). Empty windows give zeros.
    """
    support = GAUSSIAN_SUPPORT if code == GAUSSIAN else 1.0
    bins = weight.shape[1]
    reach = support * bandwidth
    out[:] = 0.0
    for p in range(points.shape[0]):
        x = points[p]
        first = max(0, int(np.floor(x - reach)))
        last = min(bins - 1, int(np.floor(x + reach)))
        for b in range(first, last + 1):
            n = weight[0, b]
            if n == 0.0:
                continue
            centre = b + 0.5
            mean = weight[1, b] / n
            if weight[2, b] / n - mean * mean < _POINT_MASS:
                # All rows of the bin at one place (rounded readings): no fit, their very place.
                u = (centre + mean - x) / bandwidth
                if abs(u) <= support:
                    _add_node(out, p, code, u, n, response[0, b], variance[0, b], squares[0, b])
                continue
            low = max(centre - 0.5, x - reach)
            high = min(centre + 0.5, x + reach)
            whole = high - low > 1.0 - 1e-12
            split = low < x < high
            for piece in range(2 if split else 1):
                left = low if piece == 0 else x
                right = x if split and piece == 0 else high
                length = right - left
                nodes = 4 if whole and not split and bandwidth >= 16.0 else 8
                for node in range(nodes):
                    if nodes == 4:
                        place = _NODES_4[node]
                        share = _WEIGHTS_4[node] * length
                    else:
                        place = _NODES_8[node]
                        share = _WEIGHTS_8[node] * length
                    t = 0.5 * (left + right) + length * place
                    v = t - centre
                    curved = 180.0 * (v * v - 1.0 / 12.0)
                    q0 = share * (1.0 - curved / 12.0)
                    q1 = share * 12.0 * v
                    q2 = share * curved
                    _add_node(
                        out, p, code, (t - x) / bandwidth,
                        q0 * n + q1 * weight[1, b] + q2 * weight[2, b],
                        q0 * response[0, b] + q1 * response[1, b] + q2 * response[2, b],
                        q0 * variance[0, b] + q1 * variance[1, b] + q2 * variance[2, b],
                        q0 * squares[0, b] + q1 * squares[1, b] + q2 * squares[2, b],
                    )  # fmt: skip

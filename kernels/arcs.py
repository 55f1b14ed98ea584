"""How far the weights of a linear smoother turn from one point to the next."""

import numpy as np

from .binned import kernel_value
from .compiled import READ_1D, READ_2D, WRITE_1D, kernel, types
from .shapes import GAUSSIAN

# Beyond so many standard deviations the Gaussian's weights add nothing to an angle.
_GAUSSIAN_REACH = 5.0


@kernel(types.void(types.int64, types.float64, READ_1D, READ_2D, READ_1D, WRITE_1D))
def weight_chords(code, bandwidth, points, coefficients, mass, out):
    """Chords between the unit weight vectors of neighbouring points.

    Row i has weight l_i(x) = K(u) (c_0 + c_1 u + c_2 u^2); with T(x) = l(x) / ||l(x)||,
    out[k] = ||T(x_{k+1}) - T(x_k)|| (Sun & Loader 1994, Ann. Stat. 22:1328). Norms and products
    are sums over bins of `mass` (bins,), the bins' variance times weight, taken at bin centres.
    `points` (n,) ascending, in bins; `coefficients` (3, n); `out` (n - 1,). A point whose window
    is empty gives NaN.
    """
    support = _GAUSSIAN_REACH if code == GAUSSIAN else 1.0
    reach = support * bandwidth
    bins = mass.shape[0]
    for k in range(points.shape[0] - 1):
        left = points[k]
        right = points[k + 1]
        first = max(0, int(np.floor(left - reach)))
        last = min(bins - 1, int(np.floor(right + reach)))
        own = 0.0
        other = 0.0
        both = 0.0
        for b in range(first, last + 1):
            if mass[b] == 0.0:
                continue
            u = (b + 0.5 - left) / bandwidth
            v = (b + 0.5 - right) / bandwidth
            a = 0.0
            c = 0.0
            if abs(u) <= support:
                a = kernel_value(code, u) * (
                    coefficients[0, k] + u * (coefficients[1, k] + u * coefficients[2, k])
                )
            if abs(v) <= support:
                c = kernel_value(code, v) * (
                    coefficients[0, k + 1]
                    + v * (coefficients[1, k + 1] + v * coefficients[2, k + 1])
                )
            own += mass[b] * a * a
            other += mass[b] * c * c
            both += mass[b] * a * c
        cosine = both / np.sqrt(own * other)
        out[k] = np.sqrt(max(0.0, 2.0 - 2.0 * cosine))

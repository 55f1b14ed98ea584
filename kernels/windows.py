"""Sorted rows into kernel sums over windows, exactly: the sums of every row at every row.

For rows sorted by x, a bandwidth h and a kernel that is a polynomial in |u| on [-1, 1],

    S_j(i) = sum_r c w K(u) u^j,   T_j(i) = sum_r c w y K(u) u^j,   u = (x_r - x_i) / h,

over the window |x_r - x_i| <= h (differences as rounded, so that r is in the window of i exactly
when i is in the window of r). c is how many equal rows a row stands for, w its precision. Cost
per row does not depend on h, and no sum is ever subtracted from another: what lies outside a
window has no part in it, to the last bit.

How: rows are taken in cells, a cell being the rows up to h above its first row. Every window of
a cell's rows is then a stretch that ends where the cell begins, the whole cell, and a stretch
that begins where the cell ends; the two stretches are growing sums (an *arm*: so many rows
counted from an origin), tabulated a block at a time from checkpoints. The power sums are taken
about one row amid the cell and moved to x_i by the binomial theorem. Kernels in |u| take the
rows left and right of x_i apart: two arms each, all from the cell's two ends. Where windows hold
few rows, they are summed row by row. Sources: moving-window sums for polynomial kernels, Gasser &
Kneip (1989, Ann. Stat. 17:532); Seifert, Brockmann, Engel & Gasser (1994, JCGS 3:192); Fan &
Marron (1994, JCGS 3:35). Cells in place of their updating sums are ours.

Parallel work is the caller's: every kernel takes a range of rows. A row's sums depend on where
its range begins (in the last digits), so fix the ranges before the number of threads.

Common parameters: `x` (n,) ascending and finite, `y` (n,) finite, best less a common reference;
`weight` (n,) c w, or (0,) when all are 1; `bandwidth` h > 0, and 1 / h finite;
`coefficients` (degree + 1,), K(u) = sum_q coefficients[q] |u|^q; `begin`, `end` the rows wanted.
"""

from .cells import _SLOTS, fill_sums, make_work
from .compiled import READ_1D, WRITE_1D, WRITE_2D, kernel, types

@kernel(
    types.void(READ_1D, READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64,
               types.int64, WRITE_2D)
)  # fmt: skip
def window_sums(x, y, weight, coefficients, bandwidth, degree, begin, end, out):
    """Kernel sums at rows begin to end for a local polynomial: S_0..S_2p, then T_0..T_p.

    `degree` p is 0 to 3; `out` (3 p + 2, end - begin). No window is empty: it holds its own row.
    """
    if end <= begin:
        return
    arms, segments, places, centres, terms, carries, tables, moments, sums = make_work(
        x.shape[0], coefficients, degree
    )
    for first in range(begin, end, _SLOTS):
        count = min(_SLOTS, end - first)
        fill_sums(
            x, y, weight, coefficients, bandwidth, degree, first, count,
            arms, segments, places, centres, terms, carries, tables, moments, sums,
        )  # fmt: skip
        for j in range(3 * degree + 2):
            for k in range(count):
                out[j, first - begin + k] = sums[j, k]

"""Neighbouring bins merged two into one, exactly: the levels of a table.

With a bin of twice the width, v' = (v + s) / 2 where s = -1/2 for the left and +1/2 for the right
of the pair, and e' = e + shift where shift = pilot - new pilot. Every sum of the pair follows by
the binomial theorem, without subtraction of large sums (Chan, Golub & LeVeque 1983, Am. Stat.
37:242, for the shift).
"""

from .compiled import READ_1D, READ_2D, WRITE_1D, WRITE_2D, kernel, types


@kernel(types.void(READ_2D, READ_1D, WRITE_1D))
def coarsen_pilot(first, pilot, out):
    """Pilot of each pair: the mean of the two weighted by their rows; plain mean when empty.

    `first` (7, bins) with sums of w in row 0; `pilot` (bins,); `out` (bins / 2,).
    """
    for b in range(out.shape[0]):
        left = first[0, 2 * b]
        right = first[0, 2 * b + 1]
        share = right / (left + right) if left + right > 0.0 else 0.5
        out[b] = pilot[2 * b] + share * (pilot[2 * b + 1] - pilot[2 * b])


@kernel(types.void(READ_2D, READ_1D, READ_1D, WRITE_2D))
def coarsen_first(first, pilot, new_pilot, out):
    """Merge pairs of bins of sums of w (1, v, v^2, e, v e, v^2 e, e^2): (7, bins) to half."""
    out[:] = 0.0
    for b in range(out.shape[1]):
        for side in range(2):
            old = 2 * b + side
            n = first[0, old]
            if n == 0.0:
                continue
            s = side - 0.5
            d = pilot[old] - new_pilot[b]
            v1 = first[1, old]
            v2 = first[2, old]
            e0 = first[3, old] + d * n
            e1 = first[4, old] + d * v1
            e2 = first[5, old] + d * v2
            out[0, b] += n
            out[1, b] += 0.5 * (v1 + s * n)
            out[2, b] += 0.25 * (v2 + 2.0 * s * v1 + s * s * n)
            out[3, b] += e0
            out[4, b] += 0.5 * (e1 + s * e0)
            out[5, b] += 0.25 * (e2 + 2.0 * s * e1 + s * s * e0)
            out[6, b] += first[6, old] + 2.0 * d * first[3, old] + d * d * n


@kernel(types.void(READ_2D, READ_1D, READ_1D, WRITE_2D))
def coarsen_second(second, pilot, new_pilot, out):
    """Merge pairs of bins of sums of w^2 (1, v, v^2, e, v e, e^2): (6, bins) to half."""
    out[:] = 0.0
    for b in range(out.shape[1]):
        for side in range(2):
            old = 2 * b + side
            n = second[0, old]
            if n == 0.0:
                continue
            s = side - 0.5
            d = pilot[old] - new_pilot[b]
            v1 = second[1, old]
            e0 = second[3, old] + d * n
            out[0, b] += n
            out[1, b] += 0.5 * (v1 + s * n)
            out[2, b] += 0.25 * (second[2, old] + 2.0 * s * v1 + s * s * n)
            out[3, b] += e0
            out[4, b] += 0.5 * (second[4, old] + d * v1 + s * e0)
            out[5, b] += second[5, old] + 2.0 * d * second[3, old] + d * d * n

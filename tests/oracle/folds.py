"""Leaving out folds for real: rows are taken out and everything is fitted again, by plain loops."""

import math

from tests.oracle.local import KERNELS, fit_at


def without(rows, folds, fold):
    """The rows of all other folds."""
    return [row for row, own in zip(rows, folds, strict=True) if own != fold]


def leave_block_out(x, y, folds, h, kernel, degree):
    """Mean of (y_i - prediction from all other folds)^2.

    Rows that the others' windows do not reach make it infinite.
    """
    terms = []
    for fold in sorted(set(folds)):
        others_x, others_y = without(x, folds, fold), without(y, folds, fold)
        for at, seen, own in zip(x, y, folds, strict=True):
            if own == fold:
                fit = fit_at(at, others_x, others_y, h, kernel, degree)
                if fit is None:
                    return math.inf
                terms.append((seen - fit.value) ** 2)
    return math.fsum(terms) / len(terms)


def scores_per_fold(x, y, folds, h, kernel, degree):
    """Sum of (y_i - prediction from all other folds)^2 over the rows of each fold."""
    sums = {}
    for fold in sorted(set(folds)):
        others_x, others_y = without(x, folds, fold), without(y, folds, fold)
        sums[fold] = math.fsum(
            (seen - fit_at(at, others_x, others_y, h, kernel, degree).value) ** 2
            for at, seen, own in zip(x, y, folds, strict=True)
            if own == fold
        )
    return sums


def paired_error(differences, shares):
    """sqrt(G / (G - 1) sum (d_g - share_g sum d)^2)."""
    folds, total = len(differences), math.fsum(differences)
    away = [d - share * total for d, share in zip(differences, shares, strict=True)]
    return math.sqrt(folds / (folds - 1) * math.fsum(one * one for one in away))


def jackknife_error(at, x, y, folds, h, kernel, degree):
    """Delete-a-group jackknife error of a fit at one place (Kott 2001).

    sqrt((G - 1) / G sum (m_without - m)^2) over the G folds with rows in the window.
    """
    k = KERNELS[kernel]
    inside = {own for one, own in zip(x, folds, strict=True) if k((one - at) / h) > 0.0}
    whole = fit_at(at, x, y, h, kernel, degree).value
    squares = []
    for fold in sorted(inside):
        left = fit_at(at, without(x, folds, fold), without(y, folds, fold), h, kernel, degree)
        squares.append((left.value - whole) ** 2)
    met = len(inside)
    return math.sqrt((met - 1) / met * math.fsum(squares))

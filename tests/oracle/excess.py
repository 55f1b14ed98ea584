"""Excess and its error row by row, in plain loops."""

import math


def excess(x, y, folds, baseline, deviations):
    """Sum of y less the baseline, and both variances.

    `baseline` gives the expected y at x; `deviations` maps a fold of the baseline to what gives
    the change of the expected y when that fold is left out.
    """
    residuals = [b - baseline(a) for a, b in zip(x, y, strict=True)]
    n = len(residuals)
    amount = math.fsum(residuals)
    middle = math.fsum(x) / n
    squares = math.fsum((a - middle) ** 2 for a in x)
    products = math.fsum((a - middle) * r for a, r in zip(x, residuals, strict=True))
    slope = products / squares if squares > 0.0 else 0.0
    around = [r - amount / n - slope * (a - middle) for a, r in zip(x, residuals, strict=True)]
    sums = {}
    for fold, r in zip(folds, around, strict=True):
        sums[fold] = sums.get(fold, 0.0) + r
    groups = len(sums)
    now = groups / (groups - 2) * math.fsum(v * v for v in sums.values())
    moved = {fold: math.fsum(dev(a) for a in x) for fold, dev in deviations.items()}
    base = (len(moved) - 1) / len(moved) * math.fsum(d * d for d in moved.values())
    both = 0.0
    for fold in set(sums) | set(moved):
        v = sums.get(fold, 0.0) * math.sqrt(groups / (groups - 2))
        d = moved.get(fold, 0.0) * math.sqrt((len(moved) - 1) / len(moved))
        both += (v + d) ** 2
    return {
        "amount": amount,
        "expected": math.fsum(baseline(a) for a in x),
        "now_variance": now,
        "base_variance": base,
        "paired_variance": both,
        "independent_rows": min(n, n * math.fsum(r * r for r in around) / now),
        "folds": groups,
    }

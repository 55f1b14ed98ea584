"""The direct plug-in bandwidth on raw rows, step by step and without bins.

Ruppert, Sheather & Wand (1995, JASA 90:1257). Constants are typed in, not derived.
"""

import numpy as np


def epanechnikov(u):
    return np.where(np.abs(u) <= 1.0, 0.75 * (1.0 - u**2), 0.0)


def biweight(u):
    return np.where(np.abs(u) <= 1.0, 15.0 / 16.0 * (1.0 - u**2) ** 2, 0.0)


def triangular(u):
    return np.where(np.abs(u) <= 1.0, 1.0 - np.abs(u), 0.0)


def gaussian(u):
    return np.exp(-(u**2) / 2.0) / np.sqrt(2.0 * np.pi)


# Kernel, support, R / mu_2^2, C2 by sign of theta24 (negative, positive), C3.
KERNELS = {
    "epanechnikov": (epanechnikov, 1.0, 15.0, 2.27458, 2.59269, 2.34294),
    "biweight": (biweight, 1.0, 35.0, 2.52492, 2.87803, 2.77213),
    "triangular": (triangular, 1.0, 24.0, 2.34063, 2.66797, 2.57077),
    "gaussian": (gaussian, 9.0, 0.28209479, 0.80101, 0.91303, 1.05551),
}


def quartic_blocks(x, y, w, blocks):
    """RSS, q'' and q'''' of weighted quartics in blocks of equally many rows; x sorted."""
    rss, second, fourth = 0.0, [], []
    block = (np.arange(len(x)) + 0.5) * blocks // len(x)
    for rows in (np.flatnonzero(block == one) for one in range(blocks)):
        middle, half = (x[rows].min() + x[rows].max()) / 2, np.ptp(x[rows]) / 2
        z = (x[rows] - middle) / half
        root = np.sqrt(w[rows])
        design = np.column_stack([z**k for k in range(5)])
        c = np.linalg.lstsq(design * root[:, None], y[rows] * root, rcond=None)[0]
        rss += np.sum(w[rows] * (y[rows] - design @ c) ** 2)
        second.append((2 * c[2] + 6 * c[3] * z + 12 * c[4] * z**2) / half**2)
        fourth.append(np.full(len(rows), 24 * c[4] / half**4))
    return rss, np.concatenate(second), np.concatenate(fourth)


def window(x, here, reach):
    return slice(np.searchsorted(x, here - reach), np.searchsorted(x, here + reach, "right"))


def second_derivative(x, y, w, kernel, support, g, here):
    """Second derivative of a local cubic at one place."""
    rows = window(x, here, support * g)
    u = (x[rows] - here) / g
    k = w[rows] * kernel(u)
    design = np.array([u**0, u, u**2, u**3])
    c = np.linalg.solve((design * k) @ design.T, (design * k) @ y[rows])
    return 2 * c[2] / g**2


def line_weights(x, w, kernel, support, h, i):
    """Weights with which the local line at row i takes the rows of its window."""
    rows = window(x, x[i], support * h)
    u = (x[rows] - x[i]) / h
    k = w[rows] * kernel(u)
    if not u.any():
        return rows, k / k.sum()
    s0, s1, s2 = k.sum(), (k * u).sum(), (k * u**2).sum()
    return rows, k * (s2 - s1 * u) / (s0 * s2 - s1**2)


def line_variance(x, y, w, kernel, support, h):
    """Residuals of a local line at every row, over their degrees of freedom."""
    rss, freedom = 0.0, float(len(x))
    for i in range(len(x)):
        rows, weights = line_weights(x, w, kernel, support, h, i)
        rss += w[i] * (y[i] - weights @ y[rows]) ** 2
        freedom += w[i] * np.sum(weights**2 / w[rows]) - 2 * weights[i - rows.start]
    return rss / freedom


def rule_of_thumb(x, y, name):
    """Fan & Gijbels (1996), section 4.2; x sorted."""
    n, a, b = len(x), x.min(), x.max()
    inner = (x >= a + 0.05 * (b - a)) & (x <= b - 0.05 * (b - a))
    rss, second, _ = quartic_blocks(x, y, np.ones(n), 1)
    return (KERNELS[name][2] * rss / (n - 5) * 0.9 * (b - a) / np.sum(second[inner] ** 2)) ** 0.2


def plug_in(x, y, name, w=None, every=1):
    """Bandwidth; every `every`-th row stands for its neighbours where theta22 is averaged.

    With weights w (variance proportional to 1 / w) the asymptotic error has sum w in the place
    of n, and averages over rows are weighted.
    """
    order = np.argsort(x, kind="stable")
    x, y = x[order], y[order]
    w = np.ones(len(x)) if w is None else w[order]
    kernel, support, spread, c2_negative, c2_positive, c3 = KERNELS[name]
    n, a, b, total = len(x), x.min(), x.max(), w.sum()
    inner = (x >= a + 0.05 * (b - a)) & (x <= b - 0.05 * (b - a))
    width = 0.9 * (b - a)

    most = max(min(n // 20, 5), 1)
    fits = {blocks: quartic_blocks(x, y, w, blocks) for blocks in range(1, most + 1)}
    noise = fits[most][0] / (n - 5 * most)
    blocks = min(fits, key=lambda m: fits[m][0] / noise - (n - 10 * m))
    rss, second, fourth = fits[blocks]
    variance = rss / (n - 5 * blocks)
    theta22 = np.sum((w * second**2)[inner]) / total
    theta24 = np.sum((w * second * fourth)[inner]) / total

    c2 = c2_negative if theta24 < 0 else c2_positive
    g = c2 * (variance * width / (abs(theta24) * total)) ** (1 / 7)
    taken = np.flatnonzero(inner)[::every]
    curvature = [second_derivative(x, y, w, kernel, support, g, x[i]) for i in taken]
    theta22_local = np.average(np.square(curvature), weights=w[taken]) * w[inner].sum() / total

    lam = c3 * (variance**2 * width / (theta22 * total) ** 2) ** (1 / 9)
    variance = line_variance(x, y, w, kernel, support, lam)
    return (spread * variance * width / (theta22_local * total)) ** 0.2

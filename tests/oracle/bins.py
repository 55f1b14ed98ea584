"""Bin moments by plain loops and `math.fsum`, from raw rows."""

import math


def reason_against(x, y, weight, count):
    """The first reason against a row, or None; range apart."""
    checks = [
        (math.isnan(x), "x NaN"),
        (math.isinf(x), "x infinite"),
        (math.isnan(y), "y NaN"),
        (math.isinf(y), "y infinite"),
        (math.isnan(weight), "weight NaN"),
        (weight == 0.0, "weight zero"),
        (weight < 0.0 or math.isinf(weight), "weight negative or infinite"),
        (math.isnan(count), "count NaN"),
        (count == 0.0, "count zero"),
        (count < 0.0 or math.isinf(count), "count negative or infinite"),
    ]
    return next((reason for bad, reason in checks if bad), None)


def moments(x, y, weight, count, origin, width, bins, pilot):
    """Sums of every bin as lists, the refused rows by reason, and the extent of used x.

    The bin of a row is floor((x - origin) / width), `pilot` a list with one offset per bin. The
    result is {bin: {"w", "wv", ...}}, with the term lists summed exactly.
    """
    names = (
        "w", "wv", "wv2", "we", "wve", "wv2e", "we2", "count",
        "w2", "w2v", "w2v2", "w2e", "w2ve", "w2e2",
    )  # fmt: skip
    terms, refused, used = {}, {}, []
    for xi, yi, wi, ci in zip(x, y, weight, count, strict=True):
        reason = reason_against(xi, yi, wi, ci)
        place = (xi - origin) * (1.0 / width) if reason is None else 0.0
        if reason is None and place < 0.0:
            reason = "x below range"
        if reason is None and place >= bins:
            reason = "x above range"
        if reason is not None:
            refused[reason] = refused.get(reason, 0) + 1
            continue
        used.append(xi)
        b = math.floor(place)
        v = place - b - 0.5
        e = yi - pilot[b]
        powers = (1.0, v, v * v, e, v * e, v * v * e, e * e)
        row = [ci * wi * one for one in powers] + [ci]
        row += [ci * wi * wi * one for one in (1.0, v, v * v, e, v * e, e * e)]
        for name, value in zip(names, row, strict=True):
            terms.setdefault(b, {}).setdefault(name, []).append(value)
    sums = {b: {name: math.fsum(one) for name, one in made.items()} for b, made in terms.items()}
    sizes = {
        b: {name: math.fsum(map(abs, one)) for name, one in made.items()}
        for b, made in terms.items()
    }
    extent = (min(used), max(used)) if used else (math.inf, -math.inf)
    return sums, sizes, refused, extent

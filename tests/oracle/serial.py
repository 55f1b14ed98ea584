"""Autocorrelation over pairs of rows that were neighbours in their file, pair by pair."""

import math


def autocorrelation(z, run, place, lag):
    """Mean product over the pairs so many places apart in one run, over the mean square; pairs."""
    rows = [(one, of, at) for one, of, at in zip(z, run, place, strict=True) if math.isfinite(one)]
    at_place = {(of, at): one for one, of, at in rows}
    products = [one * at_place[of, at + lag] for one, of, at in rows if (of, at + lag) in at_place]
    if not products:
        return math.nan, 0
    square = math.fsum(one * one for one, _, _ in rows) / len(rows)
    return math.fsum(products) / len(products) / square, len(products)


def reach(correlations, faded):
    """The first lag, from 1 on, whose correlation does not exceed `faded`."""
    lag = 1
    while correlations[lag] > faded:
        lag += 1
    return lag

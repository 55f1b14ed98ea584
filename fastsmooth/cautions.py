"""What a reader must know about a result before trusting it."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bands import Noise
from fastsmooth.bintable import BinTable
from fastsmooth.curve import FEWEST_FOLDS, OUTSIDE, THIN, Caution, Curve
from fastsmooth.plan import Sample
from fastsmooth.quoting import sql_name, where_option
from fastsmooth.smoother import Fits
from fastsmooth.source import Source

Floats = NDArray[np.float64]

_MANY_REFUSED = 0.05
_MANY_ALIKE = 0.0001
_STANDS_OUT = 0.2
# At the narrowest width one row in a hundred may be alone by chance.
# The narrowest width leaves up to one row in twenty without three others, by its definition.
_MANY_ALONE = 0.03
_HEAVY_FOLD = 0.5
_CORRELATION_WORTH_TELLING = 0.1
_FAR_OUT_SD = 10.0


def about_rows(table: BinTable, source: Source) -> Iterator[Caution]:
    """Yield cautions about refused rows and about folds."""
    tally = table.tally
    kept = tally.read - tally.filtered
    refused = {
        k: v for k, v in tally.refused.items() if k not in ("x below range", "x above range")
    }
    if kept and sum(refused.values()) > _MANY_REFUSED * kept:
        counts = ", ".join(f"{rows} {reason}" for reason, rows in sorted(refused.items()))
        share = sum(refused.values()) / kept
        yield Caution(
            "many rows refused",
            f"{share:.0%} of the rows could not be used ({counts}). Find out why before you trust "
            f"what is left.",
        )
    if table.plan.block is not None and len(table.blocks) < FEWEST_FOLDS:
        yield Caution(
            "few blocks",
            f"There are only {len(table.blocks)} blocks by {table.plan.block}: fewer than "
            f"{FEWEST_FOLDS} say little about how much blocks differ, so every point is thin.",
        )
    weights = np.array([float(sums[:, 0].sum()) for sums in table.sums.values()])
    if weights.size > 1 and weights.max() > _HEAVY_FOLD * weights.sum():
        yield Caution(
            "one fold dominates",
            f"One of {weights.size} folds holds {weights.max() / weights.sum():.0%} of the weight, "
            f"so the flat zone rests on few independent parts.",
        )


def about_search(made: Curve) -> Iterator[Caution]:
    """Yield cautions about the choice of the bandwidth."""
    settings = made.trace["settings"]
    trail = made.search.trails[settings["estimator"]]
    criterion = made.search.criterion
    label, word = made.width_label, made.width_word
    option = "--neighbours" if made.by_neighbours else "--bandwidth"
    low, high = trail.flat_zone
    if made.width_given:
        if not low <= made.bandwidth <= high:
            yield Caution(
                "width outside the flat zone",
                f"The given {word} {label(made.bandwidth)} lies outside the flat zone "
                f"{label(low)} to {label(high)} of {criterion}; its choice is "
                f"{label(trail.bandwidth)}.",
            )
    elif trail.at_low_end:
        yield Caution(
            "width at the lower end",
            f"The best {word} {label(trail.bandwidth)} is the narrowest searched. Rows that "
            f"repeat each other (serial correlation, duplicated files, --count) or a coarsely "
            f"rounded x drive it there: give --block, give {option}, or thin the rows.",
        )
    elif trail.at_high_end:
        shape = "a straight line" if settings["estimator"] == "local-linear" else "a constant"
        yield Caution(
            "width at the upper end",
            f"The best {word} {label(trail.bandwidth)} is the widest searched: within the noise "
            f"the data look like {shape}.",
        )
    if trail.minima > 1:
        yield Caution(
            "several minima",
            f"The criterion has {trail.minima} separate minima; look at the lower panel of the "
            f"picture before you rely on {label(trail.bandwidth)}.",
        )
    if trail.is_flat:
        yield Caution(
            "flat criterion",
            f"Every {word} searched is within one standard error of the best: the data do not "
            "say how much to smooth.",
        )
    if made.search.rows_alone > _MANY_ALONE * made.trace["rows"]["used"]:
        by_fold = made.search.criterion == "leave-block-out"
        of_others = " in other folds" if by_fold else ""
        yield Caution(
            "rows alone",
            f"{made.search.rows_alone:,.0f} rows have no neighbour{of_others} within the narrowest "
            f"width and took no part in the choice of the {word}.",
        )


def about_curve(made: Curve, sample: Sample, residuals: Floats) -> Iterator[Caution]:
    """Yield cautions about the curve itself; `residuals` are the sample's, standardised."""
    engine = made.trace["engine"]
    binned = engine["name"] == "binned"
    if binned and engine["bins_per_bandwidth"] < 0.99 * engine["fewest_bins_per_bandwidth"]:
        error = engine["error_in_noise_sd"]
        told = "cannot be told" if error is None else f"is about {error:.1g} residual deviations"
        yield Caution(
            "coarse bins",
            f"The bandwidth spans only {engine['bins_per_bandwidth']:.1f} bins within the memory "
            f"cap; the curve's binning error {told}. Narrow --range for finer bins.",
        )
    unsupported = np.mean((made.status == THIN) | (made.status == OUTSIDE))
    if unsupported > 0.5:
        yield Caution(
            "mostly thin",
            f"{unsupported:.0%} of the points have too few rows; the curve says little there.",
        )
    yield from _about_correlation(made)
    yield from _about_spikes(made, sample, residuals)


def standardised_residuals(
    fits: Fits, noise: Noise, estimator: str, reference: float, sample: Sample
) -> Floats:
    """Return residuals of the sample's rows over the residual spread at their x.

    They are taken from the fits at all bin centres: the curve's own points may be few. NaN
    outside the bins and where there is no spread.
    """
    level = fits.level
    value, slope, _ = fits.chords[estimator]
    place = (sample.x - level.origin) / level.width
    usable = (place >= 0.0) & (place < level.bins)
    bins = np.where(usable, place, 0.0).astype(np.int64)
    fitted = reference + value[bins] + slope[bins] * (place - bins - 0.5)
    variance = np.where(usable & (noise.variance[bins] > 0.0), noise.variance[bins], np.nan)
    return np.asarray((sample.y - fitted) / np.sqrt(variance))


def _about_correlation(made: Curve) -> Iterator[Caution]:
    """Tell of correlated rows, unless blocks take care of them."""
    found = made.trace["serial"]
    if found is None or made.trace["settings"]["block"] is not None:
        return
    first = found["lag_one"]
    if first <= max(_CORRELATION_WORTH_TELLING, 3.0 / math.sqrt(found["pairs"])):
        return
    yield Caution(
        "neighbouring rows alike",
        f"Residuals of neighbouring rows are correlated ({first:.2f}; it takes "
        f"{found['reach_rows']} rows to fade), so {made.trace['rows']['used']:,} rows are worth "
        f"about {found['worth_rows']:,.0f} independent ones: {made.search.criterion} chooses too "
        f"narrow a width and the band is too narrow. Give --block, as in --block logged_at:day.",
    )


def _about_spikes(made: Curve, sample: Sample, z: Floats) -> Iterator[Caution]:
    """One far value of y repeated over and over is a code for missing, not a reading."""
    far = np.flatnonzero(np.abs(z) > _FAR_OUT_SD)
    # Far values inflate the residual spread that they are measured by; compare with the bulk too.
    middle = np.median(sample.y) if sample.y.size else 0.0
    bulk = 1.4826 * np.median(np.abs(sample.y - middle)) if sample.y.size else 0.0
    far = np.union1d(far, np.flatnonzero(np.abs(sample.y - middle) > 30.0 * bulk)) if bulk else far
    if not far.size:
        return
    values, counts = np.unique(sample.y[far], return_counts=True)
    most = int(np.argmax(counts))
    # Long tails of whole numbers repeat values too, but none stands out among them.
    enough = max(3.0, _MANY_ALIKE * sample.y.size, _STANDS_OUT * far.size)
    if counts[most] >= enough:
        column = made.trace["settings"]["y"]
        yield Caution(
            "repeated far value",
            f"{column} is {values[most]:g} in {counts[most]} of {sample.y.size} sampled rows, far "
            f"from all others: is it a code for a missing reading? Leave such rows out with "
            f"{where_option(f'{sql_name(column)} <> {values[most]:g}')}.",
        )

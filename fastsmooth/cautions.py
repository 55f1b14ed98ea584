"""What a reader must know about a result before trusting it."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bands import FEWEST_DEGREES, Noise
from fastsmooth.bintable import BinTable
from fastsmooth.curve import FEWEST_FOLDS, OUTSIDE, THIN, Caution, Curve
from fastsmooth.plan import Sample
from fastsmooth.quoting import sql_name, where_option
from fastsmooth.settings import Reading
from fastsmooth.smoother import Fits

Floats = NDArray[np.float64]

_MANY_REFUSED = 0.05
_MANY_ALIKE = 0.0001
_STANDS_OUT = 0.2
# At the narrowest width one row in a hundred may be alone by chance.
# The narrowest width leaves up to one row in twenty without three others, by its definition.
_MANY_ALONE = 0.03
# From so many equal rows to a row on, their likeness decides the criterion.
_REPEATED = 1.5
_MANY_THIN = 0.5
_HEAVY_FOLD = 0.5
# Fewer folds than this leave the standard errors of the criterion to chance.
_FEWEST_FOLDS_FOR_ZONE = 8
_UNEQUAL_FOLDS = 0.5
_CORRELATION_WORTH_TELLING = 0.1
_FAR_OUT_SD = 10.0
# Sums of a store are not counted again.
_FINER_STORE = "Make another store with more --bins."


def about_rows(table: BinTable) -> Iterator[Caution]:
    """Yield cautions about refused rows."""
    tally = table.tally
    kept = tally.read - tally.filtered
    refused = {
        k: v for k, v in tally.refused.items() if k not in ("x below range", "x above range")
    }
    if kept and sum(refused.values()) > _MANY_REFUSED * kept:
        counts = ", ".join(f"{rows:,} {reason}" for reason, rows in sorted(refused.items()))
        share = sum(refused.values()) / kept
        yield Caution(
            "many rows refused",
            f"{share:.0%} of the rows could not be used ({counts}). Find out why before you trust "
            f"what is left.",
        )


def fold_weights(table: BinTable) -> Floats:
    """Return the weight of the rows of each fold that has any."""
    weights = np.array([float(sums[:, 0].sum()) for sums in table.sums.values()])
    return weights[weights > 0.0]


def about_folds(made: Curve, table: BinTable) -> Iterator[Caution]:
    """Yield cautions about the number of folds and their sizes."""
    weights, block, blocks = fold_weights(table), table.plan.block, len(table.blocks)
    folds = weights.size
    so = []
    if made.errors_by_fold and folds < FEWEST_FOLDS:
        so.append("every point is thin")
    if folds < _FEWEST_FOLDS_FOR_ZONE:
        so.append("the flat zone rests on next to nothing")
    if block is not None and blocks < FEWEST_FOLDS:
        yield Caution(
            "few blocks",
            f"There are only {blocks} blocks by {block}: fewer than {FEWEST_FOLDS} say little "
            f"about how much blocks differ, so {' and '.join(so)}.",
        )
    elif so:
        parts = "rows" if block is None else f"{blocks:,} blocks by {block}"
        remedy = "Read more rows" if block is None else "Name a finer block"
        if table.plan.folds < Reading().folds:
            passes = made.trace["engine"]["passes"]
            remedy = "Leave out --folds" if passes else "Make another store without --folds"
        yield Caution(
            "few folds",
            f"The {parts} lie in only {folds} folds, so {' and '.join(so)}. {remedy}.",
        )
    largest, equal = weights.max() / weights.sum(), weights.sum() ** 2 / (weights**2).sum()
    # One of two folds holds half of everything, and one of three may well do.
    if largest > max(_HEAVY_FOLD, 2.0 / folds):
        yield Caution(
            "one fold dominates",
            f"One of {folds} folds holds {largest:.0%} of the weight, so the flat zone rests on "
            f"few independent parts.",
        )
    elif block is not None and equal < _UNEQUAL_FOLDS * min(table.plan.folds, blocks):
        numbered = all(isinstance(key, int) for key in table.blocks)
        yield Caution(
            "unequal folds",
            f"The blocks by {block} fill {folds} folds so unevenly that these are worth "
            f"{equal:.0f} equal ones, which is what width and band rest on. "
            + (
                "Name a block of more even size."
                if numbered
                else "Whole numbers or times as blocks are dealt more evenly than other values."
            ),
        )


def about_search(made: Curve) -> Iterator[Caution]:
    """Yield cautions about the choice of the bandwidth."""
    settings = made.trace["settings"]
    trail = made.search.trails[settings["estimator"]]
    criterion = made.search.criterion
    label, word = made.width_label, made.width_word
    option = "--neighbours" if made.by_neighbours else "--bandwidth"
    low, high = trail.flat_zone
    if made.few_rows_vote:
        yield _few_rows_vote(made)
    if made.width_given:
        # A criterion that most rows take no part in cannot call the caller wrong.
        if not (low <= made.bandwidth <= high or made.few_rows_vote):
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
    repeated = made.rows_counted > _REPEATED * made.trace["rows"]["used"]
    if settings["count"] is not None and criterion == "leave-one-out" and repeated:
        yield Caution(
            "equal rows",
            f"Rows of --count {settings['count']} stand for several equal ones, and leave-one-out "
            f"predicts each from its twins: it chooses too narrow a width. Give --block, or give "
            f"{option}.",
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
    if made.search.rows_alone > _MANY_ALONE * made.rows_counted and not made.few_rows_vote:
        of_others = " in other folds" if criterion == "leave-block-out" else ""
        yield Caution(
            "rows alone",
            f"{made.search.rows_alone:,.0f} rows have no neighbour{of_others} within the narrowest "
            f"width and took no part in the choice of the {word}.",
        )


def _few_rows_vote(made: Curve) -> Caution:
    voting = made.rows_counted - made.search.rows_alone
    by_fold = made.search.criterion == "leave-block-out"
    around = "rows of other folds on both sides" if by_fold else "others"
    text = (
        f"Only {voting:,.0f} of {made.rows_counted:,.0f} rows have {around} within the narrowest "
        f"width, so the choice of the {made.width_word} and its flat zone rest on these few. "
    )
    option = "--neighbours" if made.by_neighbours else "--bandwidth"
    if not by_fold:
        return Caution("few rows vote", f"{text}Give {option}.")
    return Caution(
        "few rows vote",
        f"{text}This is so where x runs along with the blocks, as time does with its days: they "
        f"cannot choose it there, so give {option}.",
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
            f"cap; the curve's binning error {told}. "
            + ("Narrow --range for finer bins." if engine["passes"] else _FINER_STORE),
        )
    yield from _about_support(made)
    yield from _about_correlation(made)
    yield from _about_spikes(made, sample, residuals)


def _about_support(made: Curve) -> Iterator[Caution]:
    """Tell why most points are thin or outside, if they are."""
    thin, outside = made.status == THIN, made.status == OUTSIDE
    if np.mean(thin | outside) <= _MANY_THIN:
        return
    # Every window of the nearest rows holds the same number; what is thin there for want of rows
    # lies in a gap between them, where folds are not lacking.
    few_rows = thin & ~(made.effective_rows >= made.settings["least_rows"])
    few_folds = thin & ~few_rows & made.errors_by_fold
    shares = {
        "too few rows": np.mean((thin & ~few_folds) | outside),
        f"rows enough, but of too few folds (fewer than {FEWEST_FOLDS}, or so unequal that their "
        f"error has fewer than {FEWEST_DEGREES:g} degrees of freedom)": np.mean(few_folds),
    }
    told = [f"{share:.0%} of the points have {what}" for what, share in shares.items() if share]
    yield Caution("mostly thin", f"{'; '.join(told)}. The curve says little there.")


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
    remedy = "Give --block, as in --block logged_at:day"
    if made.axis.kind in ("timestamp", "date"):
        # Days of a curve over time are gaps that their neighbours must bridge.
        remedy = (
            "Give --bandwidth, and --block with times that last longer than that and are short "
            "beside it"
        )
    yield Caution(
        "neighbouring rows alike",
        f"Residuals of neighbouring rows are correlated ({first:.2f}; it takes "
        f"{found['reach_rows']:,} rows to fade), so {made.trace['rows']['used']:,} rows are worth "
        f"about {found['worth_rows']:,.0f} independent ones: {made.search.criterion} chooses too "
        f"narrow a width and the band is too narrow. {remedy}.",
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
            f"{column} is {values[most]:g} in {counts[most]:,} of {sample.y.size:,} sampled rows, "
            f"far from all others: is it a code for a missing reading? Leave such rows out with "
            f"{where_option(f'{sql_name(column)} <> {values[most]:g}')}.",
        )

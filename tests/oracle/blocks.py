"""Blocks and folds row by row, with Python's own calendar, integers and hash."""

import hashlib
from datetime import UTC, date, datetime, timedelta
from zoneinfo import ZoneInfo

EPOCH = date(1970, 1, 1)
FIRST_MONDAY = date(1970, 1, 5)
ALL_BITS = 2**64 - 1


def unit_number(moment, unit, zone):
    """The number of the hour, day, week or month that a moment falls into.

    A moment with a zone is an instant, counted on the clock of `zone`; one without is what a
    clock on the wall showed.
    """
    if unit == "hour":
        naive = moment.astimezone(UTC).replace(tzinfo=None) if moment.tzinfo else moment
        return (naive - datetime(1970, 1, 1)) // timedelta(hours=1)
    day = (moment.astimezone(ZoneInfo(zone)) if moment.tzinfo else moment).date()
    if unit == "day":
        return (day - EPOCH).days
    if unit == "week":
        monday = day - timedelta(days=day.weekday())
        return (monday - FIRST_MONDAY).days // 7
    return (day.year - 1970) * 12 + day.month - 1


def fold_of_number(number, folds):
    """Every `folds` consecutive numbers are shuffled over all folds.

    SplitMix64 (Steele, Lea & Flood 2014, OOPSLA) draws; Fisher and Yates shuffle from the end.
    """
    group = number // folds
    order = list(range(folds))
    state = group % 2**64
    for last in range(folds - 1, 0, -1):
        state = (state + 0x9E3779B97F4A7C15) % 2**64
        z = state
        z = (z ^ (z >> 30)) * 0xBF58476D1CE4E5B9 % 2**64
        z = (z ^ (z >> 27)) * 0x94D049BB133111EB % 2**64
        z = z ^ (z >> 31)
        other = z % (last + 1)
        order[last], order[other] = order[other], order[last]
    return order[number - group * folds]


def fold_of_value(value, folds):
    """The fold of a block named by any value; -1 for none."""
    if value is None:
        return -1
    if isinstance(value, int) and not isinstance(value, bool):
        return fold_of_number(value, folds)
    digest = hashlib.blake2b(str(value).encode(), digest_size=8).digest()
    return sum(byte << (8 * place) for place, byte in enumerate(digest)) % folds

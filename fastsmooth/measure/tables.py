"""Measurements and comparisons as tables for people."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping, Sequence

from fastsmooth.machine import Machine
from fastsmooth.measure.compare import Comparison
from fastsmooth.measure.costs import ASSUMPTIONS, Cost
from fastsmooth.measure.figures import (
    ACCUMULATION,
    COPY,
    CURVE,
    EXACT,
    NEIGHBOURS,
    READ,
    SCAN,
    SCAN_BYTES,
    SEARCH,
    Figure,
    Measurement,
)

_TITLES = {
    COPY: "memory, bytes read and written",
    READ: "memory, bytes read and summed",
    SCAN: "Parquet scan: two columns of float64 decoded",
    SCAN_BYTES: "Parquet scan: decoded bytes",
    CURVE: "whole curve: scan, accumulation, search, band",
    ACCUMULATION: "accumulation alone: rows at hand",
    EXACT: "exact leave-one-out: two estimators at once",
    NEIGHBOURS: "nearest neighbours: leave-one-out",
    SEARCH: "bandwidth search: two estimators",
}
_STATES = {
    "compiled": "first run: compiling took",
    "loaded": "compiled before; loading took",
    "present": "in the process already;",
}
_NAME_WIDTH = 46
_COLUMN_WIDTH = 8
_MOST_COLUMNS = 4
_LINE_WIDTH = 100
_HEAD = "median of rounds; threads:"
_FASTER = "faster: how many times as fast this machine is as the other; below 1 it is slower"


def machine_lines(machine: Machine, label: str = "machine") -> list[str]:
    """Return what a machine is, as labelled facts."""
    facts = [machine.processor, f"compiled for {machine.code_target}", _cores(machine)]
    if machine.memory_bytes is not None:
        facts.append(f"{_binary(machine.memory_bytes)} memory")
    if machine.cache_bytes:
        caches = ", ".join(f"{one} {_binary(size)}" for one, size in machine.cache_bytes.items())
        facts.append(f"caches {caches}")
    software = [f"{name} {found}" for name, found in machine.versions.items()]
    software += [machine.system, machine.architecture]
    return [*_fact(label, ", ".join(facts)), *_fact("software", ", ".join(software))]


def measurement_lines(found: Measurement) -> list[str]:
    """Return a measurement as a table: a line per job and case, a column per number of threads."""
    lines = [*machine_lines(found.machine), *_condition_lines(found), ""]
    counts = _shown({one.threads for one in found.figures})
    many = len(counts) > 1
    lines.append(_row(_HEAD, [*map(str, counts), *(["gain"] if many else []), "spread"]))
    former = ""
    for job, case, by_threads in found.cases():
        if job != former:
            lines += ["", f"{_TITLES[job]}, {next(iter(by_threads.values())).unit}"]
            former = job
        values = [_value(by_threads.get(n)) for n in counts]
        spread = max(one.spread for one in by_threads.values())
        gains = [_gain(by_threads)] if many else []
        lines.append(_row(f"  {case}", [*values, *gains, f"{100 * spread:.0f} %"]))
    lines += ["", "rates (.../s): more is better; ns and ms, by the clock: less is better"]
    if many:
        lines.append("gain: how many times as fast the most threads are as one")
    lines += ["spread: distance of the quartiles over rounds, in percent of the median", ""]
    return [*lines, *cost_lines(found.costs(), found.price_per_hour), *_cautions(found.cautions)]


def cost_lines(costs: Sequence[Cost], price_per_hour: float | None) -> list[str]:
    """Return what large jobs take and cost."""
    if not costs:
        return []
    lines = [_row("large jobs with all threads", ["at most", *(
        [] if price_per_hour is None else ["price"])])]  # fmt: skip
    for one in costs:
        price = [] if one.price is None else [f"{one.price:.3g}"]
        lines.append(_row(f"  {one.job}", [_seconds(one.seconds), *price]))
    if price_per_hour is not None:
        lines += _fact("price", f"{price_per_hour:g} an hour, in your currency")
    return [*lines, *_fact("assumed", ASSUMPTIONS)]


def comparison_lines(found: Comparison) -> list[str]:
    """Return two machines side by side; the ratio is above 1 where this one is faster."""
    this, other = found.this, found.other
    lines = [*machine_lines(this.machine, "this"), *machine_lines(other.machine, "other"), ""]
    lines.append(_row("median of rounds", ["threads", "this", "other", "faster"]))
    former = ""
    for pair in found.pairs:
        if pair.this.job != former:
            lines += ["", f"{_TITLES[pair.this.job]}, {pair.this.unit}"]
            former = pair.this.job
        threads = f"{pair.this.threads} | {pair.other.threads}" if pair.all_threads else "1"
        values = [threads, _value(pair.this), _value(pair.other), f"{pair.ratio:.2f}x"]
        lines.append(_row(f"  {pair.this.case}", values))
    lines += ["", *_cost_pairs(this, other), _FASTER]
    return [*lines, *_cautions(found.cautions)]


def _cost_pairs(this: Measurement, other: Measurement) -> list[str]:
    """Large jobs on both machines, and their prices where both are known."""
    theirs = {one.job: one for one in other.costs()}
    both = [(one, theirs[one.job]) for one in this.costs() if one.job in theirs]
    if not both:
        return []
    lines = [_row("large jobs with all threads, at most", ["", "this", "other", "faster"])]
    for mine, their in both:
        times = [_seconds(mine.seconds), _seconds(their.seconds)]
        lines.append(_row(f"  {mine.job}", ["", *times, f"{their.seconds / mine.seconds:.2f}x"]))
    if this.price_per_hour is not None and other.price_per_hour is not None:
        lines.append(_row("their price", ["", "this", "other", "cheaper"]))
        for mine, their in both:
            if mine.price is not None and their.price is not None:
                prices = [f"{mine.price:.3g}", f"{their.price:.3g}"]
                ratio = f"{their.price / mine.price:.2f}x"
                lines.append(_row(f"  {mine.job}", ["", *prices, ratio]))
        lines += _fact(
            "price",
            f"{this.price_per_hour:g} and {other.price_per_hour:g} an hour, in one currency",
        )
    return [*lines, *_fact("assumed", ASSUMPTIONS), ""]


def _condition_lines(found: Measurement) -> list[str]:
    facts = [found.measured_at, *(["quick and rough"] if found.quick else [])]
    if found.load_average is not None:
        facts.append(f"load average {found.load_average:.2f} before")
    if found.stolen_share is not None:
        facts.append(f"{100 * found.stolen_share:.1f} % of processor time taken by the host")
    loading = found.loading
    return [
        *_fact("kernels", f"{_STATES[loading.state]} {loading.seconds:.1f} s (in no figure)"),
        *_fact("measured", ", ".join(facts)),
    ]


def _cautions(cautions: Sequence[str]) -> list[str]:
    return [line for one in cautions for line in _fact("caution", one)]


def _fact(label: str, text: str) -> list[str]:
    """A label and a text, wrapped beside it."""
    return textwrap.wrap(
        text, _LINE_WIDTH, initial_indent=f"{label:<11}", subsequent_indent=" " * 11,
        break_long_words=False, break_on_hyphens=False,
    )  # fmt: skip


def _shown(counts: set[int]) -> list[int]:
    """All thread counts, or of many one and the largest."""
    found = sorted(counts)
    if len(found) <= _MOST_COLUMNS:
        return found
    return [found[0], *found[len(found) - _MOST_COLUMNS + 1 :]]


def _gain(by_threads: Mapping[int, Figure]) -> str:
    most = max(by_threads)
    if most == 1 or 1 not in by_threads:
        return ""
    return f"{by_threads[most].times_faster(by_threads[1]):.2f}x"


def _row(name: str, values: Sequence[str]) -> str:
    cells = "".join(f" {one:>{_COLUMN_WIDTH}}" for one in values)
    return f"{name:<{_NAME_WIDTH}}{cells}".rstrip()


def _value(figure: Figure | None) -> str:
    """Three digits: more, the rounds cannot tell."""
    if figure is None:
        return ""
    value = figure.value
    return f"{value:,.0f}" if value >= 100.0 else f"{value:#.3g}"


def _cores(machine: Machine) -> str:
    if machine.cores == machine.cores_in_all:
        return f"{machine.cores} processor{'s' if machine.cores > 1 else ''}"
    return f"{machine.cores} of {machine.cores_in_all} processors"


def _binary(size: float) -> str:
    for unit in ("B", "KiB", "MiB"):
        if size < 1024.0:
            return f"{size:.3g} {unit}"
        size /= 1024.0
    return f"{size:.3g} GiB"


def _seconds(seconds: float) -> str:
    if seconds < 1.0:
        return f"{1e3 * seconds:.3g} ms"
    return f"{seconds:.3g} s" if seconds < 600.0 else f"{seconds / 3600.0:.3g} h"

"""What a store and an update say: lines for people, plain data for programs."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import asdict
from typing import Any

from fastsmooth.store.opening import Store, with_store
from fastsmooth.store.update import Updated

_NAMED_AT_MOST = 3
_FILES_AT_MOST = 20


def update_facts(done: Updated) -> dict[str, Any]:
    """Return what an update did as plain data for JSON."""
    return asdict(done)


def update_lines(done: Updated) -> list[str]:
    """Return what an update did as lines for people."""
    state = f"state {done.generation}" if done.changed else "nothing to do; it stays as it is"
    lines = [f"store      {done.store}: {state}"]
    if done.unfinished is not None:
        lines.append(
            f"note       the update before this one was stopped ({done.unfinished}); nothing of it "
            f"was kept"
        )
    for label, paths, words in (
        ("added", done.added, ""),
        ("replaced", done.replaced, ""),
        ("reread", done.reread, "; they share periods that were made anew"),
        ("moved", done.moved, "; counted before under another path"),
        ("gone", done.vanished, " counted before; their rows stay"),
        ("left out", done.left_out, "; rows of theirs lay beyond the bins and fit now: name them "
         "with --replace"),
    ):  # fmt: skip
        if paths:
            lines.append(f"{label:<11}{_files(paths)}{words}")
    if done.unchanged:
        count = len(done.unchanged)
        lines.append(f"unchanged  {count:,} file{'s' if count > 1 else ''} counted before")
    rows = done.rows
    if rows and rows["read"]:
        text = f"rows       {rows['used']:,} used of {rows['read']:,} read"
        if rows["filtered"]:
            text += f"; {rows['filtered']:,} filtered by --where"
        lines.append(text)
        if rows["refused"]:
            counts = ", ".join(f"{n:,} {reason}" for reason, n in rows["refused"].items())
            lines.append(f"refused    {counts}")
    if done.width_doubled:
        lines.append(
            f"range      grew: bins are {2**done.width_doubled} times as wide; no old row was read"
        )
    for label, periods in (
        ("rebuilt", done.rebuilt), ("compacted", done.compacted), ("forgotten", done.forgotten),
    ):  # fmt: skip
        if periods:
            lines.append(f"{label:<11}{_span(periods)}")
    return lines


def store_facts(path: str | os.PathLike[str]) -> dict[str, Any]:
    """Return what a store holds as plain data for JSON.

    Raises
    ------
    ReadError
        It is damaged; every table is read.
    """

    def facts(store: Store) -> dict[str, Any]:
        manifest = store.manifest
        units = store.counted(by=store.by)
        grid = manifest.grid
        entries = [
            {name: value for name, value in asdict(entry).items() if name != "early"}
            for entry in store.entries
        ]
        return {
            "kind": "store", "path": store.path, "generation": manifest.generation,
            "version": manifest.version, "settings": store.settings.to_dict(),
            "axis": manifest.basis.axis.to_dict(),
            "bins": {"width": grid.width, "first": grid.origin, "last": grid.high,
                     "number": grid.bins},
            "rows": {"used": manifest.used, "read": sum(one.rows for one in store.entries)},
            "units": [
                {"key": list(key), "rows": one.table.tally.used} for key, one in units.items()
            ],
            "periods": store.period_labels(manifest.periods),
            "forgotten_before": None if manifest.forgotten_before is None
            else store.period_labels([manifest.forgotten_before])[0],
            "tables": len(manifest.parts),
            "size_bytes": sum(part.size_bytes for part in manifest.parts),
            "files": entries,
        }  # fmt: skip

    return with_store(path, facts)


def store_lines(told: dict[str, Any]) -> list[str]:
    """Return a description of a store as lines for people."""
    settings = {k: v for k, v in told["settings"].items() if v not in (None, "", [], ())}
    words = {k: " ".join(map(str, v)) if isinstance(v, list | tuple) else v
             for k, v in settings.items()}  # fmt: skip
    files = told["files"]
    lines = [
        f"store      {told['path']}: state {told['generation']}, {told['tables']} tables, "
        f"{told['size_bytes']:,} bytes",
        "settings   " + ", ".join(f"{k} {v}" for k, v in words.items()),
        f"rows       {told['rows']['used']:,} in the sums; {told['rows']['read']:,} read from "
        f"{len(files):,} file{'s' if len(files) != 1 else ''}",
        f"bins       {told['bins']['number']:,} of width {told['bins']['width']:g}",
    ]
    if told["periods"]:
        lines.append(f"periods    {_span(told['periods'])}")
    if told["forgotten_before"]:
        lines.append(f"forgotten  everything before {told['forgotten_before']}")
    if told["settings"]["by"]:
        lines.append(f"units      {len(told['units']):,}")
    for entry in files[-_FILES_AT_MOST:]:
        refused = sum(entry["refused"].values())
        lines.append(
            f"file       {entry['path']} ({entry['rows']:,} rows, {refused:,} refused, "
            f"counted {entry['counted_at']})"
        )
    if len(files) > _FILES_AT_MOST:
        lines.append(f"           and {len(files) - _FILES_AT_MOST:,} before them; --json has all")
    return lines


def _files(paths: Sequence[str]) -> str:
    named = ", ".join(paths[:_NAMED_AT_MOST])
    more = len(paths) - _NAMED_AT_MOST
    return named + (f" and {more:,} more" if more > 0 else "")


def _span(periods: Sequence[str]) -> str:
    if len(periods) == 1:
        return str(periods[0])
    return f"{periods[0]} to {periods[-1]} ({len(periods):,})"

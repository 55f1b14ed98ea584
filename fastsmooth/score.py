"""Rows held against reference curves: expected value, residual, z and status of each."""

from __future__ import annotations

import dataclasses
import os
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from statistics import NormalDist
from typing import TYPE_CHECKING, Any

from fastsmooth.addresses import DEFAULT_TIMEOUT_SECONDS
from fastsmooth.curve import Caution, Curve
from fastsmooth.errors import InputError
from fastsmooth.passes import Progress, silent
from fastsmooth.settings import (
    as_tuple,
    check_text,
    finite_number,
    one_of,
    usable_cores,
    whole_number,
)

if TYPE_CHECKING:
    import pyarrow as pa

    from fastsmooth.fleet import Fleet
    from fastsmooth.lookup import CurvePoints
    from fastsmooth.scorepass import Part, Wishes

FORMAT = 1
ONLY = ("outside-limits",)
# One row in a thousand of a healthy machine with normal scatter lies farther out.
DEFAULT_Z_LIMIT = NormalDist().inv_cdf(0.9995)


@dataclass(frozen=True, eq=False)
class Scored:
    """What scoring found.

    Attributes
    ----------
    by : tuple of str
        The columns that tell units apart; empty for a single curve.
    units : pyarrow.Table
        One row for each unit of the curves, in their order: the columns of `by`; ``rows`` met in
        the data; ``scored``, held against the limits; ``outside``, ``above`` and ``below`` them;
        ``share_outside`` of the scored; ``mean_residual`` of the scored (mean of y minus
        expected) with ``mean_residual_std_error``, which rests on stretches of consecutive rows
        and is null with fewer than ten; ``runs`` of consecutive rows on one side outside and the
        rows of the ``longest_run``; ``thin``, ``no_support``, ``no_reading``, ``no_curve``: rows
        that were not scored, by reason.
    unknown : dict of tuple to int
        Rows by keys that no curve has; at most a thousand keys.
    table : pyarrow.Table or None
        The scored rows, if no file was named.
    cautions : tuple of Caution
        What the reader must know.
    trace : dict
        ``curve``, ``settings``, ``files``, ``rows``, ``versions``.
    """

    by: tuple[str, ...]
    units: pa.Table
    unknown: dict[tuple[Any, ...], int]
    table: pa.Table | None
    cautions: tuple[Caution, ...]
    trace: dict[str, Any]

    def lines(self) -> list[str]:
        """Return what a person should read first, one fact a line."""
        from fastsmooth.scorewords import scored_lines

        return scored_lines(self)

    def to_dict(self) -> dict[str, Any]:
        """Return everything but the rows as plain data for JSON."""
        return {
            "by": list(self.by),
            "units": self.units.to_pylist(),
            "unknown": [
                {**dict(zip(self.by, key, strict=True)), "rows": rows}
                for key, rows in self.unknown.items()
            ],
            "cautions": [caution._asdict() for caution in self.cautions],
            **self.trace,
        }


def score_rows(
    data: Any,
    curve: Curve | Fleet | str | os.PathLike[str],
    *,
    out: str | os.PathLike[str] | None = None,
    x: str | None = None,
    y: str | None = None,
    keep: Sequence[str] | None = None,
    only: str | None = None,
    where: str | None = None,
    z_limit: float | None = None,
    prefix: str = "",
    threads: int | None = None,
    timeout_seconds: float = DEFAULT_TIMEOUT_SECONDS,
    progress: Progress = silent,
) -> Scored:
    """Hold every row against the curve of its unit, and write the rows with what was found.

    Four columns are added. ``expected`` is the curve at x, ``residual`` is y less that, ``z`` is
    the residual in standard deviations of single rows at x (of a row of the same precision, if
    the curve was made with weights). ``status`` is one word:

    ================  =============================================================
    ``inside``        within the limits
    ``above``         z above the limit
    ``below``         z below minus the limit
    ``thin``          the curve rests on too few rows there to judge, or knows no
                      scatter; values are given, the judgement is not
    ``no support``    the curve says nothing at this x; values are null
    ``no reading``    x or y is null or not finite; values are null
    ``no curve``      the unit is known, but no curve could be made of it
    ``unknown unit``  no curve has this unit
    ================  =============================================================

    Parameters
    ----------
    data : path, list of paths, dict of arrays, or frame
        See `fastsmooth.source.open_source`.
    curve : Curve, Fleet or path
        What to hold the rows against. Columns, scale and units are taken from its settings.
    out : path or None
        A file for a single file (.parquet, .arrow or .csv), a folder for a folder, glob or
        list; in it each file has the format and relative path that it has in `data`. It appears
        whole at the end or not at all. What exists there may be replaced only if every file in
        it says that it holds scored rows, as Parquet and Arrow files do. None keeps the rows in
        memory, in `Scored.table`.
    x, y : str or None
        Columns, where they have other names than in the data of the curve.
    keep : sequence of str or None
        Columns to write beside the new ones; None writes all.
    only : str or None
        ``outside-limits`` writes rows above and below only; all rows are still counted.
    where : str or None
        SQL condition; rows that do not meet it are left out of file and counts.
    z_limit : float or None
        Limit of \\|z\\|. None takes the curves' own lowest and highest limits where they have two
        or more, or else the normal quantile that one row in a thousand exceeds, 3.29.
    prefix : str
        Put before the names of the new columns.
    threads : int or None
        Row groups at a time; results do not depend on it.
    timeout_seconds : float
        How long a silent object store is waited for, each time.
    progress : callable
        Called as ``progress(stage, rows_done, rows_expected)``.

    Returns
    -------
    Scored
        A summary of each unit, and the rows if no file was named.

    Raises
    ------
    InputError
        An argument, the curve or the data cannot be used.
    ReadError
        A file could not be read whole.
    WriteError
        The rows cannot be written; nothing is left behind.

    Examples
    --------
    >>> import numpy as np
    >>> from fastsmooth.api import make_curve
    >>> rng = np.random.default_rng(1)
    >>> wet_bulb_c = rng.uniform(0.0, 25.0, 2000)
    >>> power_kw = 20.0 + 0.04 * wet_bulb_c**2 + rng.normal(0.0, 0.1, 2000)
    >>> readings = {"wet_bulb_c": wet_bulb_c, "power_kw": power_kw}
    >>> made = make_curve(readings, "wet_bulb_c", "power_kw")
    >>> today = {"wet_bulb_c": np.array([10.0, 20.0]), "power_kw": np.array([24.05, 39.0])}
    >>> score_rows(today, made).table["status"].to_pylist()
    ['inside', 'above']
    """
    from fastsmooth.lookup import Lookup
    from fastsmooth.scorefiles import ScoreWriter, check_out, is_single, relative_paths
    from fastsmooth.scorepass import ScorePass, Wishes
    from fastsmooth.source import Columns, _open_reader

    threads = whole_number("--threads", usable_cores() if threads is None else threads, 1)
    if only is not None:
        one_of("--only", only, ONLY)
    if where is not None:
        check_text("--where", where, "be an SQL condition")
    check_text("--prefix", prefix, "be a text")
    if keep is not None:
        keep = as_tuple("--keep", keep, "hold names of columns", "put it in a tuple")
    for argument, own in {"--x": x, "--y": y}.items():
        if own is not None:
            check_text(argument, own, "name a column of DATA")
    against = _Against.open(curve)
    told = against.settings
    if told.get("at") is not None:
        raise InputError(
            "--curve", "have evenly spaced points, between which rows can be scored",
            "it was made with --at", "make it without",
        )  # fmt: skip
    levels = against.levels
    limit = None
    if z_limit is not None or levels is None:
        limit = finite_number(
            "--beyond", DEFAULT_Z_LIMIT if z_limit is None else z_limit,
            "be a finite number above 0",
        )  # fmt: skip
        if limit <= 0.0:
            raise InputError("--beyond", "be above 0", f"it is {limit}", "leave it out")
    wishes = Wishes(
        x or told["x"], y or told["y"], told["weight"], where, keep, only is not None, limit,
        prefix,
    )  # fmt: skip
    progress("opening", 0, None)
    columns = Columns(wishes.x, wishes.y, wishes.weight)
    reader = _open_reader(data, columns, None, timeout_seconds)
    try:
        single = is_single(data)
        relative = None if single or out is None else relative_paths(data, reader.places)
        if out is not None:
            out = check_out(out, data, [record.path for record in reader.files], single)
        lookup = Lookup(against.points, told["scale"] == "log")
        job = ScorePass(
            reader, wishes, lookup, against.by, against.by_types, against.keys, against.axis,
            relative,
        )  # fmt: skip
        trace = against.trace(wishes)
        writer = ScoreWriter(job, trace, relative, threads, progress)
        table = None
        if out is None:
            whole, table = writer.to_memory()
        else:
            whole = writer.to_file(out) if single else writer.to_folder(out)
    finally:
        reader.close()
    trace["files"] = [dataclasses.asdict(record) for record in reader.files]
    trace["rows"] = whole.counts()
    trace["out"] = out
    units = _unit_table(against, whole)
    cautions = tuple(_cautions(against, wishes, whole))
    return Scored(against.by, units, whole.unknown, table, cautions, trace)


@dataclass(frozen=True, eq=False)
class _Against:
    """The curves, whatever they came as."""

    by: tuple[str, ...]
    keys: list[tuple[Any, ...]]
    by_types: list[pa.DataType]
    points: Iterable[CurvePoints | None]
    settings: dict[str, Any]
    axis: Any
    identity: dict[str, Any] | None

    @classmethod
    def open(cls, curve: Curve | Fleet | str | os.PathLike[str]) -> _Against:
        from fastsmooth.files import read_identity
        from fastsmooth.files_out import load_curve
        from fastsmooth.fleet import Fleet, arrow_type
        from fastsmooth.lookup import CurvePoints

        identity = None
        if isinstance(curve, str | os.PathLike):
            path = os.fspath(curve)
            curve = load_curve(path)
            record = read_identity(path, None)
            identity = {
                "path": path, "size_bytes": record.size_bytes, "modified_ns": record.modified_ns
            }  # fmt: skip
        if isinstance(curve, Curve):
            points = [CurvePoints.of(curve)]
            return cls((), [()], [], points, curve.settings, curve.axis, identity)
        if not isinstance(curve, Fleet):
            raise InputError(
                "--curve", "be a Curve, a Fleet, or the path of either", f"it is {curve!r}",
                "make one with make_curve",
            )  # fmt: skip
        if not curve.curves:
            raise InputError(
                "--curve", "hold at least one curve", "no unit of it has one",
                "make the curves again from more data",
            )  # fmt: skip
        types = [arrow_type(name) for name in curve.trace["by_types"]]
        return cls(
            curve.by, [unit.key for unit in curve.units], types,
            (unit.points() for unit in curve.units), curve.settings, curve.axis, identity,
        )  # fmt: skip

    @property
    def levels(self) -> tuple[float, float] | None:
        """Lowest and highest level of the curves' own limits, if they have two or more."""
        levels = self.settings.get("limits") or []
        return (levels[0], levels[-1]) if len(levels) > 1 else None

    def trace(self, wishes: Wishes) -> dict[str, Any]:
        """Return what every written file tells of its making."""
        from importlib.metadata import version

        settings = {
            "x": wishes.x, "y": wishes.y, "weight": wishes.weight, "by": list(self.by),
            "where": wishes.where, "keep": None if wishes.keep is None else list(wishes.keep),
            "only": ONLY[0] if wishes.flagged_only else None, "z_limit": wishes.z_limit,
            "limits": self.levels if wishes.z_limit is None else None,
            "prefix": wishes.prefix, "curve_where": self.settings["where"],
        }  # fmt: skip
        versions = {name: version(name) for name in ("fastsmooth", "numpy", "pyarrow")}
        return {
            "format": FORMAT, "curve": self.identity, "settings": settings, "versions": versions
        }  # fmt: skip


def _unit_table(against: _Against, whole: Part) -> pa.Table:
    import numpy as np
    import pyarrow as pa

    from fastsmooth.lookup import ABOVE, BELOW, NO_CURVE, NO_READING, NO_SUPPORT, THIN

    n = len(against.keys)
    tally = whole.tally
    counts = tally.counts[:n]
    scored = tally.judged()[:n]
    outside = counts[:, ABOVE] + counts[:, BELOW]
    share = np.divide(outside, scored, out=np.full(n, np.nan), where=scored > 0)

    def floats(values: Any) -> pa.Array:
        return pa.array(values, mask=np.isnan(values))

    columns: dict[str, Any] = {
        name: pa.array([key[place] for key in against.keys], against.by_types[place])
        for place, name in enumerate(against.by)
    }
    found = {
        "rows": tally.rows[:n], "scored": scored, "outside": outside, "above": counts[:, ABOVE],
        "below": counts[:, BELOW], "share_outside": floats(share),
        "mean_residual": floats(tally.means()[:n]),
        "mean_residual_std_error": floats(tally.std_errors()[:n]), "runs": tally.runs[:n],
        "longest_run": tally.longest[:n], "thin": counts[:, THIN],
        "no_support": counts[:, NO_SUPPORT], "no_reading": counts[:, NO_READING],
        "no_curve": counts[:, NO_CURVE],
    }  # fmt: skip
    # A column of units that has such a name keeps its place, under another name.
    columns = {f"unit_{name}" if name in found else name: one for name, one in columns.items()}
    return pa.table({**columns, **found})


def _cautions(against: _Against, wishes: Wishes, whole: Part) -> Iterator[Caution]:
    from fastsmooth.lookup import BELOW, UNKNOWN_UNIT

    made_where = against.settings["where"]
    if made_where is not None and wishes.where is None:
        yield Caution(
            "filter",
            f'The curve was made with --where "{made_where}"; all rows were scored, also those '
            "that do not meet it. Give the same --where to leave them out.",
        )
    counts = whole.tally.counts.sum(axis=0)
    unknown = int(counts[UNKNOWN_UNIT])
    if unknown:
        yield Caution(
            "unknown",
            f"{unknown:,} rows belong to units that have no curve; they were not scored.",
        )
    rows, judged = int(counts.sum()), int(counts[: BELOW + 1].sum())
    if rows and judged < 0.5 * rows:
        yield Caution(
            "few",
            f"Only {judged:,} of {rows:,} rows could be held against the limits; see their status.",
        )

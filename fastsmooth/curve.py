"""The result: a reference curve with its band, its search, its cautions and its trace."""

from __future__ import annotations

import json
import math
import os
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from fastsmooth.axis import Axis
from fastsmooth.errors import InputError, WriteError
from fastsmooth.foldcurves import FoldCurves
from fastsmooth.settings import NEAREST
from fastsmooth.trail import Search

if TYPE_CHECKING:
    import pyarrow as pa

Floats = NDArray[np.float64]

STATUSES = ("ok", "thin", "edge", "outside")
OK, THIN, EDGE, OUTSIDE = range(4)
# Columns of a curve's table between x and status.
VALUES = (
    "estimate",
    "slope",
    "slope_std_error",
    "std_error",
    "lower",
    "upper",
    "effective_rows",
    "residual_sd",
)
# A window that meets fewer folds of blocks is thin, however many rows it holds.
FEWEST_FOLDS = 12
# Beyond this share of rows without a vote, the choice of the width says little about the others.
_MOST_ROWS_ALONE = 0.5
CURVE_KEY = b"fastsmooth.curve"
FORMAT = 1


class Caution(NamedTuple):
    """Something about a result that its reader must know.

    Attributes
    ----------
    code : str
        A short fixed name.
    text : str
        One or two plain sentences, with the remedy.
    """

    code: str
    text: str


@dataclass(frozen=True, eq=False)
class Density:
    """Where the rows lie, for pictures.

    Attributes
    ----------
    x_edges : (k + 1,) float64
        Equal stretches of the axis (of its logarithm on a log scale), in axis floats.
    rows : (k,) float64
        All rows of each stretch.
    y_edges : (m + 1,) float64
        Equal stretches of y that hold most of the sample.
    sampled : (k, m) float64
        Rows of the sample in each cell.
    """

    x_edges: Floats
    rows: Floats
    y_edges: Floats
    sampled: Floats

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return {name: value.tolist() for name, value in vars(self).items()}

    @classmethod
    def from_dict(cls, plain: dict[str, Any]) -> Density:
        """Build from what `to_dict` returned."""
        return cls(**{name: np.array(value, np.float64) for name, value in plain.items()})


@dataclass(frozen=True, eq=False)
class Limits:
    """Curves below which a share of the rows lies.

    Attributes
    ----------
    levels : tuple of float
        Shares, ascending.
    values : (levels, n) float64
        Limits at the curve's points, in units of y; NaN where too few rows lie beyond.
    coverage : tuple of float
        Share of left-out rows below each: rows of a part of the data, against limits made
        without it. NaN where no row could be judged.
    rows_judged : int
        Rows that `coverage` rests on.
    """

    levels: tuple[float, ...]
    values: Floats
    coverage: tuple[float, ...]
    rows_judged: int

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return {
            "levels": list(self.levels),
            "values": [[_or_none(one) for one in row] for row in self.values.tolist()],
            "coverage": [_or_none(one) for one in self.coverage],
            "rows_judged": self.rows_judged,
        }

    @classmethod
    def from_dict(cls, plain: dict[str, Any]) -> Limits:
        """Build from what `to_dict` returned."""
        values = [[_or_nan(one) for one in row] for row in plain["values"]]
        coverage = tuple(_or_nan(one) for one in plain["coverage"])
        return cls(tuple(plain["levels"]), np.array(values), coverage, plain["rows_judged"])


def _or_none(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _or_nan(value: float | None) -> float:
    return math.nan if value is None else value


@dataclass(frozen=True, eq=False)
class Curve:
    """A reference curve: the mean of y as a function of x.

    Attributes
    ----------
    x : (n,) float64
        Where the curve is given, ascending, in axis floats (seconds since `axis.origin` for
        times).
    estimate : (n,) float64
        Estimated mean of y; NaN where status is ``outside``.
    slope : (n,) float64
        Change of y per unit of x (per second for times): the local line's own slope, or the
        derivative of the local constant curve (NaN with the uniform kernel).
    slope_std_error : (n,) float64
        Standard error of the local line's slope; NaN for the local constant.
    std_error : (n,) float64
        Standard error of the band's centre.
    lower, upper : (n,) float64
        The band.
    effective_rows : (n,) float64
        1 / sum of squared weights: how many equally weighted rows would be as sharp.
    status : (n,) int64
        Index into `STATUSES`.
    residual_sd : (n,) float64
        Standard deviation of single rows around the curve.
    bandwidth : float
        In axis floats; a factor on a log scale (2.0: from half to twice x); the number of rows
        with the estimator ``nearest``.
    axis : Axis
        What the floats of x mean.
    density : Density
        Where the rows lie.
    search : Search
        Criteria of both estimators over the bandwidth, in axis floats or factors.
    cautions : tuple of Caution
        What the reader must know.
    trace : dict
        Everything needed to make the curve again: files, row counts, plan, settings, versions.
    without_folds : FoldCurves or None
        How the band's centre moves without each fold, for comparisons; None if it was not kept.
    """

    x: Floats
    estimate: Floats
    slope: Floats
    slope_std_error: Floats
    std_error: Floats
    lower: Floats
    upper: Floats
    effective_rows: Floats
    status: NDArray[np.int64]
    residual_sd: Floats
    bandwidth: float
    axis: Axis
    density: Density
    search: Search
    cautions: tuple[Caution, ...]
    trace: dict[str, Any]
    without_folds: FoldCurves | None = None
    limits: Limits | None = None

    @property
    def settings(self) -> dict[str, Any]:
        """The settings that made the curve."""
        return dict(self.trace["settings"])

    @property
    def scale(self) -> str:
        """``linear`` or ``log``."""
        return str(self.trace["settings"]["scale"])

    @property
    def rows_counted(self) -> float:
        """Rows that made the curve, each as often as its repeat count says."""
        return float(self.density.rows.sum())

    @property
    def errors_by_fold(self) -> bool:
        """Whether the band's standard errors come from leaving out folds."""
        robust = self.trace.get("robust")
        return self.settings["block"] is not None or bool(robust and robust["rounds"])

    @property
    def few_rows_vote(self) -> bool:
        """Whether most rows took no part in the choice of the width, as `rows_alone` tells."""
        return self.search.rows_alone > _MOST_ROWS_ALONE * self.rows_counted

    @property
    def by_neighbours(self) -> bool:
        """Whether the window is a number of rows: `bandwidth` and the search then hold that."""
        return bool(self.trace["settings"]["estimator"] == NEAREST)

    @property
    def width_word(self) -> str:
        """What the width of the window is called."""
        return "number of neighbours" if self.by_neighbours else "bandwidth"

    @property
    def width_given(self) -> bool:
        """Whether the caller gave the width."""
        told = self.trace["settings"]
        return told["bandwidth"] is not None or told.get("neighbours") is not None

    @property
    def widths_are_factors(self) -> bool:
        """Whether widths are factors of x."""
        return self.scale == "log" and not self.by_neighbours

    def width_label(self, width: float) -> str:
        """Write a width for people: in units of x, as a factor on a log scale, or in rows."""
        if self.by_neighbours:
            return f"{width:,.0f} rows"
        return f"factor {width:.4g}" if self.scale == "log" else self.axis.width_label(width)

    @property
    def statuses(self) -> list[str]:
        """Status names, one per point."""
        return [STATUSES[code] for code in self.status.tolist()]

    def at(self, x: Any) -> Floats:
        """Read the curve at other places, by a cubic spline through its points.

        Parameters
        ----------
        x : array_like
            Places in axis floats, or in the column's own terms (times, dates, texts).

        Returns
        -------
        (n,) float64
            Estimates; NaN outside the supported stretches. The spline departs from the exact
            curve by far less than the standard error; pass ``at=`` when making the curve for
            exact values.

        Raises
        ------
        InputError
            A place does not belong on the axis, or the curve was made at points of the caller's
            own: a spline through those would run across stretches without data.
        """
        if has_own_points(self):
            raise InputError(
                "the curve", "have evenly spaced points to be read elsewhere",
                "it was made with --at", "make it without, or at the places you need",
            )  # fmt: skip
        from scipy.interpolate import CubicSpline

        places = np.atleast_1d(self.axis.floats_from_user(x))
        out = np.full(places.shape, np.nan)
        inside = np.isfinite(self.estimate)
        edges = np.flatnonzero(np.diff(np.concatenate(([0], inside.astype(int), [0]))))
        transform = np.log if self.scale == "log" else np.asarray
        for start, stop in edges.reshape(-1, 2).tolist():
            knots, values = self.x[start:stop], self.estimate[start:stop]
            here = (places >= knots[0]) & (places <= knots[-1])
            if stop - start == 1:
                out[here] = values[0]
            elif here.any():
                out[here] = CubicSpline(transform(knots), values)(transform(places[here]))
        return out

    def table(self) -> pa.Table:
        """Return the curve as an Arrow table, the trace in its schema metadata.

        Returns
        -------
        pyarrow.Table
            Columns ``x`` (in the column's own type), ``estimate``, ``slope``,
            ``slope_std_error``, ``std_error``, ``lower``, ``upper``, ``effective_rows``,
            ``residual_sd``, ``status``. Values without support are null.
        """
        import pyarrow as pa

        def column(values: Floats) -> pa.Array:
            return pa.array(values, mask=~np.isfinite(values))

        columns = {"x": self.axis.to_arrow(self.x)}
        for name in VALUES:
            columns[name] = column(getattr(self, name))
        if self.limits is not None:
            for level, values in zip(self.limits.levels, self.limits.values, strict=True):
                columns[limit_name(level)] = column(values)
        columns["status"] = pa.array(self.statuses)
        metadata = {CURVE_KEY: json.dumps(self.to_dict(), allow_nan=False).encode()}
        return pa.table(columns).replace_schema_metadata(metadata)

    def to_dict(self) -> dict[str, Any]:
        """Return everything but the table's own columns as plain data for JSON."""
        return {
            "format": FORMAT,
            "x_floats": self.x.tolist(),
            "bandwidth": self.bandwidth,
            "axis": self.axis.to_dict(),
            "density": self.density.to_dict(),
            "search": self.search.to_dict(),
            "cautions": [caution._asdict() for caution in self.cautions],
            "trace": self.trace,
            "without_folds": None if self.without_folds is None else self.without_folds.to_dict(),
            "limits": None if self.limits is None else self.limits.to_dict(),
        }

    @classmethod
    def from_table(cls, table: pa.Table, name: str = "the table") -> Curve:
        """Build a curve from what `table` returned.

        Raises
        ------
        InputError
            The table is no curve, or a newer version wrote it.
        """
        metadata = table.schema.metadata or {}
        if CURVE_KEY not in metadata:
            raise InputError(
                "CURVE", "be a curve that fastsmooth wrote", f"{name} carries no trace",
                "name a file that 'fastsmooth curve --out' made",
            )  # fmt: skip
        told = json.loads(metadata[CURVE_KEY])
        if told["format"] != FORMAT:
            raise InputError(
                "CURVE", f"have format {FORMAT}", f"{name} has format {told['format']}",
                "make the curve again with this version",
            )  # fmt: skip
        values = {column: table[column].to_numpy().astype(np.float64) for column in VALUES}
        status = np.array([STATUSES.index(one) for one in table["status"].to_pylist()], np.int64)
        return cls.from_parts(told, values, status)

    @classmethod
    def from_parts(
        cls, told: dict[str, Any], values: dict[str, Floats], status: NDArray[np.int64]
    ) -> Curve:
        """Build a curve from what `to_dict` returned and the columns of its table.

        Parameters
        ----------
        told : dict
            See `to_dict`.
        values : dict of str to (n,) float64
            The columns named in `VALUES`.
        status : (n,) int64
            Index into `STATUSES`.
        """
        # Curves written before deviations were kept have none.
        kept, limits = told.get("without_folds"), told.get("limits")
        return cls(
            x=np.array(told["x_floats"], np.float64),
            **values,
            status=status,
            bandwidth=told["bandwidth"],
            axis=Axis.from_dict(told["axis"]),
            density=Density.from_dict(told["density"]),
            search=Search.from_dict(told["search"]),
            cautions=tuple(Caution(**one) for one in told["cautions"]),
            trace=told["trace"],
            without_folds=None if kept is None else FoldCurves.from_dict(kept),
            limits=None if limits is None else Limits.from_dict(limits),
        )

    def save(self, path: Any) -> None:
        """Write the curve; the suffix decides: .parquet, .arrow, .csv or .json.

        Parquet, Arrow and JSON files carry the trace and can be read back with `load_curve`; a
        CSV file holds the table alone.

        Raises
        ------
        WriteError
            The file cannot be written; nothing is left behind.
        """
        from fastsmooth.files_out import write_curve

        self._spare_data(path, "--out")
        write_curve(self, path)

    def plot(self, path: Any) -> None:
        """Draw the curve and its search; the suffix decides: .png, .svg or .pdf.

        Raises
        ------
        WriteError
            The file cannot be written; nothing is left behind.
        """
        from fastsmooth.report.picture import draw

        self._spare_data(path, "--plot")
        draw(self, path)

    def page(self, path: Any) -> None:
        """Write the curve as one HTML file, where values can be read by pointing at them.

        Raises
        ------
        WriteError
            The file cannot be written; nothing is left behind.
        """
        from fastsmooth.report.page import write_page

        write_page(self, path)

    def _spare_data(self, path: Any, argument: str) -> None:
        """Refuse to write over the data that the curve was made from."""
        spare_data([record["path"] for record in self.trace["files"]], path, argument)


def limit_name(level: float) -> str:
    """Return the name of a limit's column in a curve's table."""
    return f"limit_{level:g}"


def has_own_points(curve: Curve) -> bool:
    """Return whether the curve was made at points of the caller's own.

    Nothing is then known of what lies between them.
    """
    return curve.trace["settings"].get("at") is not None


def spare_data(data: Sequence[str], path: Any, argument: str) -> None:
    """Refuse an output that is one of the data files.

    Raises
    ------
    WriteError
        It is, or it is no path.
    """
    if not isinstance(path, str | os.PathLike):
        raise WriteError(argument, "name a file", f"it is {path!r}", "give a path")
    place = os.path.realpath(path)
    if any(os.path.realpath(one) == place for one in data):
        raise WriteError(
            argument, "leave the data alone", f"'{path}' is one of the files that were read",
            "name another file",
        )  # fmt: skip

"""A namespace of polars frames: importing this module gives every frame ``.fastsmooth``."""

from __future__ import annotations

from collections.abc import Sequence

import polars as pl

from fastsmooth.settings import Band, Reading, Smoothing


@pl.api.register_lazyframe_namespace("fastsmooth")
@pl.api.register_dataframe_namespace("fastsmooth")
class CurveFrame:
    """What fastsmooth does with a polars frame, lazy or not.

    Parameters
    ----------
    frame : polars.DataFrame or polars.LazyFrame
        The readings. A lazy frame is run by its own engine, once.

    Examples
    --------
    >>> import numpy as np
    >>> import polars as pl
    >>> import fastsmooth.polars_frames
    >>> rng = np.random.default_rng(1)
    >>> wet_bulb_c = rng.uniform(0.0, 25.0, 6000)
    >>> power_kw = 20.0 + 0.04 * wet_bulb_c**2 + rng.normal(0.0, 0.1, 6000)
    >>> readings = pl.DataFrame({"wet_bulb_c": wet_bulb_c, "power_kw": power_kw})
    >>> readings = readings.with_columns(plant=pl.int_range(pl.len()) % 3)
    >>> curves = readings.fastsmooth.curve("wet_bulb_c", "power_kw", by="plant")
    >>> curves.group_by("plant").len().sort("plant").rows()
    [(0, 256), (1, 256), (2, 256)]
    """

    def __init__(self, frame: pl.DataFrame | pl.LazyFrame) -> None:
        self._frame = frame

    def curve(
        self,
        x: str,
        y: str,
        *,
        by: str | Sequence[str] | None = None,
        shared_bandwidth: bool = False,
        weight: str | None = None,
        count: str | None = None,
        reading: Reading | None = None,
        smoothing: Smoothing | None = None,
        band: Band | None = None,
    ) -> pl.DataFrame:
        """Make the reference curve of y as a function of x, one for each group.

        Parameters
        ----------
        x, y : str
            Columns.
        by : str, sequence of str or None
            Columns whose values tell groups apart; a time column may be cut with a unit, as in
            ``logged_at:month``. None makes one curve of all rows.
        shared_bandwidth, weight, count, reading, smoothing, band
            As for `fastsmooth.make_fleet` and `fastsmooth.make_curve`.

        Returns
        -------
        polars.DataFrame
            The columns of `by`, then those of a curve's table, one row for each point. A group
            that carries no curve has one row: its status says why, and its values are null.

        Raises
        ------
        InputError
            An argument or the rows cannot be used.
        """
        from fastsmooth.api import make_curve
        from fastsmooth.fleet import FACTS
        from fastsmooth.manyunits import make_fleet

        if by is None:
            made = make_curve(
                self._frame, x, y, weight=weight, count=count, reading=reading,
                smoothing=smoothing, band=band,
            )  # fmt: skip
            return pl.DataFrame(made.table())
        fleet = make_fleet(
            self._frame, x, y, by=by, shared_bandwidth=shared_bandwidth, weight=weight,
            count=count, reading=reading, smoothing=smoothing, band=band,
        )  # fmt: skip
        return pl.DataFrame(fleet.table().drop_columns([FACTS]))

"""Reference curves from very large tables, with a width that the data chose."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from fastsmooth.api import make_curve, search_bandwidth
    from fastsmooth.arrays import smooth
    from fastsmooth.blocks import Block
    from fastsmooth.compare import compare_curves
    from fastsmooth.comparison import CurveComparison, UnitComparison
    from fastsmooth.curve import Caution, Curve
    from fastsmooth.errors import FastsmoothError, InputError, ReadError, WriteError
    from fastsmooth.files_out import load_curve
    from fastsmooth.fleet import Fleet, Unit, units_of
    from fastsmooth.fromtable import curve_from_table, plan_for
    from fastsmooth.manyunits import make_fleet
    from fastsmooth.measure.compare import Comparison, compare_measurements
    from fastsmooth.measure.figures import Measurement
    from fastsmooth.measure.reading import load_measurement
    from fastsmooth.measure.run import measure_machine
    from fastsmooth.score import Scored, score_rows
    from fastsmooth.settings import Band, Reading, Smoothing
    from fastsmooth.store.opening import Store, open_store
    from fastsmooth.store.settings import StoreSettings
    from fastsmooth.store.update import Updated, update_store
    from fastsmooth.trail import Search, Trail

_HOMES = {
    "make_curve": "api",
    "search_bandwidth": "api",
    "smooth": "arrays",
    "load_curve": "files_out",
    "plan_for": "fromtable",
    "curve_from_table": "fromtable",
    "Fleet": "fleet",
    "Unit": "fleet",
    "units_of": "fleet",
    "make_fleet": "manyunits",
    "Comparison": "measure.compare",
    "compare_measurements": "measure.compare",
    "Measurement": "measure.figures",
    "load_measurement": "measure.reading",
    "measure_machine": "measure.run",
    "compare_curves": "compare",
    "CurveComparison": "comparison",
    "UnitComparison": "comparison",
    "Scored": "score",
    "score_rows": "score",
    "Curve": "curve",
    "Caution": "curve",
    "Search": "trail",
    "Trail": "trail",
    "Reading": "settings",
    "Smoothing": "settings",
    "Band": "settings",
    "Block": "blocks",
    "Store": "store.opening",
    "StoreSettings": "store.settings",
    "Updated": "store.update",
    "open_store": "store.opening",
    "update_store": "store.update",
    "FastsmoothError": "errors",
    "InputError": "errors",
    "ReadError": "errors",
    "WriteError": "errors",
}

__all__ = [
    "Band",
    "Block",
    "Caution",
    "Comparison",
    "Curve",
    "CurveComparison",
    "FastsmoothError",
    "Fleet",
    "InputError",
    "Measurement",
    "ReadError",
    "Reading",
    "Scored",
    "Search",
    "Smoothing",
    "Store",
    "StoreSettings",
    "Trail",
    "Unit",
    "UnitComparison",
    "Updated",
    "WriteError",
    "compare_curves",
    "compare_measurements",
    "curve_from_table",
    "load_curve",
    "load_measurement",
    "make_curve",
    "make_fleet",
    "measure_machine",
    "open_store",
    "plan_for",
    "score_rows",
    "search_bandwidth",
    "smooth",
    "units_of",
    "update_store",
]


def __getattr__(name: str) -> Any:
    # Loaded on first use: numpy, pyarrow and numba would cost every import half a second.
    from importlib import import_module

    if name not in _HOMES:
        raise AttributeError(f"module 'fastsmooth' has no attribute '{name}'")
    value = getattr(import_module(f"fastsmooth.{_HOMES[name]}"), name)
    globals()[name] = value
    return value

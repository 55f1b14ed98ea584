"""Reference curves from very large tables, with a width that the data chose."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from fastsmooth.api import make_curve, search_bandwidth
    from fastsmooth.blocks import Block
    from fastsmooth.curve import Caution, Curve
    from fastsmooth.errors import FastsmoothError, InputError, ReadError, WriteError
    from fastsmooth.files_out import load_curve
    from fastsmooth.settings import Band, Reading, Smoothing
    from fastsmooth.trail import Search, Trail

_HOMES = {
    "make_curve": "api",
    "search_bandwidth": "api",
    "load_curve": "files_out",
    "Curve": "curve",
    "Caution": "curve",
    "Search": "trail",
    "Trail": "trail",
    "Reading": "settings",
    "Smoothing": "settings",
    "Band": "settings",
    "Block": "blocks",
    "FastsmoothError": "errors",
    "InputError": "errors",
    "ReadError": "errors",
    "WriteError": "errors",
}

__all__ = [
    "Band",
    "Block",
    "Caution",
    "Curve",
    "FastsmoothError",
    "InputError",
    "ReadError",
    "Reading",
    "Search",
    "Smoothing",
    "Trail",
    "WriteError",
    "load_curve",
    "make_curve",
    "search_bandwidth",
]


def __getattr__(name: str) -> Any:
    # Loaded on first use: numpy, pyarrow and numba would cost every import half a second.
    from importlib import import_module

    if name not in _HOMES:
        raise AttributeError(f"module 'fastsmooth' has no attribute '{name}'")
    value = getattr(import_module(f"fastsmooth.{_HOMES[name]}"), name)
    globals()[name] = value
    return value

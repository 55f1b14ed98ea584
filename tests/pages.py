"""Fleets for tests of the page: a few real curves, under as many names as asked for."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from fastsmooth import Band, Fleet, Reading, Unit, make_fleet
from fastsmooth.curve import Caution

PLANTS = ("Alpweg", "Birkenau", "Corso", "Dorf")
ROWS_PER_PLANT = 1500


def readings(seed: int = 1) -> dict[str, Any]:
    """Wet-bulb temperature and power of four plants and of one whose sensor is stuck."""
    rng = np.random.default_rng(seed)
    x, y, plant = [], [], []
    for place, name in enumerate(PLANTS):
        here = rng.normal(8.0 + 2.0 * place, 4.0 + 0.5 * place, ROWS_PER_PLANT)
        x.append(here)
        y.append(
            20.0 + 6.0 * place + (0.03 + 0.02 * place) * np.clip(here - 4.0, 0.0, None) ** 2
            + rng.normal(0.0, 1.0 + place, ROWS_PER_PLANT)
        )  # fmt: skip
        plant += [name] * ROWS_PER_PLANT
    x.append(np.full(50, 7.0))
    y.append(rng.normal(30.0, 1.0, 50))
    plant += ["Ebnet"] * 50
    return {
        "wet_bulb_c": np.concatenate(x), "power_kw": np.concatenate(y), "plant": np.array(plant),
    }  # fmt: skip


def small_fleet(**settings: Any) -> Fleet:
    """Four curves, one of them with a caution, and a unit without one."""
    made = make_fleet(
        readings(), "wet_bulb_c", "power_kw", by="plant",
        reading=Reading(threads=1), band=Band(**settings),
    )  # fmt: skip
    return replace(made, units=tuple(_warned(unit) for unit in made.units))


def _warned(unit: Unit) -> Unit:
    if unit.key != ("Dorf",) or unit.curve is None:
        return unit
    caution = Caution("several minima", "The criterion has 2 separate minima.")
    curve = replace(unit.curve, cautions=(*unit.curve.cautions, caution))
    return Unit(unit.key, unit.status, unit.reason, unit.rows, curve)


def renamed(fleet: Fleet, keys: Sequence[tuple[Any, ...]], by: Sequence[str] = ("plant",)) -> Fleet:
    """Return a fleet of units with these keys, whose curves are the fleet's, one after another."""
    units = []
    for place, key in enumerate(keys):
        model = fleet.units[place % len(fleet.units)]
        units.append(Unit(key, model.status, model.reason, model.rows, model.curve))
    return replace(fleet, by=tuple(by), units=tuple(units))


def many(fleet: Fleet, count: int) -> Fleet:
    """Return a fleet of so many units, and with a caution of its own."""
    made = renamed(fleet, [(f"plant {number:03d}",) for number in range(count)])
    cautions = (Caution("many refused", "Half of the rows were <refused>. Find out why."),)
    return replace(made, cautions=cautions)

"""A measurement read back from JSON, every field checked."""

from __future__ import annotations

import json
import os
import sys
from typing import Any, NoReturn

from fastsmooth.errors import InputError
from fastsmooth.machine import Machine
from fastsmooth.measure.figures import FORMAT, KIND, Figure, Loading, Measurement

_REMEDY = "name a file that 'fastsmooth bench --out' made"
# No count or size of bytes comes near it.
_LARGEST_WHOLE = 1 << 62
_STATES = ("compiled", "loaded", "present")


def load_measurement(path: str | os.PathLike[str], argument: str = "MEASUREMENT") -> Measurement:
    """Read a measurement that `Measurement.save` or ``fastsmooth bench`` wrote.

    Parameters
    ----------
    path : path
        A JSON file.
    argument : str
        The option that named it, for the refusal.

    Returns
    -------
    Measurement
        Equal to the one that was written.

    Raises
    ------
    InputError
        There is no such file, it cannot be read, or it holds something else.
    """
    name = os.fspath(path)
    shown = f"'{name}'"
    if not os.path.isfile(name):
        what = "is a folder" if os.path.isdir(name) else "does not exist"
        raise InputError(argument, "name a JSON file", f"{shown} {what}", _REMEDY)
    try:
        with open(name, encoding="utf-8") as stream:
            plain = json.load(stream)
    except OSError as error:
        reason = error.strerror or str(error)
        raise InputError(
            argument, "be readable", f"reading {shown} failed: {reason}", "check the file"
        ) from error
    except (ValueError, RecursionError):
        raise InputError(argument, "hold JSON", f"{shown} holds none", _REMEDY) from None
    return measurement_from(plain, argument, shown)


def measurement_from(plain: Any, argument: str, shown: str) -> Measurement:
    """Build a measurement from plain data.

    Parameters
    ----------
    plain : object
        What `Measurement.to_dict` returned; further keys are passed over.
    argument, shown : str
        Who named it and how to call it, for the refusal.

    Raises
    ------
    InputError
        It is something else, of a later format, or was altered.
    """
    if not isinstance(plain, dict) or plain.get("kind") != KIND:
        raise InputError(
            argument, "hold the measurement of a machine", f"{shown} holds something else", _REMEDY
        )
    fields = _Fields(plain, "", argument, shown)
    form = fields.whole("format", 1)
    if form != FORMAT:
        raise InputError(
            argument, f"be of format {FORMAT}", f"{shown} is of format {form}",
            "measure again, or read it with the version of fastsmooth that wrote it",
        )  # fmt: skip
    figures = plain.get("figures")
    if not isinstance(figures, list) or not figures:
        fields.refuse("figures", "is no list of figures")
    loading = fields.inner("loading")
    made = Measurement(
        machine=_machine(fields.inner("machine")),
        measured_at=fields.text("measured_at"),
        threads=fields.whole("threads", 1),
        quick=fields.flag("quick"),
        price_per_hour=fields.maybe_number("price_per_hour", positive=True),
        loading=Loading(loading.number("seconds"), loading.one_of("state", _STATES)),
        load_average=fields.maybe_number("load_average"),
        stolen_share=fields.maybe_number("stolen_share"),
        figures=tuple(
            _figure(_Fields(one, f"figures[{place}].", argument, shown))
            for place, one in enumerate(figures)
        ),
    )
    keys = [(one.job, one.case, one.threads) for one in made.figures]
    if len(set(keys)) < len(keys):
        fields.refuse("figures", "holds a figure twice")
    return made


def _machine(fields: _Fields) -> Machine:
    versions = fields.inner("versions")
    return Machine(
        processor=fields.text("processor"),
        architecture=fields.text("architecture"),
        code_target=fields.text("code_target"),
        system=fields.text("system"),
        cores=fields.whole("cores", 1),
        cores_in_all=fields.whole("cores_in_all", 1),
        core_quota=fields.maybe_number("core_quota", positive=True),
        memory_bytes=fields.maybe_whole("memory_bytes"),
        cache_bytes=fields.wholes("cache_bytes"),
        cores_on_last_cache=fields.whole("cores_on_last_cache", 1),
        versions={name: versions.text(name) for name in versions.plain},
    )


def _figure(fields: _Fields) -> Figure:
    made = Figure(
        job=fields.text("job"),
        case=fields.text("case"),
        unit=fields.text("unit"),
        threads=fields.whole("threads", 1),
        value=fields.number("value", positive=True),
        low=fields.number("low", positive=True),
        high=fields.number("high", positive=True),
        rounds=fields.whole("rounds", 1),
        processors=fields.number("processors"),
        sizes=fields.wholes("sizes"),
    )
    if not made.low <= made.value <= made.high:
        fields.refuse("value", f"is {made.value:g} and lies outside of its quartiles")
    return made


class _Fields:
    """The fields of one JSON object; each is checked as it is taken."""

    def __init__(self, plain: Any, path: str, argument: str, shown: str) -> None:
        self.path, self.argument, self.shown = path, argument, shown
        if not isinstance(plain, dict):
            self.path = ""
            self.refuse(path.rstrip("."), "is no object")
        self.plain: dict[str, Any] = plain

    def refuse(self, name: str, what: str) -> NoReturn:
        raise InputError(
            self.argument, "be as fastsmooth wrote it",
            f"'{self.path}{name}' in {self.shown} {what}", _REMEDY,
        )  # fmt: skip

    def _value(self, name: str) -> Any:
        if name not in self.plain:
            self.refuse(name, "is missing")
        return self.plain[name]

    def inner(self, name: str) -> _Fields:
        return _Fields(self._value(name), f"{self.path}{name}.", self.argument, self.shown)

    def text(self, name: str) -> str:
        value = self._value(name)
        if not isinstance(value, str) or not value or not value.isprintable():
            self.refuse(name, "is no text of one line")
        return str(value)

    def one_of(self, name: str, known: tuple[str, ...]) -> str:
        value = self.text(name)
        if value not in known:
            self.refuse(name, f"is none of {', '.join(known)}")
        return value

    def flag(self, name: str) -> bool:
        value = self._value(name)
        if not isinstance(value, bool):
            self.refuse(name, "is neither true nor false")
        return bool(value)

    def whole(self, name: str, low: int = 0) -> int:
        value = self._value(name)
        good = isinstance(value, int) and not isinstance(value, bool)
        if not good or not low <= value <= _LARGEST_WHOLE:
            self.refuse(name, f"is no whole number from {low} on")
        return int(value)

    def maybe_whole(self, name: str) -> int | None:
        return None if self._value(name) is None else self.whole(name, 1)

    def wholes(self, name: str) -> dict[str, int]:
        inner = self.inner(name)
        return {one: inner.whole(one) for one in inner.plain}

    def number(self, name: str, positive: bool = False) -> float:
        value = self._value(name)
        good = isinstance(value, int | float) and not isinstance(value, bool)
        if not good or not 0 <= value <= sys.float_info.max or (positive and value == 0):
            self.refuse(name, f"is no {'positive' if positive else 'finite'} number")
        return float(value)

    def maybe_number(self, name: str, positive: bool = False) -> float | None:
        return None if self._value(name) is None else self.number(name, positive)

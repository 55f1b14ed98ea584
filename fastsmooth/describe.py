"""What a file or folder is: a curve with its trace, or data with their columns."""

from __future__ import annotations

import os
from typing import Any

from fastsmooth.curve import CURVE_KEY, Curve
from fastsmooth.files import find_files
from fastsmooth.files_out import load_curve
from fastsmooth.fleet import FLEET_KEY, Fleet
from fastsmooth.fleetwords import fleet_facts, fleet_lines
from fastsmooth.source import Columns, _open_files
from fastsmooth.store.disk import is_store
from fastsmooth.summary import curve_facts, curve_lines


def describe(path: str | os.PathLike[str]) -> dict[str, Any]:
    """Return what a curve was made from, or which columns data hold, as plain data.

    Parameters
    ----------
    path : path
        A curve file, or a data file, folder or glob.

    Returns
    -------
    dict
        ``kind`` is ``curve``, ``fleet``, ``store`` or ``data``.

    Raises
    ------
    InputError
        There is no such file, or it is neither.
    """
    name = os.fspath(path)
    if is_store(name):
        from fastsmooth.store.telling import store_facts

        return store_facts(name)
    made = result_in_file(name)
    if isinstance(made, Curve):
        plan = {k: v for k, v in made.trace["plan"].items() if k != "pilot"}
        return {
            "kind": "curve", "path": name, "lines": curve_lines(made), **curve_facts(made),
            "files": made.trace["files"], "plan": plan, "versions": made.trace["versions"],
        }  # fmt: skip
    if isinstance(made, Fleet):
        return {
            "kind": "fleet", "path": name, "lines": fleet_lines(made), **fleet_facts(made),
            "files": made.trace["files"], "versions": made.trace["versions"],
        }  # fmt: skip
    reader = _open_files(find_files(name), Columns("", ""))
    try:
        fields = {field.name: field for schema in reader.schemas for field in schema}
        columns = []
        for field in fields.values():
            metadata = field.metadata or {}
            columns.append(
                {
                    "name": field.name,
                    "type": str(field.type),
                    "unit": metadata.get(b"unit", b"").decode("utf-8", "replace"),
                }
            )
        return {
            "kind": "data", "path": name, "files": len(reader.files),
            "rows": reader.rows_expected, "columns": columns,
        }  # fmt: skip
    finally:
        reader.close()


def result_in_file(path: str) -> Curve | Fleet | None:
    """Return the curve or the curves that a file holds; None if it holds neither."""
    suffix = os.path.splitext(path)[1].lower()
    if not os.path.isfile(path):
        return None
    if suffix == ".json":
        return load_curve(path)
    if suffix in (".parquet", ".arrow"):
        import pyarrow as pa
        import pyarrow.parquet as pq

        try:
            if suffix == ".parquet":
                metadata = pq.read_schema(path).metadata
            else:
                with pa.memory_map(path) as opened:
                    metadata = pa.ipc.open_file(opened).schema.metadata
        except (pa.ArrowInvalid, OSError):
            return None  # the data reader says what is wrong with it
        if {CURVE_KEY, FLEET_KEY} & set(metadata or {}):
            return load_curve(path)
    return None


def description_lines(told: dict[str, Any]) -> list[str]:
    """Return a description as lines for people."""
    if told["kind"] == "store":
        from fastsmooth.store.telling import store_lines

        return store_lines(told)
    if told["kind"] in ("curve", "fleet"):
        lines = [*told["lines"], ""]
        settings = told["settings"]
        given = {k: v for k, v in settings.items() if v not in (None, "")}
        lines.append("settings   " + ", ".join(f"{k} {_plainly(v)}" for k, v in given.items()))
        if "fit_definitions" in told:
            lines.append("fit        " + told["fit_definitions"])
        versions = told["versions"]
        lines.append("versions   " + ", ".join(f"{k} {v}" for k, v in versions.items()))
        for record in told["files"]:
            rows = "" if record["rows"] is None else f", {record['rows']:,} rows"
            lines.append(f"file       {record['path']} ({record['size_bytes']:,} bytes{rows})")
        return lines
    rows = "unknown number of" if told["rows"] is None else f"{told['rows']:,}"
    lines = [f"{rows} rows in {told['files']:,} file{'s' if told['files'] != 1 else ''}", ""]
    width = max((len(column["name"]) for column in told["columns"]), default=0)
    for column in told["columns"]:
        unit = f"  [{column['unit']}]" if column["unit"] else ""
        lines.append(f"  {column['name']:<{width}}  {column['type']}{unit}")
    return lines


def _plainly(value: object) -> str:
    """A setting as people write it."""
    whole = isinstance(value, int) and not isinstance(value, bool)
    return f"{value:,}" if whole else str(value)

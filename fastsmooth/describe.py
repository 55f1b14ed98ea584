"""What a file or folder is: a curve with its trace, or data with their columns."""

from __future__ import annotations

import os
from typing import Any

from fastsmooth.curve import CURVE_KEY, Curve
from fastsmooth.files import find_files
from fastsmooth.files_out import load_curve
from fastsmooth.source import Columns, _open_files
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
        ``kind`` is ``curve`` or ``data``.

    Raises
    ------
    InputError
        There is no such file, or it is neither.
    """
    name = os.fspath(path)
    made = _curve_of(name)
    if made is not None:
        plan = {k: v for k, v in made.trace["plan"].items() if k != "pilot"}
        return {
            "kind": "curve", "path": name, "lines": curve_lines(made), **curve_facts(made),
            "files": made.trace["files"], "plan": plan, "versions": made.trace["versions"],
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


def _curve_of(path: str) -> Curve | None:
    """The curve in a file, or None if the file is no curve."""
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
        if CURVE_KEY in (metadata or {}):
            return load_curve(path)
    return None


def description_lines(told: dict[str, Any]) -> list[str]:
    """Return a description as lines for people."""
    if told["kind"] == "curve":
        lines = [*told["lines"], ""]
        settings = told["settings"]
        given = {k: v for k, v in settings.items() if v not in (None, "")}
        lines.append("settings   " + ", ".join(f"{k} {v}" for k, v in given.items()))
        lines.append("fit        " + told["fit_definitions"])
        versions = told["versions"]
        lines.append("versions   " + ", ".join(f"{k} {v}" for k, v in versions.items()))
        for record in told["files"]:
            rows = "" if record["rows"] is None else f", {record['rows']:,} rows"
            lines.append(f"file       {record['path']} ({record['size_bytes']:,} bytes{rows})")
        return lines
    rows = "unknown number of" if told["rows"] is None else f"{told['rows']:,}"
    lines = [f"{rows} rows in {told['files']} file{'s' if told['files'] != 1 else ''}", ""]
    width = max((len(column["name"]) for column in told["columns"]), default=0)
    for column in told["columns"]:
        unit = f"  [{column['unit']}]" if column["unit"] else ""
        lines.append(f"  {column['name']:<{width}}  {column['type']}{unit}")
    return lines

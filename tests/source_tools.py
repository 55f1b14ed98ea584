"""What the tests of sources share."""

from dataclasses import dataclass, field

import numpy as np


@dataclass
class Gathered:
    x: np.ndarray
    y: np.ndarray
    weight: np.ndarray | None
    count: np.ndarray | None
    extra: list[list]
    rows: int = 0
    filtered: int = 0
    refused: dict[str, int] = field(default_factory=dict)
    sizes: list[int] = field(default_factory=list)


def gather(source, rows=65_536):
    """Read every task in order and join the chunks, checking what each chunk promises."""
    chunks = [chunk for task in source.tasks for chunk in source.chunks(task, rows)]
    for chunk in chunks:
        refused = sum(chunk.refused.values())
        assert len(chunk.x) == chunk.rows - chunk.filtered - refused
        assert all(number > 0 for number in chunk.refused.values())
        assert (chunk.weight is None) == (source.columns.weight is None)
        assert (chunk.count is None) == (source.columns.count is None)
        for values in (chunk.x, chunk.y, chunk.weight, chunk.count):
            if values is not None:
                assert values.dtype == np.float64
                assert values.flags.c_contiguous
                assert values.flags.aligned
                assert len(values) == len(chunk.x)
        assert [len(values) for values in chunk.extra] == [len(chunk.x)] * len(chunk.extra)

    def floats(name):
        parts = [getattr(chunk, name) for chunk in chunks]
        if any(part is None for part in parts):
            return None
        return np.concatenate(parts) if parts else np.empty(0)

    gathered = Gathered(floats("x"), floats("y"), floats("weight"), floats("count"), [])
    for place in range(len(source.columns.extra)):
        gathered.extra.append([v for chunk in chunks for v in chunk.extra[place].to_pylist()])
    for chunk in chunks:
        gathered.rows += chunk.rows
        gathered.filtered += chunk.filtered
        gathered.sizes.append(chunk.rows)
        for reason, number in chunk.refused.items():
            gathered.refused[reason] = gathered.refused.get(reason, 0) + number
    return gathered

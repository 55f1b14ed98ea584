"""Make one curve by the command line in this process and print the peak of its memory.

Started by `bench.fresh`, one process a figure: `python -m bench.peak FILE...`. Prints one line of
JSON: exit code, peak resident bytes, rows used, passes over the data.
"""

import json
import sys
import tempfile
from pathlib import Path

from bench.names import X, Y


def peak_resident_bytes() -> int:
    """Return the most memory that this process has held at once (Linux).

    The kernel's own high-water mark of this address space. `ru_maxrss` would not do: it is
    inherited from the process that started this one, and may be that one's.
    """
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("VmHWM:"):
            return int(line.split()[1]) * 1024
    raise RuntimeError("/proc/self/status holds no VmHWM")


def main(files: list[str]) -> None:
    """Make the curve of the files and tell what it took."""
    from fastsmooth.cli import main as fastsmooth

    with tempfile.TemporaryDirectory() as folder:
        out = f"{folder}/curve.parquet"
        code = fastsmooth(["curve", *files, "--x", X, "--y", Y, "--out", out, "--quiet"])
        peak = peak_resident_bytes()
        from fastsmooth import load_curve

        trace = load_curve(out).trace
    told = {
        "code": code, "peak_bytes": peak, "rows": trace["rows"]["used"],
        "passes": trace["engine"]["passes"],
    }  # fmt: skip
    print(json.dumps(told))


if __name__ == "__main__":
    main(sys.argv[1:])

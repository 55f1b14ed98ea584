"""What a machine is, as far as speed goes: no names of hosts, people or places."""

from __future__ import annotations

import os
import platform
from collections.abc import Mapping
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path

from fastsmooth.settings import usable_cores

_LIBRARIES = ("fastsmooth", "numpy", "numba", "pyarrow")
_PROC = Path("/proc")
_CACHES = Path("/sys/devices/system/cpu/cpu0/cache")
_CGROUP = Path("/sys/fs/cgroup")
# A control group without a limit states a number near 2^63 in its first version.
_NO_LIMIT = 1 << 60
_SCALES = {"K": 1 << 10, "M": 1 << 20, "G": 1 << 30}


@dataclass(frozen=True)
class Machine:
    """What figures of speed were taken on.

    Attributes
    ----------
    processor : str
        Name that the maker gave it, or the architecture where none is told.
    architecture : str
        As the operating system calls it.
    code_target : str
        The processor that compiled kernels are made for.
    system : str
        Name and release of the operating system.
    cores : int
        Processors that this process may use.
    cores_in_all : int
        Processors of the machine.
    core_quota : float or None
        Processors' worth of time that a container may take; None without a limit.
    memory_bytes : int or None
        Main memory, or a container's share of it; None where it is not told.
    cache_bytes : mapping of str to int
        Size of one cache of each level (``L1d``, ``L2``, ``L3``); empty where it is not told.
    cores_on_last_cache : int
        Processors that share one cache of the last level; 1 where it is not told.
    versions : mapping of str to str
        Python and the libraries that do the work.
    """

    processor: str
    architecture: str
    code_target: str
    system: str
    cores: int
    cores_in_all: int
    core_quota: float | None
    memory_bytes: int | None
    cache_bytes: Mapping[str, int]
    cores_on_last_cache: int
    versions: Mapping[str, str]

    @property
    def last_cache_bytes(self) -> int:
        """All caches of the last level together; 0 where they are not told."""
        instances = -(-self.cores_in_all // self.cores_on_last_cache)
        return instances * max(self.cache_bytes.values(), default=0)


def describe_machine() -> Machine:
    """Describe the machine that this process runs on.

    Returns
    -------
    Machine
        Its description; what the operating system does not tell is None or empty.
    """
    from llvmlite.binding import get_host_cpu_name

    caches, sharing = _caches()
    return Machine(
        processor=_processor(),
        architecture=platform.machine(),
        code_target=get_host_cpu_name(),
        system=f"{platform.system()} {platform.release()}",
        cores=usable_cores(),
        cores_in_all=os.cpu_count() or 1,
        core_quota=_core_quota(),
        memory_bytes=_memory_bytes(),
        cache_bytes=caches,
        cores_on_last_cache=sharing,
        versions={
            "python": platform.python_version(), **{one: version(one) for one in _LIBRARIES},
        },
    )  # fmt: skip


def available_bytes() -> int | None:
    """Return the main memory that can be had now, in bytes; None where it is not told."""
    free = None
    for line in _lines(_PROC / "meminfo"):
        if line.startswith("MemAvailable:"):
            free = int(line.split()[1]) << 10
    limit = _container_limit()
    if limit is not None:
        left = max(limit - _container_use(), 0)
        free = left if free is None else min(free, left)
    return free


def stolen_and_all_ticks() -> tuple[int, int] | None:
    """Return processor time that the host gave to others, and all processor time, since the start.

    In the system's ticks, summed over processors; None where it is not told. Source: proc(5).
    """
    for line in _lines(_PROC / "stat"):
        ticks = line.split()[1:]
        if line.startswith("cpu ") and len(ticks) >= 8:
            # User time, nice, system, idle, waiting, two kinds of interrupts, stolen.
            return int(ticks[7]), sum(int(one) for one in ticks[:8])
    return None


def load_average() -> float | None:
    """Return how many processes wanted a processor in the last minute, where it is told."""
    try:
        return os.getloadavg()[0]
    except (AttributeError, OSError):
        return None


def _processor() -> str:
    for line in _lines(_PROC / "cpuinfo"):
        if line.startswith("model name"):
            return " ".join(line.partition(":")[2].split())
    return platform.processor() or platform.machine()


def _caches() -> tuple[dict[str, int], int]:
    """Size of one data cache of each level, and how many processors share one of the last."""
    found: dict[str, tuple[int, int]] = {}
    for folder in sorted(_CACHES.glob("index*")):
        level, kind, size, shared = (
            "".join(_lines(folder / name)) for name in ("level", "type", "size", "shared_cpu_list")
        )
        if kind in ("Data", "Unified") and size[:-1].isdigit() and size[-1] in _SCALES:
            name = f"L{level}d" if level == "1" else f"L{level}"
            found[name] = int(size[:-1]) * _SCALES[size[-1]], _members(shared)
    sharing = found[max(found)][1] if found else 1
    return {name: size for name, (size, _) in sorted(found.items())}, sharing


def _members(listed: str) -> int:
    """Count the members of a list like ``0-3,8``; 1 for an empty one."""
    members = 0
    for part in listed.split(","):
        first, _, last = part.partition("-")
        if first.isdigit() and (last or first).isdigit():
            members += int(last or first) - int(first) + 1
    return max(members, 1)


def _core_quota() -> float | None:
    quota = _whole(_CGROUP / "cpu/cpu.cfs_quota_us")
    period = _whole(_CGROUP / "cpu/cpu.cfs_period_us")
    for line in _lines(_CGROUP / "cpu.max"):
        words = line.split()
        if len(words) == 2 and words[0].isdigit():
            quota, period = int(words[0]), int(words[1])
    return quota / period if quota and period else None


def _memory_bytes() -> int | None:
    try:
        physical = os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
    except (AttributeError, ValueError, OSError):
        return _container_limit()
    limit = _container_limit()
    return physical if limit is None else min(physical, limit)


def _container_limit() -> int | None:
    for name in ("memory.max", "memory/memory.limit_in_bytes"):
        limit = _whole(_CGROUP / name)
        if limit is not None and limit < _NO_LIMIT:
            return limit
    return None


def _container_use() -> int:
    """Bytes in use by the container, without the files that the system keeps in spare memory."""
    for use, details in (
        ("memory.current", "memory.stat"),
        ("memory/memory.usage_in_bytes", "memory/memory.stat"),
    ):
        used = _whole(_CGROUP / use)
        if used is None:
            continue
        for line in _lines(_CGROUP / details):
            name, _, size = line.partition(" ")
            if name in ("active_file", "inactive_file") and size.isdigit():
                used -= int(size)
        return used
    return 0


def _whole(path: Path) -> int | None:
    """The whole number that a file holds, or None."""
    text = "".join(_lines(path))
    return int(text) if text.isdigit() else None


def _lines(path: Path) -> list[str]:
    """The lines of a file of the system; none where there is no such file."""
    try:
        return path.read_text(errors="replace").splitlines()
    except OSError:
        return []

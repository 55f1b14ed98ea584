"""What is told about a machine, read from files laid out as Linux lays them out."""

import json
import os
import platform
import re
from dataclasses import asdict, replace

import pytest

from fastsmooth import machine
from fastsmooth.machine import describe_machine
from fastsmooth.settings import usable_cores


@pytest.fixture
def system(tmp_path, monkeypatch):
    """An empty system; a test writes the files that it is about."""
    for name, constant in (("proc", "_PROC"), ("cache", "_CACHES"), ("cgroup", "_CGROUP")):
        (tmp_path / name).mkdir()
        monkeypatch.setattr(machine, constant, tmp_path / name)

    def write(path, text):
        (tmp_path / path).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / path).write_text(text)

    return write


def test_this_machine_is_described():
    found = describe_machine()
    assert found.cores == usable_cores() <= found.cores_in_all
    assert found.processor
    assert found.code_target
    assert found.versions["python"] == platform.python_version()
    assert {"fastsmooth", "numpy", "numba", "pyarrow"} < set(found.versions)
    assert found.memory_bytes is None or found.memory_bytes > 1 << 26


def test_nothing_says_whose_machine_it_is():
    words = set(re.split(r"[^\w.-]+", json.dumps(asdict(describe_machine()))))
    private = {platform.node(), os.environ.get("USER", ""), os.path.expanduser("~"), os.getcwd()}
    assert not words & (private - {""})


def test_a_system_that_tells_nothing(system, monkeypatch):
    def refuse(*_):
        raise OSError

    monkeypatch.setattr(os, "getloadavg", refuse)
    monkeypatch.setattr(os, "sysconf", refuse)
    found = describe_machine()
    assert (found.core_quota, found.memory_bytes, dict(found.cache_bytes)) == (None, None, {})
    assert found.processor == (platform.processor() or platform.machine())
    assert found.last_cache_bytes == 0
    assert machine.available_bytes() is None
    assert machine.stolen_and_all_ticks() is None
    assert machine.load_average() is None


def test_name_of_the_processor(system):
    system("proc/cpuinfo", "processor\t: 0\nmodel name\t: Maker  Model 7 \nmodel name\t: Other\n")
    assert describe_machine().processor == "Maker Model 7"


def test_caches_of_each_level(system):
    layout = [
        ("index0", "1", "Data", "32K", "0-1"),
        ("index1", "1", "Instruction", "64K", "0-1"),
        ("index2", "2", "Unified", "1024K", "0-1"),
        ("index3", "3", "Unified", "16M", "0-3,8-11"),
    ]
    for index, *values in layout:
        names = ("level", "type", "size", "shared_cpu_list")
        for name, value in zip(names, values, strict=True):
            system(f"cache/{index}/{name}", f"{value}\n")
    found = describe_machine()
    assert found.cache_bytes == {"L1d": 32 << 10, "L2": 1 << 20, "L3": 16 << 20}
    assert found.cores_on_last_cache == 8
    assert replace(found, cores_in_all=24).last_cache_bytes == 3 * (16 << 20)
    assert replace(found, cores_in_all=2).last_cache_bytes == 16 << 20


@pytest.mark.parametrize(("listed", "members"), [("", 1), ("0", 1), ("0-3,8", 5), ("2,4-5", 3)])
def test_members_of_a_list(listed, members):
    assert machine._members(listed) == members


def test_memory_that_can_be_had(system):
    system("proc/meminfo", "MemTotal: 8000 kB\nMemFree: 10 kB\nMemAvailable: 5000 kB\n")
    assert machine.available_bytes() == 5000 << 10
    system("cgroup/memory.max", "3000000\n")
    system("cgroup/memory.current", "1000000\n")
    assert machine.available_bytes() == 2_000_000
    assert describe_machine().memory_bytes == 3_000_000
    # Files that the system keeps in spare memory can be had.
    system("cgroup/memory.stat", "anon 5\ninactive_file 300000\nactive_file 100000\n")
    assert machine.available_bytes() == 2_400_000
    system("cgroup/memory.current", "9000000\n")
    assert machine.available_bytes() == 0


def test_memory_that_can_be_had_in_the_first_version(system):
    system("cgroup/memory/memory.limit_in_bytes", "3000000\n")
    system("cgroup/memory/memory.usage_in_bytes", "1000000\n")
    system("cgroup/memory/memory.stat", "inactive_file 500000\n")
    assert machine.available_bytes() == 2_500_000


@pytest.mark.parametrize(
    ("name", "text", "limit"),
    [
        ("memory.max", "max\n", None),
        ("memory.max", "4096\n", 4096),
        ("memory/memory.limit_in_bytes", "4096\n", 4096),
        ("memory/memory.limit_in_bytes", "9223372036854771712\n", None),
    ],
)
def test_limit_of_a_container(system, name, text, limit):
    system(f"cgroup/{name}", text)
    assert machine._container_limit() == limit


def test_processors_worth_of_time(system):
    assert describe_machine().core_quota is None
    system("cgroup/cpu.max", "max 100000\n")
    assert describe_machine().core_quota is None
    system("cgroup/cpu.max", "150000 100000\n")
    assert describe_machine().core_quota == 1.5


def test_processors_worth_of_time_in_the_first_version(system):
    system("cgroup/cpu/cpu.cfs_quota_us", "-1\n")
    system("cgroup/cpu/cpu.cfs_period_us", "100000\n")
    assert describe_machine().core_quota is None
    system("cgroup/cpu/cpu.cfs_quota_us", "250000\n")
    assert describe_machine().core_quota == 2.5


def test_time_that_the_host_took(system):
    system("proc/stat", "cpu  10 1 5 70 2 0 3 9 4 4\ncpu0 1 1 1 1 1 1 1 1 1 1\n")
    assert machine.stolen_and_all_ticks() == (9, 100)

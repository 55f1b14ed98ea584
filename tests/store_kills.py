"""Updates that are killed: a program of its own, because what has threads must not be forked.

``python -m tests.store_kills FOLDER TRIALS SEED KIND...`` kills updates of some kinds before each
of their calls to the file system (a write also halfway), and TRIALS times at a random instant.
After each the store must hold its former or its new state, and the next update must bring the new
one. Prints the number of trials of each kind as JSON, or fails.
"""

import builtins
import hashlib
import json
import os
import random
import shutil
import signal
import sys
import time
import traceback
from functools import partial
from pathlib import Path

from fastsmooth.store import disk
from fastsmooth.store.opening import open_store
from fastsmooth.store.update import update_store
from tests.store_tools import UNITS, write_day

CALLS = (
    "open", "write", "fsync", "close", "replace", "unlink", "makedirs", "ftruncate", "pwrite",
    "scandir",
)  # fmt: skip


def scenarios(folder):
    """What is done to which store: name -> (base store or None, action on a store's path)."""
    paths = [write_day(folder, day, rows=120) for day in range(6)]
    first, rest = [str(path) for path in paths[:3]], [str(path) for path in paths[3:]]

    def base(name, *steps):
        for step in steps:
            update_store(folder / name, step, UNITS, threads=1)
        return folder / name

    three = base("three", first)
    six = base("six", first, rest)
    changed = folder / "changed"
    shutil.copytree(six, changed)
    write_day(folder, 1, rows=150, seed=1)
    return {
        "first": (None, lambda store: update_store(store, first, UNITS, threads=1)),
        "add": (three, lambda store: update_store(store, rest, threads=1)),
        "replace": (
            changed,
            lambda store: update_store(store, first, replace_changed=True, threads=1),
        ),
        "forget": (six, lambda store: update_store(store, forget_before="2025-02-01", threads=1)),
    }


def fingerprint(store):
    """What a store holds; empty when there is none yet."""
    if disk.read_current(str(store)) is None:
        return ""
    held = open_store(store)
    told = hashlib.sha256()
    for key, table in held.tables(threads=1).items():
        told.update(repr((key, table.tally.to_dict(), table.extent.tolist())).encode())
        for fold, sums in sorted(table.sums.items()):
            told.update(repr(fold).encode() + sums.tobytes())
    told.update(repr([(one.path, one.rows, one.size_bytes) for one in held.entries]).encode())
    return told.hexdigest()


def in_child(work):
    """Run something in a forked child; return its process number."""
    child = os.fork()
    if child:
        return child
    code = 1
    try:
        work()
        code = 0
    except BaseException:
        traceback.print_exc()
    finally:
        sys.stderr.flush()
        os._exit(code)


def dying(action, store, at):
    """Do it, and be killed right before the call of that number, or halfway through a write."""
    count = 0

    def counting(name, call):
        def instead(*args, **kwargs):
            nonlocal count
            count += 1
            if count == at:
                if name == "write":
                    call(args[0], bytes(args[1])[: len(args[1]) // 2])
                os.kill(os.getpid(), signal.SIGKILL)
            return call(*args, **kwargs)

        return instead

    for name in CALLS:
        setattr(os, name, counting(name, getattr(os, name)))
    builtins.open = counting("open file", builtins.open)
    action(store)


def check(action, store, former, new):
    """The store holds one of two states, and the next update leads to the new one."""
    found = fingerprint(store)
    assert found in (former, new), "between two states"
    action(store)
    assert fingerprint(store) == new, "the next update did not bring the new state"
    if found == new:
        assert not action(store).changed
    kept = {disk.CURRENT, disk.LOCK, disk.TABLES}
    left = [name for name in os.listdir(store) if name not in kept]
    assert len(left) == 1, f"left behind: {left}"
    tables = {os.path.basename(part.path) for part in open_store(store).manifest.parts}
    assert set(os.listdir(store / disk.TABLES)) == tables


def finished(child):
    _, status = os.waitpid(child, 0)
    return status


def begin(base, store):
    shutil.rmtree(store, ignore_errors=True)
    if base is not None:
        shutil.copytree(base, store)


def kill(base, action, store, trials, chance):
    """Kill one kind of update in every way; return how often."""

    def whole():
        action(store)

    begin(base, store)
    former = fingerprint(store)
    started = time.perf_counter()
    assert finished(in_child(whole)) == 0
    seconds = time.perf_counter() - started
    new = fingerprint(store)
    assert new not in ("", former)

    calls = 0
    while True:
        begin(base, store)
        status = finished(in_child(partial(dying, action, store, calls + 1)))
        if status == 0:
            break
        assert os.WIFSIGNALED(status), "the update failed"
        calls += 1
        check(action, store, former, new)
    for _ in range(trials):
        begin(base, store)
        child = in_child(whole)
        time.sleep(chance.uniform(0.0, 1.1 * seconds))
        os.kill(child, signal.SIGKILL)
        finished(child)
        check(action, store, former, new)
    return {"calls": calls, "instants": trials}


def main(folder, trials, seed, kinds):
    chance = random.Random(seed)
    known = scenarios(folder)
    told = {kind: kill(*known[kind], folder / "trial", trials, chance) for kind in kinds}
    print(json.dumps(told))


if __name__ == "__main__":
    main(Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3]), sys.argv[4:])

"""A store outlives kills, full disks, flipped bits and a second writer: former or new, and told."""

import errno
import json
import os
import resource
import shutil
import subprocess
import sys
import tempfile
import threading
from pathlib import Path

import numpy as np
import pytest

from fastsmooth import InputError, ReadError, StoreSettings, WriteError, make_curve
from fastsmooth import open_store as opened
from fastsmooth import update_store as update
from fastsmooth.describe import describe
from fastsmooth.store import disk
from tests.store_kills import CALLS, fingerprint
from tests.store_tools import UNITS, write_day

ROOT = Path(__file__).parents[1]
MEMORY = Path("/dev/shm")
# More are run by hand: see tests/store_kills.py.
INSTANTS_OF_EACH_KIND = 25


@pytest.fixture(scope="module")
def days(tmp_path_factory):
    folder = tmp_path_factory.mktemp("days")
    return [str(write_day(folder, day, rows=120)) for day in range(8)]


@pytest.fixture
def store(days, tmp_path):
    """A store of five days, the first four of which are compacted."""
    update(tmp_path / "store", days[:3], UNITS)
    update(tmp_path / "store", days[3:5])
    return tmp_path / "store"


def test_a_kill_at_any_call_or_instant_leaves_the_former_or_the_new_state(tmp_path):
    # Memory syncs in no time; what is tested is the order of calls, not the disk.
    with tempfile.TemporaryDirectory(dir=MEMORY if MEMORY.is_dir() else tmp_path) as folder:
        told = kill_in_two_processes(Path(folder))
    assert set(told) == {"first", "add", "replace", "forget"}
    for kind, killed in told.items():
        assert killed["calls"] >= 20, f"{kind}: the calls were not met"
        assert killed["instants"] == INSTANTS_OF_EACH_KIND


def kill_in_two_processes(folder):
    running = []
    for n, kinds in enumerate((("first", "forget"), ("add", "replace"))):
        (folder / str(n)).mkdir()
        running.append(subprocess.Popen(
            [sys.executable, "-m", "tests.store_kills", str(folder / str(n)),
             str(INSTANTS_OF_EACH_KIND), str(n), *kinds],
            cwd=ROOT, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        ))  # fmt: skip
    told = {}
    for one in running:
        out, complaints = one.communicate(timeout=600)
        assert one.returncode == 0, complaints
        told |= json.loads(out)
    return told


class Failing:
    """Makes the call of a given number fail, as a full or failing disk does."""

    def __init__(self, monkeypatch, number):
        self.count = 0
        self.failing = False
        for name in CALLS:
            monkeypatch.setattr(os, name, self._instead(name, getattr(os, name), number))

    def _instead(self, name, call, at):
        def instead(*args, **kwargs):
            if not self.failing:
                return call(*args, **kwargs)
            self.count += 1
            if self.count == at:
                if name == "write":
                    call(args[0], bytes(args[1])[:7])
                if name == "close":
                    call(*args, **kwargs)
                raise OSError(errno.ENOSPC, "No space left on device")
            return call(*args, **kwargs)

        return instead


def test_a_disk_that_fails_at_any_call_leaves_the_former_or_the_new_state(days, store, monkeypatch):
    former = fingerprint(store)
    copy = store.parent / "copy"
    shutil.copytree(store, copy)
    update(copy, days[5:])
    new = fingerprint(copy)
    refused = number = 0
    while True:
        number += 1
        shutil.rmtree(copy)
        shutil.copytree(store, copy)
        with monkeypatch.context() as patch:
            failing = Failing(patch, number)
            failing.failing = True
            sentence = ""
            try:
                update(copy, days[5:], threads=1)
            except WriteError as error:
                sentence = str(error)
            failing.failing = False
        assert sentence in ("", (
            f"STORE must be writable, but '{copy}' could not be written (the disk is full) and is "
            f"as it was; make room."
        ))  # fmt: skip
        refused += sentence != ""
        if failing.count < number:
            break
        assert fingerprint(copy) in (former, new)
        left = [name for name in os.listdir(copy) if name.endswith(".partial")]
        # Only a disk that refuses to remove a file too can leave one behind.
        assert len(left) <= 1
        update(copy, days[5:])
        assert fingerprint(copy) == new
    assert number > 30
    assert refused > 15


def test_a_limit_on_file_sizes_is_told(days, store):
    former = fingerprint(store)
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (3000, hard))
    try:
        with pytest.raises(WriteError, match=r"\(a file would be larger than allowed\) and is as"):
            update(store, days[5:])
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert fingerprint(store) == former
    assert [name for name in os.listdir(store / "tables") if name.startswith(".")] == []
    update(store, days[5:])


@pytest.mark.parametrize(
    ("number", "words"),
    [
        (errno.EROFS, "the file system is read-only"),
        (errno.EACCES, "there is no permission to write"),
        (errno.EIO, "Input/output error"),
    ],
)
def test_a_closed_folder_is_told_and_can_still_be_read(days, store, monkeypatch, number, words):
    def refuse(path, flags, *rest, _open=os.open):
        if flags & (os.O_WRONLY | os.O_RDWR):
            raise OSError(number, os.strerror(number))
        return _open(path, flags, *rest)

    monkeypatch.setattr(os, "open", refuse)
    with pytest.raises(WriteError) as error:
        update(store, days[5:])
    assert f"'{store}' could not be written ({words}) and is as it was" in str(error.value)
    with pytest.raises(WriteError):
        update(store.parent / "new", days[5:], UNITS)
    assert not (store.parent / "new").exists()
    assert opened(store).counted()[()].table.tally.used == 5 * 120


def files_of(store):
    return sorted(
        os.path.join(base, name)
        for base, _, names in os.walk(store)
        for name in names
        if name != disk.LOCK
    )


def read_all(store):
    opened(store).tables()


def test_a_flipped_bit_in_any_file_is_noticed_and_named(store):
    rng = np.random.default_rng(4)
    assert len(files_of(store)) == 4
    for path in files_of(store):
        content = Path(path).read_bytes()
        places = np.unique(np.concatenate(
            ([0, len(content) - 2], rng.integers(0, len(content) - 1, 25))
        ))  # fmt: skip
        for place in places.tolist():
            damaged = bytearray(content)
            damaged[place] ^= 1 << int(rng.integers(0, 8))
            Path(path).write_bytes(damaged)
            with pytest.raises(ReadError) as error:
                read_all(store)
            assert str(store) in str(error.value)
        Path(path).write_bytes(content)
    read_all(store)


@pytest.mark.parametrize("share", [0.0, 0.5, 0.99])
def test_a_truncated_file_is_noticed_and_named(store, share):
    for path in files_of(store):
        content = Path(path).read_bytes()
        Path(path).write_bytes(content[: int(share * len(content))])
        with pytest.raises(ReadError, match="was changed or cut short") as error:
            read_all(store)
        assert path in str(error.value)
        os.unlink(path)
        with pytest.raises((ReadError, InputError)) as error:
            read_all(store)
        assert str(store) in str(error.value)
        Path(path).write_bytes(content)


def test_a_damaged_table_is_made_anew_from_its_files(days, store):
    before = fingerprint(store)
    part = opened(store).manifest.parts[0]
    (store / part.path).write_bytes(b"nonsense")
    with pytest.raises(ReadError) as error:
        make_curve(store)
    assert str(error.value) == (
        f"STORE must hold what was written to it, but '{store / part.path}' was changed or cut "
        f"short; run 'fastsmooth update' with --replace and the files that it was made of."
    )
    # An update that does not touch the damaged table goes on; it is not made worse.
    done = update(store, days[:1], replace_changed=True)
    assert done.reread == tuple(days[n] for n in part.files)
    assert fingerprint(store) == before


def test_formats_of_other_versions_are_refused_with_the_remedy(store):
    current = store / disk.CURRENT
    _, _, digest = current.read_text().split()
    for number, remedy in ((99, "install the newer version of fastsmooth that wrote it"),
                           (0, "make the store anew from its files")):  # fmt: skip
        current.write_text(f"fastsmooth-store {number} {digest}\n")
        with pytest.raises(ReadError) as error:
            opened(store)
        assert str(error.value) == (
            f"STORE must have format 1, but '{store}' has format {number}; {remedy}."
        )


def test_two_updates_exclude_each_other(days, store):
    former = fingerprint(store)
    with disk.locked(str(store)) as owner:
        assert owner is None
        with pytest.raises(InputError) as refused:
            update(store, days[5:])
        assert str(refused.value).startswith(
            f"STORE must be updated by one process at a time, but '{store}' is locked by process "
            f"{os.getpid()} on "
        )
        assert str(refused.value).endswith(" s ago; wait until it has ended, or end it.")
        # Reading goes on.
        assert fingerprint(store) == former
    assert update(store, days[5:]).unfinished is None


def test_the_lock_of_a_killed_process_is_taken_over_and_told(days, store):
    code = (
        "import os, signal, sys\n"
        "from fastsmooth.store import disk\n"
        "with disk.locked(sys.argv[1]):\n"
        "    os.kill(os.getpid(), signal.SIGKILL)\n"
    )
    subprocess.run([sys.executable, "-c", code, str(store)], cwd=ROOT, check=False, timeout=60)
    done = update(store, days[5:])
    assert done.unfinished is not None
    assert done.unfinished.startswith("process ")
    assert update(store, days[5:]).unfinished is None


def test_a_refused_update_leaves_no_note_of_a_crash(days, store):
    with pytest.raises(InputError):
        update(store, days[5:], StoreSettings("power_kw"))
    assert update(store, days[5:]).unfinished is None


def test_readers_see_whole_states_while_a_writer_goes_on(days, tmp_path):
    update(tmp_path / "store", days[:1], UNITS)
    seen, failures = [], []

    def read():
        try:
            while not done.is_set():
                seen.append(make_used(tmp_path / "store"))
        except Exception as error:
            failures.append(error)
            raise

    done = threading.Event()
    reader = threading.Thread(target=read)
    reader.start()
    try:
        for path in days[1:]:
            update(tmp_path / "store", path)
    finally:
        done.set()
        reader.join()
    assert failures == []
    assert seen == sorted(seen)
    assert {used % 120 for used in seen} == {0}


def make_used(store):
    return sum(unit["rows"] for unit in describe(store)["units"])


def test_everything_is_on_the_disk_before_it_is_named(days, store, monkeypatch):
    """No power cut may leave a name without its content: each file and folder is synced first."""
    synced, renamed, opened_as = set(), [], {}
    real_open, real_sync, real_replace = os.open, os.fsync, os.replace

    def open_(path, *rest):
        handle = real_open(path, *rest)
        opened_as[handle] = os.fspath(path)
        return handle

    def sync(handle):
        real_sync(handle)
        synced.add(opened_as[handle])

    def replace(source, target):
        assert source in synced, "renamed before its content was on the disk"
        if os.path.basename(target) == disk.CURRENT:
            for one in renamed:
                assert os.path.dirname(one) in synced, f"{one} may be missing after a power cut"
        real_replace(source, target)
        renamed.append(target)
        synced.discard(os.path.dirname(target))

    monkeypatch.setattr(os, "open", open_)
    monkeypatch.setattr(os, "fsync", sync)
    monkeypatch.setattr(os, "replace", replace)
    update(store, days[5:])
    assert os.path.basename(renamed[-1]) == disk.CURRENT
    assert len(renamed) >= 4
    assert str(store) in synced

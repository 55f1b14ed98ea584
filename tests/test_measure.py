"""Measuring a machine: the figures, what is left behind, what is refused, and comparisons."""

import copy
import errno
import gc
import json
import math
import re
import shutil
from dataclasses import replace

import pytest

import fastsmooth
from fastsmooth import (
    InputError,
    WriteError,
    compare_measurements,
    load_measurement,
    measure_machine,
)
from fastsmooth.machine import Machine
from fastsmooth.measure import invented, run
from fastsmooth.measure.figures import (
    ACCUMULATION,
    COPY,
    CURVE,
    EXACT,
    JOBS,
    NEIGHBOURS,
    RANDOM,
    SCAN,
    SEARCH,
    SENSOR,
    Figure,
    Loading,
    Measurement,
)
from fastsmooth.measure.sizes import MIB, choose_sizes
from fastsmooth.measure.timing import Work, time_work
from fastsmooth.measure.works import thread_counts
from fastsmooth.settings import usable_cores
from tests.measured import TINY

MACHINE = Machine(
    processor="Maker Model 7", architecture="x86_64", code_target="model7", system="Linux 6.1",
    cores=8, cores_in_all=16, core_quota=None, memory_bytes=32 << 30,
    cache_bytes={"L1d": 32 << 10, "L3": 16 << 20}, cores_on_last_cache=8,
    versions={"python": "3.12.1", "fastsmooth": "0.1.0"},
)  # fmt: skip


def figure(job, case, threads, value, unit, processors=None):
    return Figure(
        job, case, unit, threads, value, 0.9 * value, 1.2 * value, 5,
        float(threads) if processors is None else processors, {"rows": 1000},
    )  # fmt: skip


def by_hand(threads=8, price=None, **changes):
    """A measurement whose numbers are known: with all threads everything is `threads` times."""
    figures = []
    for n in sorted({1, threads}):
        figures += [
            figure(COPY, "one array", n, 10.0 * n, "GB/s"),
            figure(CURVE, RANDOM, n, 10.0 * n, "million rows/s"),
            figure(CURVE, SENSOR, n, 20.0 * n, "million rows/s"),
            figure(ACCUMULATION, "8,192 bins", n, 3.0 / n, "ns per row"),
            figure(SEARCH, "64 widths", n, 80.0 / n, "ms"),
        ]
    made = Measurement(
        MACHINE, "2026-01-01 10:00 UTC", threads, False, price, Loading(0.5, "loaded"), 0.1, 0.001,
        tuple(figures),
    )  # fmt: skip
    return replace(made, **changes)


@pytest.fixture(scope="module")
def heard():
    return []


@pytest.fixture(scope="module")
def measured(tmp_path_factory, heard):
    """Two threads, tiny sizes; the folder must be empty afterwards."""
    folder = tmp_path_factory.mktemp("measured")
    found = run.measure_sizes(TINY, 2, True, 0.5, str(folder), lambda *told: heard.append(told))
    assert list(folder.iterdir()) == []
    return found


def test_every_figure_is_a_time_or_a_rate(measured):
    assert {one.job for one in measured.figures} == set(JOBS)
    for one in measured.figures:
        assert 0.0 < one.low <= one.value <= one.high < math.inf
        assert one.rounds == 2
        assert 0.0 <= one.processors < math.inf
        assert one.unit in ("GB/s", "million rows/s", "ms") or one.unit.startswith("ns per ")
        assert all(size > 0 for size in one.sizes.values())
    assert measured.quick
    assert measured.price_per_hour == 0.5
    assert measured.loading.seconds >= 0.0


def test_figures_come_in_order_with_one_and_all_threads(measured):
    places = [JOBS.index(one.job) for one in measured.figures]
    assert places == sorted(places)
    for job in JOBS:
        counts = {one.threads for one in measured.figures if one.job == job}
        assert counts == {1, 2}
    cases = {(job, case) for job, case, _ in measured.cases()}
    assert (CURVE, f"{SENSOR}, 20,000 rows") in cases
    assert (EXACT, "epanechnikov, 2,000 rows, h 3 % of x") in cases
    assert (EXACT, "biweight, 70,000 rows, h 30 % of x") in cases
    assert (NEIGHBOURS, "k 1, 70,000 rows") in cases
    assert (NEIGHBOURS, "k 1, 2,000 rows") not in cases


def test_decoded_bytes_are_sixteen_a_row(measured):
    for kind in (RANDOM, SENSOR):
        rows, size = measured.figure(SCAN, kind, 1), measured.figure("Parquet scan, bytes", kind, 1)
        assert size.value == pytest.approx(rows.value * 16e6 / 1e9, rel=1e-12)


def test_progress_counts_up_to_all_figures(measured, heard):
    counted = [(done, of) for _, done, of in heard if of is not None]
    total = counted[0][1]
    assert counted == [(done, total) for done in range(total)]
    # The scan gives two figures in one go.
    assert len(measured.figures) == total + 4
    assert heard[0][0].startswith("loading the kernels")


def test_written_and_read_back(measured, tmp_path):
    path = tmp_path / "machine.json"
    measured.save(path)
    assert load_measurement(path) == measured
    assert Measurement.from_dict(json.loads(json.dumps(measured.to_dict()))) == measured
    assert [one.name for one in tmp_path.iterdir()] == ["machine.json"]


def test_arrow_table_holds_every_figure(measured):
    table = measured.table()
    assert table.num_rows == len(measured.figures)
    assert table["value"].to_pylist() == [one.value for one in measured.figures]
    assert table.column_names[:5] == ["job", "case", "unit", "threads", "value"]


def test_against_itself_all_ratios_are_one(measured):
    compared = compare_measurements(measured, measured)
    assert {pair.ratio for pair in compared.pairs} == {1.0}
    assert {pair.all_threads for pair in compared.pairs} == {False, True}
    ratios = [line.split()[-1] for line in compared.lines() if re.search(r"\dx$", line)]
    assert len(ratios) == len(compared.pairs) + 6  # large jobs and their prices too
    assert set(ratios) == {"1.00x"}
    json.dumps(compared.to_dict(), allow_nan=False)


def test_twice_as_fast_whatever_the_unit():
    slow = by_hand()
    fast = replace(slow, figures=tuple(
        replace(one, **{name: getattr(one, name) * (2.0 if one.is_rate else 0.5)
                        for name in ("value", "low", "high")})
        for one in slow.figures
    ))  # fmt: skip
    assert {pair.ratio for pair in compare_measurements(fast, slow).pairs} == {2.0}
    assert {pair.ratio for pair in compare_measurements(slow, fast).pairs} == {0.5}


def test_each_machine_is_compared_with_all_of_its_threads():
    compared = compare_measurements(by_hand(8), by_hand(2))
    for pair in compared.pairs:
        assert (pair.this.threads, pair.other.threads) == ((8, 2) if pair.all_threads else (1, 1))
        assert pair.ratio == pytest.approx(4.0 if pair.all_threads else 1.0)
    assert any(" 8 | 2 " in line for line in compared.lines())


def test_one_processor_against_four():
    compared = compare_measurements(by_hand(1), by_hand(4))
    assert [pair.ratio for pair in compared.pairs if pair.all_threads] == pytest.approx([0.25] * 5)


def test_machines_without_a_common_figure():
    other = by_hand(figures=(figure(SEARCH, "of another kind", 1, 5.0, "ms"),))
    with pytest.raises(InputError, match=r"^--against must hold figures that this measurement has"):
        compare_measurements(by_hand(), other)


def test_what_else_a_ratio_compares():
    assert compare_measurements(by_hand(), by_hand()).cautions == ()
    newer = replace(MACHINE, versions={"python": "3.13.0", "fastsmooth": "0.1.0"})
    told = compare_measurements(by_hand(), by_hand(machine=newer, quick=True)).cautions
    assert told == (
        "Software differs (python 3.12.1 against 3.13.0): ratios compare it too.",
        "A quick measurement takes part: it is rough.",
    )


def test_costs_by_hand():
    # 8 threads: 80 and 160 million rows a second; a search of 10 ms; 0.72 an hour.
    random, sensor, search = by_hand(8, price=0.72).costs()
    assert random.seconds == pytest.approx(12.5)
    assert sensor.seconds == pytest.approx(6.25)
    assert search.seconds == pytest.approx(0.01)
    assert random.price == pytest.approx(0.0025)
    assert sensor.price == pytest.approx(0.00125)
    assert search.price == pytest.approx(2e-6)
    assert [one.price for one in by_hand(8).costs()] == [None, None, None]
    assert by_hand(figures=(figure(COPY, "one array", 1, 1.0, "GB/s"),)).costs() == ()


def test_dearer_and_faster_side_by_side():
    lines = compare_measurements(by_hand(8, price=1.6), by_hand(2, price=0.2)).lines()
    start = next(place for place, line in enumerate(lines) if line.startswith("their price"))
    # Four times as fast, eight times as dear.
    assert lines[start + 1].split()[-3:] == ["0.00556", "0.00278", "0.50x"]
    assert not any("their price" in line for line in
                   compare_measurements(by_hand(8, price=1.6), by_hand(2)).lines())  # fmt: skip


def test_tables_stay_narrow_and_say_what_they_hold():
    figures = tuple(
        figure(
            EXACT,
            "epanechnikov, 10,000,000 rows, h 0.03 % of x",
            1 << power,
            20.0,
            "ns per point and bandwidth",
        )
        for power in range(7)
    )
    many = by_hand(64, price=3.0)
    many = replace(many, figures=(*many.figures, *figures))
    for lines in (many.lines(), compare_measurements(many, many).lines()):
        assert max(map(len, lines)) <= 100
        assert "Maker Model 7" in lines[0]
    head = next(line for line in many.lines() if line.startswith("median"))
    assert head.split()[-6:] == ["1", "16", "32", "64", "gain", "spread"]
    copied = next(line for line in many.lines() if line.strip().startswith("one array"))
    assert copied.split()[-5:] == ["10.0", "640", "64.00x", "30", "%"]
    assert str(many) == "\n".join(many.lines())


def test_one_thread_has_no_gain():
    lines = by_hand(1).lines()
    assert not any("gain" in line for line in lines)
    assert not any("price" in line for line in lines)


@pytest.mark.parametrize(
    ("changes", "sentence"),
    [
        ({"figures": (figure(ACCUMULATION, "bins", 1, 3.0, "ns per row", 1.0),
                      figure(ACCUMULATION, "bins", 8, 3.0, "ns per row", 4.0))},
         "Other work shared the processors: threads got 50 % of them."),
        ({"stolen_share": 0.05}, "The host gave 5 % of the processor time to others"),
        ({"machine": replace(MACHINE, core_quota=1.5)}, "limits this process to 1.5 processors'"),
    ],
)  # fmt: skip
def test_cautions(changes, sentence):
    assert by_hand().cautions == ()
    found = by_hand(**changes)
    (caution,) = found.cautions
    assert sentence in caution
    assert any(line.startswith("caution    ") for line in found.lines())
    # Waiting for memory or files is no sign of others.
    waiting = (figure(COPY, "one array", 8, 10.0, "GB/s", 0.1),)
    assert by_hand(figures=waiting).busy_share is None


@pytest.mark.parametrize(
    ("most", "counts"), [(1, [1]), (2, [1, 2]), (6, [1, 2, 4, 6]), (8, [1, 2, 4, 8])]
)
def test_thread_counts(most, counts):
    assert thread_counts(most) == counts


def test_rounds_that_suffice():
    sizes = replace(TINY, least_rounds=5, least_seconds=1.0)
    assert not sizes.is_enough([])
    assert not sizes.is_enough([0.1] * 9)
    assert sizes.is_enough([0.1] * 11)
    assert not sizes.is_enough([1.0] * 3)
    assert sizes.is_enough([1.5] * 3)
    assert not sizes.is_enough([9.0, 9.0])
    assert sizes.is_enough([1e-9] * 200)
    assert sizes.is_enough([0.1, 0.1], elapsed_seconds=61.0)
    assert not sizes.is_enough([0.1, 0.1], elapsed_seconds=59.0)
    assert not sizes.is_enough([9.0], elapsed_seconds=999.0)


def test_a_figure_is_the_median_of_its_rounds():
    work = Work(COPY, "one array", "GB/s", 1, 2.0, lambda: 7, lambda found: found == 7)
    (found,) = time_work(work, lambda seconds: len(seconds) >= 5)
    assert found.rounds == 5
    assert found.low <= found.value <= found.high
    assert gc.isenabled()


def test_a_wrong_result_is_no_figure():
    work = Work(COPY, "one array", "GB/s", 1, 2.0, lambda: 7, lambda found: found == 8)
    with pytest.raises(RuntimeError, match=r"^memory, copied, one array: the result is wrong$"):
        time_work(work, lambda seconds: True)


# Sizes that suit a machine, and machines that have no room.


def test_sizes_grow_with_the_machine():
    usual = choose_sizes(MACHINE, 8, False, 64 << 30)
    assert usual.copied_bytes >= 4 * MACHINE.last_cache_bytes
    assert max(usual.exact_rows) == 10_000_000
    assert choose_sizes(MACHINE, 64, False, 512 << 30).files == 128
    large = replace(MACHINE, cores_in_all=256, cores_on_last_cache=8)
    assert choose_sizes(large, 64, False, 512 << 30).copied_bytes == 2048 * MIB
    assert choose_sizes(MACHINE, 8, False, None) == usual
    quick = choose_sizes(MACHINE, 8, True, 64 << 30)
    assert quick.disk_bytes < usual.disk_bytes
    assert quick.least_seconds < usual.least_seconds


def test_sizes_shrink_with_the_memory():
    fewer_rows = choose_sizes(MACHINE, 2, False, 1800 * MIB)
    assert max(fewer_rows.exact_rows) == 1_000_000
    assert fewer_rows.files == 48
    fewer_files = choose_sizes(MACHINE, 2, False, 1200 * MIB)
    assert fewer_files.files == 12
    assert fewer_files.copied_bytes <= 150 * MIB
    assert fewer_files.memory_bytes(2) <= 1200 * MIB


def test_no_room_on_the_disk(tmp_path, monkeypatch):
    class Usage:
        free = 100_000

    monkeypatch.setattr(shutil, "disk_usage", lambda folder: Usage)
    with pytest.raises(WriteError) as refusal:
        run.check_room(TINY, 2, str(tmp_path), None)
    assert str(refusal.value) == (
        f"--folder must have 1 MB free for temporary files, but '{tmp_path}' has 0 MB; "
        "free some space, name another folder, or give --quick."
    )


def test_no_room_in_memory(tmp_path):
    with pytest.raises(InputError) as refusal:
        run.check_room(TINY, 2, str(tmp_path), 100 * MIB)
    assert str(refusal.value) == (
        "the machine must have 467 MB of free memory, but it has 105 MB; "
        "end other programs, or give --quick or fewer --threads."
    )


def test_folders_that_cannot_be_used(tmp_path):
    missing, file = tmp_path / "none", tmp_path / "file"
    file.write_text("")
    for folder, what in ((missing, "does not exist"), (file, "is no folder")):
        with pytest.raises(WriteError) as refusal:
            measure_machine(folder=folder)
        assert str(refusal.value) == (
            f"--folder must name a folder for temporary files, but '{folder}' {what}; "
            "make it first, or leave --folder out."
        )


@pytest.mark.parametrize(
    ("settings", "sentence"),
    [
        ({"threads": 0}, "--threads must be between 1 and"),
        ({"threads": usable_cores() + 1}, f"--threads must be between 1 and {usable_cores()}, but"),
        ({"threads": 1.5}, "--threads must be a whole number between"),
        ({"quick": "yes"}, "--quick must be True or False, but it is 'yes'"),
        ({"price_per_hour": 0.0}, "--price must be a positive number, a price per hour, but it is"),
        ({"price_per_hour": -1.0}, "--price must be a positive number"),
        ({"price_per_hour": math.nan}, "--price must be a positive number"),
        ({"price_per_hour": "0.4"}, "--price must be a positive number"),
    ],
)
def test_settings_that_are_refused(settings, sentence):
    with pytest.raises(InputError) as refusal:
        measure_machine(**settings)
    assert str(refusal.value).startswith(sentence)


# Nothing is left behind.


@pytest.mark.parametrize(
    ("stage", "error"),
    [
        ("writing", KeyboardInterrupt),
        ("memory", ZeroDivisionError),
        ("Parquet", KeyboardInterrupt),
        ("whole curve", ZeroDivisionError),
    ],
)
def test_no_files_stay_after_an_interruption(tmp_path, stage, error):
    met = []

    def interrupt(told, done, of):
        met.append(len(list(tmp_path.iterdir())))
        if told.startswith(stage):
            raise error

    with pytest.raises(error):
        run.measure_sizes(TINY, 1, True, None, str(tmp_path), interrupt)
    assert list(tmp_path.iterdir()) == []
    # There were files when it happened, unless nothing had been written yet.
    assert met[-1] == (0 if stage == "writing" else 1)


def test_a_full_disk_is_told_and_leaves_nothing(tmp_path, monkeypatch):
    written = []

    def fill(kind, rows, number, path):
        written.append(open(path, "wb").close())
        if len(written) > 2:
            raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(invented, "_write", fill)
    with pytest.raises(WriteError) as refusal:
        run.measure_sizes(TINY, 2, True, None, str(tmp_path), lambda *told: None)
    assert str(refusal.value) == (
        f"--folder must take the temporary files, but writing to '{tmp_path}' failed: "
        "No space left on device; free some space, or name another folder."
    )
    assert len(written) > 2
    assert list(tmp_path.iterdir()) == []


# Files that are not what they seem.

REMEDY = "name a file that 'fastsmooth bench --out' made."


@pytest.mark.parametrize(
    ("content", "sentence"),
    [
        (b"", "hold JSON, but '{}' holds none; "),
        (b"half a {", "hold JSON, but '{}' holds none; "),
        (b"\xff\xfe\x00", "hold JSON, but '{}' holds none; "),
        (b"[" * 100_000, "hold JSON, but '{}' holds none; "),
        (b"[1, 2]", "hold the measurement of a machine, but '{}' holds something else; "),
        (b'{"x": 1}', "hold the measurement of a machine, but '{}' holds something else; "),
    ],
)
def test_foreign_files(tmp_path, content, sentence):
    path = tmp_path / "other.json"
    path.write_bytes(content)
    with pytest.raises(InputError) as refusal:
        load_measurement(path, "--against")
    assert str(refusal.value) == f"--against must {sentence.format(path)}{REMEDY}"


def test_files_that_are_not_there(tmp_path):
    for path, what in ((tmp_path, "is a folder"), (tmp_path / "none.json", "does not exist")):
        with pytest.raises(InputError) as refusal:
            load_measurement(path)
        assert str(refusal.value) == (
            f"MEASUREMENT must name a JSON file, but '{path}' {what}; {REMEDY}"
        )


def test_a_later_format():
    with pytest.raises(InputError) as refusal:
        Measurement.from_dict({**by_hand().to_dict(), "format": 2})
    assert str(refusal.value) == (
        "the measurement must be of format 1, but the data is of format 2; measure again, or "
        "read it with the version of fastsmooth that wrote it."
    )


def test_further_keys_are_passed_over():
    assert Measurement.from_dict({**by_hand().to_dict(), "costs": []}) == by_hand()


def leaves(plain, path=()):
    """Yield the way to every value of nested objects and lists."""
    yield path
    items = plain.items() if isinstance(plain, dict) else enumerate(plain)
    for key, value in items:
        if isinstance(value, dict | list):
            yield from leaves(value, (*path, key))
        else:
            yield (*path, key)


def placed(plain, path, value):
    changed = copy.deepcopy(plain)
    inner = changed
    for key in path[:-1]:
        inner = inner[key]
    inner[path[-1]] = value
    return changed


@pytest.mark.parametrize("junk", [[], {}, "", "a\x1b[2J", -1, math.nan, math.inf, 10**400, True],
                         ids=lambda junk: repr(junk)[:9])  # fmt: skip
def test_no_field_takes_junk(junk):
    plain = by_hand(1, price=0.4).to_dict()
    plain["figures"] = plain["figures"][:2]
    for path in filter(None, leaves(plain)):
        # Some places may be empty, and one takes a flag.
        fitting = (junk == {} and path[-1] in ("versions", "cache_bytes", "sizes")) or (
            junk is True and path[-1] == "quick"
        )
        changed = placed(plain, path, junk)
        if fitting:
            assert Measurement.from_dict(changed) != Measurement.from_dict(plain)
            continue
        with pytest.raises(InputError) as refusal:
            Measurement.from_dict(changed)
        sentence = str(refusal.value)
        assert sentence.startswith("the measurement must ")
        assert "\n" not in sentence
        assert "\x1b" not in sentence


def test_every_field_is_needed():
    plain = by_hand(1).to_dict()
    plain["figures"] = plain["figures"][:1]
    for path in filter(None, leaves(plain)):
        if path[-1] in (0, "python", "fastsmooth", "L1d", "L3", "rows"):
            continue
        changed = copy.deepcopy(plain)
        inner = changed
        for key in path[:-1]:
            inner = inner[key]
        del inner[path[-1]]
        with pytest.raises(InputError, match=r"^the measurement must "):
            Measurement.from_dict(changed)


@pytest.mark.parametrize(
    ("path", "value", "what"),
    [
        (("figures", 0, "value"), 99.0, "'figures[0].value' in the data is 99 and lies outside"),
        (("figures", 1), None, "'figures[1]' in the data is no object"),
        (("loading", "state"), "lost", "'loading.state' in the data is none of compiled, loaded,"),
        (("machine", "cores"), 0, "'machine.cores' in the data is no whole number from 1 on"),
        (("figures",), [], "'figures' in the data is no list of figures"),
    ],
)
def test_what_is_wrong_is_named(path, value, what):
    with pytest.raises(InputError) as refusal:
        Measurement.from_dict(placed(by_hand().to_dict(), path, value))
    assert str(refusal.value).startswith(
        f"the measurement must be as fastsmooth wrote it, but {what}"
    )


def test_a_figure_that_stands_twice():
    plain = by_hand().to_dict()
    plain["figures"].append(plain["figures"][0])
    with pytest.raises(InputError, match="'figures' in the data holds a figure twice"):
        Measurement.from_dict(plain)


def test_the_public_names():
    for name in ("measure_machine", "load_measurement", "compare_measurements", "Measurement",
                 "Comparison"):  # fmt: skip
        assert name in fastsmooth.__all__
        assert getattr(fastsmooth, name).__name__ == name

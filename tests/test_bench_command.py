"""The command `bench`: what it prints, what it writes, what it refuses, what it leaves behind."""

import json
import os
import signal
import subprocess
import sys
import threading
import time

import pytest

from fastsmooth import load_measurement
from fastsmooth.cli import main
from fastsmooth.cli.bench import interrupted_by_signals
from fastsmooth.measure import run as measuring
from tests.measured import TINY


@pytest.fixture(autouse=True)
def _tiny(monkeypatch):
    """Measure at tiny sizes."""
    monkeypatch.setattr(measuring, "choose_sizes", lambda *_: TINY)


@pytest.fixture(scope="module")
def saved(tmp_path_factory):
    """A file with one measurement of this machine, and what was printed on the way."""
    path = tmp_path_factory.mktemp("saved") / "this.json"
    folder = tmp_path_factory.mktemp("temporary")
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(measuring, "choose_sizes", lambda *_: TINY)
        code = main([
            "bench", "--threads", "1", "--price", "0.36", "--folder", str(folder), "--out",
            str(path), "--quiet",
        ])  # fmt: skip
    assert code == 0
    assert list(folder.iterdir()) == []
    return path


def run(capsys, *arguments):
    code = main(["bench", *(str(one) for one in arguments)])
    printed = capsys.readouterr()
    return code, printed.out, printed.err


def doctored(saved, path, factor):
    """The same machine, but so many times as fast."""
    plain = json.loads(saved.read_text())
    for one in plain["figures"]:
        change = factor if one["unit"].endswith("/s") else 1.0 / factor
        for name in ("value", "low", "high"):
            one[name] *= change
    path.write_text(json.dumps(plain))
    return path


def test_a_table_for_people(saved, capsys):
    code, told, complaints = run(capsys, "--from", saved)
    assert (code, complaints) == (0, "")
    for words in (
        "machine    ", "kernels    ", "memory, bytes read and written, GB/s",
        "exact leave-one-out", "bandwidth search", "large jobs with all threads", "0.36 an hour",
    ):  # fmt: skip
        assert words in told


def test_measures_and_prints_json(tmp_path, capsys):
    code, told, _ = run(capsys, "--threads", 1, "--json", "--folder", tmp_path, "--price", 2)
    assert code == 0
    assert os.listdir(tmp_path) == []
    plain = json.loads(told)
    assert plain["threads"] == 1
    assert plain["price_per_hour"] == 2.0
    for one in plain["costs"]:
        assert one["price"] == pytest.approx(one["seconds"] / 3600.0 * 2.0)
    # What was printed can be read back as what was written.
    path = tmp_path / "printed.json"
    path.write_text(told)
    assert len(load_measurement(path).figures) == len(plain["figures"])


def test_quiet_prints_nothing(saved, capsys):
    assert run(capsys, "--from", saved, "--quiet") == (0, "", "")


def test_against_itself(saved, capsys):
    code, told, _ = run(capsys, "--from", saved, "--against", saved)
    assert code == 0
    ratios = [line.split()[-1] for line in told.splitlines() if line.endswith("0x")]
    assert len(ratios) == len(load_measurement(saved).figures) + 6
    assert set(ratios) == {"1.00x"}


def test_against_a_machine_twice_as_fast(saved, tmp_path, capsys):
    other = doctored(saved, tmp_path / "other.json", 2.0)
    code, told, _ = run(capsys, "--from", saved, "--against", other, "--json")
    assert code == 0
    pairs = json.loads(told)["comparison"]["pairs"]
    assert len(pairs) == len(load_measurement(saved).figures)
    assert [one["times_faster"] for one in pairs] == pytest.approx([0.5] * len(pairs))


def test_measures_and_compares(saved, tmp_path, capsys):
    out = tmp_path / "new.json"
    code, told, _ = run(capsys, "--threads", "1", "--against", saved, "--out", out)
    assert code == 0
    assert told.startswith("this       ")
    assert f"wrote      {out}" in told
    assert load_measurement(out).price_per_hour is None


def test_a_price_given_later(saved, tmp_path, capsys):
    out = tmp_path / "dearer.json"
    code, told, _ = run(capsys, "--from", saved, "--price", 7.5, "--out", out)
    assert code == 0
    assert "7.5 an hour" in told
    assert load_measurement(out).price_per_hour == 7.5
    assert load_measurement(saved).price_per_hour == 0.36


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (("--price", "cheap"), "--price must be a number, but 'cheap' is not a valid float; "),
        (("--price", "-1"), "--price must be a positive number, a price per hour, but it is -1; "),
        (("--threads", "0"), "--threads must be between 1 and "),
        (("--out", "this.csv"), "--out must name a file that ends in .json, but 'this.csv' ends"),
        (("--out", "no/such/this.json"), "--out must lie in a folder that exists, but 'no/such'"),
        (("--against", "none.json"), "--against must name a JSON file, but 'none.json' does not"),
        (("--from", "none.json"), "--from must name a JSON file, but 'none.json' does not exist"),
        (("--folder", "none"), "--folder must name a folder for temporary files, but 'none' does"),
        (("--from", "x.json", "--quick"), "--quick must be left out with --from, but nothing is"),
        (("--from", "x.json", "--threads", "1"), "--threads must be left out with --from, but"),
    ],
)
def test_refusals(arguments, sentence, tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    code, told, complaint = run(capsys, *arguments)
    assert (code, told) == (2, "")
    assert complaint.startswith(f"fastsmooth: {sentence}")
    assert complaint.count("\n") == 1
    assert os.listdir(tmp_path) == []


def test_a_broken_file_is_refused_before_anything_is_measured(tmp_path, monkeypatch, capsys):
    def refuse(*_):
        raise AssertionError("measured")

    monkeypatch.setattr(measuring, "measure_sizes", refuse)
    path = tmp_path / "other.json"
    path.write_text('{"kind": "a shopping list"}')
    code, _, complaint = run(capsys, "--against", path)
    assert code == 2
    assert complaint == (
        "fastsmooth: --against must hold the measurement of a machine, but "
        f"'{path}' holds something else; name a file that 'fastsmooth bench --out' made.\n"
    )


def test_ctrl_c_leaves_nothing(tmp_path, monkeypatch, capsys):
    def interrupt(*_):
        assert len(os.listdir(tmp_path)) == 1
        raise KeyboardInterrupt

    monkeypatch.setattr("fastsmooth.measure.invented._write", interrupt)
    out = tmp_path.parent / "never.json"
    code, told, complaint = run(capsys, "--folder", tmp_path, "--out", out)
    assert (code, told) == (130, "")
    assert complaint.strip() == "fastsmooth: Interrupted; nothing was left half-written."
    assert os.listdir(tmp_path) == []
    assert not out.exists()


@pytest.mark.parametrize("name", ["SIGTERM", "SIGHUP"])
def test_an_order_to_end_interrupts(name):
    number = getattr(signal, name)
    before = signal.getsignal(number)
    assert before == signal.SIG_DFL

    def be_ended():
        with interrupted_by_signals():
            os.kill(os.getpid(), number)
            time.sleep(5.0)

    with pytest.raises(KeyboardInterrupt):
        be_ended()
    assert signal.getsignal(number) == before


def test_a_signal_that_is_ignored_stays_ignored():
    before = signal.signal(signal.SIGHUP, signal.SIG_IGN)
    try:
        with interrupted_by_signals():
            assert signal.getsignal(signal.SIGHUP) == signal.SIG_IGN
            os.kill(os.getpid(), signal.SIGHUP)
    finally:
        signal.signal(signal.SIGHUP, before)


def test_signals_are_left_alone_outside_the_main_thread():
    entered = []

    def enter():
        with interrupted_by_signals():
            entered.append(signal.getsignal(signal.SIGTERM))

    thread = threading.Thread(target=enter)
    thread.start()
    thread.join()
    assert entered == [signal.SIG_DFL]


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_real_process_that_is_ended_leaves_nothing(tmp_path, number):
    program = (
        "import sys\n"
        "from fastsmooth.cli import main\n"
        "from fastsmooth.measure import run\n"
        "from dataclasses import replace\n"
        "from tests.measured import TINY\n"
        # Long enough to be met in the middle.
        "run.choose_sizes = lambda *_: replace(TINY, files=20, rows_per_file=200_000)\n"
        "sys.exit(main(['bench', '--folder', sys.argv[1]]))\n"
    )
    with subprocess.Popen(
        [sys.executable, "-c", program, str(tmp_path)], stdout=subprocess.PIPE,
        stderr=subprocess.PIPE, text=True,
    ) as process:  # fmt: skip
        waited = time.monotonic()
        while not os.listdir(tmp_path):
            assert process.poll() is None
            assert time.monotonic() - waited < 120.0
            time.sleep(0.01)
        process.send_signal(number)
        told, complaint = process.communicate(timeout=60)
    assert process.returncode == 130
    assert told == ""
    assert complaint.strip() == "fastsmooth: Interrupted; nothing was left half-written."
    assert os.listdir(tmp_path) == []

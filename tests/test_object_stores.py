"""Data in object stores, on a server that listens on loopback."""

import copy
import gzip
import io
import json
import logging
import pathlib
import pickle
import socket
import subprocess
import sys
import threading
import time
import urllib.request
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from urllib.parse import urlsplit

import fsspec
import numpy as np
import pyarrow as pa
import pyarrow.csv as csv
import pyarrow.fs as pafs
import pyarrow.ipc as ipc
import pyarrow.parquet as pq
import pytest
from moto.server import ThreadedMotoServer

from fastsmooth import addresses
from fastsmooth.address_errors import explain
from fastsmooth.addresses import Address, as_address
from fastsmooth.api import make_curve
from fastsmooth.cli import main
from fastsmooth.errors import InputError, ReadError, WriteError
from fastsmooth.files import find_files, read_identity
from fastsmooth.settings import Reading
from fastsmooth.source import Columns, open_source
from fastsmooth.store.opening import open_store
from fastsmooth.store.settings import StoreSettings
from fastsmooth.store.update import update_store
from tests import cases
from tests.source_tools import gather

XY = Columns("wet_bulb_c", "power_kw")


@pytest.fixture(scope="module")
def server():
    logging.getLogger("werkzeug").setLevel(logging.ERROR)
    running = ThreadedMotoServer(ip_address="127.0.0.1", port=0, verbose=False)
    running.start()
    host, port = running.get_host_and_port()
    yield f"http://{host}:{port}"
    running.stop()


def set_environment(monkeypatch, **variables):
    """Set these, and hide what the machine has of its own."""
    for name in ("AWS_PROFILE", "AWS_REGION", "AWS_ENDPOINT_URL_S3", "AWS_SESSION_TOKEN"):
        monkeypatch.delenv(name, raising=False)
    hidden = {
        "AWS_EC2_METADATA_DISABLED": "true",
        "AWS_SHARED_CREDENTIALS_FILE": "/dev/null/none",
        "AWS_CONFIG_FILE": "/dev/null/none",
    }
    for name, value in (hidden | variables).items():
        monkeypatch.setenv(name, value)


KEYS = {
    "AWS_ACCESS_KEY_ID": "key",
    "AWS_SECRET_ACCESS_KEY": "secret",
    "AWS_DEFAULT_REGION": "us-east-1",
}


@pytest.fixture
def store(server, monkeypatch):
    """A bucket 'plants', emptied, and the file system to fill it."""
    set_environment(monkeypatch, AWS_ENDPOINT_URL=server, **KEYS)
    system = pafs.S3FileSystem(
        endpoint_override=urlsplit(server).netloc, scheme="http", allow_bucket_creation=True
    )
    system.create_dir("plants")
    system.delete_dir_contents("plants")
    return system


def put(system, key, content):
    with system.open_output_stream(key, compression=None) as file:
        file.write(content)


def readings(rows=2000, seed=1):
    made = cases.make_rows("uniform", rows, seed)
    return pa.table({**made.columns(), "line": np.arange(rows) % 3})


def as_bytes(table, suffix="parquet"):
    out = io.BytesIO()
    if suffix == "parquet":
        pq.write_table(table, out, row_group_size=300)
    elif suffix == "arrow":
        with ipc.new_file(out, table.schema) as file:
            file.write_table(table, max_chunksize=300)
    elif suffix == "ipc":
        with ipc.new_stream(out, table.schema) as file:
            file.write_table(table, max_chunksize=300)
    else:
        csv.write_csv(table, out)
    return gzip.compress(out.getvalue()) if suffix == "csv.gz" else out.getvalue()


def fill(system, *keys, rows=100):
    for number, key in enumerate(keys):
        put(system, key, as_bytes(readings(rows, number)))


def refusal(data, error=InputError, **options):
    with pytest.raises(error) as caught, open_source(data, XY, **options) as source:
        gather(source)
    assert type(caught.value) is error
    assert str(caught.value).count("\n") == 0
    return str(caught.value)


def test_folders_globs_and_lists_mean_the_same_as_here(store, tmp_path, monkeypatch):
    keys = (
        "plant=2/2026/b.parquet",
        "plant=1/a.parquet",
        "plant=1/c.pq",
        "plant=1/_draft.parquet",
        "_temporary/d.parquet",
        "plant=10/.e.parquet",
    )
    fill(store, *(f"plants/{key}" for key in keys))
    for key in keys:
        (tmp_path / key).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / key).touch()
    monkeypatch.chdir(tmp_path)
    for pattern, count in {
        "": 3,
        "plant=1": 2,
        "plant=1/a.parquet": 1,
        "plant=*": 3,
        "*/*.parquet": 1,
        "**/*.parquet": 2,
        "plant=[12]/**/?.p*": 3,
        "plant=1/_draft.parquet": 1,
        "_temporary": 1,
    }.items():
        there = [one.removeprefix("s3://plants/") for one in find_files(f"s3://plants/{pattern}")]
        here = [one.removeprefix("./") for one in find_files(f"./{pattern}")]
        assert there == here
        assert len(there) == count
    both = find_files(["s3://plants/plant=2", "s3://plants/plant=1/"])
    assert both == find_files("s3://plants")


def test_key_with_characters_of_patterns_and_addresses(store):
    for key in ("plant [1].parquet", "Río=1%2F2/a+b.parquet", "no?query#none.parquet"):
        fill(store, f"plants/{key}", rows=10)
        with open_source(f"s3://plants/{key}", XY) as source:
            assert gather(source).rows == 10
            assert source.files[0].path == f"s3://plants/{key}"


def test_record_holds_size_time_and_etag(store):
    before = time.time()
    fill(store, "plants/a.parquet")
    with open_source("s3://plants", XY) as source:
        [record] = source.files
    assert record.size_bytes == store.get_file_info("plants/a.parquet").size
    assert abs(record.modified_ns / 1e9 - before) < 5.0
    with store.open_input_file("plants/a.parquet") as file:
        assert record.etag == file.metadata()["ETag"].decode()
    assert record.rows == 100
    assert read_identity("s3://plants/a.parquet", 100) == record


@pytest.mark.parametrize("suffix", ["parquet", "arrow", "ipc", "csv", "csv.gz"])
def test_same_curve_to_the_last_bit_as_from_files_here(store, tmp_path, suffix):
    for plant in (1, 2):
        content = as_bytes(readings(1500, plant), suffix)
        key = f"plant={plant}/a.{suffix}"
        put(store, f"plants/{key}", content)
        (tmp_path / key).parent.mkdir()
        (tmp_path / key).write_bytes(content)
    reading = Reading(where="plant = 1 OR line <> 2", threads=2)
    here, there = (
        make_curve(data, "wet_bulb_c", "power_kw", reading=reading)
        for data in (tmp_path, "s3://plants")
    )
    for name in ("x", "estimate", "slope", "std_error", "lower", "upper", "effective_rows"):
        assert np.array_equal(getattr(here, name), getattr(there, name), equal_nan=True)
    assert here.bandwidth == there.bandwidth
    assert here.trace["rows"] == there.trace["rows"]
    assert there.trace["rows"]["filtered"] == 500
    paths = [record["path"] for record in json.loads(json.dumps(there.trace["files"]))]
    assert paths == [f"s3://plants/plant={plant}/a.{suffix}" for plant in (1, 2)]


def test_row_groups_are_pruned_there_too(store, monkeypatch):
    table = pa.table({"wet_bulb_c": np.arange(100.0), "power_kw": np.ones(100)})
    out = io.BytesIO()
    pq.write_table(table, out, row_group_size=10)
    put(store, "plants/a.parquet", out.getvalue())
    read = []
    real = pq.ParquetFile.iter_batches

    def spy(self, *args, **options):
        read.append(options["row_groups"])
        return real(self, *args, **options)

    monkeypatch.setattr(pq.ParquetFile, "iter_batches", spy)
    with open_source("s3://plants", XY, where="wet_bulb_c >= 85") as source:
        assert gather(source).x.tolist() == list(range(85, 100))
    assert read == [[8], [9]]


@pytest.mark.parametrize("when", ["before", "during", "removed"])
def test_file_that_changes_is_an_error(store, when):
    fill(store, "plants/a.parquet", rows=1000)
    with open_source("s3://plants/a.parquet", XY) as source:
        chunks = source.chunks(source.tasks[0], 100)
        if when != "before":
            next(chunks)
        if when == "removed":
            store.delete_file("plants/a.parquet")
        else:
            # As many bytes as before: only the ETag tells.
            put(store, "plants/a.parquet", as_bytes(readings(1000, seed=9)))
        with pytest.raises(ReadError) as caught:
            list(chunks)
    assert str(caught.value) == (
        "DATA must stay as it is while it is read, but 's3://plants/a.parquet' was changed or "
        "removed meanwhile; run again when nothing writes to it."
    )


def test_same_size_and_second_is_told_by_the_etag(store):
    put(store, "plants/a.csv", b"wet_bulb_c,power_kw\n1,2\n")
    first = read_identity("s3://plants/a.csv", None)
    put(store, "plants/a.csv", b"wet_bulb_c,power_kw\n1,3\n")
    second = read_identity("s3://plants/a.csv", None)
    assert first.size_bytes == second.size_bytes
    assert first.etag != second.etag


def test_missing_bucket(store):
    for data in ("s3://plant/a.parquet", "s3://plant", "s3://plant/*.parquet"):
        assert refusal(data) == (
            f"DATA must lie in a bucket that exists, but there is no bucket 'plant' for '{data}'; "
            "check the address and, for another server, the endpoint in the environment."
        )


def test_missing_key_names_near_ones(store):
    fill(store, "plants/2026/plant_07.parquet", "plants/2026/notes.txt")
    for data in ("s3://plants/2026/plant_7.parquet", "s3://plants/2026/plant_7.parquet/x"):
        assert refusal(data).startswith(
            f"DATA must be an existing file, folder or glob, but '{data}' does not exist; use "
        )
    assert refusal("s3://plants/2026/plant_7.parquet").endswith(
        "; use 'plant_07.parquet' in 's3://plants/2026'."
    )
    assert refusal("s3://plants/2025/a.parquet").endswith("; use '2026' in 's3://plants'.")
    assert refusal("s3://plants/2026/*.csv") == (
        "DATA must match data files, but 's3://plants/2026/*.csv' matches none; check the pattern."
    )


def test_empty_bucket_and_unknown_suffix(store):
    assert refusal("s3://plants").startswith(
        "DATA must hold data files, but the folder 's3://plants' has none; name a folder"
    )
    fill(store, "plants/notes.txt")
    assert "but 's3://plants/notes.txt' does not; rename" in refusal("s3://plants/notes.txt")


def test_bucket_must_be_named(store):
    assert refusal("s3://") == "DATA must name its bucket, but 's3://' has none; write it in front."
    assert refusal("s3://pl*/a.parquet") == (
        "DATA must name its bucket, but 's3://pl*/a.parquet' is a pattern of buckets; write one "
        "address for each."
    )


def test_damaged_file(store):
    put(store, "plants/a.parquet", as_bytes(readings())[:-100])
    assert refusal("s3://plants/a.parquet", ReadError).startswith(
        "DATA must be readable whole, but 's3://plants/a.parquet' is damaged ("
    )


def test_keys_that_the_store_does_not_know(store, server):
    fill(store, "plants/a.parquet")

    def ask_for_keys(free_requests):
        told = urllib.request.Request(
            f"{server}/moto-api/reset-auth", free_requests, {"Content-Type": "text/plain"}
        )
        urllib.request.urlopen(told).close()

    ask_for_keys(b"0")
    try:
        assert refusal("s3://plants/a.parquet") == (
            "DATA must be readable, but access to 's3://plants/a.parquet' is denied to the "
            "credentials in the environment; ask for leave to list and to read it, or use other "
            "credentials."
        )
        # Where no body comes with the answer, the store does not say that it is the key.
        address = Address("s3://plants/a.parquet")
        with pytest.raises(OSError, match="INVALID_ACCESS_KEY_ID") as caught:
            address.system.get_file_info(pafs.FileSelector("plants"))
    finally:
        ask_for_keys(b"inf")
    assert str(explain(address, caught.value)) == (
        "DATA must come with valid credentials, but those in the environment are refused for "
        "'s3://plants/a.parquet' (The AWS Access Key Id you provided does not exist in our "
        "records); renew AWS_ACCESS_KEY_ID and AWS_SECRET_ACCESS_KEY, or AWS_PROFILE."
    )


class Answering(BaseHTTPRequestHandler):
    """Answers every request as the test says."""

    def do_HEAD(self):
        self.do_GET()

    def do_GET(self):
        self.server.seen.append(self.path)
        status, body = self.server.answer(self.path, len(self.server.seen))
        start, stop = 0, len(body)
        asked = self.headers.get("Range")
        if asked and status == 200:
            start, _, last = asked.removeprefix("bytes=").partition("-")
            start, stop, status = int(start), min(int(last or stop) + 1, stop), 206
        self.send_response(status)
        self.send_header("Content-Length", str(stop - start))
        if status == 206:
            self.send_header("Content-Range", f"bytes {start}-{stop - 1}/{len(body)}")
        self.end_headers()
        if self.command == "GET":
            self.wfile.write(body[start:stop])

    def log_message(self, *words):
        pass


@pytest.fixture
def answering():
    server = ThreadingHTTPServer(("127.0.0.1", 0), Answering)
    server.seen, server.url = [], f"http://127.0.0.1:{server.server_port}"
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    yield server
    server.shutdown()
    thread.join()
    server.server_close()


def test_no_credentials(answering, monkeypatch):
    set_environment(monkeypatch, AWS_ENDPOINT_URL=answering.url, AWS_DEFAULT_REGION="us-east-1")
    for name in ("AWS_ACCESS_KEY_ID", "AWS_SECRET_ACCESS_KEY"):
        monkeypatch.delenv(name, raising=False)
    answering.answer = lambda path, number: (403, b"")
    assert refusal("s3://plants/a.parquet") == (
        "DATA must come with credentials in the environment, but 's3://plants/a.parquet' is closed "
        "to strangers and the environment holds none; set AWS_ACCESS_KEY_ID and "
        "AWS_SECRET_ACCESS_KEY, or AWS_PROFILE."
    )


def test_wrong_region(answering, monkeypatch):
    set_environment(monkeypatch, AWS_ENDPOINT_URL=answering.url, **KEYS)
    answering.answer = lambda path, number: (301, b"")
    assert refusal("s3://plants/a.parquet") == (
        "DATA must be asked for in its own region, but 's3://plants/a.parquet' lies in another; "
        "set AWS_REGION."
    )


def test_server_that_fails_for_a_moment_is_asked_again(answering, monkeypatch):
    set_environment(monkeypatch, AWS_ENDPOINT_URL=answering.url, **KEYS)
    monkeypatch.setattr(addresses, "PAUSE_SECONDS", 0.01)
    monkeypatch.setattr(addresses, "REQUEST_TRIES", 2)
    # The store's client gives up after two tries; opening is begun once more.
    answering.answer = lambda path, number: (503, b"") if number <= 2 else (404, b"")
    assert "there is no bucket 'plants'" in refusal("s3://plants/a.parquet")
    assert answering.seen[:3] == ["/plants/a.parquet"] * 3
    answering.seen.clear()
    answering.answer = lambda path, number: (503, b"")
    assert refusal("s3://plants/a.parquet").startswith(
        "DATA must be reachable, but the server of 's3://plants/a.parquet' did not answer as it "
    )
    assert len(answering.seen) == addresses.OPENING_TRIES * 2


def test_dead_endpoint(monkeypatch):
    with socket.socket() as reserved:
        reserved.bind(("127.0.0.1", 0))
        place = f"127.0.0.1:{reserved.getsockname()[1]}"
        set_environment(monkeypatch, AWS_ENDPOINT_URL=f"http://{place}", **KEYS)
        monkeypatch.setattr(addresses, "PAUSE_SECONDS", 0.01)
        monkeypatch.setattr(addresses, "REQUEST_TRIES", 1)
        assert refusal("s3://plants/a.parquet") == (
            "DATA must be reachable, but the server of 's3://plants/a.parquet' did not answer as "
            f"it should (Failed to connect to {place} after 0 ms: Could not connect to server); "
            "check the network and the endpoint in the environment, or wait longer with --timeout."
        )


def test_silent_endpoint_is_given_up_in_time(monkeypatch, capsys):
    with socket.socket() as silent:
        silent.bind(("127.0.0.1", 0))
        silent.listen(16)
        url = f"http://127.0.0.1:{silent.getsockname()[1]}"
        set_environment(monkeypatch, AWS_ENDPOINT_URL=url, **KEYS)
        monkeypatch.setattr(addresses, "REQUEST_TRIES", 1)
        started = time.monotonic()
        asked = ["curve", "s3://plants", "--x", "wet_bulb_c", "--y", "power_kw", "--timeout", "1"]
        assert main(asked) == 2
        assert time.monotonic() - started < 6.0
    told = capsys.readouterr().err
    assert "DATA must be reachable, but the server of 's3://plants' did not answer as it" in told
    assert told.count("\n") == 1


def test_region_is_looked_up_where_none_is_set(monkeypatch):
    set_environment(monkeypatch, AWS_ACCESS_KEY_ID="key", AWS_SECRET_ACCESS_KEY="secret")
    monkeypatch.delenv("AWS_DEFAULT_REGION", raising=False)
    monkeypatch.delenv("AWS_ENDPOINT_URL", raising=False)
    asked = []

    def lookup(bucket):
        asked.append(bucket)
        return "eu-south-2"

    monkeypatch.setattr(pafs, "resolve_s3_region", lookup)
    assert Address("s3://plants-of-ours/a.parquet").system.region == "eu-south-2"
    assert asked == ["plants-of-ours"]


def test_timeout_must_be_positive():
    for wrong in (0.0, -1.0, float("inf"), "soon"):
        with pytest.raises(InputError, match=r"--timeout must be a positive number of seconds"):
            Reading(timeout_seconds=wrong)


def test_address_travels_to_other_processes(store):
    address = as_address("s3://plants/a.parquet", 3.0)
    for other in (pickle.loads(pickle.dumps(address)), copy.deepcopy(address)):
        assert (other, other.timeout_seconds, type(other)) == (address, 3.0, Address)
    assert as_address(address, 7.0).timeout_seconds == 3.0
    # One connection for all files of a bucket, another when the environment changes.
    assert address.system is as_address("s3://plants/b.parquet", 3.0).system


def test_another_endpoint_makes_another_connection(store, monkeypatch):
    before = Address("s3://plants/a.parquet").system
    monkeypatch.setenv("AWS_ENDPOINT_URL_S3", "http://127.0.0.1:9")
    assert Address("s3://plants/a.parquet").system is not before


def test_results_are_written_here(store, tmp_path):
    fill(store, "plants/a.parquet", rows=500)
    made = make_curve("s3://plants", "wet_bulb_c", "power_kw")
    for write in (made.save, made.plot):
        name = "s3://plants/curve." + ("parquet" if write == made.save else "png")
        with pytest.raises(WriteError) as caught:
            write(name)
        assert str(caught.value).endswith(
            f" must name a file on this computer, but '{name}' is an address; write it here and "
            "copy it there."
        )
    made.save(tmp_path / "curve.parquet")
    assert store.get_file_info(pafs.FileSelector("plants"))[0].base_name == "a.parquet"


def test_info_of_an_address(store, capsys):
    fill(store, "plants/a.parquet")
    assert main(["info", "s3://plants"]) == 0
    assert "100 rows in 1 file\n" in capsys.readouterr().out


def test_other_schemes_go_through_fsspec():
    system = fsspec.filesystem("memory")
    for plant in (1, 2):
        system.pipe(f"/fleet/plant={plant}/a.parquet", as_bytes(readings(600, plant)))
    try:
        assert find_files("memory://fleet/*/*.parquet") == find_files("memory://fleet")
        with open_source("memory://fleet", XY, where="plant = 2") as source:
            got = gather(source)
            assert source.files[1].path == "memory:///fleet/plant=2/a.parquet"
            assert source.files[1].etag
            system.pipe("/fleet/plant=2/a.parquet", as_bytes(readings(600, 3)))
            with pytest.raises(ReadError, match="was changed or removed meanwhile"):
                gather(source)
        assert np.array_equal(got.x, readings(600, 2)["wet_bulb_c"].to_numpy())
        assert refusal("memory://fleet/plant=3").endswith("'plant=1' in 'memory:///fleet'.")
    finally:
        system.rm("/fleet", recursive=True)


def test_unknown_and_lacking_schemes(monkeypatch):
    assert refusal("tape://plants/a.parquet") == (
        "DATA must be a path, or an address of a known scheme, but 'tape://' is none; begin with "
        "s3://, gs://, az:// or a scheme that fsspec knows."
    )

    def lacking(address):
        raise ImportError("Install the client of tapes. Then try again")

    monkeypatch.setattr(fsspec.core, "url_to_fs", lacking)
    assert refusal("reel://plants/a.parquet") == (
        "DATA must be reached by what is installed, but 'reel://' is not: Install the client of "
        "tapes; install fastsmooth[fsspec] and what the scheme needs."
    )


@pytest.fixture
def google(tmp_path, monkeypatch):
    """A folder that is the bucket 'coolers' of another server."""
    folder = tmp_path / "coolers"
    folder.mkdir()
    program = [sys.executable, str(pathlib.Path(__file__).with_name("google_store.py"))]
    with subprocess.Popen([*program, str(folder)], stdout=subprocess.PIPE, text=True) as running:
        port = int(running.stdout.readline())
        monkeypatch.setenv("STORAGE_EMULATOR_HOST", f"127.0.0.1:{port}")
        yield folder
        running.kill()


def test_google_store(google):
    (google / "2026").mkdir()
    content = as_bytes(readings(400, 5))
    (google / "2026" / "a.parquet").write_bytes(content)
    assert find_files("gs://coolers/2026") == ("gs://coolers/2026/a.parquet",)
    assert find_files("gs://coolers/*/*.parquet") == ("gs://coolers/2026/a.parquet",)
    with open_source("gs://coolers", XY) as source:
        assert np.array_equal(gather(source).x, readings(400, 5)["wet_bulb_c"].to_numpy())
        [record] = source.files
        assert record.size_bytes == len(content)
        assert record.modified_ns == 1_767_323_045_678_000_000
        assert record.etag.startswith("tag-")
        (google / "2026" / "a.parquet").write_bytes(as_bytes(readings(400, 6)))
        with pytest.raises(ReadError, match="was changed or removed meanwhile"):
            gather(source)
    assert refusal("gs://coolers/2026/b.parquet").endswith(
        "use 'a.parquet' in 'gs://coolers/2026'."
    )


AZURITE = (
    "DefaultEndpointsProtocol=http;AccountName=coolers;AccountKey=a2V5;BlobEndpoint={}/coolers;"
)


def test_azure_account_comes_from_the_environment(answering, monkeypatch):
    for name in ("ACCOUNT", "CONNECTION_STRING", "KEY", "SAS_TOKEN"):
        monkeypatch.delenv(f"AZURE_STORAGE_{name}", raising=False)
    assert refusal("az://plants/a.parquet") == (
        "DATA must come with its storage account, but the environment names none; set "
        "AZURE_STORAGE_ACCOUNT or AZURE_STORAGE_CONNECTION_STRING."
    )
    monkeypatch.setenv("AZURE_STORAGE_CONNECTION_STRING", AZURITE.format(answering.url))
    answering.answer = lambda path, number: (403, b"")
    assert refusal("az://plants/a.parquet").startswith(
        "DATA must be readable, but access to 'az://plants/a.parquet' is denied to the credentials"
    )
    assert all(path.startswith("/coolers/plants") for path in answering.seen)
    assert answering.seen


def test_a_moved_object_is_not_counted_into_a_store_twice(store, tmp_path):
    fill(store, "plants/2025/a.parquet", "plants/2025/b.parquet")
    wanted = StoreSettings("wet_bulb_c", "power_kw")
    update_store(tmp_path / "store", "s3://plants/2025", wanted)
    put(store, "plants/2025/c.parquet", as_bytes(readings(100, 1)))
    store.delete_file("plants/2025/b.parquet")
    done = update_store(tmp_path / "store", "s3://plants/2025")
    assert (done.moved, done.added, done.vanished) == (("s3://plants/2025/c.parquet",), (), ())
    assert open_store(tmp_path / "store").manifest.used == 200
    # While the other one is there, the same bytes are rows of their own, as they are here.
    put(store, "plants/2025/d.parquet", as_bytes(readings(100, 1)))
    assert len(update_store(tmp_path / "store", "s3://plants/2025").added) == 1

"""Row filters: what they mean, what they refuse, and that pruning never changes the answer."""

import datetime as dt
import math

import pyarrow as pa
import pyarrow.dataset as ds
import pyarrow.fs as pafs
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fastsmooth.errors import InputError
from fastsmooth.where import parse_where

NAN = math.nan
HOURS = [dt.datetime(2026, 1, 1, hour) for hour in range(4)]
BATCH = pa.record_batch(
    {
        "power_kw": pa.array([1.0, 2.0, NAN, None]),
        "count": pa.array([1, 2, 3, 2**60 + 1]),
        "serial": pa.array([1, 2, 3, 2**63 + 5], pa.uint64()),
        "plant": pa.array(["Avila", "Soria", None, "avila"]),
        "kind": pa.array(["a", "b", "a", None]).dictionary_encode(),
        "view": pa.array(["a", "b", "a", None], pa.string_view()),
        "day": pa.array([dt.date(2026, 1, n) for n in (1, 2, 3, 4)]),
        "logged_at": pa.array(HOURS, pa.timestamp("us")),
        "utc": pa.array(HOURS, pa.timestamp("s", "Europe/Madrid")),
        "ok": pa.array([True, False, None, True]),
        "a b": pa.array([1, 2, 3, 4]),
        "a.b": pa.array([1, 2, 3, 4]),
        "half": pa.array([1, 2, 3, 4], pa.float16()),
        "price": pa.array(["0.10", "0.20", "0.30", None]).cast(pa.decimal128(9, 2)),
        "number_text": pa.array(["1", "2.5", "-3", None]),
        "empty": pa.nulls(4),
        "spell": pa.array([1, 2, 3, 4], pa.duration("s")),
        "list": pa.array([[1]] * 4),
    }
)
T, F, N = True, False, None

# Truth of each condition for the four rows of BATCH, written out by hand.
CASES = [
    ("power_kw > 1", [F, T, F, N]),
    ("NOT power_kw > 1", [T, F, T, N]),
    ("power_kw <> 1", [F, T, T, N]),
    ("power_kw = power_kw", [T, T, F, N]),
    ("power_kw BETWEEN 1 AND 2", [T, T, F, N]),
    ("power_kw NOT BETWEEN 1 AND 1.5", [F, T, T, N]),
    ("power_kw IN (1, 3)", [T, F, F, N]),
    ("power_kw NOT IN (1, 3)", [F, T, T, N]),
    ("power_kw IS NULL", [F, F, F, T]),
    ("power_kw IS NOT NULL", [T, T, T, F]),
    ("power_kw > 1 OR ok", [T, T, N, T]),
    ("power_kw > 1 AND ok", [F, F, F, N]),
    ("2 > power_kw", [T, F, F, N]),
    ("power_kw + count > 3", [F, T, F, N]),
    ("count / 2 = 0.5", [T, F, F, F]),
    ("1 / (count - 1) > 1e300", [T, F, F, F]),
    ("-power_kw < -1.5", [F, T, F, N]),
    ("ABS(-power_kw) * 2 - 1 >= 3", [F, T, F, N]),
    ("ROUND(power_kw - 0.5) = 1", [T, F, F, N]),
    ("ROUND(power_kw + 0.5) = 2", [T, F, F, N]),
    ("FLOOR(power_kw / 2) = 0 OR CEIL(power_kw / 2) = 0", [T, F, F, N]),
    ("count = 1152921504606846977", [F, F, F, T]),
    ("count > 3.5", [F, F, F, T]),
    ("count < 2.5", [T, T, F, F]),
    ("count = 2.0", [F, T, F, F]),
    ("count < 99999999999999999999", [T, T, T, T]),
    ("serial > -1", [T, T, T, T]),
    ("serial = 9223372036854775813", [F, F, F, T]),
    ("serial > count", [F, F, F, T]),
    ("plant = 'Avila'", [T, F, N, F]),
    ("plant <> 'Avila'", [F, T, N, T]),
    ("plant IN ('Avila', 'Soria')", [T, T, N, F]),
    ("plant NOT IN ('Avila')", [F, T, N, T]),
    ("plant LIKE 'A%'", [T, F, N, F]),
    ("plant NOT LIKE 'A%'", [F, T, N, T]),
    ("plant LIKE '_vila'", [T, F, N, T]),
    ("plant ILIKE 'A%'", [T, F, N, T]),
    ("LOWER(plant) = 'avila'", [T, F, N, T]),
    ("UPPER(plant) = 'AVILA'", [T, F, N, T]),
    ("kind = 'a'", [T, F, T, N]),
    ("kind IN ('b')", [F, T, F, N]),
    ("view LIKE 'a'", [T, F, T, N]),
    ("ok", [T, F, N, T]),
    ("NOT ok", [F, T, N, F]),
    ("ok = FALSE", [F, T, N, F]),
    ("ok IS TRUE", [T, F, F, T]),
    ("ok IS FALSE", [F, T, F, F]),
    ("ok IS NOT TRUE", [F, T, T, F]),
    ("(power_kw > 1) = ok", [F, F, N, N]),
    ('"a b" > 3', [F, F, F, T]),
    ('"a.b" > 3', [F, F, F, T]),
    ("a.b > 3", [F, F, F, T]),
    ("half >= 3", [F, F, T, T]),
    ("price = 0.1", [T, F, F, N]),
    ("empty IS NULL", [T, T, T, T]),
    ("empty > 1", [N, N, N, N]),
    ("day = '2026-01-02'", [F, T, F, F]),
    ("day >= DATE '2026-01-03'", [F, F, T, T]),
    ("day > '2026-01-02 10:00'", [F, F, T, T]),
    ("day < '2026-01-02 10:00'", [T, T, F, F]),
    ("logged_at >= '2026-01-01 02:00'", [F, F, T, T]),
    ("logged_at > TIMESTAMP '2026-01-01 01:30:00'", [F, F, T, T]),
    ("logged_at < '2026-01-01T01:00:00.0000001'", [T, T, F, F]),
    ("logged_at < '3026-01-01'", [T, T, T, T]),
    ("logged_at BETWEEN '2026-01-01 01:00' AND '2026-01-01 02:00'", [F, T, T, F]),
    ("logged_at IN ('2026-01-01', '2026-01-01 03:00')", [T, F, F, T]),
    # Madrid is one hour ahead of UTC in winter.
    ("utc >= '2026-01-01 02:00'", [F, T, T, T]),
    ("utc >= '2026-01-01T02:00:00Z'", [F, F, T, T]),
    ("utc >= '2026-01-01T02:00:00+02:00'", [T, T, T, T]),
    ("utc < '2026-01-01 02:00:00.5'", [T, T, F, F]),
    ("utc >= DATE '2026-01-01'", [T, T, T, T]),
    ("EXTRACT(HOUR FROM utc) = 2", [F, T, F, F]),
    ("HOUR(logged_at) = 2", [F, F, T, F]),
    ("YEAR(day) = 2026 AND MONTH(day) = 1 AND DAY(day) = 2", [F, T, F, F]),
    ("EXTRACT(DOY FROM day) = 4", [F, F, F, T]),
    # The third day of January 2026 is a Saturday.
    ("EXTRACT(ISODOW FROM day) = 6", [F, F, T, F]),
    ("EXTRACT(DOW FROM day) = 0", [F, F, F, T]),
    ("CAST(number_text AS DOUBLE) > 1", [F, T, F, N]),
    ("CAST(count AS VARCHAR) = '2'", [F, T, F, F]),
    ("CAST(utc AS DATE) = '2026-01-01'", [T, T, T, T]),
    ("CAST(ok AS INT) = 1", [T, F, N, T]),
    ("spell IS NOT NULL", [T, T, T, T]),
    (" OR ".join(f"count = {n}" for n in range(2, 1500)), [F, T, T, F]),
]


@pytest.mark.parametrize(("text", "truth"), CASES, ids=[text[:60] for text, _ in CASES])
def test_truth(text, truth):
    condition = parse_where(text, BATCH.schema)
    assert condition.mask(BATCH).to_pylist() == truth
    assert condition.text == text


@pytest.mark.parametrize(
    ("text", "truth"),
    [case for case in CASES if "view" not in case[0]],
    ids=lambda value: value[:60] if isinstance(value, str) else "",
)
def test_expression_agrees_with_mask(text, truth):
    condition = parse_where(text, BATCH.schema)
    # Arrow cannot filter views.
    kept = pa.Table.from_batches([BATCH]).drop_columns(["view"]).filter(condition.expression)
    wanted = [name for name, keep in zip(BATCH["a b"].to_pylist(), truth, strict=True) if keep]
    assert kept["a b"].to_pylist() == wanted


def test_columns_are_those_read_in_order():
    text = "plant = 'Soria' AND power_kw > 5 AND plant <> 'x'"
    assert parse_where(text, BATCH.schema).columns == ("plant", "power_kw")


ALLOWED = (
    "use comparisons, AND, OR, NOT, IN, BETWEEN, LIKE, IS NULL, + - * /, CAST, EXTRACT, "
    "ABS, FLOOR, CEIL, ROUND, LOWER, UPPER"
)
REFUSED = [
    ("", "nothing was given; write a condition such as power_kw > 5"),
    ("power_kw + 1", "'power_kw + 1' is a number; compare it with something"),
    ("plant", "'plant' is a text; compare it with something"),
    ("1 = 1", "'1 = 1' reads no column; name a column"),
    ("power_kw > 1; count > 2", "2 conditions were given; join conditions with AND"),
    ("power > 1", "'power' is no column of DATA; use 'power_kw'"),
    ("POWER_KW > 1", "'POWER_KW' is no column of DATA; use 'power_kw'"),
    ("t.count > 1", "'t.count' names a table; write the column alone, as in count > 5"),
    ("power_kw = NULL", "NULL is compared with something; write IS NULL or IS NOT NULL"),
    (
        "power_kw > 1 ORDER BY count",
        "'power_kw > 1 ORDER BY count' cannot be parsed at 'power_kw > 1 ORDER BY'; "
        "check the spelling and the parentheses",
    ),
    ("count IN (SELECT 1)", "IN with a subquery is not allowed; list the values themselves"),
    ("EXISTS (SELECT 1)", f"a subquery is not allowed; {ALLOWED}"),
    ("SELECT count FROM plants", f"a subquery is not allowed; {ALLOWED}"),
    ("count > ALL (SELECT 1)", f"a subquery is not allowed; {ALLOWED}"),
    ("READ_CSV('/etc/passwd') > 1", f"the function READ_CSV is not allowed; {ALLOWED}"),
    ("READ_TEXT('/etc/passwd') = ''", f"the function READ_TEXT is not allowed; {ALLOWED}"),
    ("DROP TABLE plants", f"'DROP TABLE plants' (DROP) is not allowed; {ALLOWED}"),
    ("count % 2 = 1", f"'count % 2' (MOD) is not allowed; {ALLOWED}"),
    ("ISNAN(power_kw)", f"the function IS_NAN is not allowed; {ALLOWED}"),
    ("NOW() > logged_at", f"the function NOW is not allowed; {ALLOWED}"),
    ("count = 0x10", f"'count = 0 AS x10' (ALIAS) is not allowed; {ALLOWED}"),
    (
        "ROUND(power_kw, 2) > 1",
        f"'ROUND(power_kw, 2)' uses 'decimals', which is not allowed; {ALLOWED}",
    ),
    ("count IN ()", "'count IN ()' lists nothing; list at least one value"),
    ("count IN (power_kw)", "'count IN (power_kw)' lists more than literals; list values only"),
    (
        "plant > 1",
        "'plant > 1' compares a text with a number; compare values of one kind, or use CAST",
    ),
    (
        "NOT plant",
        "'plant' is a text where a boolean is needed; cast it to a boolean or use another column",
    ),
    ("ok > TRUE", "'ok > TRUE' orders true and false; use = or <>"),
    ("list = 1", "'list' is of type list<item: int64>; use another column"),
    ("HOUR(day) = 1", "'day' is a date, which has no hour; use a column of times"),
    (
        "logged_at > 'yesterday'",
        "'yesterday' is no time; write it as in '2026-01-31' or '2026-01-31 06:30'",
    ),
    (
        "logged_at > '2026-01-01T00:00+01:00'",
        "'2026-01-01T00:00+01:00' is no time (the column has no zone); "
        "write it as in '2026-01-31' or '2026-01-31 06:30'",
    ),
    (
        "utc > logged_at",
        "'utc > logged_at' compares times with and without a zone; compare alike times",
    ),
    ("plant LIKE plant", "'plant LIKE plant' has no literal pattern; write LIKE 'Avila%'"),
    ("power_kw IS 3", "'power_kw IS 3' is not allowed; write IS NULL or IS NOT NULL"),
    (
        "CAST(plant AS JSON) = 1",
        "CAST to JSON is not allowed; use DOUBLE, FLOAT, DECIMAL, INT, BIGINT, VARCHAR, TEXT, "
        "BOOLEAN, DATE, TIMESTAMP, TIMESTAMPTZ",
    ),
]


@pytest.mark.parametrize(("text", "sentence"), REFUSED, ids=[text[:60] for text, _ in REFUSED])
def test_refusal(text, sentence):
    with pytest.raises(InputError) as caught:
        parse_where(text, BATCH.schema)
    assert str(caught.value) == f"--where must be a condition on columns of DATA, but {sentence}."


def test_deep_nesting_is_refused_in_one_sentence():
    with pytest.raises(InputError, match="parentheses"):
        parse_where("(" * 5000 + "count > 1" + ")" * 5000, BATCH.schema)


def test_ambiguous_column_is_refused():
    schema = pa.schema([("count", pa.int64()), ("count", pa.float64())])
    with pytest.raises(InputError, match="DATA has several columns called 'count'; rename all"):
        parse_where("count > 1", schema)


def test_value_that_cannot_be_cast_is_told():
    condition = parse_where("CAST(plant AS DOUBLE) > 1", BATCH.schema)
    with pytest.raises(InputError) as caught:
        condition.mask(BATCH.slice(0, 1))
    assert str(caught.value) == (
        "--where must be computable for every row, but 'CAST(plant AS DOUBLE) > 1' is not "
        "(Failed to parse string: 'Avila' as a scalar of type double); "
        "change the condition or the column."
    )


def test_conditions_that_prune():
    schema = pa.schema([("x", pa.float64()), ("n", pa.int32()), ("p", pa.string())])
    for text in ("x > 1", "x = 1 AND NOT n = 3", "n IN (1, 2)", "p IN ('a')", "n BETWEEN 1 AND 2"):
        assert str(parse_where(text, schema).prunable) != "true", text
    # Statistics leave NaN out, and these are true for NaN.
    for text in ("x <> 1", "NOT x > 1", "x > 1 OR NOT n = 3", "(x > 1) = (n > 1)"):
        assert str(parse_where(text, schema).prunable) == "true", text


FLOATS = st.one_of(st.sampled_from([NAN, math.inf, -math.inf, 0.0, -0.0]), st.integers(-3, 3))
ATOMS = st.sampled_from(
    [
        "x > 1", "x <= -1", "x = 0", "x <> 0", "x BETWEEN -1 AND 1", "x IN (0, 2)", "x IS NULL",
        "x IS NOT NULL", "n > 0.5", "n = 1", "n <> 1", "n >= -1", "n IN (1, 2.5)", "1 < n",
        "p = 'a'", "p <> 'a'", "p IN ('a', 'c')", "p LIKE 'b%'", "p IS NULL", "f", "NOT f",
        "t >= '2026-01-02'", "t < '2026-01-02 00:00:00.0000005'", "x > n",
    ]
)  # fmt: skip
CONDITIONS = st.recursive(
    ATOMS,
    lambda inner: st.one_of(
        st.tuples(inner, st.sampled_from(["AND", "OR"]), inner).map(" ".join).map("({})".format),
        inner.map("(NOT {})".format),
    ),
    max_leaves=5,
)
ROW = st.tuples(
    st.one_of(st.none(), FLOATS.map(float)),
    st.one_of(st.none(), st.integers(-3, 3)),
    st.one_of(st.none(), st.sampled_from(["a", "b", "bb"])),
    st.one_of(st.none(), st.booleans()),
    st.one_of(st.none(), st.integers(1, 3)),
)


@settings(max_examples=150, deadline=None)
@given(rows=st.lists(ROW, min_size=1, max_size=12), text=CONDITIONS)
def test_pruned_row_groups_hold_no_row_that_counts(tmp_path_factory, rows, text):
    x, n, p, f, days = (list(column) for column in zip(*rows, strict=True))
    table = pa.table(
        {
            "x": pa.array(x, pa.float64()),
            "n": pa.array(n, pa.int64()),
            "p": pa.array(p, pa.string()),
            "f": pa.array(f, pa.bool_()),
            "t": pa.array(
                [None if day is None else dt.datetime(2026, 1, day) for day in days],
                pa.timestamp("ms"),
            ),
        }
    )
    path = tmp_path_factory.getbasetemp() / "pruned.parquet"
    pq.write_table(table, path, row_group_size=3)
    condition = parse_where(text, table.schema)
    fragment = ds.ParquetFileFormat().make_fragment(str(path), pafs.LocalFileSystem())
    kept = {group.id for group in fragment.subset(condition.prunable).row_groups}
    for group in range(math.ceil(len(rows) / 3)):
        if group not in kept:
            batch = table.slice(3 * group, 3).combine_chunks().to_batches()[0]
            assert condition.mask(batch).true_count == 0
    whole = table.to_batches()[0]
    assert table.filter(condition.expression).num_rows == condition.mask(whole).true_count


def test_pruning_really_prunes(tmp_path):
    table = pa.table({"x": pa.array([float(n) for n in range(30)])})
    pq.write_table(table, tmp_path / "a.parquet", row_group_size=10)
    fragment = ds.ParquetFileFormat().make_fragment(
        str(tmp_path / "a.parquet"), pafs.LocalFileSystem()
    )
    condition = parse_where("x > 12 AND x < 15", table.schema)
    assert [group.id for group in fragment.subset(condition.prunable).row_groups] == [1]


def test_filter_is_usable_by_data_sets(tmp_path):
    pq.write_table(pa.table({"power_kw": [1.0, 6.0]}), tmp_path / "a.parquet")
    data = ds.dataset(tmp_path / "a.parquet")
    condition = parse_where("power_kw > 5", data.schema)
    assert data.to_table(filter=condition.expression)["power_kw"].to_pylist() == [6.0]


def test_suggested_names_can_be_pasted():
    schema = pa.schema([("code d", pa.float64()), ("order", pa.float64())])
    with pytest.raises(InputError, match="""'code' is no column of DATA; use '"code d"'"""):
        parse_where("code > 1", schema)
    with pytest.raises(InputError, match='write the column alone, as in "order" > 5'):
        parse_where('readings."order" > 1', schema)

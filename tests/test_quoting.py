"""Suggested conditions can be pasted as they are."""

import shlex

import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fastsmooth.quoting import sql_name, where_option
from fastsmooth.where import parse_where

ODD = ["code d", "order", "all", "null", "true", "1x", "x-y", 'q"t', "it's", "Größe", "a.b", "x--y",
       "a/*b", "current_date", "x;y", "[x]", "select"]  # fmt: skip
CONDITIONS = ("{} <> -9999", "ABS({}) < 1e70", "{} > 0 AND {} < 1e30")


def parses(column):
    schema = pa.schema([(column, pa.float64())])
    for condition in CONDITIONS:
        option = where_option(condition.replace("{}", sql_name(column)))
        word, text = shlex.split(option)
        assert word == "--where"
        assert parse_where(text, schema).columns == (column,)


@pytest.mark.parametrize("column", ["power_kw", "x", "_y2", *ODD])
def test_suggestions_read_the_column(column):
    parses(column)


@given(st.text(st.characters(exclude_categories=["Cs", "Cc"]), min_size=1, max_size=12))
def test_any_name_can_be_suggested(column):
    parses(column)


def test_plain_names_stay_plain():
    assert where_option(f"{sql_name('power_kw')} > 0") == "--where 'power_kw > 0'"

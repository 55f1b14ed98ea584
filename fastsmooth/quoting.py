"""Conditions that an error suggests, written so that they can be pasted as they are."""

from __future__ import annotations

import re
import shlex


def sql_name(column: str) -> str:
    """Write a column's name for an SQL condition: in double quotes where it needs them.

    Examples
    --------
    >>> sql_name("power_kw"), sql_name("code d"), sql_name("order")
    ('power_kw', '"code d"', '"order"')
    """
    from sqlglot.tokens import Tokenizer

    # Quotes never harm, so every word that means anything anywhere gets them.
    words = {word for phrase in Tokenizer.KEYWORDS for word in phrase.split()}
    if re.fullmatch(r"[A-Za-z_][A-Za-z0-9_]*", column) and column.upper() not in words:
        return column
    return '"' + column.replace('"', '""') + '"'


def where_option(condition: str) -> str:
    """Write ``--where`` with a condition as a shell takes it.

    Examples
    --------
    >>> where_option(f"{sql_name('code d')} <> -9999")
    '--where \\'"code d" <> -9999\\''
    """
    return f"--where {shlex.quote(condition)}"

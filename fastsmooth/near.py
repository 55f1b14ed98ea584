"""Names near a mistyped one."""

from __future__ import annotations

import difflib
from collections.abc import Iterable


def find_near(name: str, names: Iterable[str], limit: int = 3) -> tuple[str, ...]:
    """Find the names that a mistyped name most likely meant.

    A name that differs in upper and lower case only comes first.

    Parameters
    ----------
    name : str
        What was typed.
    names : iterable of str
        What exists.
    limit : int
        Most names to return.

    Returns
    -------
    tuple of str
        At most `limit` names, the likeliest first; empty if none is near.

    Examples
    --------
    >>> find_near("Wet_Bulb", ["power_kw", "wet_bulb", "plant"])
    ('wet_bulb',)
    """
    known = list(dict.fromkeys(names))
    folded = name.casefold()
    near = [other for other in known if other.casefold() == folded]
    by_folded = {other.casefold(): other for other in reversed(known)}
    for match in difflib.get_close_matches(folded, list(by_folded), n=limit, cutoff=0.6):
        if by_folded[match] not in near:
            near.append(by_folded[match])
    # A short name inside a longer one (power in power_kw) is near too, however long the rest.
    for other in known:
        inside = folded in other.casefold() or other.casefold() in folded
        if min(len(folded), len(other)) >= 3 and inside and other not in near:
            near.append(other)
    return tuple(near[:limit])


def advise(name: str, names: Iterable[str]) -> str:
    """Say which names to use instead of `name`, as the remedy of an error.

    Parameters
    ----------
    name : str
        What was typed.
    names : iterable of str
        What exists.

    Returns
    -------
    str
        ``use 'wet_bulb_c'`` if something is near, else a list of at most ten names.

    Examples
    --------
    >>> advise("plnt", ["plant", "power_kw"])
    "use 'plant'"
    """
    known = list(dict.fromkeys(names))
    near = find_near(name, known)
    if near:
        return "use " + " or ".join(f"'{other}'" for other in near)
    if not known:
        return "there is none to choose from"
    listed = ", ".join(f"'{other}'" for other in known[:10])
    return f"use one of {listed}" + (f" (and {len(known) - 10} more)" if len(known) > 10 else "")

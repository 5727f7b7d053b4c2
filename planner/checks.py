"""Checks that rules about a household share: amounts, bounds, names."""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable, Iterator, Sequence

from planner.diagnostics import Diagnostic

OLDEST = 130.0  # ages beyond are refused
_MOST_LISTED = 20  # names in a message
_LONGEST_COMPARED = 100  # comparing texts takes the product of their lengths


def nearest(found: str, known: Iterable[str], cutoff: float = 0.6) -> str | None:
    """Return the text most like the one found, None where none is; long texts are like no other."""
    if len(found) > _LONGEST_COMPARED:
        return None
    short = [text for text in known if len(text) <= _LONGEST_COMPARED]
    near = difflib.get_close_matches(found, short, n=1, cutoff=cutoff)
    return near[0] if near else None


def shortened(text: str, length: int = 60) -> str:
    """Return a text as a message quotes it: cut where it is long."""
    return text if len(text) <= length else f"{text[:length]}…"


def near_miss(found: str, known: Sequence[str], what: str) -> str:
    """Return the end of a message: the nearest known name, else all of them."""
    by_folded = {name.casefold(): name for name in known}
    near = nearest(found.casefold(), by_folded)
    if near is not None:
        return f"did you mean {by_folded[near]!r}?"
    if not known:
        return f"{what} none"
    listed = ", ".join(repr(name) for name in known[:_MOST_LISTED])
    return f"{what} {listed}" + (f" and {len(known) - _MOST_LISTED} more" * (len(known) > _MOST_LISTED))


def amount(path: str, value: float | None, *, signed: bool = False) -> Iterator[Diagnostic]:
    """Yield a complaint unless an amount is finite and, where not signed, 0 or more."""
    if value is None:
        return
    if not math.isfinite(value):
        yield Diagnostic("number-not-finite", path, f"found {value}; expected a finite amount")
    elif value < 0 and not signed:
        yield Diagnostic("amount-negative", path, f"found {value:,.2f}; expected 0 or more")


def between(
    path: str, value: float | None, low: float, high: float, code: str, *, open_low: bool = False
) -> Iterator[Diagnostic]:
    """Yield a complaint unless a number is finite and within bounds, both included."""
    if value is None:
        return
    if not math.isfinite(value):
        yield Diagnostic("number-not-finite", path, f"found {value}; expected a finite number")
    elif value < low or value > high or (open_low and value <= low):
        lower = f"above {low:g}" if open_low else f"{low:g}"
        yield Diagnostic(code, path, f"found {value:g}; expected {lower} to {high:g}")


def names_differ(path: str, what: str, names: Iterable[str], attribute: str = "name") -> Iterator[Diagnostic]:
    """Yield a complaint for each blank name and each name that occurs twice."""
    seen: dict[str, str] = {}
    for index, name in enumerate(names):
        where = f"{path}[{index}].{attribute}"
        key = " ".join(name.casefold().split())
        if not key:
            yield Diagnostic("name-missing", where, f"the {what} has no name")
        elif key in seen:
            yield Diagnostic("name-twice", where, f"two {what}s are called {name!r}; names must differ")
        seen[key] = where

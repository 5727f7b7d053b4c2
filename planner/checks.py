"""Checks that rules about a household share: amounts, bounds, names."""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable, Iterator, Sequence

from planner.diagnostics import Diagnostic

OLDEST = 130.0  # ages beyond are refused


def near_miss(found: str, known: Sequence[str], what: str) -> str:
    """Return the end of a message: the nearest known name, else all of them."""
    by_folded = {name.casefold(): name for name in known}
    near = difflib.get_close_matches(found.casefold(), list(by_folded), n=1)
    if near:
        return f"did you mean {by_folded[near[0]]!r}?"
    return f"{what} {', '.join(repr(name) for name in known)}" if known else f"{what} none"


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

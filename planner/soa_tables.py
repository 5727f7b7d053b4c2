"""Tables of the Society of Actuaries by their number, where the package ``pymort`` is installed.

``soa-2585`` is table 2585 of the Society's table server (mort.soa.org), ``soa-2585+906`` the same
with the yearly improvement of scale 906. The package carries the tables, so nothing is fetched.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import cache
from typing import Any, Final

from planner.diagnostics import Diagnostic, InputError

_NAME: Final = re.compile(r"^soa-(\d{1,6})(?:\+(\d{1,6}))?$")
_YEAR: Final = re.compile(r"\b(19|20)\d\d\b")


@dataclass(frozen=True, slots=True)
class NumberedTable:
    """One column of probabilities, or of improvement factors, by consecutive whole age.

    Attributes
    ----------
    year : int
        First year named in the title, 0 where none is.
    factors : tuple of float
        Yearly improvement at the ages of `values`; empty where no scale is asked for.
    """

    title: str
    publisher: str
    source: str
    year: int
    first_age: int
    values: tuple[float, ...]
    factors: tuple[float, ...] = ()


def is_number(name: str) -> bool:
    """Whether a life table is named by number: ``soa-2585`` or ``soa-2585+906``."""
    return _NAME.match(name) is not None


@cache
def numbered_table(name: str) -> NumberedTable:
    """Return a table by its number, with the factors of a scale where one is named.

    A scale that stops short of the table's ages keeps its first and last factor beyond them.

    Raises
    ------
    InputError
        Code ``life-table-number``: the package is missing, it has no such table, or the table
        is not one of mortality by age alone.
    """
    match = _NAME.match(name)
    if match is None:
        raise _refused(f"{name!r} is no table number such as soa-2585 or soa-2585+906")
    table = _read(int(match[1]), "mortality")
    if match[2] is None:
        return table
    scale = _read(int(match[2]), "projection scale")
    if not table.year:
        raise _refused(f"{table.title!r} names no year from which scale {match[2]} could count")
    ages = range(table.first_age, table.first_age + len(table.values))
    last = len(scale.values) - 1
    factors = tuple(scale.values[min(max(age - scale.first_age, 0), last)] for age in ages)
    title = f"{table.title}, improving with {scale.title}"
    return NumberedTable(
        title, table.publisher, table.source, table.year, table.first_age, table.values, factors
    )


def _read(number: int, wanted: str) -> NumberedTable:
    try:
        from pymort import MortXML
    except ImportError:
        message = "tables by number need the package pymort: pip install 'retirement-drawdown-planner[soa]'"
        raise _refused(message) from None
    try:
        found: Any = MortXML.from_id(number)
    except FileNotFoundError:
        raise _refused(f"there is no table {number} in the package pymort") from None
    about = found.ContentClassification
    title = " ".join(str(about.TableName).split())
    if wanted not in str(about.ContentType).casefold():
        raise _refused(f"table {number}, {title!r}, is of {about.ContentType}; expected one of {wanted}")
    by_age = [t for t in found.Tables if [axis.AxisName for axis in t.MetaData.AxisDefs] == ["Age"]]
    if not by_age:
        raise _refused(f"table {number}, {title!r}, has no rates by age alone")
    rates = by_age[-1].Values["vals"]  # the ultimate rates of a select table
    ages = [int(age) for age in rates.index]
    values = tuple(float(value) for value in rates)
    if ages != list(range(ages[0], ages[0] + len(ages))) or not all(0.0 <= v <= 1.0 for v in values):
        raise _refused(f"table {number}, {title!r}, has gaps or rates outside 0 to 1")
    year = _YEAR.search(title)
    source = f"table {number} of the Society of Actuaries (mort.soa.org), by the package pymort"
    provider = " ".join(str(about.ProviderName).split())
    return NumberedTable(title, provider, source, int(year[0]) if year else 0, ages[0], values)


def _refused(message: str) -> InputError:
    return InputError([Diagnostic("life-table-number", "people", message)])

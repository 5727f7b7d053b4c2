"""From what stands in a cell to a value: money, shares, dates, ages, rises, choices.

Every function takes an `Entry` that is not blank and either returns the value or raises
`CellProblem` with a stable code and a message that says what was found and what is expected.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from datetime import date, datetime
from decimal import Decimal, InvalidOperation
from typing import Final, Literal

from planner.checks import nearest
from planner.household import LARGER_OF_THE_TWO, Rise
from planner.workbook.data import Entry
from planner.workbook.fields import Field, Kind, choice_value, normalised

EARLIEST_YEAR: Final = 1900
LATEST_YEAR: Final = 2200
OLDEST_AGE: Final = 130
LONGEST_VALUE: Final = 200  # characters of a name, a number written as text, a choice
LONGEST_TEXT: Final = 10_000  # characters of a text that is printed as it stands

_SPACES: Final = "  \u00a0\u2009\u202f"
_MONEY_SIGN: Final = re.compile(
    r"^(?:[A-Z]{3}(?=[\s\d])|[A-Za-z]{0,2}[$£€¥]|CHF|kr\.?)|(?:\b[A-Z]{3}|[$£€¥]|kr\.?)$"
)
_ABBREVIATED: Final = re.compile(r"^[\d.,]+\s*(k|m|mn|bn|b|thousand|million|billion)\.?$", re.IGNORECASE)
_GROUPED: Final = re.compile(rf"^\d{{1,3}}(?:([,'’{_SPACES}])\d{{3}})(?:\1\d{{3}})*(?:\.\d+)?$")
_PLAIN: Final = re.compile(r"^(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?$")
_PERCENT: Final = re.compile(r"^([-+−]?)\s*(\d+\.?\d*|\.\d+)\s*%$")
_AGE: Final = re.compile(
    r"^(\d{1,3})\s*(?:y|yr|yrs|year|years)\.?\s*(?:(\d{1,2})\s*(?:m|mo|month|months)\.?)?$", re.IGNORECASE
)
_CAPPED: Final = re.compile(r"^prices\s*,?\s*(?:up\s*to|max(?:imum)?)\s*(.+)$", re.IGNORECASE)


class CellProblem(Exception):
    """A cell that does not hold what is expected of it."""

    def __init__(self, code: str, message: str) -> None:
        self.code, self.message = code, message
        super().__init__(message)


def _found(entry: Entry) -> str:
    return repr(entry.text)


def _finite(number: float, code: str, expected: str) -> float:
    if not math.isfinite(number):
        raise CellProblem(code, f"found {number}; expected {expected}")
    return number


def _sign(text: str) -> tuple[float, str]:
    if text[:1] in ("-", "−", "–"):
        return -1.0, text[1:].strip(_SPACES)
    return 1.0, text.removeprefix("+").strip(_SPACES)


def money(entry: Entry) -> float:
    """Return an amount: a number, or text such as ``$1,250,000``, ``1 250 000`` or ``-£900.50``."""
    value = entry.value
    if isinstance(value, bool) or isinstance(value, date):
        raise CellProblem("not-money", f"found {_found(entry)}; expected an amount of money")
    if isinstance(value, int | float):
        if entry.is_percentage:
            raise CellProblem("not-money", f"found the percentage {entry.text}; expected an amount of money")
        return _finite(float(value), "not-money", "an amount of money")
    sign, text = _sign((value or "").strip(_SPACES))
    text = _MONEY_SIGN.sub("", text, count=1).strip(_SPACES)
    if sign > 0:
        sign, text = _sign(text)
    if _PLAIN.match(text):
        return sign * _finite(float(text), "not-money", "an amount of money")
    if _GROUPED.match(text):
        return sign * float(re.sub(rf"[,'’{_SPACES}]", "", text))
    if _ABBREVIATED.match(text):
        message = f"found {_found(entry)}; abbreviations are easily misread: write the amount in full"
        raise CellProblem("money-abbreviated", message)
    if re.match(r"^[\d.,\s]+$", text):
        message = (
            f"found {_found(entry)}, which can be read in two ways; write thousands as 1,250,000 or "
            "1 250 000 and decimals with a point"
        )
        raise CellProblem("money-separator", message)
    raise CellProblem("not-money", f"found {_found(entry)}; expected an amount such as 250000 or $250,000")


def _percentage(text: str) -> float | None:
    match = _PERCENT.match(text.strip(_SPACES))
    if match is None:
        return None
    try:
        share = float(Decimal(match[2]) / 100)
    except InvalidOperation:
        return None
    return -share if match[1] in ("-", "−") else share


def _fraction(entry: Entry, expected: str) -> tuple[float, bool]:
    """Return a number, and whether it was written as a percentage in text."""
    value = entry.value
    if isinstance(value, bool) or isinstance(value, date):
        raise CellProblem("not-a-share", f"found {_found(entry)}; expected {expected}")
    if isinstance(value, int | float):
        return _finite(float(value), "not-a-share", expected), False
    text = (value or "").strip(_SPACES)
    if (share := _percentage(text)) is not None:
        return share, True
    sign, plain = _sign(text)
    if _PLAIN.match(plain):
        return sign * _finite(float(plain), "not-a-share", expected), False
    hint = ""
    if re.match(r"^\d+,\d+\s*%?$", plain):
        hint = f"; did you mean {text.replace(',', '.')}?"
    raise CellProblem("not-a-share", f"found {_found(entry)}; expected {expected}{hint}")


def _did_you_mean(entry: Entry, number: float) -> str:
    shown = f"{number:g}" if not entry.is_percentage else f"{number:.12g} shown as {number:.0%}"
    return f"found {shown}; did you mean {number:g}%?"


def share(entry: Entry) -> float:
    """Return a share: ``0.035``, ``3.5%`` or a cell formatted as a percentage.

    A number above 1 is refused: it is a percentage without its sign. Text such as ``150%`` is
    taken at its word, for the household's rules to judge.
    """
    number, in_percent = _fraction(entry, "a share such as 0.035 or 3.5%")
    if not in_percent and abs(number) > 1:
        raise CellProblem("share-percent", _did_you_mean(entry, number))
    return number


def rate(entry: Entry) -> float:
    """Return a yearly rate: as `share`, but a bare 1 is refused as well (1% or 100%?)."""
    number, in_percent = _fraction(entry, "a yearly rate such as 0.035 or 3.5%")
    if not in_percent and abs(number) >= 1:
        raise CellProblem("share-percent", _did_you_mean(entry, number))
    return number


def factor(entry: Entry) -> float:
    """Return a factor: ``0.85``, ``85%`` or ``1.1``; a number of 20 or more lacks its % sign."""
    number, in_percent = _fraction(entry, "a factor such as 0.85 or 85%")
    if not in_percent and abs(number) >= 20:
        raise CellProblem("share-percent", _did_you_mean(entry, number))
    return number


def correlation(entry: Entry) -> float:
    """Return a correlation, -1 to 1 or -100% to 100%; the household's rules check the range."""
    number, in_percent = _fraction(entry, "a correlation from -1 to 1")
    if not in_percent and abs(number) > 1.5:
        raise CellProblem("share-percent", _did_you_mean(entry, number))
    return number


def number(entry: Entry) -> float:
    """Return a plain number."""
    value = entry.value
    if isinstance(value, int | float) and not isinstance(value, bool) and not entry.is_percentage:
        return _finite(float(value), "not-a-number", "a number")
    if isinstance(value, str):
        sign, text = _sign(value.strip(_SPACES))
        if _PLAIN.match(text):
            return sign * _finite(float(text), "not-a-number", "a number")
    raise CellProblem("not-a-number", f"found {_found(entry)}; expected a plain number")


def day(entry: Entry) -> date:
    """Return a date: a cell formatted as a date, or ISO text such as ``1960-05-14``."""
    value = entry.value
    found: date | None = None
    if isinstance(value, datetime):
        found = value.date()
    elif isinstance(value, date):
        found = value
    elif isinstance(value, str):
        text = value.strip(_SPACES)
        if re.match(r"^\d{4}-\d{2}-\d{2}(?:[T ]00:00(?::00)?)?$", text):
            try:
                found = date.fromisoformat(text[:10])
            except ValueError as error:
                message = f"found {_found(entry)}: there is no such day ({error})"
                raise CellProblem("not-a-date", message) from None
        elif re.match(r"^\d{1,2}[./-]\d{1,2}[./-]\d{2,4}$", text):
            message = f"found {_found(entry)}, where day and month may be swapped; write it as 1960-05-14"
            raise CellProblem("not-a-date", message)
    elif isinstance(value, int | float) and not isinstance(value, bool):
        message = f"found the number {entry.text}; format the cell as a date or write 1960-05-14"
        raise CellProblem("not-a-date", message)
    if found is None:
        raise CellProblem("not-a-date", f"found {_found(entry)}; expected a date such as 1960-05-14")
    if not EARLIEST_YEAR <= found.year < LATEST_YEAR:
        message = f"found {found}; expected a year from {EARLIEST_YEAR} to {LATEST_YEAR - 1}"
        raise CellProblem("not-a-date", message)
    return found


def age(entry: Entry) -> float:
    """Return an age in years: ``66``, ``66.5`` or ``66y8m`` (66 and eight twelfths)."""
    value = entry.value
    years: float | None = None
    if isinstance(value, int | float) and not isinstance(value, bool) and not entry.is_percentage:
        years = float(value)
    elif isinstance(value, str):
        text = value.strip(_SPACES)
        if match := _AGE.match(text):
            months = int(match[2] or 0)
            if months > 11:
                message = f"found {_found(entry)}; expected 0 to 11 months"
                raise CellProblem("not-an-age", message)
            years = int(match[1]) + months / 12
        elif _PLAIN.match(text):
            years = float(text)
    if years is None:
        raise CellProblem("not-an-age", f"found {_found(entry)}; expected an age such as 66 or 66y8m")
    if not 0 <= years <= OLDEST_AGE:
        message = f"found {_found(entry)}; expected an age from 0 to {OLDEST_AGE}"
        raise CellProblem("not-an-age", message)
    return years


def year(entry: Entry) -> int:
    """Return a calendar year of four digits."""
    value = entry.value
    if isinstance(value, str) and re.match(r"^\d{4}$", value.strip(_SPACES)):
        value = int(value)
    if isinstance(value, datetime | date):
        message = f"found the date {entry.text}; expected a calendar year such as {value.year}"
        raise CellProblem("not-a-year", message)
    if isinstance(value, bool) or not isinstance(value, int | float) or value != math.floor(value):
        raise CellProblem("not-a-year", f"found {_found(entry)}; expected a calendar year such as 2031")
    if not EARLIEST_YEAR <= value < LATEST_YEAR:
        message = f"found {entry.text}; expected a year from {EARLIEST_YEAR} to {LATEST_YEAR - 1}"
        raise CellProblem("not-a-year", message)
    return int(value)


def yes_or_no(entry: Entry) -> bool:
    """Return True for yes (y, true), False for no (n, false)."""
    if isinstance(entry.value, bool):
        return entry.value
    answer = {"yes": True, "y": True, "true": True, "no": False, "n": False, "false": False}.get(
        entry.text.casefold()
    )
    if answer is None:
        raise CellProblem("not-yes-no", f"found {_found(entry)}; expected yes or no")
    return answer


def text(entry: Entry) -> str:
    """Return what is written, without spaces around it."""
    return entry.text


def name(entry: Entry) -> str:
    """Return a name with its spacing made single."""
    return " ".join(entry.text.split())


def currency(entry: Entry) -> str:
    """Return a currency code in capitals."""
    return entry.text.upper()


def rise(entry: Entry) -> Rise:
    """Return a yearly rise: ``prices``, ``none``, ``2%`` or ``prices up to 2.5%``."""
    words = entry.text.casefold()
    expected = "expected prices, none, 2% or prices up to 2.5%"
    if isinstance(entry.value, str):
        if normalised(words) in ("prices", "inflation", "withprices"):
            return Rise("prices")
        if normalised(words) in ("none", "no", "level"):
            return Rise("fixed", 0.0)
        if match := _CAPPED.match(words):
            try:
                return Rise("capped", rate(Entry(entry.cell, match[1])))
            except CellProblem as problem:
                if problem.code == "share-percent":
                    raise
                raise CellProblem("not-a-rise", f"found {_found(entry)}; {expected}") from None
    try:
        return Rise("fixed", rate(entry))
    except CellProblem as problem:
        if problem.code == "share-percent":
            raise
    near = nearest(words, ("prices", "none", "prices up to 2.5%"))
    hint = f"; did you mean {near!r}?" if near else ""
    raise CellProblem("not-a-rise", f"found {_found(entry)}; {expected}{hint}")


def continuation(entry: Entry) -> float | Literal["larger of the two"]:
    """Return the share that continues to a partner, or ``larger of the two``."""
    if isinstance(entry.value, str) and normalised(entry.value) in ("largerofthetwo", "largerofboth"):
        return LARGER_OF_THE_TWO  # type: ignore[return-value]
    try:
        return share(entry)
    except CellProblem as problem:
        if problem.code == "share-percent":
            raise
        message = f"found {_found(entry)}; expected a share such as 0.5 or 50%, or 'larger of the two'"
        raise CellProblem(problem.code, message) from None


def choice(entry: Entry, choices: tuple[str, ...]) -> str:
    """Return one of the fixed choices; its first words suffice where only one starts so."""
    found = normalised(entry.text)
    values = [choice_value(shown) for shown in choices]
    for shown, value in zip(choices, values, strict=True):
        if found in (normalised(shown), normalised(value)):
            return value
    starting = [v for v, shown in zip(values, choices, strict=True) if normalised(shown).startswith(found)]
    explained = [v for v in values if found.startswith(normalised(v)) and entry.text.rstrip().endswith(")")]
    for candidates in (starting, explained):
        if len(candidates) == 1 and found:
            return candidates[0]
    near = nearest(entry.text.casefold(), values)
    hint = f"did you mean {near!r}?" if near else f"expected {', '.join(values)}"
    raise CellProblem("choice-unknown", f"found {_found(entry)}; {hint}")


_PARSERS: Final[dict[Kind, Callable[[Entry], object]]] = {
    Kind.TEXT: text,
    Kind.DATE: day,
    Kind.MONEY: money,
    Kind.SHARE: share,
    Kind.RATE: rate,
    Kind.FACTOR: factor,
    Kind.NUMBER: number,
    Kind.AGE: age,
    Kind.YEAR: year,
    Kind.YES_NO: yes_or_no,
    Kind.NAME: name,
    Kind.CURRENCY: currency,
    Kind.RISE: rise,
    Kind.CONTINUATION: continuation,
    Kind.CORRELATION: correlation,
    Kind.AS_TYPED: text,
}


def parse(field: Field, entry: Entry) -> object:
    """Return the value of an entry that is not blank, as the field's kind says.

    Raises
    ------
    CellProblem
        The entry does not hold such a value, is a spreadsheet error, or a formula that was never
        computed.
    """
    if entry.fault is not None:
        raise CellProblem(*entry.fault)
    # A text that must be there is a name; the others are the practice's own wording.
    longest = LONGEST_TEXT if field.kind is Kind.TEXT and not field.required else LONGEST_VALUE
    if isinstance(entry.value, str) and len(entry.value) > longest:
        message = f"found a text of {len(entry.value):,} characters; expected at most {longest:,}"
        raise CellProblem("text-too-long", message)
    if field.kind is Kind.CHOICE:
        return choice(entry, field.choices)
    return _PARSERS[field.kind](entry)

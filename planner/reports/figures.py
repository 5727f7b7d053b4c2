"""Figures in words: money, shares, dates, chances and lists as a person reads them."""

from __future__ import annotations

import calendar
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import date

_SYMBOLS = {
    "USD": "$",
    "GBP": "£",
    "EUR": "€",
    "JPY": "¥",
    "CAD": "CA$",
    "AUD": "A$",
    "NZD": "NZ$",
    "ILS": "₪",
    "INR": "₹",
}
# Currencies whose smallest everyday note buys what about 10 dollars do, or less per unit: there a
# projection to the nearest 100 would print digits that mean nothing.
_COARSE = {"JPY": 10_000, "KRW": 100_000, "HUF": 10_000, "CLP": 100_000, "IDR": 1_000_000, "ISK": 10_000}
_LETTER_CURRENCIES = frozenset({"USD", "CAD", "MXN", "CLP", "COP", "PHP"})
# The embedded font has no minus sign; an en dash has its width.
MINUS = "\N{EN DASH}"
DASH = "\N{EN DASH}"
_NO_BREAK = "\N{NO-BREAK SPACE}"


def rounded(value: float, unit: float = 1.0) -> int:
    """`value` to the nearest multiple of `unit`, halves up (so 0.5 is 1 and 1.5 is 2)."""
    return int(math.floor(value / unit + 0.5) * unit)


def at_least(value: float) -> int:
    """The next whole unit at or above `value` (to a millionth): for amounts that must be reached."""
    return math.ceil(value - 1e-6)


@dataclass(frozen=True, slots=True)
class Money:
    """Amounts in one currency (ISO 4217), as text.

    ``exact`` is for instructions (to the unit), ``about`` for projections (to the nearest 100,
    coarser where a unit of the currency is small change), ``monthly`` a twelfth (nearest 10).
    Cells of tables leave the sign out; `unit` belongs in their caption.
    """

    currency: str

    @property
    def step(self) -> int:
        """What projections are rounded to."""
        return _COARSE.get(self.currency, 100)

    @property
    def unit(self) -> str:
        """The sign or code of the currency."""
        return _SYMBOLS.get(self.currency, self.currency)

    def exact(self, value: float) -> str:
        """To the unit, with the currency's sign."""
        return self._signed(rounded(value))

    def about(self, value: float) -> str:
        """To the precision of a projection, with the currency's sign."""
        return self._signed(rounded(value, self.step))

    def monthly(self, yearly: float) -> str:
        """A twelfth of a yearly amount, to a tenth of a projection's precision."""
        return self._signed(rounded(yearly / 12, self.step / 10))

    def exact_cell(self, value: float) -> str:
        """To the unit, no sign; a dash for nothing."""
        return _cell(rounded(value))

    def about_cell(self, value: float) -> str:
        """To the precision of a projection, no sign; a dash for nothing."""
        return _cell(rounded(value, self.step))

    def _signed(self, amount: int) -> str:
        minus = MINUS if amount < 0 else ""
        gap = _NO_BREAK if len(self.unit) == 3 and self.unit.isalpha() else ""
        return f"{minus}{self.unit}{gap}{abs(amount):,}"


def _cell(amount: int) -> str:
    if amount == 0:
        return DASH
    return f"{MINUS if amount < 0 else ''}{abs(amount):,}"


def percent(share: float, decimals: int = 1) -> str:
    """A share as a percentage; trailing zeros dropped ("4%", "4.5%")."""
    text = f"{abs(share) * 100:.{decimals}f}"
    if "." in text:
        text = text.rstrip("0").rstrip(".")
    return f"{MINUS if share < 0 and text != '0' else ''}{text}%"


def of_futures(share: float) -> str:
    """A chance as a count of futures: "9 of 10", "86 of 100", "more than 99 of 100".

    Tenths only where they are within one point of the chance, so that nothing is rounded in
    anybody's favour by more than that.
    """
    if not 0 <= share <= 1:
        raise ValueError(f"a chance is between 0 and 1, not {share}")
    if share == 0:
        return "no"
    if share == 1:
        return "all"
    if share > 0.99:
        return "more than 99 of 100"
    if share < 0.01:
        return "fewer than 1 of 100"
    tenths = round(share * 10)
    if 0 < tenths < 10 and abs(share - tenths / 10) <= 0.01:
        return f"{tenths} of 10"
    return f"{round(share * 100)} of 100"


def day_words(day: date, currency: str) -> str:
    """A date with its month in words, in the order usual where the currency is used."""
    month = calendar.month_name[day.month]
    if uses_letter_paper(currency):
        return f"{month} {day.day}, {day.year}"
    return f"{day.day} {month} {day.year}"


def one_year_after(day: date) -> date:
    """The same day next year (28 February for the 29th)."""
    if (day.month, day.day) == (2, 29):
        return date(day.year + 1, 2, 28)
    return day.replace(year=day.year + 1)


def uses_letter_paper(currency: str) -> bool:
    """Letter where the currency's country prints on it, A4 elsewhere."""
    return currency in _LETTER_CURRENCIES


def language(currency: str) -> str:
    """The document's language tag."""
    return "en-US" if currency == "USD" else "en-GB"


def listed(items: Sequence[str]) -> str:
    """Items joined as in a sentence: "a", "a and b", "a, b and c"."""
    if len(items) < 2:
        return "".join(items)
    return f"{', '.join(items[:-1])} and {items[-1]}"


def age_words(age: float) -> str:
    """An age in years, or in years and months."""
    years, months = divmod(round(age * 12), 12)
    return f"{years}" if months == 0 else f"{years} years {months} months"


def number(value: float, decimals: int = 2) -> str:
    """A plain number without trailing zeros."""
    text = f"{value:.{decimals}f}"
    return text.rstrip("0").rstrip(".") if "." in text else text


def capitalised(text: str) -> str:
    """With a capital first letter."""
    return text[:1].upper() + text[1:]


def add_up(parts: Iterable[float], total: int) -> tuple[int, ...]:
    """Whole numbers next to `parts` that sum to `total` (largest remainders get the odd units).

    Each differs from its part by less than 1 where sum(parts) is within half a unit of `total`.

    Raises
    ------
    ValueError
        `total` is further from the sum than rounding explains.
    """
    values = list(parts)
    floors = [math.floor(v) for v in values]
    missing = total - sum(floors)
    if not 0 <= missing <= len(values):
        raise ValueError(f"{values} cannot be rounded to sum to {total}")
    by_remainder = sorted(range(len(values)), key=lambda i: (floors[i] - values[i], i))
    for i in by_remainder[:missing]:
        floors[i] += 1
    return tuple(floors)

"""What a workbook layout is made of: sheets of forms and tables, made of fields."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from enum import Enum

_WORDS = re.compile(r"\w+")
_LONGEST_LABEL = 300
_BRACKETED_END = re.compile(r"\s*\([^()]*\)\s*$")


class Kind(Enum):
    """Kind of value a cell holds; the value of each member is how it is named to people."""

    TEXT = "text"
    DATE = "date"
    MONEY = "money"
    SHARE = "share"
    RATE = "yearly rate"
    FACTOR = "factor"
    NUMBER = "number"
    AGE = "age"
    YEAR = "year"
    YES_NO = "yes or no"
    CHOICE = "choice"
    NAME = "name"
    CURRENCY = "currency code"
    RISE = "yearly rise"
    CONTINUATION = "share or words"
    CORRELATION = "correlation"
    AS_TYPED = "value as typed"


@dataclass(frozen=True, slots=True)
class Field:
    """One labelled value: a row of a form, or a column of a table.

    Attributes
    ----------
    label
        As written in the workbook; matched by its words.
    kind
        What the cell holds.
    note
        What it means, in plain words.
    target
        Where the value goes: a household path for a form (``spending.essential``), an attribute
        of the row for a table (``balance``).
    required
        A blank is refused.
    default
        What a blank means, written as one would type it; "" where it has to be said in words.
    blank_means
        What a blank means, in words, where `default` cannot say it.
    choices
        The fixed choices, as shown; a choice is what stands before any bracket.
    names_of
        "Sheet/Column" whose entries this field refers to.
    """

    label: str
    kind: Kind
    note: str
    target: str
    required: bool = False
    default: str = ""
    blank_means: str = ""
    choices: tuple[str, ...] = ()
    names_of: str = ""

    @property
    def key(self) -> str:
        """Label as it is matched."""
        return normalised(self.label)


def needed(
    label: str, kind: Kind, target: str, note: str, *, choices: tuple[str, ...] = (), names_of: str = ""
) -> Field:
    """Return a field that must be filled in."""
    return Field(label, kind, note, target, required=True, choices=choices, names_of=names_of)


def optional(
    label: str,
    kind: Kind,
    target: str,
    note: str,
    *,
    default: str = "",
    blank_means: str = "",
    choices: tuple[str, ...] = (),
    names_of: str = "",
) -> Field:
    """Return a field that may stay blank."""
    return Field(label, kind, note, target, False, default, blank_means, choices, names_of)


@dataclass(frozen=True, slots=True)
class Form:
    """Label | value | note, one field a row."""

    name: str
    fields: tuple[Field, ...]


@dataclass(frozen=True, slots=True)
class Table:
    """A header row, then one thing a row; the first column names the row.

    `per_class` is the field of the columns named after asset classes, if any. `blank_rows` are
    written in a blank workbook; `beside` puts the table to the right of the one before it. More
    than `most_rows` are refused.
    """

    name: str
    target: str
    columns: tuple[Field, ...]
    per_class: Field | None = None
    required: bool = False
    blank_rows: int = 8
    most_rows: int = 500
    beside: bool = False
    note: str = ""


@dataclass(frozen=True, slots=True)
class Sheet:
    """A worksheet: what it is for, its forms and tables."""

    name: str
    purpose: str
    parts: tuple[Form | Table, ...]
    required: bool = False

    @property
    def forms(self) -> Iterator[Form]:
        """Forms, in order."""
        return (part for part in self.parts if isinstance(part, Form))

    @property
    def tables(self) -> Iterator[Table]:
        """Tables, in order."""
        return (part for part in self.parts if isinstance(part, Table))


def normalised(text: str) -> str:
    """Return the words of a label without case, spacing or punctuation."""
    return "".join(_WORDS.findall(text.casefold())).replace("_", "")


def label_keys(text: str) -> tuple[str, ...]:
    """Return the ways a cell may match a label: in full, and without a bracketed end."""
    if len(text) > _LONGEST_LABEL:
        return (normalised(text),)  # the pattern below would take the square of the length
    full, short = normalised(text), normalised(_BRACKETED_END.sub("", text))
    return (full,) if short in ("", full) else (full, short)


def choice_value(shown: str) -> str:
    """Return the choice itself, without its explanation in brackets."""
    return shown.partition(" (")[0]

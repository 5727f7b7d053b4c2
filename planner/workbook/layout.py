"""The client workbook, declared once: sheets, forms, tables and fields.

The blank workbook, its guide page, the reader and its messages all come from `SHEETS`; the sheets
themselves stand in `layout_client` and `layout_practice`.
"""

from __future__ import annotations

from typing import Final

from planner import shipped
from planner.workbook.fields import Field, Sheet
from planner.workbook.layout_client import (
    ACCOUNTS,
    HOUSEHOLD,
    INCOME,
    ONE_OFFS,
    PEOPLE,
    PREFERENCES,
    SPENDING,
    START_CHOICES,
)
from planner.workbook.layout_practice import (
    ANNUITY_QUOTE,
    HISTORY,
    LAST_YEAR,
    LIFE_TABLE,
    MARKETS,
    PORTFOLIOS,
    PRACTICE,
    RULES,
    TAX,
    WHAT_IFS,
)

GUIDE_SHEET: Final = "Guide"
LISTS_SHEET: Final = "Lists"
IGNORED_SHEETS: Final = (GUIDE_SHEET, LISTS_SHEET, "Notes")
IGNORED_COLUMNS: Final = ("Note", "Notes", "Comment", "Comments", "Remarks")


def tax_rule_choices() -> tuple[str, ...]:
    """Every set of tax rules that may be named: the shipped ones, ``none`` and ``own``."""
    return tuple(dict.fromkeys(("none", "own", *shipped.tax_rule_names())))


def life_table_choices() -> tuple[str, ...]:
    """Every life table that may be named: the shipped ones and ``own``."""
    return (*shipped.life_table_names(), "own")


SHEETS: Final[tuple[Sheet, ...]] = (
    HOUSEHOLD,
    PEOPLE,
    ACCOUNTS,
    INCOME,
    START_CHOICES,
    ANNUITY_QUOTE,
    ONE_OFFS,
    SPENDING,
    MARKETS,
    PORTFOLIOS,
    PREFERENCES,
    TAX,
    LIFE_TABLE,
    WHAT_IFS,
    RULES,
    HISTORY,
    LAST_YEAR,
    PRACTICE,
)


def shown_choices(field: Field) -> tuple[str, ...]:
    """Fixed choices of a field, shipped names included; empty where there are none."""
    if field.target == "tax_rules":
        return tax_rule_choices()
    if field.target == "life_table":
        return life_table_choices()
    return field.choices

"""The couple with three accounts, broken on purpose: one fault each in as many cells."""

from __future__ import annotations

import copy
from typing import Any

from couples import COUPLE_THREE_ACCOUNTS

from planner.workbook.writing import Values

BROKEN_REMARK = "This invented household is broken on purpose; `planner check` names every fault."
FORMULA_CELL = ("Household", "B9", "=1+1")  # Home value: a formula that no spreadsheet has computed


def broken() -> Values:
    """Return the household with its faults; `FORMULA_CELL` is put in by the caller."""
    values: dict[str, Any] = copy.deepcopy(dict(COUPLE_THREE_ACCOUNTS))
    ana, tom = values["People"]["people"]
    tom["Date of birth"] = "30/11/1960"
    ana["Life table"] = "us-ssa-2202"
    brokerage, work_plan, rollover, tax_free = values["Accounts"]["accounts"]
    brokerage["Type"] = "tax"
    work_plan["Balance"] = "$460k"
    rollover["Owner"] = "Tim"
    tax_free["Account"] = "Ana's work plan"
    ana_pension, tom_pension, work, works_pension = values["Income"]["incomes"]
    ana_pension["From age"] = None
    tom_pension["Amount a year"] = "#REF!"
    work["To age"] = 62
    works_pension["Continues to partner"] = 50
    mortgage, roof, _ = values["One-offs"]["one-offs"]
    mortgage["Rises with prices"] = "perhaps"
    roof["Year"] = 2018
    values["Spending"]["Wanted spending a year"] = 50_000
    values["Spending"]["Care for"] = None
    values["Markets"]["Inflation"] = 2.5
    shares, bonds, _ = values["Markets"]["asset classes"]
    bonds["Shares"] = 0.3
    shares["Standard deviation"] = -0.16
    values["Portfolios"]["portfolios"][2]["Bonds"] = 0.45
    values["Preferences"]["Risk aversion"] = 40
    values["What-ifs"]["what-ifs"][0]["Change"] = "Income/Ana's state pensoin/From age"
    return values

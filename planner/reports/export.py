"""A plan for other programs (JSON) and for an analyst's spreadsheet (results workbook).

Money is real and in the workbook's currency, rounded to the cent; shares and chances to six
decimals. The keys of the JSON file are stable; new ones may be added.
"""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence
from typing import Any, TypeAlias

from openpyxl import Workbook
from openpyxl.cell.cell import ILLEGAL_CHARACTERS_RE
from openpyxl.styles import Alignment, Font, PatternFill
from openpyxl.utils import get_column_letter
from openpyxl.worksheet.properties import PageSetupProperties
from openpyxl.worksheet.worksheet import Worksheet

from planner.markets import nominal_moments
from planner.plan_record import Plan, Range, StrategyResult
from planner.workbook.saving import workbook_bytes

Json: TypeAlias = dict[str, Any]


def money(value: float | None) -> float | None:
    """Round to the cent; None stays None.

    Raises
    ------
    ValueError
        The value is not finite: a results file holds finite numbers only.
    """
    return _rounded(value, 2)


def share(value: float | None) -> float | None:
    """Round a share or a chance to six decimals; None stays None, not finite raises ValueError."""
    return _rounded(value, 6)


def _rounded(value: float | None, digits: int) -> float | None:
    if value is None:
        return None
    if not math.isfinite(value):
        raise ValueError(f"a results file holds finite numbers only, got {value}")
    return round(float(value), digits) + 0.0  # + 0.0 turns -0.0 into 0.0


def _range(values: Range) -> Json:
    return {"p10": money(values.p10), "p50": money(values.p50), "p90": money(values.p90)}


def results_json(plan: Plan) -> Json:
    """Return the plan as plain data: dictionaries, lists, text, numbers and None.

    Parameters
    ----------
    plan
        The plan to export.

    Returns
    -------
    dict
        The results file. Where the proof was not computed, the gap values are None; where a legacy
        is wished for, the levels of steady spending are None.

    Raises
    ------
    ValueError
        A figure is not finite.
    """
    household, sources = plan.household, plan.sources
    expectancy = [share(years) for years in plan.life_expectancy]
    proof = plan.proof
    return {
        "client": household.client_name,
        "plan_date": household.plan_date.isoformat(),
        "currency": household.currency,
        "horizon_years": plan.problem.n_years,
        "life_expectancy": {"first": expectancy[0], "second": expectancy[1] if household.is_couple else None},
        "this_year": _this_year(plan),
        "value": {
            "level_spending": money(plan.level_spending),
            "gap_money": money(proof.gap_money) if proof else None,
            "gap_share": share(proof.gap_share) if proof else None,
            "gap_standard_error": share(proof.gap_standard_error) if proof else None,
            "gap_terms": {name: share(value) for name, value in proof.terms} if proof else None,
            "simulated_over_solved": share(plan.value_share_simulated),
        },
        "schedule": [
            {
                "year": row.year,
                "ages": list(row.ages),
                "spending": _range(row.spending),
                "balance": _range(row.balance),
                "income": money(row.income),
                "withdraw": {
                    "taxable": money(row.withdraw_taxable),
                    "tax_deferred": money(row.withdraw_tax_deferred),
                    "tax_free": money(row.withdraw_tax_free),
                },
                "convert": money(row.convert),
                "tax": money(row.tax),
                "minimum_distribution": money(row.minimum_distribution),
                "essential": money(row.essential),
                "chance_alive": [share(chance) for chance in row.chance_alive],
            }
            for row in plan.schedule
        ],
        "lookup": [
            {
                "status": row.status,
                "balance": money(row.balance),
                "spending": money(row.spending),
                "portfolio": row.portfolio,
            }
            for row in plan.lookup
        ],
        "no_change_band": {
            "low": money(plan.band.low),
            "high": money(plan.band.high),
            "spending_below": money(plan.band.spending_below),
            "spending_above": money(plan.band.spending_above),
            "tolerance": share(plan.band.tolerance),
        },
        "strategies": [strategy_json(result) for result in plan.strategies],
        "survivors": [
            {
                "survivor": view.survivor,
                "income": money(view.income),
                "spending": money(view.spending),
                "tax": money(view.tax),
                "essential": money(view.essential),
                "bills_covered": share(view.bills_covered),
            }
            for view in plan.survivors
        ],
        "what_ifs": [
            {
                "name": result.name,
                "spending_this_year": money(result.spending_this_year),
                "spending_late_p10": money(result.spending_p10_late),
                "chance_below_essential": share(result.chance_below_essential),
                "level_spending": money(result.level_spending),
                "estate_p50": money(result.estate_p50),
            }
            for result in plan.what_ifs
        ],
        "costs": {
            "this_year": {name: money(cost) for name, cost in plan.yearly_costs},
            "over_the_plan": money(plan.plan_costs),
        },
        "warnings": [
            {"code": warning.code, "where": warning.where, "message": warning.message}
            for warning in plan.warnings
        ],
        "sources": {
            "program_version": sources.version,
            "workbook": sources.workbook_name,
            "workbook_sha256": sources.workbook_sha256,
            "seed": sources.seed,
            "n_paths": sources.n_paths,
            "life_tables": list(sources.life_tables),
            "tax_rules": sources.tax_rules,
            "notes": list(sources.notes),
        },
    }


def _this_year(plan: Plan) -> Json:
    now, room = plan.this_year, plan.this_year.room_to_next_threshold
    return {
        "spending": money(now.spending),
        "income": money(now.income),
        "tax": money(now.tax),
        "withdraw": {
            "taxable": money(now.withdraw_taxable),
            "tax_deferred": money(now.withdraw_tax_deferred),
            "tax_free": money(now.withdraw_tax_free),
        },
        "kept": money(now.kept),
        "convert": money(now.convert),
        "minimum_distribution": money(now.minimum_distribution),
        "portfolio": now.portfolio,
        "accounts": [
            {
                "account": row.account,
                "owner": row.owner,
                "type": row.type,
                "balance": money(row.balance),
                "withdraw": money(row.withdraw),
                "minimum_distribution": money(row.minimum_distribution),
                "taken": money(row.taken),
                "still_due": money(row.still_due),
                "convert": money(row.convert),
            }
            for row in now.accounts
        ],
        "incomes": [{"income": name, "amount": money(amount)} for name, amount in now.incomes],
        "bills_covered_by_lifelong_income": share(plan.bills_covered_now),
        "tax_rate_on_next": share(now.tax_rate_on_next),
        "room_to_next_threshold": money(room) if math.isfinite(room) else None,
    }


def strategy_json(result: StrategyResult) -> Json:
    """Return one strategy as plain data, with the standard errors of what was simulated."""
    return {
        "key": result.key,
        "name": result.name,
        "spending_this_year": money(result.spending_this_year),
        "level_spending": money(result.level_spending),
        "wealth_cost": money(result.wealth_cost),
        "wealth_cost_standard_error": money(result.wealth_cost_standard_error),
        "chance_below_essential": share(result.chance_below_essential),
        "chance_standard_error": share(result.chance_standard_error),
        "years_below_essential": share(result.years_below_essential),
        "shortfall": money(result.shortfall),
        "largest_yearly_cut": share(result.largest_yearly_cut),
        "estate": _range(result.estate),
        "tax_paid": money(result.tax_paid),
        "reference": result.reference,
    }


def json_text(data: Json) -> str:
    """Return JSON as text, indented, with a final newline; raises ValueError where not finite."""
    return json.dumps(data, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


# The results workbook ------------------------------------------------------------------------------

_MONEY, _SHARE, _PLAIN = "#,##0", "0.0%", "General"
_HEADER = PatternFill("solid", start_color="E7EAEE")
_WIDEST = 60
_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")

Cell: TypeAlias = str | float | int | None
Column: TypeAlias = tuple[str, str]  # header, number format


def results_workbook(plan: Plan) -> bytes:
    """Return the results workbook: schedule, look-up, strategies, percentiles, assumptions.

    Parameters
    ----------
    plan
        The plan to export.

    Returns
    -------
    bytes
        An .xlsx file. Text that a spreadsheet could take for a formula is stored as text; every
        sheet has a header that stays in view, and number formats.
    """
    book = Workbook()
    book.remove(book.active)  # type: ignore[arg-type]
    book.properties.creator = "retirement-drawdown-planner"
    plan_date = plan.household.plan_date
    book.properties.title = f"Drawdown plan for {plan.household.client_name}, {plan_date.isoformat()}"
    _schedule_sheet(book, plan)
    _lookup_sheet(book, plan)
    _strategies_sheet(book, plan)
    _percentiles_sheet(book, plan)
    _assumptions_sheet(book, plan)
    return workbook_bytes(book, plan_date)


def _fill(
    book: Workbook, title: str, note: str, columns: Sequence[Column], rows: Iterable[Sequence[Cell]]
) -> None:
    """Write one sheet: a note in row 1, the header in row 2, the rows below, header frozen."""
    sheet: Worksheet = book.create_sheet(title)
    sheet.cell(1, 1, note).font = Font(italic=True)
    for number, (header, _) in enumerate(columns, 1):
        cell = sheet.cell(2, number, header)
        cell.font, cell.fill = Font(bold=True), _HEADER
        cell.alignment = Alignment(wrap_text=True, vertical="top")
        sheet.column_dimensions[get_column_letter(number)].width = 14
    sheet.row_dimensions[2].height = 45
    for row_number, row in enumerate(rows, 3):
        for number, (value, (_, number_format)) in enumerate(zip(row, columns, strict=True), 1):
            if isinstance(value, str):
                value = ILLEGAL_CHARACTERS_RE.sub("", value)
            cell = sheet.cell(row_number, number, value)
            if isinstance(value, str):
                cell.data_type = "s"  # never a formula, whatever it starts with
                # Quoted text stays text when the cell is edited or the sheet saved as CSV.
                cell.quotePrefix = value.startswith(_FORMULA_STARTS)
                cell.alignment = Alignment(wrap_text=len(value) > _WIDEST - 4, vertical="top")
                letter = get_column_letter(number)
                width = sheet.column_dimensions[letter].width
                sheet.column_dimensions[letter].width = max(width, min(len(value) + 2, _WIDEST))
                # Programs that open the file do not all make room for wrapped text.
                lines = sum(math.ceil(max(len(line), 1) / _WIDEST) for line in value.split("\n"))
                if lines > 1:
                    height = sheet.row_dimensions[row_number].height or 0
                    sheet.row_dimensions[row_number].height = max(height, 15 * lines)
            else:
                cell.number_format = number_format
                cell.alignment = Alignment(vertical="top")
    sheet.freeze_panes = "B3"
    sheet.auto_filter.ref = f"A2:{get_column_letter(len(columns))}{sheet.max_row}"
    sheet.page_setup.orientation = "landscape"
    sheet.page_setup.fitToWidth, sheet.page_setup.fitToHeight = 1, 0
    sheet.sheet_properties.pageSetUpPr = PageSetupProperties(fitToPage=True)
    sheet.print_title_rows = "1:2"


def _in_todays_money(plan: Plan) -> str:
    return f"All money in today's {plan.household.currency} ({plan.household.plan_date.isoformat()})"


def _schedule_sheet(book: Workbook, plan: Plan) -> None:
    people = [person.name for person in plan.household.people]
    columns: list[Column] = [("Year", _PLAIN), *((f"Age of {name}", _PLAIN) for name in people)]
    columns += [(f"Spending {which}", _MONEY) for which in ("low", "middle", "high")]
    columns += [(f"Savings {which}", _MONEY) for which in ("low", "middle", "high")]
    columns += [
        (header, _MONEY)
        for header in (
            "Income",
            "From taxable",
            "From tax-deferred",
            "From tax-free",
            "Moved to tax-free",
            "Tax",
            "Least that must be taken",
            "Bills",
        )
    ]
    columns += [(f"Chance that {name} lives", _SHARE) for name in people]
    columns += [("Chance that anyone lives", _SHARE)] if len(people) > 1 else []

    def row_of(number: int) -> list[Cell]:
        row = plan.schedule[number]
        figures = (
            *(row.spending.p10, row.spending.p50, row.spending.p90),
            *(row.balance.p10, row.balance.p50, row.balance.p90),
            *(row.income, row.withdraw_taxable, row.withdraw_tax_deferred, row.withdraw_tax_free),
            *(row.convert, row.tax, row.minimum_distribution, row.essential),
        )
        alive = row.chance_alive[: len(people) + (len(people) > 1)]
        return [row.year, *row.ages, *(money(figure) for figure in figures), *(share(c) for c in alive)]

    note = (
        f"{_in_todays_money(plan)}. Low, middle, high: one in ten, half, nine in ten of the futures in "
        "which someone is alive lie below. Other columns: the middle of each figure by itself, so a row "
        "need not add up."
    )
    _fill(book, "Schedule", note, columns, (row_of(number) for number in range(len(plan.schedule))))


def _lookup_sheet(book: Workbook, plan: Plan) -> None:
    columns: list[Column] = [
        ("Who is alive", _PLAIN),
        ("Savings at the next review", _MONEY),
        ("Spending for the year", _MONEY),
        ("Portfolio", _PLAIN),
    ]
    rows = (
        (status_in_words(row.status, plan), money(row.balance), money(row.spending), row.portfolio)
        for row in plan.lookup
    )
    note = f"{_in_todays_money(plan)}. Same split between account types as planned."
    _fill(book, "Look-up", note, columns, rows)


def status_in_words(status: str, plan: Plan) -> str:
    """Who is alive, by name: ``both`` -> "Ana and Ben", ``first`` -> "Ana"."""
    names = [person.name for person in plan.household.people]
    return {"both": " and ".join(names), "first": names[0], "second": names[-1]}[status]


def _strategies_sheet(book: Workbook, plan: Plan) -> None:
    columns: list[Column] = [
        ("Strategy", _PLAIN),
        ("Spending this year", _MONEY),
        ("Worth a steady income of", _MONEY),
        ("What it costs you", _MONEY),
        ("Standard error of the cost", _MONEY),
        ("Chance bills are cut in some year", _SHARE),
        ("Standard error of the chance", "0.00%"),
        ("Years cut, where it happens", "0.0"),
        ("Short by a year, where it happens", _MONEY),
        ("Largest yearly cut, middle future", _SHARE),
        ("Left at death, low", _MONEY),
        ("Left at death, middle", _MONEY),
        ("Left at death, high", _MONEY),
        ("Tax paid over life, mean", _MONEY),
        ("Published in", _PLAIN),
    ]
    rows: list[list[Cell]] = [
        [
            result.name,
            money(result.spending_this_year),
            money(result.level_spending),
            money(result.wealth_cost),
            money(result.wealth_cost_standard_error),
            share(result.chance_below_essential),
            share(result.chance_standard_error),
            share(result.years_below_essential),
            money(result.shortfall),
            share(result.largest_yearly_cut),
            money(result.estate.p10),
            money(result.estate.p50),
            money(result.estate.p90),
            money(result.tax_paid),
            result.reference,
        ]
        for result in plan.strategies
    ]
    note = f"{_in_todays_money(plan)}. Every strategy met the same {plan.sources.n_paths:,} drawn futures."
    _fill(book, "Strategies", note, columns, rows)


def _percentiles_sheet(book: Workbook, plan: Plan) -> None:
    columns: list[Column] = [
        ("Strategy", _PLAIN),
        ("Year", _PLAIN),
        *((f"Spending {which}", _MONEY) for which in ("low", "middle", "high")),
        *((f"Savings {which}", _MONEY) for which in ("low", "middle", "high")),
    ]
    rows: list[list[Cell]] = [
        [
            result.name,
            row.year,
            *(money(float(value)) for value in result.spending[:, t]),
            *(money(float(value)) for value in result.balance[:, t]),
        ]
        for result in plan.strategies
        for t, row in enumerate(plan.schedule)
    ]
    note = f"{_in_todays_money(plan)}. Low, middle, high: the 10th, 50th and 90th percentile."
    _fill(book, "Percentiles", note, columns, rows)


def _assumptions_sheet(book: Workbook, plan: Plan) -> None:
    household, sources = plan.household, plan.sources
    means, deviations, _ = nominal_moments(household.markets, household.portfolios, household.adviser_fee)
    rows: list[tuple[str, Cell]] = [
        ("Client", household.client_name),
        ("Plan date", household.plan_date.isoformat()),
        ("Currency", household.currency),
        ("Essential spending a year, after tax", household.spending.essential),
        ("A survivor needs", _percent(household.spending.survivor_share)),
        ("Cash kept aside", household.spending.cash_aside),
        ("Inflation a year", _percent(household.markets.inflation)),
        ("Risk aversion", household.preferences.risk_aversion),
        ("How much worse cutting bills is", household.preferences.shortfall_weight),
        ("Preference for earlier spending", _percent(household.preferences.time_preference)),
        ("Wish to leave", household.preferences.wish_to_leave),
        ("Heirs' tax rate", _percent(household.preferences.heirs_tax_rate)),
        ("Adviser fee a year", _percent(household.adviser_fee)),
    ]
    rows += _value_rows(plan)
    rows += [
        (
            f"Asset class {asset.name}",
            f"nominal mean {_percent(asset.expected_return)} a year, deviation "
            f"{_percent(asset.standard_deviation)}, income paid out {_percent(asset.income_yield)}",
        )
        for asset in household.markets.asset_classes
    ]
    names = [asset.name for asset in household.markets.asset_classes]
    rows += [
        (f"Correlation of {names[i]} and {names[j]}", household.markets.correlations[i][j])
        for i in range(len(names))
        for j in range(i)
    ]
    rows += [
        (
            f"Portfolio {portfolio.name}",
            f"nominal mean {_percent(float(mean))} a year after costs, deviation "
            f"{_percent(float(deviation))}, its cost {_percent(portfolio.yearly_cost)}",
        )
        for portfolio, mean, deviation in zip(household.portfolios, means, deviations, strict=True)
    ]
    rows += [
        (f"Life expectancy of {person.name}", f"{years:.1f} more years")
        for person, years in zip(household.people, plan.life_expectancy, strict=True)
    ]
    rows += [("Life table", table) for table in sources.life_tables]
    rows += [("Tax rules", sources.tax_rules)]
    rows += [("Note", note) for note in sources.notes]
    rows += [(f"Warning {warning.where}", warning.message) for warning in plan.warnings]
    rows += [
        ("Futures tested", sources.n_paths),
        ("Seed", sources.seed),
        ("Program version", sources.version),
        ("Workbook", sources.workbook_name),
        ("Workbook SHA-256", sources.workbook_sha256),
    ]
    note = f"{_in_todays_money(plan)}. These are estimates under the assumptions below, not promises."
    _fill(book, "Assumptions", note, [("What", _PLAIN), ("Value", _PLAIN)], rows)


def _value_rows(plan: Plan) -> list[tuple[str, Cell]]:
    """How good the plan is: its worth, the bound, and the check of simulation against solution."""
    rows: list[tuple[str, Cell]] = []
    if plan.level_spending is not None:
        rows.append(("Worth a steady income of", money(plan.level_spending)))
    if plan.proof is not None:
        rows += [
            ("How close to the best possible, money", money(plan.proof.gap_money)),
            ("How close to the best possible, share of savings", f"{plan.proof.gap_share:.4%}"),
            ("Standard error of that share", f"{plan.proof.gap_standard_error:.4%}"),
        ]
    rows.append(("Simulated over solved value (about 1)", share(plan.value_share_simulated)))
    return rows


def _percent(value: float) -> str:
    return f"{value:.2%}"

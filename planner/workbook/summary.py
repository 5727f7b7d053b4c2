"""What `planner check` says of a household that can be planned: as data, and for the terminal."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from typing import Any

from rich.console import Console, ConsoleRenderable, Group
from rich.markup import escape
from rich.table import Table
from rich.text import Text

from planner.diagnostics import Diagnostic
from planner.household import (
    AccountType,
    Household,
    Income,
    Portfolio,
    Preferences,
    risk_aversion_from_gambles,
)
from planner.workbook.reading import ReadWorkbook


def summarise(read: ReadWorkbook) -> dict[str, Any]:
    """Return the household in figures, for other programs; stable keys, plain types.

    Portfolio means are nominal, arithmetic, after the portfolio's own cost and the adviser's fee;
    all other money is as in the workbook.
    """
    household = read.household
    return {
        "client": household.client_name,
        "plan_date": household.plan_date.isoformat(),
        "currency": household.currency,
        "tax_rules": household.tax_rules,
        "people": [
            {
                "name": person.name,
                "age": person.age_on(household.plan_date),
                "sex": person.sex,
                "life_table": person.life_table,
                "death_rates_compared": person.mortality_multiplier,
            }
            for person in household.people
        ],
        "accounts": {
            kind.value.replace("-", "_"): sum(a.balance for a in household.accounts if a.type is kind)
            for kind in AccountType
        },
        "incomes": [
            {
                "name": income.name,
                "owner": income.owner,
                "kind": income.kind.value,
                "amount": income.amount,
                "from_age": income.from_age,
                "to_age": income.to_age,
                "rise": _rise_words(income),
            }
            for income in sorted(household.incomes, key=lambda income: income.from_age)
        ],
        "spending": {
            "essential": household.spending.essential,
            "wanted": household.spending.wanted,
            "ceiling": household.spending.ceiling,
            "survivor_share": household.spending.survivor_share,
        },
        "inflation": household.markets.inflation,
        "portfolios": [
            {"name": p.name, "mean": mean, "standard_deviation": deviation}
            for p in household.portfolios
            for mean, deviation in [portfolio_law(household, p)]
        ],
        "preferences": {
            "risk_aversion": household.preferences.risk_aversion,
            "shortfall_weight": household.preferences.shortfall_weight,
            "fallback_income": household.preferences.fallback_income,
            "time_preference": household.preferences.time_preference,
            "wish_to_leave": household.preferences.wish_to_leave,
            "conversions_allowed": household.preferences.conversions_allowed,
        },
        "is_draft": household.practice.is_draft,
        "sha256": read.sha256,
    }


def as_records(diagnostics: Iterable[Diagnostic]) -> list[dict[str, str]]:
    """Return diagnostics as plain records: code, where, message, severity."""
    return [
        {"code": d.code, "where": d.where, "message": d.message, "severity": d.severity} for d in diagnostics
    ]


def portfolio_law(household: Household, portfolio: Portfolio) -> tuple[float, float]:
    r"""Nominal mean after costs, and standard deviation: :math:`a \cdot m - f`, :math:`\sqrt{a'(sQs)a}`."""
    classes, matrix = household.markets.asset_classes, household.markets.correlations
    mean = sum(w * c.expected_return for w, c in zip(portfolio.weights, classes, strict=True))
    scaled = [w * c.standard_deviation for w, c in zip(portfolio.weights, classes, strict=True)]
    size = range(len(classes))
    variance = sum(scaled[i] * matrix[i][j] * scaled[j] for i in size for j in size)
    return mean - portfolio.yearly_cost - household.adviser_fee, math.sqrt(max(0.0, variance))


def show(read: ReadWorkbook, console: Console) -> None:
    """Print the household summary and the warnings."""
    for block in _blocks(read.household):
        console.print(block)
    if read.warnings:
        console.print(Text("\nWarnings", style="bold"))
        for warning in read.warnings:
            console.print(
                f"[yellow]{warning.severity}[/] {escape(warning.where)}: {escape(warning.message)} "
                f"[dim]({warning.code})[/]"
            )


def _money(amount: float | None) -> str:
    return "-" if amount is None else f"{amount:,.0f}"


def _age(age: float) -> str:
    months = round((age - math.floor(age)) * 12)
    if months == 12:
        return f"{math.floor(age) + 1}"
    return f"{math.floor(age)}y{months}m" if months else f"{age:.0f}"


def _rise_words(income: Income) -> str:
    rise = income.rise
    if rise.kind == "prices":
        return "prices"
    if rise.kind == "capped":
        return f"prices up to {rise.rate * 100:g}%"
    return f"{rise.rate * 100:g}%" if rise.rate else "none"


def _table(
    title: str, columns: Sequence[str], rows: Iterable[Sequence[str]], *, left: int = 1
) -> ConsoleRenderable:
    """Return a title and a plain table; the first `left` columns are words, the rest figures."""
    table = Table(box=None, pad_edge=False, show_header=any(columns[1:]))
    for number, column in enumerate(columns):
        table.add_column(
            column, justify="left" if number < left else "right", overflow="fold", header_style="dim"
        )
    for row in rows:
        table.add_row(*(escape(text) for text in row))
    return Group(Text(title, style="bold"), table)


def _blocks(household: Household) -> Iterator[ConsoleRenderable]:
    heading = Text(household.client_name, style="bold")
    yield heading
    couple = f", {household.couple_is}" if household.is_couple else ""
    yield Text(
        f"Plan date {household.plan_date}, {household.currency}, tax rules {household.tax_rules}{couple}\n"
    )
    yield _table(
        "People",
        ("Person", "Sex", "Life table", "Age", "Death rates"),
        (
            (
                person.name,
                person.sex,
                person.life_table,
                str(person.age_on(household.plan_date)),
                f"x {person.mortality_multiplier:g}",
            )
            for person in household.people
        ),
        left=3,
    )
    yield Text()
    totals = [
        (kind.value, [a.balance for a in household.accounts if a.type is kind])
        for kind in AccountType
        if any(a.type is kind for a in household.accounts)
    ]
    rows = [(name, str(len(balances)), _money(sum(balances))) for name, balances in totals]
    rows.append(
        ("all savings", str(len(household.accounts)), _money(sum(a.balance for a in household.accounts)))
    )
    yield _table("Savings by type", ("Type", "Accounts", "Balance"), rows)
    yield Text()
    if household.incomes:
        yield _table(
            "Incomes, by start age",
            ("Income", "Owner", "Rises with", "From", "To", "A year"),
            (
                (
                    income.name,
                    income.owner,
                    _rise_words(income),
                    _age(income.from_age),
                    "life" if income.to_age is None else _age(income.to_age),
                    _money(income.amount),
                )
                for income in sorted(household.incomes, key=lambda income: income.from_age)
            ),
            left=3,
        )
        yield Text()
    yield from _wishes(household)


def gamble_words(wishes: Preferences) -> str:
    """The two answers about gambles with lifetime income, in words; "" where neither was given."""
    third, second = wishes.accepts_third_cut, wishes.accepts_second_gamble
    if third is None or second is None:
        return ""
    cut = "half" if third else "a fifth"
    return (
        f"The client {'would take' if third else 'would not take'} a job that doubles income for life or "
        f"cuts it by a third at even odds, and {'would' if second else 'would not'} with a cut by {cut}: "
        f"risk aversion {risk_aversion_from_gambles(third, second):g}, our number for people who answer so."
    )


def _wishes(household: Household) -> Iterator[ConsoleRenderable]:
    spending, wishes = household.spending, household.preferences
    lines = [
        ("essential (bills)", _money(spending.essential)),
        ("wanted", _money(spending.wanted)),
        ("most", _money(spending.ceiling)),
    ]
    if household.is_couple:
        lines.append(("survivor needs", f"{spending.survivor_share:.0%}"))
    if spending.cash_aside:
        lines.append(("cash kept aside", _money(spending.cash_aside)))
    yield _table("Spending a year, today's money", ("", ""), lines)
    yield Text()
    yield _table(
        f"Portfolios, a year after costs (prices rise {household.markets.inflation:.1%})",
        ("Portfolio", "Mean", "Standard deviation"),
        (
            (portfolio.name, f"{mean:.2%}", f"{deviation:.2%}")
            for portfolio in household.portfolios
            for mean, deviation in [portfolio_law(household, portfolio)]
        ),
    )
    choice = household.portfolio_choice or "best each year"
    yield Text(f"Portfolio choice: {choice}\n")
    fallback = wishes.fallback_income
    yield _table(
        "Preferences",
        ("", ""),
        (
            ("risk aversion", f"{wishes.risk_aversion:g}"),
            ("how much worse cutting bills is", f"{wishes.shortfall_weight:g}"),
            ("fallback income", _money(0.1 * spending.essential if fallback is None else fallback)),
            ("preference for earlier spending", f"{wishes.time_preference * 100:g}%"),
            ("wish to leave", _money(wishes.wish_to_leave)),
            ("moves to tax-free allowed", "yes" if wishes.conversions_allowed else "no"),
        ),
    )
    if words := gamble_words(wishes):
        yield Text(f"\n{words}")
    if household.practice.is_draft:
        yield Text("\nDRAFT - NOT FOR CLIENT: the sheet Practice is not complete.")

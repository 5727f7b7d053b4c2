"""What the terminal shows: shipped tables and a plan's summary.

Functions return rich renderables; the command line prints them. Tables fit 80 columns.
"""

from __future__ import annotations

import textwrap
from collections.abc import Sequence

from rich.console import Group, RenderableType
from rich.markup import escape
from rich.table import Table
from rich.text import Text

from planner.mortality import TableDescription
from planner.plan_record import Plan
from planner.reports.figures import Money, percent
from planner.taxes import RulesDescription


def shipped_tables(
    life_tables: Sequence[TableDescription], tax_rules: Sequence[RulesDescription], width: int
) -> Group:
    """Life tables and tax rules that come with the program, each with its source and year."""
    blocks: list[RenderableType] = [Text("Life tables", style="bold")]
    for table in life_tables:
        improvement = "with yearly improvement" if table.improvement else "no improvement of death rates"
        behind = max(rules.year for rules in tax_rules) - table.year
        blocks.append(
            _entry(
                table.name,
                table.year,
                table.title,
                [
                    f"{table.publisher}. {table.source}",
                    f"Ages {table.ages[0]} to {table.ages[1]}; {improvement}.",
                    f"Deaths of {table.year}: {behind} years behind the newest tax rules below.",
                ],
                width,
            )
        )
    blocks += [Text(), Text("Tax rules", style="bold")]
    for rules in tax_rules:
        couple = "couples taxed together" if rules.taxed == "together" else "each person taxed"
        lines = [f"{rules.publisher}. {rules.source}", f"{couple.capitalize()}. {rules.checked}".strip()]
        blocks.append(_entry(rules.name, rules.year, rules.title, [*lines, *rules.notes], width))
    return Group(*blocks)


def _entry(name: str, year: int, title: str, lines: Sequence[str], width: int) -> Text:
    text = Text(f"  {name}", style="cyan")
    dated = f"  ({year})" if year and str(year) not in title else ""
    text.append(wrapped(f"{title}{dated}", width, "    ", newline=True), style="default")
    for line in lines:
        if line.strip(" ."):
            text.append(wrapped(line.strip(), width, "    ", newline=True), style="dim")
    return text


def plan_summary(plan: Plan) -> Group:
    """Instructions for this year in a few lines, for the adviser who has just made the plan."""
    now, money = plan.this_year, Money(plan.household.currency)
    table = Table(box=None, show_header=False, padding=(0, 1))
    table.add_column()
    table.add_column(justify="right", no_wrap=True)
    table.add_row(Text("Spend this year, after tax", style="bold"), money.exact(now.spending))
    table.add_row("  income before tax", money.exact(now.income))
    for account in now.accounts:
        if account.withdraw > 0:
            table.add_row(escape(f"  from {account.account}"), money.exact(account.withdraw))
    if now.convert > 0:
        table.add_row("  moved from tax-deferred to tax-free", money.exact(now.convert))
    table.add_row("  less tax (check with a tax preparer)", money.exact(-now.tax))
    if now.kept > 0:
        table.add_row("  less cash kept in taxable", money.exact(-now.kept))
    table.add_row("Portfolio to hold", escape(now.portfolio))
    if plan.level_spending is not None:
        table.add_row("Worth a steady income of", money.about(plan.level_spending))
    if plan.proof is not None:
        share = f"{percent(plan.proof.gap_share, 2)} of savings"
        table.add_row("From the best possible, at most", f"{money.about(plan.proof.gap_money)}, {share}")
    bills = 1 - plan.strategies[0].chance_below_essential
    table.add_row("Futures tested in which bills are always paid", percent(bills))
    return Group(table)


def wrapped(text: str, width: int, indent: str = "", newline: bool = False) -> str:
    """Fill lines of at most `width` characters; words with hyphens stay whole."""
    filled = textwrap.fill(
        text, max(20, width), initial_indent=indent, subsequent_indent=indent, break_on_hyphens=False
    )
    return f"\n{filled}" if newline else filled

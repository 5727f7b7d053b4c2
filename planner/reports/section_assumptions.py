"""Part 10: costs, assumptions with their sources, warnings, drawbacks and alternatives."""

from __future__ import annotations

import math
from typing import Final

from planner.household import Household, Portfolio
from planner.plan_record import Plan
from planner.reports.blocks import Block, Bullets, Column, Facts, Heading, Table, Text
from planner.reports.figures import Money, percent
from planner.reports.section_facts import tax_rules_words
from planner.reports.wording import DRAFT

LEFT: Final = "left"


def costs_and_assumptions(plan: Plan) -> tuple[Block, ...]:
    """What the plan costs and what it rests on."""
    household = plan.household
    return (
        Heading("Costs and assumptions", 1, 10),
        *_costs(plan),
        *_warnings(plan),
        Heading("Alternatives considered and drawbacks"),
        Heading("Alternatives considered", 3),
        Text(household.practice.alternatives_considered.strip() or f"Not written yet ({DRAFT})."),
        Heading("Drawbacks", 3),
        Text(household.practice.drawbacks.strip() or f"Not written yet ({DRAFT})."),
        Heading("Markets and prices"),
        Text(
            "Expected returns, risks and price rises are your adviser's assumptions, entered in the workbook "
            f"'{plan.sources.workbook_name}' on {household.plan_date.isoformat()}. They are not forecasts "
            "of this program."
        ),
        _asset_classes(household),
        *_correlations(household),
        _portfolios(household),
        Heading("Lives, taxes and the calculation"),
        Facts(_sources(plan)),
        *_notes(plan),
    )


def _costs(plan: Plan) -> tuple[Block, ...]:
    money = Money(plan.household.currency)
    rows = [(name, money.exact_cell(amount)) for name, amount in plan.yearly_costs]
    total = sum(amount for _, amount in plan.yearly_costs)
    rows.append(("This year, together", money.exact_cell(total)))
    rows.append(("Over the whole plan, on average", money.about_cell(plan.plan_costs)))
    return (
        Heading("What it costs"),
        Table(
            (Column("Cost", LEFT), Column(f"Amount ({money.unit})")),
            tuple(rows),
            "In today's money. All projections in this plan are after these costs. Costs that are not in "
            "the workbook, such as "
            "trading or transfer costs, are not included.",
            strong=(len(rows) - 2,),
        ),
    )


def _asset_classes(household: Household) -> Table:
    markets = household.markets
    rows = tuple(
        (
            c.name,
            percent(c.expected_return, 2),
            percent((1 + c.expected_return) / (1 + markets.inflation) - 1, 2),
            percent(c.standard_deviation, 2),
            percent(c.income_yield, 2),
        )
        for c in markets.asset_classes
    )
    return Table(
        (
            Column("Asset class", LEFT),
            Column("With price rises", group="Expected return a year"),
            Column("Above prices", group="Expected return a year"),
            Column("Standard deviation"),
            Column("Paid out a year"),
        ),
        rows,
        f"Before costs and tax. Prices rise {percent(markets.inflation, 2)} a year. Standard deviation: "
        "in about two of "
        "three years the return is within this distance of the expected one.",
    )


def _correlations(household: Household) -> tuple[Block, ...]:
    classes = household.markets.asset_classes
    if len(classes) < 2:
        return ()
    columns = (
        Column("Moving together (correlation)", LEFT),
        *(Column(str(i + 1)) for i in range(len(classes))),
    )
    rows = tuple(
        (f"{i + 1} {c.name}", *(f"{value:.2f}" for value in row))
        for i, (c, row) in enumerate(zip(classes, household.markets.correlations, strict=True))
    )
    return (
        Table(columns, rows, "1: always move together; 0: move independently; below 0: tend to move apart."),
    )


def _portfolios(household: Household) -> Table:
    rows = tuple(_portfolio_row(p, household) for p in household.portfolios)
    columns = (
        Column("Portfolio", LEFT),
        Column("Made of", LEFT),
        Column("Its cost"),
        Column("Return above prices"),
        Column("Standard deviation"),
    )
    fee = percent(household.adviser_fee, 2)
    return Table(
        columns,
        rows,
        f"A year; return after the portfolio's cost and the adviser's fee of {fee}, before tax. Each "
        "portfolio is brought back "
        "to its weights once a year.",
    )


def _portfolio_row(portfolio: Portfolio, household: Household) -> tuple[str, ...]:
    """Mean a·m - fees in real terms; standard deviation from weights and correlations."""
    markets = household.markets
    weights = portfolio.weights
    mean = sum(w * c.expected_return for w, c in zip(weights, markets.asset_classes, strict=True))
    mean -= portfolio.yearly_cost + household.adviser_fee
    scaled = [w * c.standard_deviation for w, c in zip(weights, markets.asset_classes, strict=True)]
    variance = sum(
        a * b * markets.correlations[i][j] for i, a in enumerate(scaled) for j, b in enumerate(scaled)
    )
    made_of = ", ".join(
        f"{percent(w, 1)} {c.name}" for w, c in zip(weights, markets.asset_classes, strict=True) if w
    )
    return (
        portfolio.name,
        made_of,
        percent(portfolio.yearly_cost, 2),
        percent((1 + mean) / (1 + markets.inflation) - 1, 2),
        percent(math.sqrt(max(0.0, variance)) / (1 + markets.inflation), 2),
    )


def _sources(plan: Plan) -> tuple[tuple[str, str], ...]:
    sources, household = plan.sources, plan.household
    rows = [
        ("Life tables", "; ".join(sources.life_tables) or "none named"),
        ("Tax", tax_rules_words(household) if household.tax_rules == "own" else sources.tax_rules),
    ]
    if household.extra_income_tax_rate is None and household.tax_rules != "none":
        rows.append(("State or regional income tax", "none was entered, so none is counted"))
    if household.history is not None and household.history.years:
        years = household.history.years
        rows.append(("History", f"the firm's own yearly series {min(years)} to {max(years)}"))
    rows += [
        ("Futures tested", f"{sources.n_paths:,}, random seed {sources.seed}"),
        ("Length of the plan", f"{len(plan.schedule)} years"),
        ("Program version", sources.version),
        ("Workbook", f"{sources.workbook_name}, SHA-256 {_spaced(sources.workbook_sha256)}"),
    ]
    return tuple(rows)


def _spaced(digest: str) -> str:
    """A fingerprint in groups of 8, so that it can be read aloud and wraps."""
    return " ".join(digest[i : i + 8] for i in range(0, len(digest), 8))


def _notes(plan: Plan) -> tuple[Block, ...]:
    return tuple(Text(note, "note") for note in plan.sources.notes)


def _warnings(plan: Plan) -> tuple[Block, ...]:
    """The workbook's warnings, each with its cell."""
    items = [f"{w.where}: {w.message} ({w.code})" for w in plan.warnings]
    if not items:
        return (Heading("Warnings"), Text("Reading the workbook gave no warnings."))
    return (
        Heading("Warnings"),
        Text(
            "The program found these points unusual. They did not stop the plan; your adviser should "
            "explain them."
        ),
        Bullets(tuple(items)),
    )

"""A year on: where the client stands against last year's plan, what changes now, and why."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import date
from pathlib import Path
from typing import Any, Final

import numpy as np
from scipy.special import ndtr, ndtri

from planner import __version__
from planner.checks import shortened
from planner.diagnostics import Diagnostic, InputError
from planner.files import read_limited
from planner.household import Household
from planner.instructions import first_year, this_year
from planner.plan import PlanSettings, Progress, first_choice, solve_household
from planner.plan_record import Range

LARGEST_RESULTS: Final = 50_000_000  # bytes; a plan's have under one million
FEW_PATHS: Final = 500
"""Futures drawn to read this year's choice off the new plan, which is the same in all of them."""


@dataclass(frozen=True, slots=True)
class LastPlan:
    """What a review needs of a results file; money of the last plan's date.

    `lookup` maps a status to savings at this review and the spending they were said to bear;
    `balance` is the fan of savings now, by last year's plan; `survivors` are a couple's names in
    order (empty for a single client).
    """

    client: str
    plan_date: date
    currency: str
    spending: float
    portfolio: str
    balance: Range
    lookup: Mapping[str, tuple[tuple[float, ...], tuple[float, ...]]]
    band: tuple[float, float, float] | None
    survivors: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Move:
    """One reason why this year's spending differs from last year's, and by how much."""

    name: str
    amount: float


@dataclass(frozen=True, slots=True, eq=False)
class Review:
    """A review; all money of the new plan's date.

    Attributes
    ----------
    price_factor : float
        Multiplies the last plan's figures: expected inflation over the years between.
    savings : float
        As the plan counts them: taxable after tax on its gain, without cash aside.
    fan : Range
        Savings now by last year's plan.
    percentile : float
        Share of the last plan's futures with less than `savings`, read off the fan's three points.
    planned_spending, spent : float, float or None
        Last year, in last year's money; `spent` None where the sheet Last year is blank.
    spending_before : float
        Last year's planned spending with prices.
    spending_now, portfolio_now, portfolio_before
        What the new plan says.
    band : tuple of (low, high, tolerance) or None
        Savings between which nothing had to change.
    inside_band : bool
        Savings lie in it.
    moves : tuple of Move
        They add up to ``spending_now - spending_before``.
    """

    household: Household
    last: LastPlan
    price_factor: float
    savings: float
    fan: Range
    percentile: float
    planned_spending: float
    spent: float | None
    spending_before: float
    spending_now: float
    portfolio_now: str
    portfolio_before: str
    band: tuple[float, float, float] | None
    inside_band: bool
    moves: tuple[Move, ...]


def read_last(path: Path) -> LastPlan:
    """Read a results file of `planner plan --json`.

    Raises
    ------
    InputError
        Code ``results-unreadable``: not such a file, or a key is missing; where another version of
        the program wrote it, the message says which.
    OSError
        The file cannot be read.
    """
    content = read_limited(path, LARGEST_RESULTS)
    data: Any = None
    try:
        if len(content) > LARGEST_RESULTS:
            raise ValueError("too large")
        data = json.loads(content)
        rows: dict[str, list[tuple[float, float]]] = {}
        for row in data["lookup"]:
            pair = (_number(row["balance"]), _number(row["spending"]))
            rows.setdefault(str(row["status"]), []).append(pair)
        if not rows.keys() & {"both", "first"} or rows.keys() - {"both", "first", "second"}:
            raise ValueError("not the statuses of one client or a couple")
        lookup = {
            status: (tuple(b for b, _ in sorted(pairs)), tuple(c for _, c in sorted(pairs)))
            for status, pairs in rows.items()
        }
        band = data.get("no_change_band")
        fan = data["schedule"][1]["balance"]
        return LastPlan(
            client=str(data["client"]),
            plan_date=date.fromisoformat(data["plan_date"]),
            currency=str(data["currency"]),
            spending=_number(data["this_year"]["spending"]),
            portfolio=str(data["this_year"]["portfolio"]),
            balance=Range(*(_number(fan[key]) for key in ("p10", "p50", "p90"))),
            lookup=lookup,
            band=None
            if band is None
            else (_number(band["low"]), _number(band["high"]), _number(band["tolerance"])),
            survivors=tuple(str(view["survivor"]) for view in data.get("survivors", ())[:2]),
        )
    except (ValueError, KeyError, TypeError, IndexError, AttributeError, RecursionError) as error:
        missing = f"there is no {error}" if isinstance(error, KeyError) else "it cannot be read as such"
        message = f"expected a results file written by 'planner plan --json' a year ago; {missing}"
        message += _other_version(data)
        raise InputError([Diagnostic("results-unreadable", str(path), message)]) from None


def _number(value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        raise ValueError("not a number")
    return float(value)


def _other_version(data: object) -> str:
    """Say which other version of the program wrote results, so far as they tell."""
    sources = data.get("sources") if isinstance(data, dict) else None
    version = sources.get("program_version") if isinstance(sources, dict) else None
    if not isinstance(version, str) or version == __version__:
        return ""
    return f" (version {shortened(version)} of the program wrote it, this is {__version__})"


def review(
    household: Household, last: LastPlan, settings: PlanSettings, progress: Progress | None = None
) -> Review:
    """Compare the client as they are now with last year's plan.

    What moved the answer is read off last year's look-up table, step by step: a year older at the
    savings that were planned for; then a death; then what was spent more or less than planned;
    then one-offs and money paid in; then the rest of the difference of savings, which is markets;
    last what the new plan says at the same savings, which is everything changed in the workbook.

    Raises
    ------
    InputError
        Codes ``review-client``, ``review-currency``, ``review-date``: the results file is of another
        client or currency, or not of a plan made in the calendar year before.
    """
    _same_client(household, last)
    solved = solve_household(
        household,
        replace(settings, n_paths=FEW_PATHS, late_years=False),
        None if progress is None else lambda share: progress(share, "finding the best plan"),
    )
    now = this_year(household, solved.problem, first_year(household), first_choice(solved))
    factor = 1 + household.markets.inflation
    savings = solved.problem.wealth
    fan = Range(*(factor * value for value in (last.balance.p10, last.balance.p50, last.balance.p90)))
    spent = household.last_year.spent
    band = None if last.band is None else (factor * last.band[0], factor * last.band[1], last.band[2])
    return Review(
        household=household,
        last=last,
        price_factor=factor,
        savings=savings,
        fan=fan,
        percentile=percentile_in(fan, savings),
        planned_spending=last.spending,
        spent=spent,
        spending_before=factor * last.spending,
        spending_now=now.spending,
        portfolio_now=now.portfolio,
        portfolio_before=last.portfolio,
        band=band,
        inside_band=band is not None and band[0] <= savings <= band[1],
        moves=_moves(household, last, factor, savings, fan.p50, now.spending),
    )


def _same_client(household: Household, last: LastPlan) -> None:
    found = []
    # After a death the workbook may be renamed: a name in common suffices.
    words = {word.casefold() for word in last.client.split() if len(word) > 2}
    if words and not words & {word.casefold() for word in household.client_name.split()}:
        message = f"the results are of {last.client!r}, the workbook is of {household.client_name!r}"
        found.append(Diagnostic("review-client", "--last", message))
    if last.currency != household.currency:
        message = f"the results are in {last.currency}, the workbook in {household.currency}"
        found.append(Diagnostic("review-currency", "--last", message))
    if household.plan_date.year - last.plan_date.year != 1:
        message = (
            f"the results are of a plan of {last.plan_date}, the workbook's plan date is "
            f"{household.plan_date}; expected the plan of the year before: its look-up table is for one year "
            f"on"
        )
        found.append(Diagnostic("review-date", "--last", message))
    if found:
        raise InputError(found)


def percentile_in(fan: Range, value: float) -> float:
    """Share of futures below a value, from the 10th, 50th and 90th percentile, within 0.01 to 0.99.

    The normal quantile is taken as piecewise linear in the logarithm of money through the three
    points, and continued beyond them.
    """
    points = np.array([fan.p10, fan.p50, fan.p90])
    if points[0] <= 0 or value <= 0 or points[0] >= points[1] or points[1] >= points[2]:
        return float(np.clip(np.interp(value, points, (0.1, 0.5, 0.9)), 0.01, 0.99))
    x, quantiles = np.log(points), ndtri((0.1, 0.5, 0.9))
    at = math.log(value)
    k = 0 if at < x[1] else 1
    slope = (quantiles[k + 1] - quantiles[k]) / (x[k + 1] - x[k])
    return float(np.clip(ndtr(quantiles[k] + slope * (at - x[k])), 0.01, 0.99))


def _moves(
    household: Household, last: LastPlan, factor: float, savings: float, planned: float, spending: float
) -> tuple[Move, ...]:
    before = "both" if "both" in last.lookup else "first"
    status = _status_now(household, last)
    spent, received = household.last_year.spent, household.last_year.one_offs_received
    paid_in = household.last_year.paid_in
    unspent = 0.0 if spent is None else last.spending - spent
    extra = (received or 0.0) + (paid_in or 0.0)

    def says(where: str, balance: float) -> float:
        balances, amounts = last.lookup.get(where, last.lookup[before])
        return factor * float(np.interp(balance / factor, balances, amounts))

    steps = [("a year older, savings as planned", says(before, planned))]
    if status != before:
        steps.append(("one of the two has died", says(status, planned)))
    if spent is not None:
        steps.append(("spent less or more than planned", says(status, planned + unspent)))
    if extra:
        steps.append(("one-offs and money paid in", says(status, planned + unspent + extra)))
    steps.append(("markets, and whatever else moved savings", says(status, savings)))
    steps.append(("assumptions, incomes and wishes in the workbook", spending))
    moves, level = [], factor * last.spending
    for name, amount in steps:
        moves.append(Move(name, amount - level))
        level = amount
    return tuple(moves)


def _status_now(household: Household, last: LastPlan) -> str:
    """Who is alive now, as the last plan's look-up names it."""
    if household.is_couple or not last.survivors:
        return "both" if household.is_couple and "both" in last.lookup else "first"
    name = household.people[0].name
    return ("first", "second")[last.survivors.index(name)] if name in last.survivors else "first"


def review_json(found: Review) -> dict[str, Any]:
    """The review for other programs; stable keys."""

    def money(value: float) -> float:
        return round(value, 2) + 0.0

    band = found.band
    return {
        "client": found.household.client_name,
        "plan_date": found.household.plan_date.isoformat(),
        "last_plan_date": found.last.plan_date.isoformat(),
        "currency": found.household.currency,
        "price_factor": round(found.price_factor, 6),
        "savings": money(found.savings),
        "planned_savings": {
            "p10": money(found.fan.p10),
            "p50": money(found.fan.p50),
            "p90": money(found.fan.p90),
        },
        "percentile": round(found.percentile, 3),
        "last_year": {
            "planned": money(found.planned_spending),
            "spent": None if found.spent is None else money(found.spent),
        },
        "spending": {"before": money(found.spending_before), "now": money(found.spending_now)},
        "portfolio": {"before": found.portfolio_before, "now": found.portfolio_now},
        "band": None
        if band is None
        else {"low": money(band[0]), "high": money(band[1]), "tolerance": band[2]},
        "inside_band": found.inside_band,
        "moves": [{"because": move.name, "amount": money(move.amount)} for move in found.moves],
    }

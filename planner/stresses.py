"""What could go otherwise: households with an assumption changed, planned for anew.

Each stress is known from the start in the changed plan: it shows what a plan made for such a
future would say, not what happens when it comes as a surprise.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import replace
from math import floor, inf

from planner.diagnostics import InputError
from planner.household import Household, Income, IncomeKind, OneOff, Person

LOWER_RETURNS = 0.01
"""Taken off the expected return of every asset class a year."""

FASTER_PRICES = 0.01
"""Added to inflation; nominal returns stay as they are."""

LONG_LIFE_AGE = 100
"""Age that everybody reaches in the stress of a long life."""

PENSION_CUT = 0.20
"""Share by which state pensions are cut in that stress."""

FALL_AT_THE_START = 0.20
"""Share of all savings lost before the plan begins."""


def lower_returns(household: Household, by: float = LOWER_RETURNS) -> Household:
    """Every asset class returns a point (or `by`, a share) less a year."""
    markets = household.markets
    classes = tuple(replace(c, expected_return=c.expected_return - by) for c in markets.asset_classes)
    return replace(household, markets=replace(markets, asset_classes=classes))


def faster_prices(household: Household, by: float = FASTER_PRICES) -> Household:
    """Prices rise a point (or `by`) faster a year; returns and level pensions do not make up for it."""
    markets = household.markets
    return replace(household, markets=replace(markets, inflation=markets.inflation + by))


def state_pensions_cut(household: Household, year: int, by: float = PENSION_CUT) -> Household | None:
    """State pensions are lower by a share from a calendar year on; None where there are none.

    Each becomes two rows: as given until its owner's age in that year, and the smaller one after.
    """
    if not any(income.kind is IncomeKind.STATE_PENSION for income in household.incomes):
        return None
    people = {person.name: person for person in household.people}
    years = max(0, year - household.plan_date.year)
    rows: list[Income] = []
    for income in household.incomes:
        at = people[income.owner].age_on(household.plan_date) + years
        if income.kind is not IncomeKind.STATE_PENSION or (income.to_age or inf) <= at:
            rows.append(income)
            continue
        amount = income.amount * (1 - by)
        if income.from_age >= at:
            rows.append(replace(income, amount=amount))
            continue
        # Amounts that do not rise with prices are nominal at the first payment, so what the later row
        # starts with is what the earlier one has risen to.
        now = people[income.owner].age_on(household.plan_date)
        risen = at - max(floor(income.from_age), now)
        rate = {"prices": 0.0, "fixed": income.rise.rate}.get(
            income.rise.kind, min(household.markets.inflation, income.rise.rate)
        )
        later = replace(
            income, name=f"{income.name} ({year})", from_age=float(at), amount=amount * (1 + rate) ** risen
        )
        rows += [replace(income, to_age=float(at)), later]
    return replace(household, incomes=tuple(rows))


def long_life(household: Household) -> Household:
    """Nobody dies before `LONG_LIFE_AGE`."""

    def lives_long(person: Person) -> Person:
        at_least = max(person.plan_to_age or 0.0, LONG_LIFE_AGE)
        return replace(person, plan_to_age=at_least)

    return replace(household, people=tuple(lives_long(person) for person in household.people))


def fall_at_the_start(household: Household, by: float = FALL_AT_THE_START) -> Household:
    """Every account, cash aside included, loses a fifth (or `by`, a share) today; its cost stays the same."""
    accounts = tuple(
        replace(
            account,
            balance=account.balance * (1 - by),
            cost_basis=account.balance if account.cost_basis is None else account.cost_basis,
        )
        for account in household.accounts
    )
    aside = household.spending.cash_aside * (1 - by)
    return replace(household, accounts=accounts, spending=replace(household.spending, cash_aside=aside))


def care(household: Household) -> Household | None:
    """Return the household with the care cost of the workbook as a cost in the plan; None if blank.

    Counted in the years in which the person would be of that age ("last survivor": the younger),
    whether or not they live to see them.
    """
    spending = household.spending
    if not (spending.care_cost > 0 and spending.care_from_age and spending.care_years):
        return None
    people = household.people
    if spending.care_for == "second" and len(people) == 2:
        person = people[1]
    elif spending.care_for == "last survivor":
        person = max(people, key=lambda p: p.date_of_birth)
    else:
        person = people[0]
    turns = person.date_of_birth.year + int(spending.care_from_age)
    first = max(turns, household.plan_date.year)
    last = turns + round(spending.care_years) - 1
    if last < first:
        return None
    cost = OneOff("Care", first, -spending.care_cost, last_year=last)
    return replace(household, one_offs=(*household.one_offs, cost))


STRESSES: tuple[tuple[str, Callable[[Household], Household | None]], ...] = (
    ("returns 1 % lower every year", lower_returns),
    ("prices rise 1 % faster", faster_prices),
    (f"everybody lives to {LONG_LIFE_AGE}", long_life),
    ("savings fall by a fifth at the start", fall_at_the_start),
    ("care is needed", care),
)
"""Name for people and the change; None where the household gives no ground for it."""


def stresses(household: Household) -> Iterator[tuple[str, Household]]:
    """Name and changed household of every stress that applies.

    A stress that makes the household invalid (a life table that ends before the age, say) does
    not apply.
    """
    for name, change in STRESSES:
        try:
            changed = change(household)
        except InputError:
            continue
        if changed is not None and changed != household:
            yield name, changed

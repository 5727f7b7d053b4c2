"""Decisions that advisers are asked about, each as a search over what-ifs.

When to start a pension, how much to turn into an annuity, how much to convert each year, one
portfolio or the best each year, how long to work. Every candidate is a changed household solved
anew; worth is compared as money today: what would have to be given to the client as given to be
as well off as with the change (0 for the client as given).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from functools import partial
from math import floor
from typing import ClassVar

import numpy as np

from planner import outcomes
from planner.beside import shared
from planner.diagnostics import InputError
from planner.household import AccountType, Household, Income, IncomeKind
from planner.optimum.policy import OptimalPolicy
from planner.optimum.recursion import solve
from planner.plan import PlanSettings, Progress, Solved, solve_household
from planner.problem import Decision, Policy, Problem, State
from planner.problem_building import Builder, build_problem
from planner.projection import decide_at
from planner.simulation import simulate

ANNUITY_SHARES = (0.0, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.75, 1.0)
CONVERSION_SHARES = (0.0, 0.01, 0.02, 0.03, 0.05, 0.08)
"""Yearly conversions tried, as shares of tax-deferred savings today."""

LONGEST_EXTRA_WORK = 5


@dataclass(frozen=True, slots=True)
class Point:
    """One candidate of a search.

    Attributes
    ----------
    label : str
        What is chosen, in words.
    spending_this_year : float
    steady : float
        Steady income the plan is worth; with a wish to leave money, what it leaves counts in it.
    worth : float
        In money today, compared with the client as given.
    as_given : bool
    break_even_age : float or None
        Owner's age from which on this choice has paid more in all than the earliest one.
    """

    label: str
    spending_this_year: float
    steady: float
    worth: float
    as_given: bool = False
    break_even_age: float | None = None


@dataclass(frozen=True, slots=True)
class DecisionCurve:
    """A decision: its candidates in order, the best of them, and what else is to be said."""

    key: str
    question: str
    points: tuple[Point, ...]
    best: int
    notes: tuple[str, ...] = ()


def decisions(
    household: Household, settings: PlanSettings, progress: Progress | None = None
) -> tuple[tuple[DecisionCurve, ...], tuple[str, ...]]:
    """Search every decision that the household gives ground for.

    Returns
    -------
    curves
        One a decision.
    left_out
        Why each other decision was not searched.
    """
    report = progress or (lambda share, what: None)
    report(0.0, "the plan as given")
    search = _Search(solve_household(household, settings), settings)
    searches = (_start_ages, _annuity, _conversions, _portfolios, _longer_work, _earliest_stop)

    def say(number: int) -> None:
        what = searches[number].__name__.strip("_").replace("_", " ")
        report((1 + number) / (1 + len(searches)), what)

    with shared([partial(_all_found, run, search) for run in searches]) as work:
        found = [one for several in work.results(say) for one in several]
    curves = tuple(one for one in found if not isinstance(one, str))
    return curves, tuple(one for one in found if isinstance(one, str))


def _all_found(
    run: Callable[[_Search], Iterator[DecisionCurve | str]], search: _Search
) -> list[DecisionCurve | str]:
    return list(run(search))


class _Search:
    """A solved household, and other households measured against it."""

    def __init__(self, given: Solved, settings: PlanSettings) -> None:
        self.given, self.settings = given, settings
        self.household = given.household
        self.problem = given.problem
        self._value = given.yardstick.value

    def worth(self, value: float) -> float:
        """Money today that makes the client as given as well off as a plan of this value."""
        gain = value - self._value
        return -outcomes.wealth_cost(self.given.yardstick.value_at_scale, gain, self.problem.wealth)

    def point(self, label: str, household: Household, **more: object) -> Point:
        """Solve a changed household."""
        if household == self.household:
            return self.of_policy(label, self.problem, self.given.policy, as_given=True, **more)
        problem = build_problem(household)
        return self.of_policy(label, problem, solve(problem, self.settings.solver), **more)

    def of_policy(self, label: str, problem: Problem, policy: OptimalPolicy, **more: object) -> Point:
        spending, _, _ = decide_at(problem, policy, 0, problem.opening[None, :], 0)
        value = float(policy.value(problem.opening[None, :])[0])
        return Point(
            label,
            float(spending[0]),
            policy.level_spending(problem.opening),
            self.worth(value),
            **more,  # type: ignore[arg-type]
        )


def _curve(key: str, question: str, points: Sequence[Point], notes: Sequence[str] = ()) -> DecisionCurve:
    best = max(range(len(points)), key=lambda i: points[i].worth)
    return DecisionCurve(key, question, tuple(points), best, tuple(notes))


# When to start a pension -------------------------------------------------------------------------


def _start_ages(search: _Search) -> Iterator[DecisionCurve | str]:
    household = search.household
    names = list(dict.fromkeys(choice.income for choice in household.start_choices))
    if not names:
        yield "when to start a pension: the sheet Start choices is blank"
    best = household
    for name in names:
        quotes = start_quotes(household, name)
        if len(quotes) < 2:
            yield f"when to start {name}: every other quoted age has passed"
            continue
        points = []
        for age, amount in quotes:
            changed = started_at(household, name, age, amount)
            points.append(
                search.point(
                    f"{_age(age)}: {amount:,.0f} a year", changed, break_even_age=break_even(quotes, age)
                )
            )
        curve = _curve("start-age", f"When to start {name}?", points)
        yield curve
        best = started_at(best, name, *quotes[curve.best])
    if len(names) > 1 and best != household:
        point = search.point("each at its best age", best)
        given = search.point("as given", household)
        yield _curve("start-ages-together", "All of them at their best ages, together?", [given, point])


def start_quotes(household: Household, name: str) -> list[tuple[float, float]]:
    """(start age, amount a year) of an income, its own row included, that are not yet past; by age."""
    income = next(i for i in household.incomes if i.name == name)
    now = next(p for p in household.people if p.name == income.owner).age_on(household.plan_date)
    quotes = {choice.start_age: choice.amount for choice in household.start_choices if choice.income == name}
    quotes[income.from_age] = income.amount
    return sorted((age, amount) for age, amount in quotes.items() if age >= now or age == income.from_age)


def started_at(household: Household, name: str, age: float, amount: float) -> Household:
    """The household with one income started at an age, at the amount quoted for it."""
    incomes = tuple(
        replace(i, from_age=age, amount=amount) if i.name == name else i for i in household.incomes
    )
    return replace(household, incomes=incomes)


def break_even(quotes: Sequence[tuple[float, float]], age: float) -> float | None:
    r"""Age from which on starting at `age` has paid more in all than the earliest start.

    With amounts :math:`a_0` from age :math:`s_0` and :math:`a` from :math:`s > s_0` in today's
    money, :math:`(x - s) a = (x - s_0) a_0`, so :math:`x = (s a - s_0 a_0) / (a - a_0)`. None for
    the earliest itself, or where it never does.
    """
    first_age, first_amount = quotes[0]
    amount = dict(quotes)[age]
    if age <= first_age or amount <= first_amount:
        return None
    return (age * amount - first_age * first_amount) / (amount - first_amount)


# Annuity -----------------------------------------------------------------------------------------


def _annuity(search: _Search) -> Iterator[DecisionCurve | str]:
    household = search.household
    if household.annuity_quote is None:
        yield "how much to turn into an annuity: the sheet Annuity quote is blank"
        return
    quote = household.annuity_quote
    account = next(a for a in household.accounts if a.name == quote.account)
    points = []
    for share in ANNUITY_SHARES:
        changed = with_annuity(household, share)
        bought = share * _for_sale(household)
        if changed is None:
            continue
        label = f"{bought:,.0f} buys {quote.rate * bought:,.0f} a year" if share else "none of it"
        points.append(search.point(label, changed))
    yield _curve(
        "annuity",
        f"How much of {account.name} to turn into an annuity for life at {quote.rate:.2%}?",
        points,
        (
            "Yaari (1965), Review of Economic Studies 32(2) 137-150: with no wish to leave money and a fair "
            "rate, all of it; a wish to leave, pensions already there and a rate below fair say less.",
        ),
    )


def _for_sale(household: Household) -> float:
    """What the quoted account can give: its balance, less what is kept aside in cash."""
    quote = household.annuity_quote
    assert quote is not None
    account = next(a for a in household.accounts if a.name == quote.account)
    if account.type is not AccountType.TAXABLE:
        return account.balance
    others = sum(a.balance for a in household.accounts if a.type is AccountType.TAXABLE and a is not account)
    return max(0.0, account.balance - max(0.0, household.spending.cash_aside - others))


def with_annuity(household: Household, share: float) -> Household | None:
    """The household with a share of the quoted account turned into the annuity; None if it cannot be.

    Paid from now on. Bought out of a taxable account at its market value: the tax on the gain that
    is realised is left out, and the rest keeps its share of the book cost.
    """
    quote = household.annuity_quote
    if quote is None or share == 0.0:
        return household
    account = next(a for a in household.accounts if a.name == quote.account)
    price = share * _for_sale(household)
    left = 1.0 - price / account.balance if account.balance > 0 else 1.0
    basis = account.cost_basis
    accounts = tuple(
        replace(
            a,
            balance=a.balance - price,
            cost_basis=None if basis is None else basis * left,
            balance_last_year_end=(
                None if a.balance_last_year_end is None else a.balance_last_year_end * left
            ),
        )
        if a is account
        else a
        for a in household.accounts
    )
    owner = next(p for p in household.people if p.name == quote.owner)
    annuity = Income(
        "Annuity bought now",
        quote.owner,
        IncomeKind.ANNUITY,
        quote.rate * price,
        float(owner.age_on(household.plan_date)),
        rise=quote.rise,
        continues_to_partner=quote.continues_to_partner,
        taxable_share=quote.taxable_share,
    )
    try:
        return replace(household, accounts=accounts, incomes=(*household.incomes, annuity))
    except InputError:
        return None


# Conversions -------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class FixedConversion(Policy):
    """Another plan's spending, portfolio and withdrawals, but the same conversion every year.

    `amount` is in today's money; less is converted once less is left.
    """

    policy: OptimalPolicy
    amount: float

    n_memory: ClassVar[int] = 0

    @property
    def name(self) -> str:
        """Name for people."""
        return f"convert {self.amount:,.0f} a year"

    @property
    def reference(self) -> str:
        """Where it was published."""
        return self.policy.reference

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Convert the fixed amount; `cashflow.advance` keeps it within what may leave."""
        chosen = self.policy.decide(problem, t, state)
        return replace(chosen, convert=np.full(chosen.spending.shape, self.amount))


def _conversions(search: _Search) -> Iterator[DecisionCurve | str]:
    household = search.household
    savings = sum(a.balance for a in household.accounts if a.type is AccountType.TAX_DEFERRED)
    if savings <= 0:
        yield "how much to convert each year: there is no tax-deferred account"
        return
    # What conversions gain is small beside the errors of coarse grids: here the plan's own.
    settings = replace(search.settings, solver=None)
    search = _Search(solve_household(household, settings), settings)
    wishes = replace(household.preferences, conversions_allowed=True)
    allowed = (
        search.given
        if household.preferences.conversions_allowed
        else solve_household(replace(household, preferences=wishes), search.settings)
    )
    none = replace(household, preferences=replace(wishes, conversions_allowed=False))
    base = search.point("none", none)
    # Fixed amounts are simulated: what each adds to converting nothing by the same plan is exact in the
    # draws they share, and is put on top of what the plan without conversions is worth.
    utilities = {}
    amounts = sorted({round(share * savings, -3) for share in CONVERSION_SHARES})
    for amount in amounts:
        paths = simulate(allowed.problem, FixedConversion(allowed.policy, amount), allowed.scenarios)
        utilities[amount] = float(outcomes.path_utilities(allowed.problem, paths).mean())
    optimal = float(allowed.yardstick.utilities.mean())
    value = allowed.yardstick.value
    points = [base]
    for amount in amounts[1:]:
        level = _level(allowed, value + utilities[amount] - optimal)
        points.append(
            Point(
                f"{amount:,.0f} every year",
                float(allowed.paths.spending[0, 0]),
                level,
                search.worth(value + utilities[amount] - optimal),
            )
        )
    points.append(
        search.of_policy(
            "what is best each year",
            allowed.problem,
            allowed.policy,
            as_given=household.preferences.conversions_allowed,
        )
    )
    first = float(allowed.paths.conversion[0, 0])
    yield _curve(
        "conversion",
        "How much to move from tax-deferred to tax-free each year?",
        points,
        (
            f"Best each year moves {first:,.0f} this year. A move cannot be undone: ask a tax preparer "
            f"first.",
            "Fixed amounts follow the best plan's spending, in today's money, until nothing is left to move.",
        ),
    )


def _level(solved: Solved, value: float) -> float:
    policy = solved.policy
    return float(policy.utility.inverse(value / policy.weights[0, 0]))


# Portfolios --------------------------------------------------------------------------------------


def _portfolios(search: _Search) -> Iterator[DecisionCurve | str]:
    household = search.household
    if len(household.portfolios) < 2:
        yield "one fixed portfolio or the best each year: there is one portfolio"
        return
    best_each_year = replace(household, portfolio_choice=None)
    free = (
        search.given
        if household.portfolio_choice is None
        else solve_household(best_each_year, search.settings)
    )
    points = [
        search.of_policy(
            "the best each year", free.problem, free.policy, as_given=household.portfolio_choice is None
        )
    ]
    for portfolio in Builder.of(best_each_year).portfolios():
        points.append(
            search.point(f"{portfolio.name} throughout", replace(household, portfolio_choice=portfolio.name))
        )
    switches, years = portfolio_switches(free)
    yield _curve(
        "portfolio",
        "One fixed portfolio, or the best each year?",
        points,
        (f"The best each year changes portfolio {switches:.1f} times in {years:.0f} years on average.",),
    )


def portfolio_switches(solved: Solved) -> tuple[float, float]:
    """Mean number of changes of portfolio over life, and mean years lived, over drawn futures."""
    paths = solved.paths
    both = paths.alive[:, 1:] & paths.alive[:, :-1]
    changes = (paths.portfolio[:, 1:] != paths.portfolio[:, :-1]) & both
    return float(changes.sum(axis=1).mean()), float(paths.alive.sum(axis=1).mean())


# Work --------------------------------------------------------------------------------------------


def worked_until(household: Household, owner: str, age: float) -> Household:
    """The household with a person's wages, and what is paid in until they end, ending at an age."""
    ends = {i.to_age for i in household.incomes if _is_work(i, owner)}
    incomes = tuple(replace(i, to_age=age) if _is_work(i, owner) else i for i in household.incomes)
    incomes = tuple(i for i in incomes if not (_is_work(i, owner) and age <= i.from_age))
    accounts = tuple(
        replace(a, paid_in_until_age=age)
        if a.owner == owner and a.paid_in > 0 and a.paid_in_until_age in ends
        else a
        for a in household.accounts
    )
    return replace(household, incomes=incomes, accounts=accounts)


def _is_work(income: Income, owner: str) -> bool:
    return income.owner == owner and income.kind is IncomeKind.WAGES and income.to_age is not None


def workers(household: Household) -> list[tuple[str, int, float]]:
    """(person, age now, age at which work ends) of everybody with wages that end in the future."""
    found = []
    for person in household.people:
        now = person.age_on(household.plan_date)
        ends = [i.to_age for i in household.incomes if _is_work(i, person.name) and i.to_age is not None]
        if ends and max(ends) > now:
            found.append((person.name, now, max(ends)))
    return found


def _longer_work(search: _Search) -> Iterator[DecisionCurve | str]:
    people = workers(search.household)
    if not people:
        yield "working longer: nobody has wages with a last age"
    for name, _, end in people:
        points = []
        for more in range(LONGEST_EXTRA_WORK + 1):
            label = "as given" if more == 0 else f"{more} year{'s' * (more > 1)} longer"
            changed = search.household if more == 0 else worked_until(search.household, name, end + more)
            points.append(search.point(f"{label}, until {_age(end + more)}", changed))
        yield _curve(
            "work-longer",
            f"Should {name} work longer?",
            points,
            ("The work itself is not valued: only its pay.",),
        )


def _earliest_stop(search: _Search) -> Iterator[DecisionCurve | str]:
    """Earliest age at which work can stop: the plan is then still worth what is asked for."""
    household = search.household
    target = household.spending.wanted or household.spending.essential
    what = "wanted" if household.spending.wanted else "essential"
    for name, now, end in workers(household):

        def at(age: float, name: str = name) -> Point:
            return search.point(f"stop at {_age(age)}", worked_until(household, name, age))

        latest = int(end) + 10
        points: dict[int, Point] = {}
        # Steady income rises with every year of work: bisect on whole ages.
        low, high = now, latest
        for age in (low, high):
            points[age] = at(float(age))
        if points[low].steady >= target:
            note = f"{name} can stop now: the plan is worth a steady {points[low].steady:,.0f} a year"
            earliest = low
        elif points[high].steady < target:
            note = f"not by {latest}: even then the plan is worth less than {what} spending of {target:,.0f}"
            earliest = high
        else:
            while high - low > 1:
                middle = (low + high) // 2
                points[middle] = at(float(middle))
                low, high = (low, middle) if points[middle].steady >= target else (middle, high)
            earliest = high
            note = (
                f"at {earliest}: from there on the plan is worth a steady income of at least {what} "
                f"spending, {target:,.0f} a year"
            )
        ordered = sorted(points)
        yield DecisionCurve(
            "stop-work",
            f"How early can {name} stop working?",
            tuple(points[age] for age in ordered),
            ordered.index(earliest),
            (note,),
        )


def _age(age: float) -> str:
    years = floor(age)
    months = round(12 * (age - years))
    return f"{years}" if months == 0 else f"{years}y{months}m"

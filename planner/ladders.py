"""Ladders of preferences: the plan at each rung, so that a client can choose by looking."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from planner import outcomes
from planner.beside import shared
from planner.household import Household
from planner.plan import PlanSettings, Progress, solve_household
from planner.plan_record import Range
from planner.problem import Problem
from planner.simulation import Paths

RISK_AVERSIONS = (0.8, 1.4, 2.7, 5.0, 8.0)
"""Groups of the income gambles (`household.risk_aversion_from_gambles`), and a very careful one."""

LEGACY_SHARES = (0.0, 0.1, 0.25, 0.5)
"""Wishes to leave money, as shares of savings today."""

BAD_CASE_AGE = 80


@dataclass(frozen=True, slots=True)
class Rung:
    """The plan with one value of a preference; money is today's.

    Attributes
    ----------
    value : float
        Risk aversion, or the wish to leave.
    as_given : bool
        The client's own value.
    spending_this_year : float
    bad_case, middle_case : float
        10th and 50th percentile of spending at `age` (the first person's).
    age : int
    portfolio : str
        Held this year.
    estate : Range
        Left at the last death.
    chance_below_essential : float
    """

    value: float
    as_given: bool
    spending_this_year: float
    bad_case: float
    middle_case: float
    age: int
    portfolio: str
    estate: Range
    chance_below_essential: float


def risk_ladder(
    household: Household, settings: PlanSettings, progress: Progress | None = None
) -> tuple[Rung, ...]:
    """The plan at each of `RISK_AVERSIONS` and at the client's own."""
    own = household.preferences.risk_aversion
    return _ladder(household, "risk_aversion", sorted({*RISK_AVERSIONS, own}), own, settings, progress)


def legacy_ladder(
    household: Household, settings: PlanSettings, progress: Progress | None = None
) -> tuple[Rung, ...]:
    """The plan with wishes of `LEGACY_SHARES` of savings, to the nearest thousand, and the client's own."""
    own = household.preferences.wish_to_leave
    savings = sum(account.balance for account in household.accounts)
    wishes = {round(share * savings, -3) for share in LEGACY_SHARES}
    return _ladder(household, "wish_to_leave", sorted({*wishes, own}), own, settings, progress)


def _ladder(
    household: Household,
    field: str,
    values: Sequence[float],
    own: float,
    settings: PlanSettings,
    progress: Progress | None,
) -> tuple[Rung, ...]:
    def rung(value: float) -> Rung:
        wishes = replace(household.preferences, **{field: value})  # type: ignore[arg-type]
        solved = solve_household(replace(household, preferences=wishes), settings)
        return _rung(value, value == own, solved.problem, solved.paths)

    def report(number: int) -> None:
        if progress is not None:
            progress(number / len(values), f"{field.replace('_', ' ')} {values[number]:g}")

    with shared([partial(rung, value) for value in values]) as work:
        return tuple(work.results(report))


def bad_case_year(problem: Problem) -> int:
    """Year t in which the first person is `BAD_CASE_AGE`; ten years on where that is past or near."""
    t = BAD_CASE_AGE - int(problem.ages[0, 0])
    return min(t if t >= 3 else 10, problem.n_years - 1)


def _rung(value: float, as_given: bool, problem: Problem, paths: Paths) -> Rung:
    t = bad_case_year(problem)
    spent = paths.spending[paths.alive[:, t], t]
    low, middle = np.percentile(spent, (10, 50)) if spent.size else (float("nan"), float("nan"))
    need = outcomes.need_on_paths(problem, paths) * problem.utility.essential
    short = outcomes.amount_short(paths.spending, need, paths.alive)
    return Rung(
        value=value,
        as_given=as_given,
        spending_this_year=float(paths.spending[0, 0]),
        bad_case=float(low),
        middle_case=float(middle),
        age=int(problem.ages[0, t]),
        portfolio=problem.portfolio_names[int(paths.portfolio[0, 0])],
        estate=Range(*(float(v) for v in np.percentile(paths.estate, (10, 50, 90)))),
        chance_below_essential=float((short > 0).any(axis=1).mean()),
    )

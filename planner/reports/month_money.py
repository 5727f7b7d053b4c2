"""The money of this year month by month, in whole units that add up to the year's."""

from __future__ import annotations

import calendar
from dataclasses import dataclass
from datetime import date

from planner.plan_record import Plan
from planner.reports.figures import add_up, at_least
from planner.reports.year_money import tax_year_end, year_money

N_MONTHS = 12


@dataclass(frozen=True, slots=True)
class MonthMoney:
    """One month: income + sum(withdrawals) - tax - kept = spending, in whole units.

    `withdrawals` are in the order of `YearByMonth.accounts`.
    """

    day: date
    income: int
    withdrawals: tuple[int, ...]
    tax: int
    kept: int
    spending: int


@dataclass(frozen=True, slots=True)
class YearByMonth:
    """Twelve months that add up to `year_money`, line by line."""

    accounts: tuple[str, ...]
    months: tuple[MonthMoney, ...]
    brought_forward: bool  # some payments come early to meet the day by which the least is due


def year_by_month(plan: Plan) -> YearByMonth:
    r"""Spread the year's money over twelve months from the plan date.

    An even twelfth each month, except where that would leave less than the amount D still due
    from an account by the end of the tax year: with m payments until then, the first m are D/m
    each and the others share what is left of the year's amount A,

    .. math:: m A / 12 < D \;\Rightarrow\; D/m \text{ for } m \text{ months, then } (A - D)/(12 - m).

    Incomes are taken as paid evenly; so are tax set aside and what is kept.
    """
    year = year_money(plan)
    days = tuple(months_after(plan.household.plan_date, k) for k in range(N_MONTHS))
    in_time = max(1, sum(day <= tax_year_end(plan.household) for day in days))
    due = {a.account: at_least(a.still_due) for a in plan.this_year.accounts}
    from_accounts = [line for line in year.lines if line.account is not None]
    columns = []
    brought_forward = False
    for line in from_accounts:
        least = min(due.get(line.account or "", 0), line.amount)
        early = in_time < N_MONTHS and line.amount * in_time < least * N_MONTHS
        brought_forward |= early
        if early:
            columns.append((*even(least, in_time), *even(line.amount - least, N_MONTHS - in_time)))
        else:
            columns.append(_meeting(even(line.amount, N_MONTHS), least, in_time))
    income = even(sum(line.amount for line in year.lines if line.account is None), N_MONTHS)
    tax, kept = even(year.tax, N_MONTHS), even(year.kept, N_MONTHS)
    months = tuple(
        MonthMoney(
            day=day,
            income=income[k],
            withdrawals=tuple(column[k] for column in columns),
            tax=tax[k],
            kept=kept[k],
            spending=income[k] + sum(column[k] for column in columns) - tax[k] - kept[k],
        )
        for k, day in enumerate(days)
    )
    labels = tuple(line.label if line.account is None else line.account for line in from_accounts)
    return YearByMonth(labels, months, brought_forward)


def _meeting(parts: tuple[int, ...], least: int, in_time: int) -> tuple[int, ...]:
    """Move the units that rounding put too late, so that the first `in_time` parts reach `least`."""
    missing = max(0, least - sum(parts[:in_time]))
    if missing == 0 or in_time == len(parts):
        return parts
    return (parts[0] + missing, *parts[1:-1], parts[-1] - missing)


def even(total: int, n: int) -> tuple[int, ...]:
    """`n` whole numbers that differ by at most one and sum to `total`."""
    return add_up([total / n] * n, total)


def months_after(day: date, n: int) -> date:
    """The same day `n` months later, or the last day of a shorter month."""
    years, month = divmod(day.month - 1 + n, 12)
    year, month = day.year + years, month + 1
    return date(year, month, min(day.day, calendar.monthrange(year, month)[1]))

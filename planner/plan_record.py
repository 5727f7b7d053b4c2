"""The Plan: every figure that a report, the terminal or a results file prints. No computation here.

Money is real (today's money) and a year's amount unless said; arrays run over years 0 ... N-1.
Percentiles are over simulated futures in which someone is alive.
"""

from __future__ import annotations

from dataclasses import dataclass

from planner.diagnostics import Diagnostic
from planner.household import Household
from planner.piecewise import FloatArray
from planner.problem import Problem


@dataclass(frozen=True, slots=True)
class Range:
    """Low, middle and high value: 10th, 50th and 90th percentile over futures."""

    p10: float
    p50: float
    p90: float


@dataclass(frozen=True, slots=True)
class AccountInstruction:
    """What to do with one account this year.

    `minimum_distribution` is the least to take this year by the account's own year-end balance;
    `still_due` what is left of it after `taken`; `withdraw` is gross, for the year from the plan
    date on; `sell` is the cash to raise in the account for it, so the tax on a taxable account's
    gain is part of the year's tax.
    """

    account: str
    owner: str
    type: str
    balance: float
    withdraw: float
    minimum_distribution: float
    taken: float
    still_due: float
    convert: float
    held_now: str | None
    sell: float


@dataclass(frozen=True, slots=True)
class ThisYear:
    """The instructions that are acted on now. Withdrawals are gross, by account type.

    spending = income + withdraw.taxable + withdraw.tax_deferred + withdraw.tax_free - tax - kept,
    where `kept` is cash that is added to the taxable account. `tax` is by the actual bands of the
    year, gains realised and income paid out in taxable accounts included.
    """

    spending: float
    income: float
    tax: float
    withdraw_taxable: float
    withdraw_tax_deferred: float
    withdraw_tax_free: float
    convert: float
    kept: float
    minimum_distribution: float
    portfolio: str
    accounts: tuple[AccountInstruction, ...]
    incomes: tuple[tuple[str, float], ...]  # name, amount this year
    tax_rate_on_next: float  # top rate on the next unit withdrawn
    room_to_next_threshold: float


@dataclass(frozen=True, slots=True)
class ScheduleRow:
    """One year of the optimal schedule. Withdrawals, income and tax are medians."""

    year: int
    ages: tuple[int, ...]
    spending: Range
    balance: Range
    income: float
    withdraw_taxable: float
    withdraw_tax_deferred: float
    withdraw_tax_free: float
    convert: float
    tax: float
    minimum_distribution: float
    essential: float
    chance_alive: tuple[float, ...]  # each person, then anyone


@dataclass(frozen=True, slots=True)
class LookupRow:
    """At the next review: with this total balance (same split between account types), do this."""

    status: str
    balance: float
    spending: float
    portfolio: str


@dataclass(frozen=True, slots=True)
class NoChangeBand:
    """Savings at the next review between which spending stays as it is, and outside amounts.

    `spending_below` and `spending_above` are what the policy spends at savings a tenth below
    `low` and above `high`.
    """

    low: float
    high: float
    spending_below: float
    spending_above: float
    tolerance: float


@dataclass(frozen=True, slots=True)
class StrategyResult:
    """One strategy on this client. `level_spending` is None where a legacy is wished for.

    `chance_below_essential` is of falling below essential spending in any year while someone is
    alive; `years_below_essential` the mean number of such years over the futures in which it
    happens; `shortfall` the mean amount short a year in such years; `typical_age_below` the
    median first person's age when it first happens (None = never).
    """

    key: str
    name: str
    reference: str
    spending_this_year: float
    level_spending: float | None
    wealth_cost: float
    wealth_cost_standard_error: float
    chance_below_essential: float
    chance_standard_error: float
    years_below_essential: float
    shortfall: float
    typical_age_below: float | None
    largest_yearly_cut: float  # median over futures of the largest yearly fall of spending, a share
    estate: Range
    tax_paid: float  # mean total over life
    spending: FloatArray  # (3, n_years): p10, p50, p90 by year
    balance: FloatArray  # (3, n_years)
    reason: str = ""  # where most of its cost comes from, see `outcomes.main_loss`


@dataclass(frozen=True, slots=True)
class ExampleFuture:
    """One drawn future under the plan: yearly spending and balance while someone is alive."""

    name: str
    description: str
    years: tuple[int, ...]
    ages: tuple[tuple[int, ...], ...]
    returns: tuple[float, ...]
    spending: tuple[float, ...]
    balance: tuple[float, ...]
    status: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class SurvivorView:
    """If one of a couple died now: the survivor's yearly income, need and plan from next year."""

    survivor: str
    income: float
    income_before: float
    spending: float
    tax: float
    essential: float
    bills_covered: float  # lifelong income over essential spending


@dataclass(frozen=True, slots=True)
class Proof:
    """How near the plan is to the best possible (model: shadow-price upper bound)."""

    gap_money: float
    gap_share: float
    gap_standard_error: float
    terms: tuple[tuple[str, float], ...]


@dataclass(frozen=True, slots=True)
class WhatIfResult:
    """A changed client beside the original: this year's spending, a bad case, what is left."""

    name: str
    spending_this_year: float
    spending_p10_late: float
    chance_below_essential: float
    level_spending: float | None
    estate_p50: float


@dataclass(frozen=True, slots=True)
class Sources:
    """Compliance trail."""

    version: str
    workbook_name: str
    workbook_sha256: str
    seed: int
    n_paths: int
    life_tables: tuple[str, ...]
    tax_rules: str
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Plan:
    """Everything a report prints about one client."""

    household: Household
    problem: Problem
    life_expectancy: tuple[float, ...]  # each person, from the table
    bills_covered_now: float  # lifelong income (after tax) over essential spending, all alive
    this_year: ThisYear
    level_spending: float | None
    value_share_simulated: float  # simulated over recursion's level spending (a check, about 1)
    proof: Proof | None
    schedule: tuple[ScheduleRow, ...]
    lookup: tuple[LookupRow, ...]
    band: NoChangeBand
    strategies: tuple[StrategyResult, ...]  # the optimum first
    futures: tuple[ExampleFuture, ...]
    survivors: tuple[SurvivorView, ...]
    what_ifs: tuple[WhatIfResult, ...]
    yearly_costs: tuple[tuple[str, float], ...]  # fees in money this year
    plan_costs: float  # the same over the plan: mean total
    warnings: tuple[Diagnostic, ...]
    sources: Sources

"""An invented, complete Plan for report tests: built by arithmetic, never solved.

The figures are plausible and consistent where a report adds them up; nothing here is a result.
"""

from __future__ import annotations

import math
from dataclasses import replace
from datetime import date

import numpy as np

from planner.diagnostics import Diagnostic
from planner.household import (
    Account,
    AccountType,
    AssetClass,
    Household,
    Income,
    IncomeKind,
    MarketAssumptions,
    OneOff,
    Person,
    Portfolio,
    Practice,
    Preferences,
    Rise,
    Spending,
)
from planner.markets import LognormalReturns
from planner.piecewise import constant
from planner.plan_record import (
    AccountInstruction,
    ExampleFuture,
    LookupRow,
    NoChangeBand,
    Plan,
    Proof,
    Range,
    ScheduleRow,
    Sources,
    StrategyResult,
    SurvivorView,
    ThisYear,
    WhatIfResult,
)
from planner.preferences import EstateUtility, SpendingUtility
from planner.problem import Problem

PRACTICE = Practice(
    firm="Example Planning Ltd",
    adviser="Robin Sample",
    registration_number="000000",
    contact="robin@example.com",
    local_caution="This invented plan follows no country's rules.",
    required_wording="Probabilities in this document are hypothetical: from a model, not real accounts.",
    aims="Keep the house, see the children twice a year, travel while both are well.",
    agreed_risk_level="Medium, level 4 of 7, agreed on the plan date.",
    capacity_for_loss="Lifelong pensions pay most bills; a fall of 30% would cut travel, not bills.",
    why_this_suits="It keeps bills paid from pensions and spends more while both are well.",
    drawbacks="Spending changes from year to year with markets. Less may be left than under a frugal rule.",
    alternatives_considered="A lifelong annuity for part of the savings; a fixed yearly amount.",
)


def couple(currency: str = "USD", scale: float = 1.0, practice: Practice = PRACTICE) -> Household:
    """An invented couple with four accounts and three incomes."""
    return Household(
        client_name="Maren and Tobias Quill",
        plan_date=date(2026, 3, 2),
        currency=currency,
        tax_rules="us-federal-2026" if currency == "USD" else "none",
        people=(
            Person("Maren Quill", date(1956, 5, 4), "female", "us-ssa-2022"),
            Person("Tobias Quill", date(1952, 11, 23), "male", "us-ssa-2022", 0.9),
        ),
        accounts=(
            Account(
                "Joint brokerage", "joint", AccountType.TAXABLE, 240_000 * scale, 180_000 * scale, "Balanced"
            ),
            Account(
                "Maren's retirement account",
                "Maren Quill",
                AccountType.TAX_DEFERRED,
                410_000 * scale,
                held_now="Growth",
            ),
            Account(
                "Tobias's retirement account",
                "Tobias Quill",
                AccountType.TAX_DEFERRED,
                350_000 * scale,
                held_now="Balanced",
                balance_last_year_end=345_000 * scale,
                taken_this_year=2_000 * scale,
            ),
            Account("Maren's tax-free account", "Maren Quill", AccountType.TAX_FREE, 95_000 * scale),
        ),
        incomes=(
            Income(
                "State pension of Maren",
                "Maren Quill",
                IncomeKind.STATE_PENSION,
                21_600 * scale,
                67,
                continues_to_partner="larger of the two",
            ),
            Income(
                "State pension of Tobias",
                "Tobias Quill",
                IncomeKind.STATE_PENSION,
                26_400 * scale,
                70,
                continues_to_partner="larger of the two",
            ),
            Income(
                "Teacher's pension",
                "Maren Quill",
                IncomeKind.PENSION,
                9_000 * scale,
                65,
                rise=Rise("capped", 0.02),
                continues_to_partner=0.5,
            ),
        ),
        one_offs=(OneOff("New roof", 2028, -24_000 * scale),),
        spending=Spending(
            essential=58_000 * scale,
            wanted=92_000 * scale,
            cash_aside=15_000 * scale,
            care_cost=60_000 * scale,
            care_from_age=85,
            care_years=3,
            care_for="last survivor",
        ),
        markets=MarketAssumptions(
            0.025,
            (
                AssetClass("World shares", 0.067, 0.17, 0.018),
                AssetClass("Bonds", 0.041, 0.06, 0.038),
                AssetClass("Cash", 0.03, 0.01, 0.03),
            ),
            ((1.0, 0.15, 0.0), (0.15, 1.0, 0.1), (0.0, 0.1, 1.0)),
        ),
        portfolios=(
            Portfolio("Careful", (0.2, 0.6, 0.2), 0.0015),
            Portfolio("Balanced", (0.5, 0.4, 0.1), 0.0018),
            Portfolio("Growth", (0.8, 0.2, 0.0), 0.002),
        ),
        preferences=Preferences(conversions_allowed=True, heirs_tax_rate=0.2),
        adviser_fee=0.005,
        home_value=480_000 * scale,
        practice=practice,
    )


def single(currency: str = "GBP", scale: float = 1.0, practice: Practice = PRACTICE) -> Household:
    """An invented single client with two accounts."""
    whole = couple(currency, scale, practice)
    person = Person("Ingrid Vale", date(1958, 9, 14), "female", "uk-gompertz-2022-24")
    return replace(
        whole,
        client_name="Ingrid Vale",
        tax_rules="uk-2025-26",
        people=(person,),
        accounts=(
            Account("Pension pot", person.name, AccountType.TAX_DEFERRED, 310_000 * scale, held_now="Growth"),
            Account("Savings account", person.name, AccountType.TAX_FREE, 60_000 * scale, held_now="Growth"),
        ),
        incomes=(Income("State pension", person.name, IncomeKind.STATE_PENSION, 11_973 * scale, 67),),
        one_offs=(),
        spending=Spending(essential=22_000 * scale),
        preferences=Preferences(),
        home_value=0.0,
    )


def build(household: Household | None = None, n_years: int = 45, **changes: object) -> Plan:
    """A Plan for `household`; keyword arguments replace fields of the Plan."""
    household = couple() if household is None else household
    scale = household.spending.essential / 58_000
    this_year = _this_year(household, scale)
    schedule = _schedule(household, this_year, n_years, scale)
    plan = Plan(
        household=household,
        problem=_problem(household, n_years),
        life_expectancy=tuple(18.3 - 2.1 * i for i in range(len(household.people))),
        bills_covered_now=0.83,
        this_year=this_year,
        level_spending=84_300 * scale,
        value_share_simulated=0.9993,
        proof=Proof(9_400 * scale, 0.0086, 0.0004, (("spending", 0.0009), ("tax-deferred", 0.0077))),
        schedule=schedule,
        lookup=_lookup(household, scale),
        band=NoChangeBand(1_010_000 * scale, 1_120_000 * scale, 84_000 * scale, 96_500 * scale, 0.1),
        strategies=_strategies(schedule, this_year, scale),
        futures=_futures(household, schedule),
        survivors=_survivors(household, scale),
        what_ifs=_what_ifs(scale),
        yearly_costs=(("Adviser fee 0.5%", 5_475 * scale), ("Portfolio costs", 1_971 * scale)),
        plan_costs=128_460 * scale,
        warnings=(
            Diagnostic(
                "life-table-unadjusted",
                "People!D2",
                "a population life table is used as it is; clients with savings tend to live longer",
                "warning",
            ),
        ),
        sources=Sources(
            "0.1.0",
            "quill.xlsx",
            "9f2c" * 16,
            20_260_302,
            10_000,
            ("Period life table 2022, an invented publisher (2025)",),
            "United States, federal income tax 2026",
            ("Tax year of the rules: 2026.",),
        ),
    )
    return replace(plan, **changes)  # type: ignore[arg-type]


def _this_year(household: Household, scale: float) -> ThisYear:
    incomes = tuple((i.name, i.amount) for i in household.incomes)
    income = sum(amount for _, amount in incomes)
    instructions = []
    totals = dict.fromkeys(AccountType, 0.0)
    convert = 0.0
    for account in household.accounts:
        withdraw = {
            AccountType.TAXABLE: 0.0312 * account.balance,
            AccountType.TAX_DEFERRED: 0.0417 * account.balance + 0.37,
            AccountType.TAX_FREE: 0.0,
        }[account.type]
        if account.balance <= 0:
            withdraw = 0.0
        totals[account.type] += withdraw
        minimum = 0.0
        if account.balance_last_year_end is not None:
            minimum = account.balance_last_year_end / 26.5
        moved = 6_000.0 * scale if account.name.startswith("Maren's ret") else 0.0
        convert += moved
        instructions.append(
            AccountInstruction(
                account.name,
                account.owner,
                str(account.type),
                account.balance,
                withdraw,
                minimum,
                account.taken_this_year,
                max(0.0, minimum - account.taken_this_year),
                moved,
                account.held_now,
                withdraw,
            )
        )
    tax = 0.1 * totals[AccountType.TAX_DEFERRED] + 0.08 * income
    return ThisYear(
        spending=income + sum(totals.values()) - tax,
        income=income,
        tax=tax,
        withdraw_taxable=totals[AccountType.TAXABLE],
        withdraw_tax_deferred=totals[AccountType.TAX_DEFERRED],
        withdraw_tax_free=totals[AccountType.TAX_FREE],
        convert=convert,
        kept=0.0,
        minimum_distribution=sum(i.minimum_distribution for i in instructions),
        portfolio="Balanced",
        accounts=tuple(instructions),
        incomes=incomes,
        tax_rate_on_next=0.12,
        room_to_next_threshold=18_400 * scale,
    )


def _alive(age: int) -> float:
    """Gompertz survival from 65, mode 89, dispersion 10; the shape is all that matters here."""
    return math.exp(math.exp((65 - 89) / 10) - math.exp((max(age, 65) - 89) / 10))


def _schedule(household: Household, now: ThisYear, n_years: int, scale: float) -> tuple[ScheduleRow, ...]:
    ages = [p.age_on(household.plan_date) for p in household.people]
    opening = sum(a.balance for a in household.accounts)
    spread = 1.2816 * 0.11
    rows = []
    for t in range(n_years):
        alive = [_alive(a + t) / _alive(a) for a in ages]
        anyone = 1 - math.prod(1 - chance for chance in alive)
        left = max(0.0, 1 - (t / n_years) ** 1.6)
        width = math.exp(spread * math.sqrt(t))
        middle = opening * left
        floor = 0.8 * now.income
        spend = floor + (now.spending - floor) * (1 - 0.55 * (t / n_years) ** 2)
        need = household.spending.essential * (1 - 0.3 * (1 - math.prod(alive)))
        from_savings = max(0.0, spend - now.income * 0.92)
        rows.append(
            ScheduleRow(
                year=household.plan_date.year + t,
                ages=tuple(a + t for a in ages),
                spending=Range(
                    floor + (spend - floor) / (1 if t == 0 else width), spend, floor + (spend - floor) * width
                ),
                balance=Range(middle / (1 if t == 0 else width) ** 1.5, middle, middle * width**1.5),
                income=now.income * (1 if t < 18 else 0.82),
                withdraw_taxable=from_savings * 0.35 * (t < 16),
                withdraw_tax_deferred=from_savings * (0.75 if t < 16 else 1.05),
                withdraw_tax_free=from_savings * 0.12 * (t >= 16),
                convert=now.convert * (t < 4),
                tax=now.tax * (1 if t < 18 else 0.9),
                minimum_distribution=0.0 if now.minimum_distribution == 0 else from_savings * 0.5,
                essential=need,
                chance_alive=(*alive, anyone) if len(alive) > 1 else (alive[0], alive[0]),
            )
        )
    return tuple(rows)


def _lookup(household: Household, scale: float) -> tuple[LookupRow, ...]:
    share = {"both": 1.0, "first": 0.78, "second": 0.81} if household.is_couple else {"first": 1.0}
    rows = []
    for status, factor in share.items():
        for step in range(4, 15):
            balance = 100_000 * step * scale
            portfolio = "Growth" if step < 6 else "Balanced" if step < 12 else "Careful"
            rows.append(LookupRow(status, balance, factor * (49_000 * scale + 0.0385 * balance), portfolio))
    return tuple(rows)


def _strategies(rows: tuple[ScheduleRow, ...], now: ThisYear, scale: float) -> tuple[StrategyResult, ...]:
    spending = np.array([[r.spending.p10, r.spending.p50, r.spending.p90] for r in rows]).T
    balance = np.array([[r.balance.p10, r.balance.p50, r.balance.p90] for r in rows]).T
    table = (
        ("optimum", "Optimal plan", "", 1.0, 0.0, 0.031, 0.06),
        ("band", "This plan, changed only outside the band", "", 1.0, 3_100.0, 0.034, 0.09),
        (
            "constant-real",
            "Same amount plus prices",
            "Bengen (1994), J. Financial Planning 7(4)",
            0.86,
            118_400.0,
            0.094,
            0.41,
        ),
        (
            "constant-percentage",
            "Same share each year",
            "a rule of long standing",
            0.92,
            64_200.0,
            0.142,
            0.18,
        ),
        (
            "floor-ceiling",
            "Share with limits",
            "Bengen (2001), J. Financial Planning",
            0.95,
            58_900.0,
            0.081,
            0.15,
        ),
        (
            "decision-rules",
            "Cut-and-raise steps",
            "Guyton & Klinger (2006), J. Financial Planning 19(3)",
            1.04,
            71_800.0,
            0.117,
            0.1,
        ),
        (
            "virtual-annuity",
            "Spread over the remaining years",
            "Waring & Siegel (2015), Financial Analysts Journal 71(1)",
            0.97,
            21_300.0,
            0.046,
            0.16,
        ),
        ("divisor", "Divide by the table", "IRS Uniform Lifetime Table", 0.88, 39_700.0, 0.052, 0.17),
        ("as-asked", "As you asked", "", 1.05, 141_000.0, 0.203, 0.52),
    )
    return tuple(
        StrategyResult(
            key=key,
            name=name,
            reference=reference,
            spending_this_year=now.spending * share,
            level_spending=84_300 * scale - 0.052 * cost * scale,
            wealth_cost=cost * scale,
            wealth_cost_standard_error=0.0 if key == "optimum" else 900 * scale,
            chance_below_essential=chance,
            chance_standard_error=0.002,
            years_below_essential=4.2,
            shortfall=6_240 * scale,
            typical_age_below=91.0,
            largest_yearly_cut=cut,
            estate=Range(12_400 * scale, 310_900 * scale, 1_240_300 * scale),
            tax_paid=214_500 * scale,
            spending=spending * share,
            balance=balance,
        )
        for key, name, reference, share, cost, chance, cut in table
    )


def _futures(household: Household, rows: tuple[ScheduleRow, ...]) -> tuple[ExampleFuture, ...]:
    table = (
        (
            "a bad first decade",
            "Markets fall by a third in the first three years and recover slowly",
            0.7,
            31,
        ),
        ("a middle future", "Markets do about what is expected", 1.0, 26),
        ("a good future", "Markets do well in the first ten years", 1.35, 34),
    )
    futures = []
    for name, description, factor, length in table:
        shown = rows[: min(length, len(rows))]
        wobble = [1 + (factor - 1) * min(1.0, t / 8) + 0.02 * math.sin(1.7 * t) for t in range(len(shown))]
        futures.append(
            ExampleFuture(
                name,
                description,
                tuple(r.year for r in shown),
                tuple(r.ages for r in shown),
                tuple(0.03 + 0.11 * math.sin(2.1 * t + factor) for t in range(len(shown))),
                tuple(r.spending.p50 * (0.5 + 0.5 * w) for r, w in zip(shown, wobble, strict=True)),
                tuple(r.balance.p50 * w for r, w in zip(shown, wobble, strict=True)),
                tuple("both" if household.is_couple and t < 20 else "first" for t in range(len(shown))),
            )
        )
    return tuple(futures)


def _survivors(household: Household, scale: float) -> tuple[SurvivorView, ...]:
    if not household.is_couple:
        return ()
    first, second = (p.name for p in household.people)
    return (
        SurvivorView(
            first, 35_400 * scale, 57_000 * scale, 67_900 * scale, 8_100 * scale, 40_600 * scale, 0.81
        ),
        SurvivorView(
            second, 30_900 * scale, 57_000 * scale, 65_100 * scale, 7_700 * scale, 40_600 * scale, 0.72
        ),
    )


def _what_ifs(scale: float) -> tuple[WhatIfResult, ...]:
    table = (
        ("Returns 1% a year lower", 84_100.0, 49_300.0, 0.061, 77_900.0, 241_000.0),
        ("Prices rise 1% a year faster", 86_200.0, 47_100.0, 0.055, 80_100.0, 268_000.0),
        ("Both live five years longer", 87_300.0, 50_200.0, 0.044, 82_000.0, 255_000.0),
        ("A fall of 30% at the start", 78_400.0, 45_600.0, 0.098, 71_300.0, 198_000.0),
        ("Care needed at the end of life", 85_900.0, 44_800.0, 0.127, 79_500.0, 149_000.0),
    )
    return tuple(
        WhatIfResult(name, spend * scale, late * scale, chance, level * scale, estate * scale)
        for name, spend, late, chance, level, estate in table
    )


def _problem(household: Household, n_years: int) -> Problem:
    """Arrays of the right shapes; a report prints from the Plan and never looks inside."""
    statuses = ("both", "first", "second") if household.is_couple else ("first",)
    shape = (n_years, len(statuses))
    utility = SpendingUtility(4.0, 3.0, household.spending.essential, 0.1 * household.spending.essential)
    opening = np.zeros(3)
    for account in household.accounts:
        opening[list(AccountType).index(account.type)] += account.balance
    n_portfolios = len(household.portfolios)
    return Problem(
        statuses=statuses,
        transition=np.zeros((*shape, len(statuses))),
        death=np.ones(shape),
        income=np.zeros(shape),
        contribution=np.zeros((*shape, 3)),
        tax=tuple(tuple(constant(0.0) for _ in statuses) for _ in range(n_years)),
        need=np.ones(shape),
        minimum_share=np.zeros(shape),
        accessible_share=np.ones(shape),
        gross=np.ones((n_portfolios, 1)),
        node_weights=np.ones(1),
        drag=np.zeros(n_portfolios),
        utility=utility,
        estate=EstateUtility(utility),
        discount=1.0,
        opening=opening,
        has_account=(True, True, True),
        conversions=household.preferences.conversions_allowed,
        ceiling=math.inf,
        heirs_tax_rate=household.preferences.heirs_tax_rate,
        cash_aside=household.spending.cash_aside,
        portfolio_names=tuple(p.name for p in household.portfolios),
        returns=LognormalReturns(np.zeros(n_portfolios), np.full(n_portfolios, 0.1)),
        inflation=household.markets.inflation,
        ages=np.array(
            [[p.age_on(household.plan_date) + t for t in range(n_years)] for p in household.people]
        ),
    )

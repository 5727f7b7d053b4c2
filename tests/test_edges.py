"""Numbers at the edge: each household is solved, with finite and ordered results, or refused in words.

Coarse grids: what is looked for is overflow, empty ranges and wrong order, not accuracy.
"""

import json
from dataclasses import replace
from datetime import date
from functools import cache

import numpy as np
import pytest
from golden_text import rendered
from households import MARKETS, couple, single
from test_results_schema import complaints

from planner.diagnostics import InputError
from planner.household import (
    Account,
    AccountType,
    AssetClass,
    Income,
    IncomeKind,
    MarketAssumptions,
    OneOff,
    Person,
    Preferences,
    Spending,
)
from planner.optimum.bound import prove
from planner.optimum.recursion import SolverSettings, solve
from planner.plan import PlanSettings, make_plan
from planner.problem_building import build_problem
from planner.proof import proof
from planner.reports.export import json_text, results_json, results_workbook
from planner.reports.pdf import render_pdf
from planner.reports.terminal import plan_summary
from planner.simulation import draw_scenarios, simulate
from planner.workbook.data import WorkbookData
from planner.workbook.reading import ReadWorkbook

COARSE = SolverSettings(8, 8, 6, 32)
N_PATHS = 200
ROUNDING = 1e-7  # relative, of a value that must not fall; 7e-9 seen where spending is at its ceiling
LIN = Person("Lin", date(1945, 3, 3), "female", "us-ssa-2022")


def of_age(*ages):
    """People who turn these ages on the plan date, 1 January 2026."""
    names = ("Lin", "Kim")
    return tuple(
        Person(name, date(2026 - age, 1, 1), "female", "us-ssa-2022")
        for name, age in zip(names, ages, strict=False)
    )


def money(taxable=0.0, deferred=0.0, free=0.0):
    kinds = (AccountType.TAXABLE, AccountType.TAX_DEFERRED, AccountType.TAX_FREE)
    amounts = (taxable, deferred, free)
    return tuple(Account(kind.value, "Lin", kind, x) for kind, x in zip(kinds, amounts, strict=True))


def pension(amount):
    return (Income("Pension", "Lin", IncomeKind.PENSION, amount, 65.0),)


def every(**changes):
    classes = tuple(replace(c, **changes) for c in MARKETS.asset_classes)
    return MarketAssumptions(MARKETS.inflation, classes, MARKETS.correlations)


def three(**changes):
    """One person of 80 with three accounts and income tax."""
    fields = {"accounts": money(100_000.0, 150_000.0, 50_000.0), "tax_rules": "us-federal-2026"}
    return single(**{**fields, **changes})


# A loaf for 300: everything in another unit. The currency's own tax rules would have to fit it.
DEAR = {
    "accounts": money(25e6),
    "incomes": pension(1.4e6),
    "spending": Spending(2e6),
    "currency": "JPY",
}
EDGES = {
    "no money": lambda: three(accounts=money()),
    "no money, no income": lambda: three(accounts=money(), incomes=()),
    "a cent": lambda: three(accounts=money(0.01)),
    "a billion": lambda: three(accounts=money(1e9)),
    "a billion in each account, bills of a million": lambda: three(
        accounts=money(1e9, 1e9, 1e9), spending=Spending(1e6)
    ),
    "a loaf costs 300": lambda: single(**DEAR),
    "aged 99": lambda: three(people=of_age(99)),
    "aged 118, the table's last but one": lambda: three(people=of_age(118)),
    "ages 40 and 112": lambda: couple(
        people=of_age(40, 112), accounts=money(300_000.0), incomes=(), one_offs=()
    ),
    "no volatility": lambda: three(markets=every(standard_deviation=0.0)),
    "returns of -5 %": lambda: three(markets=every(expected_return=-0.05)),
    "certain returns of -5 %": lambda: three(markets=every(expected_return=-0.05, standard_deviation=0.0)),
    "risk aversion 0.5": lambda: three(preferences=Preferences(risk_aversion=0.5)),
    "risk aversion 1": lambda: three(preferences=Preferences(risk_aversion=1.0)),
    "risk aversion 20": lambda: three(preferences=Preferences(risk_aversion=20.0)),
    "only taxable": lambda: three(accounts=money(taxable=300_000.0)[:1]),
    "only tax-deferred": lambda: three(accounts=money(deferred=300_000.0)[1:2]),
    "only tax-free": lambda: three(accounts=money(free=300_000.0)[2:]),
    "no income": lambda: three(incomes=()),
    "income far above needs": lambda: three(incomes=pension(1e6)),
    "minimum distributions far above spending": lambda: three(
        people=of_age(90), accounts=money(deferred=2e6), spending=Spending(5_000.0)
    ),
    "essentials above all means": lambda: three(spending=Spending(1e6)),
    "a cost larger than wealth now": lambda: three(one_offs=(OneOff("Debt", 2026, -2e6),)),
    "a cost larger than wealth later": lambda: three(one_offs=(OneOff("Debt", 2031, -2e6),)),
    "a receipt larger than wealth": lambda: three(one_offs=(OneOff("Gift", 2028, 5e6),)),
    "a wish larger than wealth": lambda: three(preferences=Preferences(wish_to_leave=5e6)),
    "no room to choose": lambda: three(spending=Spending(20_000.0, 20_000.0, 20_000.0)),
    "all cash kept aside": lambda: three(spending=Spending(20_000.0, cash_aside=100_000.0)),
    "plan date in the past": lambda: three(plan_date=date(1999, 12, 31)),
    "plan date in the future": lambda: three(plan_date=date(2040, 2, 29)),
}


@cache
def solved(name):
    problem = build_problem(EDGES[name]())
    return problem, solve(problem, COARSE)


@pytest.mark.parametrize("name", EDGES)
def test_solved_with_finite_and_ordered_results(name):
    problem, policy = solved(name)
    paths = simulate(problem, policy, draw_scenarios(problem, N_PATHS, np.random.default_rng(1)))
    for what in ("spending", "income", "tax", "withdrawal", "balances", "estate"):
        assert np.isfinite(getattr(paths, what)).all(), what
    assert (paths.balances >= 0.0).all()
    assert (paths.tax >= -1e-9).all()
    levels = [policy.level_spending(scale * problem.opening) for scale in (0.25, 0.5, 1.0, 2.0)]
    assert np.isfinite(levels).all()
    assert (np.diff(levels) >= -ROUNDING * np.abs(levels[1:])).all()  # more money is never worth less
    rich = policy.level_spending(problem.opening + np.array([1_000.0, 0.0, 0.0]))
    assert rich >= levels[2] - ROUNDING * abs(levels[2])


@pytest.mark.parametrize("name", [name for name in EDGES if name not in ("no money", "no money, no income")])
def test_the_gap_stays_a_gap(name):
    """No term of the gap is below 0 on any path, beyond the rounding of sums as large as the value."""
    problem, policy = solved(name)
    gap = prove(problem, policy, 20, np.random.default_rng(1))
    assert np.isfinite(gap.terms).all()
    assert gap.terms.min() >= -1e-13 * max(np.abs(gap.bound).max(), np.abs(gap.value).max())  # 4e-16 seen


@pytest.mark.parametrize("name", ["aged 99", "a cost larger than wealth later", "a billion"])
def test_the_gap_in_money(name):
    """Between nothing and all there is."""
    problem, policy = solved(name)
    found = proof(problem, policy, 20, 1)
    assert found is not None
    assert 0.0 <= found.gap_money <= problem.wealth
    assert np.isfinite([found.gap_share, found.gap_standard_error]).all()


def test_without_savings_there_is_nothing_to_measure_the_gap_in():
    problem, policy = solved("no money")
    assert proof(problem, policy, 20, 1) is None


REFUSED = {
    "aged 119, the table's end": (lambda: single(people=of_age(119)), "age-above-table"),
    "not born yet": (lambda: single(people=of_age(-1)), "birth-date-future"),
    "risk aversion 21": (lambda: single(preferences=Preferences(risk_aversion=21.0)), "risk-aversion-range"),
    "risk aversion 0": (lambda: single(preferences=Preferences(risk_aversion=0.0)), "risk-aversion-range"),
    "a balance below 0": (lambda: single(accounts=money(-1.0)), "amount-negative"),
    "no essential spending": (lambda: single(spending=Spending(0.0)), "essential-not-positive"),
    "a loss of everything": (
        lambda: single(markets=MarketAssumptions(0.02, (AssetClass("A", -0.9, 0.1),), ((1.0,),))),
        "rate-range",
    ),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused_in_words(name):
    make, code = REFUSED[name]
    with pytest.raises(InputError) as refused:
        make()
    assert code in {problem.code for problem in refused.value.diagnostics}
    assert all(len(problem.message) > 10 for problem in refused.value.diagnostics)


WHOLE = (
    "no money, no income",
    "a billion",
    "a loaf costs 300",
    "aged 118, the table's last but one",
    "a cost larger than wealth now",
    "no room to choose",
)


@pytest.mark.parametrize("name", WHOLE)
def test_a_whole_plan_is_printed_and_written(name):
    """Nothing on the way from the household to the files trips over a figure, and none is infinite."""
    read = ReadWorkbook(EDGES[name](), (), WorkbookData({}, {}, frozenset()), "0" * 64)
    quick = PlanSettings(100, n_proof_paths=10, solver=COARSE, rules=("divisor",), what_ifs=False)
    plan = make_plan(read, quick)
    written = json.loads(json_text(results_json(plan)))  # refuses what is not finite
    assert complaints(written) == []
    assert results_workbook(plan).startswith(b"PK")
    assert render_pdf(plan).startswith(b"%PDF")
    assert rendered(plan_summary(plan))

"""Plan assembly: what is acted on adds up, and every part is consistent with the others."""

from dataclasses import replace
from datetime import date
from functools import cache

import numpy as np
import pytest
from households import couple, single
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from planner import plan as plan_module
from planner.banded import KeepWithinBand
from planner.diagnostics import Diagnostic, InputError
from planner.household import Account, AccountType, Household, OwnTaxRules, Person, Preferences
from planner.instructions import Choice, first_year, lifelong_income, this_year
from planner.optimum.recursion import SolverSettings
from planner.plan import PLAN_KEY, PlanSettings, compare_strategies, make_plan, rule_key, solve_household
from planner.plan_record import Plan, ThisYear
from planner.problem_building import build_problem
from planner.projection import chances_alive, given_a_long_life, people_alive
from planner.rules import RULES, ConstantReal
from planner.simulation import draw_scenarios, simulate
from planner.stresses import STRESSES, stresses
from planner.workbook.data import WorkbookData
from planner.workbook.reading import ReadWorkbook

# Small grids and few futures: these tests are about assembly, not about accuracy.
QUICK = PlanSettings(
    n_paths=1500, n_what_if_paths=300, solver=SolverSettings(8, 8, 6, 30, scale=25.0), what_ifs=False
)
CENT = 0.005


def read(household: Household) -> ReadWorkbook:
    """A household as if it had been read from a workbook without any cells."""
    return ReadWorkbook(household, (), WorkbookData({}, {}, frozenset()), "0" * 64)


@cache
def couple_plan() -> Plan:
    return make_plan(read(couple()), QUICK)


@cache
def single_plan() -> Plan:
    return make_plan(read(single()), QUICK)


def assert_adds_up(now: ThisYear) -> None:
    by_type = {kind.value: 0.0 for kind in AccountType}
    for account in now.accounts:
        by_type[account.type] += account.withdraw
    totals = (now.withdraw_taxable, now.withdraw_tax_deferred, now.withdraw_tax_free)
    assert_allclose(tuple(by_type.values()), totals, atol=CENT)
    assert_allclose(sum(amount for _, amount in now.incomes), now.income, atol=CENT)
    assert_allclose(now.spending, now.income + sum(totals) - now.tax - now.kept, atol=CENT)
    cents = [now.spending, now.income, now.tax, now.kept, *totals, *(a.withdraw for a in now.accounts)]
    assert_allclose(cents, np.round(cents, 2), rtol=0, atol=1e-9)  # floats nearest to whole cents


@pytest.mark.parametrize("plan", [couple_plan, single_plan], ids=["couple", "single"])
def test_page_one_adds_up_to_the_cent(plan):
    assert_adds_up(plan().this_year)


def test_spending_is_what_the_policy_chose():
    """Taxable money pays for the difference between planning tax and actual tax."""
    plan = couple_plan()
    assert_allclose(plan.this_year.spending, plan.schedule[0].spending.p50, atol=CENT)


def test_minimum_distribution_is_by_the_account_s_own_year_end_balance():
    """Treas. Reg. 1.401(a)(9)-9(c): 75 at year end, divisor 24.6; 290,000 / 24.6 = 11,788.62."""
    pot = next(a for a in couple_plan().this_year.accounts if a.account == "Ola's pot")
    assert pot.minimum_distribution == 11_788.62
    assert pot.still_due == 7_788.62
    assert pot.withdraw >= pot.still_due
    other = next(a for a in couple_plan().this_year.accounts if a.account == "Per's pot")
    assert other.minimum_distribution == 0


def instructed(household: Household, withdraw=0.0, convert=0.0, spending=0.0) -> ThisYear:
    return this_year(
        household, build_problem(household), first_year(household), Choice(withdraw, convert, spending, 0)
    )


@settings(max_examples=60, deadline=None)
@given(
    withdraw=st.floats(0, 500_000),
    convert=st.floats(0, 300_000),
    spending=st.floats(-5_000, 900_000),
    rules=st.sampled_from(["us-federal-2026", "none"]),
)
def test_any_choice_becomes_instructions_that_add_up(withdraw, convert, spending, rules):
    household = couple(tax_rules=rules, preferences=Preferences(conversions_allowed=True))
    now = instructed(household, withdraw, convert, spending)
    assert_adds_up(now)
    for account in now.accounts:
        # Converted money may be spent in the same year: it leaves through the tax-free account.
        room = account.balance + (now.convert if account.type == "tax-free" else 0.0)
        assert -CENT <= account.withdraw <= room + CENT
        assert account.withdraw + account.convert <= room + CENT
        assert account.withdraw >= account.still_due - CENT
    assert now.kept >= 0


def test_sale_raises_the_tax_on_its_gain():
    """Gain of 50,000 in 200,000, taxed at 20 %: a sale x leaves x - 0.2 x / 4 = 10,000."""
    household = single(
        tax_rules="own",
        own_tax=OwnTaxRules(gains_rate=0.2, brackets=(("single", 0.0, 0.0),)),
        accounts=(Account("Shares", "Lin", AccountType.TAXABLE, 200_000.0, 150_000.0),),
        incomes=(),
    )
    now = instructed(household, spending=10_000.0)
    assert now.spending == 10_000.0
    assert_allclose(now.withdraw_taxable, 10_000 / 0.95, atol=0.01)  # a cent: tax is rounded to cents
    assert_allclose(now.tax, 0.05 * now.withdraw_taxable, atol=0.01)


def test_cash_kept_aside_is_not_sold():
    now = instructed(couple(), spending=10_000_000.0)
    assert_allclose(now.withdraw_taxable, 200_000 - 15_000, atol=CENT)
    assert now.withdraw_tax_deferred == 450_000
    assert now.withdraw_tax_free == 90_000


def test_surplus_is_kept_in_taxable():
    now = instructed(couple(tax_rules="none"), withdraw=30_000.0, spending=20_000.0)
    assert now.withdraw_taxable == 0
    assert_allclose(now.kept, 34_000 + 30_000 - 20_000, atol=CENT)


def test_money_that_cannot_be_reached_stays():
    accounts = (
        Account("Locked", "Lin", AccountType.TAX_DEFERRED, 100_000.0, not_before_age=85.0),
        Account("Open", "Lin", AccountType.TAX_DEFERRED, 50_000.0),
    )
    now = instructed(single(accounts=accounts), withdraw=500_000.0, spending=300_000.0)
    assert [a.withdraw for a in now.accounts] == [0.0, 50_000.0]


def test_lifelong_income_counts_pensions_only_and_is_after_tax():
    assert lifelong_income(single(), 0, "first") == 14_000
    household = couple(tax_rules="none")
    assert lifelong_income(household, 0, "both") == 38_000
    assert lifelong_income(household, 1, "first") == 22_000


def test_same_seed_same_plan_and_another_seed_another():
    again = make_plan(read(single()), QUICK)
    plan = single_plan()
    assert again.strategies[0].wealth_cost == 0
    for one, other in zip(plan.strategies, again.strategies, strict=True):
        assert one.estate == other.estate
        assert one.chance_below_essential == other.chance_below_essential
    assert plan.schedule == again.schedule
    assert plan.futures == again.futures
    assert make_plan(read(single()), replace(QUICK, seed=2)).schedule != plan.schedule


def test_no_strategy_beats_the_plan():
    """Up to sampling error and the coarse grid: 0.5 % of wealth where small grids were used."""
    for plan in (couple_plan(), single_plan()):
        for result in plan.strategies:
            slack = 4 * result.wealth_cost_standard_error + 0.005 * plan.problem.wealth
            assert result.wealth_cost >= -slack, result.name


def test_every_rule_is_compared_and_the_plan_comes_first():
    keys = [result.key for result in couple_plan().strategies]
    assert keys == [PLAN_KEY, *(rule.key for rule in RULES), KeepWithinBand.key]
    assert "as-asked" not in [result.key for result in single_plan().strategies]  # nothing was asked


def test_schedule_covers_every_year_with_finite_figures():
    for plan in (couple_plan(), single_plan()):
        assert len(plan.schedule) == plan.problem.n_years
        assert [row.year for row in plan.schedule] == list(range(2026, 2026 + plan.problem.n_years))
        for row in plan.schedule:
            for values in (row.spending, row.balance):
                assert np.isfinite([values.p10, values.p50, values.p90]).all()
                assert values.p10 <= values.p50 <= values.p90
        for result in plan.strategies:
            assert np.isfinite(result.spending).all()
            assert np.isfinite(result.balance).all()


def test_chances_of_being_alive_fall_and_start_at_one():
    alive = np.array([row.chance_alive for row in couple_plan().schedule])
    assert (alive[0] == 1).all()
    assert (np.diff(alive, axis=0) <= 1e-15).all()
    assert (alive[:, 2] >= alive[:, :2].max(axis=1) - 1e-15).all()


def test_lives_given_a_long_life_reach_the_last_year_and_follow_bayes():
    """P(status at t | someone opens the last year) = P(status at t) u_t / P(last year), by enumeration."""
    problem = build_problem(couple())
    conditional = given_a_long_life(problem)
    chance = chances_alive(conditional)
    assert_allclose(chance.sum(axis=1), 1, rtol=1e-12)
    t = 20
    unconditional = chances_alive(problem)
    reach = np.eye(3)
    for s in range(t, problem.n_years - 1):
        reach = reach @ problem.transition[s]
    joint = unconditional[t] * reach.sum(axis=1)
    assert_allclose(chance[t], joint / joint.sum(), rtol=1e-9)
    assert (people_alive(problem)[:, 2] <= 1).all()


def test_lookup_agrees_with_the_plan_at_the_middle():
    """At the middle savings with both alive the look-up gives about the schedule's middle spending.

    Spending is nearly linear in savings, so medians correspond; 3 % covers the bend and the split.
    """
    plan = couple_plan()
    both = [row for row in plan.lookup if row.status == "both"]
    assert [row.spending for row in both] == sorted(row.spending for row in both)
    middle = both[len(both) // 2]
    assert_allclose(middle.spending, plan.schedule[1].spending.p50, rtol=0.03)
    assert {row.status for row in plan.lookup} == {"both", "first", "second"}


def test_band_brackets_the_middle():
    plan = couple_plan()
    middle = plan.schedule[1].balance.p50
    assert plan.band.low < middle < plan.band.high
    assert plan.band.spending_below < plan.schedule[1].spending.p50 < plan.band.spending_above


def test_example_futures_are_in_order_and_long_enough():
    plan = couple_plan()
    decades = [np.prod(1 + np.array(future.returns[:10])) for future in plan.futures]
    assert decades == sorted(decades)
    for future in plan.futures:
        n = len(future.years)
        assert n == len(future.ages) == len(future.spending) == len(future.balance) == len(future.status)
        assert n >= 10


def test_survivors_keep_their_own_pension():
    views = {view.survivor: view for view in couple_plan().survivors}
    assert views["Ola"].income == 22_000
    assert_allclose(views["Ola"].essential, 0.7 * 52_000)
    assert single_plan().survivors == ()


def test_costs_this_year():
    """Middle portfolio or another: adviser 0.5 % of 740,000 = 3,700."""
    assert dict(couple_plan().yearly_costs)["Adviser fee"] == 3_700
    assert couple_plan().plan_costs > 0


def test_what_ifs_are_solved_anew():
    plan = make_plan(read(couple()), replace(QUICK, what_ifs=True))
    results = {result.name: result for result in plan.what_ifs}
    assert list(results) == [name for name, _ in stresses(couple())]
    base = plan.strategies[0].spending_this_year
    assert results["returns 1 % lower every year"].spending_this_year < base
    assert results["savings fall by a fifth at the start"].spending_this_year < base


def test_a_what_if_that_changes_nothing_gives_the_plan_s_own_figures(monkeypatch):
    """Errors of coarser grids and fewer futures drop out."""
    monkeypatch.setattr(plan_module, "stresses", lambda household: [("as it is", replace(household))])
    plan = make_plan(
        read(single()), replace(QUICK, what_ifs=True, what_if_solver=SolverSettings(6, 6, 6, 24))
    )
    result, optimum = plan.what_ifs[0], plan.strategies[0]
    for field in ("spending_this_year", "level_spending", "chance_below_essential"):
        # floating point only: a + b - b
        assert_allclose(getattr(result, field), getattr(optimum, field), rtol=1e-12)


def test_stresses_apply_where_there_is_ground():
    household = couple()
    assert [name for name, _ in stresses(household)] == [name for name, _ in STRESSES][
        :4
    ]  # no care cost given
    spending = replace(
        household.spending, care_cost=50_000.0, care_from_age=85.0, care_years=3.0, care_for="first"
    )
    changed = dict(stresses(replace(household, spending=spending)))["care is needed"]
    assert changed.one_offs[-1].year == 1951 + 85
    assert changed.one_offs[-1].last_year == 1951 + 87


def test_band_keeps_spending_until_the_plan_moves_enough():
    problem = build_problem(single())
    policy = KeepWithinBand(_Share(), 0.10)
    paths = simulate(problem, policy, draw_scenarios(problem, 300, np.random.default_rng(1)))
    both = paths.alive[:, 1:] & paths.alive[:, :-1]
    change = np.abs(paths.spending[:, 1:] / np.where(both, paths.spending[:, :-1], 1) - 1)[both]
    assert ((change < 1e-9) | (change > 0.0999)).all()  # floating point only
    assert (change < 1e-9).any()
    assert (change > 0.0999).any()


class _Share:
    """Spends a fifth of income and savings."""

    name, reference, n_memory = "a fifth", "", 0

    def decide(self, problem, t, state):
        chosen = ConstantReal(2).decide(problem, 0, state)
        spending = 0.2 * (state.wealth + problem.income[t][state.status])
        return replace(chosen, spending=spending, memory=state.memory[:, :0])


def test_unknown_rule_gets_the_near_miss():
    assert rule_key("Share with limits") == "floor-and-ceiling"
    with pytest.raises(InputError) as error:
        rule_key("constant-reel")
    assert error.value.diagnostics[0].code == "rule-unknown"
    assert "constant-real" in error.value.diagnostics[0].message


def test_as_asked_needs_a_wish():
    solved = solve_household(single(), QUICK)
    with pytest.raises(InputError) as error:
        compare_strategies(solved, replace(QUICK, rules=("as-asked",)))
    assert error.value.diagnostics[0].code == "rule-needs-wanted"


def test_simulated_value_is_near_the_solved_one():
    """1,500 futures and small grids: sampling 1 % and grid 1 % of the level."""
    assert_allclose(couple_plan().value_share_simulated, 1, atol=0.03)


def test_level_spending_is_left_out_where_a_legacy_is_wished():
    household = single(preferences=Preferences(wish_to_leave=50_000.0))
    plan = make_plan(read(household), replace(QUICK, rules=("constant-real",)))
    assert plan.level_spending is None
    assert all(result.level_spending is None for result in plan.strategies)


def test_a_client_in_the_last_year_of_the_table():
    """No next year: nothing to look up, and the plan still stands."""
    old = single(people=(Person("Lin", date(1907, 3, 3), "female", "us-ssa-2022"),))
    plan = make_plan(read(old), replace(QUICK, rules=()))
    if plan.problem.n_years == 1:
        assert plan.lookup == ()
    assert_adds_up(plan.this_year)


def test_no_savings_at_all():
    """All income is spent, up to 0.3 %: reading spending between nodes cuts the kink where saving starts."""
    empty = single(accounts=(Account("Empty", "Lin", AccountType.TAXABLE, 0.0),))
    plan = make_plan(read(empty), replace(QUICK, solver=None))
    assert_adds_up(plan.this_year)
    assert_allclose(plan.this_year.spending, 14_000, rtol=0.003)
    assert plan.strategies[0].chance_below_essential == 1
    assert all(result.wealth_cost == 0 for result in plan.strategies)  # there is no wealth to lose


def test_fall_at_the_start_leaves_a_household_that_can_be_planned():
    """All taxable money kept aside: what is kept aside falls with it, or the stress would be refused."""
    household = single(spending=replace(single().spending, cash_aside=250_000.0))
    changed = dict(stresses(household))["savings fall by a fifth at the start"]
    assert build_problem(changed).opening[0] == 0


def test_a_problem_in_a_what_if_says_which(monkeypatch):
    def refuse(*arguments):
        raise InputError([Diagnostic("some-code", "spending", "it cannot be planned for")])

    solve = plan_module._optimum_alone
    monkeypatch.setattr(
        plan_module, "_optimum_alone", lambda h, s: solve(h, s) if h == single() else refuse()
    )
    with pytest.raises(InputError) as error:
        make_plan(read(single()), replace(QUICK, what_ifs=True))
    assert error.value.diagnostics[0].code == "some-code"
    assert "'returns 1 % lower every year'" in error.value.diagnostics[0].message

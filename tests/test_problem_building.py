"""From a household to arrays: incomes, one-offs, accounts, need and horizon by year and status."""

from __future__ import annotations

from dataclasses import replace
from datetime import date

import numpy as np
import pytest
from households import MARKETS, PORTFOLIOS, couple, single
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from planner import taxes
from planner.diagnostics import InputError
from planner.household import (
    LARGER_OF_THE_TWO,
    Account,
    AccountType,
    Income,
    IncomeKind,
    OneOff,
    OwnLifeTable,
    OwnTaxRules,
    Person,
    Portfolio,
    Preferences,
    Rise,
    Spending,
)
from planner.mortality import death_probabilities, load_table, survival
from planner.problem import Problem
from planner.problem_building import Builder, build_problem

BOTH, FIRST, SECOND = 0, 1, 2
INFLATION = MARKETS.inflation  # 2.5 %
AGE = 80  # of the single client on the plan date
TAXABLE, DEFERRED, FREE = AccountType.TAXABLE, AccountType.TAX_DEFERRED, AccountType.TAX_FREE


def incomes_of(*incomes: Income, plain: bool = True) -> Problem:
    """The couple (74 and 71) without tax, with only these incomes."""
    return build_problem(
        couple(incomes=incomes, one_offs=(), tax_rules="none" if plain else "us-federal-2026")
    )


def pension(amount: float = 10_000.0, owner: str = "Lin", from_age: float = 65.0, **rest: object) -> Income:
    return Income("Pension", owner, IncomeKind.PENSION, amount, from_age, **rest)  # type: ignore[arg-type]


def lone_income(income: Income) -> np.ndarray:
    """Income by year of the single client, who is 80 in year 0."""
    return build_problem(single(incomes=(income,))).income[:, 0]


# Income by age -----------------------------------------------------------------------------------


def test_income_runs_from_its_age_to_its_last_age() -> None:
    paid = lone_income(pension(from_age=83.0, to_age=86.0))
    assert_allclose(paid[:8], [0, 0, 0, 10_000, 10_000, 10_000, 0, 0])


def test_income_that_starts_or_ends_within_a_year_is_paid_for_that_share() -> None:
    """From 82 and 8 months to 84 and 3 months: a third of year 2, all of year 3, a quarter of year 4."""
    paid = lone_income(pension(12_000.0, from_age=82 + 8 / 12, to_age=84.25))
    assert_allclose(paid[:6], [0, 0, 4_000, 12_000, 3_000, 0], atol=1e-9)


@settings(deadline=None, max_examples=25)
@given(st.floats(80.0, 95.0), st.floats(0.1, 12.0))
def test_total_of_an_income_is_amount_times_years(start: float, years: float) -> None:
    paid = lone_income(pension(from_age=start, to_age=start + years))
    assert paid.sum() == pytest.approx(10_000.0 * years)


# Income that rises --------------------------------------------------------------------------------


def test_income_that_rises_with_prices_is_constant_in_real_terms() -> None:
    assert_allclose(lone_income(pension()), 10_000.0)


@pytest.mark.parametrize(
    ("rise", "rate"),
    [
        (Rise("fixed", 0.0), 0.0),
        (Rise("fixed", 0.04), 0.04),
        (Rise("capped", 0.01), 0.01),  # prices up to 1 %: prices rise faster
        (Rise("capped", 0.05), INFLATION),  # prices up to 5 %: they rise by 2.5 %
    ],
)
def test_income_paid_already_falls_behind_or_ahead_of_prices(rise: Rise, rate: float) -> None:
    """Amount (1 + rate)^t at the time, divided by (1 + i)^t."""
    t = np.arange(10)
    assert_allclose(lone_income(pension(rise=rise))[:10], 10_000 * ((1 + rate) / (1 + INFLATION)) ** t)


def test_a_later_income_in_money_is_nominal_at_its_first_payment() -> None:
    """Level 10,000 from 85: worth 10,000 / 1.025^5 at first, then less; 3 % a year from then on likewise."""
    level = lone_income(pension(from_age=85.0, rise=Rise("fixed", 0.0)))
    assert level[4] == 0
    assert_allclose(level[5:8], 10_000 / 1.025 ** np.arange(5, 8))
    rising = lone_income(pension(from_age=85.0, rise=Rise("fixed", 0.03)))
    assert_allclose(rising[5:8], 10_000 * 1.03 ** np.arange(3) / 1.025 ** np.arange(5, 8))


# Income by status ---------------------------------------------------------------------------------


def test_income_stops_with_its_owner_or_goes_on_in_part() -> None:
    problem = incomes_of(
        pension(10_000.0, "Ola", 65.0),
        replace(pension(6_000.0, "Per", 65.0), name="Other", continues_to_partner=0.5),
    )
    assert_allclose(problem.income[:5, BOTH], 16_000)
    assert_allclose(problem.income[:5, FIRST], 10_000 + 3_000)
    assert_allclose(problem.income[:5, SECOND], 6_000)


def test_continued_income_follows_the_age_of_the_one_who_died() -> None:
    """Per is 71; from 75 his pension would have started, and from then half of it goes to Ola."""
    problem = incomes_of(pension(8_000.0, "Per", 75.0, continues_to_partner=0.5))
    assert_allclose(problem.income[:6, FIRST], [0, 0, 0, 0, 4_000, 4_000])


@pytest.mark.parametrize(("first", "second"), [(22_000.0, 16_000.0), (9_000.0, 16_000.0)])
def test_survivor_has_the_larger_of_two_state_pensions(first: float, second: float) -> None:
    larger = {"continues_to_partner": LARGER_OF_THE_TWO}
    problem = incomes_of(
        Income("Hers", "Ola", IncomeKind.STATE_PENSION, first, 67.0, **larger),  # type: ignore[arg-type]
        Income("His", "Per", IncomeKind.STATE_PENSION, second, 67.0, **larger),  # type: ignore[arg-type]
        pension(5_000.0, "Per"),  # another kind does not count
    )
    assert_allclose(problem.income[:3, BOTH], first + second + 5_000)
    assert_allclose(problem.income[:3, FIRST], max(first, second))
    assert_allclose(problem.income[:3, SECOND], max(first, second) + 5_000)


def test_state_pensions_in_several_rows_are_compared_together() -> None:
    """His 8,000 and 4,000 are together larger than her 10,000: she has 12,000, not 10,000."""
    larger = {"continues_to_partner": LARGER_OF_THE_TWO}
    problem = incomes_of(
        Income("Hers", "Ola", IncomeKind.STATE_PENSION, 10_000.0, 67.0, **larger),  # type: ignore[arg-type]
        Income("Basic", "Per", IncomeKind.STATE_PENSION, 8_000.0, 67.0, **larger),  # type: ignore[arg-type]
        Income("Additional", "Per", IncomeKind.STATE_PENSION, 4_000.0, 67.0, **larger),  # type: ignore[arg-type]
    )
    assert_allclose(problem.income[0], [22_000, 12_000, 12_000])


def test_continued_income_is_taxed_as_the_survivors() -> None:
    """Own tax of 20 % on everything: the survivor pays it on the continued half."""
    household = couple(
        incomes=(pension(20_000.0, "Per", continues_to_partner=0.5),),
        one_offs=(),
        tax_rules="own",
        own_tax=OwnTaxRules(brackets=(("single", 0.0, 0.2), ("couple", 0.0, 0.2))),
    )
    problem = build_problem(household)
    assert [float(problem.tax[0][h](0.0)) for h in range(3)] == pytest.approx([4_000, 2_000, 4_000])


# One-offs -----------------------------------------------------------------------------------------


def test_one_offs_by_calendar_year() -> None:
    """Plan date 2026: year 2 is 2028; received +, paid -; to the last year, both included."""
    household = single(
        incomes=(),
        one_offs=(
            OneOff("Roof", 2028, -20_000.0),
            OneOff("Gift", 2027, 5_000.0, last_year=2029),
            OneOff("Perhaps", 2026, 99_000.0, in_the_plan=False),
        ),
    )
    assert_allclose(build_problem(household).income[:5, 0], [0, 5_000, -15_000, 5_000, 0])


def test_a_one_off_that_does_not_rise_with_prices_is_worth_less() -> None:
    household = single(incomes=(), one_offs=(OneOff("Bond", 2029, 10_000.0, rises_with_prices=False),))
    assert build_problem(household).income[3, 0] == pytest.approx(10_000 / 1.025**3)


def test_one_offs_come_whoever_is_alive_and_their_taxable_share_is_taxed() -> None:
    household = couple(
        incomes=(),
        one_offs=(
            OneOff("Sale", 2026, 40_000.0, taxable_share=0.5),
            OneOff("Roof", 2026, -10_000.0, taxable_share=1.0),
        ),
        tax_rules="own",
        own_tax=OwnTaxRules(brackets=(("single", 0.0, 0.25), ("couple", 0.0, 0.25))),
    )
    problem = build_problem(household)
    assert_allclose(problem.income[0], 30_000.0)
    assert [float(problem.tax[0][h](0.0)) for h in range(3)] == pytest.approx([5_000.0] * 3)
    assert float(problem.tax[1][0](0.0)) == 0.0


# Accounts -----------------------------------------------------------------------------------------


def test_opening_is_net_of_the_embedded_gain_and_of_cash_aside() -> None:
    """Gain 50,000 on one account, none on the other (no cost basis); 15,000 kept aside."""
    rate = taxes.load("us-federal-2026").gains_rate
    assert rate > 0
    opening = build_problem(couple()).opening
    assert_allclose(opening, [200_000 - 50_000 * rate - 15_000, 450_000, 90_000])


def test_a_loss_does_not_add_to_the_opening_balance() -> None:
    account = Account("Brokerage", "joint", TAXABLE, 100_000.0, 130_000.0)
    assert build_problem(couple(accounts=(account,))).opening[0] == 100_000 - 15_000


def test_cash_aside_above_what_is_left_after_tax_on_gains_is_refused() -> None:
    """The balance covers it, the balance less the tax on the gain does not."""
    account = Account("Brokerage", "joint", TAXABLE, 100_000.0, 0.0)
    household = couple(accounts=(account,), spending=Spending(52_000.0, cash_aside=99_000.0))
    with pytest.raises(InputError) as caught:
        build_problem(household)
    assert [d.code for d in caught.value.diagnostics] == ["cash-aside-above-taxable"]


def test_accounts_that_exist() -> None:
    deposit = Account("Deposit", "Lin", TAXABLE, 50_000.0)
    pot = Account("Pot", "Lin", DEFERRED, 50_000.0)
    later = Account("Later", "Lin", FREE, 0.0, paid_in=1_000.0, paid_in_until_age=85.0)
    allowed = Preferences(conversions_allowed=True)
    assert build_problem(single(accounts=(deposit,))).has_account == (True, False, False)
    assert build_problem(single(accounts=(pot,))).has_account == (True, True, False)
    assert build_problem(single(accounts=(deposit, later))).has_account == (True, False, True)
    converting = build_problem(single(accounts=(pot,), preferences=allowed))
    assert converting.has_account == (True, True, True)
    assert converting.conversions
    nothing_to_convert = build_problem(single(accounts=(deposit,), preferences=allowed))
    assert nothing_to_convert.has_account == (True, False, False)
    assert not nothing_to_convert.conversions


def test_contributions_stop_at_their_age_and_with_their_owner() -> None:
    """Per is 71 and pays 6,000 until 73, tax-deferred; Ola 2,000 until 75, tax-free: less cash each year."""
    accounts = (
        Account("Brokerage", "joint", TAXABLE, 100_000.0),
        Account("Pot", "Per", DEFERRED, 100_000.0, paid_in=6_000.0, paid_in_until_age=73.0),
        Account("Free", "Ola", FREE, 10_000.0, paid_in=2_000.0, paid_in_until_age=75.0),
    )
    wages = Income("Work", "Per", IncomeKind.WAGES, 30_000.0, 60.0, 73.0)
    problem = build_problem(couple(accounts=accounts, incomes=(wages,), one_offs=(), tax_rules="none"))
    assert_allclose(problem.contribution[:3, BOTH], [[0, 6_000, 2_000], [0, 6_000, 0], [0, 0, 0]])
    assert_allclose(problem.contribution[:3, FIRST], [[0, 0, 2_000], [0, 0, 0], [0, 0, 0]])
    assert_allclose(problem.contribution[:3, SECOND], [[0, 6_000, 0], [0, 6_000, 0], [0, 0, 0]])
    assert_allclose(problem.income[:3, BOTH], [22_000, 24_000, 0])
    assert_allclose(problem.income[:3, SECOND], [24_000, 24_000, 0])


def test_tax_deferred_contributions_lower_taxed_wages_to_zero_at_most() -> None:
    pot = Account("Pot", "Lin", DEFERRED, 50_000.0, paid_in=6_000.0, paid_in_until_age=82.0)
    own = OwnTaxRules(brackets=(("single", 0.0, 0.2),))

    def tax_on(wages: float) -> float:
        work = Income("Work", "Lin", IncomeKind.WAGES, wages, 60.0, 82.0)
        household = single(accounts=(pot,), incomes=(work, pension()), tax_rules="own", own_tax=own)
        return float(build_problem(household).tax[0][0](0.0))

    assert tax_on(20_000.0) == pytest.approx(0.2 * (14_000 + 10_000))
    assert tax_on(4_000.0) == pytest.approx(0.2 * 10_000)


# Minimum distributions and access -----------------------------------------------------------------


def test_minimum_share_counts_each_owner_from_their_age() -> None:
    """Ola turns 75 in 2026 (divisor 24.6) and owns 2/3; Per turns 72 and starts at 73, in 2027 (26.5).

    Internal Revenue Service, Uniform Lifetime Table, Treas. Reg. 1.401(a)(9)-9(c). A survivor owns all.
    """
    problem = build_problem(couple())
    shares = problem.minimum_share
    assert_allclose(shares[0], [2 / 3 / 24.6, 1 / 24.6, 0.0], rtol=1e-12)
    assert_allclose(shares[1], [2 / 3 / 23.7 + 1 / 3 / 26.5, 1 / 23.7, 1 / 26.5], rtol=1e-12)
    assert (problem.accessible_share >= shares).all()


def test_accounts_are_out_of_reach_before_their_age() -> None:
    """Per's pot is a third of tax-deferred money and opens at 73; after his death it is Ola's at once."""
    household = couple(tax_rules="none")
    accounts = tuple(
        replace(a, not_before_age=73.0) if a.name == "Per's pot" else a for a in household.accounts
    )
    shares = build_problem(couple(accounts=accounts, tax_rules="none")).accessible_share
    assert_allclose(shares[:3, BOTH], [2 / 3, 2 / 3, 1])
    assert_allclose(shares[:3, FIRST], 1)
    assert_allclose(shares[:3, SECOND], [2 / 3, 2 / 3, 1])


def test_the_laws_access_age_holds_where_the_workbook_names_none() -> None:
    """United Kingdom: 55, from 2028 57 (Finance Act 2022); a client of 54 on 1 January 2026."""
    person = Person("Lin", date(1971, 3, 3), "female", "us-ssa-2022")
    pot = Account("Pot", "Lin", DEFERRED, 300_000.0)
    household = single(people=(person,), accounts=(pot,), tax_rules="uk-2025-26", incomes=())
    assert_allclose(build_problem(household).accessible_share[:5, 0], [0, 1, 0, 1, 1])


# Need, utility and horizon ------------------------------------------------------------------------


def test_need_follows_the_first_persons_age_and_falls_after_a_death() -> None:
    """Ola is 74: from 75 spend 90 %, from 80 80 %; a survivor needs 60 % of the couple."""
    spending = Spending(52_000.0, survivor_share=0.6, age_profile=((75.0, 0.9), (80.0, 0.8)))
    need = build_problem(couple(spending=spending)).need
    assert_allclose(need[[0, 1, 5, 6, 9], BOTH], [1, 0.9, 0.9, 0.8, 0.8])
    assert_allclose(need[:, FIRST], 0.6 * need[:, BOTH])
    assert_allclose(need[:, SECOND], need[:, FIRST])


def test_a_single_client_needs_all_of_it() -> None:
    household = single(spending=Spending(20_000.0, survivor_share=0.6))
    assert_allclose(build_problem(household).need, 1.0)


def test_preferences_become_utility() -> None:
    wishes = Preferences(
        risk_aversion=5.0,
        shortfall_weight=2.0,
        time_preference=0.02,
        wish_to_leave=60_000.0,
        heirs_tax_rate=0.3,
    )
    problem = build_problem(couple(preferences=wishes))
    assert problem.utility.risk_aversion == 5
    assert problem.utility.shortfall_weight == 2
    assert problem.utility.floor == pytest.approx(5_200.0)  # a tenth of essential spending
    assert problem.discount == pytest.approx(1 / 1.02)
    assert problem.estate.threshold == 52_000.0
    assert problem.estate.strength == pytest.approx(60_000 / (70_000 - 52_000))
    assert problem.heirs_tax_rate == 0.3
    assert problem.ceiling == 110_000.0
    own_floor = build_problem(couple(preferences=replace(wishes, fallback_income=9_000.0, wish_to_leave=0.0)))
    assert own_floor.utility.floor == 9_000.0
    assert not own_floor.estate.wanted


def test_horizon_reaches_the_last_age_and_closes_with_certain_death() -> None:
    """Omega - age + 1 years of the longer life, cut where anyone is alive with a chance below 1e-9."""
    problem = build_problem(couple())
    table = load_table("us-ssa-2022")
    first = death_probabilities(table, "female", 74, table.omega - 71 + 1)
    second = death_probabilities(table, "male", 71, table.omega - 71 + 1, 0.9)
    alive = 1 - (1 - survival(first)) * (1 - survival(second))
    n = problem.n_years
    assert n <= table.omega - 71 + 1
    assert alive[n - 1] >= 1e-9
    assert n == table.omega - 71 + 1 or alive[n] < 1e-9
    assert_allclose(problem.death[-1], 1.0)
    assert_allclose(problem.transition.sum(axis=2) + problem.death, 1.0)
    assert_allclose(problem.ages[:, 0], [74, 71])
    assert problem.death[0, 0] == pytest.approx(first[0] * second[0])


def test_plan_at_least_to_age_rules_deaths_out_before() -> None:
    household = single(people=(Person("Lin", date(1945, 3, 3), "female", "us-ssa-2022", 1.0, 90.0),))
    death = build_problem(household).death[:, 0]
    assert (death[:10] == 0).all()
    assert death[10] > 0


def test_own_life_table() -> None:
    """Ages 80 to 83: three years and the closing one."""
    table = OwnLifeTable((80, 81, 82, 83), (0.1, 0.2, 0.4, 0.5), (0.1, 0.2, 0.4, 0.5))
    household = single(people=(Person("Lin", date(1945, 3, 3), "female", "own"),), own_life_table=table)
    assert_allclose(build_problem(household).death[:, 0], [0.1, 0.2, 0.4, 1.0])


def test_a_client_at_the_tables_last_age_is_refused() -> None:
    """An own table to 80 and a client of 80: nothing is left to plan."""
    table = OwnLifeTable((78, 79, 80), (0.1, 0.2, 0.5), (0.1, 0.2, 0.5))
    household = {"people": (Person("Lin", date(1945, 3, 3), "female", "own"),), "own_life_table": table}
    with pytest.raises(InputError) as caught:
        build_problem(single(**household))
    assert {"age-outside-table", "age-above-table"} & {d.code for d in caught.value.diagnostics}


# Portfolios and tax -------------------------------------------------------------------------------


def test_portfolios_run_from_the_least_to_the_most_volatile() -> None:
    shuffled = build_problem(single(portfolios=PORTFOLIOS[::-1]))
    assert shuffled.portfolio_names == ("Calm", "Middle", "Growth")
    assert shuffled.returns is not None
    assert (np.diff(shuffled.returns.log_deviation) > 0).all()
    held = build_problem(single(portfolio_choice="Middle"))
    assert held.portfolio_names == ("Middle",)
    assert held.gross.shape[0] == held.drag.size == 1


def test_returns_are_real_and_after_costs() -> None:
    """Bonds 4 %, shares 6.5 %, costs 0.3 % and the adviser's 0.5 %, inflation 2.5 %."""
    problem = build_problem(single(portfolios=(Portfolio("Calm", (0.8, 0.2), 0.003),), adviser_fee=0.005))
    nominal = 0.8 * 0.04 + 0.2 * 0.065 - 0.008
    assert float(problem.gross[0] @ problem.node_weights) == pytest.approx((1 + nominal) / 1.025, rel=1e-12)
    assert problem.drag[0] == 0.0  # tax rules "none"


def test_more_nodes_where_risk_aversion_weighs_the_tails() -> None:
    assert build_problem(single()).gross.shape == (3, 9)
    bold = (Portfolio("Shares", (0.0, 1.0)),)
    assert build_problem(
        single(portfolios=bold, preferences=Preferences(risk_aversion=15.0))
    ).gross.shape == (1, 15)


def test_tax_age_counts_at_the_end_of_the_year_or_on_the_plan_date() -> None:
    """Born 20 May 1951, plan date 1 January 2026: 74 on the day, 75 at the end of the year."""
    assert Builder.of(couple()).tax_age(0, 0) == 75
    assert Builder.of(couple(tax_rules="uk-2025-26")).tax_age(0, 0) == 74
    assert Builder.of(couple()).tax_age(0, 3) == 78


def test_partners_who_are_not_married_are_taxed_apart() -> None:
    """Half of the withdrawals each by their shares of tax-deferred money: more tax than together."""
    incomes = (pension(60_000.0, "Ola"),)
    together = build_problem(couple(incomes=incomes, one_offs=())).tax[0][BOTH]
    apart = build_problem(couple(incomes=incomes, one_offs=(), couple_is="not married")).tax[0][BOTH]
    assert float(apart(0.0)) > float(together(0.0)) + 1_000


def test_fields_have_the_shapes_the_solver_expects() -> None:
    problem = build_problem(couple())
    n = problem.n_years
    for field in ("death", "income", "need", "minimum_share", "accessible_share"):
        assert getattr(problem, field).shape == (n, 3), field
    assert problem.transition.shape == (n, 3, 3)
    assert problem.contribution.shape == (n, 3, 3)
    assert [len(row) for row in problem.tax] == [3] * n
    assert problem.ages.shape == (2, n)

"""Rules of a household: each is broken once, and names its code and field."""

import re
from dataclasses import replace
from datetime import date
from pathlib import Path

import pytest
from households import MARKETS, couple, single

from planner.codes import CODES
from planner.diagnostics import InputError
from planner.household import (
    Account,
    AccountType,
    AnnuityQuote,
    AssetClass,
    History,
    Income,
    IncomeKind,
    LastYear,
    MarketAssumptions,
    OneOff,
    OwnLifeTable,
    OwnTaxRules,
    Person,
    Portfolio,
    Preferences,
    Rise,
    Spending,
    StartChoice,
    problems,
    risk_aversion_from_gambles,
)

ANA = Person("Lin", date(1945, 3, 3), "female", "us-ssa-2022", 0.9)
CLASSES = MARKETS.asset_classes
PENSION = Income("Pension", "Lin", IncomeKind.PENSION, 14_000.0, 65.0)
DEPOSIT = Account("Deposit", "Lin", AccountType.TAXABLE, 250_000.0)
QUOTE = AnnuityQuote("Lin", "Deposit", 0.06)
OWN_TAX = OwnTaxRules(brackets=(("single", 0.0, 0.0), ("single", 10_000.0, 0.2)))


def market(**changes):
    return replace(MARKETS, **changes)


ERRORS = [
    ("name-missing", "client_name", {"client_name": " "}),
    ("currency-unknown", "currency", {"currency": "DOL"}),
    ("amount-negative", "home_value", {"home_value": -1.0}),
    ("people-count", "people", {"people": (ANA, replace(ANA, name="B"), replace(ANA, name="C"))}),
    ("name-twice", "people[1].name", {"people": (ANA, replace(ANA, name="LIN"))}),
    ("name-reserved", "people[0].name", {"people": (replace(ANA, name="Joint"),)}),
    (
        "birth-date-future",
        "people[0].date_of_birth",
        {"people": (replace(ANA, date_of_birth=date(2026, 1, 1)),)},
    ),
    (
        "age-above-table",
        "people[0].date_of_birth",
        {"people": (replace(ANA, date_of_birth=date(1903, 1, 1)),)},
    ),
    (
        "death-rates-range",
        "people[0].mortality_multiplier",
        {"people": (replace(ANA, mortality_multiplier=0.0),)},
    ),
    ("life-table-unknown", "people[0].life_table", {"people": (replace(ANA, life_table="us-ssa"),)}),
    ("life-table-own-missing", "people[0].life_table", {"people": (replace(ANA, life_table="own"),)}),
    ("plan-to-age-above-table", "people[0].plan_to_age", {"people": (replace(ANA, plan_to_age=125.0),)}),
    (
        "age-below-table",
        "people[0].date_of_birth",
        {
            "people": (replace(ANA, life_table="own"),),
            "own_life_table": OwnLifeTable((90, 91, 92), (0.1, 0.2, 0.3), (0.1, 0.2, 0.3)),
        },
    ),
    ("accounts-missing", "accounts", {"accounts": ()}),
    ("owner-unknown", "accounts[0].owner", {"accounts": (replace(DEPOSIT, owner="Linn"),)}),
    ("owner-joint-single", "accounts[0].owner", {"accounts": (replace(DEPOSIT, owner="joint"),)}),
    ("number-not-finite", "accounts[0].balance", {"accounts": (replace(DEPOSIT, balance=float("inf")),)}),
    ("amount-negative", "accounts[0].paid_in", {"accounts": (replace(DEPOSIT, paid_in=-1.0),)}),
    ("portfolio-unknown", "accounts[0].held_now", {"accounts": (replace(DEPOSIT, held_now="Cal"),)}),
    ("age-range", "accounts[0].not_before_age", {"accounts": (replace(DEPOSIT, not_before_age=300.0),)}),
    ("owner-joint-income", "incomes[0].owner", {"incomes": (replace(PENSION, owner="joint"),)}),
    ("ages-order", "incomes[0].to_age", {"incomes": (replace(PENSION, to_age=65.0),)}),
    ("rate-range", "incomes[0].rise", {"incomes": (replace(PENSION, rise=Rise("fixed", 0.9)),)}),
    (
        "continuation-kind",
        "incomes[0].continues_to_partner",
        {"incomes": (replace(PENSION, continues_to_partner="larger of the two"),)},
    ),
    ("share-range", "incomes[0].taxable_share", {"incomes": (replace(PENSION, taxable_share=1.2),)}),
    ("income-unknown", "start_choices[0].income", {"start_choices": (StartChoice("Pensoin", 68, 1.0),)}),
    ("year-past", "one_offs[0].year", {"one_offs": (OneOff("Roof", 2025, -1.0),)}),
    ("years-order", "one_offs[0].last_year", {"one_offs": (OneOff("Roof", 2028, -1.0, 2027),)}),
    ("essential-not-positive", "spending.essential", {"spending": Spending(0.0)}),
    ("wanted-below-essential", "spending.wanted", {"spending": Spending(10.0, wanted=9.0)}),
    ("ceiling-below-essential", "spending.ceiling", {"spending": Spending(10.0, ceiling=9.0)}),
    ("survivor-share-range", "spending.survivor_share", {"spending": Spending(10.0, survivor_share=0.0)}),
    ("cash-aside-above-taxable", "spending.cash_aside", {"spending": Spending(10.0, cash_aside=300_000.0)}),
    ("care-incomplete", "spending.care_cost", {"spending": Spending(10.0, care_cost=5.0)}),
    ("partner-missing", "spending.care_for", {"spending": Spending(10.0, care_for="second")}),
    (
        "profile-order",
        "spending.age_profile[1].age",
        {"spending": Spending(10.0, age_profile=((80, 1), (80, 1)))},
    ),
    ("factor-range", "spending.age_profile[0].factor", {"spending": Spending(10.0, age_profile=((80, 0),))}),
    ("rate-range", "markets.inflation", {"markets": market(inflation=2.5)}),
    (
        "deviation-negative",
        "markets.asset_classes[0].standard_deviation",
        {"markets": market(asset_classes=(AssetClass("Bonds", 0.04, -0.05), CLASSES[1]))},
    ),
    ("correlation-shape", "markets.correlations", {"markets": market(correlations=((1.0,),))}),
    (
        "correlation-diagonal",
        "markets.correlations[0][0]",
        {"markets": market(correlations=((0.9, 0), (0, 1)))},
    ),
    (
        "correlation-asymmetric",
        "markets.correlations[1][0]",
        {"markets": market(correlations=((1, 0.1), (0.2, 1)))},
    ),
    (
        "correlation-range",
        "markets.correlations[1][0]",
        {"markets": market(correlations=((1, 1.2), (1.2, 1)))},
    ),
    ("asset-classes-missing", "markets.asset_classes", {"markets": MarketAssumptions(0.02, (), ())}),
    ("portfolios-missing", "portfolios", {"portfolios": ()}),
    ("weights-count", "portfolios[0].weights", {"portfolios": (Portfolio("P", (1.0,)),)}),
    ("weights-sum", "portfolios[0].weights", {"portfolios": (Portfolio("P", (0.5, 0.49)),)}),
    ("weight-negative", "portfolios[0].weights[1]", {"portfolios": (Portfolio("P", (1.1, -0.1)),)}),
    ("name-reserved", "portfolios[0].name", {"portfolios": (Portfolio("Best each year", (0.5, 0.5)),)}),
    ("rate-range", "adviser_fee", {"adviser_fee": 0.5}),
    ("portfolio-unknown", "portfolio_choice", {"portfolio_choice": "Clam"}),
    ("risk-aversion-range", "preferences.risk_aversion", {"preferences": Preferences(0.0)}),
    (
        "shortfall-weight-range",
        "preferences.shortfall_weight",
        {"preferences": Preferences(shortfall_weight=0.5)},
    ),
    (
        "fallback-not-positive",
        "preferences.fallback_income",
        {"preferences": Preferences(fallback_income=0.0)},
    ),
    (
        "fallback-above-essential",
        "preferences.fallback_income",
        {"preferences": Preferences(fallback_income=21_000)},
    ),
    (
        "time-preference-range",
        "preferences.time_preference",
        {"preferences": Preferences(time_preference=-0.05)},
    ),
    ("amount-negative", "preferences.wish_to_leave", {"preferences": Preferences(wish_to_leave=-1.0)}),
    ("heirs-tax-range", "preferences.heirs_tax_rate", {"preferences": Preferences(heirs_tax_rate=1.0)}),
    ("account-unknown", "annuity_quote.account", {"annuity_quote": replace(QUOTE, account="Pott")}),
    ("owner-unknown", "annuity_quote.owner", {"annuity_quote": replace(QUOTE, owner="Linn")}),
    ("annuity-rate-range", "annuity_quote.rate", {"annuity_quote": replace(QUOTE, rate=0.0)}),
    (
        "continuation-kind",
        "annuity_quote.continues_to_partner",
        {"annuity_quote": replace(QUOTE, continues_to_partner="larger of the two")},
    ),
    (
        "number-not-finite",
        "preferences.fallback_income",
        {"preferences": Preferences(fallback_income=float("nan"))},
    ),
    ("name-missing", "one_offs[0].item", {"one_offs": (OneOff(" ", 2030, 1.0),)}),
    ("tax-rules-unknown", "tax_rules", {"tax_rules": "us-federal-2062"}),
    ("tax-own-missing", "tax_rules", {"tax_rules": "own"}),
    ("rate-range", "extra_income_tax_rate", {"extra_income_tax_rate": 0.9}),
    (
        "bracket-start",
        "own_tax.brackets[0].start",
        {"own_tax": OwnTaxRules(brackets=(("single", 5.0, 0.1),))},
    ),
    (
        "bracket-twice",
        "own_tax.brackets[2].start",
        {"own_tax": replace(OWN_TAX, brackets=(*OWN_TAX.brackets, ("single", 10_000.0, 0.3)))},
    ),
    (
        "tax-status-missing",
        "own_tax.brackets",
        {"tax_rules": "own", "own_tax": OwnTaxRules(brackets=(("couple", 0.0, 0.1),))},
    ),
    (
        "divisors-missing",
        "own_tax.minimum_distribution_age",
        {"own_tax": OwnTaxRules(minimum_distribution_age=72.0)},
    ),
    ("divisor-range", "own_tax.divisors[0].divisor", {"own_tax": OwnTaxRules(divisors=((72, 0.5),))}),
    (
        "divisors-order",
        "own_tax.divisors[1].age",
        {"own_tax": OwnTaxRules(divisors=((72, 20.0), (71, 19.0)))},
    ),
    (
        "life-table-ages",
        "own_life_table.ages[1]",
        {"own_life_table": OwnLifeTable((60, 62), (0.1, 0.1), (0.1, 0.1))},
    ),
    ("probability-range", "own_life_table.men[0]", {"own_life_table": OwnLifeTable((60,), (0.1,), (1.1,))}),
    ("history-years", "history.years[1]", {"history": History((2000, 2002), (0.0, 0.0), ((0, 0), (0, 0)))}),
    ("history-shape", "history.returns[0]", {"history": History((2000,), (0.0,), ((0.0,),))}),
    ("amount-negative", "last_year.spent", {"last_year": LastYear(spent=-1.0)}),
]

WARNINGS = [
    ("no-mortality-adjustment", "people[0].mortality_multiplier", {}),
    ("plan-to-age-past", "people[0].plan_to_age", {"people": (replace(ANA, plan_to_age=70.0),)}),
    ("cost-basis-above-balance", "accounts[0].cost_basis", {"accounts": (replace(DEPOSIT, cost_basis=3e5),)}),
    (
        "cost-basis-ignored",
        "accounts[0].cost_basis",
        {"accounts": (replace(DEPOSIT, type=AccountType.TAX_FREE, cost_basis=1.0),)},
    ),
    ("paid-in-open-end", "accounts[0].paid_in", {"accounts": (replace(DEPOSIT, paid_in=1.0),)}),
    (
        "paid-in-past",
        "accounts[0].paid_in_until_age",
        {"accounts": (replace(DEPOSIT, paid_in=1.0, paid_in_until_age=70.0),)},
    ),
    ("income-over", "incomes[0].to_age", {"incomes": (replace(PENSION, to_age=70.0),)}),
    (
        "partner-missing",
        "incomes[0].continues_to_partner",
        {"incomes": (replace(PENSION, continues_to_partner=0.5),)},
    ),
    ("start-age-past", "start_choices[0].start_age", {"start_choices": (StartChoice("Pension", 70, 1.0),)}),
    ("ceiling-below-wanted", "spending.ceiling", {"spending": Spending(10.0, 30.0, 20.0)}),
    ("essentials-above-means", "spending.essential", {"spending": Spending(90_000.0)}),
    ("inflation-high", "markets.inflation", {"markets": market(inflation=0.2)}),
    (
        "return-high",
        "markets.asset_classes[0].expected_return",
        {"markets": market(asset_classes=(AssetClass("Bonds", 0.121, 0.05), CLASSES[1]))},
    ),
    (
        "deviation-high",
        "markets.asset_classes[0].standard_deviation",
        {"markets": market(asset_classes=(AssetClass("Bonds", 0.04, 0.7), CLASSES[1]))},
    ),
    ("cost-high", "portfolios[0].yearly_cost", {"portfolios": (Portfolio("P", (0.5, 0.5), 0.031),)}),
    ("fallback-high", "preferences.fallback_income", {"preferences": Preferences(fallback_income=5_001.0)}),
    ("gamble-conflict", "preferences.risk_aversion", {"preferences": Preferences(4.0, True, True)}),
    ("no-local-tax", "extra_income_tax_rate", {"tax_rules": "us-federal-2026"}),
]


@pytest.mark.parametrize(("code", "where", "changes"), ERRORS, ids=[f"{e[0]} {e[1]}" for e in ERRORS])
def test_a_broken_rule_refuses_the_household(code, where, changes):
    with pytest.raises(InputError) as refused:
        single(**changes)
    assert (code, where, "error") in [(d.code, d.where, d.severity) for d in refused.value.diagnostics]


@pytest.mark.parametrize(("code", "where", "changes"), WARNINGS, ids=[w[0] for w in WARNINGS])
def test_what_is_unusual_is_a_warning(code, where, changes):
    found = [(d.code, d.where, d.severity) for d in problems(single(**changes))]
    assert (code, where, "warning") in found


def test_every_problem_is_found_at_once():
    with pytest.raises(InputError) as refused:
        single(currency="DOL", spending=Spending(-5.0), accounts=(), adviser_fee=0.5)
    codes = {d.code for d in refused.value.diagnostics if d.severity == "error"}
    assert codes >= {"currency-unknown", "essential-not-positive", "accounts-missing", "rate-range"}


def test_only_a_taxable_account_can_be_joint():
    accounts = (Account("Pot", "joint", AccountType.TAX_DEFERRED, 1e5),)
    with pytest.raises(InputError, match="joint-not-taxable"):
        couple(accounts=accounts, spending=Spending(50_000.0))


def test_near_miss_is_named():
    with pytest.raises(InputError, match="did you mean 'Lin'"):
        single(accounts=(replace(DEPOSIT, owner="Lim"),))


def test_weights_may_miss_one_by_a_millionth():
    """The tolerance stated in the rules, from both sides."""
    single(portfolios=(Portfolio("P", (0.5, 0.5 + 0.9e-6)),))
    with pytest.raises(InputError, match="weights-sum"):
        single(portfolios=(Portfolio("P", (0.5, 0.5 + 1.1e-6)),))


def test_correlations_that_cannot_hold_together():
    """Three classes, each pair at -0.6: the smallest eigenvalue is 1 - 2 * 0.6 = -0.2."""
    classes = tuple(AssetClass(name, 0.05, 0.1) for name in "abc")
    matrix = tuple(tuple(1.0 if i == j else -0.6 for j in range(3)) for i in range(3))
    with pytest.raises(InputError, match=r"correlation-impossible") as refused:
        single(
            markets=MarketAssumptions(0.025, classes, matrix),
            portfolios=(Portfolio("P", (1.0, 0.0, 0.0)),),
        )
    assert "-0.2000" in str(refused.value)


@pytest.mark.parametrize(
    ("third", "second", "expected"),
    [(False, False, 5.0), (False, True, 2.7), (True, False, 1.4), (True, True, 0.8)],
)
def test_income_gambles_lie_within_the_published_groups(third, second, expected):
    """Barsky et al. (1997), table I: above 3.76, 2 to 3.76, 1 to 2, below 1."""
    groups = {5.0: (3.76, 99), 2.7: (2, 3.76), 1.4: (1, 2), 0.8: (0, 1)}
    value = risk_aversion_from_gambles(third, second)
    assert value == expected
    assert groups[expected][0] < value < groups[expected][1]


def test_level_means_of_savings_at_a_return_equal_to_inflation():
    """With the real return 0 the level amount is savings / years + pension: 250,000 / 10 + 14,000."""
    from planner.household_rules import level_means

    household = single(
        markets=MarketAssumptions(0.02, (AssetClass("Cash", 0.02, 0.0),), ((1.0,),)),
        portfolios=(Portfolio("P", (1.0,)),),
        adviser_fee=0.0,
    )
    assert household.people[0].age_on(household.plan_date) == 80
    assert level_means(household) == pytest.approx(39_000, rel=1e-12)  # rounding only


def test_every_code_tried_here_is_in_the_table():
    assert {case[0] for case in (*ERRORS, *WARNINGS)} <= set(CODES)


RULE_MODULES = ("household_rules", "assumption_rules", "situation_rules", "checks", "scenarios")


def test_codes_in_the_program_are_those_in_the_table():
    """Both ways, for the modules about the household and its workbook."""
    root = Path(__file__).parents[1] / "planner"
    sources = [root / f"{name}.py" for name in RULE_MODULES]
    sources += sorted((root / "workbook").glob("*.py"))
    text = "\n".join(path.read_text("utf-8") for path in sources)
    used = set(re.findall(r'(?:Diagnostic|CellProblem|refuse|say)\(\s*"([a-z-]+)"', text))
    assert used <= set(CODES)
    assert {code for code in CODES if f'"{code}"' not in text} == set()

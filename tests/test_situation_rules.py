"""Cautions that a client's situation calls for, and a country added as one file."""

from dataclasses import replace
from datetime import date

import pytest
from households import couple, single

from planner import shipped, taxes
from planner.household import Account, AccountType, Person, Preferences, Spending, problems
from planner.tax_provisions import Allowance

UK = {"tax_rules": "uk-2025-26", "currency": "GBP"}
POT = Account("Pot", "Lin", AccountType.TAX_DEFERRED, 200_000.0)


def said(household):
    return {problem.code: problem for problem in problems(household)}


@pytest.mark.parametrize(
    ("rules", "day", "is_old"),
    [
        ("us-federal-2025", date(2025, 12, 31), False),
        ("us-federal-2025", date(2026, 1, 1), True),
        ("us-federal-2026", date(2024, 1, 1), False),
        ("uk-2025-26", date(2026, 4, 5), False),
        ("uk-2025-26", date(2026, 4, 6), True),
        ("none", date(2090, 1, 1), False),
    ],
)
def test_rules_older_than_the_plan_year(rules, day, is_old):
    people = (Person("Lin", date(day.year - 80, 1, 1), "female", "us-ssa-2022", 0.9),)
    household = single(tax_rules=rules, plan_date=day, people=people)
    assert ("tax-rules-old" in said(household)) == is_old


def test_a_scottish_client_is_told_that_the_bands_are_not_his():
    problem = said(single(**UK))["no-local-tax"]
    assert "a Scottish taxpayer's bands are not these" in problem.message
    assert "Scottish" not in said(single(tax_rules="us-federal-2026"))["no-local-tax"].message
    assert any("Scottish" in note for note in taxes.load("uk-2025-26").notes)


def test_a_minimum_above_the_bills():
    """290,000 / 25.5 is about 11,400; beyond incomes of 46,000 the bills take 6,000, then 46,000."""
    frugal = replace(couple(), spending=Spending(52_000.0))
    assert "minimum-above-needs" in said(frugal)
    assert "minimum-above-needs" not in said(replace(frugal, spending=Spending(92_000.0)))
    assert "minimum-above-needs" not in said(replace(frugal, tax_rules="none"))


def test_paying_in_after_first_access():
    paying = replace(POT, paid_in=5_000.0, paid_in_until_age=85.0)
    assert "paid-in-after-access" in said(single(accounts=(paying,), **UK))
    assert "paid-in-after-access" not in said(single(accounts=(POT,), **UK))
    young = (Person("Lin", date(1976, 1, 1), "female", "us-ssa-2022", 0.9),)
    assert "paid-in-after-access" not in said(single(accounts=(paying,), people=young, **UK))
    drawn_on = replace(paying, taken_this_year=1_000.0)
    assert "paid-in-after-access" in said(single(accounts=(drawn_on,), people=young, **UK))


def test_pension_money_in_the_estate():
    assert "estate-without-rate" in said(single(accounts=(POT,), **UK))
    assert "estate-without-rate" not in said(single(**UK))  # no tax-deferred money
    taxed = Preferences(heirs_tax_rate=0.4)
    assert "estate-without-rate" not in said(single(accounts=(POT,), preferences=taxed, **UK))


NEW_COUNTRY = """
title = "Freedonia, income tax 2026"
publisher = "Ministry of Finance of Freedonia (invented)"
source = "invented for this test"
year = 2026
taxed = "each person"

[bands]
single = { from = [0, 10000, 40000], rate = [0.0, 0.2, 0.4] }

[minimum_distributions]
source = "invented"
first_age = 75
divisors = [20, 19, 18]
starting_age = [{ born_from = 1900, age = 75 }]

[[worked_case]]
label = "pension of 50000"
source = "0.2 x 30,000 + 0.4 x 10,000"
tax = 10000.0
person = [{ age = 70, pension = 50000 }]
"""


def test_rules_added_as_one_file(tmp_path, monkeypatch):
    """A file in the folder is all it takes: it is listed, its worked cases run, a household uses it."""
    (tmp_path / "freedonia-2026.toml").write_text(NEW_COUNTRY, encoding="utf-8")
    monkeypatch.setattr(taxes, "_folder", lambda: tmp_path)
    monkeypatch.setattr(shipped, "tax_rule_names", lambda: ("freedonia-2026",))
    assert [rules.title for rules in taxes.describe()] == ["Freedonia, income tax 2026"]
    rules = taxes.load("freedonia-2026")
    (case,) = rules.worked_cases
    found = rules.first_year_tax(case.people, withdrawal=0.0, law_year=2026, together=False)
    assert found == pytest.approx(case.tax, abs=0.005)  # to the cent
    assert said(single(tax_rules="freedonia-2026")).keys() == {"no-local-tax", "no-mortality-adjustment"}
    from planner.problem_building import build_problem

    assert build_problem(single(tax_rules="freedonia-2026")).minimum_share[0, 0] == pytest.approx(1 / 18)


def test_a_misspelt_key_in_rules_is_named(tmp_path):
    with pytest.raises(ValueError, match="minimum_above_neds"):
        taxes.parse("x", NEW_COUNTRY + '\n[cautions]\nminimum_above_neds = "x"\n')


def test_an_allowance_is_given_in_the_years_of_its_law():
    allowance = Allowance("x", {"single": 1.0}, per_person=True, from_age=65, first_year=2025, last_year=2028)
    given = [allowance.times((64, 65, 66), year) for year in (2024, 2025, 2028, 2029)]
    assert given == [0, 2, 2, 0]
    once = Allowance("x", {"single": 1.0})  # to those assessed together, whatever their ages and the year
    assert [once.times(ages, 1900) for ages in ((30,), (64, 66))] == [1, 1]
    assert (once.reduced_by, once.indexing.real_factor(2026, 10, 0.1)) == (0.0, 1.0)

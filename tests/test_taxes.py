import io
import itertools
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from planner.diagnostics import InputError
from planner.household import IncomeKind, OwnTaxRules, SurchargeStep
from planner.tax_provisions import Allowance, Bands, Indexing, MinimumDistributions, PartlyTaxedBenefits
from planner.taxes import TaxedPerson, TaxRules, available, describe, load, none, own, parse, rate_and_room

STATE, PENSION = IncomeKind.STATE_PENSION, IncomeKind.PENSION
CASES = [(name, case) for name in available() for case in load(name).worked_cases]
# Composed and direct formulas differ by roundings of amounts up to 10^7.
ROUNDING = 1e-6


def person(age=70, *incomes, share=1.0, other=0.0, taxable=1.0):
    return TaxedPerson(
        age, 1950, tuple((kind, amount, None) for kind, amount in incomes), other, share, taxable
    )


def couple(*people):
    return [TaxedPerson(p.age, p.birth_year, p.incomes, p.other_taxable, 0.5, 1.0) for p in people]


def tax_of(rules, people, law_year=2026, years_ahead=0, inflation=0.0, together=True, **extra):
    return rules.withdrawal_tax(
        people, law_year=law_year, years_ahead=years_ahead, inflation=inflation, together=together, **extra
    )


def code_of(raised):
    return [d.code for d in raised.value.diagnostics]


# --- worked cases and outside checks ---------------------------------------------------------


@pytest.mark.parametrize(("name", "case"), CASES, ids=[f"{name}: {case.label}" for name, case in CASES])
def test_worked_cases_to_the_cent(name, case):
    rules = load(name)
    tax = rules.first_year_tax(
        case.people,
        withdrawal=case.withdrawal,
        realised_gains=case.gains,
        yields=case.yields,
        law_year=case.law_year,
        together=case.together,
    )
    assert round(tax, 2) == case.tax
    if case.gains == case.yields == 0.0:
        composed = tax_of(rules, case.people, case.law_year, together=case.together)
        assert round(float(composed(case.withdrawal)), 2) == case.tax


@pytest.mark.parametrize(
    ("status", "benefits", "other", "taxable"),
    [("single", 5_980.0, 28_990.0, 2_990.0), ("couple", 10_000.0, 40_500.0, 6_275.0)],
)
def test_taxable_benefits_of_publication_915(status, benefits, other, taxable):
    """IRS Publication 915, Worksheet 1 examples (from memory; Tax-Calculator gives the same)."""
    rule = load("us-federal-2025").benefits
    part = rule.taxable_part(benefits, status, 1.0)
    assert float(part(other + rule.counted * benefits)) == pytest.approx(taxable, abs=0.005)


@pytest.mark.parametrize("year", [2025, 2026])
def test_federal_tax_equals_tax_calculator(year):
    """Invented households against the open microsimulation model taxcalc, to the cent.

    Its tax holds no credits here; the alternative minimum tax, which the rules leave out, is taken off.
    """
    pytest.importorskip("taxcalc")
    n = 500
    random = np.random.default_rng(year)
    joint = random.random(n) < 0.5
    ages = random.integers(62, 95, (n, 2))
    benefits = np.round(random.uniform(0.0, 45_000.0, (n, 2)) * (random.random((n, 2)) < 0.8))
    benefits[~joint, 1] = 0.0
    withdrawal = np.round(np.exp(random.uniform(8.0, 13.5, n)))
    gains = np.round(np.exp(random.uniform(7.0, 12.5, n))) * (random.random(n) < 0.4)
    interest = np.round(random.uniform(0.0, 20_000.0, n)) * (random.random(n) < 0.4)
    columns = {
        "RECID": np.arange(1, n + 1),
        "MARS": np.where(joint, 2, 1),
        "XTOT": np.where(joint, 2, 1),
        "age_head": ages[:, 0],
        "age_spouse": np.where(joint, ages[:, 1], 0),
        "e02400": benefits.sum(axis=1),
        "e01500": withdrawal,
        "e01700": withdrawal,
        "p23250": gains,
        "e00300": interest,
    }
    table = io.StringIO()
    np.savetxt(table, np.stack(list(columns.values()), 1), "%d", ",", header=",".join(columns), comments="")
    run = subprocess.run(
        [sys.executable, str(Path(__file__).parent / "reference" / "tax_calculator.py"), str(year)],
        input=table.getvalue(),
        capture_output=True,
        text=True,
        check=True,
        env=os.environ | {"NUMBA_DISABLE_JIT": "1"},
    )
    tax, alternative_minimum = np.loadtxt(io.StringIO(run.stdout), delimiter=",", skiprows=1, unpack=True)
    assert (alternative_minimum > 0.0).sum() < n / 100
    rules = load(f"us-federal-{year}")
    for i in range(n):
        share = 0.5 if joint[i] else 1.0
        people = [
            TaxedPerson(int(ages[i, j]), 0, ((STATE, benefits[i, j], None),), 0.0, share, 1.0)
            for j in range(2 if joint[i] else 1)
        ]
        ours = rules.first_year_tax(
            people,
            withdrawal=withdrawal[i],
            realised_gains=gains[i],
            yields=interest[i],
            law_year=year,
            together=True,
        )
        assert ours == pytest.approx(tax[i] - alternative_minimum[i], abs=0.01)


# --- the composed function against a formula written out by hand ------------------------------


def federal_tax_2026(withdrawal, benefits, other, status, ages, law_year, deflator, extra, on_benefits):
    """26 U.S.C. 1(j), 63, 86, 151(d)(5) with the amounts of Rev. Proc. 2025-32, as plain arithmetic."""
    joint = status == "couple"
    first, second = ((32_000, 44_000) if joint else (25_000, 34_000)) * np.array(deflator)
    provisional = withdrawal + other + benefits / 2
    lower = max(0.0, min(benefits / 2, (provisional - first) / 2))
    if provisional <= second:
        taxed = lower
    else:
        taxed = min(0.85 * benefits, 0.85 * (provisional - second) + min(lower, (second - first) / 2))
    total = max(0.0, withdrawal + other + taxed)
    older = sum(age >= 65 for age in ages)
    deduction = (32_200 if joint else 16_100) + older * (1_650 if joint else 2_050)
    if law_year <= 2028:
        above = max(0.0, total - (150_000 if joint else 75_000) * deflator)
        deduction += older * max(0.0, 6_000 * deflator - 0.06 * above)
    taxable = max(0.0, total - deduction)
    tops = (
        [24_800, 100_800, 211_400, 403_550, 512_450, 768_700]
        if joint
        else [12_400, 50_400, 105_700, 201_775, 256_225, 640_600]
    )
    tax, start = 0.0, 0.0
    for top, rate in zip([*tops, np.inf], [0.10, 0.12, 0.22, 0.24, 0.32, 0.35, 0.37], strict=True):
        tax += rate * max(0.0, min(taxable, top) - start)
        start = top
    return tax + extra * max(0.0, taxable - (0.0 if on_benefits else taxed))


@settings(deadline=None)
@given(
    benefits=st.floats(0, 90_000),
    other=st.floats(-30_000, 200_000),
    ages=st.lists(st.integers(60, 90), min_size=1, max_size=2),
    years_ahead=st.integers(0, 40),
    extra=st.sampled_from([0.0, 0.05]),
    on_benefits=st.booleans(),
)
def test_composed_federal_tax_is_the_statute_formula(benefits, other, ages, years_ahead, extra, on_benefits):
    inflation, law_year = 0.025, 2026 + years_ahead
    share = 1.0 / len(ages)
    people = [
        TaxedPerson(age, 1950, ((STATE, benefits * share, None),), other * share, share, 1.0) for age in ages
    ]
    composed = tax_of(
        load("us-federal-2026"),
        people,
        law_year,
        years_ahead,
        inflation,
        extra_rate=extra,
        extra_on_state_pensions=on_benefits,
    )
    status = "couple" if len(ages) == 2 else "single"
    withdrawals = np.append(composed.x + 0.37, np.linspace(0.0, 1.2e6, 41))
    direct = [
        federal_tax_2026(w, benefits, other, status, ages, law_year, 1.025**-years_ahead, extra, on_benefits)
        for w in withdrawals
    ]
    assert_allclose(composed(withdrawals), direct, rtol=0, atol=ROUNDING)


# --- laws, for every set that is shipped ------------------------------------------------------

SURCHARGED = own(
    OwnTaxRules(
        brackets=(
            ("single", 0.0, 0.1),
            ("single", 40_000.0, 0.3),
            ("couple", 0.0, 0.1),
            ("couple", 80_000.0, 0.3),
        ),
        surcharges=(
            SurchargeStep("single", 100_000.0, 900.0, 65.0),
            SurchargeStep("single", 150_000.0, 2_000.0, 65.0),
            SurchargeStep("couple", 200_000.0, 900.0, 65.0),
        ),
    )
)
ALL_RULES = [*map(load, available()), SURCHARGED]
households = st.lists(
    st.builds(
        lambda age, state, pension, other: person(age, (STATE, state), (PENSION, pension), other=other),
        st.integers(55, 100),
        st.floats(0, 60_000),
        st.floats(0, 150_000),
        st.floats(-20_000, 40_000),
    ),
    min_size=1,
    max_size=2,
)


@pytest.mark.parametrize("rules", ALL_RULES, ids=lambda rules: rules.name)
@settings(deadline=None)
@given(people=households, years_ahead=st.integers(0, 50), low=st.floats(0, 1e6), extra=st.floats(0, 1e6))
def test_tax_never_falls_and_no_marginal_rate_exceeds_one(rules, people, years_ahead, low, extra):
    if len(people) == 2:
        people = couple(*people)
    tax = tax_of(rules, people, rules.year + years_ahead, years_ahead, 0.03, extra_rate=0.05)
    below, above = tax([low, low + extra])
    jumps = tax.limit_from_right(tax.x) - tax(tax.x)
    assert below >= -ROUNDING
    assert above - below >= -ROUNDING
    assert above - below <= extra + jumps.sum() + ROUNDING
    assert (jumps >= -ROUNDING).all()
    assert tax.slopes.min() >= -ROUNDING
    assert tax.slopes.max() <= 1.0 + ROUNDING
    if not rules.surcharges:
        assert_allclose(jumps, 0.0, atol=ROUNDING)


@pytest.mark.parametrize("rules", ALL_RULES, ids=lambda rules: rules.name)
@settings(deadline=None)
@given(people=households, withdrawal=st.floats(0, 1e6), together=st.booleans(), on_state=st.booleans())
def test_first_year_without_gains_is_the_composed_tax(rules, people, withdrawal, together, on_state):
    if len(people) == 2:
        people = couple(*people)
    extra = {"extra_rate": 0.04, "extra_on_state_pensions": on_state}
    composed = tax_of(rules, people, rules.year, together=together, **extra)
    withdrawal += 0.00137  # off the round amounts at which a surcharge starts
    direct = rules.first_year_tax(
        people, withdrawal=withdrawal, law_year=rules.year, together=together, **extra
    )
    # A kink within a hundredth of a cent of another may be dropped as collinear.
    assert float(composed(withdrawal)) == pytest.approx(direct, abs=1e-4)


@pytest.mark.parametrize("rules", ALL_RULES, ids=lambda rules: rules.name)
@settings(deadline=None)
@given(people=households, withdrawal=st.floats(0, 3e5), gains=st.floats(0, 5e5), yields=st.floats(0, 1e5))
def test_gains_and_yields_never_lower_the_tax(rules, people, withdrawal, gains, yields):
    if len(people) == 2:
        people = couple(*people)

    def tax(**more):
        return rules.first_year_tax(people, withdrawal=withdrawal, law_year=rules.year, together=True, **more)

    assert tax() <= tax(yields=yields) + ROUNDING
    assert tax(yields=yields) <= tax(yields=yields, realised_gains=gains) + ROUNDING


@pytest.mark.parametrize("name", available())
def test_every_set_carries_its_source_and_worked_cases(name):
    rules = load(name)
    assert rules.title
    assert rules.publisher
    assert rules.source
    assert rules.checked
    assert rules.notes
    assert rules.worked_cases
    assert all(case.source for case in rules.worked_cases)
    row = next(row for row in describe() if row.name == name)
    assert (row.title, row.year, row.taxed) == (rules.title, rules.year, rules.taxed)


# --- single provisions ------------------------------------------------------------------------


def test_senior_deduction_ends_after_2028_and_loses_value_before():
    rules, age_70 = load("us-federal-2026"), [person(70)]
    at = 60_000.0  # in the 12 % bracket with and without
    real = [float(tax_of(rules, age_70, 2026 + t, t, 0.03)(at)) for t in range(4)]
    for t in (1, 2):
        assert real[t] - real[0] == pytest.approx(0.12 * 6_000 * (1 - 1.03**-t))
    assert real[3] - real[0] == pytest.approx(0.12 * 6_000)


def test_age_counts_for_the_additions_from_65():
    rules = load("us-federal-2026")
    young, old = (float(tax_of(rules, [person(age)])(60_000.0)) for age in (64, 65))
    assert young - old == pytest.approx(
        0.22 * (59_999 - 50_400 - 16_099) if False else 0.12 * (6_000 + 2_050)
    )


def test_thresholds_of_taxable_benefits_are_fixed_in_money():
    """In real terms the 34,000 falls, so each year more of the benefits is taxed on the same real income."""
    rules, people = load("us-federal-2026"), [person(64, (STATE, 20_000.0))]
    withdrawal = 28_000.0  # provisional income 38,000, still below the cap of 85 % after two years

    def tax(years):
        return float(tax_of(rules, people, 2030 + years, years, 0.02)(withdrawal))

    # taxed part .85 (P - C) + (C - B)/2 with C and B divided by 1.02^2; taxable income in the 12 % band
    change = (1 - 1.02**-2) * (0.85 * 34_000 - 0.5 * (34_000 - 25_000))
    assert tax(2) - tax(0) == pytest.approx(0.12 * change)


@pytest.mark.parametrize(
    ("law_year", "years_ahead", "factor"),
    [(2026, 0, 1.0), (2030, 4, 1.02**-4), (2035, 9, 1.02**-4), (2040, 2, 1.0)],
)
def test_a_freeze_ends(law_year, years_ahead, factor):
    assert Indexing(frozen_until=2030).real_factor(law_year, years_ahead, 0.02) == pytest.approx(
        factor, rel=1e-14
    )


def test_a_united_kingdom_allowance_is_frozen_and_tapered():
    rules = load("uk-2025-26")
    tax = tax_of(rules, [person(70, (PENSION, 90_000.0))], 2025)
    assert rate_and_room(tax, 0.0) == (pytest.approx(0.40), pytest.approx(10_000.0))
    assert rate_and_room(tax, 10_000.0) == (pytest.approx(0.60), pytest.approx(25_140.0))
    assert rate_and_room(tax, 35_140.0) == (pytest.approx(0.45), float("inf"))
    later = tax_of(rules, [person(70)], 2035, 10, 0.03)
    assert later.x[1] == pytest.approx(12_570 * 1.03**-5)


def test_a_married_couple_is_taxed_together_only_where_asked_and_allowed():
    federal, british = load("us-federal-2026"), load("uk-2025-26")
    people = couple(person(70, (PENSION, 80_000.0)), person(70))
    alone = [tax_of(federal, [TaxedPerson(70, 1950, p.incomes, 0.0, 1.0, 1.0)]) for p in people]
    apart = tax_of(federal, people, together=False)
    assert float(apart(40_000.0)) == pytest.approx(sum(float(t(20_000.0)) for t in alone))
    assert float(tax_of(federal, people)(40_000.0)) < float(apart(40_000.0)) - 1_000.0
    at = np.linspace(0, 3e5, 31)
    assert_allclose(tax_of(british, people)(at), tax_of(british, people, together=False)(at))


def test_shares_of_the_withdrawal_go_to_their_owners():
    rules = load("uk-2025-26")
    people = [
        TaxedPerson(70, 1955, ((PENSION, 50_000.0, None),), 0.0, 0.0, 1.0),
        TaxedPerson(70, 1955, (), 0.0, 1.0, 0.75),
    ]
    tax = tax_of(rules, people, 2025)
    assert float(tax(20_000.0) - tax(0.0)) == pytest.approx(0.2 * (15_000 - 12_570))


def test_a_taxable_share_overrides_the_treatment_of_a_kind():
    rules = load("us-federal-2026")
    share = [TaxedPerson(60, 1966, ((STATE, 40_000.0, 0.25), (IncomeKind.ANNUITY, 50_000.0, 0.5)))]
    plain = [person(60, (PENSION, 35_000.0))]
    assert_allclose(tax_of(rules, share)([0.0, 9e4]), tax_of(rules, plain)([0.0, 9e4]))


def test_extra_rate_spares_state_pensions_unless_told():
    rules = load("uk-2025-26")
    people = [person(70, (STATE, 12_000.0))]
    for on_state, base in ((True, 12_000 + 30_000 - 12_570), (False, 30_000 - 12_570)):
        extra = tax_of(rules, people, 2025, extra_rate=0.1, extra_on_state_pensions=on_state) - tax_of(
            rules, people, 2025
        )
        assert float(extra(30_000.0)) == pytest.approx(0.1 * base)


def test_total_income_does_not_fall_below_zero():
    rules = own(OwnTaxRules(brackets=(("single", 0.0, 0.2),)))
    tax = tax_of(rules, [person(60, (PENSION, 5_000.0), other=-15_000.0)])
    assert_allclose(tax([0.0, 10_000.0, 15_000.0]), [0.0, 0.0, 1_000.0], atol=1e-9)


def test_investment_surtax_is_on_the_lesser_of_income_and_excess():
    """26 U.S.C. 1411: 3.8 % of the lesser of 50,000 investment income and the excess over 200,000."""
    rules = load("us-federal-2026")

    def tax(withdrawal, gains, rules=rules):
        return rules.first_year_tax(
            [person(60)], withdrawal=withdrawal, realised_gains=gains, law_year=2026, together=True
        )

    assert tax(150_000.0, 50_000.0) - tax(150_000.0, 0.0) == pytest.approx(0.15 * 50_000)
    assert tax(180_000.0, 50_000.0) - tax(180_000.0, 0.0) == pytest.approx(0.15 * 50_000 + 0.038 * 30_000)
    assert tax(400_000.0, 50_000.0) - tax(400_000.0, 0.0) == pytest.approx(0.15 * 50_000 + 0.038 * 50_000)


# --- minimum distributions, access, taxable share ---------------------------------------------


@pytest.mark.parametrize("name", ["us-federal-2025", "us-federal-2026"])
@pytest.mark.parametrize(
    ("birth_year", "start"),
    [(1948, 72), (1950, 72), (1951, 73), (1958, 73), (1959, 73), (1960, 75), (1975, 75)],
)
def test_federal_minimum_distributions_start_by_birth_year(name, birth_year, start):
    rules = load(name)
    assert rules.minimum_distribution_age(birth_year) == start
    assert rules.minimum_distribution_divisor(start - 1, birth_year) is None
    assert rules.minimum_distribution_divisor(start, birth_year) is not None


def test_uniform_lifetime_table():
    """Treas. Reg. 1.401(a)(9)-9(c): 100,000 gives 3,773.58 at 73 and 4,950.50 at 80; 2.0 from 120."""
    rules = load("us-federal-2026")
    assert round(100_000 / rules.minimum_distribution_divisor(73, 1953), 2) == 3_773.58
    assert round(100_000 / rules.minimum_distribution_divisor(80, 1946), 2) == 4_950.50
    assert rules.minimum_distribution_divisor(72, 1950) == 27.4
    assert (
        rules.minimum_distribution_divisor(120, 1950) == rules.minimum_distribution_divisor(125, 1950) == 2.0
    )
    divisors = [rules.minimum_distribution_divisor(age, 1950) for age in range(72, 121)]
    assert all(late < early for early, late in itertools.pairwise(divisors))
    assert "31 December" in rules.minimum_distribution_due


@pytest.mark.parametrize("name", ["none", "uk-2025-26"])
def test_rules_without_minimum_distributions(name):
    assert load(name).minimum_distribution_divisor(90, 1935) is None
    assert load(name).minimum_distribution_due == ""


def test_access_age_rises_in_2028():
    rules = load("uk-2025-26")
    assert [rules.access_age(year) for year in (2025, 2027, 2028, 2050)] == [55, 55, 57, 57]
    assert load("us-federal-2026").access_age(2026) is None


@pytest.mark.parametrize(("pot", "free"), [(400_000.0, 100_000.0), (1_200_000.0, 268_275.0), (0.0, 0.0)])
def test_lump_sum_allowance(pot, free):
    assert pot * (1.0 - load("uk-2025-26").taxable_share(pot)) == pytest.approx(free)
    assert load("us-federal-2026").taxable_share(pot) == 1.0


# --- own rules --------------------------------------------------------------------------------


def test_no_brackets_is_no_tax():
    for rules in (none(), own(OwnTaxRules())):
        assert_allclose(tax_of(rules, [person(70, (PENSION, 5e4))])([0.0, 1e6]), 0.0)
    rates = OwnTaxRules(yield_rate=0.2, gains_rate=0.1)
    tax = own(rates).first_year_tax(
        [person(70)], withdrawal=1e5, realised_gains=1_000.0, yields=500.0, law_year=2026, together=True
    )
    assert tax == pytest.approx(200.0)


def test_own_brackets_serve_the_other_status_where_it_has_none():
    rules = own(OwnTaxRules(brackets=(("single", 20_000.0, 0.4), ("single", 0.0, 0.1))))
    people = couple(person(70), person(70))
    assert float(tax_of(rules, people)(30_000.0)) == pytest.approx(2_000 + 4_000)
    each = own(OwnTaxRules(taxed="each person", brackets=(("single", 0.0, 0.1), ("single", 20_000.0, 0.4))))
    assert float(tax_of(each, people)(30_000.0)) == pytest.approx(3_000)


def test_own_brackets_and_surcharges_by_status():
    """Each status has its own where both are given, in whatever order the rows stand."""
    rows = (("couple", 0.0, 0.2), ("single", 20_000.0, 0.4), ("single", 0.0, 0.1))
    steps = (SurchargeStep("couple", 50_000.0, 700.0), SurchargeStep("single", 40_000.0, 300.0))
    rules = own(OwnTaxRules(brackets=rows, surcharges=steps))
    assert_allclose(tax_of(rules, [person(70)])([30_000.0, 40_001.0]), [6_000.0, 10_300.4])
    assert_allclose(tax_of(rules, couple(person(70), person(70)))([40_001.0, 50_001.0]), [8_000.2, 10_700.2])


def test_surcharges_are_whole_costs_paid_by_each_person_of_age():
    for of_age in (65, 70):
        single = tax_of(SURCHARGED, [person(of_age)]) - tax_of(SURCHARGED, [person(64)])
        assert_allclose(
            single([100_000.0, 100_001.0, 150_000.0, 150_001.0]), [0.0, 900.0, 900.0, 2_000.0], atol=1e-9
        )
    both = tax_of(SURCHARGED, couple(person(70), person(66))) - tax_of(
        SURCHARGED, couple(person(60), person(64))
    )
    assert_allclose(both([200_000.0, 200_001.0]), [0.0, 1_800.0], atol=1e-9)
    one = tax_of(SURCHARGED, couple(person(70), person(60))) - tax_of(
        SURCHARGED, couple(person(60), person(64))
    )
    assert_allclose(one([200_000.0, 200_001.0]), [0.0, 900.0], atol=1e-9)


def test_a_surcharge_without_an_age_is_paid_once():
    rules = own(OwnTaxRules(surcharges=(SurchargeStep("couple", 50_000.0, 700.0),)))
    for people in (couple(person(50), person(70)), [person(70)]):  # singles have none of their own
        assert_allclose(tax_of(rules, people)([50_000.0, 50_001.0]), [0.0, 700.0])


def test_own_minimum_distributions():
    rules = own(OwnTaxRules(minimum_distribution_age=72, divisors=((75, 22.0), (70, 27.0))))
    assert [rules.minimum_distribution_divisor(age, 1960) for age in (71, 72, 76, 99)] == [
        None,
        27.0,
        22.0,
        22.0,
    ]
    assert own(OwnTaxRules(minimum_distribution_age=72)).minimum_distribution_divisor(80, 1960) is None
    without_age = own(OwnTaxRules(divisors=((75, 22.0), (76, 1.0))))  # due from the first row on
    assert without_age.minimum_distribution_age(1960) == 75
    assert [without_age.minimum_distribution_divisor(age, 1960) for age in (74, 75, 76)] == [None, 22.0, 1.0]


@pytest.mark.parametrize(
    ("rules", "code"),
    [
        (OwnTaxRules(brackets=(("single", 0.0, 0.1), ("single", 0.0, 0.2))), "tax-brackets-invalid"),
        (OwnTaxRules(brackets=(("single", 0.0, 10.0),)), "tax-brackets-invalid"),
        (OwnTaxRules(brackets=(("single", 0.0, 1.01),)), "tax-brackets-invalid"),
        (OwnTaxRules(brackets=(("couple", -5.0, 0.1),)), "tax-brackets-invalid"),
        (OwnTaxRules(divisors=((70, 0.0),)), "tax-divisors-invalid"),
        (OwnTaxRules(divisors=((70, 10.0), (70, 9.0))), "tax-divisors-invalid"),
    ],
)
def test_impossible_own_rules_are_refused(rules, code):
    with pytest.raises(InputError) as raised:
        own(rules)
    assert code_of(raised) == [code]
    assert [problem.where for problem in raised.value.diagnostics] == ["own_tax"]


def test_own_rates_of_nothing_and_of_everything_are_rates():
    rules = own(OwnTaxRules(brackets=(("single", 0.0, 0.0), ("single", 1_000.0, 1.0))))
    assert_allclose(tax_of(rules, [person(70)])([1_000.0, 1_500.0]), [0.0, 500.0])


# --- the files --------------------------------------------------------------------------------


def test_unknown_rules_name_the_near_miss():
    with pytest.raises(InputError) as raised:
        load("us-federal-2062")
    assert code_of(raised) == ["tax-rules-unknown"]
    assert "did you mean 'us-federal-20" in str(raised.value)
    with pytest.raises(InputError) as raised:
        load("zzz")
    assert all(name in str(raised.value) for name in available())


HEAD = 'title = "t"\npublisher = "p"\nsource = "s"\nyear = 2026\n'


@pytest.mark.parametrize(
    ("text", "found"),
    [
        ("year = 2026", "'title' is missing"),
        (HEAD + "ratez = 1", "ratez"),
        (HEAD + '[[allowance]]\nlabel = "a"\nsingle = 1\nper_preson = true', "per_preson"),
        (HEAD + "[bands]\nsingle = { from = [0, 10, 5], rate = [0.1, 0.2, 0.3] }", "increasing"),
    ],
)
def test_a_mistake_in_a_file_is_found(text, found):
    with pytest.raises(ValueError, match=found):
        parse("broken", text)


def test_exempt_and_partly_exempt_kinds():
    rules = parse(
        "t",
        HEAD
        + '[income]\n"state pension" = "exempt"\nannuity = 0.5\n'
        + "[bands]\nsingle = { from = [0], rate = [0.1] }",
    )
    tax = tax_of(rules, [person(70, (STATE, 1e4), (IncomeKind.ANNUITY, 1e4), (PENSION, 1e4))])
    assert float(tax(0.0)) == pytest.approx(1_500.0)


def test_a_tier_that_is_full_at_its_start():
    """Benefits so small that the lower tier fills before the upper threshold."""
    rule = PartlyTaxedBenefits(0.5, {"single": (25_000.0, 34_000.0)}, (0.5, 0.85))
    part = rule.taxable_part(1_000.0, "single", 1.0)
    assert_allclose(
        part([25_000.0, 26_000.0, 34_000.0, 34_200.0, 99_000.0]), [0.0, 500.0, 500.0, 670.0, 850.0]
    )


def test_rules_are_frozen():
    rules = TaxRules("n", "t", "p", "s", 2026, bands={"single": Bands((0.0,), (0.1,))})
    with pytest.raises(AttributeError):
        rules.year = 2027


def test_rules_of_which_nothing_is_said_tax_nothing():
    """Defaults: a law year from 1 January, everything in money of the year, no rate of any kind."""
    rules = TaxRules("n", "t", "p", "s", 2026)
    assert (rules.year_starts, rules.taxed, rules.age_at) == ((1, 1), "together", "plan date")
    assert (rules.checked, rules.notes, rules.regional) == ("", (), "")
    assert rules.taxable_share(1e5) == 1.0
    assert (rules.yield_rate, rules.gains_rate, rules.investment_surtax_rate) == (0.0, 0.0, 0.0)
    assert rules.minimum_distribution_age(1950) is None
    tax = rules.first_year_tax(
        [person(70)], withdrawal=1e5, realised_gains=1e5, yields=1e4, law_year=2026, together=True
    )
    assert tax == 0.0


def test_the_extra_rate_spares_state_pensions_alone_and_by_default():
    """5 % of what a pension of 20,000 exceeds the allowance of 12,570 by; nothing of a state pension."""
    rules = load("uk-2025-26")
    for kind, due in ((PENSION, 0.05 * (20_000 - 12_570)), (STATE, 0.0)):
        people = [person(70, (kind, 20_000.0))]
        without, extra = ({}, {"extra_rate": 0.05})
        composed = [float(tax_of(rules, people, **options)(0.0)) for options in (without, extra)]
        year = {"withdrawal": 0.0, "law_year": 2026, "together": True}
        direct = [rules.first_year_tax(people, **year, **options) for options in (without, extra)]
        for found in (composed, direct):
            assert found[1] - found[0] == pytest.approx(due, abs=1e-9)


def test_gains_and_yields_of_people_taxed_apart_are_taxed_once():
    """At the planning rates of 18 % and 8.75 %, whether one or two are assessed; a loss is nothing."""
    rules = load("uk-2025-26")
    year = {"withdrawal": 0.0, "law_year": 2026, "together": True}
    for people in ([person(70)], couple(person(70), person(70))):
        tax = rules.first_year_tax(people, realised_gains=10_000.0, yields=4_000.0, **year)
        assert tax == pytest.approx(1_800.0 + 350.0)
        assert rules.first_year_tax(people, realised_gains=-10_000.0, yields=-4_000.0, **year) == 0.0


def test_bands_for_gains_without_a_surtax():
    """Gains lie on top of income: of 20,000 half at 0 %, half at 20 %; interest is income."""
    text = (
        HEAD + "[bands]\nsingle = { from = [0], rate = [0.1] }\n"
        "[gains]\nsingle = { from = [0, 40000], rate = [0.0, 0.2] }"
    )
    rules = parse("t", text)
    year = {"withdrawal": 30_000.0, "law_year": 2026, "together": True}
    assert rules.first_year_tax([person(70)], realised_gains=20_000.0, **year) == pytest.approx(5_000.0)
    assert rules.first_year_tax([person(70)], yields=1_000.0, **year) == pytest.approx(3_100.0)
    alone = rules.first_year_tax([person(70)], realised_gains=20_000.0, **(year | {"withdrawal": 0.0}))
    assert alone == pytest.approx(0.0, abs=1e-9)


def test_what_the_law_does_not_index_falls_in_real_terms():
    """Ten years at 2 %: bands, surcharges and tiers of benefits begin where 1.02^-10 of their money is."""
    left = 1.02**-10
    text = (
        HEAD + "[bands]\nindexed = false\nsingle = { from = [0, 10000], rate = [0.0, 0.2] }\n"
        '[surcharges]\nindexed = false\n[[surcharge]]\nstatus = "single"\n'
        "income_above = 50000\nextra_cost = 700"
    )
    tax = tax_of(parse("t", text), [person(70)], 2036, 10, 0.02)
    assert_allclose(tax([10_000.0 * left, 20_000.0]), [0.0, 0.2 * (20_000 - 10_000 * left)], atol=1e-9)
    rise = 0.2 * 1.0 + 700.0  # one unit more, and the surcharge
    assert float(tax(50_000.0 * left + 1.0) - tax(50_000.0 * left)) == pytest.approx(rise)
    for_good = Indexing(indexed=False, frozen_until=2030)  # never raised, whatever else is said
    for indexing in (for_good, PartlyTaxedBenefits(0.5, {}, ()).indexing):
        assert indexing.real_factor(2036, 10, 0.02) == pytest.approx(left, rel=1e-14)


def test_nothing_is_due_before_the_first_row_of_a_table():
    """Neither by those born before the first birth year nor at an age below the first divisor."""
    due = MinimumDistributions(((1950, 72.0),), ((75, 20.0), (76, 19.0)))
    assert due.starting_age(1949) is None
    assert due.divisor(80, 1949) is None
    assert [due.divisor(age, 1950) for age in (71, 72, 75, 76, 99)] == [None, None, 20.0, 19.0, 19.0]


def test_an_allowance_for_the_old_is_not_given_to_the_young():
    allowance = Allowance("x", {"single": 1.0, "couple": 1.0}, from_age=65)
    assert [allowance.times(ages, 2026) for ages in ((60, 64), (60, 65), (65, 70))] == [0, 1, 1]


def test_what_a_worked_case_may_say():
    text = (
        HEAD + '[[worked_case]]\nlabel = "l"\nsource = "s"\nlaw_year = 2024\ntogether = false\n'
        "withdrawal = 5\ngains = 6\nyields = 7\ntax = 8\n"
        "person = [{ age = 70, pension = 1 }, { age = 60, withdrawal_share = 0.3 }]"
    )
    (case,) = parse("t", text).worked_cases
    assert (case.law_year, case.together) == (2024, False)
    assert (case.withdrawal, case.gains, case.yields, case.tax) == (5.0, 6.0, 7.0, 8.0)
    assert [(p.age, p.birth_year, p.withdrawal_share) for p in case.people] == [
        (70, 1954, 0.5),
        (60, 1964, 0.3),
    ]
    assert case.people[0].incomes == ((PENSION, 1.0, None),)

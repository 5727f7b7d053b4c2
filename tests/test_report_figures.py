"""Figures in words, and this year's money in whole units."""

from dataclasses import replace
from datetime import date

import plan_builder
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.reports.figures import (
    Money,
    add_up,
    age_words,
    day_words,
    listed,
    of_futures,
    one_year_after,
    percent,
    uses_letter_paper,
)
from planner.reports.year_money import investment_moves, tax_year_end, year_money


@pytest.mark.parametrize(
    ("currency", "exact", "about"),
    [
        ("USD", "$88,451", "$88,500"),
        ("GBP", "£88,451", "£88,500"),
        ("CHF", "CHF\N{NO-BREAK SPACE}88,451", "CHF\N{NO-BREAK SPACE}88,500"),
        ("JPY", "¥88,451", "¥90,000"),
    ],
)
def test_money_is_exact_for_instructions_and_rounded_for_projections(currency, exact, about):
    money = Money(currency)
    assert money.exact(88_450.6) == exact
    assert money.about(88_450.6) == about


def test_money_below_zero_and_nothing():
    money = Money("USD")
    assert money.exact(-7_729.4) == "\N{EN DASH}$7,729"
    assert money.about_cell(-49) == "\N{EN DASH}"
    assert money.exact(-0.2) == "$0"


@pytest.mark.parametrize(
    ("share", "words"),
    [
        (0.0, "no"),
        (1.0, "all"),
        (0.9, "9 of 10"),
        (0.905, "9 of 10"),
        (0.88, "88 of 100"),
        (0.94, "94 of 100"),
        (0.997, "more than 99 of 100"),
        (0.002, "fewer than 1 of 100"),
    ],
)
def test_chance_is_a_count_of_futures(share, words):
    assert of_futures(share) == words


@given(st.floats(0.01, 0.99))
def test_count_of_futures_is_within_a_point_of_the_chance(share):
    """Tenths are used within one point; hundredths round by half a point."""
    count, of = of_futures(share).split(" of ")
    assert abs(int(count) / int(of) - share) <= 0.01 + 1e-12


def test_a_chance_outside_0_to_1_is_refused():
    with pytest.raises(ValueError, match="between 0 and 1"):
        of_futures(1.2)


@given(st.lists(st.floats(-1e7, 1e7), min_size=1, max_size=12))
def test_parts_add_up_and_stay_within_a_unit(parts):
    total = round(sum(parts))
    amounts = add_up(parts, total)
    assert sum(amounts) == total
    # 1, plus what floating addition of amounts up to 1e8 may lose.
    assert all(abs(a - p) < 1 + 1e-6 for a, p in zip(amounts, parts, strict=True))


def test_parts_that_cannot_add_up_are_refused():
    with pytest.raises(ValueError, match="cannot be rounded"):
        add_up([1.0, 2.0], 7)


def test_dates_shares_ages_and_lists():
    assert day_words(date(2026, 3, 2), "USD") == "March 2, 2026"
    assert day_words(date(2026, 3, 2), "GBP") == "2 March 2026"
    assert one_year_after(date(2024, 2, 29)) == date(2025, 2, 28)
    assert percent(0.045) == "4.5%"
    assert percent(0.04) == "4%"
    assert percent(-0.0001) == "0%"
    assert age_words(66 + 8 / 12) == "66 years 8 months"
    assert listed(["a", "b", "c"]) == "a, b and c"
    assert uses_letter_paper("USD")
    assert not uses_letter_paper("GBP")


def test_year_money_adds_up_to_the_printed_spending():
    plan = plan_builder.build()
    year = year_money(plan)
    assert year.coming_in - year.tax - year.kept == year.spending
    assert sum(line.amount for line in year.lines) == year.coming_in
    assert year.spending == round(plan.this_year.spending)
    amounts = {line.label: line.amount for line in year.lines}
    for name, amount in plan.this_year.incomes:
        assert amounts[name] == amount  # whole amounts are printed as they are
    # Rounding moves an amount by less than a unit.
    assert abs(year.tax - plan.this_year.tax) < 1


@given(st.lists(st.floats(0, 90_000), min_size=3, max_size=3), st.floats(0, 20_000))
def test_year_money_adds_up_whatever_the_cents(amounts, tax):
    plan = plan_builder.build()
    incomes = tuple((f"income {i}", a) for i, a in enumerate(amounts))
    now = plan.this_year
    withdrawn = now.withdraw_taxable + now.withdraw_tax_deferred + now.withdraw_tax_free
    now = replace(
        now,
        incomes=incomes,
        income=sum(amounts),
        tax=tax,
        spending=sum(amounts) + withdrawn - tax - now.kept,
    )
    year = year_money(replace(plan, this_year=now))
    assert year.coming_in - year.tax - year.kept == year.spending


def test_money_that_is_not_itemised_gets_a_line():
    plan = plan_builder.build()
    now = replace(
        plan.this_year,
        income=plan.this_year.income - 24_000,
        spending=plan.this_year.spending - 24_000,
        tax=plan.this_year.tax,
    )
    lines = {line.label: line.amount for line in year_money(replace(plan, this_year=now)).lines}
    assert lines["Less one-off costs and sums paid in"] == -24_000


def test_moves_leave_out_what_is_withdrawn_and_converted():
    plan = plan_builder.build()
    ((source, target, amount),) = investment_moves(plan)
    account = next(a for a in plan.this_year.accounts if a.held_now == "Growth")
    assert (source, target) == ("Growth", "Balanced")
    # One account, one subtraction: exact up to floating point.
    assert amount == pytest.approx(account.balance - account.withdraw - account.convert, abs=1e-6)


def test_tax_year_ends_on_5_april_in_the_united_kingdom():
    assert tax_year_end(plan_builder.couple()) == date(2026, 12, 31)
    single = plan_builder.single()
    assert tax_year_end(single) == date(2026, 4, 5)
    assert tax_year_end(replace(single, plan_date=date(2026, 4, 6))) == date(2027, 4, 5)

"""Cells to values: what is accepted, what is refused and with which code."""

import math
from datetime import date, datetime

import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.household import Rise
from planner.workbook import parsing
from planner.workbook.data import Entry
from planner.workbook.layout_client import ACCOUNT_TYPES


def entry(value, is_percentage=False):
    return Entry("Sheet!A1", value, is_percentage)


def refused(parse, value, is_percentage=False):
    with pytest.raises(parsing.CellProblem) as problem:
        parse(entry(value, is_percentage))
    return problem.value.code


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (1250000, 1_250_000),
        ("$1,250,000", 1_250_000),
        ("1 250 000", 1_250_000),
        ("1\u00a0250\u00a0000", 1_250_000),
        ("£1,250,000.50", 1_250_000.5),
        ("1'250'000", 1_250_000),
        ("€ 900", 900),
        ("900 €", 900),
        ("USD 1,000", 1_000),
        ("1000 EUR", 1_000),
        ("-£14,400", -14_400),
        ("£-14,400", -14_400),
        ("−500", -500),
        (" 42 ", 42),
        ("0.5", 0.5),
    ],
)
def test_money(text, expected):
    assert parsing.money(entry(text)) == expected


@pytest.mark.parametrize(
    ("value", "code"),
    [
        ("£12.5k", "money-abbreviated"),
        ("1.2m", "money-abbreviated"),
        ("3 million", "money-abbreviated"),
        ("1.250.000", "money-separator"),
        ("1.250,00", "money-separator"),
        ("12,5", "money-separator"),
        ("1,25,000", "money-separator"),
        ("about 5", "not-money"),
        ("-", "not-money"),
        (True, "not-money"),
        (date(2026, 1, 1), "not-money"),
        (float("nan"), "not-money"),
        ("1e999", "not-money"),
    ],
)
def test_money_refused(value, code):
    assert refused(parsing.money, value) == code


def test_money_refuses_a_cell_formatted_as_a_percentage():
    assert refused(parsing.money, 0.035, is_percentage=True) == "not-money"


@pytest.mark.parametrize(
    ("value", "expected"),
    [(0.035, 0.035), ("3.5%", 0.035), ("0.035", 0.035), ("3.5 %", 0.035), (1, 1), (0, 0)],
)
def test_share(value, expected):
    assert parsing.share(entry(value)) == expected


def test_share_from_a_percentage_cell():
    assert parsing.share(entry(0.035, is_percentage=True)) == 0.035


@pytest.mark.parametrize("parse", [parsing.share, parsing.rate])
@pytest.mark.parametrize(("value", "is_percentage"), [(3.5, False), ("3.5", False), (3.5, True)])
def test_percent_trap_is_refused_with_the_near_miss(parse, value, is_percentage):
    with pytest.raises(parsing.CellProblem, match=r"did you mean 3\.5%\?") as problem:
        parse(entry(value, is_percentage))
    assert problem.value.code == "share-percent"


def test_a_bare_one_is_a_share_but_no_rate():
    assert parsing.share(entry(1)) == 1.0
    assert refused(parsing.rate, 1) == "share-percent"


def test_a_decimal_comma_is_refused_with_the_near_miss():
    with pytest.raises(parsing.CellProblem, match=r"did you mean 3\.5%\?"):
        parsing.share(entry("3,5%"))


@pytest.mark.parametrize(("value", "expected"), [(0.85, 0.85), ("85%", 0.85), (1.1, 1.1), ("110%", 1.1)])
def test_factor(value, expected):
    assert parsing.factor(entry(value)) == expected


def test_factor_without_its_percent_sign():
    assert refused(parsing.factor, 85) == "share-percent"


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        (date(1960, 5, 14), date(1960, 5, 14)),
        (datetime(1960, 5, 14, 12, 30), date(1960, 5, 14)),
        ("1960-05-14", date(1960, 5, 14)),
    ],
)
def test_date(value, expected):
    assert parsing.day(entry(value)) == expected


@pytest.mark.parametrize(
    "value",
    ["14/05/1960", "14.5.1960", "1960-02-30", "May 1960", 22050, True, date(1850, 1, 1), "3026-01-01"],
)
def test_date_refused(value):
    assert refused(parsing.day, value) == "not-a-date"


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        (66, 66),
        (66.5, 66.5),
        ("66", 66),
        ("66y8m", 66 + 8 / 12),
        ("66 years 8 months", 66 + 8 / 12),
        ("66y", 66),
    ],
)
def test_age(value, expected):
    assert parsing.age(entry(value)) == expected


@pytest.mark.parametrize("value", ["66y12m", "sixty", -1, 131, True, date(2026, 1, 1)])
def test_age_refused(value):
    assert refused(parsing.age, value) == "not-an-age"


@pytest.mark.parametrize("value", [2026.5, 26, "next year", date(2031, 1, 1), True])
def test_year_refused(value):
    assert refused(parsing.year, value) == "not-a-year"


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        ("prices", Rise("prices")),
        ("Prices", Rise("prices")),
        ("none", Rise("fixed", 0.0)),
        ("2%", Rise("fixed", 0.02)),
        (0.02, Rise("fixed", 0.02)),
        ("prices up to 2.5%", Rise("capped", 0.025)),
        ("prices, up to 0.025", Rise("capped", 0.025)),
    ],
)
def test_rise(value, expected):
    assert parsing.rise(entry(value)) == expected


@pytest.mark.parametrize(
    ("value", "code"),
    [
        (2, "share-percent"),
        ("prices up to 2.5", "share-percent"),
        ("price", "not-a-rise"),
        (True, "not-a-rise"),
    ],
)
def test_rise_refused(value, code):
    assert refused(parsing.rise, value) == code


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        ("taxable (general account)", "taxable"),
        ("TAXABLE", "taxable"),
        ("tax-deferred", "tax-deferred"),
        ("Tax deferred (pension)", "tax-deferred"),
        ("tax-free (ISA, Roth)", "tax-free"),
        ("tax free", "tax-free"),
        ("taxa", "taxable"),
    ],
)
def test_first_words_of_a_choice_suffice(value, expected):
    assert parsing.choice(entry(value), ACCOUNT_TYPES) == expected


@pytest.mark.parametrize("value", ["tax", "pension", ""])
def test_choice_refused(value):
    with pytest.raises(parsing.CellProblem) as problem:
        parsing.choice(entry(value), ACCOUNT_TYPES)
    assert problem.value.code == "choice-unknown"


@pytest.mark.parametrize(("value", "expected"), [("yes", True), ("N", False), (True, True), ("no", False)])
def test_yes_or_no(value, expected):
    assert parsing.yes_or_no(entry(value)) is expected


@pytest.mark.parametrize("value", [1, "perhaps"])
def test_yes_or_no_refused(value):
    assert refused(parsing.yes_or_no, value) == "not-yes-no"


def test_continuation():
    assert parsing.continuation(entry("Larger of the two")) == "larger of the two"
    assert parsing.continuation(entry("50%")) == 0.5
    assert refused(parsing.continuation, "half") == "not-a-share"


@given(
    st.decimals(0, 10**9, places=2),
    st.sampled_from([",", " ", "\u00a0", "'"]),
    st.sampled_from(["", "$", "£"]),
)
def test_money_written_with_separators_reads_back(amount, separator, sign):
    text = sign + f"{amount:,.2f}".replace(",", separator)
    assert parsing.money(entry(text)) == float(amount)


@given(st.integers(-10_000, 10_000))
def test_share_in_hundredths_of_a_percent_reads_back_exactly(hundredths):
    """Text, number and formatted cell are one value: float(decimal), not 3.5 / 100 rounded twice."""
    share = hundredths / 10_000
    assert parsing.share(entry(f"{hundredths / 100:.2f}%")) == share
    assert parsing.share(entry(repr(share))) == share
    assert parsing.share(entry(share, is_percentage=True)) == share


@given(st.integers(0, 129), st.integers(0, 11))
def test_age_in_years_and_months_reads_back(years, months):
    assert parsing.age(entry(f"{years}y{months}m")) == years + months / 12


@given(st.dates(date(1900, 1, 1), date(2199, 12, 31)))
def test_date_in_iso_text_reads_back(day):
    assert parsing.day(entry(day.isoformat())) == day


@given(st.text(max_size=20))
def test_no_text_breaks_a_parser(text):
    """Any text is either a value or a CellProblem with a code; nothing else escapes."""
    for parse in (
        parsing.money,
        parsing.share,
        parsing.rate,
        parsing.age,
        parsing.day,
        parsing.year,
        parsing.rise,
    ):
        try:
            value = parse(entry(text))
        except parsing.CellProblem:
            continue
        assert not isinstance(value, float) or math.isfinite(value)

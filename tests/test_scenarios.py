"""What-ifs by the workbook's own words."""

from datetime import date

import pytest
from client_workbooks import SAMPLES, minimal, saved

from planner.diagnostics import InputError
from planner.household import Rise
from planner.scenarios import changed, parse_change, plan_what_ifs
from planner.workbook.reading import read_workbook


@pytest.fixture(scope="module")
def couple():
    return read_workbook(SAMPLES / "couple_three_accounts.xlsx")


def with_change(read, address, value):
    return changed(read, [(address, value)]).household


def test_a_field_and_a_cell(couple):
    household = with_change(couple, "Spending/Essential spending a year", "52000")
    assert household.spending.essential == 52_000
    household = with_change(couple, "income/ANA'S  state pension/From  age", "70")
    assert household.incomes[0].from_age == 70
    assert couple.household.incomes[0].from_age == 67  # the workbook read stays as it is


@pytest.mark.parametrize(
    ("address", "value", "path", "expected"),
    [
        ("Household/Plan date", "2026-06-30", "plan_date", date(2026, 6, 30)),
        ("Markets/Inflation", "3.5%", "markets.inflation", 0.035),
        ("Markets/Shares/Bonds", "-0.2", "markets.correlations", ((1, -0.2, 0), (-0.2, 1, 0.2), (0, 0.2, 1))),
        ("Preferences/Wish to leave", "$100,000", "preferences.wish_to_leave", 100_000),
        ("Spending/Most you would spend a year", "90 000", "spending.ceiling", 90_000),
        ("Spending/80/Spending compared with now", "85%", "spending.age_profile", ((80.0, 0.85),)),
        ("Portfolios/Portfolio choice", "40 % shares", "portfolio_choice", "40 % shares"),
        ("Tax/Extra income tax rate", "", "extra_income_tax_rate", None),
        ("Spending/Cash kept aside", "", "spending.cash_aside", 0.0),
        ("People/Tom/Plan at least to age", "95", "people.1.plan_to_age", 95.0),
        ("People/Tom/Death rates compared with the table", "", "people.1.mortality_multiplier", 1.0),
        ("Income/Tom's works pension/Yearly rise", "none", "incomes.3.rise", Rise("fixed", 0.0)),
        ("One-offs/New roof/Amount", "-£30,000", "one_offs.1.amount", -30_000),
    ],
)
def test_changes_of_every_kind(couple, address, value, path, expected):
    found = with_change(couple, address, value)
    for part in path.split("."):
        found = found[int(part)] if part.isdigit() else getattr(found, part)
    assert found == expected


def test_an_optional_sheet_or_column_may_be_absent(tmp_path):
    def edit(workbook):
        del workbook["Preferences"]
        workbook["Income"].delete_cols(6)  # To age

    read = read_workbook(saved(tmp_path, edit=edit))
    assert with_change(read, "Preferences/Risk aversion", "2").preferences.risk_aversion == 2
    assert with_change(read, "Income/State pension/To age", "90").incomes[0].to_age == 90
    with pytest.raises(InputError, match="not-an-age"):
        with_change(read, "Income/State pension/To age", "later")


@pytest.mark.parametrize(
    ("address", "code", "near"),
    [
        ("Incme/State pension/From age", "address-unknown", "did you mean 'Income'"),
        ("Income/Anas state pension x/From age", "address-unknown", 'did you mean "Ana\'s state pension"'),
        ("Income/Ana's state pension/Frm age", "address-unknown", "did you mean 'From age'"),
        ("Spending/Essential", "address-unknown", "did you mean 'Essential spending a year'"),
        ("Accounts/Balance", "address-unknown", "Accounts/Row/Column"),
        ("Preferences/Row/Risk aversion", "address-unknown", "Preferences/Field"),
        ("Start choices/Ana's state pension/Start age", "address-ambiguous", "2 rows"),
        ("Spending", "address-malformed", "Sheet/Field"),
        ("Income//From age", "address-malformed", "Sheet/Field"),
    ],
)
def test_an_address_that_names_nothing(couple, address, code, near):
    with pytest.raises(InputError) as refused:
        with_change(couple, address, "1")
    assert [(d.code, d.where) for d in refused.value.diagnostics] == [(code, address)]
    assert near in str(refused.value)


def test_every_lost_address_is_named(couple):
    with pytest.raises(InputError) as refused:
        changed(couple, [("A/b", "1"), ("C/d", "2")])
    assert [d.where for d in refused.value.diagnostics] == ["A/b", "C/d"]


@pytest.mark.parametrize(
    ("address", "value", "code", "cell"),
    [
        ("Spending/Essential spending a year", "lots", "not-money", "Spending!B4"),
        ("Spending/Essential spending a year", "", "value-missing", "Spending!B4"),
        ("Accounts/Tom's rollover/Owner", "Tim", "owner-unknown", "Accounts!B9"),
        ("Portfolios/20 % shares/Shares", "50%", "weights-sum", "Portfolios!C11"),
        ("Markets/Inflation", "2.5", "share-percent", "Markets!B4"),
    ],
)
def test_the_changed_household_is_validated_as_a_read_one(couple, address, value, code, cell):
    with pytest.raises(InputError) as refused:
        with_change(couple, address, value)
    errors = [(d.code, d.where) for d in refused.value.diagnostics if d.severity == "error"]
    assert errors == [(code, cell)]


def test_warnings_are_those_of_the_changed_household(couple):
    read = changed(couple, [("Markets/Shares/Expected return", "13%")])
    assert [w.code for w in read.warnings] == ["return-high"]
    assert read.sha256 == couple.sha256


def test_row_names_may_hold_a_slash(tmp_path):
    values = minimal()
    values["Accounts"]["accounts"][1]["Account"] = "401/k plan"
    read = read_workbook(saved(tmp_path, values))
    assert with_change(read, "Accounts/401/k plan/Balance", "5").accounts[1].balance == 5


def test_the_workbooks_own_what_ifs(couple):
    scenarios = plan_what_ifs(couple)
    assert [name for name, _ in scenarios] == [
        "Ana's state pension at 70",
        "Prices rise faster",
        "Help with a first home",
    ]
    later, prices, help_ = (read.household for _, read in scenarios)
    assert (later.incomes[0].from_age, later.incomes[0].amount) == (70, 34_200)
    assert prices.markets.inflation == 0.035
    assert [one_off.in_the_plan for one_off in help_.one_offs] == [True, True, True]
    assert [one_off.in_the_plan for one_off in couple.household.one_offs] == [True, True, False]


def test_one_offs_of_one_item_form_one_what_if(tmp_path):
    what_if = {"Counts": "only as a what-if", "Amount": -1}
    rows = [{"Item": "Tour", "Year": year, **what_if} for year in (2027, 2031)]
    rows.append({"Item": "Boat", "Year": 2028, **what_if})
    read = read_workbook(saved(tmp_path, minimal() | {"One-offs": {"one-offs": rows}}))
    counted = [(name, [o.in_the_plan for o in r.household.one_offs]) for name, r in plan_what_ifs(read)]
    assert counted == [("Tour", [True, True, False]), ("Boat", [False, False, True])]


def test_new_values_keep_their_percentage(tmp_path):
    """A what-if's new value in a cell formatted as a percentage is 3.5%, not 0.035 retyped."""
    values = minimal() | {
        "What-ifs": {"what-ifs": [{"Name": "Prices", "Change": "Markets/Inflation", "New value": 0.035}]}
    }

    def edit(workbook):
        workbook["What-ifs"]["C7"].number_format = "0.0%"

    read = read_workbook(saved(tmp_path, values, edit))
    assert read.household.what_ifs[0].changes == (("Markets/Inflation", "3.5%"),)
    assert plan_what_ifs(read)[0][1].household.markets.inflation == 0.035


def test_change_as_typed_on_a_command_line():
    assert parse_change("Income/State pension/From age=70") == ("Income/State pension/From age", "70")
    assert parse_change("Practice/Firm= A=B ") == ("Practice/Firm", "A=B")
    with pytest.raises(InputError, match="address-malformed"):
        parse_change("Income/State pension/From age")

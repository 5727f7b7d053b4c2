"""Reading: labels anywhere, problems at their cells, warnings, names, defaults."""

from datetime import date

import openpyxl
import pytest
from client_workbooks import found, minimal, save, saved
from openpyxl.workbook import Workbook

from planner.diagnostics import InputError
from planner.household import AccountType, Preferences, Rise
from planner.workbook.reading import read_workbook


def test_minimal_household(tmp_path):
    read = read_workbook(saved(tmp_path))
    assert read.warnings == ()
    household = read.household
    assert household.client_name == "Sample"
    assert household.people[0].date_of_birth == date(1960, 5, 14)
    assert [a.type for a in household.accounts] == [AccountType.TAXABLE, AccountType.TAX_DEFERRED]
    assert household.markets.correlations == ((1.0, 0.1), (0.1, 1.0))
    assert household.portfolios[1].weights == (0.8, 0.2)
    assert household.preferences == Preferences()
    assert household.incomes[0].rise == Rise("prices")
    assert (household.portfolio_choice, household.couple_is) == (None, "married")
    assert len(read.sha256) == 64


def bare(sheets: dict[str, list[list[object]]], tmp_path):
    """Write plain sheets, as a person or another program might; no Excel table, no style."""
    workbook = Workbook()
    workbook.remove(workbook.worksheets[0])
    for name, rows in sheets.items():
        sheet = workbook.create_sheet(name)
        for row in rows:
            sheet.append(row)
    return save(workbook, tmp_path)


def plain() -> dict[str, list[list[object]]]:
    return {
        "household": [
            ["CLIENT  NAME:", "Sample"],
            ["tax rules", "none", "a note"],
            [],
            ["Currency", "usd"],
            ["Plan Date", "2026-01-01"],
        ],
        "People ": [
            ["Life  Table", "Notes", "SEX", "person", "Date of birth"],
            ["us-ssa-2022", "call first", "Female", "Ana", "1960-05-14"],
        ],
        "accounts": [
            ["Our clients' accounts"],
            [],
            ["", "Balance", "Type", "Account", "Owner"],
            [],
            ["", "$300,000", "taxable", "Bank", " ANA "],
            [],
            ["", 400_000, "Tax-deferred (pension pot)", "Pot", "ana"],
        ],
        "Spending": [["What they need"], [], ["", "Essential spending a year (bills)", 30_000]],
        "Markets": [
            ["Asset class", "Expected return", "Standard deviation", "Shares", "Bonds"],
            ["Shares", "6.5%", "16%", "", ""],
            ["Bonds", 0.04, 0.05, "10%", 1],
            [],
            ["Inflation", "2.5%"],
        ],
        "Portfolios": [["Bonds", "Portfolio", "Shares"], ["40%", "Mix", 0.6], [1, "Calm", None]],
    }


def test_labels_are_matched_by_words_wherever_they_stand(tmp_path):
    read = read_workbook(bare(plain(), tmp_path))
    assert [w.code for w in read.warnings] == ["no-mortality-adjustment"]
    household = read.household
    assert [a.balance for a in household.accounts] == [300_000, 400_000]
    assert {a.owner for a in household.accounts} == {"Ana"}
    assert household.portfolios[0].weights == (0.6, 0.4)
    assert household.markets.correlations == ((1.0, 0.1), (0.1, 1.0))
    assert household.markets.inflation == 0.025
    assert household.spending.essential == 30_000
    assert household.currency == "USD"


def change(values, *path_and_value):
    *path, last, value = path_and_value
    for key in path:
        values = values[key]
    values[last] = value


@pytest.mark.parametrize(
    ("path", "value", "expected"),
    [
        (("Household", "Currency"), "Dollars", ("currency-unknown", "Household!B6")),
        (("Household", "Tax rules"), "us-fed", ("tax-rules-unknown", "Household!B7")),
        (("Household", "Plan date"), "1/2/2026", ("not-a-date", "Household!B5")),
        (("Accounts", "accounts", 0, "Balance"), "£12.5k", ("money-abbreviated", "Accounts!D7")),
        (("Accounts", "accounts", 0, "Balance"), -1, ("amount-negative", "Accounts!D7")),
        (("Accounts", "accounts", 1, "Owner"), "Anna", ("owner-unknown", "Accounts!B8")),
        (("Accounts", "accounts", 1, "Owner"), "joint", ("joint-not-taxable", "Accounts!B8")),
        (("Accounts", "accounts", 1, "Account"), "bank", ("name-twice", "Accounts!A8")),
        (("Accounts", "accounts", 1, "Type"), None, ("value-missing", "Accounts!C8")),
        (("Accounts", "accounts", 1, "Held now"), "Bald", ("portfolio-unknown", "Accounts!F8")),
        (("Income", "incomes", 0, "From age"), "66y13m", ("not-an-age", "Income!E7")),
        (("Income", "incomes", 0, "Kind"), "salary", ("choice-unknown", "Income!C7")),
        (("Income", "incomes", 0, "Yearly rise"), 2, ("share-percent", "Income!G7")),
        (("Spending", "Essential spending a year"), "#N/A", ("cell-error", "Spending!B4")),
        (("Markets", "Inflation"), 2.5, ("share-percent", "Markets!B4")),
        (("Markets", "asset classes", 1, "Shares"), 0.3, ("correlation-asymmetric", "Markets!E10")),
        (("Markets", "asset classes", 0, "Bonds"), None, ("correlation-missing", "Markets!E10")),
        (("Markets", "asset classes", 0, "Shares"), 0.5, ("correlation-diagonal", "Markets!E9")),
        (("Portfolios", "portfolios", 0, "Shares"), 0.3, ("weights-sum", "Portfolios!C10")),
        (("Portfolios", "portfolios", 0, "Shares"), 20, ("share-percent", "Portfolios!C10")),
        (("Portfolios", "Portfolio choice"), "Clam", ("portfolio-unknown", "Portfolios!B5")),
        (("People", "people", 0, "Life table"), "uk-gompertz", ("life-table-unknown", "People!D7")),
        (("People", "people", 0, "Date of birth"), date(1900, 1, 1), ("age-above-table", "People!B7")),
    ],
)
def test_a_problem_is_named_at_its_cell_and_alone(tmp_path, path, value, expected):
    values = minimal()
    change(values, *path, value)
    errors = [place for place in found(saved(tmp_path, values)) if place[0] != "no-mortality-adjustment"]
    assert errors == [expected]


@pytest.mark.parametrize(
    ("sheet", "values", "expected"),
    [
        (
            "Preferences",
            {"Fallback income if savings are gone": 40_000},
            ("fallback-above-essential", "Preferences!B8"),
        ),
        ("Preferences", {"Risk aversion": "high"}, ("not-a-number", "Preferences!B4")),
        ("Tax", {"Extra income tax rate": 4}, ("share-percent", "Tax!B4")),
        (
            "Start choices",
            {"start choices": [{"Income": "Pensoin", "Start age": 70, "Amount a year": 1}]},
            ("income-unknown", "Start choices!A7"),
        ),
        (
            "One-offs",
            {"one-offs": [{"Item": "Roof", "Year": 2020, "Amount": -1}]},
            ("year-past", "One-offs!B7"),
        ),
        (
            "What-ifs",
            {"what-ifs": [{"Name": "A", "Change": "Incme/State pension/From age", "New value": 70}]},
            ("address-unknown", "What-ifs!B7"),
        ),
        (
            "What-ifs",
            {"what-ifs": [{"Name": "A", "Change": "Spending/Essential spending a year", "New value": "x"}]},
            ("what-if-invalid", "What-ifs!B7"),
        ),
        ("Last year", {"Spent": -5}, ("amount-negative", "Last year!B4")),
        (
            "History",
            {"history": [{"Year": 2000, "Inflation": 0.02, "Shares": 0.1}]},
            ("value-missing", "History!D7"),
        ),
    ],
)
def test_optional_sheets_are_validated_too(tmp_path, sheet, values, expected):
    assert found(saved(tmp_path, minimal() | {sheet: values})) == [expected]


def test_own_tax_rules_and_life_table_are_located(tmp_path):
    values = minimal()
    values["Household"]["Tax rules"] = "own"
    values["People"]["people"][0]["Life table"] = "own"
    values["Tax"] = {
        "brackets": [
            {"Status": "couple", "From": 0, "Rate": 0.1},
            {"Status": "single", "From": 500, "Rate": 0.1},
        ],
        "divisors": [{"Age": 72, "Divisor": 0.4}],
    }
    ages = [{"Age": age, "Women": 0.1, "Men": 0.1} for age in (60, 61, 63, 70)]
    values["Life table"] = {"life table": ages}
    assert set(found(saved(tmp_path, values))) == {
        ("bracket-start", "Tax!B16"),
        ("divisor-range", "Tax!F15"),
        ("life-table-ages", "Life table!A9"),
        ("life-table-ages", "Life table!A10"),
    }


def test_every_problem_in_one_run_without_follow_on_complaints(tmp_path):
    """A person's name that cannot be read does not make every owner unknown."""
    values = minimal()
    change(values, "People", "people", 0, "Person", None)
    change(values, "Household", "Plan date", "soon")
    change(values, "Markets", "Inflation", "#REF!")
    change(values, "Portfolios", "portfolios", 0, "Bonds", "lots")
    change(values, "Spending", "Essential spending a year", None)
    assert set(found(saved(tmp_path, values))) == {
        ("value-missing", "People!A7"),
        ("not-a-date", "Household!B5"),
        ("cell-error", "Markets!B4"),
        ("not-a-share", "Portfolios!D10"),
        ("value-missing", "Spending!B4"),
    }


def test_missing_and_misspelt_sheets(tmp_path):
    def edit(workbook):
        workbook["Portfolios"].title = "Portfolois"
        workbook["Income"].title = "Incomes"
        del workbook["Markets"]

    places = found(saved(tmp_path, edit=edit))
    assert set(places) == {
        ("sheet-unknown", "Portfolois"),
        ("sheet-unknown", "Incomes"),
        ("sheet-missing", "Portfolios"),
        ("sheet-missing", "Markets"),
    }
    with pytest.raises(InputError, match="'Portfolois' looks like it"):
        read_workbook(saved(tmp_path, edit=edit))


def test_misspelt_labels_and_columns(tmp_path):
    def edit(workbook):
        workbook["Household"]["A6"] = "Curency"
        workbook["Spending"]["A5"] = "Wnted spending a year"
        workbook["Spending"]["B5"] = 40_000
        workbook["Accounts"]["D6"] = "Balence"
        workbook["Accounts"]["E6"] = "Cost bassis"
        workbook["Portfolios"]["C9"] = "Share"

    path = saved(tmp_path, edit=edit)
    assert set(found(path)) == {
        ("label-missing", "Household!A6"),
        ("label-unknown", "Household!A6"),
        ("label-unknown", "Spending!A5"),
        ("column-missing", "Accounts!D6"),
        ("column-unknown", "Accounts!D6"),
        ("column-unknown", "Accounts!E6"),
        ("column-missing", "Portfolios!C9"),
        ("column-unknown", "Portfolios!C9"),
    }
    with pytest.raises(InputError) as refused:
        read_workbook(path)
    assert str(refused.value).count("did you mean") == 5


def test_a_misspelt_optional_label_is_only_a_warning(tmp_path):
    def edit(workbook):
        workbook["Spending"]["A5"] = "Wnted spending a year"
        workbook["Spending"]["B5"] = 40_000

    assert found(saved(tmp_path, edit=edit)) == [("label-unknown", "Spending!A5")]


def test_formula_with_and_without_a_stored_value(tmp_path):
    """A formula written by a program has no value; the second file has one, as a spreadsheet writes it."""
    import zipfile

    def edit(workbook):
        workbook["Accounts"]["D7"] = "=100000+200000"

    path = saved(tmp_path, edit=edit)
    assert found(path) == [("formula-not-computed", "Accounts!D7")]
    with zipfile.ZipFile(path) as zipped:
        parts = {name: zipped.read(name) for name in zipped.namelist()}
    name = next(n for n, text in parts.items() if b"<f>100000+200000</f>" in text)
    parts[name] = parts[name].replace(b"<f>100000+200000</f><v />", b"<f>100000+200000</f><v>300000</v>")
    parts[name] = parts[name].replace(b"<f>100000+200000</f><v/>", b"<f>100000+200000</f><v>300000</v>")
    with zipfile.ZipFile(path, "w") as zipped:
        for part, text in parts.items():
            zipped.writestr(part, text)
    assert read_workbook(path).household.accounts[0].balance == 300_000


def test_formula_that_gives_empty_text_is_a_blank(tmp_path):
    import zipfile

    def edit(workbook):
        workbook["Accounts"]["E7"] = '=IF(1=1,"","x")'

    path = saved(tmp_path, edit=edit)
    with zipfile.ZipFile(path) as zipped:
        parts = {name: zipped.read(name) for name in zipped.namelist()}
    name = next(n for n, text in parts.items() if b"IF(1=1" in text)
    before, after = parts[name].split(b'<c r="E7"', 1)
    parts[name] = before + b'<c r="E7" t="str"' + after
    with zipfile.ZipFile(path, "w") as zipped:
        for part, text in parts.items():
            zipped.writestr(part, text)
    assert read_workbook(path).household.accounts[0].cost_basis is None


@pytest.mark.parametrize(
    ("path", "value", "expected"),
    [
        (("Markets", "asset classes", 0, "Expected return"), 0.13, ("return-high", "Markets!B9")),
        (
            ("People", "people", 1, "Death rates compared with the table"),
            None,
            ("no-mortality-adjustment", "People!E8"),
        ),
        (("Spending", "Essential spending a year"), 90_000, ("essentials-above-means", "Spending!B4")),
        (("Household", "Tax rules"), "us-federal-2026", ("no-local-tax", "Tax!B4")),
    ],
)
def test_the_unusual_is_a_warning_and_does_not_stop(tmp_path, path, value, expected):
    values = minimal()
    change(values, *path, value)
    read = read_workbook(saved(tmp_path, values))
    assert [(w.code, w.where, w.severity) for w in read.warnings] == [(*expected, "warning")]


def test_high_fallback_income_is_a_warning(tmp_path):
    values = minimal() | {"Preferences": {"Fallback income if savings are gone": 7_501}}
    assert found(saved(tmp_path, values)) == [("fallback-high", "Preferences!B8")]


@pytest.mark.parametrize(
    ("answers", "expected", "codes"),
    [
        (("no", "no"), 5.0, []),
        (("no", "yes"), 2.7, []),
        (("yes", "no"), 1.4, []),
        (("yes", "yes"), 0.8, []),
        (("yes", None), 4.0, ["gamble-incomplete"]),
    ],
)
def test_two_answers_set_risk_aversion(tmp_path, answers, expected, codes):
    first, second = answers
    values = minimal() | {
        "Preferences": {"Accepts a one-third cut": first, "Accepts the second gamble": second}
    }
    read = read_workbook(saved(tmp_path, values))
    assert read.household.preferences.risk_aversion == expected
    assert [w.code for w in read.warnings] == codes


def test_answers_that_contradict_risk_aversion(tmp_path):
    values = minimal() | {
        "Preferences": {
            "Risk aversion": 4,
            "Accepts a one-third cut": "no",
            "Accepts the second gamble": "no",
        }
    }
    read = read_workbook(saved(tmp_path, values))
    assert read.household.preferences.risk_aversion == 4
    assert [(w.code, w.where) for w in read.warnings] == [("gamble-conflict", "Preferences!B4")]


def test_a_stray_cell_far_away_costs_no_time(tmp_path):
    """Reading visits stored cells only; the used rectangle here has 17 thousand million."""

    def edit(workbook):
        workbook["Accounts"]["XFD1048576"] = "x"

    assert found(saved(tmp_path, edit=edit)) == []


def test_hidden_lists_are_not_read(tmp_path):
    workbook = openpyxl.load_workbook(saved(tmp_path))
    assert workbook["Lists"].sheet_state == "hidden"
    assert "Guide" in workbook.sheetnames


def test_what_stands_twice_is_refused(tmp_path):
    def edit(workbook):
        workbook["Household"]["A12"], workbook["Household"]["B12"] = "currency", "EUR"
        workbook["Accounts"]["L6"] = "balance"
        workbook.create_sheet("Last  Year")

    assert set(found(saved(tmp_path, edit=edit))) == {
        ("label-twice", "Household!B12"),
        ("column-twice", "Accounts!L6"),
        ("sheet-twice", "Last  Year"),
    }


def test_an_unreadable_year_does_not_break_the_yardstick_of_means(tmp_path):
    """It once ended in an arithmetic error instead of a message."""
    values = minimal() | {"One-offs": {"one-offs": [{"Item": "x", "Year": "#REF!", "Amount": 1}]}}
    assert found(saved(tmp_path, values)) == [("cell-error", "One-offs!B7")]

"""The blank workbook, the sample clients, and writing followed by reading."""

from datetime import date
from itertools import pairwise

import openpyxl
import pytest
from client_workbooks import ROOT, SAMPLES, found, minimal, sample_maker, saved
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from planner.diagnostics import PlannerError
from planner.household import (
    Account,
    AccountType,
    AssetClass,
    Household,
    Income,
    IncomeKind,
    OneOff,
    OwnTaxRules,
    Person,
    Portfolio,
    Preferences,
    Spending,
)
from planner.workbook import parsing
from planner.workbook.data import Entry
from planner.workbook.fields import Form, Kind, choice_value, normalised
from planner.workbook.layout import GUIDE_SHEET, LISTS_SHEET, SHEETS, shown_choices
from planner.workbook.layout_client import IN_THE_PLAN
from planner.workbook.reading import read_workbook
from planner.workbook.writing import make_workbook, write_blank, write_workbook

MAKER = sample_maker()
CLIENTS = sorted(MAKER.CLIENTS)


def cells(workbook):
    return {
        sheet.title: {
            cell.coordinate: (cell.value, cell.number_format)
            for row in sheet.iter_rows()
            for cell in row
            if cell.value is not None
        }
        for sheet in workbook.worksheets
    }


def drop_downs(workbook):
    return {
        (sheet.title, str(rule.sqref)): rule.formula1
        for sheet in workbook.worksheets
        for rule in sheet.data_validations.dataValidation
    }


def loaded(path):
    return openpyxl.load_workbook(path)


def test_template_is_the_blank_workbook_as_written(tmp_path):
    """`planner new templates/client_workbook.xlsx` renews it."""
    write_blank(tmp_path / "blank.xlsx")
    fresh, shipped = loaded(tmp_path / "blank.xlsx"), loaded(ROOT / "templates" / "client_workbook.xlsx")
    assert cells(fresh) == cells(shipped)
    assert drop_downs(fresh) == drop_downs(shipped)


def test_sample_files_are_what_the_script_writes(tmp_path):
    """`python sample_clients/make.py` renews them."""
    MAKER.main(tmp_path)
    names = {path.name for path in SAMPLES.glob("*.xlsx")}
    assert names == {path.name for path in tmp_path.glob("*.xlsx")}
    for name in names:
        assert cells(loaded(tmp_path / name)) == cells(loaded(SAMPLES / name)), name


@pytest.mark.parametrize("name", CLIENTS)
def test_every_sample_reads_without_a_warning(name):
    """But one, whose compulsory withdrawals exceed the bills, and who is told."""
    read = read_workbook(SAMPLES / f"{name}.xlsx")
    assert isinstance(read.household, Household)
    expected = {"late_retired": ["minimum-above-needs"]}.get(name, [])
    assert [warning.code for warning in read.warnings] == expected
    assert "invented" in str(loaded(SAMPLES / f"{name}.xlsx")[GUIDE_SHEET]["A2"].value)
    assert f"`{name}.xlsx`" in (SAMPLES / "README.md").read_text("utf-8")


def test_samples_differ_in_what_matters():
    households = {name: read_workbook(SAMPLES / f"{name}.xlsx").household for name in CLIENTS}
    assert {h.is_couple for h in households.values()} == {True, False}
    assert {h.currency for h in households.values()} == {"USD", "GBP"}
    assert [h.client_name for h in households.values() if h.practice.is_draft] == ["Joel Okonjo"]
    assert any(h.preferences.wish_to_leave > 0 for h in households.values())
    assert any(h.preferences.conversions_allowed for h in households.values())
    couple = households["couple_three_accounts"]
    assert {account.type for account in couple.accounts} == set(AccountType)
    shares = [portfolio.weights[0] for portfolio in couple.portfolios]
    assert max(b - a for a, b in pairwise(shares)) <= 0.2 + 1e-12  # 20 points


def test_broken_sample_names_every_fault_at_its_cell():
    assert set(found(SAMPLES / "broken.xlsx")) == {
        ("formula-not-computed", "Household!B9"),
        ("share-percent", "Markets!B4"),
        ("not-a-date", "People!B8"),
        ("life-table-unknown", "People!D7"),
        ("choice-unknown", "Accounts!C7"),
        ("money-abbreviated", "Accounts!D8"),
        ("owner-unknown", "Accounts!B9"),
        ("name-twice", "Accounts!A10"),
        ("value-missing", "Income!E7"),
        ("cell-error", "Income!D8"),
        ("ages-order", "Income!F9"),
        ("share-percent", "Income!H10"),
        ("not-yes-no", "One-offs!E7"),
        ("year-past", "One-offs!B8"),
        ("wanted-below-essential", "Spending!B5"),
        ("care-incomplete", "Spending!B9"),
        ("deviation-negative", "Markets!C9"),
        ("correlation-asymmetric", "Markets!E10"),
        ("weights-sum", "Portfolios!C12"),
        ("risk-aversion-range", "Preferences!B4"),
        ("address-unknown", "What-ifs!B7"),
    }


def test_blank_workbook_asks_for_every_required_field_and_nothing_else(tmp_path):
    write_blank(tmp_path / "blank.xlsx")
    problems = found(tmp_path / "blank.xlsx")
    required = sum(f.required for s in SHEETS for form in s.forms for f in form.fields)
    tables = {"people-count", "accounts-missing", "asset-classes-missing", "portfolios-missing"}
    assert sum(code == "value-missing" for code, _ in problems) == required
    assert {code for code, _ in problems} == tables | {"value-missing"}


def test_an_existing_file_is_left_as_it_is(tmp_path):
    path = tmp_path / "client.xlsx"
    path.write_bytes(b"kept")
    with pytest.raises(PlannerError, match="there already"):
        write_blank(path)
    assert path.read_bytes() == b"kept"


@pytest.mark.parametrize(
    "values",
    [
        {"Acounts": {}},
        {"Household": {"Client": "x"}},
        {"People": {"people": [{"Name": "x"}]}},
    ],
)
def test_unknown_words_are_refused_when_writing(tmp_path, values):
    with pytest.raises(KeyError):
        write_workbook(values, tmp_path / "client.xlsx")
    assert list(tmp_path.iterdir()) == []


def test_text_that_looks_like_a_formula_stays_text(tmp_path):
    values = minimal()
    values["Household"]["Client name"] = "=HYPERLINK(1)"
    assert read_workbook(saved(tmp_path, values)).household.client_name == "=HYPERLINK(1)"


def test_guide_comes_first_and_names_every_field():
    workbook = make_workbook({})
    assert workbook.sheetnames[0] == GUIDE_SHEET
    words = {str(cell.value) for row in workbook[GUIDE_SHEET].iter_rows() for cell in row}
    for sheet in SHEETS:
        for part in sheet.parts:
            for field in part.fields if isinstance(part, Form) else part.columns:
                assert field.label in words
                assert any(field.note in text for text in words)


def test_required_and_optional_cells_look_different():
    sheet = make_workbook({})["Household"]
    required, optional = sheet["B4"], sheet["B9"]
    assert required.fill.fgColor.rgb != optional.fill.fgColor.rgb
    assert required.border.left.style != optional.border.left.style  # also in black and white
    assert sheet["A4"].font.bold
    assert not sheet["A9"].font.bold


@pytest.mark.parametrize(
    ("sheet", "label"),
    [
        (sheet.name, field.label)
        for sheet in SHEETS
        for part in sheet.parts
        for field in (part.fields if isinstance(part, Form) else part.columns)
        if shown_choices(field)
    ],
)
def test_a_fixed_set_has_a_drop_down(sheet, label):
    workbook = make_workbook({})
    field = next(
        f
        for s in SHEETS
        if s.name == sheet
        for part in s.parts
        for f in (part.fields if isinstance(part, Form) else part.columns)
        if f.label == label
    )
    lists = workbook[LISTS_SHEET]
    listed = set()
    for rule in workbook[sheet].data_validations.dataValidation:
        if rule.formula1.startswith(LISTS_SHEET):
            column = rule.formula1.partition("!")[2].replace("$", "")
            listed.add(tuple(str(row[0].value) for row in lists[column]))
    assert shown_choices(field) in listed


DEFAULTS = {
    "spending": Spending(1.0),
    "preferences": Preferences(),
    "own_tax": OwnTaxRules(),
    "people": Person("", date(1960, 1, 1), "male", ""),
    "accounts": Account("", "", AccountType.TAXABLE, 1.0),
    "incomes": Income("", "", IncomeKind.OTHER, 1.0, 60.0),
    "one_offs": OneOff("", 2026, 1.0),
    "markets.asset_classes": AssetClass("", 0.0, 0.0),
    "portfolios": Portfolio("", (1.0,)),
}


@pytest.mark.parametrize(
    ("owner", "field"),
    [
        (owner, field)
        for sheet in SHEETS
        for part in sheet.parts
        for field in (part.fields if isinstance(part, Form) else part.columns)
        for owner in [field.target.rpartition(".")[0] if isinstance(part, Form) else part.target]
        if field.default and owner in DEFAULTS
    ],
    ids=lambda value: getattr(value, "label", value),
)
def test_a_default_in_the_layout_is_the_household_s(owner, field):
    value = parsing.parse(field, Entry("", field.default))
    if field.target == "in_the_plan":
        value = value == IN_THE_PLAN
    assert value == getattr(DEFAULTS[owner], field.target.rpartition(".")[2])


def test_labels_of_a_sheet_differ_by_their_words():
    for sheet in SHEETS:
        keys = [f.key for p in sheet.parts for f in (p.fields if isinstance(p, Form) else p.columns)]
        assert len(keys) == len(set(keys)), sheet.name
    names = [normalised(sheet.name) for sheet in SHEETS]
    assert len(names) == len(set(names))


def test_every_choice_reads_as_itself():
    for sheet in SHEETS:
        for part in sheet.parts:
            for field in part.fields if isinstance(part, Form) else part.columns:
                for shown in field.choices if field.kind is Kind.CHOICE else ():
                    assert parsing.choice(Entry("", shown), field.choices) == choice_value(shown)


CENTS = st.integers(0, 10**10).map(lambda cents: cents / 100)


@settings(max_examples=15, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    balance=CENTS,
    basis=st.none() | CENTS,
    share=st.integers(0, 10_000).map(lambda hundredths: hundredths / 10_000),
    age=st.integers(200, 320).map(lambda quarters: quarters / 4),
    born=st.dates(date(1930, 1, 1), date(1970, 1, 1)),
    name=st.text(st.characters(codec="latin-1", categories=["L"]), min_size=1, max_size=12).filter(
        lambda text: text.casefold() not in ("tom", "joint")
    ),
)
def test_what_is_written_is_read(tmp_path, balance, basis, share, age, born, name):
    """Numbers of up to 15 digits, dates and names come back exactly; a spreadsheet stores no more."""
    values = minimal()
    values["People"]["people"][0] |= {"Person": name, "Date of birth": born}
    values["Accounts"]["accounts"][0] |= {"Balance": balance, "Cost basis": basis}
    values["Accounts"]["accounts"][1]["Owner"] = name
    values["Income"]["incomes"][0] |= {"Owner": name, "From age": age, "Taxable share": share}
    household = read_workbook(saved(tmp_path, values)).household
    assert household.people[0].name == name
    assert household.people[0].date_of_birth == born
    assert (household.accounts[0].balance, household.accounts[0].cost_basis) == (balance, basis)
    assert (household.incomes[0].from_age, household.incomes[0].taxable_share) == (age, share)

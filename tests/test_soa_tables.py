"""Life tables by number: through a stand-in for the package, and the package itself where it is there."""

import importlib.util
import sys
from dataclasses import replace
from datetime import date
from types import ModuleType, SimpleNamespace

import numpy as np
import pandas as pd
import pytest
from households import single

from planner import mortality, soa_tables
from planner.diagnostics import InputError
from planner.household import Person, problems
from planner.problem_building import build_problem
from planner.soa_tables import is_number, numbered_table

LIN = Person("Lin", date(1945, 3, 3), "female", "soa-1+2")


def _table(title, kind, *columns):
    tables = []
    for axes, first, values in columns:
        names = [SimpleNamespace(AxisName=axis) for axis in axes]
        index = pd.Index(range(first, first + len(values)), name="Age")
        rates = pd.DataFrame({"vals": values}, index=index)
        tables.append(SimpleNamespace(MetaData=SimpleNamespace(AxisDefs=names), Values=rates))
    about = SimpleNamespace(TableName=title, ContentType=kind, ProviderName="An  Academy")
    return SimpleNamespace(ContentClassification=about, Tables=tables)


RATES = np.linspace(0.01, 1.0, 61)
TABLES = {
    1: _table("2012 Annuity", "Annuitant Mortality", (["Age", "Duration"], 0, [0.5]), (["Age"], 60, RATES)),
    2: _table("Scale Z", "Projection Scale", (["Age"], 70, [0.02, 0.01])),
    3: _table("Costs", "Claim Incidence", (["Age"], 60, RATES)),
    4: _table("Select only", "Insured Lives Mortality", (["Age", "Duration"], 60, [0.5])),
    5: _table("Undated", "Annuitant Mortality", (["Age"], 60, RATES)),
    6: _table("1999 odd", "Annuitant Mortality", (["Age"], 60, [0.5, 3.8])),
}


@pytest.fixture
def package(monkeypatch):
    """A stand-in with the package's one entry that is used."""

    def from_id(number):
        if number not in TABLES:
            raise FileNotFoundError(number)
        return TABLES[number]

    module = ModuleType("pymort")
    module.MortXML = SimpleNamespace(from_id=from_id)
    monkeypatch.setitem(sys.modules, "pymort", module)
    for cached in (numbered_table, mortality.load_table):
        cached.cache_clear()
    yield
    for cached in (numbered_table, mortality.load_table):
        cached.cache_clear()


def test_names():
    assert is_number("soa-2585")
    assert is_number("soa-2585+906")
    assert not any(map(is_number, ("soa-", "soa-x", "us-ssa-2022", "soa-1+", "own")))


@pytest.mark.usefixtures("package")
def test_rates_by_age_and_improvement():
    table = mortality.load_table("soa-1+2")
    assert (table.first_age, table.omega, table.year) == (60, 120, 2012)
    assert table.publisher == "An Academy"
    assert "Scale Z" in table.title
    assert "table 1 of the Society of Actuaries" in table.source
    q = mortality.death_probabilities(table, "female", 70, 3, plan_year=2022)
    # From 2012 to 2022 ten years of improvement at age 70, then eleven at 71; 72 keeps the last factor.
    expected = RATES[10:13] * (1 - np.array([0.02, 0.01, 0.01])) ** np.array([10, 11, 12])
    np.testing.assert_allclose(q, expected, rtol=1e-12)
    assert mortality.load_table("soa-1").improvement("male") is None


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("soa-9", "there is no table 9"),
        ("soa-3", "expected one of mortality"),
        ("soa-1+1", "expected one of projection scale"),
        ("soa-4", "no rates by age alone"),
        ("soa-5+2", "names no year"),
        ("soa-6", "outside 0 to 1"),
    ],
)
@pytest.mark.usefixtures("package")
def test_what_cannot_be_used_is_said_at_the_person(name, words):
    with pytest.raises(InputError) as refused:
        single(people=(replace(LIN, life_table=name),))
    (problem,) = refused.value.diagnostics
    assert (problem.code, problem.where) == ("life-table-number", "people[0].life_table")
    assert words in problem.message


@pytest.mark.usefixtures("package")
def test_a_household_is_planned_with_one():
    household = single(people=(LIN,))
    assert [p.code for p in problems(household)] == []  # no word of a whole population either
    problem = build_problem(household)
    q = RATES[20] * (1 - 0.01) ** 14  # of age 80, in 2026
    assert problem.transition[0, 0, 0] == pytest.approx(1 - q, rel=1e-12)


def test_without_the_package(monkeypatch):
    monkeypatch.setitem(sys.modules, "pymort", None)
    numbered_table.cache_clear()
    with pytest.raises(InputError, match=r"retirement-drawdown-planner\[soa\]"):
        soa_tables.numbered_table("soa-2585")


@pytest.mark.filterwarnings("ignore::DeprecationWarning")  # the package opens its files the old way
@pytest.mark.skipif(importlib.util.find_spec("pymort") is None, reason="the extra 'soa' is not installed")
def test_the_package_itself():
    """Annuity 2000 for men, ages 5 to 115, and projection scale E."""
    table = mortality.load_table("soa-887")
    assert (table.first_age, table.omega, table.year) == (5, 115, 2000)
    assert mortality.load_table("soa-887+906").improvement("male") is not None

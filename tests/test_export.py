"""The results file and the results workbook, from an invented plan: keys, figures, no surprises."""

import json
import math
import zipfile
from dataclasses import replace
from io import BytesIO
from xml.etree import ElementTree

import openpyxl
import pytest
from golden_text import assert_golden
from plan_builder import build, couple, single

from planner.reports.export import json_text, money, results_json, results_workbook, status_in_words

PLAN = build()


def test_keys_are_those_of_the_contract():
    data = results_json(PLAN)
    assert {
        *("client", "plan_date", "currency", "horizon_years", "life_expectancy"),
        *("this_year", "value", "schedule", "lookup", "strategies", "sources"),
    } <= set(data)
    assert set(data["life_expectancy"]) == {"first", "second"}
    now = data["this_year"]
    assert {"spending", "income", "tax", "withdraw", "convert", "minimum_distribution", "portfolio"} <= set(
        now
    )
    assert set(now["withdraw"]) == {"taxable", "tax_deferred", "tax_free"}
    assert {"account", "withdraw", "minimum_distribution"} <= set(now["accounts"][0])
    assert {"level_spending", "gap_money", "gap_share", "gap_standard_error"} <= set(data["value"])
    row = data["schedule"][0]
    assert {"year", "ages", "spending", "balance", "withdraw", "tax", "minimum_distribution"} <= set(row)
    assert set(row["spending"]) == set(row["balance"]) == {"p10", "p50", "p90"}
    assert set(data["lookup"][0]) == {"status", "balance", "spending", "portfolio"}
    assert {
        *("name", "spending_this_year", "level_spending", "wealth_cost", "chance_below_essential"),
        *("years_below_essential", "estate"),
    } <= set(data["strategies"][0])
    assert {"program_version", "workbook_sha256", "seed", "life_tables", "tax_rules"} <= set(data["sources"])


def test_golden_json():
    """A short plan in full; a change of any key or figure shows in the diff."""
    assert_golden("results.json", json_text(results_json(build(single(), n_years=3))))


def test_json_is_plain_and_finite():
    text = json_text(results_json(PLAN))
    assert json.loads(text, parse_constant=lambda name: pytest.fail(name)) == results_json(PLAN)


def test_a_figure_that_is_not_finite_is_refused():
    broken = replace(PLAN, this_year=replace(PLAN.this_year, tax=math.nan))
    with pytest.raises(ValueError, match="finite"):
        results_json(broken)


def test_without_proof_the_gap_is_null_and_with_a_legacy_the_level_is():
    strategies = tuple(replace(s, level_spending=None) for s in PLAN.strategies)
    data = results_json(replace(PLAN, proof=None, level_spending=None, strategies=strategies))
    assert (
        data["value"]["gap_money"]
        is data["value"]["gap_share"]
        is data["value"]["gap_standard_error"]
        is None
    )
    assert data["value"]["level_spending"] is None
    assert data["strategies"][0]["level_spending"] is None


def test_a_single_client_has_no_second_life_expectancy():
    data = results_json(build(single()))
    assert data["life_expectancy"]["second"] is None
    assert len(data["schedule"][0]["ages"]) == 1


@pytest.mark.parametrize(
    ("value", "printed"), [(-0.001, 0.0), (1.005, 1.0), (2.675, 2.67), (-3.14159, -3.14)]
)
def test_rounding_to_the_cent_has_no_minus_zero(value, printed):
    """Halves go by the nearest float, as Python's round does."""
    assert money(value) == printed
    assert math.copysign(1, money(value)) == math.copysign(1, printed)


def opened(plan=PLAN) -> openpyxl.Workbook:
    return openpyxl.load_workbook(BytesIO(results_workbook(plan)))


def test_sheets_have_frozen_headers_and_number_formats():
    book = opened()
    assert book.sheetnames == ["Schedule", "Look-up", "Strategies", "Percentiles", "Assumptions"]
    for sheet in book:
        assert sheet.freeze_panes == "B3"
        assert "today's USD" in sheet["A1"].value
        assert all(cell.value and cell.font.bold for cell in sheet[2])
    schedule = book["Schedule"]
    headers = [cell.value for cell in schedule[2]]
    middle = schedule.cell(3, headers.index("Spending middle") + 1)
    assert middle.value == pytest.approx(PLAN.schedule[0].spending.p50, abs=0.005)
    assert middle.number_format == "#,##0"


def test_every_year_and_strategy_is_there():
    book = opened()
    assert book["Schedule"].max_row == 2 + len(PLAN.schedule)
    assert book["Look-up"].max_row == 2 + len(PLAN.lookup)
    assert book["Strategies"].max_row == 2 + len(PLAN.strategies)
    assert book["Percentiles"].max_row == 2 + len(PLAN.schedule) * len(PLAN.strategies)


@pytest.mark.parametrize("name", ['=HYPERLINK("http://x")', "+1", "-1", "@SUM(A1)", "\t=1"])
def test_text_never_becomes_a_formula(name):
    strategies = (replace(PLAN.strategies[0], name=name), *PLAN.strategies[1:])
    household = replace(couple(), client_name=name)
    book = opened(replace(PLAN, strategies=strategies, household=household))
    cell = book["Strategies"]["A3"]
    assert cell.data_type == "s"
    assert cell.value == name
    assert cell.quotePrefix
    assert not any(cell.data_type == "f" for sheet in book for row in sheet for cell in row)


def test_who_is_alive_is_said_by_name():
    names = [person.name for person in PLAN.household.people]
    assert status_in_words("both", PLAN) == " and ".join(names)
    assert status_in_words("second", PLAN) == names[1]


def test_headers_can_be_filtered_and_wrapped_text_has_room():
    book = opened()
    for sheet in book:
        assert sheet.auto_filter.ref == f"A2:{sheet.cell(sheet.max_row, sheet.max_column).coordinate}"
        for row in sheet.iter_rows(min_row=3):
            longest = max((len(cell.value) for cell in row if isinstance(cell.value, str)), default=0)
            if longest > 60:
                assert sheet.row_dimensions[row[0].row].height >= 30


def test_control_characters_in_names_do_not_stop_the_workbook():
    portfolio = replace(couple().portfolios[0], name="Care\x0bful\x00")
    household = replace(couple(), portfolios=(portfolio, *couple().portfolios[1:]))
    names = [row[0].value for row in opened(replace(PLAN, household=household))["Assumptions"].rows]
    assert "Portfolio Careful" in names


def test_assumptions_hold_what_the_figures_rest_on():
    rows = {row[0].value: row[1].value for row in opened()["Assumptions"].iter_rows(min_row=3)}
    household = PLAN.household
    for asset in household.markets.asset_classes:
        assert f"Asset class {asset.name}" in rows
    assert rows["Correlation of Bonds and World shares"] == household.markets.correlations[1][0]
    assert rows["Adviser fee a year"] == "0.50%"
    assert rows["How close to the best possible, money"] == PLAN.proof.gap_money
    assert rows["Workbook SHA-256"] == PLAN.sources.workbook_sha256


def test_every_part_of_the_file_is_declared_and_every_declared_part_is_there():
    """What spreadsheet programs check before they offer to repair a file."""
    with zipfile.ZipFile(BytesIO(results_workbook(PLAN))) as archive:
        parts = set(archive.namelist())
        trees = {name: ElementTree.fromstring(archive.read(name)) for name in parts}
    types = trees["[Content_Types].xml"]
    declared = {node.get("PartName", "").lstrip("/") for node in types if node.tag.endswith("Override")}
    assert declared <= parts
    assert {name for name in parts if not name.endswith(".rels")} - {"[Content_Types].xml"} <= declared
    for name in parts:
        if name.endswith(".rels"):
            folder = name.replace("_rels/", "").rpartition("/")[0]
            for node in trees[name]:
                target = node.get("Target", "")
                place = target.lstrip("/") if target.startswith("/") else f"{folder}/{target}".lstrip("/")
                assert place in parts, (name, target)
    if "xl/sharedStrings.xml" not in parts:
        assert not any(
            cell.get("t") == "s" for tree in trees.values() for cell in tree.iter() if cell.tag.endswith("}c")
        )

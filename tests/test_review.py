"""A year on: percentiles in last year's fan, what moved the answer, whose results they are."""

import json
from dataclasses import replace
from datetime import date

import numpy as np
import pytest
from golden_text import GOLDEN, assert_golden, rendered
from households import single
from scipy.stats import norm

from planner.diagnostics import InputError
from planner.household import LastYear
from planner.optimum.recursion import SolverSettings
from planner.plan import PlanSettings
from planner.plan_record import Range
from planner.reports.terminal_review import review_screen, sentences
from planner.review import LastPlan, percentile_in, read_last, review, review_json

SETTINGS = PlanSettings(solver=SolverSettings(12, 12, 8, 48))
LAST = LastPlan(
    client="Lin Sample",
    plan_date=date(2025, 1, 1),
    currency="EUR",
    spending=30_000.0,
    portfolio="Middle",
    balance=Range(210_000.0, 250_000.0, 300_000.0),
    lookup={"first": ((200_000.0, 250_000.0, 300_000.0), (27_000.0, 30_000.0, 33_000.0))},
    band=(220_000.0, 280_000.0, 0.1),
    survivors=(),
)


@pytest.fixture(scope="module")
def found():
    client = replace(single(), last_year=LastYear(spent=28_000.0, one_offs_received=5_000.0))
    return review(client, LAST, SETTINGS)


def test_moves_add_up_to_the_change(found):
    total = sum(move.amount for move in found.moves)
    assert total == pytest.approx(found.spending_now - found.spending_before, abs=1e-6)


def test_each_move_is_read_off_the_last_look_up(found):
    """Look-up slope 0.06 a unit of savings; prices 2.5 %; 2,000 not spent, 5,000 received."""
    by_name = {move.name: move.amount for move in found.moves}
    assert by_name["a year older, savings as planned"] == pytest.approx(0.0, abs=1e-6)
    assert by_name["spent less or more than planned"] == pytest.approx(0.06 * 2_000, abs=1e-6)
    assert by_name["one-offs and money paid in"] == pytest.approx(0.06 * 5_000, abs=1e-6)
    rest = found.savings - 1.025 * 250_000 - 7_000
    assert by_name["markets, and whatever else moved savings"] == pytest.approx(0.06 * rest, abs=1e-6)


def test_inside_the_band_spending_is_kept(found):
    inside = replace(found, spending_now=1.05 * found.spending_before)
    assert "keep spending" in sentences(inside)
    for other in (
        replace(inside, inside_band=False),
        replace(inside, spending_now=1.2 * found.spending_before),
    ):
        assert "keep spending" not in sentences(other)
    assert sentences(found).count(". ") == 2  # three sentences


def test_percentile_of_a_lognormal_fan_is_exact():
    """Log-normal money: the normal quantile is a straight line in the log, so any point is exact."""
    law = norm(12.0, 0.3)
    fan = Range(*np.exp(law.ppf([0.1, 0.5, 0.9])))
    for share in (0.03, 0.1, 0.4, 0.5, 0.77, 0.97):
        assert percentile_in(fan, float(np.exp(law.ppf(share)))) == pytest.approx(share, abs=1e-9)


def test_percentile_with_a_fan_that_touches_nothing():
    assert percentile_in(Range(0.0, 0.0, 100.0), 50.0) == pytest.approx(0.7)
    assert percentile_in(Range(0.0, 0.0, 0.0), 50.0) == 0.9


def test_a_death_is_a_move_of_its_own():
    lookup = dict.fromkeys(("both", "first", "second"), LAST.lookup["first"])
    lookup["second"] = ((200_000.0, 300_000.0), (20_000.0, 24_000.0))
    last = replace(LAST, client="Lin and Bo Sample", lookup=lookup, survivors=("Bo", "Lin"))
    moves = {move.name: move.amount for move in review(single(), last, SETTINGS).moves}
    assert moves["one of the two has died"] == pytest.approx(1.025 * (22_000 - 30_000), abs=1e-6)


@pytest.mark.parametrize(
    ("changes", "code"),
    [
        ({"client": "Somebody Else"}, "review-client"),
        ({"currency": "USD"}, "review-currency"),
        ({"plan_date": date(2026, 1, 1)}, "review-date"),
        ({"plan_date": date(2022, 1, 1)}, "review-date"),
    ],
)
def test_other_results_are_refused(changes, code):
    with pytest.raises(InputError) as error:
        review(single(), replace(LAST, **changes), SETTINGS)
    assert [problem.code for problem in error.value.diagnostics] == [code]


@pytest.mark.parametrize("text", ["", "[]", "{}", '{"client": "x"}', "\x00", "[" * 100_000, "9" * 10_000])
def test_a_file_that_is_no_results_file(tmp_path, text):
    path = tmp_path / "last.json"
    path.write_text(text, "utf-8")
    with pytest.raises(InputError) as error:
        read_last(path)
    assert [problem.code for problem in error.value.diagnostics] == ["results-unreadable"]


def written(tmp_path, change=lambda results: None):
    """A results file as `planner plan` writes it, changed."""
    results = json.loads((GOLDEN / "results.json").read_text("utf-8"))
    change(results)
    path = tmp_path / "last.json"
    path.write_text(json.dumps(results), "utf-8")
    return path


def older(results):
    results["sources"]["program_version"] = "0.0.1"


def older_and_lacking(results):
    older(results)
    del results["lookup"]


def no_number(results):
    results["schedule"][1]["balance"]["p50"] = float("nan")


def test_results_of_an_older_version_are_read_or_refused_with_the_version(tmp_path):
    assert read_last(written(tmp_path, older)) == read_last(written(tmp_path))
    with pytest.raises(
        InputError, match=r"there is no 'lookup' \(version 0\.0\.1 of the program wrote it"
    ) as error:
        read_last(written(tmp_path, older_and_lacking))
    assert [problem.code for problem in error.value.diagnostics] == ["results-unreadable"]


def nobody(results):
    for row in results["lookup"]:
        row["status"] = "second"


def empty(results):
    results["lookup"] = []


@pytest.mark.parametrize("change", [no_number, nobody, empty])
def test_what_a_review_could_not_use_is_refused(tmp_path, change):
    """NaN would turn every figure into one that is none; a look-up for nobody has nothing to look up."""
    with pytest.raises(InputError) as error:
        read_last(written(tmp_path, change))
    assert "version" not in str(error.value)  # this version wrote it


def test_results_beyond_all_sizes_are_not_read_to_their_end(tmp_path):
    path = tmp_path / "last.json"
    with path.open("wb") as file:
        file.truncate(3_000_000_000)  # takes no room: it is a hole
    with pytest.raises(InputError):
        read_last(path)


def test_reads_what_plan_writes(tmp_path):
    from plan_builder import build

    from planner.reports.export import json_text, results_json

    plan = build()
    path = tmp_path / "last.json"
    path.write_text(json_text(results_json(plan)), "utf-8")
    last = read_last(path)
    assert last.client == plan.household.client_name
    assert last.spending == pytest.approx(plan.this_year.spending, abs=0.005)
    assert last.balance.p50 == pytest.approx(plan.schedule[1].balance.p50, abs=0.005)
    assert set(last.lookup) == {row.status for row in plan.lookup}
    assert last.survivors == tuple(view.survivor for view in plan.survivors)


def test_golden(found):
    fixed = replace(found, savings=251_000.0, spending_now=31_234.0)
    assert_golden("review.txt", rendered(review_screen(fixed, 80)))
    json.dumps(review_json(found), allow_nan=False)

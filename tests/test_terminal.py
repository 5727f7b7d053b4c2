"""Terminal tables: golden text at two widths, and what must hold for any figures."""

import pytest
from golden_text import assert_golden, rendered
from plan_builder import build, single

from planner import mortality, taxes
from planner.reports.terminal import BEST, comparison, plan_summary, shipped_tables, side_by_side

PLAN = build()
WEALTH = 1_095_000.0


@pytest.mark.parametrize("width", [80, 120])
def test_golden_comparison(width):
    text = rendered(comparison(PLAN.strategies, "USD", WEALTH, width), width)
    assert_golden(f"comparison_{width}.txt", text)


def test_golden_summary():
    assert_golden("plan_summary.txt", rendered(plan_summary(PLAN)))


def test_golden_side_by_side():
    changed = build(single("USD")).strategies
    text = rendered(side_by_side(PLAN.strategies, changed, "USD", ["Income/State pension/From age=70"]))
    assert_golden("side_by_side.txt", text)


@pytest.mark.parametrize("width", [80, 120])
def test_nothing_is_wider_than_the_terminal_or_cut_short(width):
    for content in (
        comparison(PLAN.strategies, "JPY", 100 * WEALTH, width),
        plan_summary(PLAN),
        shipped_tables(mortality.describe(), taxes.describe(), width),
    ):
        text = rendered(content, width)
        assert max(len(line) for line in text.splitlines()) <= width
        assert "…" not in text


def test_the_best_is_marked_by_a_sign_too():
    text = rendered(comparison(PLAN.strategies, "USD", WEALTH, 80))
    first_row = next(line for line in text.splitlines() if line.lstrip().startswith("Optimal plan"))
    assert f"0{BEST}" in first_row.replace(" ", "")
    assert text.count(BEST) >= 4  # three columns and the legend


def test_level_column_is_left_out_where_a_legacy_is_wished():
    from dataclasses import replace

    strategies = [replace(s, level_spending=None) for s in PLAN.strategies]
    assert "steady" not in rendered(comparison(strategies, "USD", WEALTH, 120), 120)


def test_every_shipped_table_is_listed_with_its_year():
    text = rendered(shipped_tables(mortality.describe(), taxes.describe(), 80))
    for name in (*mortality.available_tables(), *taxes.available()):
        assert name in text
    assert "2022" in text

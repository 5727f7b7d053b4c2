"""Terminal tables: golden text at two widths, and what must hold for any figures."""

from dataclasses import replace

import pytest
from golden_text import assert_golden, rendered
from plan_builder import build, single

from planner import mortality, taxes
from planner.reports.terminal import plan_summary, shipped_tables
from planner.reports.terminal_comparison import BEST, bar, comparison, side_by_side

PLAN = build()
WEALTH = 1_095_000.0
LATER = ((75, 10), (85, 20), (95, 30))


@pytest.mark.parametrize("width", [80, 120])
def test_golden_comparison(width):
    text = rendered(comparison(PLAN.strategies, "USD", WEALTH, width, LATER, "Ana"), width)
    assert_golden(f"comparison_{width}.txt", text)


def test_golden_summary():
    assert_golden("plan_summary.txt", rendered(plan_summary(PLAN)))


def test_golden_side_by_side():
    changed = build(single("USD")).strategies[0]
    name = "Income/State pension/From age=70"
    text = rendered(side_by_side(PLAN.strategies[0], changed, "USD", name, LATER, LATER[:2]))
    assert_golden("side_by_side.txt", text)


@pytest.mark.parametrize("width", [80, 120])
def test_nothing_is_wider_than_the_terminal_or_cut_short(width):
    for content in (
        comparison(PLAN.strategies, "JPY", 100 * WEALTH, width, LATER, "Ana"),
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


def test_bars_in_eighths_and_in_plain_signs():
    assert [bar(share) for share in (0, 1 / 48, 0.5, 1, 2)] == ["", "▏", "███", "██████", "██████"]
    assert [bar(share, plain=True) for share in (-1, 0.5, 1)] == ["", "###", "######"]
    plain = rendered(comparison(PLAN.strategies, "USD", WEALTH, 80, LATER, "Ana", plain=True))
    assert plain.isascii() or set("█▏▎▍▌▋▊▉").isdisjoint(plain)


def test_the_reading_says_what_the_rule_costs_and_why():
    strategies = tuple(replace(s, reason="bills") if s.key == "constant-real" else s for s in PLAN.strategies)
    words = " ".join(rendered(comparison(strategies, "USD", WEALTH, 80)).split())
    assert '"Same amount plus prices" would cost this client about as much as giving away $118,400' in words
    assert "mostly because bills have to be cut in 9 of 100 futures (the plan: 3)" in words


def test_level_column_is_left_out_where_a_legacy_is_wished():
    strategies = [replace(s, level_spending=None) for s in PLAN.strategies]
    assert "steady" not in rendered(comparison(strategies, "USD", WEALTH, 120), 120)


def test_every_shipped_table_is_listed_with_its_year():
    text = rendered(shipped_tables(mortality.describe(), taxes.describe(), 80))
    for name in (*mortality.available_tables(), *taxes.available()):
        assert name in text
    assert "2022" in text

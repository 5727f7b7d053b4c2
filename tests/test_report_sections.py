"""What the report says, as blocks."""

import dataclasses
import itertools
from dataclasses import replace

import plan_builder
import pytest
from reportlab.graphics.shapes import String

from planner.household import AnnuityQuote, RuleSetting
from planner.outcomes import BILLS, TOO_LITTLE_EARLY
from planner.plan_record import NoChangeBand
from planner.reports.blocks import Heading, OnePage, StackChart, Table, Text
from planner.reports.charts import LAYERS, draw
from planner.reports.section_year import band_sentence
from planner.reports.sections import SECTIONS, report_blocks
from planner.reports.wording import DRAFT, IMPORTANT_INFORMATION, LIMITS, REASONS


def words(value):
    """All text of blocks, one string a line."""
    if isinstance(value, str):
        return [value]
    if dataclasses.is_dataclass(value):
        return [t for f in dataclasses.fields(value) for t in words(getattr(value, f.name))]
    if isinstance(value, tuple | list):
        return [t for item in value for t in words(item)]
    return []


def flat(blocks):
    for block in blocks:
        yield from flat(block.blocks) if isinstance(block, OnePage) else (block,)


def section(plan, number):
    return "\n".join(words(SECTIONS[number - 1].blocks(plan)))


@pytest.mark.parametrize("part", SECTIONS, ids=lambda s: str(s.number))
def test_each_part_opens_with_its_numbered_heading(part):
    first = next(b for b in flat(part.blocks(plan_builder.build())) if isinstance(b, Heading))
    assert first == Heading(part.title, 1, part.number)


def test_parts_are_numbered_from_one():
    assert [s.number for s in SECTIONS] == list(range(1, 12))


@pytest.mark.parametrize(
    "household", [plan_builder.couple(), plan_builder.single()], ids=["couple", "single"]
)
def test_every_table_row_has_a_cell_for_each_column(household):
    for block in flat(report_blocks(plan_builder.build(household))):
        if isinstance(block, Table):
            assert {len(row) for row in block.rows} <= {len(block.columns)}


@pytest.mark.parametrize("number", [1, 5, 6, 7, 8, 11])
def test_required_wording_stands_as_typed_in_every_part_with_a_probability(number):
    wording = "Exactly  as typed & <kept>.\nSecond line."
    practice = replace(plan_builder.PRACTICE, required_wording=wording)
    plan = plan_builder.build(plan_builder.couple(practice=practice))
    blocks = list(flat(SECTIONS[number - 1].blocks(plan)))
    assert Text(wording, "required") in blocks
    assert Text(plan_builder.PRACTICE.local_caution, "required") in blocks


def test_every_chance_says_of_how_many_futures_and_what_happens_in_the_rest():
    text = section(plan_builder.build(), 1)
    assert "In 97 of 100 futures we tested your bills were paid as long as either of you lived" in text
    assert (
        "in the rest you were short by about $6,200 a year, in about 4 years, mostly after Maren Quill is 91"
        in text
    )
    assert "10,000 courses of markets and lives" in section(plan_builder.build(), 6)


def test_no_futures_with_unpaid_bills_is_no_promise():
    plan = plan_builder.build()
    best = replace(plan.strategies[0], chance_below_essential=0.0, typical_age_below=None)
    text = section(replace(plan, strategies=(best, *plan.strategies[1:])), 1)
    assert "In all 10,000 futures we tested your bills were paid" in text
    assert "Worse futures than those tested can happen." in text


def test_a_draft_says_which_texts_are_missing():
    practice = replace(plan_builder.PRACTICE, aims="", drawbacks=" ")
    plan = plan_builder.build(plan_builder.couple(practice=replace(practice, drawbacks="")))
    assert "aims and drawbacks" in section(plan, 1)
    assert DRAFT in section(plan, 2)
    assert DRAFT in section(plan, 10)
    assert DRAFT not in "\n".join(words(report_blocks(plan_builder.build())))


def test_without_proof_no_claim_is_made():
    text = section(plan_builder.build(proof=None), 9)
    assert "was not computed" in text
    assert "%" not in text.split("Check")[0]


def test_without_what_ifs_the_part_says_so():
    assert "No what-ifs were run" in section(plan_builder.build(what_ifs=()), 8)


def test_without_savings_the_review_reads_nothing_off_a_band():
    plan = plan_builder.build(band=NoChangeBand(0, 0, 0, 0, 0.1), lookup=())
    assert "no savings to read your spending from" in section(plan, 1)
    assert "No look-up table was made." in section(plan, 5)


def test_legacy_wish_drops_the_steady_income_column():
    plan = plan_builder.build()
    strategies = tuple(replace(s, level_spending=None) for s in plan.strategies)
    text = section(replace(plan, strategies=strategies, level_spending=None), 7)
    assert "steady income of" not in text


def test_instructions_warn_before_a_move_to_tax_free():
    text = section(plan_builder.build(), 3)
    assert "cannot be undone" in text
    assert "Move $6,000" in text
    assert "tax-free" not in section(plan_builder.build(plan_builder.single()), 3).replace(
        "(tax-free)", ""
    ).replace("tax-deferred and tax-free accounts", "")


def test_cautions_limits_and_warnings_are_printed():
    plan = plan_builder.build()
    text = section(plan, 11)
    for title, caution in IMPORTANT_INFORMATION:
        assert title in text
        assert caution in text
    for limit in LIMITS:
        assert limit in text
    assert "life-table-unadjusted" in section(plan, 10)
    assert plan.sources.workbook_sha256[:8] in section(plan, 10)


def test_projections_say_the_money_they_are_in():
    for block in flat(report_blocks(plan_builder.build())):
        if hasattr(block, "unit"):
            assert "today's" in block.unit or block.unit.startswith("of 100")
        if isinstance(block, Table) and block.wide:
            assert "today's money" in block.note


def test_wording_too_long_for_page_one_stands_right_behind_it():
    wording = "Words that the firm must print. " * 40
    practice = replace(plan_builder.PRACTICE, required_wording=wording)
    page, *behind = SECTIONS[0].blocks(plan_builder.build(plan_builder.couple(practice=practice)))
    assert Text(wording, "required") in behind
    assert "stands on the next page" in "\n".join(words(page))


def test_the_review_says_what_to_spend_where_next_year_is_planned_to_differ():
    """Planned spending that leaves the band by itself is no 'no change'."""
    plan = plan_builder.build()
    halved = tuple(replace(row, spending=row.spending / 2) for row in plan.lookup)
    assert "Spend about $" in band_sentence(replace(plan, lookup=halved))
    assert band_sentence(plan).startswith("No change if your savings are then between")


def test_layers_of_grey_stay_apart_and_are_labelled_directly():
    """Luminance (ITU-R BT.601: 0.299 R + 0.587 G + 0.114 B) of neighbouring layers, 0 to 1."""
    grey = [0.299 * c.red + 0.587 * c.green + 0.114 * c.blue for c in LAYERS]
    assert min(b - a for a, b in itertools.pairwise(grey)) > 0.15
    chart = next(b for b in flat(report_blocks(plan_builder.build())) if isinstance(b, StackChart))
    labels = [s.text for s in draw(chart, 490.0).contents if isinstance(s, String)]
    assert {"From taxable", "From tax-deferred", "From tax-free"} <= set(labels)


def test_bills_say_who_pays_before_and_after_pensions_start():
    plan = plan_builder.build(plan_builder.single())
    assert "Pensions for life pay 83% of your bills now, after tax. Savings pay the rest." in section(plan, 1)
    assert "Savings pay the rest" not in section(replace(plan, bills_covered_now=1.2), 1)
    wages = (("Shop", 9_000.0),)
    early = replace(plan, bills_covered_now=0.0, this_year=replace(plan.this_year, incomes=wages))
    assert "No pension for life is paid yet. Work, other income and savings pay" in section(early, 1)


@pytest.mark.parametrize(("error", "said"), [(0.002, "less than 1 of 100"), (0.0149, "about 3 of 100")])
def test_the_count_of_futures_says_its_own_error(error, said):
    """Twice the standard error, about the width that 19 of 20 draws stay within."""
    plan = plan_builder.build()
    optimum = replace(plan.strategies[0], chance_standard_error=error)
    assert said in section(replace(plan, strategies=(optimum, *plan.strategies[1:])), 6)


def test_rules_say_what_costs_most_and_what_is_not_as_published():
    settings = (RuleSetting("constant-real", "rate", 0.035), RuleSetting("floor-and-ceiling", "down", 0.15))
    plan = plan_builder.build(replace(plan_builder.couple(), rule_settings=settings))
    first, second, third, *rest = plan.strategies
    told = (first, replace(second, reason=BILLS), replace(third, reason=TOO_LITTLE_EARLY), *rest)
    text = section(replace(plan, strategies=told), 7)
    assert "What costs most" in text
    assert REASONS[BILLS] in text
    assert REASONS[TOO_LITTLE_EARLY] in text
    assert "Same amount plus prices: first withdrawal 3.5% instead of 4%." in text
    plain = section(plan_builder.build(), 7)
    assert "What costs most" not in plain
    assert "not as published" not in plain


def test_a_quoted_annuity_stands_among_the_facts():
    quote = AnnuityQuote("Maren Quill", "Joint brokerage", 0.061, continues_to_partner=0.5)
    text = section(plan_builder.build(replace(plan_builder.couple(), annuity_quote=quote)), 2)
    assert "$6,100 a year for each $100,000 paid from Joint brokerage" in text
    assert "50% goes on to the partner" in text

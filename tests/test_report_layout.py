"""Layout of the PDF for odd households: nothing outside its frame, nothing over anything else."""

import re
from dataclasses import replace

import plan_builder
import pytest
from drawn_text import FOOTER_LINES, Piece, by_page, outside, overprinted, recorded
from odd_households import N_HOUSEHOLDS, odd_plan

from planner.reports.pdf import MARGIN, render_pdf


def drawn(plan) -> list[Piece]:
    with recorded() as pieces:
        render_pdf(plan)
    return pieces


@pytest.mark.parametrize("seed", range(N_HOUSEHOLDS))
def test_odd_households_are_drawn_inside_their_frames(seed):
    pieces = drawn(odd_plan(seed))
    assert not outside(pieces)
    for page, here in by_page(pieces).items():
        assert not overprinted(here), page


def test_the_checker_finds_text_outside_and_overprinted():
    inside = Piece(1, (595.0, 842.0), "inside", 10.0, 60.0, 90.0, 400.0)
    assert not outside([inside])
    for wrong in (
        replace(inside, right=590.0),
        replace(inside, left=40.0),
        replace(inside, baseline=45.0),
        replace(inside, baseline=830.0),
    ):
        assert outside([wrong])
    below = replace(inside, text="below", baseline=388.0)
    across = replace(inside, text="across", left=85.0, right=120.0, baseline=402.0)
    assert overprinted([inside, below, across]) == [("inside", "across")]


def test_the_recorder_sees_what_is_drawn_where_it_is_drawn():
    """Lines of one paragraph are a leading apart; the last page's footer ends at the right margin."""
    pieces = drawn(plan_builder.build())
    text = " ".join(p.text for p in pieces if p.page == 1)
    assert "These are estimates, not promises." in text
    last = [p for p in pieces if p.text.startswith("page ")][-1]
    assert last.right == pytest.approx(last.page_size[0] - MARGIN, abs=0.01)
    assert last.baseline == 33.0


@pytest.mark.parametrize("make", [plan_builder.couple, plan_builder.single], ids=["couple", "single"])
@pytest.mark.parametrize("currency", ["USD", "GBP"])
def test_no_heading_is_left_alone_and_page_one_is_readable(make, currency):
    """Under every heading there is text on the same page; page one is not shrunk to small print."""
    pieces = drawn(plan_builder.build(make(currency)))
    headings = {18.0, 12.5}
    for page, here in by_page(pieces).items():
        body = [p for p in here if p.baseline not in FOOTER_LINES]
        lowest = min(body, key=lambda p: p.baseline)
        assert lowest.size not in headings, (page, lowest.text)
    assert min(p.size for p in pieces if p.page == 1 and p.baseline not in FOOTER_LINES) >= 9


# Readability ----------------------------------------------------------------------------------------


def syllables(word: str) -> int:
    """Groups of vowels, a silent final e not counted; at least one."""
    word = word.lower()
    groups = len(re.findall(r"[aeiouy]+", word))
    if word.endswith("e") and not word.endswith(("le", "ee")) and groups > 1:
        groups -= 1
    return max(1, groups)


def grade(text: str) -> float:
    """Grade of the Flesch-Kincaid formula, 0.39 words/sentence + 11.8 syllables/word - 15.59.

    Kincaid, Fishburne, Rogers & Chissom (1975), Research Branch Report 8-75, US Naval Technical
    Training Command (coefficients from memory). Syllables are counted by a rule of thumb.
    """
    sentences = [s for s in re.split(r"(?<=[.!?;:])\s+|\n", text) if re.search("[A-Za-z]", s)]
    words = re.findall(r"[A-Za-z][A-Za-z'-]*", text)
    return 0.39 * len(words) / len(sentences) + 11.8 * sum(map(syllables, words)) / len(words) - 15.59


def test_the_grade_of_known_sentences():
    """Short plain words are easy, a sentence of long ones is not."""
    assert grade("The cat sat on the mat. It was a hot day.") < 1
    assert (
        grade("Institutional considerations notwithstanding, comprehensive diversification predominates.")
        > 20
    )


@pytest.mark.parametrize("make", [plan_builder.couple, plan_builder.single], ids=["couple", "single"])
def test_page_one_reads_easily(make):
    """At about grade 8 or below, over all of its sentences."""
    from planner.reports.blocks import Facts, KeyFigures, Text
    from planner.reports.section_year import your_year

    (page,) = your_year(plan_builder.build(make()))
    texts = []
    for block in page.blocks:
        if isinstance(block, Facts):
            texts += [text for _, text in block.rows]
        elif isinstance(block, KeyFigures):
            texts += [f.note for f in block.figures]
        elif isinstance(block, Text) and block.tone != "required":
            texts.append(block.text)
    assert grade("\n".join(texts)) <= 8.0

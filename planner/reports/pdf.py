"""HOW a report is drawn on paper: blocks -> PDF, with reportlab.

A4 or Letter by currency; the same Plan gives the same bytes (no clock, no random
identifiers). Nothing here decides what is said: see `sections`.
"""

from __future__ import annotations

import io
import os
from collections.abc import Iterable
from functools import partial
from pathlib import Path
from typing import Any

from reportlab.lib.pagesizes import A4, LETTER, landscape
from reportlab.platypus import BaseDocTemplate, Frame, NextPageTemplate, PageBreak, PageTemplate

from planner.files import write_whole
from planner.plan_record import Plan
from planner.reports.blocks import Block, NewPage, OnePage, Table, Text
from planner.reports.figures import day_words, language, uses_letter_paper
from planner.reports.flowables import build_flowables, one_page
from planner.reports.fonts import register
from planner.reports.furniture import Furniture, PageCanvas
from planner.reports.sections import SECTIONS, report_blocks
from planner.reports.tables import pages
from planner.reports.wording import DRAFT

MARGIN = 51.0  # 18 mm
_BOTTOM = 56.0
_TOP = 48.0
_WIDE_NOTE = 40.0  # room under a wide table for its note


def render_pdf(plan: Plan) -> bytes:
    """The client's report as a PDF document.

    Raises
    ------
    PlannerError
        The logo file exists but is no picture that can be drawn.
    """
    register()
    household = plan.household
    tall = LETTER if uses_letter_paper(household.currency) else A4
    stream = io.BytesIO()
    document = BaseDocTemplate(
        stream,
        pagesize=tall,
        pageTemplates=[_template("tall", tall), _template("wide", landscape(tall))],
        title=f"Retirement spending plan for {household.client_name}",
        author=", ".join(t for t in (household.practice.adviser, household.practice.firm) if t)
        or "Adviser not named",
        subject=f"Plan of {household.plan_date.isoformat()}",
        creator=f"retirement-drawdown-planner {plan.sources.version}",
        lang=language(household.currency),
        displayDocTitle=True,
        invariant=1,
    )
    story = _story(plan, report_blocks(plan), tall)
    furniture = _furniture(plan)
    document.build(story, canvasmaker=partial(PageCanvas, furniture))
    return stream.getvalue()


def write_pdf(plan: Plan, path: str | os.PathLike[str]) -> None:
    """Write the report, whole or not at all.

    Raises
    ------
    PlannerError
        See `render_pdf`.
    OSError
        The folder does not exist or cannot be written to.
    """
    write_whole(Path(path), render_pdf(plan))


def _template(name: str, size: tuple[float, float]) -> PageTemplate:
    frame = Frame(
        MARGIN,
        _BOTTOM,
        size[0] - 2 * MARGIN,
        size[1] - _BOTTOM - _TOP,
        leftPadding=0,
        rightPadding=0,
        topPadding=0,
        bottomPadding=0,
        id=name,
    )
    return PageTemplate(id=name, frames=[frame], pagesize=size)


def _story(plan: Plan, blocks: Iterable[Block], tall: tuple[float, float]) -> list[Any]:
    """Flowables of all blocks, with page turns for wide tables."""
    width, height = tall[0] - 2 * MARGIN, tall[1] - _BOTTOM - _TOP
    wide_width, wide_height = tall[1] - 2 * MARGIN, tall[0] - _BOTTOM - _TOP
    logo = plan.household.practice.logo_file
    story: list[Any] = []
    fresh = True
    pending: list[Block] = []

    def flush() -> None:
        nonlocal fresh
        if pending:
            story.extend(build_flowables(pending, width))
            pending.clear()
            fresh = False

    for block in blocks:
        if isinstance(block, OnePage):
            flush()
            story.append(one_page(block.blocks, width, height, logo))
            fresh = False
        elif isinstance(block, NewPage):
            flush()
            if not fresh:
                story.append(PageBreak())
                fresh = True
        elif isinstance(block, Table) and block.wide:
            flush()
            for part in pages(block, wide_width, wide_height - _WIDE_NOTE):
                story += [NextPageTemplate("wide"), PageBreak(), part]
            story += build_flowables([Text(block.note, "note")] if block.note else [], wide_width)
            story += [NextPageTemplate("tall"), PageBreak()]
            fresh = True
        else:
            pending.append(block)
    flush()
    if isinstance(story[-1], PageBreak):
        story.pop()
    return story


def _furniture(plan: Plan) -> Furniture:
    """What stands on every page: the draft mark, and who, when and from which workbook."""
    household, sources = plan.household, plan.sources
    practice = household.practice
    made_by = ", ".join(t for t in (practice.adviser, practice.firm) if t) or "adviser not named"
    return Furniture(
        margin=MARGIN,
        first_line=(
            f"{household.client_name}",
            f"Plan of {day_words(household.plan_date, household.currency)}",
            made_by,
        ),
        second_line=(
            f"Workbook {sources.workbook_sha256[:16]}",
            f"version {sources.version}",
            f"life tables {', '.join(sources.life_tables)}",
            f"tax {sources.tax_rules}",
            f"seed {sources.seed}",
        ),
        draft=DRAFT if practice.is_draft else "",
        parts=tuple((section.number, section.title) for section in SECTIONS[1:]),
    )

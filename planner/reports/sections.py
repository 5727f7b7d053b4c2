"""WHAT a report says: its parts, each a function from the Plan to blocks.

To add a part, write its function in a ``section_*.py`` file and list it here; `pdf` draws blocks
and knows no section.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from planner.plan_record import Plan
from planner.reports.blocks import Block
from planner.reports.section_assumptions import costs_and_assumptions
from planner.reports.section_comparison import compared_with_rules, how_close, what_if
from planner.reports.section_facts import what_you_told_us
from planner.reports.section_instructions import instructions
from planner.reports.section_method import method_and_information
from planner.reports.section_outlook import how_it_could_go
from planner.reports.section_review import next_review
from planner.reports.section_schedule import schedule
from planner.reports.section_year import your_year


@dataclass(frozen=True, slots=True)
class Section:
    """A numbered part of the report; `blocks` opens with its level 1 heading."""

    number: int
    title: str
    blocks: Callable[[Plan], tuple[Block, ...]]


SECTIONS: tuple[Section, ...] = (
    Section(1, "Your year on one page", your_year),
    Section(2, "What you told us", what_you_told_us),
    Section(3, "This year's instructions", instructions),
    Section(4, "Year by year", schedule),
    Section(5, "At the next review", next_review),
    Section(6, "How it could go", how_it_could_go),
    Section(7, "Compared with rules of thumb", compared_with_rules),
    Section(8, "What if", what_if),
    Section(9, "How close to the best possible", how_close),
    Section(10, "Costs and assumptions", costs_and_assumptions),
    Section(11, "Method, limits and important information", method_and_information),
)


def report_blocks(plan: Plan) -> tuple[Block, ...]:
    """Every block of the report, in order."""
    return tuple(block for section in SECTIONS for block in section.blocks(plan))

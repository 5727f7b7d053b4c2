"""Part 11: method, limits, important information, signatures."""

from __future__ import annotations

from planner.plan_record import Plan
from planner.reports.blocks import Block, Bullets, Facts, Heading, NewPage, Signatures, Text
from planner.reports.figures import day_words
from planner.reports.section_year import required_wording
from planner.reports.wording import ESTIMATES, IMPORTANT_INFORMATION, LIMITS, METHOD


def method_and_information(plan: Plan) -> tuple[Block, ...]:
    """How it was made, what it leaves out, and who answers for it."""
    return (
        NewPage(),
        Heading("Method, limits and important information", 1, 11),
        Heading("Method"),
        *(Text(paragraph) for paragraph in METHOD),
        Heading("What the model leaves out"),
        Bullets(LIMITS),
        Heading("Important information"),
        *(block for title, text in IMPORTANT_INFORMATION for block in (Heading(title, 3), Text(text))),
        *_local(plan),
        Heading("Who made this plan"),
        Facts(_who(plan)),
        Signatures(
            f"{ESTIMATES} We have read and talked through this plan, its cautions and its assumptions.",
            (
                *(p.name for p in plan.household.people),
                plan.household.practice.adviser or "Adviser",
            ),
        ),
    )


def _local(plan: Plan) -> tuple[Block, ...]:
    wording = required_wording(plan)
    return (Heading("Local rules", 3), *wording) if wording else ()


def _who(plan: Plan) -> tuple[tuple[str, str], ...]:
    practice, sources = plan.household.practice, plan.sources
    return (
        ("Adviser", practice.adviser or "not named"),
        ("Firm", practice.firm or "not named"),
        ("Registration number", practice.registration_number or "not given"),
        ("Contact", practice.contact or "not given"),
        ("Plan date", day_words(plan.household.plan_date, plan.household.currency)),
        ("Workbook", f"{sources.workbook_name}, fingerprint {sources.workbook_sha256[:16]}"),
        ("Program version", sources.version),
    )

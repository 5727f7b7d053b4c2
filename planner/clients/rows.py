"""One row a household: what an adviser with many of them has to know, and who needs a call first."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import asdict, dataclass, replace
from typing import Any, Literal, TypeAlias

from planner.diagnostics import Diagnostic
from planner.plan_record import Plan
from planner.reports.export import money, share
from planner.reports.figures import Money, of_futures, percent

State: TypeAlias = Literal["planned", "problems", "failed"]

LIKELY_CUT = 0.10
"""A chance of falling below essential spending from which on a client is called for it. Ours."""

LARGE_CHANGE = 0.10
"""A change of spending since last year from which on a client is called for it. Ours; the band of
no change within a plan is as wide."""


@dataclass(frozen=True, slots=True)
class ChangedFigures:
    """A what-if or stress asked for all clients; figures are None where it cannot be had, see `note`."""

    name: str
    spending_this_year: float | None
    chance_below_essential: float | None
    note: str = ""


@dataclass(frozen=True, slots=True)
class LastPlan:
    """An earlier plan of the same client: its date (ISO) and spending, in that day's money."""

    plan_date: str
    spending: float


@dataclass(frozen=True, slots=True)
class ClientRow:
    """One household of a list.

    Attributes
    ----------
    name
        Its files are ``<name>.pdf`` and ``<name>.json``.
    workbook
        Path below the folder of clients.
    state
        ``planned``; ``problems``: the workbook needs fixing; ``failed``: the program or the machine
        could not do it. Figures are None unless planned.
    essential
        Essential spending this year.
    least_to_take, still_due
        Minimum distribution of the year, and what is left of it.
    gap_share, gap_money
        How near the best possible is proved; None where it was not computed.
    """

    name: str
    workbook: str
    state: State
    client: str = ""
    plan_date: str = ""
    currency: str = ""
    spending_this_year: float | None = None
    essential: float | None = None
    chance_below_essential: float | None = None
    shortfall: float | None = None
    least_to_take: float | None = None
    still_due: float | None = None
    gap_share: float | None = None
    gap_money: float | None = None
    last: LastPlan | None = None
    changed: tuple[ChangedFigures, ...] = ()
    warnings: tuple[Diagnostic, ...] = ()
    problems: tuple[Diagnostic, ...] = ()
    failure: str = ""

    @property
    def change_since_last(self) -> float | None:
        """Change of spending since the last plan, a share; both in the money of their own day."""
        if self.last is None or self.spending_this_year is None or self.last.spending <= 0:
            return None
        return self.spending_this_year / self.last.spending - 1


def planned_row(name: str, workbook: str, plan: Plan, changed: Iterable[ChangedFigures]) -> ClientRow:
    """Row of a client whose plan was made; figures rounded as in the results file."""
    now, proof, optimum = plan.this_year, plan.proof, plan.strategies[0]
    return ClientRow(
        name=name,
        workbook=workbook,
        state="planned",
        client=plan.household.client_name,
        plan_date=plan.household.plan_date.isoformat(),
        currency=plan.household.currency,
        spending_this_year=money(now.spending),
        essential=money(plan.schedule[0].essential),
        chance_below_essential=share(optimum.chance_below_essential),
        shortfall=money(optimum.shortfall),
        least_to_take=money(now.minimum_distribution),
        still_due=money(sum(account.still_due for account in now.accounts)),
        gap_share=share(proof.gap_share) if proof else None,
        gap_money=money(proof.gap_money) if proof else None,
        changed=tuple(changed),
        warnings=plan.warnings,
    )


def failed_row(
    name: str, workbook: str, *, problems: Iterable[Diagnostic] = (), failure: str = ""
) -> ClientRow:
    """Row of a client for whom there is no plan: problems of the workbook, or what went wrong."""
    found = tuple(problems)
    return ClientRow(name, workbook, "problems" if found else "failed", problems=found, failure=failure)


def row_json(row: ClientRow) -> dict[str, Any]:
    """Return a row as plain data, its tuples as lists."""
    return asdict(row)


def row_from_json(data: dict[str, Any]) -> ClientRow:
    """Return the row that `row_json` was made from; raises TypeError or KeyError for anything else."""
    return replace(
        ClientRow(**data),
        last=LastPlan(**data["last"]) if data["last"] else None,
        changed=tuple(ChangedFigures(**entry) for entry in data["changed"]),
        warnings=tuple(Diagnostic(**entry) for entry in data["warnings"]),
        problems=tuple(Diagnostic(**entry) for entry in data["problems"]),
    )


def reasons(row: ClientRow) -> tuple[tuple[int, float, str], ...]:
    """Why this client needs a call, most urgent first: urgency (0 is highest), size, words.

    0 spending is below the bills this year; 1 there is no plan; 2 bills are cut in at least a
    tenth of futures; 3 they are so after a change asked for all; 4 this year's spending falls by
    a tenth or more since last year; 5 some of the least to take is due; 6 spending rises by a
    tenth or more; 7 the workbook has warnings.
    """
    if row.state == "problems":
        errors = [problem for problem in row.problems if problem.severity == "error"]
        count = f"{len(errors)} problem{'s' if len(errors) != 1 else ''}"
        return ((1, len(errors), f"no plan: the workbook has {count}, first {errors[0].where}"),)
    if row.state == "failed":
        return ((1, 0.0, f"no plan: {row.failure}"),)
    return tuple(sorted(_planned_reasons(row), key=lambda reason: (reason[0], -reason[1])))


def _planned_reasons(row: ClientRow) -> Iterable[tuple[int, float, str]]:
    amounts = Money(row.currency)
    spending, essential = row.spending_this_year or 0.0, row.essential or 0.0
    chance = row.chance_below_essential or 0.0
    if spending < essential - 0.5:  # nobody is called about cents
        short = essential - spending
        yield 0, short / essential, f"bills cannot be paid this year: short by {amounts.exact(short)}"
    if chance >= LIKELY_CUT:
        by = amounts.about(row.shortfall or 0.0)
        yield 2, chance, f"bills are cut in {of_futures(chance)} futures, by about {by} a year"
    for figures in row.changed:
        after = figures.chance_below_essential
        if after is not None and after >= LIKELY_CUT:
            yield 3, after, f"with '{figures.name}' bills are cut in {of_futures(after)} futures"
    change = row.change_since_last
    if change is not None and change <= -LARGE_CHANGE:
        yield 4, -change, f"spends {percent(-change, 0)} less than last year"
    if row.still_due:
        yield 5, row.still_due, f"{amounts.exact(row.still_due)} still to take this year"
    if change is not None and change >= LARGE_CHANGE:
        yield 6, change, f"can spend {percent(change, 0)} more than last year"
    if row.warnings:
        count = len(row.warnings)
        yield 7, count, f"{count} warning{'s' if count != 1 else ''} on the workbook"


def by_urgency(rows: Iterable[ClientRow]) -> list[ClientRow]:
    """Rows by who needs a call first: the most urgent reason, its size, then the name.

    Money is compared across currencies as a bare number only within urgency 5.
    """

    def key(row: ClientRow) -> tuple[int, float, str, str]:
        found = reasons(row)
        urgency, size = (found[0][0], found[0][1]) if found else (8, 0.0)
        return urgency, -size, row.client.casefold(), row.workbook

    return sorted(rows, key=key)

"""`planner compare`: the views that were asked for, as data and as tables for the terminal."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import partial
from typing import TYPE_CHECKING, TypeVar

from planner.beside import shared
from planner.commands.answers import Answer, Block
from planner.diagnostics import Diagnostic, InputError
from planner.household import Household
from planner.plan import COARSE_GRID, Comparison, PlanSettings, Progress, compare, rule_key
from planner.plan_record import StrategyResult
from planner.problem import Problem
from planner.projection import later_ages
from planner.reports import export_views, terminal_comparison, terminal_views
from planner.reports.export import Json
from planner.rule_terms import parse_rule
from planner.scenarios import changed, parse_change, plan_what_ifs
from planner.workbook.reading import ReadWorkbook

if TYPE_CHECKING:
    from rich.console import RenderableType

Item = TypeVar("Item")
Result = TypeVar("Result")

QUICK_PATHS = 1_500
"""Futures for what-ifs, stresses and searches, where no other number is asked for."""


@dataclass(frozen=True, slots=True)
class Views:
    """What was asked for on the command line.

    Attributes
    ----------
    rules, what_ifs : tuple of str
        As typed.
    together : bool
        The what-ifs are one change.
    own_what_ifs : bool
        Those of the workbook.
    stresses, decisions, history, risk, legacy : bool
        Further tables; each replaces the comparison of rules.
    bootstrap : bool
        The comparison of rules in bootstrapped years of the sheet History.
    pension_cut_year : int or None
    futures : int or None
    """

    rules: tuple[str, ...] = ()
    what_ifs: tuple[str, ...] = ()
    together: bool = False
    own_what_ifs: bool = False
    stresses: bool = False
    decisions: bool = False
    history: bool = False
    risk: bool = False
    legacy: bool = False
    bootstrap: bool = False
    pension_cut_year: int | None = None
    futures: int | None = None

    @property
    def has_tables(self) -> bool:
        """A table other than the comparison of rules is asked for."""
        return self.stresses or self.decisions or self.history or self.risk or self.legacy


def answer(
    read: ReadWorkbook,
    views: Views,
    settings: PlanSettings,
    progress: Progress,
    warn: Callable[[Sequence[Diagnostic]], None],
) -> Answer:
    """Compute the views.

    Parameters
    ----------
    settings
        For the comparison of rules; the other views use coarser grids and fewer futures.
    warn
        Called with the warnings of the workbook and of each changed one.

    Raises
    ------
    InputError
        Rules, parameters or addresses that do not exist, each with its near miss; a changed client
        that breaks a rule; a history that is not there.
    """
    settings = with_rules(settings, views.rules)
    # A change is compared with the original on the same coarser grid, so errors nearly drop out.
    quick = replace(settings, grid=COARSE_GRID, n_paths=views.futures or QUICK_PATHS, late_years=False)
    changes = _every(parse_change, views.what_ifs)
    warn(read.warnings)
    household = read.household
    head: Json = {
        "client": household.client_name,
        "plan_date": household.plan_date.isoformat(),
        "currency": household.currency,
    }
    if views.has_tables:
        if changes:
            read = changed(read, changes)
            warn(read.warnings)
        return _tables(read, views, quick, progress, head)
    scenarios = _scenarios(read, changes, views)
    if scenarios:
        return _what_ifs(read, scenarios, views, quick, progress, warn, head)
    return _comparison(read, views, settings, progress, head)


def with_rules(settings: PlanSettings, rules: Sequence[str]) -> PlanSettings:
    """Settings with the rules and their parameters as typed on a command line."""
    if not rules:
        return settings

    def known(text: str) -> tuple[str, dict[str, float]]:
        name = text.partition(":")[0]
        key = rule_key(name)
        return key, parse_rule(key + text[len(name) :])[1]

    parsed = _every(known, rules)
    parameters = tuple((key, tuple(values.items())) for key, values in parsed if values)
    return replace(settings, rules=tuple(key for key, _ in parsed), rule_parameters=parameters)


Scenario = tuple[str, tuple[tuple[str, str], ...], ReadWorkbook]
"""Name, changes and changed workbook."""


def _scenarios(read: ReadWorkbook, changes: Sequence[tuple[str, str]], views: Views) -> list[Scenario]:
    def named(group: Sequence[tuple[str, str]]) -> Scenario:
        name = "; ".join(f"{address}={value}" for address, value in group)
        return name, tuple(group), changed(read, group)

    groups = ([list(changes)] if changes else []) if views.together else [[change] for change in changes]
    scenarios = _every(named, groups)
    if views.own_what_ifs:
        own = plan_what_ifs(read)
        if not own and not scenarios:
            message = "the workbook has no what-ifs: fill in the sheet What-ifs, or use --what-if"
            raise InputError([Diagnostic("what-ifs-missing", "--what-ifs", message)])
        scenarios += [(name, (), other) for name, other in own]
    return scenarios


def _comparison(
    read: ReadWorkbook, views: Views, settings: PlanSettings, progress: Progress, head: Json
) -> Answer:
    household = read.household
    made = compare(household, settings, progress)
    note = ""
    if views.bootstrap:
        from planner.history import MEAN_BLOCK, in_bootstrapped_years
        from planner.plan import strategies_in

        solved = in_bootstrapped_years(made.solved, settings)
        made = Comparison(solved, strategies_in(solved, settings))
        note = (
            f"Markets drawn from the sheet History in blocks of {MEAN_BLOCK:g} years on average (stationary "
            "bootstrap), instead of lognormal years."
        )
    problem = made.solved.problem
    later = later_ages(problem)
    whose = household.people[0].name if household.is_couple else ""
    data = head | {"strategies": [export_views.strategy_json(s, later) for s in made.strategies]}
    if note:
        data["markets"] = "bootstrap"

    def table(width: int, plain: bool) -> RenderableType:
        return terminal_comparison.comparison(
            made.strategies, household.currency, problem.wealth, width, later, whose, plain
        )

    blocks: list[Block] = [table]
    if note:
        blocks.append(lambda width, plain: terminal_views.paragraph(note, width))
    return Answer(data, tuple(blocks))


def _what_ifs(
    read: ReadWorkbook,
    scenarios: Sequence[Scenario],
    views: Views,
    quick: PlanSettings,
    progress: Progress,
    warn: Callable[[Sequence[Diagnostic]], None],
    head: Json,
) -> Answer:
    quick = replace(quick, rules=quick.rules or ())
    names = ("as given", *(name for name, _, _ in scenarios))
    clients = (read, *(other for _, _, other in scenarios))

    def part(number: int) -> Progress:
        return lambda share, step: progress((number + share) / len(names), f"{names[number]}: {step}")

    jobs = [partial(_compared, client.household, quick, part(k)) for k, client in enumerate(clients)]
    with shared(jobs) as work:
        before, *afters = work.results()
    later = later_ages(before.problem)
    blocks: list[Block] = []
    found: list[Json] = []
    for (name, changes, other), after in zip(scenarios, afters, strict=True):
        warn(other.warnings)
        there = _years_of(after, [age for age, _ in later])
        found.append(
            {
                "name": name,
                "changes": [{"address": address, "value": value} for address, value in changes],
                "strategies": [export_views.strategy_json(s, there) for s in after.strategies],
            }
        )
        blocks.append(_side_by_side(before, after, name, later, there))
        if views.rules:
            blocks.append(_changed_client(after, other, there))
    data = head | {
        "strategies": [export_views.strategy_json(s, later) for s in before.strategies],
        "what_ifs": found,
    }
    if len(found) == 1:
        data["what_if"] = found[0]
    blocks.append(lambda width, plain: terminal_views.paragraph(terminal_views.QUICK_NOTE, width))
    return Answer(data, tuple(blocks))


@dataclass(frozen=True, slots=True, eq=False)
class _Compared:
    """What the tables show of a comparison; without the solution, it is quick to send."""

    household: Household
    problem: Problem
    strategies: tuple[StrategyResult, ...]


def _compared(household: Household, settings: PlanSettings, progress: Progress) -> _Compared:
    made = compare(household, settings, progress)
    return _Compared(household, made.solved.problem, made.strategies)


def _years_of(made: _Compared, ages: Sequence[int]) -> list[tuple[int, int]]:
    """The same ages of the first person, with their years in another plan."""
    own = made.problem.ages[0]
    return [(age, age - int(own[0])) for age in ages if own[0] <= age <= own[-1]]


def _side_by_side(
    before: _Compared,
    after: _Compared,
    name: str,
    later: Sequence[tuple[int, int]],
    there: Sequence[tuple[int, int]],
) -> Block:
    currency = before.household.currency
    return lambda width, plain: terminal_comparison.side_by_side(
        before.strategies[0], after.strategies[0], currency, name, later, there
    )


def _changed_client(after: _Compared, read: ReadWorkbook, later: Sequence[tuple[int, int]]) -> Block:
    household = read.household
    whose = household.people[0].name if household.is_couple else ""
    return lambda width, plain: terminal_comparison.comparison(
        after.strategies, household.currency, after.problem.wealth, width, later, whose, plain
    )


def _tables(read: ReadWorkbook, views: Views, quick: PlanSettings, progress: Progress, head: Json) -> Answer:
    household = read.household
    currency = household.currency
    data, blocks = dict(head), list[Block]()
    if views.stresses:
        from planner.surprises import stress_tests

        solved, stressed = stress_tests(household, quick, progress, views.pension_cut_year)
        later = later_ages(solved.problem)
        data["stresses"] = [export_views.stress_json(result, later) for result in stressed]
        blocks.append(
            lambda width, plain: terminal_views.stress_table(
                stressed, currency, later, solved.problem.wealth, width, plain
            )
        )
    if views.decisions:
        from planner.decisions import decisions

        curves, left_out = decisions(household, quick, progress)
        data["decisions"] = [export_views.decision_json(curve) for curve in curves]
        data["decisions_left_out"] = list(left_out)
        blocks.append(
            lambda width, plain: terminal_views.decision_tables(curves, left_out, currency, width, plain)
        )
    if views.history:
        from planner.history import historical_sequences

        sequences = historical_sequences(household, quick)
        data["history"] = export_views.sequences_json(sequences)
        blocks.append(lambda width, plain: terminal_views.sequence_table(sequences, currency, width))
    if views.risk:
        from planner.ladders import risk_ladder

        risks = risk_ladder(household, quick, progress)
        data["risk"] = [export_views.rung_json(rung) for rung in risks]
        blocks.append(lambda width, plain: terminal_views.risk_table(risks, household, width))
    if views.legacy:
        from planner.ladders import legacy_ladder

        wishes = legacy_ladder(household, quick, progress)
        data["legacy"] = [export_views.rung_json(rung) for rung in wishes]
        blocks.append(lambda width, plain: terminal_views.legacy_table(wishes, household, width))
    blocks.append(lambda width, plain: terminal_views.paragraph(terminal_views.QUICK_NOTE, width))
    return Answer(data, tuple(blocks))


def _every(convert: Callable[[Item], Result], items: Sequence[Item]) -> list[Result]:
    """Convert every item; the problems of all of them in one `InputError`."""
    results: list[Result] = []
    found: list[Diagnostic] = []
    for item in items:
        try:
            results.append(convert(item))
        except InputError as error:
            found.extend(error.diagnostics)
    if found:
        raise InputError(found)
    return results

"""The sets of tax rules there are: shipped files, and the client workbook's own.

A shipped set is a TOML file in ``planner/data/taxes`` with its sources and worked cases inside (the
README there describes the format). No code names a country.
"""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date
from functools import cache
from importlib import resources
from importlib.abc import Traversable
from typing import Any

from planner.diagnostics import Diagnostic, InputError
from planner.household import IncomeKind, OwnTaxRules, SurchargeStep
from planner.piecewise import rate_and_room
from planner.tax_assessment import TaxedPerson, TaxRules, Treatment, WorkedCase
from planner.tax_provisions import (
    STATUSES,
    Allowance,
    Bands,
    Indexing,
    MinimumDistributions,
    PartlyTaxedBenefits,
    Status,
)

__all__ = [
    "RulesDescription",
    "TaxRules",
    "TaxedPerson",
    "WorkedCase",
    "available",
    "describe",
    "load",
    "none",
    "own",
    "rate_and_room",
]


CAUTIONS = ("minimum_above_needs", "paid_in_after_access", "estate_without_rate")
"""Situations for which a set of rules may have something to say; see `planner.situation_rules`."""


@dataclass(frozen=True, slots=True)
class RulesDescription:
    """What `planner tables` says about a set of tax rules."""

    name: str
    title: str
    publisher: str
    source: str
    year: int
    taxed: str
    checked: str
    notes: tuple[str, ...]


def available() -> tuple[str, ...]:
    """Names of the shipped sets of tax rules, sorted."""
    files = (path.name for path in _folder().iterdir())
    return tuple(sorted(file.removesuffix(".toml") for file in files if file.endswith(".toml")))


@cache
def load(name: str) -> TaxRules:
    """Return a shipped set of tax rules.

    Raises
    ------
    InputError
        Code ``tax-rules-unknown``: no shipped set has this name.
    """
    known = available()
    if name not in known:
        near = difflib.get_close_matches(name, known, n=1)
        hint = f"did you mean {near[0]!r}?" if near else f"shipped sets are {', '.join(known)}, or 'own'"
        raise InputError([Diagnostic("tax-rules-unknown", "tax_rules", f"no tax rules {name!r}; {hint}")])
    return parse(name, _text(name))


def none() -> TaxRules:
    """Return the rules without any tax."""
    return load("none")


def own(rules: OwnTaxRules) -> TaxRules:
    """Return the workbook's own tax rules.

    No brackets means no income tax. Where only one status has brackets (or surcharges), they serve
    for the other as well. Everything is taken to rise with prices; all incomes are fully taxable
    unless the workbook gives a taxable share. Age counts on the plan date.

    Raises
    ------
    InputError
        Codes ``tax-brackets-invalid`` and ``tax-divisors-invalid``: the same start or age twice, a
        rate outside [0, 1], a start below 0, or a divisor not above 0.
    """
    problems = []
    for status in STATUSES:
        rows = [(start, rate) for of, start, rate in rules.brackets if of == status]
        if len({start for start, _ in rows}) < len(rows):
            problems.append(
                _problem("tax-brackets-invalid", f"two brackets ({status}) start at the same income")
            )
        if any(start < 0.0 or not 0.0 <= rate <= 1.0 for start, rate in rows):
            problems.append(
                _problem(
                    "tax-brackets-invalid", f"a bracket ({status}) starts below 0 or its rate is no share"
                )
            )
    ages = [age for age, _ in rules.divisors]
    if len(set(ages)) < len(ages) or any(divisor <= 0.0 for _, divisor in rules.divisors):
        problems.append(_problem("tax-divisors-invalid", "each age needs one divisor above 0"))
    if problems:
        raise InputError(problems)

    bands: dict[Status, Bands] = {}
    steps: list[SurchargeStep] = []
    for status, other in zip(STATUSES, reversed(STATUSES), strict=True):
        rows = [row[1:] for row in rules.brackets if row[0] == status]
        rows = sorted(rows or [row[1:] for row in rules.brackets if row[0] == other])
        bands[status] = Bands(tuple(start for start, _ in rows), tuple(rate for _, rate in rows))
        charged = [s for s in rules.surcharges if s.status == status]
        charged = charged or [s for s in rules.surcharges if s.status == other]
        steps += [SurchargeStep(status, s.income_above, s.extra_cost, s.from_age) for s in charged]
    divisors = tuple(sorted(rules.divisors))
    distributions = None
    if divisors:
        start = rules.minimum_distribution_age
        distributions = MinimumDistributions(((0, divisors[0][0] if start is None else start),), divisors)
    return TaxRules(
        name="own",
        title="Tax rules from the client workbook",
        publisher="",
        source="sheet Tax",
        year=0,
        taxed=rules.taxed,
        bands=bands,
        surcharges=tuple(steps),
        withdrawals_taxable=rules.withdrawal_taxable_share,
        minimum_distributions=distributions,
        yield_rate=rules.yield_rate,
        gains_rate=rules.gains_rate,
    )


def describe() -> tuple[RulesDescription, ...]:
    """Every shipped set of tax rules with its source and law year."""
    return tuple(
        RulesDescription(r.name, r.title, r.publisher, r.source, r.year, r.taxed, r.checked, r.notes)
        for r in map(load, available())
    )


def parse(name: str, text: str) -> TaxRules:
    """Return the tax rules written in a TOML text.

    Raises
    ------
    ValueError
        The text is not TOML, a needed key is missing or a key is not known.
    """
    content = tomllib.loads(text)
    if "extends" in content:  # another set with some of its keys replaced
        content = tomllib.loads(_text(content.pop("extends"))) | content
    top = _Table(name, content)
    income = top.table("income")
    withdrawals = top.table("withdrawals")
    planning = top.table("planning")
    gains = top.table("gains")
    surtax = top.table("investment_surtax")
    year = int(top.take("year"))
    bands = top.table("bands")
    rules = TaxRules(
        name=name,
        title=top.take("title"),
        publisher=top.take("publisher"),
        source=top.take("source"),
        year=year,
        checked=top.take("checked", ""),
        notes=tuple(top.take("notes", ())),
        year_starts=_month_and_day(top.take("year_starts", "01-01")),
        regional=top.take("regional", ""),
        cautions=top.table("cautions").texts(CAUTIONS),
        taxed=top.take("taxed", "together"),
        age_at=top.take("age_at", "plan date"),
        treatment={kind: _treatment(income.take(kind.value, 1.0)) for kind in IncomeKind},
        bands_indexing=_indexing(bands),
        bands=bands.by_status(_bands),
        allowances=tuple(_allowance(table) for table in top.tables("allowance")),
        benefits=_benefits(top.table("benefits")),
        surcharges=tuple(_surcharge(table) for table in top.tables("surcharge")),
        surcharges_indexing=_indexing(top.table("surcharges")),
        withdrawals_taxable=float(withdrawals.take("taxable_share", 1.0)),
        tax_free_share=float(withdrawals.take("tax_free_share", 0.0)),
        tax_free_cap=withdrawals.take("tax_free_cap", None),
        minimum_distributions=_minimum_distributions(top.table("minimum_distributions")),
        access_ages=tuple((int(t.take("from_year")), float(t.take("age"))) for t in top.tables("access")),
        yield_rate=float(planning.take("yield_rate", 0.0)),
        gains_rate=float(planning.take("gains_rate", 0.0)),
        gains_bands=gains.by_status(_bands),
        investment_surtax_rate=float(surtax.take("rate", 0.0)),
        investment_surtax_above=surtax.by_status(float),
        worked_cases=tuple(_worked_case(table, year) for table in top.tables("worked_case")),
    )
    top.refuse_the_rest()
    return rules


class _Table:
    """A TOML table that knows which of its keys have been read, so that a misspelt one is found."""

    def __init__(self, where: str, content: Mapping[str, Any]) -> None:
        self.where, self.content, self.unread = where, content, set(content)
        self.parts: list[_Table] = []

    def take(self, key: str, *default: Any) -> Any:  # noqa: ANN401 - TOML values have any type
        self.unread.discard(key)
        if key not in self.content and not default:
            raise ValueError(f"tax rules {self.where}: {key!r} is missing")
        return self.content.get(key, *default)

    def table(self, key: str) -> _Table:
        part = _Table(f"{self.where}.{key}", self.take(key, {}))
        self.parts.append(part)
        return part

    def tables(self, key: str) -> list[_Table]:
        parts = [_Table(f"{self.where}.{key}[{i}]", item) for i, item in enumerate(self.take(key, []))]
        self.parts += parts
        return parts

    def texts(self, keys: Sequence[str]) -> dict[str, str]:
        return {key: str(self.take(key)) for key in keys if key in self.content}

    def by_status(self, convert: Callable[[Any], Any]) -> dict[Status, Any]:
        """Entries ``single`` and ``couple``; empty where the table gives neither."""
        return {status: convert(self.take(status)) for status in STATUSES if status in self.content}

    def refuse_the_rest(self) -> None:
        if self.unread:
            raise ValueError(f"tax rules {self.where}: unknown keys {sorted(self.unread)}")
        for part in self.parts:
            part.refuse_the_rest()


def _treatment(value: float | str) -> Treatment:
    words: dict[str, Treatment] = {"ordinary": 1.0, "exempt": 0.0, "benefit": "benefit"}
    return words[value] if isinstance(value, str) else float(value)


def _month_and_day(text: str) -> tuple[int, int]:
    first = date.fromisoformat(f"2001-{text}")
    return first.month, first.day


def _indexing(table: _Table) -> Indexing:
    return Indexing(bool(table.take("indexed", True)), table.take("frozen_until", None))


def _bands(rows: Mapping[str, list[float]]) -> Bands:
    starts, rates = rows["from"], rows["rate"]
    if len(starts) != len(rates) or starts != sorted(set(starts)):
        raise ValueError("bands need increasing starts, each with a rate")
    return Bands(tuple(map(float, starts)), tuple(map(float, rates)))


def _allowance(table: _Table) -> Allowance:
    reduced = table.table("reduced_above").by_status(float)
    return Allowance(
        label=table.take("label"),
        amount=table.by_status(float),
        per_person=bool(table.take("per_person", False)),
        from_age=table.take("from_age", None),
        reduced_above=reduced or None,
        reduced_by=float(table.take("reduced_by", 0.0)),
        first_year=table.take("first_year", None),
        last_year=table.take("last_year", None),
        indexing=_indexing(table),
    )


def _benefits(table: _Table) -> PartlyTaxedBenefits | None:
    if not table.content:
        return None
    return PartlyTaxedBenefits(
        counted=float(table.take("counted")),
        thresholds=table.by_status(lambda row: tuple(map(float, row))),
        rates=tuple(map(float, table.take("rates"))),
        indexing=_indexing(table),
    )


def _surcharge(table: _Table) -> SurchargeStep:
    return SurchargeStep(
        status=table.take("status"),
        income_above=float(table.take("income_above")),
        extra_cost=float(table.take("extra_cost")),
        from_age=table.take("from_age", None),
    )


def _minimum_distributions(table: _Table) -> MinimumDistributions | None:
    if not table.content:
        return None
    first = int(table.take("first_age"))
    starting = [(int(t.take("born_from")), float(t.take("age"))) for t in table.tables("starting_age")]
    divisors = tuple((first + k, float(d)) for k, d in enumerate(table.take("divisors")))
    table.take("source")
    return MinimumDistributions(tuple(starting), divisors, table.take("due", ""))


def _worked_case(table: _Table, year: int) -> WorkedCase:
    law_year = int(table.take("law_year", year))
    people = table.tables("person")
    return WorkedCase(
        label=table.take("label"),
        source=table.take("source"),
        law_year=law_year,
        people=tuple(
            TaxedPerson(
                age=int(person.take("age")),
                birth_year=law_year - int(person.take("age")),
                incomes=tuple(
                    (kind, float(person.take(kind.value)), None)
                    for kind in IncomeKind
                    if kind.value in person.content
                ),
                withdrawal_share=float(person.take("withdrawal_share", 1.0 / len(people))),
                withdrawal_taxable_share=float(person.take("withdrawal_taxable_share", 1.0)),
            )
            for person in people
        ),
        withdrawal=float(table.take("withdrawal", 0.0)),
        gains=float(table.take("gains", 0.0)),
        yields=float(table.take("yields", 0.0)),
        together=bool(table.take("together", True)),
        tax=float(table.take("tax")),
    )


def _problem(code: str, message: str) -> Diagnostic:
    return Diagnostic(code, "own_tax", message)


def _text(name: str) -> str:
    return (_folder() / f"{name}.toml").read_text(encoding="utf-8")


def _folder() -> Traversable:
    return resources.files("planner").joinpath("data", "taxes")

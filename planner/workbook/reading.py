"""From a client workbook to a `Household`, with every problem located at its cell."""

from __future__ import annotations

import hashlib
import math
import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from datetime import date
from pathlib import Path
from typing import Any, Final

from planner.checks import nearest, shortened
from planner.diagnostics import Diagnostic, InputError
from planner.files import read_limited
from planner.household import (
    BEST_EACH_YEAR,
    JOINT,
    Account,
    AccountType,
    AnnuityQuote,
    AssetClass,
    History,
    Household,
    Income,
    IncomeKind,
    LastYear,
    MarketAssumptions,
    OneOff,
    OwnLifeTable,
    OwnTaxRules,
    Person,
    Portfolio,
    Practice,
    Preferences,
    RuleSetting,
    Spending,
    StartChoice,
    SurchargeStep,
    WhatIf,
    problems,
    risk_aversion_from_gambles,
)
from planner.workbook.addresses import replaced
from planner.workbook.archive import LARGEST_FILE
from planner.workbook.data import Entry, Row, TableData, WorkbookData
from planner.workbook.fields import Field, Form, Kind, Table, normalised
from planner.workbook.layout import IGNORED_COLUMNS, SHEETS
from planner.workbook.layout_client import IN_THE_PLAN
from planner.workbook.logo import with_logo
from planner.workbook.parsing import CellProblem, parse
from planner.workbook.scanning import scan

NOT_READ: Final = math.nan  # stands for a number that could not be read; trips no rule but "finite"
_INDEX: Final = re.compile(r"\[\d+\]")
_NUMBERS: Final = frozenset(
    (Kind.MONEY, Kind.SHARE, Kind.RATE, Kind.FACTOR, Kind.NUMBER, Kind.AGE, Kind.YEAR, Kind.CORRELATION)
)

# Rules that compare with something elsewhere: not said while that could not be read itself. A dot in
# front: of the same row. ``people.name``: the table, or the name in any of its rows.
_DEPENDS_ON: Final[dict[str, tuple[str, ...]]] = {
    "owner-unknown": ("people.name",),
    "owner-joint-single": ("people.name",),
    "partner-missing": ("people.name",),
    "people-count": ("people.name",),
    "portfolio-unknown": ("portfolios.name",),
    "income-unknown": ("incomes.name",),
    "account-unknown": ("accounts.name",),
    "year-past": ("plan_date",),
    "birth-date-future": ("plan_date",),
    "age-above-table": ("plan_date",),
    "age-below-table": ("plan_date", "own_life_table"),
    "plan-to-age-past": ("plan_date",),
    "income-over": ("plan_date",),
    "start-age-past": ("plan_date",),
    "paid-in-past": ("plan_date",),
    "continuation-kind": (".kind",),
    "joint-not-taxable": (".type",),
    "cost-basis-ignored": (".type",),
    "life-table-own-missing": ("own_life_table",),
    "tax-own-missing": ("own_tax",),
    "tax-status-missing": ("own_tax", "people"),
    "bracket-start": ("own_tax",),
    "divisors-missing": ("own_tax",),
    "weights-count": ("markets",),
    "correlation-shape": ("markets",),
    "history-shape": ("markets", "history"),
    "no-local-tax": ("tax_rules",),
    "no-mortality-adjustment": (".life_table",),
    "essentials-above-means": ("people", "accounts", "incomes", "markets", "portfolios", "plan_date"),
    "gamble-conflict": ("preferences",),
}


@dataclass(frozen=True, slots=True)
class ReadWorkbook:
    """A workbook that can be planned.

    Attributes
    ----------
    household
        Valid.
    warnings
        What is unusual but usable, located at cells; printed in the plan.
    data
        The entries it was made from; a what-if replaces some and builds anew.
    sha256
        Of the file's bytes.
    """

    household: Household
    warnings: tuple[Diagnostic, ...]
    data: WorkbookData
    sha256: str


def read_workbook(path: str | Path) -> ReadWorkbook:
    """Read a client workbook.

    Parameters
    ----------
    path
        An .xlsx file; read once, never written to.

    Raises
    ------
    InputError
        Every problem found, each at its cell (``Accounts!D7``), warnings included.
    OSError
        The file cannot be read.
    """
    file = Path(path)
    read = read_content(read_limited(file, LARGEST_FILE), file.name)
    household, warnings = with_logo(read.household, read.data, file.parent)
    return replace(read, household=household, warnings=(*read.warnings, *warnings))


def read_content(content: bytes, name: str) -> ReadWorkbook:
    """Read the bytes of a client workbook; `name` is what its file is called, for messages.

    Raises
    ------
    InputError
        See `read_workbook`.
    """
    data = scan(content, name)
    lost = _lost_addresses(data)
    try:
        household, warnings = build(data)
    except InputError as error:
        raise InputError((*error.diagnostics, *lost)) from None
    found = lost or _what_if_problems(data, household)
    if found:
        raise InputError((*found, *warnings))
    return ReadWorkbook(household, warnings, data, hashlib.sha256(content).hexdigest())


def build(data: WorkbookData) -> tuple[Household, tuple[Diagnostic, ...]]:
    """Make a household of what a workbook holds.

    Returns
    -------
    household, warnings

    Raises
    ------
    InputError
        Every problem found, each at its cell, warnings included.
    """
    return _Builder(data).run()


def _change_rows(data: WorkbookData) -> list[tuple[Entry, Entry]]:
    """Return name and change of every row of the sheet What-ifs that has both."""
    table = data.tables.get(("What-ifs", "what-ifs"))
    rows = [(row.entries.get("name"), row.entries.get("change")) for row in table.rows] if table else []
    return [(name, change) for name, change in rows if name and change and not change.is_blank]


def _lost_addresses(data: WorkbookData) -> list[Diagnostic]:
    """Changes on the sheet What-ifs that name nothing, each at its cell."""
    found: list[Diagnostic] = []
    for _, change in _change_rows(data):
        try:
            replaced(data, change.text, "")
        except InputError as error:
            found.extend(replace(problem, where=change.cell) for problem in error.diagnostics)
    return found


def _what_if_problems(data: WorkbookData, household: Household) -> list[Diagnostic]:
    """Try every what-if of the workbook; report at its first cell on the sheet What-ifs."""
    cells: dict[str, str] = {}
    for name, change in _change_rows(data):
        cells.setdefault(" ".join(name.text.split()), change.cell)
    found: list[Diagnostic] = []
    for what_if in household.what_ifs:
        changed = data
        for address, value in what_if.changes:
            changed = replaced(changed, address, value)
        try:
            build(changed)
        except InputError as error:
            for problem in error.diagnostics:
                if problem.severity == "error":
                    message = f"with {what_if.name!r}, {problem.where}: {problem.message} ({problem.code})"
                    where = cells.get(what_if.name, "What-ifs")
                    found.append(Diagnostic("what-if-invalid", where, message))
    return found


def _whole(value: float) -> int:
    """Return a whole number as an int; any other as it is, for the household's rules to refuse."""
    return int(value) if math.isfinite(value) and value == int(value) else value  # type: ignore[return-value]


def _and_above(path: str) -> Iterator[str]:
    """Yield a household path and what holds it: ``people[0].name``, ``people[0]``, ``people``."""
    while path:
        yield path
        path = path[: max(path.rfind("."), path.rfind("["), 0)]


class _FromUnread:
    """Whether a complaint only follows from cells that could not be read."""

    def __init__(self, unread: set[str]) -> None:
        self.unread = unread
        self.holding = {part for path in unread for part in _and_above(path)}
        self.columns = {_INDEX.sub("", path) for path in unread}

    def __call__(self, complaint: Diagnostic) -> bool:
        if any(path in self.unread for path in _and_above(complaint.where)):
            return True
        parent = complaint.where.rpartition(".")[0]
        for dependency in _DEPENDS_ON.get(complaint.code, ()):
            whole = parent + dependency if dependency.startswith(".") else dependency
            table = whole.removesuffix(".name") if whole.endswith(".name") else ""
            if whole in self.holding or whole in self.columns or table in self.unread:
                return True
        return False


class _Builder:
    """One pass over the entries: values, problems, and where each household field came from."""

    def __init__(self, data: WorkbookData) -> None:
        self.data = data
        self.found: list[Diagnostic] = list(data.problems)
        self.cells: dict[str, str] = {}
        self.labels: dict[str, str] = {}
        self.unread: set[str] = set()  # household paths whose cells could not be read
        self.values: dict[str, dict[str, Any]] = {}  # form values by the path's first part

    # ------------------------------------------------------------------ entries to values

    def say(self, code: str, where: str, message: str, *, warning: bool = False) -> None:
        self.found.append(Diagnostic(code, where, message, "warning" if warning else "error"))

    def value(self, field: Field, entry: Entry | None, path: str) -> Any:  # noqa: ANN401 - as the field's kind
        """Return the parsed value; None for an allowed blank; a stand-in where unreadable."""
        if entry is not None:
            self.cells[path], self.labels[path] = entry.cell, field.label
        if entry is None or entry.is_blank:
            if not field.required:
                return None
            where = entry.cell if entry is not None else path
            if entry is not None:  # an absent column or label is said once, where it should stand
                self.say("value-missing", where, f"{field.label} is blank but required: {field.note}")
        else:
            try:
                return parse(field, entry)
            except CellProblem as problem:
                self.say(problem.code, entry.cell, f"{field.label}: {problem.message}")
        self.unread.add(path)
        if field.kind in _NUMBERS:
            return NOT_READ
        if field.kind is Kind.DATE:
            return date(2000, 1, 1)
        if field.kind is Kind.CHOICE:
            return field.choices[0].partition(" (")[0]
        return "" if field.required else None

    def read_forms(self) -> None:
        for sheet in SHEETS:
            for form in sheet.forms:
                if sheet.name not in self.data.sheets:
                    for field in form.fields:
                        if field.required:
                            self.unread.add(field.target)
                self._read_form(sheet.name, form)

    def _read_form(self, sheet: str, form: Form) -> None:
        for field in form.fields:
            value = self.value(field, self.data.forms.get((sheet, field.key)), field.target)
            self.cells.setdefault(field.target, sheet)
            group, _, attribute = field.target.rpartition(".")
            if value is not None:
                self.values.setdefault(group, {})[attribute] = value

    def table(self, sheet: str, name: str) -> tuple[Table, TableData | None]:
        table = next(t for s in SHEETS if s.name == sheet for t in s.tables if t.name == name)
        data = self.data.tables.get((sheet, name))
        self.cells.setdefault(table.target, data.cell if data is not None else sheet)
        if data is None and table.required:
            self.unread.add(table.target)
        return table, data

    def rows(self, sheet: str, name: str) -> list[dict[str, Any]]:
        """Return the attributes of every row of a table; blanks left out."""
        table, data = self.table(sheet, name)
        if data is None:
            return []
        self._missing_columns(table, data)
        return [self._row(table, row, f"{table.target}[{i}]") for i, row in enumerate(data.rows)]

    def _row(self, table: Table, row: Row, path: str) -> dict[str, Any]:
        self.cells[path] = row.cell
        values: dict[str, Any] = {}
        for field in table.columns:
            value = self.value(field, row.entries.get(field.key), f"{path}.{field.target}")
            if value is not None:
                values[field.target] = value
        return values

    def _missing_columns(self, table: Table, data: TableData) -> None:
        known = {column.key for column in table.columns}
        classes = {normalised(name) for name in self.class_names} if table.per_class is not None else set()
        ignored = {normalised(name) for name in IGNORED_COLUMNS}
        unknown = {k: t for k, t in data.headers.items() if k not in known | classes | ignored and k}
        wanted = [(c.key, c.label, c.required) for c in table.columns if c.key not in data.headers]
        if table.per_class is not None and data.rows:
            wanted += [
                (normalised(n), n, True) for n in self.class_names if normalised(n) not in data.headers
            ]
        if table.per_class is not None and not self.class_names:
            unknown = {}  # the sheet Markets could not be read, so any of them may be an asset class
        for key, text in unknown.items():
            near = nearest(key, (k for k, _, _ in wanted))
            hint = next((f"; did you mean {label!r}?" for k, label, _ in wanted if k == near), "")
            message = f"the column {shortened(text)!r} is not read{hint}"
            self.say("column-unknown", data.header_cells[key], message, warning=True)
        for key, label, required in wanted:
            if required and (label in self.class_names or data.rows or table.required):
                near = nearest(key, unknown)
                where = data.header_cells[near] if near else data.cell
                hint = f"; {unknown[near]!r} looks like it" if near else ""
                self.say("column-missing", where, f"there is no column {shortened(label)!r}{hint}")

    # ------------------------------------------------------------------ names

    @staticmethod
    def same(name: str, known: Iterable[str]) -> str:
        """Return the known name with the same words, case and spacing ignored; else the name."""
        folded = "".join(name.casefold().split())
        return next((k for k in known if "".join(k.casefold().split()) == folded), name)

    # ------------------------------------------------------------------ household

    def run(self) -> tuple[Household, tuple[Diagnostic, ...]]:
        self.class_names: list[str] = []
        self.read_forms()
        markets = self.markets()
        people = [Person(**row) for row in self.rows("People", "people")]
        names = [person.name for person in people]
        portfolios = self.portfolios(len(markets.asset_classes))
        holdings = [portfolio.name for portfolio in portfolios]
        top = dict(self.values.get("", {}))
        choice = top.pop("portfolio_choice", None)
        if choice is not None and normalised(choice) != normalised(BEST_EACH_YEAR):
            top["portfolio_choice"] = self.same(choice, holdings)
        for attribute, placeholder in (
            ("client_name", ""),
            ("currency", ""),
            ("tax_rules", ""),
            ("plan_date", date(2000, 1, 1)),
        ):
            top.setdefault(attribute, placeholder)
        top["tax_rules"] = top["tax_rules"].casefold()
        incomes = self.incomes(names)
        accounts = self.accounts(names, holdings)
        parts: dict[str, Any] = top | {
            "people": tuple(replace(p, life_table=p.life_table.casefold()) for p in people),
            "accounts": accounts,
            "incomes": incomes,
            "start_choices": self.start_choices([income.name for income in incomes]),
            "annuity_quote": self.annuity_quote(names, [account.name for account in accounts]),
            "rule_settings": self.rule_settings(),
            "one_offs": self.one_offs(),
            "spending": self.spending(),
            "markets": markets,
            "portfolios": portfolios,
            "preferences": self.preferences(),
            "own_tax": self.own_tax(),
            "own_life_table": self.own_life_table(),
            "what_ifs": self.what_ifs(),
            "history": self.history(),
            "last_year": LastYear(**self.values.get("last_year", {})),
            "practice": Practice(**self.values.get("practice", {})),
        }
        self._unused(parts)
        try:
            household = Household(**parts)
            complaints = tuple(problems(household))
        except InputError as error:
            complaints, household = error.diagnostics, None
        follows = _FromUnread(self.unread)
        self.found.extend(self.located(c) for c in complaints if not follows(c))
        if household is None or any(problem.severity == "error" for problem in self.found):
            raise InputError(sorted(self.found, key=lambda problem: problem.severity))
        return household, tuple(self.found)

    def located(self, complaint: Diagnostic) -> Diagnostic:
        """Return a complaint about a household field as one about its cell, with the cell's label."""
        label = self.labels.get(complaint.where)
        message = f"{label}: {complaint.message}" if label else complaint.message
        return replace(complaint, where=self.cell(complaint.where), message=message)

    def cell(self, path: str) -> str:
        """Return the cell of a household path, or of the nearest part of it that has one."""
        return next((self.cells[part] for part in _and_above(path) if part in self.cells), "workbook")

    def _unused(self, parts: dict[str, Any]) -> None:
        if parts["own_tax"] is not None and parts["tax_rules"] != "own" and "tax_rules" not in self.unread:
            message = f"own tax rules are filled in but the tax rules are {parts['tax_rules']!r}"
            self.say("own-tax-unused", self.cells["tax_rules"], message, warning=True)
        if parts["own_life_table"] is not None and all(p.life_table != "own" for p in parts["people"]):
            message = "a life table is filled in but nobody's is 'own'"
            self.say("life-table-unused", self.cells["own_life_table"], message, warning=True)

    def accounts(self, people: list[str], portfolios: list[str]) -> tuple[Account, ...]:
        accounts = []
        for row in self.rows("Accounts", "accounts"):
            row["owner"] = self.same(row["owner"], [JOINT, *people])
            row["type"] = AccountType(row["type"])
            if "held_now" in row:
                row["held_now"] = self.same(row["held_now"], portfolios)
            accounts.append(Account(**row))
        return tuple(accounts)

    def incomes(self, people: list[str]) -> tuple[Income, ...]:
        incomes = []
        for row in self.rows("Income", "incomes"):
            row["owner"] = self.same(row["owner"], [JOINT, *people])
            row["kind"] = IncomeKind(row["kind"])
            incomes.append(Income(**row))
        return tuple(incomes)

    def start_choices(self, incomes: list[str]) -> tuple[StartChoice, ...]:
        rows = self.rows("Start choices", "start choices")
        return tuple(StartChoice(**row | {"income": self.same(row["income"], incomes)}) for row in rows)

    def annuity_quote(self, people: list[str], accounts: list[str]) -> AnnuityQuote | None:
        """Return the quote, None where there is no rate; a blank person or account is the first."""
        values = dict(self.values.get("annuity_quote", {}))
        if "rate" not in values:
            return None
        values["owner"] = self.same(values.get("owner", people[0] if people else ""), people)
        values["account"] = self.same(values.get("account", accounts[0] if accounts else ""), accounts)
        return AnnuityQuote(**values)

    def rule_settings(self) -> tuple[RuleSetting, ...]:
        return tuple(
            RuleSetting(group.removeprefix("rules."), parameter, value)
            for group, values in self.values.items()
            if group.startswith("rules.")
            for parameter, value in values.items()
        )

    def one_offs(self) -> tuple[OneOff, ...]:
        one_offs = []
        for row in self.rows("One-offs", "one-offs"):
            row["in_the_plan"] = row.get("in_the_plan", IN_THE_PLAN) == IN_THE_PLAN
            one_offs.append(OneOff(**row))
        return tuple(one_offs)

    def spending(self) -> Spending:
        steps = tuple((row["age"], row["factor"]) for row in self.rows("Spending", "spending by age"))
        values = {"essential": NOT_READ} | self.values.get("spending", {})
        return Spending(**values, age_profile=steps)

    def preferences(self) -> Preferences:
        values = dict(self.values.get("preferences", {}))
        third, second = values.get("accepts_third_cut"), values.get("accepts_second_gamble")
        if "risk_aversion" not in values and "preferences.risk_aversion" not in self.unread:
            if third is not None and second is not None:
                values["risk_aversion"] = risk_aversion_from_gambles(third, second)
            elif third is not None or second is not None:
                blank = "accepts_second_gamble" if second is None else "accepts_third_cut"
                message = "one of the two answers is blank, so both are left aside and risk aversion is 4"
                self.say("gamble-incomplete", self.cells[f"preferences.{blank}"], message, warning=True)
        return Preferences(**values)

    def markets(self) -> MarketAssumptions:
        table, data = self.table("Markets", "asset classes")
        if data is not None:
            key = table.columns[0].key
            self.class_names = [
                " ".join(row.entries[key].text.split()) for row in data.rows if key in row.entries
            ]
        classes = tuple(AssetClass(**row) for row in self.rows("Markets", "asset classes"))
        inflation = self.values.get("markets", {}).get("inflation", NOT_READ)
        return MarketAssumptions(inflation, classes, self._correlations(table, data, len(classes)))

    def _correlations(self, table: Table, data: TableData | None, size: int) -> tuple[tuple[float, ...], ...]:
        """Return the matrix; a blank is filled from the other half, a blank diagonal is 1."""
        if data is None or table.per_class is None:
            return ()
        keys = [normalised(name) for name in self.class_names]
        given: dict[tuple[int, int], float] = {}
        for i, row in enumerate(data.rows):
            for j, key in enumerate(keys):
                path = f"markets.correlations[{i}][{j}]"
                value = self.value(table.per_class, row.entries.get(key), path)
                if path in self.unread:
                    value = NOT_READ
                if value is not None:
                    given[i, j] = value
        for i in range(size):
            given.setdefault((i, i), 1.0)
            for j in range(i):
                if (i, j) not in given and (j, i) not in given:
                    given[i, j] = NOT_READ
                    path = f"markets.correlations[{i}][{j}]"
                    self.unread |= {path, f"markets.correlations[{j}][{i}]"}
                    if path in self.cells:
                        pair = f"{self.class_names[i]} with {self.class_names[j]}"
                        message = f"the correlation of {pair} is blank, here and the other way round"
                        self.say("correlation-missing", self.cells[path], message)
                given.setdefault((i, j), given.get((j, i), NOT_READ))
                given.setdefault((j, i), given[i, j])
        return tuple(tuple(given[i, j] for j in range(size)) for i in range(size))

    def portfolios(self, size: int) -> tuple[Portfolio, ...]:
        table, data = self.table("Portfolios", "portfolios")
        rows = self.rows("Portfolios", "portfolios")
        if data is None or table.per_class is None:
            return ()
        portfolios = []
        for index, (row, values) in enumerate(zip(data.rows, rows, strict=True)):
            path = f"portfolios[{index}]"
            weights = []
            for position, name in enumerate(self.class_names):
                entry = row.entries.get(normalised(name))
                where = f"{path}.weights[{position}]"
                weight = self.value(table.per_class, entry, where)
                if where in self.unread or entry is None:
                    weight = NOT_READ
                    self.unread.add(where)
                weights.append(0.0 if weight is None else weight)
                self.cells.setdefault(f"{path}.weights", self.cells.get(where, row.cell))
            portfolios.append(
                Portfolio(values["name"], tuple(weights[:size]), values.get("yearly_cost", 0.0))
            )
        return tuple(portfolios)

    def own_tax(self) -> OwnTaxRules | None:
        values = dict(self.values.get("own_tax", {}))
        brackets = [(r["status"], r["start"], r["rate"]) for r in self.rows("Tax", "brackets")]
        divisors = [(_whole(r["age"]), r["divisor"]) for r in self.rows("Tax", "divisors")]
        surcharges = tuple(SurchargeStep(**row) for row in self.rows("Tax", "surcharges"))
        self.cells.setdefault("own_tax", self.cells["own_tax.brackets"])
        if not (values or brackets or divisors or surcharges):
            return None
        return OwnTaxRules(
            **values, brackets=tuple(brackets), divisors=tuple(divisors), surcharges=surcharges
        )

    def own_life_table(self) -> OwnLifeTable | None:
        table, data = self.table("Life table", "life table")
        rows = self.rows("Life table", "life table")
        if data is None or not rows:
            return None
        for index, row in enumerate(data.rows):
            for attribute, key in (("ages", "age"), ("women", "women"), ("men", "men")):
                if key in row.entries:
                    self.cells[f"{table.target}.{attribute}[{index}]"] = row.entries[key].cell
        return OwnLifeTable(
            tuple(_whole(row["age"]) for row in rows),
            tuple(row["women"] for row in rows),
            tuple(row["men"] for row in rows),
        )

    def what_ifs(self) -> tuple[WhatIf, ...]:
        changes: dict[str, list[tuple[str, str]]] = {}
        for row in self.rows("What-ifs", "what-ifs"):
            name = " ".join(row["name"].split())
            changes.setdefault(name, []).append((row["address"], row.get("value", "")))
        return tuple(WhatIf(name, tuple(pairs)) for name, pairs in changes.items())

    def history(self) -> History | None:
        table, data = self.table("History", "history")
        rows = self.rows("History", "history")
        if data is None or not rows or table.per_class is None:
            return None
        field = replace(table.per_class, required=True)
        returns = []
        for index, row in enumerate(data.rows):
            for attribute, key in (("years", "year"), ("inflation", "inflation")):
                if key in row.entries:
                    self.cells[f"history.{attribute}[{index}]"] = row.entries[key].cell
            self.cells[f"history.returns[{index}]"] = row.cell
            values = []
            for position, name in enumerate(self.class_names):
                path = f"history.returns[{index}][{position}]"
                values.append(self.value(field, row.entries.get(normalised(name)), path))
            returns.append(tuple(values))
        return History(
            tuple(row["year"] for row in rows), tuple(row["inflation"] for row in rows), tuple(returns)
        )

"""What-ifs: a client's workbook with some values changed, by the workbook's own words."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from planner.diagnostics import Diagnostic, InputError
from planner.workbook.addresses import replaced
from planner.workbook.fields import normalised
from planner.workbook.layout_client import IN_THE_PLAN
from planner.workbook.reading import ReadWorkbook, build


def changed(read: ReadWorkbook, changes: Sequence[tuple[str, str]]) -> ReadWorkbook:
    """Return the workbook as if other values had been typed into some of its cells.

    Parameters
    ----------
    read
        The client's workbook; left as it is.
    changes
        Pairs of an address and the new value as typed. An address is ``Sheet/Field`` or
        ``Sheet/Row/Column``, such as ``Income/State pension/From age``; case and spacing do not
        matter. An empty value clears the cell.

    Raises
    ------
    InputError
        An address that names nothing (each with its near miss), or a household that breaks a
        rule, at the cells concerned: the changed household is validated as a read one is.
    """
    data, found = read.data, list[Diagnostic]()
    for address, value in changes:
        try:
            data = replaced(data, address, value)
        except InputError as error:
            found.extend(error.diagnostics)
    if found:
        raise InputError(found)
    household, warnings = build(data)
    return replace(read, household=household, warnings=warnings, data=data)


def parse_change(text: str) -> tuple[str, str]:
    """Split ``ADDRESS=VALUE`` as typed on a command line, at the first equals sign.

    Raises
    ------
    InputError
        Code ``address-malformed``: there is no equals sign.
    """
    address, equals, value = text.partition("=")
    if not equals:
        message = "expected ADDRESS=VALUE, such as 'Income/State pension/From age=70'"
        raise InputError([Diagnostic("address-malformed", text, message)])
    return address.strip(), value.strip()


def plan_what_ifs(read: ReadWorkbook) -> list[tuple[str, ReadWorkbook]]:
    """Return the workbook's own what-ifs: name and changed workbook, in the workbook's order.

    First those of the sheet What-ifs (rows with one name make one what-if); then the one-offs
    that count only as a what-if, those with the same item together.

    Raises
    ------
    InputError
        Never for the sheet What-ifs of a workbook that was read: reading has tried each.
    """
    scenarios = [(what_if.name, changed(read, what_if.changes)) for what_if in read.household.what_ifs]
    table = read.data.tables.get(("One-offs", "one-offs"))
    items = dict.fromkeys(one_off.item for one_off in read.household.one_offs if not one_off.in_the_plan)
    for item in items:
        data = read.data
        for index, one_off in enumerate(read.household.one_offs):
            if table is not None and one_off.item == item and not one_off.in_the_plan:
                data = data.with_cell("One-offs", "one-offs", index, normalised("Counts"), IN_THE_PLAN)
        household, warnings = build(data)
        scenarios.append((item, replace(read, household=household, warnings=warnings, data=data)))
    return scenarios

"""Problems found in the input, as data: a stable code, a place, a message."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Literal

Severity = Literal["error", "warning"]


@dataclass(frozen=True, slots=True)
class Diagnostic:
    """One problem.

    Attributes
    ----------
    code
        Stable, machine-readable, e.g. ``"owner-unknown"``. Tests match the code, never the text.
    where
        A household field path such as ``"accounts[0].owner"``, or a cell such as ``"Accounts!B2"``
        once located.
    message
        What was found, what is expected, the near miss.
    severity
        ``"error"`` stops the run; ``"warning"`` is printed in the plan.
    """

    code: str
    where: str
    message: str
    severity: Severity = "error"

    def __str__(self) -> str:
        return f"{self.severity} {self.where}: {self.message} ({self.code})"


class PlannerError(Exception):
    """Anything the program can explain to its user (exit code 1 unless an `InputError`)."""


class InputError(PlannerError):
    """The workbook or the command line needs fixing (exit code 2); carries every problem found."""

    def __init__(self, diagnostics: Iterable[Diagnostic]) -> None:
        self.diagnostics: tuple[Diagnostic, ...] = tuple(diagnostics)
        super().__init__("\n".join(str(d) for d in self.diagnostics))

    def located(self, cells: Mapping[str, str]) -> InputError:
        """Return the same problems with household field paths replaced by workbook cells."""
        return InputError(replace(d, where=cells.get(d.where, d.where)) for d in self.diagnostics)

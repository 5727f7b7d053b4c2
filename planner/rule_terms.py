"""Parameters of the spending rules in their published terms: for the workbook and the command line.

The rules themselves stand in `planner.rules`; a test holds the two equal.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Final, Literal

from planner.diagnostics import Diagnostic, InputError

TermKind = Literal["share", "years", "age"]


@dataclass(frozen=True, slots=True)
class RuleTerm:
    """One parameter.

    Attributes
    ----------
    rule : str
        Key of the rule.
    parameter : str
        Attribute of the rule's class; what the command line calls it, with hyphens.
    label : str
        On the sheet Rules: the rule's name to people, then the published term.
    kind : str
        ``share`` (a fraction), ``years`` or ``age``.
    default, low, high : float
        As published (or as the rule's docstring says), and the limits within which it has a meaning.
    """

    rule: str
    parameter: str
    label: str
    kind: TermKind
    default: float
    low: float
    high: float

    @property
    def option(self) -> str:
        """Name on the command line."""
        return self.parameter.replace("_", "-")


RULE_TERMS: Final[tuple[RuleTerm, ...]] = (
    RuleTerm("constant-real", "rate", "Same amount plus prices: first withdrawal", "share", 0.04, 0, 1),
    RuleTerm("constant-percentage", "rate", "Same share each year: withdrawal", "share", 0.04, 0, 1),
    RuleTerm("floor-and-ceiling", "rate", "Share with limits: withdrawal", "share", 0.05, 0, 1),
    RuleTerm("floor-and-ceiling", "down", "Share with limits: floor below the first", "share", 0.15, 0, 1),
    RuleTerm("floor-and-ceiling", "up", "Share with limits: ceiling above the first", "share", 0.20, 0, 10),
    RuleTerm("decision-rules", "rate", "Cut-and-raise steps: initial rate", "share", 0.055, 0, 1),
    RuleTerm("decision-rules", "band", "Cut-and-raise steps: guardrails around it", "share", 0.20, 0, 1),
    RuleTerm("decision-rules", "step", "Cut-and-raise steps: cut or raise", "share", 0.10, 0, 1),
    RuleTerm(
        "decision-rules",
        "largest_raise",
        "Cut-and-raise steps: largest raise with prices",
        "share",
        0.06,
        0,
        1,
    ),
    RuleTerm(
        "decision-rules", "no_cut_years", "Cut-and-raise steps: last years without a cut", "years", 15, 0, 80
    ),
    RuleTerm(
        "virtual-annuity",
        "real_rate",
        "Spread over the remaining years: real interest",
        "share",
        0.015,
        -0.05,
        0.2,
    ),
    RuleTerm("virtual-annuity", "last_age", "Spread over the remaining years: last age", "age", 100, 60, 130),
    RuleTerm("smoothing", "rate", "Smoothing as endowments do: target rate", "share", 0.05, 0, 1),
    RuleTerm("smoothing", "weight", "Smoothing as endowments do: weight of last year", "share", 0.8, 0, 1),
    RuleTerm("falling", "rate", "Spending falls with age: first withdrawal", "share", 0.045, 0, 1),
    RuleTerm("falling", "fall", "Spending falls with age: real fall a year", "share", 0.01, -0.1, 0.5),
    RuleTerm(
        "secure-first", "rate", "Bills first, then a share: share above the reserve", "share", 0.04, 0, 1
    ),
    RuleTerm(
        "secure-first", "real_rate", "Bills first, then a share: real interest", "share", 0.01, -0.05, 0.2
    ),
    RuleTerm("secure-first", "last_age", "Bills first, then a share: last age", "age", 100, 60, 130),
)
"""Every parameter that may be set, rules in the order of comparison tables."""

RuleSettings = tuple[tuple[str, tuple[tuple[str, float], ...]], ...]
"""(rule key, ((parameter, value), ...)), ...: what was set, in any order."""


def parse_rule(text: str) -> tuple[str, dict[str, float]]:
    """Split ``KEY`` or ``KEY:PARAMETER=VALUE,PARAMETER=VALUE`` into the key as typed and values.

    Shares may be written 4.5% or 0.045.

    Raises
    ------
    InputError
        Code ``rule-parameter``: no such parameter (with the near miss), no number, or out of range.
    """
    key, colon, rest = text.partition(":")
    key = key.strip()
    if not colon:
        return key, {}
    terms = {term.option: term for term in RULE_TERMS if term.rule == key.casefold()}
    values: dict[str, float] = {}
    found = []
    for part in rest.split(","):
        name, equals, value = (piece.strip() for piece in part.partition("="))
        term = terms.get(name.casefold().replace("_", "-").replace(" ", "-"))
        if term is None or not equals:
            found.append(_unknown(text, name, key, terms.values()))
            continue
        try:
            number = float(value.removesuffix("%")) / (100 if value.endswith("%") else 1)
        except ValueError:
            found.append(
                Diagnostic("rule-parameter", text, f"{name} is {value!r}; expected a number, such as 4.5%")
            )
            continue
        if not term.low <= number <= term.high:
            hint = f"; did you mean {value}%?" if term.kind == "share" and number > term.high else ""
            message = f"{name} is {value}; expected {term.low:g} to {term.high:g}{hint}"
            found.append(Diagnostic("rule-parameter", text, message))
            continue
        values[term.parameter] = number
    if found:
        raise InputError(found)
    return key, values


def _unknown(text: str, name: str, key: str, terms: Iterable[RuleTerm]) -> Diagnostic:
    options = [term.option for term in terms]
    if not options:
        return Diagnostic("rule-parameter", text, f"the rule {key!r} has no parameters to set")
    near = difflib.get_close_matches(name, options, n=1)
    hint = f"did you mean {near[0]!r}?" if near else f"its parameters are {', '.join(options)}"
    return Diagnostic("rule-parameter", text, f"the rule {key!r} has no parameter {name!r}; {hint}")

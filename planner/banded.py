"""The plan followed with a band of no change: spending moves only when the plan moves enough."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from planner.cashflow import tax_due, withdraw_for_spending
from planner.problem import TAX_FREE, TAXABLE, Decision, Policy, Problem, State


@dataclass(frozen=True, slots=True, eq=False)
class KeepWithinBand:
    """Last year's spending, unless another policy's differs from it by more than a share of it.

    Spending is compared at an unchanged need scale. Portfolio, withdrawal and conversion are the
    other policy's; the withdrawal is raised where last year's spending could not be paid otherwise.

    Attributes
    ----------
    policy : Policy
        Followed when it moves enough; must need no memory of its own.
    tolerance : float
        The band, as a share of last year's spending.
    """

    policy: Policy
    tolerance: float

    key: ClassVar[str] = "plan-with-band"
    n_memory: ClassVar[int] = 1

    def __post_init__(self) -> None:
        if self.policy.n_memory:
            raise ValueError("a policy with memory of its own cannot be held within a band")

    @property
    def name(self) -> str:
        """Name for people."""
        return f"the plan, changed only by {self.tolerance:.0%} or more"

    @property
    def reference(self) -> str:
        """Where it was published."""
        return f"{self.policy.reference}; the band of no change is ours"

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Memory: last year's spending at need scale 1."""
        chosen = self.policy.decide(problem, t, state)
        need = problem.need[t][state.status]
        kept = state.memory[:, 0] * need
        keeps = np.abs(chosen.spending - kept) <= self.tolerance * np.abs(kept)
        if t == 0:
            keeps = np.zeros_like(keeps)
        spending = np.where(keeps, kept, chosen.spending)
        tax = tax_due(problem, t, state.status, chosen.withdraw + chosen.convert)
        available = (
            state.balances[:, TAXABLE]
            + state.balances[:, TAX_FREE]
            + problem.income[t][state.status]
            + chosen.withdraw
            + chosen.convert
            - tax
        )
        short = spending > available
        enough, _ = withdraw_for_spending(problem, t, state, spending)
        withdraw = np.where(short, np.maximum(enough, chosen.withdraw), chosen.withdraw)
        return Decision(
            withdraw=withdraw,
            convert=chosen.convert,
            spending=spending,
            portfolio=chosen.portfolio,
            memory=(spending / need)[:, None],
        )

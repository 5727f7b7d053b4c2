"""The proved gap of every sample client, by term, as shares of wealth; and of one account.

``python tests/benchmarks/proof.py [sample ...]``; ``one-account`` is a sample too.

One account: 65, Gompertz mode 88 and dispersion 10, 46 years, pension 20,000, savings of 500,000, gamma 4,
beta 0.98, certain 1 %, risky mean 5.5 % and standard deviation 17 % real, mixes of the two.
"""

from __future__ import annotations

import sys
import time
from dataclasses import replace

from samples import machine, on_one_core, sample_problems
from speed import one_account

import numpy as np  # isort: skip

from planner.markets import lognormal_returns
from planner.optimum.bound import TERMS
from planner.optimum.recursion import solve
from planner.plan import PlanSettings
from planner.proof import proof


def report_one_account(settings: PlanSettings) -> None:
    """Level spending of the plan and of the bound, by how fine the list of mixes is."""
    risky, weights = lognormal_returns(np.array([0.055]), np.array([0.17]), 0.0).nodes(9)
    print("| Mixes in steps of | Plan | Bound | Gap | Standard error | taxable held | Seconds |")
    print("|---|---|---|---|---|---|---|", flush=True)
    for steps in (5, 10, 20, 40):
        share = np.linspace(0.0, 1.0, steps + 1)[:, None]
        names = tuple(f"{a:.1%}" for a in share[:, 0])
        problem = replace(
            one_account(),
            gross=share * risky + (1 - share) * 1.01,
            node_weights=weights,
            drag=np.zeros(steps + 1),
            portfolio_names=names,
            returns=None,
        )
        policy = solve(problem)
        start = time.process_time()
        found = proof(problem, policy, settings.n_proof_paths, settings.seed)
        seconds = time.process_time() - start
        assert found is not None
        plan = policy.level_spending(problem.opening)
        gap = found.gap_share
        bound = policy.level_spending((1 + gap) * problem.opening)
        held = dict(found.terms)["taxable held"]
        print(
            f"| {100 / steps:g} points | {plan:,.0f} | {bound:,.0f} | {gap:.3%} | "
            f"{found.gap_standard_error:.3%} | {held:.3%} | {seconds:.1f} |",
            flush=True,
        )


def main() -> None:
    """Print a row for each sample client."""
    settings = PlanSettings()
    if sys.argv[1:] == ["one-account"]:
        report_one_account(settings)
        return
    on_one_core()
    print(f"{machine()}; {settings.n_proof_paths} paths")
    print(f"| Client | Gap | Standard error | {' | '.join(TERMS)} | Seconds |")
    print("|---" * (4 + len(TERMS)) + "|", flush=True)
    for name, problem in sample_problems(sys.argv[1:]):
        policy = solve(problem)
        start = time.process_time()
        found = proof(problem, policy, settings.n_proof_paths, settings.seed)
        seconds = time.process_time() - start
        if found is None:
            continue
        terms = " | ".join(f"{value:.2%}" for _, value in found.terms)
        error = found.gap_standard_error
        print(f"| {name} | {found.gap_share:.2%} | {error:.2%} | {terms} | {seconds:.1f} |", flush=True)


if __name__ == "__main__":
    main()

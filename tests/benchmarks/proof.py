"""The proved gap of every sample client, by term, as shares of wealth.

python tests/benchmarks/proof.py [sample ...]
"""

from __future__ import annotations

import sys
import time

from samples import machine, sample_problems

from planner.optimum.bound import TERMS
from planner.optimum.recursion import solve
from planner.plan import PlanSettings
from planner.proof import proof


def main() -> None:
    """Print a row for each sample client."""
    settings = PlanSettings()
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

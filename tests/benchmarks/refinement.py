"""Value and this year's spending on the default grid against grids twice and three times as fine.

``python tests/benchmarks/refinement.py [sample ...]``

Errors are shares of the answer on the grid three times as fine: the certainty equivalent of the value,
and spending. Three accounts take one to two minutes each.
"""

from __future__ import annotations

import sys
import time

from samples import machine, on_one_core, sample_problems

from planner.optimum.recursion import SolverSettings, solve
from planner.problem import Problem


def measured(problem: Problem, factor: float) -> tuple[float, float, float]:
    """Certainty equivalent, this year's spending and seconds of one core, on a scaled grid."""
    start = time.process_time()
    policy = solve(problem, SolverSettings.for_problem(problem).scaled(factor))
    seconds = time.process_time() - start
    opening = problem.opening[None, :]
    level = float(policy.certainty_equivalent(opening)[0])
    return level, float(policy.read(0, 0, opening).spending[0]), seconds


def main() -> None:
    """Print a row for each sample client."""
    on_one_core()
    print(machine())
    print("| Client | Value, default | Value, 2x | Spending, default | Spending, 2x | Seconds 1x, 2x, 3x |")
    print("|---|---|---|---|---|---|", flush=True)
    for name, problem in sample_problems(sys.argv[1:]):
        levels, spendings, seconds = zip(*(measured(problem, factor) for factor in (1, 2, 3)), strict=True)
        value = [f"{level / levels[2] - 1:+.4%}" for level in levels[:2]]
        spent = [f"{spending / spendings[2] - 1:+.3%}" for spending in spendings[:2]]
        took = ", ".join(f"{second:.1f}" for second in seconds)
        print(f"| {name} | {value[0]} | {value[1]} | {spent[0]} | {spent[1]} | {took} |", flush=True)


if __name__ == "__main__":
    main()

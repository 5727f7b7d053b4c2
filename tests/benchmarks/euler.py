"""Euler errors of the plan along simulated lives, for every sample client.

``python tests/benchmarks/euler.py [sample ...]``

Judd (1992), Projection methods for solving aggregate growth models, Journal of Economic Theory 58(2)
410-452 (from memory): the share by which spending differs from what next year's marginal utility asks,

    c* / c - 1,   n f'(c*/n)/n = beta E[R_p1 (sum_h' P(h -> h') l' + P(none) v')],

with l' next year's price of cash: marginal utility of next year's spending, or the solved price of cash
where spending is held at a kink of the utility or at the ceiling. Expectations are over the solver's own
return nodes and statuses. Points: simulated openings of a year where taxable money is kept and spending
is not held at a kink (within 0.1 %) or at the ceiling. "Any": more than 1 % of a year's essential
spending is kept; next year may still use taxable up, and spending then turns sharply over a cell of the
grid. "A year": more than a whole year's essential spending is kept, which is away from that kink.
"""

from __future__ import annotations

import sys

from samples import machine, sample_problems

import numpy as np  # isort: skip

from planner.cashflow import advance, estate_money
from planner.optimum.policy import OptimalPolicy
from planner.optimum.recursion import solve
from planner.problem import TAXABLE, Problem, State
from planner.simulation import draw_scenarios, simulate

PATHS = 150


def at_rest(problem: Problem, spending: np.ndarray, t: int, h: int) -> np.ndarray:
    """Whether spending is held at the kink at E, at the fallback line or at the ceiling."""
    utility, n = problem.utility, float(problem.need[t, h])
    places = [utility.essential, utility.floor, problem.ceiling]
    return np.any([np.abs(spending / (n * place) - 1) < 1e-3 for place in places], axis=0)


def cash_price(problem: Problem, policy: OptimalPolicy, t: int, h: int, balances: np.ndarray) -> np.ndarray:
    """Utility of one more unit of cash at the opening of year t."""
    read = policy.read(t, h, balances)
    own = problem.utility.marginal(read.spending / problem.need[t, h])
    return np.where(at_rest(problem, read.spending, t, h), read.price, own)


def euler_errors(
    problem: Problem, policy: OptimalPolicy, t: int, h: int, balances: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Absolute errors where taxable money is kept, and how much is kept there, in years of essentials."""
    n = balances.shape[0]
    zero = np.zeros(n)
    state = State(balances, np.full(n, h), zero + 1, zero, zero, np.zeros((n, 0)))
    decision = policy.decide(problem, t, state)
    asked = np.zeros(n)
    for node, weight in enumerate(problem.node_weights):
        year = advance(problem, t, state, decision, problem.gross[decision.portfolio, node])
        worth = problem.death[t, h] * problem.estate.marginal(estate_money(problem, year.closing))
        for following in np.flatnonzero(problem.transition[t, h] > 0) if t + 1 < problem.n_years else ():
            price = cash_price(problem, policy, t + 1, int(following), year.closing)
            worth = worth + problem.transition[t, h, following] * price
        growth = problem.gross[decision.portfolio, node] - problem.drag[decision.portfolio]
        asked += problem.discount * weight * growth * worth
    need = problem.need[t, h]
    kept = balances[:, TAXABLE] + year.income + year.withdrawal[:, 1] - year.tax - year.spending
    used = (kept > 0.01 * problem.utility.essential) & ~at_rest(problem, year.spending, t, h) & (asked > 0)
    target = need * problem.utility.inverse_marginal(asked[used])
    # A target at the kink or at the ceiling says nothing of the distance to it.
    moving = ~at_rest(problem, target, t, h)
    years = kept / problem.utility.essential
    return np.abs(target / year.spending[used] - 1)[moving], years[used][moving]


def main() -> None:
    """Print a row for each sample client."""
    print(f"{machine()}; {PATHS} paths")
    print("| Client | Kept | Points | Mean | Median | 99th percentile | log10 of mean | log10 of 99th |")
    print("|---|---|---|---|---|---|---|---|", flush=True)
    for name, problem in sample_problems(sys.argv[1:]):
        policy = solve(problem)
        paths = simulate(problem, policy, draw_scenarios(problem, PATHS, np.random.default_rng(1)))
        found = []
        for t in range(problem.n_years):
            for h in range(problem.n_statuses):
                here = paths.alive[:, t] & (paths.status[:, t] == h)
                if here.any():
                    found.append(euler_errors(problem, policy, t, h, paths.balances[here, t]))
        errors, years = (np.concatenate(parts) for parts in zip(*found, strict=True))
        for kept, error in (("any", errors), ("a year", errors[years > 1])):
            if error.size < 100:  # too few for a percentile
                print(f"| {name} | {kept} | {error.size} of {int(paths.alive.sum())} | | | | | |", flush=True)
                continue
            mean, middle, worst = error.mean(), np.median(error), np.quantile(error, 0.99)
            logs = f"{np.log10(mean):.2f} | {np.log10(worst):.2f}"
            points = f"{error.size} of {int(paths.alive.sum())}"
            print(
                f"| {name} | {kept} | {points} | {mean:.1e} | {middle:.1e} | {worst:.1e} | {logs} |",
                flush=True,
            )


if __name__ == "__main__":
    main()

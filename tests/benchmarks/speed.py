"""Times of the solver, the simulation and a whole plan, as one table of ratios within one run.

``python tests/benchmarks/speed.py``

Seconds are the least of a few repetitions, of one core where nothing else is said. The client of the
plan is `couple_three_accounts` of the samples: 20,000 futures, all strategies, without what-ifs. The
single person with one account is `single_with_pension` with all savings in the taxable account.
"""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
import warnings
from collections.abc import Callable
from dataclasses import replace
from functools import partial
from pathlib import Path

from samples import FOLDER, machine, on_one_core, sample_problems

import numpy as np  # isort: skip
from openpyxl import load_workbook  # isort: skip

from planner.markets import lognormal_returns
from planner.optimum.bound import prove
from planner.optimum.recursion import SolverSettings, solve
from planner.piecewise import PiecewiseLinear
from planner.preferences import EstateUtility, SpendingUtility
from planner.problem import Problem
from planner.simulation import draw_scenarios, simulate

WEALTH = np.geomspace(50_000.0, 2_000_000.0, 200)
"""Where errors are measured, in year 0."""

ERROR = 2e-4


def seconds(action: Callable[[], object], times: int = 5) -> float:
    """Least processor time of several runs."""
    found = []
    for _ in range(times):
        start = time.process_time()
        action()
        found.append(time.process_time() - start)
    return min(found)


def one_account(n_years: int = 46) -> Problem:
    """65, Gompertz mode 88 and dispersion 10, pension 20,000, savings of 500,000, half in shares."""
    age = 65 + np.arange(n_years)
    death = 1 - np.exp(-np.exp((age - 88) / 10) * np.expm1(0.1))
    death[-1] = 1.0
    returns = lognormal_returns(np.array([0.0325]), np.array([0.085]), 0.0)
    gross, weights = returns.nodes(9)
    utility = SpendingUtility(4.0, 1.0, 20_000.0, 2_000.0)
    flat = np.ones((n_years, 1))
    return Problem(
        statuses=("first",),
        transition=(1 - death)[:, None, None],
        death=death[:, None],
        income=20_000.0 * flat,
        contribution=np.zeros((n_years, 1, 3)),
        tax=((PiecewiseLinear(np.array([0.0]), np.array([0.0]), 0.0),),) * n_years,
        need=flat,
        minimum_share=0 * flat,
        accessible_share=flat,
        gross=gross,
        node_weights=weights,
        drag=np.zeros(1),
        utility=utility,
        estate=EstateUtility(utility),
        discount=0.98,
        opening=np.array([500_000.0, 0.0, 0.0]),
        has_account=(True, False, False),
        conversions=False,
        ceiling=np.inf,
        heirs_tax_rate=0.0,
        cash_aside=0.0,
        portfolio_names=("Half",),
        returns=returns,
        inflation=0.02,
        ages=age[None, :],
    )


def by_scalar_maximiser(problem: Problem) -> Callable[[int], tuple[np.ndarray, ...]]:
    """Backward induction with quantecon's compiled `brent_max`: nodes -> wealth, value, spending.

    The value is in certainty equivalents.

    Certainty equivalents are carried and interpolated linearly, on nodes as dense in proportion as ours.
    Everything around the maximiser is compiled as well, and compiling is not counted.
    """
    warnings.simplefilter("ignore")
    from numba import njit
    from quantecon.optimize import brent_max

    gross, chance = problem.gross[0], problem.node_weights
    survive, income = problem.transition[:, 0, 0], float(problem.income[0, 0])
    discount, gamma = problem.discount, problem.utility.risk_aversion
    weights = np.ones(problem.n_years)
    for t in range(problem.n_years - 2, -1, -1):
        weights[t] = 1 + discount * survive[t] * weights[t + 1]

    @njit
    def worth(c, cash, wealth, level, factor):
        total = 0.0
        for q in range(gross.size):
            z = np.interp((cash - c) * gross[q], wealth, level)
            total += chance[q] * z ** (1 - gamma)
        return (c ** (1 - gamma) + factor * total) / (1 - gamma)

    @njit
    def induction(wealth):
        level, spent = wealth + income, wealth + income
        for t in range(survive.size - 2, -1, -1):
            factor = discount * survive[t] * weights[t + 1]
            new, spent = np.empty(wealth.size), np.empty(wealth.size)
            for i in range(wealth.size):
                cash = wealth[i] + income
                spent[i], best, _ = brent_max(worth, 1.0, cash, (cash, wealth, level, factor), 1e-6 * cash)
                new[i] = (best * (1 - gamma) / weights[t]) ** (1 / (1 - gamma))
            level = new
        return level, spent

    def run(n: int) -> tuple[np.ndarray, ...]:
        # The top is beyond what matters: linear interpolation is flat beyond it.
        wealth = 20_000.0 * np.expm1(np.linspace(0.0, np.log1p(1e7 / 20_000.0), n))
        return wealth, *induction(wealth)

    run(10)
    return run


OUR_NODES = (8, 10, 12, 14, 16, 18, 20, 24, 28, 32, 40, 48, 64, 80, 120, 160, 240)
THEIR_NODES = (20, 30, 40, 50, 60, 80, 100, 120, 160, 200, 300, 400, 800, 1_600, 3_200, 6_400)


def smallest(candidates: tuple[int, ...], error: Callable[[int], float]) -> int:
    """First candidate that is accurate enough, or the last."""
    return next((n for n in candidates if error(n) <= ERROR), candidates[-1])


def report_one_account() -> None:
    """Ours against quantecon's scalar maximiser: a largest error of 2e-4 in value, then in spending."""
    problem = one_account()
    balances = np.stack([WEALTH, 0 * WEALTH, 0 * WEALTH], axis=1)
    exact = solve(problem, SolverSettings(taxable=800, cash=1200, scale=50.0))
    answers = exact.certainty_equivalent(balances), exact.read(0, 0, balances).spending
    run = by_scalar_maximiser(problem)

    def ours(n: int) -> SolverSettings:
        return SolverSettings(taxable=n, cash=3 * n // 2, scale=50.0)

    for place, what in enumerate(("value", "spending")):

        def our_error(n: int, place: int = place) -> float:
            policy = solve(problem, ours(n))
            found = policy.read(0, 0, balances).spending if place else policy.certainty_equivalent(balances)
            return float(np.abs(found / answers[place] - 1).max())

        def their_error(n: int, place: int = place) -> float:
            wealth, *found = run(n)
            return float(np.abs(np.interp(WEALTH, wealth, found[place]) / answers[place] - 1).max())

        n, m = smallest(OUR_NODES, our_error), smallest(THEIR_NODES, their_error)
        mine = seconds(partial(solve, problem, ours(n)), 9)
        theirs = seconds(partial(run, m), 5)
        note = f"{m} nodes, largest error of {what} {their_error(m):.1e}"
        row("one account, 46 years: quantecon's scalar maximiser", theirs, note)
        note = f"{n} nodes, {our_error(n):.1e}; {theirs / mine:.1f} times faster (target 10, and 20 ms)"
        row("one account, 46 years: ours", mine, note)
    standard = np.abs(solve(problem).certainty_equivalent(balances) / answers[0] - 1).max()
    note = f"largest error of value {standard:.1e}"
    row("one account, 46 years: ours, default grid", seconds(partial(solve, problem), 5), note)

    policy = solve(problem)

    def normal() -> object:
        return np.random.default_rng(1).standard_normal((100_000, problem.n_years))

    def drawing() -> object:
        return draw_scenarios(problem, 100_000, np.random.default_rng(1))

    scenarios = draw_scenarios(problem, 100_000, np.random.default_rng(1))
    plain, draw = seconds(normal, 3), seconds(drawing, 3)
    walk = seconds(lambda: simulate(problem, policy, scenarios), 3)
    row("100,000 paths of 46 years: plain normal draws", plain, "")
    row("100,000 paths of 46 years: drawing their lives and returns", draw, "stratified")
    note = f"{walk / draw:.1f} times their draws (target 3), {walk / plain:.0f} times plain normal draws"
    row("100,000 paths of one account for 46 years", walk, note)


def report_couple() -> None:
    """The couple with three accounts: solve with and without conversions, and prove."""
    _, problem = next(sample_problems(["couple_three_accounts"]))
    years = f"{problem.n_years} years, {problem.n_portfolios} portfolios"
    without = replace(problem, conversions=False)
    row("couple, three accounts: solve", seconds(lambda: solve(without), 2), f"{years}; target 1.5 s")
    with_them = replace(problem, conversions=True)
    row("the same with conversions", seconds(lambda: solve(with_them), 2), "target 3 s")
    policy = solve(problem)
    took = seconds(lambda: prove(problem, policy, 600, np.random.default_rng(1)), 2)
    row("the same: prove on 600 paths", took, "")


def save_with_one_account(client: Path, to: Path) -> None:
    """Write the client's workbook with all savings in the first taxable account."""
    workbook = load_workbook(client)
    sheet = workbook["Accounts"]
    heads = next(row for row in sheet.iter_rows() if row[0].value == "Account")
    kind, balance = (
        next(cell.column - 1 for cell in heads if cell.value == head) for head in ("Type", "Balance")
    )
    accounts = [row for row in sheet.iter_rows(min_row=heads[0].row + 1) if row[0].value]
    total = sum(row[balance].value for row in accounts)
    kept = next(row for row in accounts if str(row[kind].value).startswith("taxable"))
    kept[balance].value = total
    for row in accounts:
        if row is not kept:
            for cell in row:
                cell.value = None
    workbook.save(to)


def report_commands() -> None:
    """Whole commands, by the clock, and the most memory that one of them takes."""
    planner = Path(sys.executable).with_name("planner")
    client = FOLDER / "couple_three_accounts.xlsx"
    single = FOLDER / "single_with_pension.xlsx"
    with tempfile.TemporaryDirectory() as folder:
        pdf = str(Path(folder) / "plan.pdf")
        one = Path(folder) / "one account.xlsx"
        save_with_one_account(single, one)
        commands = [
            ("planner --help", ["--help"], "target 0.3 s"),
            ("planner check", ["check", str(client)], "target 1 s"),
            ("planner plan, couple", ["plan", str(client), "-o", pdf, "--no-what-ifs"], "target 6 s, 1 GiB"),
            ("planner plan, couple, with what-ifs", ["plan", str(client), "-o", pdf], ""),
            ("planner plan, single, two accounts", ["plan", str(single), "-o", pdf, "--no-what-ifs"], ""),
            ("planner plan, single, with what-ifs", ["plan", str(single), "-o", pdf], ""),
            (
                "planner plan, single, one account",
                ["plan", str(one), "-o", pdf, "--no-what-ifs"],
                "target 2 s",
            ),
        ]
        for name, arguments, target in commands:
            best, processor, memory = np.inf, np.inf, 0.0
            for _ in range(2):
                start = time.perf_counter()
                child = subprocess.Popen(
                    [str(planner), *arguments], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
                )
                _, _, used = os.wait4(child.pid, 0)
                best = min(best, time.perf_counter() - start)
                processor = min(processor, used.ru_utime + used.ru_stime)
                memory = max(memory, used.ru_maxrss / 2**20)
            row(name, processor, f"{best:.2f} s by the clock, {memory:.2f} GiB; {target}")


def report_parts() -> None:
    """Where the time of a plan goes."""
    from planner import plan as planning
    from planner.outcomes import path_utilities
    from planner.problem_building import build_problem
    from planner.proof import proof
    from planner.reports.pdf import render_pdf
    from planner.rules import rules_for
    from planner.workbook.reading import read_workbook

    path = FOLDER / "couple_three_accounts.xlsx"
    read = read_workbook(path)
    problem = build_problem(read.household)
    policy = solve(problem)
    settings = planning.PlanSettings(what_ifs=False)
    scenarios = draw_scenarios(problem, settings.n_paths, np.random.default_rng(1))
    rules = rules_for(problem, 0, read.household.spending.wanted)
    made = planning.make_plan(read, settings)

    def rules_of_thumb() -> None:
        for rule in rules:
            path_utilities(problem, simulate(problem, rule, scenarios))

    row("plan: read and build", seconds(lambda: build_problem(read_workbook(path).household), 2), "")
    row("plan: solve", seconds(lambda: solve(problem), 1), "")
    row("plan: prove", seconds(lambda: proof(problem, policy, settings.n_proof_paths, 1), 1), "")
    row(
        "plan: simulate the optimum", seconds(lambda: simulate(problem, policy, scenarios), 1), "20,000 paths"
    )
    row(f"plan: simulate {len(rules)} rules", seconds(rules_of_thumb, 1), "20,000 paths")
    row("plan: PDF", seconds(lambda: render_pdf(made), 1), "")
    row("plan: all of it", seconds(lambda: planning.make_plan(read, settings), 1), "without the PDF")


def row(name: str, took: float, note: str) -> None:
    """Print a row of the table."""
    print(f"| {name} | {took:.3f} | {note} |", flush=True)


def main() -> None:
    """Print the table."""
    print(machine())
    print("| What | Seconds of one core | |")
    print("|---|---|---|")
    report_commands()  # first: a child's memory counts from what its parent has
    on_one_core()
    report_one_account()
    report_couple()
    report_parts()


if __name__ == "__main__":
    main()

r"""A household with a few years to live, solved exactly as a linear program over its scenario tree.

Every history of return nodes and statuses is a node of the tree with its own choices, so nothing is
interpolated. Balances, withdrawals, conversions, convex tax and portfolios are linear; the concave
utilities are outer-approximated by tangents, with new ones added where the last solution lies until
the linear program's value (an upper bound) and the true utility of its solution (a lower bound: the
solution is a feasible plan) agree. The two bounds are returned: no solver of any kind comes into it.

.. math::
    \max \sum_{\text{nodes}} P \beta^t n f(c/n) + \sum_{\text{nodes}, \omega} P(\omega, none) \beta^{t+1} v(b)

Kelley (1960), The cutting-plane method for solving convex programs, Journal of the SIAM 8(4) 703-712
(from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from builders import couple_problem, single_problem
from scipy.optimize import linprog
from scipy.sparse import csr_matrix

from planner.cashflow import advance, estate_money
from planner.optimum.recursion import value_weights
from planner.piecewise import FloatArray, PiecewiseLinear
from planner.preferences import EstateUtility, SpendingUtility
from planner.problem import Policy, Problem, State

Row = dict[int, float]


@dataclass(frozen=True, slots=True)
class TreeOptimum:
    """The optimum lies between `lower` and `upper`, expected utilities.

    Attributes
    ----------
    spending, gross : float
        c and w2 + k of year 0 in the plan that attains `lower`.
    """

    lower: float
    upper: float
    spending: float
    gross: float


class _Program:
    """Rows and columns of the linear program; money in units of essential spending."""

    def __init__(self) -> None:
        self.objective: list[float] = []
        self.bounds: list[tuple[float | None, float | None]] = []
        self.equal: list[tuple[Row, float]] = []
        self.at_most: list[tuple[Row, float]] = []

    def variable(self, weight: float = 0.0, low: float | None = 0.0, high: float | None = None) -> int:
        self.objective.append(weight)
        self.bounds.append((low, high))
        return len(self.objective) - 1

    def maximise(self) -> FloatArray:
        """Return the best columns; a second method is tried where rounding stops the first."""
        for method in ("highs", "highs-ipm"):
            result = linprog(
                -np.array(self.objective),
                A_ub=self._matrix(self.at_most),
                b_ub=[limit for _, limit in self.at_most],
                A_eq=self._matrix(self.equal),
                b_eq=[limit for _, limit in self.equal],
                bounds=self.bounds,
                method=method,
                options={"primal_feasibility_tolerance": 1e-9, "dual_feasibility_tolerance": 1e-9},
            )
            if result.status == 0:
                return np.asarray(result.x)
        raise ValueError(f"the tree's linear program has no solution: {result.message}")

    def _matrix(self, rows: list[tuple[Row, float]]) -> csr_matrix:
        counts = [len(row) for row, _ in rows]
        columns = [j for row, _ in rows for j in row]
        values = [value for row, _ in rows for value in row.values()]
        pointers = np.append(0, np.cumsum(counts))
        return csr_matrix((values, columns, pointers), shape=(len(rows), len(self.objective)))


def _sum(*terms: tuple[float, Row]) -> Row:
    """Linear combination of rows."""
    total: Row = {}
    for factor, row in terms:
        for j, value in row.items():
            total[j] = total.get(j, 0.0) + factor * value
    return total


@dataclass(frozen=True, slots=True)
class _Concave:
    """A variable u held below the tangents of scale h(at + shift), `at` a linear expression."""

    u: int
    at: Row
    shift: float
    weight: float
    scale: float
    value: Callable[[FloatArray], FloatArray]
    marginal: Callable[[FloatArray], FloatArray]

    def point(self, x: FloatArray) -> float:
        return self.shift + sum(value * x[j] for j, value in self.at.items())

    def cut(self, program: _Program, z: float) -> None:
        """Add u <= scale (h(z) + h'(z) (at + shift - z))."""
        slope = self.scale * float(self.marginal(np.array(z)))
        size = 1 / max(1.0, slope)  # slopes span many powers of ten: rows of one size keep the digits
        row = _sum((size, {self.u: 1.0}), (-slope * size, self.at))
        program.at_most.append((row, size * (self.worth(z) + slope * (self.shift - z))))

    def worth(self, z: float) -> float:
        """Scaled h(z)."""
        return self.scale * float(self.value(np.array(z)))


def tree_optimum(problem: Problem, split: bool = False, precision: float = 1e-6) -> TreeOptimum:
    """Solve a short problem exactly; tax must be convex, and every cost must be one that can be met.

    With more than one portfolio every assignment of portfolios to tree nodes is solved, so the tree
    must be small: without a legacy the last year's portfolio does not matter.

    Parameters
    ----------
    split
        Allow money to be split between portfolios each year, account by account, instead: a relaxation,
        which an upper bound by shadow prices must also exceed.
    precision
        Of the certainty equivalent, as a share.
    """
    if split or problem.n_portfolios == 1:
        return _Tree(problem).solve(precision)
    n_choices = _Tree(problem).n_choices
    if problem.n_portfolios**n_choices > 300:
        raise ValueError(f"{problem.n_portfolios} portfolios at {n_choices} nodes are too many to enumerate")
    held = product(range(problem.n_portfolios), repeat=n_choices)
    return max((_Tree(problem, choice).solve(precision) for choice in held), key=lambda found: found.lower)


class _Tree:
    """The program of a problem.

    `held` gives the portfolio of each choosing node; None lets money be split. Utility is scaled so that
    its slope is about 1 where the household will live: the tolerances of the linear program are absolute.
    """

    def __init__(self, problem: Problem, held: tuple[int, ...] | None = None) -> None:
        self.problem, self.held = problem, held
        self.unit = problem.utility.essential
        typical = max((problem.wealth + problem.income.mean() * problem.n_years) / problem.n_years, self.unit)
        self.scale = 1 / (float(problem.utility.power_marginal(typical)) * self.unit)
        self.program = _Program()
        self.terms: list[_Concave] = []
        self.first: list[int] = []
        self.n_choices = 0
        self.factors = np.stack([problem.gross - problem.drag[:, None], problem.gross, problem.gross])
        self.visit(0, 0, 1.0, [{}, {}, {}], problem.opening / self.unit)

    def visit(self, t: int, h: int, chance: float, opening: list[Row], fixed: FloatArray) -> None:
        """Add a node; its opening balances are opening[i] + fixed[i]."""
        problem, program, unit = self.problem, self.program, self.unit
        need = float(problem.need[t, h])
        ceiling = None if np.isinf(problem.ceiling) else problem.ceiling * need / unit
        c = program.variable(high=ceiling)
        w2, k = program.variable(), program.variable(high=None if problem.conversions else 0.0)
        tax, w3 = program.variable(low=None), program.variable()
        if not self.first:
            self.first = [c, w2, k]
        portfolios = range(problem.n_portfolios)
        if self.held is not None:
            chooses = problem.estate.wanted or t + 1 < problem.n_years
            pick = self.held[self.n_choices] if chooses and self.n_choices < len(self.held) else 0
            portfolios = range(pick, pick + 1)
        self.n_choices += problem.estate.wanted or t + 1 < problem.n_years
        invested = [{program.variable(): p for p in portfolios} for _ in range(3)]
        together = [dict.fromkeys(columns, 1.0) for columns in invested]
        paid = problem.contribution[t, h] / unit
        income = float(problem.income[t, h]) / unit

        # Cash, tax-deferred and tax-free; what is invested includes what is paid in.
        flows = [{w2: 1.0, tax: -1.0, c: -1.0, w3: 1.0}, {w2: -1.0, k: -1.0}, {k: 1.0, w3: -1.0}]
        for i, arrives in enumerate((income, 0.0, 0.0)):
            row = _sum((1, opening[i]), (1, flows[i]), (-1, together[i]))
            program.equal.append((row, -fixed[i] - arrives - paid[i]))
            program.at_most.append((_sum((-1, together[i])), -paid[i]))
        least, access = float(problem.minimum_share[t, h]), float(problem.accessible_share[t, h])
        program.at_most.append((_sum((-1, {w2: 1.0}), (least, opening[1])), -least * fixed[1]))
        program.at_most.append((_sum((1, {w2: 1.0, k: 1.0}), (-access, opening[1])), access * fixed[1]))
        function = problem.tax[t][h]
        for x, y, slope in zip(function.x, function.y, function.slopes, strict=True):
            program.at_most.append(({tax: -1.0, w2: slope, k: slope}, -(y - slope * x) / unit))

        utility = problem.utility
        weight = chance * problem.discount**t * need
        u = program.variable(weight, low=None)
        self.terms.append(
            _Concave(u, {c: unit / need}, 0.0, weight, self.scale, utility.value, utility.marginal)
        )
        for omega, likely in enumerate(problem.node_weights):
            grown = [
                {j: float(self.factors[i, p, omega]) for j, p in columns.items()}
                for i, columns in enumerate(invested)
            ]
            dies = chance * float(likely) * float(problem.death[t, h])
            if problem.estate.wanted and dies > 0:
                self.pass_on(dies * problem.discount ** (t + 1), grown)
            for following in np.flatnonzero(problem.transition[t, h] > 0) if t + 1 < problem.n_years else ():
                lives = chance * float(likely) * float(problem.transition[t, h, following])
                self.visit(t + 1, int(following), lives, grown, np.zeros(3))

    def pass_on(self, weight: float, grown: list[Row]) -> None:
        """Add the worth of an estate."""
        problem = self.problem
        v = self.program.variable(weight, low=None)
        keep = (1.0, 1.0 - problem.heirs_tax_rate, 1.0)
        estate = _sum(*((self.unit * keep[i], grown[i]) for i in range(3)))
        worth = problem.estate
        self.terms.append(
            _Concave(v, estate, problem.cash_aside, weight, self.scale, worth.value, worth.marginal)
        )

    def solve(self, precision: float) -> TreeOptimum:
        """Add tangents until both bounds agree."""
        problem, program, terms = self.problem, self.program, self.terms
        essential, floor = problem.utility.essential, problem.utility.floor
        # The line below the floor, both sides of the kink, and a few more.
        start = [0.5 * floor, essential * (1 - 1e-9), essential, *(essential * np.geomspace(0.15, 8, 10))]
        for term in terms:
            for z in start:
                term.cut(program, float(z))
        weight = float(value_weights(problem)[0][0, 0])
        plain = replace(problem.utility, shortfall_weight=1.0)
        for _ in range(40):
            x = program.maximise()
            upper = float(np.dot(program.objective, x)) / self.scale
            points = [term.point(x) for term in terms]
            worths = [term.worth(z) for term, z in zip(terms, points, strict=True)]
            lower = sum(term.weight * worth for term, worth in zip(terms, worths, strict=True)) / self.scale
            top, bottom = plain.inverse(np.array([upper, lower]) / weight)
            if top - bottom <= precision * abs(bottom):
                c, w2, k = self.first
                return TreeOptimum(lower, upper, float(x[c]) * self.unit, float(x[w2] + x[k]) * self.unit)
            for term, z, worth in zip(terms, points, worths, strict=True):
                if x[term.u] > worth:
                    term.cut(program, z)
        raise ValueError("the cutting planes did not close")


def value_on_tree(problem: Problem, policy: Policy) -> float:
    """Expected utility of a policy without memory, as an exact sum over the tree of the node law."""
    n_nodes = problem.node_weights.size
    balances, status = problem.opening[None, :], np.zeros(1, dtype=np.int64)
    chance = np.ones(1)
    total = 0.0
    for t in range(problem.n_years):
        n = status.size
        zero = np.zeros(n)
        state = State(balances, status, np.ones(n), zero, zero, np.zeros((n, 0)))
        decision = policy.decide(problem, t, state)
        need = problem.need[t][status]
        nexts = []
        for omega in range(n_nodes):
            year = advance(problem, t, state, decision, problem.gross[decision.portfolio, omega])
            here = chance * problem.node_weights[omega]
            felicity = need * problem.utility.value(year.spending / need)
            estate = problem.discount * problem.estate.value(estate_money(problem, year.closing))
            total += problem.discount**t * float(here @ (felicity + problem.death[t][status] * estate))
            for following in range(problem.n_statuses):
                lives = here * problem.transition[t][status, following]
                kept = lives > 0
                nexts.append((year.closing[kept], np.full(int(kept.sum()), following), lives[kept]))
        if t + 1 == problem.n_years:
            break
        balances = np.concatenate([part[0] for part in nexts])
        status = np.concatenate([part[1] for part in nexts])
        chance = np.concatenate([part[2] for part in nexts])
    return total


def random_problem(generator: np.random.Generator, n_portfolios: int = 1) -> Problem:
    """A household of three years with every feature drawn: money in the range of real clients.

    With more than one portfolio, one person without a legacy, so that the tree can be enumerated. Else
    one or two people, three accounts (one of them sometimes absent), convex brackets by status,
    minimum distributions, limited access, conversions, contributions, a one-off cost of year 0 that
    can be met, ceilings, a legacy, heirs' tax, cash aside, drag, and two or three return nodes.
    """
    g = generator
    n_years = 3
    couple = bool(g.random() < 0.7) and n_portfolios == 1
    n_statuses = 3 if couple else 1
    shape = (n_years, n_statuses)
    base = (couple_problem if couple else single_problem)(n_years)

    def once(chance: float) -> bool:
        return bool(g.random() < chance)

    essential = 30_000.0
    utility = SpendingUtility(
        float(g.choice([1.0, 2.0, 4.0, 7.0])), float(g.choice([1.0, 3.0])), essential, 0.1 * essential
    )
    legacy = once(0.6) and n_portfolios == 1
    estate = EstateUtility(
        utility, float(g.uniform(0.5, 8.0)) if legacy else 0.0, essential if legacy else 0.0
    )
    opening = np.exp(g.uniform(np.log(5e3), np.log(2e5), 3))
    has = [True, once(0.9), once(0.85)]
    conversions = has[1] and has[2] and once(0.5)
    opening *= has
    income = g.uniform(4_000.0, 26_000.0, shape)
    if once(0.4):
        income[0] -= opening[0] + min(0.3 * opening[2], 20_000.0)  # a cost that tax-free money can meet
    contribution = np.zeros((*shape, 3))
    if once(0.3):
        contribution[0, :, 1:] = g.uniform(0, 3_000.0, 2) * has[1:]
        income[0] -= 0.5 * contribution[0].sum(axis=1)
    least = np.where(np.arange(n_years)[:, None] >= g.integers(0, 3), g.uniform(0.03, 0.25), 0.0)
    least = np.broadcast_to(least if once(0.7) else 0.0, shape).copy()
    access = np.ones(shape)
    if once(0.25):
        access[0] = np.maximum(g.uniform(0.2, 0.9), least[0])
    n_nodes = int(g.integers(2, 4)) if n_portfolios == 1 else 2
    middle = np.sort(g.uniform(0.99, 1.05, n_portfolios))
    spread = np.sort(g.uniform(0.01, 0.25, n_portfolios))
    gross = middle[:, None] + spread[:, None] * np.linspace(-1, 1, n_nodes)
    weights = g.dirichlet(np.full(n_nodes, 5.0))
    return Problem(
        statuses=base.statuses,
        transition=base.transition,
        death=base.death,
        income=income,
        contribution=contribution,
        tax=tuple(tuple(_random_tax(g) for _ in range(n_statuses)) for _ in range(n_years)),
        need=np.tile([1.0, 0.7, 0.7] if couple else [1.0], (n_years, 1)) * g.uniform(0.85, 1.1, (n_years, 1)),
        minimum_share=least,
        accessible_share=access,
        gross=gross,
        node_weights=weights,
        drag=g.uniform(0, 0.01, n_portfolios),
        utility=utility,
        estate=estate,
        discount=float(g.uniform(0.93, 1.0)),
        opening=opening,
        has_account=(has[0], has[1], has[2]),
        conversions=conversions,
        ceiling=float(g.uniform(1.2, 2.0)) * essential if once(0.25) else np.inf,
        heirs_tax_rate=float(g.uniform(0, 0.4)) if legacy else 0.0,
        cash_aside=float(g.uniform(0, 10_000.0)) if legacy else 0.0,
        portfolio_names=tuple(f"P{p}" for p in range(n_portfolios)),
        returns=None,
        inflation=0.02,
        ages=base.ages,
    )


def _random_tax(generator: np.random.Generator) -> PiecewiseLinear:
    """Convex tax: some already owed, then two to four brackets with rising rates."""
    n = int(generator.integers(2, 5))
    x = np.append(0.0, np.cumsum(generator.uniform(3_000.0, 30_000.0, n - 1)))
    rates = np.sort(generator.uniform(0.0, 0.45, n))
    owed = float(generator.choice([0.0, generator.uniform(0, 1_500.0)]))
    y = owed + np.append(0.0, np.cumsum(rates[:-1] * np.diff(x)))
    return PiecewiseLinear(x, y, float(rates[-1]))

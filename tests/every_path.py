"""Every path of a short problem, and deliberately bad prices and plans on them, many draws at once.

The bound's expectation is exact on these paths. They are repeated, one copy for each draw of prices, so
that one pass over the years tries them all: in any year and status the copies are consecutive and alike.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from planner.optimum.bound import PriceReader, prove
from planner.optimum.policy import OptimalPolicy
from planner.piecewise import FloatArray
from planner.problem import Decision, Policy, Problem, State
from planner.simulation import Scenarios


def every_path(problem: Problem, copies: int = 1) -> tuple[Scenarios, FloatArray]:
    """All sequences of return nodes and statuses, repeated; and the chance of each, (n_paths,)."""
    nobody = problem.n_statuses
    paths: list[tuple[tuple[int, ...], tuple[int, ...], float]] = [((0,), (), 1.0)]
    for t in range(problem.n_years):
        longer = []
        for statuses, nodes, chance in paths:
            h = statuses[-1]
            if h == nobody:
                longer.append(((*statuses, nobody), (*nodes, 0), chance))
                continue
            following = np.append(problem.transition[t, h], problem.death[t, h])
            for node, likely in enumerate(problem.node_weights):
                longer += [
                    ((*statuses, int(after)), (*nodes, node), chance * float(likely * following[after]))
                    for after in np.flatnonzero(following > 0)
                ]
        paths = longer
    status = np.array([path[0] for path in paths], dtype=np.int16)
    node = np.array([path[1] for path in paths], dtype=np.int16)
    scenarios = Scenarios(np.tile(status, (copies, 1)), node=np.tile(node, (copies, 1)))
    return scenarios, np.array([path[2] for path in paths])


class Remembered:
    """The solved policy, asked once for the same balances: choices do not depend on prices."""

    def __init__(self, policy: OptimalPolicy) -> None:
        self.policy = policy
        self.known: dict[tuple[object, ...], object] = {}

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        key = (t, state.status.tobytes(), state.balances.tobytes())
        if key not in self.known:
            self.known[key] = self.policy.decide(problem, t, state)
        found = self.known[key]
        assert isinstance(found, Decision)
        return found

    def prices(self, t: int, h: int, balances: FloatArray) -> FloatArray:
        key = (t, h, balances.tobytes())
        if key not in self.known:
            self.known[key] = self.policy.prices(t, h, balances)
        found = self.known[key]
        assert isinstance(found, np.ndarray)
        return found


@dataclass(frozen=True, slots=True, eq=False)
class Noise:
    """Factors exp(offset + size sin(frequency . balances / unit + phase)) of each draw, account and year.

    Functions of the year, the status and the balances alone, so prices know nothing of the future.

    Attributes
    ----------
    offset, size, phase : ndarray of shape (n_draws, n_years, n_statuses, 3)
    frequency : ndarray of shape (n_draws, n_years, n_statuses, 3, 3)
    """

    offset: FloatArray
    size: FloatArray
    phase: FloatArray
    frequency: FloatArray

    @classmethod
    def draw(cls, problem: Problem, generator: np.random.Generator, sizes: FloatArray) -> Noise:
        """One draw for each size, about the standard deviation of the logarithm."""
        shape = (sizes.size, problem.n_years, problem.n_statuses, 3)
        scale = sizes[:, None, None, None]
        return cls(
            scale * generator.normal(size=shape),
            scale * np.abs(generator.normal(size=shape)),
            generator.uniform(0, 2 * np.pi, shape),
            np.exp(generator.uniform(-1, 4, (*shape, 1))) * generator.normal(size=(*shape, 3)),
        )

    def around(self, best: int, other: Noise) -> Noise:
        """Draws near one of these: it plus the other's offsets and sizes."""
        return Noise(
            self.offset[best] + other.offset,
            self.size[best] + other.size,
            np.broadcast_to(self.phase[best], other.phase.shape),
            np.broadcast_to(self.frequency[best], other.frequency.shape),
        )

    def factors(self, t: int, h: int, balances: FloatArray, unit: float) -> FloatArray:
        """(n_draws, n, 3) at balances (n_draws, n, 3)."""
        inner = np.einsum("kij,knj->kni", self.frequency[:, t, h], balances / unit)
        wave = np.sin(inner + self.phase[:, None, t, h])
        return np.exp(self.offset[:, None, t, h] + self.size[:, None, t, h] * wave)


class NoisyPrices(PriceReader):
    """Prices of a reader times the factors of each draw; the opening's are those of the first draw."""

    def __init__(self, base: Callable[[int, int, FloatArray], FloatArray], noise: Noise, unit: float) -> None:
        self.base, self.noise, self.unit = base, noise, unit

    def __call__(self, t: int, h: int, balances: FloatArray) -> FloatArray:
        n_draws = self.noise.offset.shape[0]
        read = self.base(t, h, balances)
        if balances.shape[0] % n_draws:  # the opening, or a pilot's few paths
            return read * self.noise.factors(t, h, np.tile(balances, (n_draws, 1, 1)), self.unit)[0]
        copies = balances.reshape(n_draws, -1, 3)
        return read * self.noise.factors(t, h, copies, self.unit).reshape(-1, 3)


def same_everywhere(problem: Problem) -> Callable[[int, int, FloatArray], FloatArray]:
    """Marginal utility of essential spending as the price of everything: it knows nothing of the plan."""
    price = float(problem.utility.marginal(np.array(problem.utility.essential)))
    return lambda t, h, balances: np.full(balances.shape, price)


class Wayward:
    """A plan without sense: shares of what is possible, waves over the balances."""

    name, reference, n_memory = "wayward", "invented", 0

    def __init__(self, problem: Problem, generator: np.random.Generator) -> None:
        self.noise = Noise.draw(problem, generator, np.full(2, 1.0))
        self.unit = problem.utility.essential

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        x, n = state.balances, state.status.size
        raw = np.ones((n, 6))
        for h in range(problem.n_statuses):
            here = state.status == h
            factors = self.noise.factors(t, h, np.tile(x[here], (2, 1, 1)), self.unit)
            raw[here] = np.concatenate([factors[0], factors[1]], axis=1)
        share = raw / (1 + raw)
        withdraw, convert = share[:, 0] * x[:, 1], share[:, 1] * x[:, 1]
        spending = 2 * share[:, 2] * (problem.income[t][state.status] + x @ share[0, 3:])
        portfolio = (share[:, 3] * problem.n_portfolios).astype(np.int64)
        return Decision(withdraw, convert, spending, portfolio, np.zeros((n, 0)))


@dataclass(frozen=True, slots=True, eq=False)
class ExactGaps:
    """Bound and the plan's value of each draw, (n_draws,), and the gap's terms, (n_draws, 6): no sampling.

    `least` is the least term on any path; `largest` the largest amount added up on any path, (n_draws,).
    """

    bound: FloatArray
    value: FloatArray
    terms: FloatArray
    least: float
    largest: FloatArray


def exact_gaps(
    problem: Problem,
    plan: Policy | Remembered,
    prices: PriceReader,
    copies: int,
    generator: np.random.Generator,
) -> ExactGaps:
    """Prove on every path, one copy for each draw of prices."""
    scenarios, chance = every_path(problem, copies)
    # The plan is only ever asked to decide: prices are given.
    gap = prove(problem, plan, 8, generator, prices, scenarios)
    added = np.abs(gap.bound) + np.abs(gap.value) + np.abs(gap.terms).sum(axis=1)
    return ExactGaps(
        bound=gap.bound.reshape(copies, -1) @ chance,
        value=gap.value.reshape(copies, -1) @ chance,
        terms=np.einsum("kni,n->ki", gap.terms.reshape(copies, chance.size, -1), chance),
        least=float(gap.terms.min()),
        largest=added.reshape(copies, -1).max(axis=1),
    )

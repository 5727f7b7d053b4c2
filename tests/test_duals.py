"""One year of the dual against brute force: what a household that obeys prices alone can gain."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from builders import couple_problem, jump_tax
from tree_oracle import random_problem

from planner.cashflow import advance
from planner.optimum.duals import Expectation, Factors, YearChoice, YearPrices
from planner.problem import TAX_DEFERRED, Decision, Problem, State


def choice_of(problem: Problem, t: int, h: int, n: int, generator: np.random.Generator) -> YearChoice:
    """What some decision did in a year, on n paths; the relaxed household only sees the largest X."""
    balances = generator.uniform(0, 2e5, (n, 3)) * problem.has_account
    zero = np.zeros(n)
    state = State(balances, np.full(n, h), zero + 1, zero, zero, np.zeros((n, 0)))
    decision = Decision(
        generator.uniform(0, 0.3, n) * balances[:, 1],
        generator.uniform(0, 0.3, n) * balances[:, 1],
        generator.uniform(1e4, 1e5, n),
        np.zeros(n, dtype=np.int64),
        np.zeros((n, 0)),
    )
    year = advance(problem, t, state, decision, problem.gross[decision.portfolio, 0])
    return YearChoice.of(problem, t, h, year, 1.2 * balances[:, TAX_DEFERRED] + 1_000.0)


def prices_of(problem: Problem, n: int, generator: np.random.Generator) -> YearPrices:
    """Prices within a factor of two of one another; those of the portfolio held below the best."""
    line = float(problem.utility.marginal(np.array(problem.utility.essential)))
    cash = line * np.exp(generator.uniform(-4, 2, n))
    free = cash * generator.uniform(1.0, 1.3, n)
    best = cash[:, None] * generator.uniform(0.4, 1.4, (n, 3))
    deferred = cash * generator.uniform(0.4, 1.4, n)
    return YearPrices(cash, 1.1 * cash, deferred, free, best, 0.9 * best)


@pytest.mark.parametrize("seed", range(12))
def test_no_choice_gains_more_than_the_vertices(seed: int) -> None:
    """2,000 random choices of c, g, w2 and X for each price: none gains more than the bound's maximum.

    And some come within 3 % of the range of what they gain, so the maximum is not just a large number.
    """
    generator = np.random.default_rng(seed)
    problem = random_problem(generator)
    if seed % 2:
        problem = replace(problem, tax=tuple(tuple(jump_tax() for _ in year) for year in problem.tax))
    t, h = int(generator.integers(3)), int(generator.integers(problem.n_statuses))
    n, draws = 40, 2_000
    choice, prices = choice_of(problem, t, h, n, generator), prices_of(problem, n, generator)
    most = choice.terms(prices)[1]
    d, s = problem.minimum_share[t, h], problem.accessible_share[t, h]
    need, tax = problem.need[t, h], problem.tax[t][h]
    largest = np.minimum(choice.most_deferred, 1e6)[:, None]
    # Choices at the ends and in between; a third just at a kink of the tax.
    x = largest * np.clip(generator.uniform(-0.2, 1.2, (n, draws)), 0, 1)
    g = x * np.clip(d + (s - d) * generator.uniform(-0.2, 1.2, (n, draws)), d, s)
    kink = generator.choice(tax.x, (n, draws))
    g = np.where((generator.random((n, draws)) < 0.33) & (kink >= d * x) & (kink <= s * x), kink, g)
    x = np.where((generator.random((n, draws)) < 0.33) & (s > 0), g / max(s, 1e-9), x)
    w2 = (
        g
        if not problem.conversions
        else d * x + (g - d * x) * np.clip(generator.uniform(-1, 2, x.shape), 0, 1)
    )
    spent = np.minimum(
        np.exp(generator.uniform(np.log(1e3), np.log(2e6), (n, draws))), problem.ceiling * need
    )
    cash, m2, m3 = prices.cash[:, None], prices.deferred[:, None], prices.free[:, None]
    nu2 = prices.best[:, TAX_DEFERRED, None]
    gain = need * problem.utility.value(spent / need) - cash * spent
    held = -cash * tax(g) - nu2 * g + cash * w2 + m3 * (g - w2) + (nu2 - m2) * x
    found = gain.max(axis=1) + held.max(axis=1)
    assert (found <= most + 1e-9 * np.abs(most)).all()
    spread = (gain.max(axis=1) - gain.min(axis=1)) + (held.max(axis=1) - held.min(axis=1))
    assert np.median((most - found) / spread) < 0.03


def test_negative_spending_counts_where_a_cost_cannot_be_met() -> None:
    """Down to income after the dearest tax, along the fallback line: at a high price it is what is chosen."""
    problem = couple_problem(3)
    income = problem.income.copy()
    income[1] = -50_000.0
    problem = replace(problem, income=income)
    generator = np.random.default_rng(0)
    choice, prices = choice_of(problem, 1, 0, 5, generator), prices_of(problem, 5, generator)
    steep = 2 * problem.utility.marginal(np.zeros(5))
    prices = replace(prices, cash=steep, free=steep, deferred=100 * steep, best=np.zeros((5, 3)))
    need = problem.need[1, 0]
    worth = need * problem.utility.value(-50_000.0 / need) + 50_000.0 * steep
    no_withdrawal = 0.0  # tax-deferred costs so much that nobody pretends to hold it
    np.testing.assert_allclose(choice.terms(prices)[1], worth + no_withdrawal, rtol=1e-12)


def test_factors_keep_every_portfolio_within_the_limit() -> None:
    """The largest factor: the expectation is within the limit in all portfolios and meets it in one."""
    generator = np.random.default_rng(1)
    living, estate = generator.uniform(0.1, 1.0, (2, 50, 4, 3))
    expect = Expectation(living, 0.2 * estate)
    estate_factor, limit = generator.uniform(0.5, 1.0, 50), generator.uniform(0.5, 1.0, 50)
    factors = np.stack([expect.factor(i, limit, estate_factor) for i in range(3)], axis=1)
    found = expect.of(Factors(factors, estate_factor))
    np.testing.assert_allclose(found.max(axis=1), np.tile(limit[:, None], (1, 3)), rtol=1e-12)
    assert (factors > 0).all()


def test_rates_of_the_hull_pass_below_a_surcharge() -> None:
    """By hand: 0 to 10,000, 10 % to 25,000, then the chord under the jump of 1,500 to 60,000, then 30 %."""
    problem = couple_problem(3, tax=((jump_tax(),) * 3,) * 3)
    choice = choice_of(problem, 0, 0, 500, np.random.default_rng(2))
    rates = np.array([0.0, 0.1, (1_500 + 0.1 * 35_000) / 35_000, 0.3])
    expected = rates[np.searchsorted([10_000.0, 25_000.0, 60_000.0], choice.gross)]
    below, above = choice.hull_rates()
    np.testing.assert_allclose(below, expected, rtol=1e-12)
    np.testing.assert_allclose(above, expected, rtol=1e-12)

r"""The proof that comes with a plan: an upper bound on every strategy from shadow prices.

Lagrangian duality for stochastic control with adapted multipliers (Rogers 2002, Mathematical
Finance 12(3) 271-286; Haugh, Kogan & Wang 2006, Operations Research 54(3) 405-418; Brown, Smith &
Sun 2010, Operations Research 58(4-1) 785-801). Let :math:`l = m_1, m_2, m_3` be prices, in utility
of year t per unit of money, of the opening balances along the plan's own path, functions of what has
happened so far, and :math:`\nu_i = \max_p E_t[\beta m_{i,t+1} R_{p,i}]` (at a death the price of an
estate, e (1, 1 - heirs' rate, 1)). If :math:`\nu_1 \le l`, :math:`l \le m_3` and :math:`\nu_3 \le
m_3`, then every strategy is worth at most

.. math::
    \sum_i m_{i,0} x_{i,0} + E \sum_t \beta^t \{\max_c [n f(c/n) - l c] + l\, \text{income}
    + \nu_2 a_2 + \nu_3 a_3 + B_t\} + E \beta^{death} \max_{b \ge 0} [v(b) - e b]

    B_t = \max_{g, w_2, X} \{-l T(g) - \nu_2 g + l w_2 + m_3 (g - w_2) + (\nu_2 - m_2) X\}

over :math:`d X \le w_2 \le g \le s X,\ X \le \bar X`, with g = w2 + k, T the year's tax, d and s the
minimum and accessible shares, a contributions and :math:`\bar X` the most that any strategy can hold
in tax-deferred; w2 = g without conversions. Everything but :math:`m_i x_i` drops out because the
account equations are priced in and what is left over has the sign of the conditions.

The conditions hold by construction, whatever the prices read off the solved value are worth: each
price is that reading times a factor for its account, known a year ahead and chosen such that the
conditional expectation (an exact sum over return nodes and statuses) meets its limit. While an
account holds money the factor is a martingale correction, so that money held is priced at what it will
be worth. Before that, next year's readings may be tilted by return node (`_Proof._tilt`). The price
of cash may be anything up to its reading times its factor; what is not used of it
costs (limit - l) x1, nothing in a year that opens without taxable.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.cashflow import advance, estate_money
from planner.optimum.duals import LARGEST_FACTOR, BoolArray, Expectation, Factors, YearChoice, YearPrices
from planner.optimum.policy import OptimalPolicy
from planner.piecewise import FloatArray
from planner.problem import TAX_DEFERRED, TAX_FREE, TAXABLE, Decision, IntArray, Problem, State
from planner.simulation import Scenarios, draw_scenarios

EMPTY = 1e-6  # share of wealth below which an account counts as empty
LITTLE = 0.1  # essential years below which tax-free money is priced as read, at the cost of a slack
STEADY = 1.2  # most by which tax-deferred's factor exceeds cash's while the minimum distribution binds
PILOT_PATHS = 64
_TILTS = np.array([0.001, 0.002, 0.004, 0.007, 0.011, 0.016, 0.023, 0.032, 0.045, 0.06, 0.08])
TILTS = np.concatenate([-_TILTS[::-1], [0.0], _TILTS])  # of next year's prices, per standard deviation
STRAYING = 25.0  # years over which a tilt's distance from marginal utility is felt; tried: 10 to 100
TERMS = ("spending", "taxable held", "tax-free held", "tax-free spent", "tax-deferred", "estate")


@dataclass(frozen=True, slots=True, eq=False)
class Gap:
    """Bound minus the plan's value, in utility, on the drawn paths.

    Attributes
    ----------
    terms : ndarray of shape (n_paths, 6)
        By `TERMS`; each is at least 0 up to rounding, none is clipped.
    value, bound : ndarray of shape (n_paths,)
        What the plan got on each path, and the bound's own terms. Their means differ by the mean
        of the terms, up to sampling: the difference of a path is a martingale away from them.
    """

    terms: FloatArray
    value: FloatArray
    bound: FloatArray

    @property
    def mean(self) -> float:
        """Mean gap."""
        return float(self.terms.sum(axis=1).mean())

    @property
    def standard_error(self) -> float:
        """Standard error of the mean."""
        total = self.terms.sum(axis=1)
        return float(total.std(ddof=1) / np.sqrt(total.size))


class PriceReader:
    """Raw prices at balances anywhere: what `bound` multiplies by factors. A test may give any."""

    def __init__(self, policy: OptimalPolicy) -> None:
        self.policy = policy

    def __call__(self, t: int, h: int, balances: FloatArray) -> FloatArray:
        """Positive prices (n, 3) at balances (n, 3) in year t and status h."""
        return self.policy.prices(t, h, balances)


def prove(
    problem: Problem,
    policy: OptimalPolicy,
    n_paths: int,
    generator: np.random.Generator,
    prices: PriceReader | None = None,
    scenarios: Scenarios | None = None,
) -> Gap:
    """Bound and gap on drawn paths of the plan, under the solver's own node law.

    Parameters
    ----------
    prices
        Raw prices; None = the solved value's slopes.
    scenarios
        Paths of the node law to use instead of drawing `n_paths`, for instance all there are.
    """
    reader = prices or PriceReader(policy)
    follow = False
    if ((problem.minimum_share > 0) & (problem.minimum_share < 1)).any():
        # Which of two ways to price around binding minimum distributions is tried on paths of its own, so
        # that the choice does not flatter the bound; both ways on the same paths, in one pass.
        (child,) = generator.spawn(1)
        n_pilots = min(n_paths, PILOT_PATHS)
        drawn = draw_scenarios(problem, n_pilots, child, law="nodes")
        assert drawn.node is not None
        twice = Scenarios(np.tile(drawn.status, (2, 1)), node=np.tile(drawn.node, (2, 1)))
        pilots = _Proof(problem, policy, reader, twice, np.arange(2 * n_pilots) >= n_pilots).run()
        without, with_them = pilots.terms.reshape(2, -1).sum(axis=1)
        follow = bool(with_them < without)
    scenarios = scenarios or draw_scenarios(problem, n_paths, generator, law="nodes")
    return _Proof(problem, policy, reader, scenarios, np.full(scenarios.n_paths, follow)).run()


class _Proof:
    """One pass forward over the years, all paths at once."""

    def __init__(
        self,
        problem: Problem,
        policy: OptimalPolicy,
        prices: PriceReader,
        scenarios: Scenarios,
        follow_minimum: BoolArray,
    ) -> None:
        self.problem, self.policy, self.prices = problem, policy, prices
        self.follow_minimum = follow_minimum
        self.n_paths = scenarios.n_paths
        assert scenarios.node is not None
        self.status, self.node = scenarios.status.astype(np.int64), scenarios.node.astype(np.int64)
        gross = problem.gross
        self.growth = np.stack([gross - problem.drag[:, None], gross, gross], axis=-1)  # (p, q, 3)
        self.discounted = problem.discount * problem.node_weights[None, :, None] * self.growth
        riskiest = np.log(gross[gross.std(axis=1).argmax()])
        spread = riskiest - problem.node_weights @ riskiest
        self.z = spread / np.sqrt(problem.node_weights @ spread**2 + 1e-300)
        self.middle = int(np.abs(self.z).argmin())
        tilted = np.exp(TILTS[:, None] * self.z)[:, None, :, None] * self.discounted  # (tilts, p, q, 3)
        self.tilts = [tilted[..., i].reshape(-1, self.z.size).T for i in range(3)]
        # An estate's price has to keep pace with those of the living: tilting these alone made it worse.
        self.tilted = problem.n_portfolios > 1 and not problem.estate.wanted
        self.keep = np.array([1.0, 1.0 - problem.heirs_tax_rate, 1.0])
        self.empty = EMPTY * max(problem.wealth, problem.utility.essential)
        self.little = LITTLE * problem.utility.essential

    def run(self) -> Gap:
        problem, n = self.problem, self.n_paths
        self.terms = np.zeros((n, len(TERMS)))
        self.value, self.bound = np.zeros(n), np.zeros(n)
        balances = np.tile(problem.opening, (n, 1))
        factor = np.ones((n, 3))
        most_deferred = np.full(n, problem.opening[TAX_DEFERRED])
        raw = np.empty((n, 3))
        raw[:] = self._raw(0, 0, problem.opening[None, :])
        self.bound += raw[0] @ problem.opening
        for t in range(problem.n_years):
            following_raw = np.empty_like(raw)
            for h in range(problem.n_statuses):
                path = np.flatnonzero(self.status[:, t] == h)
                if path.size:
                    self._year(t, h, path, balances, factor, raw, following_raw, most_deferred)
            raw = following_raw
        return Gap(self.terms, self.value, self.bound)

    def _raw(self, t: int, h: int, balances: FloatArray) -> FloatArray:
        """Readable prices made fit: positive, tax-free at least cash, empty tax-deferred at least its use."""
        raw = np.maximum(self.prices(t, h, balances), 1e-300)
        raw[:, TAX_FREE] = np.maximum(raw[:, TAX_FREE], raw[:, TAXABLE])
        first_rate = float(self.problem.tax[t][h].slopes[0])
        none = balances[:, TAX_DEFERRED] <= self.empty
        use = (1.0 - first_rate) * raw[:, TAXABLE]
        if self.problem.conversions:
            use = np.maximum(use, raw[:, TAX_FREE] - first_rate * raw[:, TAXABLE])
        raw[:, TAX_DEFERRED] = np.where(none, np.maximum(raw[:, TAX_DEFERRED], use), raw[:, TAX_DEFERRED])
        return raw

    def _year(
        self,
        t: int,
        h: int,
        path: IntArray,
        balances: FloatArray,
        factor: FloatArray,
        raw: FloatArray,
        following_raw: FloatArray,
        most_deferred: FloatArray,
    ) -> None:
        problem = self.problem
        x = balances[path]
        zero = np.zeros(path.size)
        state = State(x, np.full(path.size, h), zero + 1.0, zero, zero, np.zeros((path.size, 0)))
        decision = self.policy.decide(problem, t, state)
        node = self.node[path, t]
        year = advance(problem, t, state, decision, problem.gross[decision.portfolio, node])
        choice = YearChoice.of(problem, t, h, year, most_deferred[path])

        # Next year's raw prices at every return node and status, and the price of an estate.
        grown = (choice.left + problem.contribution[t, h])[:, None, :] * self.growth[decision.portfolio]
        chances = problem.transition[t, h] * (t + 1 < problem.n_years)
        ahead = {
            int(h2): self._raw(t + 1, int(h2), grown.reshape(-1, 3)).reshape(grown.shape)
            for h2 in np.flatnonzero(chances > 0)
        }
        estate = estate_money(problem, grown)
        estate_price = problem.estate.marginal(np.maximum(estate, problem.utility.floor))
        living = sum(
            (float(chances[h2]) * prices for h2, prices in ahead.items()), start=np.zeros(grown.shape)
        )
        passed = problem.death[t, h] * estate_price[:, :, None] * self.keep
        if self.tilted:
            tilt = self._tilt(choice, decision, living, passed)
            living = living * tilt[:, :, None]
            ahead = {h2: prices * tilt[:, :, None] for h2, prices in ahead.items()}
        expect = Expectation(self._expected(living), self._expected(passed))

        limit = factor[path] * raw[path]
        prices, following, terms, most = self._set_prices(choice, path, decision, expect, raw[path], limit)

        discount = problem.discount**t
        self.terms[path, :5] += discount * terms
        paid_in = (prices.best * problem.contribution[t, h]).sum(axis=1)
        self.bound[path] += discount * (most + prices.cash * year.income + paid_in)
        need = problem.need[t, h]
        self.value[path] += discount * need * problem.utility.value(year.spending / need)

        after = self.status[path, t + 1]
        dead = np.flatnonzero(after == problem.n_statuses)
        if dead.size and problem.estate.wanted:
            b = estate[dead, node[dead]]
            price = following.estate[dead] * estate_price[dead, node[dead]]
            worth, best = problem.estate.value(b), _best_estate(problem, price)
            later = problem.discount ** (t + 1)
            self.terms[path[dead], 5] += later * (best - (worth - price * b))
            self.bound[path[dead]] += later * (best + price * problem.cash_aside)
            self.value[path[dead]] += later * worth
        for h2, successor in ahead.items():
            moved = np.flatnonzero(after == h2)
            following_raw[path[moved]] = successor[moved, node[moved]]
        balances[path], factor[path] = year.closing, following.accounts
        stays = (1.0 - problem.minimum_share[t, h]) * most_deferred[path]
        grows = problem.gross.max(axis=0)[node]
        most_deferred[path] = (stays + problem.contribution[t, h, TAX_DEFERRED]) * grows

    def _tilt(
        self, choice: YearChoice, decision: Decision, living: FloatArray, passed: FloatArray
    ) -> FloatArray:
        """Factors (n, q) by return node on next year's raw prices that make the held portfolio the best.

        exp(tau z), z the node's standardised return, the same for all accounts, so that their ratios stay
        as they are read. On a list of portfolios the held one is best only on the whole and roughly; at
        prices as read, some account gains in another. Of the tau tried, the one with the least slack on
        what is held, plus what tilted prices of cash cost by spending that obeys them.
        """
        spent = np.maximum(choice.year.spending, 0.0) / self.problem.utility.risk_aversion
        price = living[:, self.middle, TAXABLE]
        # Account by account, so that all tilts are one product of matrices: (n, q) by (q, tilts portfolios).
        cost = 0.5 * STRAYING * TILTS[:, None] ** 2 * spent * price
        paths = np.arange(spent.size)
        for account in range(3):
            expected = living[:, :, account] @ self.tilts[account]
            expected = expected.reshape(spent.size, TILTS.size, -1)
            expected += (passed[:, :, account] @ self.discounted[:, :, account].T)[:, None, :]
            slack = expected.max(axis=2) - expected[paths, :, decision.portfolio]
            cost += slack.T * choice.left[:, account]
        return np.exp(TILTS[_least(cost), None] * self.z)

    def _expected(self, values: FloatArray) -> FloatArray:
        """E_t[beta values R_p] (n, portfolios, 3) of values (n, q, 3)."""
        return np.stack([values[:, :, i] @ self.discounted[:, :, i].T for i in range(3)], axis=-1)

    def _set_prices(
        self,
        choice: YearChoice,
        path: IntArray,
        decision: Decision,
        expect: Expectation,
        raw: FloatArray,
        limit: FloatArray,
    ) -> tuple[YearPrices, Factors, FloatArray, FloatArray]:
        """Today's prices and next year's factors, and the gap's terms and the bound's with them.

        Of the prices of cash within their limits the one with the least gap is taken.
        """
        m2 = limit[:, TAX_DEFERRED]
        # Without a tax-free account nothing limits the price of cash from above but its own limit.
        m3 = limit[:, TAX_FREE if self.problem.has_account[TAX_FREE] else TAXABLE]
        start = np.minimum(np.minimum(raw[:, TAXABLE], limit[:, TAXABLE]), m3)
        # Where the minimum distribution binds, an error of m2 / l would grow by 1 / (1 - d) a year: cash is
        # priced no higher than tax-deferred, in proportion to the readings, and that factor no higher than
        # cash's.
        binding = choice.at_minimum
        with np.errstate(over="ignore"):
            in_proportion = raw[:, TAXABLE] * (m2 / raw[:, TAX_DEFERRED])
        start = np.where(binding, np.clip(in_proportion, 0.5 * start, start), start)
        estate_most = expect.estate.max(axis=1)
        little = choice.left + choice.paid_in <= self.little
        # The estate's price keeps pace with that of an account that holds money, and within all limits.
        pace = (expect.estate + expect.living).max(axis=1)
        limits = np.stack([start, m2, m3], axis=1)
        common = limits / np.maximum(pace, 1e-300)
        leading = np.where(little[:, TAXABLE], common[:, TAX_FREE], common[:, TAXABLE])
        leading = np.where(little[:, TAXABLE] & little[:, TAX_FREE], common[:, TAX_DEFERRED], leading)
        # A tenth of each limit is left to the living, so that no price falls to nothing.
        within = 0.9 * (limits / np.maximum(estate_most, 1e-300))[:, [TAXABLE, TAX_FREE]].min(axis=1)
        estate = np.minimum(np.clip(leading, 0.5, LARGEST_FACTOR), within)

        # An empty account costs nothing to price: tax-deferred is priced high, so that nobody gains by
        # pretending to hold it; (nearly) empty tax-free follows tax-deferred's factor.
        target = choice.deferred_target(start, m2, m3, self.follow_minimum[path])
        deferred = expect.factor(TAX_DEFERRED, target, estate)
        in_step = STEADY * start / raw[:, TAXABLE]
        holds = binding & ~little[:, TAX_DEFERRED]
        deferred = np.where(holds, np.minimum(deferred, in_step), deferred)
        # A tenth at least: tax-free caps the price of cash, which must not fall to nothing.
        usual = np.where(little[:, TAX_DEFERRED], 1.0, np.maximum(deferred, 0.1))
        free = expect.factor(TAX_FREE, m3, estate)
        free = np.where(little[:, TAX_FREE], np.minimum(free, usual), free)

        def priced(cash: FloatArray) -> tuple[YearPrices, Factors]:
            taxable = expect.factor(TAXABLE, cash, estate)
            factor = np.stack(np.broadcast_arrays(taxable, deferred, free), axis=-1)
            accounts = np.minimum(factor, LARGEST_FACTOR)
            factors = Factors(accounts, estate)
            nu = expect.of(factors)
            held = nu[..., paths, decision.portfolio, :]
            return YearPrices(cash, limit[:, TAXABLE], m2, m3, nu.max(axis=-2), held), factors

        paths = np.arange(start.size)
        first, _ = priced(start)
        least = np.maximum(0.5 * start, 1.05 * estate * estate_most[:, TAXABLE])
        most = np.minimum(limit[:, TAXABLE], m3)
        tried = np.minimum(np.maximum(choice.cash_prices(raw[:, TAXABLE], first), least), most)
        tried = np.concatenate([start[None], tried])
        terms, gained = choice.terms(priced(tried)[0])
        best = _least(terms.sum(axis=-1))
        prices, factors = priced(tried[best, paths])
        return prices, factors, terms[best, paths], gained[best, paths]


def _least(costs: FloatArray) -> IntArray:
    """Index of the least of what was tried (k, n); what is not a number is never the least."""
    return np.asarray(np.where(np.isnan(costs), np.inf, costs).argmin(axis=0))


def _best_estate(problem: Problem, price: FloatArray) -> FloatArray:
    """Return max over b >= 0 of v(b) - e b, for e > 0."""
    estate, utility = problem.estate, problem.utility
    wanted = utility.power_marginal_inverse(price / estate.strength**utility.risk_aversion)
    b = np.maximum(wanted - estate.strength * estate.threshold, 0.0)
    nothing = estate.value(np.zeros(price.size))
    return np.maximum(estate.value(b) - price * b, nothing)

"""The recursion against closed forms: Samuelson, Yaari, Lockwood; each number with its source."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from builders import plain_problem
from numpy.testing import assert_allclose
from scipy.optimize import brentq

from planner.markets import LognormalReturns, normal_nodes
from planner.mortality import gompertz_death_probability, survival, transitions
from planner.optimum.policy import OptimalPolicy
from planner.optimum.recursion import SolverSettings, solve
from planner.outcomes import need_normaliser
from planner.piecewise import FloatArray
from planner.preferences import EstateUtility, SpendingUtility
from planner.problem import Problem, State
from planner.simulation import Scenarios, simulate

SPENDING_TOLERANCE = 1e-3
"""0.1 %: a tenth of the finest figure a client sees is rounded to (spending to the nearest per cent)."""

N_NODES = 31  # the closed forms integrate the lognormal law exactly; 31 nodes do so to 1e-12
ESSENTIAL = 3.7  # any value: no kink (kappa 1), and the floor below is never reached
TINY_FLOOR = ESSENTIAL * 1e-5


def utility(gamma: float) -> SpendingUtility:
    """Plain power utility, as the closed forms have it."""
    return SpendingUtility(gamma, 1.0, ESSENTIAL, TINY_FLOOR)


def savings_problem(
    death: FloatArray, gross: FloatArray, weights: FloatArray, gamma: float, beta: float, **overrides: object
) -> Problem:
    """One taxable account of 100, no tax; `death` (n_years,) with certain death in the last year."""
    n_years = death.size
    transition, gone = transitions(death)
    chosen = utility(gamma)
    fields: dict[str, object] = {
        "transition": transition,
        "death": gone,
        "gross": gross,
        "node_weights": weights,
        "returns": None,
        "drag": np.zeros(gross.shape[0]),
        "portfolio_names": tuple(f"{p}" for p in range(gross.shape[0])),
        "utility": chosen,
        "estate": EstateUtility(chosen),
        "discount": beta,
        "opening": np.array([100.0, 0.0, 0.0]),
        "has_account": (True, False, False),
    }
    return plain_problem(n_years, **{**fields, **overrides})


def spent(policy: OptimalPolicy, problem: Problem, t: int, wealth: float = 100.0, status: int = 0) -> float:
    """Spending at a wealth, all of it in taxable, with the policy's own reading between nodes."""
    zero = np.zeros(1)
    state = State(
        np.array([[wealth, 0.0, 0.0]]), np.array([status]), np.ones(1), zero, zero, np.zeros((1, 0))
    )
    return float(policy.decide(problem, t, state).spending[0])


# Samuelson with mortality ------------------------------------------------------------------------


@dataclass(frozen=True)
class Example:
    """A row of the published-checks table: parameters and the digits to be met."""

    gamma: float
    beta: float
    safe: float
    log_mean: float
    log_deviation: float
    n_years: int
    gompertz: tuple[float, float] | None
    theta: float
    alpha: float
    rho: float
    shares: dict[int, float]  # k_t: spending per unit of wealth in year t
    level: float | None

    @property
    def death(self) -> FloatArray:
        q = np.zeros(self.n_years)
        if self.gompertz is not None:
            q = gompertz_death_probability(65 + np.arange(self.n_years), *self.gompertz)
        q[-1] = 1.0
        return q

    def gross(self, alpha: FloatArray) -> FloatArray:
        """Gross returns of shares alpha in the risky asset, (n_portfolios, n_nodes)."""
        risky = np.exp(self.log_mean + self.log_deviation * normal_nodes(N_NODES)[0])
        return alpha[:, None] * risky + (1 - alpha[:, None]) * self.safe

    def problem(self, alpha: FloatArray, **overrides: object) -> Problem:
        strength = self.theta ** (1 / self.gamma)
        overrides.setdefault("estate", EstateUtility(utility(self.gamma), strength, 0.0))
        law = self.gross(alpha), normal_nodes(N_NODES)[1]
        return savings_problem(self.death, *law, self.gamma, self.beta, **overrides)


# Closed form with derived digits, confirmed by a second numerical method. Samuelson (1969), Review of
# Economics and Statistics 51(3) 239-246; Merton (1969), same issue 247-257; mortality as a discount
# (Yaari 1965, Review of Economic Studies 32(2) 137-150).
EXAMPLES = {
    "EX1": Example(
        3, 0.97, 1.01, 0.05, 0.18, 31, None, 0.0, 0.57930462, 0.9489865133,
        {0: 0.0473499916, 5: 0.05316489, 10: 0.06189045, 20: 0.10396824}, 4.64994764,
    ),
    "EX2": Example(
        4, np.exp(-0.025), np.exp(0.025), 0.055, 0.17, 56, (89.335, 9.5), 0.0, 0.38375007, 0.9043847703,
        {0: 0.0492887648, 5: 0.05403422, 10: 0.06036958, 20: 0.08093183}, 4.58203864,
    ),
    "EX3": Example(
        5, 0.98, 1.02, 0.06, 0.20, 56, (89.335, 9.5), 10.0, 0.29938902, 0.8912721812,
        {0: 0.0446827183, 5: 0.0489398, 10: 0.05455604, 20: 0.07245279}, None,
    ),
}  # fmt: skip


def shares_of_wealth(
    death: FloatArray, rho: float, gamma: float, beta: float, theta: float = 0.0
) -> FloatArray:
    """k_t of the closed form: 1/k_t = 1 + [beta rho (p_t k_{t+1}^-g + (1 - p_t) theta)]^(1/g)."""
    k = np.empty(death.size)
    following = 0.0
    for t in range(death.size - 1, -1, -1):
        worth = (1 - death[t]) * following + death[t] * theta
        k[t] = 1 / (1 + (beta * rho * worth) ** (1 / gamma))
        following = k[t] ** -gamma
    return k


@pytest.mark.parametrize("name", EXAMPLES)
def test_the_closed_form_gives_the_published_digits(name: str) -> None:
    """The formulas of this file, before they judge the solver: alpha*, rho, k_t and level spending."""
    e = EXAMPLES[name]
    weights = normal_nodes(N_NODES)[1]

    def excess(alpha: float) -> float:
        gross = e.gross(np.array([alpha]))[0]
        return float(weights @ ((e.gross(np.array([1.0]))[0] - e.safe) * gross**-e.gamma))

    alpha = brentq(excess, 0.0, 1.0, xtol=1e-12)
    assert alpha == pytest.approx(e.alpha, abs=1e-7)  # printed to 8 digits
    rho = float(weights @ e.gross(np.array([alpha]))[0] ** (1 - e.gamma))
    assert rho == pytest.approx(e.rho, abs=1e-9)
    k = shares_of_wealth(e.death, rho, e.gamma, e.beta, e.theta)
    for t, expected in e.shares.items():
        assert k[t] == pytest.approx(expected, abs=1e-8)
    if e.level is not None:
        # V_0 = k_0^-g W^(1-g)/(1-g); level^(1-g)/(1-g) times the discounted chances of being alive = V_0.
        alive = float(e.beta ** np.arange(e.n_years) @ survival(e.death)[:-1])
        level = (k[0] ** -e.gamma / alive) ** (1 / (1 - e.gamma)) * 100
        assert level == pytest.approx(e.level, abs=1e-7)


@pytest.mark.parametrize("name", EXAMPLES)
def test_spending_meets_samuelson_where_the_risky_share_is_free(name: str) -> None:
    """A list of shares in steps of 2.5 %, alpha* not among them: the loss is of second order.

    An error of half a step in alpha costs g sigma^2/2 (0.0125)^2 of wealth a year, 1.6e-5 for EX3.
    """
    e = EXAMPLES[name]
    alpha = np.linspace(0, 1, 41)
    problem = e.problem(alpha)
    policy = solve(problem)
    for t, expected in e.shares.items():
        assert spent(policy, problem, t) == pytest.approx(100 * expected, rel=SPENDING_TOLERANCE)
    if e.level is not None:
        assert policy.level_spending(problem.opening) == pytest.approx(e.level, rel=SPENDING_TOLERANCE)
    held = alpha[policy.portfolio[0, 0, 4:-4, 0, 0]]
    assert np.abs(held - e.alpha).max() <= 0.025  # the listed share on either side of alpha*


def test_spending_is_the_same_share_of_any_wealth() -> None:
    e = EXAMPLES["EX2"]
    problem = e.problem(np.array([0.4]))
    policy = solve(problem)
    for wealth in (20.0, 50.0, 150.0, 300.0):
        share = spent(policy, problem, 0, wealth) / wealth
        assert share == pytest.approx(spent(policy, problem, 0) / 100, rel=2 * SPENDING_TOLERANCE)


@pytest.mark.parametrize("name", EXAMPLES)
@pytest.mark.parametrize("portfolio", [(0.02, 0.06), (0.045, 0.17)])
def test_spending_with_one_lognormal_portfolio_held(name: str, portfolio: tuple[float, float]) -> None:
    """Alpha fixed, so rho = E[R^(1-g)] = exp((1-g) mu + (1-g)^2 sigma^2 / 2) exactly; same recursion."""
    e = EXAMPLES[name]
    mean, deviation = portfolio
    returns = LognormalReturns(np.array([mean]), np.array([deviation]))
    gross, weights = returns.nodes(15)
    problem = replace(e.problem(np.zeros(1)), gross=gross, node_weights=weights, returns=returns)
    rho = float(np.exp((1 - e.gamma) * mean + ((1 - e.gamma) * deviation) ** 2 / 2))
    k = shares_of_wealth(e.death, rho, e.gamma, e.beta, e.theta)
    policy = solve(problem)
    for t in (0, 5, 10, 20):
        assert spent(policy, problem, t) == pytest.approx(100 * k[t], rel=SPENDING_TOLERANCE)
    if not e.theta:
        value = k[0] ** -e.gamma / need_normaliser(problem)
        level = value ** (1 / (1 - e.gamma)) * 100
        assert policy.level_spending(problem.opening) == pytest.approx(level, rel=SPENDING_TOLERANCE)


# Couple ------------------------------------------------------------------------------------------


def couple_problem_of(e: float, gamma: float = 4.0) -> Problem:
    """Market of EX2; A is 65, Gompertz (88, 10), B is 63, Gompertz (90, 9); felicity 2 u(c/e) of both.

    phi c^(1-g)/(1-g) = n f(c/n) with n = phi^(1/g), here divided by the couple's so that n = 1 for both.
    """
    years = np.arange(56)
    first = gompertz_death_probability(65 + years, 88, 10)
    second = gompertz_death_probability(63 + years, 90, 9)
    first[-1] = second[-1] = 1.0
    transition, death = transitions(first, second)
    alone = (1 / (2 * e ** (gamma - 1))) ** (1 / gamma)
    alpha = np.linspace(0.3, 0.45, 7)
    base = EXAMPLES["EX2"].problem(alpha)
    return replace(
        base,
        statuses=("both", "first", "second"),
        transition=transition,
        death=death,
        income=np.zeros((56, 3)),
        contribution=np.zeros((56, 3, 3)),
        tax=tuple((row[0],) * 3 for row in base.tax),
        need=np.tile([1.0, alone, alone], (56, 1)),
        minimum_share=np.zeros((56, 3)),
        accessible_share=np.ones((56, 3)),
        ages=np.stack([65 + years, 63 + years]),
    )


def test_survivors_need_of_the_equivalence_scale() -> None:
    """phi_single = 1, phi_both = 2 e^(g-1): e = 1.5 (OECD-modified scale) and g = 4 give 0.62040."""
    assert couple_problem_of(1.5).need[0, 1] == pytest.approx(0.62040, abs=5e-6)


def test_couple_meets_the_closed_form() -> None:
    """1/k_s = 1 + [(beta rho/phi_s) sum P(s->s') phi_s' k_s'^-g]^(1/g); digits agree with brute force."""
    problem = couple_problem_of(1.5)
    policy = solve(problem)
    for status, expected in enumerate((0.0520849991, 0.0500434148, 0.0475174858)):
        assert spent(policy, problem, 0, status=status) == pytest.approx(
            100 * expected, rel=SPENDING_TOLERANCE
        )


def test_couple_with_the_square_root_scale() -> None:
    problem = couple_problem_of(2**0.5)
    assert spent(solve(problem), problem, 0) == pytest.approx(5.16923210, rel=SPENDING_TOLERANCE)


# Logarithmic utility ------------------------------------------------------------------------------


@pytest.mark.parametrize("n_years", [1, 2, 25, 60])
def test_logarithmic_utility_spends_the_textbook_share(n_years: int) -> None:
    """Exact under any law of returns: c_0 = W (1 - beta)/(1 - beta^N), g = 1, no mortality."""
    death = np.zeros(n_years)
    death[-1] = 1.0
    gross = np.array([[0.7, 1.0, 1.3, 1.6], [1.02, 1.02, 1.02, 1.02]])  # any law
    problem = savings_problem(death, gross, np.array([0.2, 0.3, 0.3, 0.2]), 1.0, 0.95)
    expected = 100 * 0.05 / (1 - 0.95**n_years)
    assert spent(solve(problem), problem, 0) == pytest.approx(expected, rel=SPENDING_TOLERANCE)


def test_logarithmic_utility_with_mortality() -> None:
    """1/k_t = 1 + beta p_t / k_{t+1}: rho = 1 whatever is held."""
    e = EXAMPLES["EX2"]
    problem = savings_problem(e.death, e.gross(np.array([0.0, 0.8])), normal_nodes(N_NODES)[1], 1.0, 0.97)
    k = shares_of_wealth(e.death, 1.0, 1.0, 0.97)
    policy = solve(problem)
    for t in (0, 10, 30):
        assert spent(policy, problem, t) == pytest.approx(100 * k[t], rel=SPENDING_TOLERANCE)


# Yaari: an uncertain life and a pension ------------------------------------------------------------


def yaari_problem(pension: float) -> Problem:
    """Age 65 to 139, Gompertz (89.335, 9.5), certain e^.025, discount e^-.025, g = 4, wealth 100."""
    n_years = 75
    death = gompertz_death_probability(65 + np.arange(n_years), 89.335, 9.5)
    death[-1] = 1.0
    return savings_problem(
        death,
        np.array([[np.exp(0.025)]]),
        np.ones(1),
        4.0,
        np.exp(-0.025),
        income=np.full((n_years, 1), pension),
    )


def yaari_closed_form(pension: float) -> tuple[FloatArray, int]:
    """Spending c_t = c_0 S_t^(1/4) for n years, then the pension; n by c_{n-1} >= pension >= c_0 s_n."""
    discount = np.exp(-0.025 * np.arange(75))
    share = survival(gompertz_death_probability(65 + np.arange(75), 89.335, 9.5))[:-1] ** 0.25
    for n in range(1, 76):
        first = (100 + pension * discount[:n].sum()) / (discount[:n] @ share[:n])
        after = first * share[n] if n < 75 else 0.0
        if first * share[n - 1] >= pension >= after:
            break
    return np.where(np.arange(75) < n, first * share, pension), n


def yaari_path(pension: float, factor: float = 1.0) -> FloatArray:
    """Spending on the one path on which the client lives to the end, (75,)."""
    problem = yaari_problem(pension)
    status = np.zeros((1, 76), dtype=np.int16)
    status[0, -1] = 1
    lives_on = Scenarios(status, node=np.zeros((1, 75), dtype=np.int16))
    return simulate(
        problem, solve(problem, SolverSettings.for_problem(problem).scaled(factor)), lives_on
    ).spending[0]


# Recomputed; an independent constrained optimiser on the raw problem agrees. Yaari (1965), Review of
# Economic Studies 32(2) 137-150; Milevsky & Huang (2011), Financial Analysts Journal 67(2) 45-58, here
# on an annual grid with spending and pension at the start of the year.
YAARI = [(0.0, 4.500693, 75), (2.0, 6.960008, 40), (5.0, 10.416219, 35)]


@pytest.mark.parametrize(("pension", "first", "n"), YAARI)
def test_yaari_spending_with_a_pension(pension: float, first: float, n: int) -> None:
    """The printed first year and, ten years on, the path; 4.60 without a pension would be wrong timing."""
    expected, years = yaari_closed_form(pension)
    assert years == n
    assert expected[0] == pytest.approx(first, abs=6e-7)  # the printed digits
    path = yaari_path(pension)
    assert path[0] == pytest.approx(first, rel=SPENDING_TOLERANCE)
    assert_allclose(path[:25], expected[:25], rtol=SPENDING_TOLERANCE)
    assert_allclose(path[n + 5 : 60], expected[n + 5 : 60], rtol=SPENDING_TOLERANCE)


def test_yaari_path_down_to_the_pension() -> None:
    """c_0 10.4162192, c_10 10.0480052, c_34 5.3184569, then the pension of 5.

    Savings end in year 35, where spending has a kink in wealth that linear reading between nodes
    cuts: on four times as many nodes the printed years hold within 0.1 %, the last two before the
    kink within 0.2 %; what year 34 spends too much, year 35 lacks.
    """
    path = yaari_path(5.0, 4)
    assert_allclose(path[[0, 10, 34]], [10.4162192, 10.0480052, 5.3184569], rtol=SPENDING_TOLERANCE)
    assert_allclose(path[36:60], 5.0, rtol=SPENDING_TOLERANCE)
    assert_allclose(path[:60], yaari_closed_form(5.0)[0][:60], rtol=2e-3)


# Lockwood: a legacy as a luxury --------------------------------------------------------------------


def lockwood_problem(wealth: float, gamma: float) -> Problem:
    """One year, certain death at its end, phi .95, b0 18."""
    return savings_problem(
        np.ones(1),
        np.ones((1, 1)),
        np.ones(1),
        gamma,
        1.0,
        estate=EstateUtility(utility(gamma), 0.95 / 0.05, 18.0),
        opening=np.array([wealth, 0.0, 0.0]),
    )


@pytest.mark.parametrize(("wealth", "legacy"), [(10.0, 0.0), (20.0, 1.9), (100.0, 77.9)])
@pytest.mark.parametrize("gamma", [1.0, 2.0, 5.0])
def test_last_period_legacy(wealth: float, legacy: float, gamma: float) -> None:
    """With no risk the last period leaves phi max(0, x - b0), and that is what the plan is worth.

    Lockwood (2018), American Economic Review 108(9) 2513-2550; form of De Nardi 2004, Review of Economic
    Studies 71(3) 743-768. Eight times as many nodes, because 20 lies next to the kink of spending at 18,
    which linear reading between nodes cuts.
    """
    problem = lockwood_problem(wealth, gamma)
    policy = solve(problem, SolverSettings.for_problem(problem).scaled(2))
    assert wealth - spent(policy, problem, 0, wealth) == pytest.approx(legacy, abs=SPENDING_TOLERANCE * 18)

    best = problem.utility.value(wealth - legacy) + problem.estate.value(legacy)
    worth = problem.utility.marginal(wealth - legacy) * (wealth - legacy)
    found = policy.value(problem.opening[None, :])[0]
    assert abs(found - best) < SPENDING_TOLERANCE * worth

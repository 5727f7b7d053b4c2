"""Published amounts to the cent; what rules do in a household; no rule looks ahead."""

from __future__ import annotations

import csv
from dataclasses import fields, replace
from pathlib import Path

import numpy as np
import pytest
from builders import bracket_tax, couple_problem, plain_problem, single_problem, utility_of
from numpy.testing import assert_allclose

from planner.diagnostics import InputError
from planner.problem import Problem, State
from planner.rule_terms import RULE_TERMS, parse_rule
from planner.rules import (
    RULES,
    UNIFORM_LIFETIME_DIVISORS,
    AsAsked,
    ConstantPercentage,
    ConstantReal,
    DecisionRules,
    Divisor,
    Falling,
    FloorAndCeiling,
    Rule,
    SecureFirst,
    Smoothing,
    VirtualAnnuity,
    rules_for,
)
from planner.simulation import Scenarios, draw_scenarios, simulate

# Nominal returns and inflation of the shared test vector (derived from the published formulas with
# independent code; B_0 = 1,000,000; the formulas' sources stand beside each rule in planner/rules.py).
NOMINAL_RETURN = np.array([0.08, -0.12, -0.05, 0.15, 0.20, 0.22, 0.03, -0.25, 0.10, 0.18, 0.12, 0.07])
INFLATION = np.array([0.02, 0.03, 0.04, 0.08, 0.03, 0.02, 0.01, 0.0, 0.02, 0.03, 0.025, 0.02])

# (rule, age in year 0, nominal amounts, end balance)
VECTORS: list[tuple[Rule, int, str, float]] = [
    (  # Bengen (1994), J. Financial Planning 7(4) 171-180
        ConstantReal(1),
        65,
        "40000 40800 42024 43704.96 47201.36 48617.40 49589.75 50085.64 50085.64 51087.36 52619.98 53935.48",
        972092.46,
    ),
    (
        ConstantPercentage(1),
        65,
        "40000 41472 35035.55 31952.42 35275.47 40637.34 47594.45 47061.40 33884.20 35781.72 "
        "40533.53 43581.65",
        1119176.87,
    ),
    (  # Bengen (2001), J. Financial Planning, "Conserving Client Portfolios During Retirement, Part IV"
        FloorAndCeiling(1),
        65,
        "50000 51300 44650.50 46436.52 50151.44 51655.98 54292.13 53216 53216 54280.32 55908.72 57306.44",
        889614.01,
    ),
    (  # Guyton & Klinger (2006), J. Financial Planning 19(3) 48-58
        DecisionRules(1),
        65,
        "55000 56100 50490 45441 48167.46 49612.48 50604.73 51110.78 45999.70 46919.70 48327.29 49535.47",
        915561.04,
    ),
    (  # Waring & Siegel (2015), Financial Analysts Journal 71(1) 91-107; 35 years = age 65 to 100
        VirtualAnnuity(1),
        65,
        "36387.81 38718.07 33568.37 31418.67 35597.51 42085.73 50585.80 51333.38 37931.07 "
        "41107.56 47790.07 52733.87",
        1090748.51,
    ),
    (  # IRS Uniform Lifetime Table, Treas. Reg. 1.401(a)(9)-9(c), from age 73
        Divisor(1),
        73,
        "37735.85 40754.72 35718.36 33789.27 38518.29 46011.85 55868.42 57259.59 42501.97 "
        "46499.45 54249.36 60397.62",
        1021082.14,
    ),
    # The next three: the formulas of each class run by a few lines of plain Python, without the simulator.
    (
        Smoothing(1),
        65,
        "50000 51060 50652.91 49812.52 51284.86 51539.52 52750.04 53093.31 49929.91 "
        "48394.36 48334.74 48565.85",
        903690.85,
    ),
    (
        Falling(1),
        65,
        "45000 45441 46336.19 47707.74 51009.11 52013.99 52523.73 52518.48 51993.29 "
        "52502.83 53537.13 54326.81",
        914195.69,
    ),
    (  # bills of 30,000 with prices and no income: the reserve runs over the problem's twelve years
        SecureFirst(1),
        65,
        "56358.85 58548.42 53270.49 51532.73 56699.37 62520.28 69314.88 69398.52 58960.54 "
        "61218.47 65831.32 68933.16",
        731406.26,
    ),
]


def vector_scenarios(problem: Problem) -> Scenarios:
    """One path: the test vector's returns in real terms, everyone alive to the end."""
    status = np.zeros((1, problem.n_years + 1), dtype=np.int16)
    status[:, -1] = problem.n_statuses
    real = (1 + NOMINAL_RETURN) / (1 + INFLATION)
    gross = np.repeat(real[None, :, None], problem.n_portfolios, axis=2)
    return Scenarios(status, gross=gross, inflation=INFLATION[None, :])


@pytest.mark.parametrize("accounts", [(1.0, 0.0, 0.0), (0.2, 0.5, 0.3)], ids=["taxable", "three accounts"])
@pytest.mark.parametrize(("rule", "age", "amounts", "end"), VECTORS, ids=lambda v: getattr(v, "key", None))
def test_published_amounts_to_the_cent(
    rule: Rule, age: int, amounts: str, end: float, accounts: tuple[float, ...]
) -> None:
    """Untaxed and uncharged, the split over accounts changes nothing."""
    problem = plain_problem(
        12,
        opening=1e6 * np.array(accounts),
        ages=age + np.arange(12)[None, :],
        inflation=0.0,
        utility=utility_of(essential=30_000.0),
    )
    paths = simulate(problem, rule, vector_scenarios(problem))
    price = np.cumprod(np.append(1.0, 1 + INFLATION))
    # Half a cent: the vector is rounded to cents.
    expected = [float(amount) for amount in amounts.split()]
    assert_allclose(paths.spending[0] * price[:-1], expected, atol=0.005 + 1e-6, rtol=0)
    assert paths.estate[0] * price[-1] == pytest.approx(end, abs=0.005 + 1e-6)


def test_terms_are_the_parameters_of_the_rules_with_their_defaults() -> None:
    """The sheet Rules and the command line offer exactly what the classes take."""
    for rule in RULES:
        given = {f.name: f.default for f in fields(rule) if f.name not in ("portfolio", "divisors", "wanted")}
        given = {name: default for name, default in given.items() if name not in ("years", "least_years")}
        assert given == {t.parameter: t.default for t in RULE_TERMS if t.rule == rule.key}, rule.key
        assert all(t.label.casefold().startswith(rule.name) for t in RULE_TERMS if t.rule == rule.key), (
            rule.key
        )


def test_parameters_are_set_by_key_and_attribute() -> None:
    problem = single_problem()
    settings = {"constant-real": {"rate": 0.03}, "virtual-annuity": {"last_age": 95.0}}
    rules = {rule.key: rule for rule in rules_for(problem, 1, settings=settings)}
    assert rules["constant-real"] == ConstantReal(1, 0.03)
    assert rules["virtual-annuity"] == VirtualAnnuity(1, last_age=95)


def test_command_line_terms() -> None:
    assert parse_rule("constant-real") == ("constant-real", {})
    assert parse_rule("decision-rules:rate=5%,largest-raise=0.05") == (
        "decision-rules",
        {"rate": 0.05, "largest_raise": 0.05},
    )
    for text in ("constant-real:rat=4%", "constant-real:rate=4", "constant-real:rate=x", "divisor:rate=1%"):
        with pytest.raises(InputError) as error:
            parse_rule(text)
        assert [problem.code for problem in error.value.diagnostics] == ["rule-parameter"]
    assert "did you mean 'rate'" in str(_refused("constant-real:rat=4%"))
    assert "did you mean 4%" in str(_refused("constant-real:rate=4"))


def _refused(text: str) -> InputError:
    with pytest.raises(InputError) as error:
        parse_rule(text)
    return error.value


def all_rules(problem: Problem) -> list[Rule]:
    return list(rules_for(problem, portfolio=1, wanted=32_000.0))


def state_of(problem: Problem, balances: list[float], memory: float = 0.0, **market: float) -> State:
    def one(name: str, default: float) -> np.ndarray:
        return np.array([market.get(name, default)])

    return State(
        np.array([balances]),
        np.zeros(1, dtype=np.int64),
        one("price_level", 1.0),
        one("last_inflation", problem.inflation),
        one("last_return", 0.0),
        np.array([[memory]]),
    )


# What rules have in common ------------------------------------------------------------------------


def test_registry_and_table_are_in_step() -> None:
    problem = single_problem()
    assert tuple(type(rule) for rule in all_rules(problem)) == RULES
    assert AsAsked not in [type(rule) for rule in rules_for(problem, 0)]
    assert len({rule.key for rule in RULES}) == len({rule.name for rule in RULES}) == len(RULES)
    assert all(rule.reference for rule in RULES)


@pytest.mark.parametrize("index", range(len(RULES)), ids=[rule.key for rule in RULES])
def test_no_rule_looks_ahead(index: int) -> None:
    """Other returns, prices and deaths after year t leave every decision up to t as it was."""
    problem = couple_problem(12)
    rule = all_rules(problem)[index]
    generator = np.random.default_rng(5)
    drawn = draw_scenarios(problem, 200, generator)
    inflation = generator.normal(0.03, 0.02, (200, 12))
    scenarios = replace(drawn, inflation=inflation)
    base = simulate(problem, rule, scenarios)
    assert drawn.normal is not None
    for t in (0, 4, 9):
        normal, prices, status = drawn.normal.copy(), inflation.copy(), drawn.status.copy()
        normal[:, t:] += 1.0
        prices[:, t:] += 0.05
        status[:, t + 1 :] = problem.n_statuses  # everyone dies in year t
        other = simulate(problem, rule, Scenarios(status, normal=normal, inflation=prices))
        for name in ("spending", "withdrawal", "tax", "conversion", "portfolio"):
            assert np.array_equal(getattr(base, name)[:, : t + 1], getattr(other, name)[:, : t + 1]), name
        if t < 9:  # and the change does matter later, to those who live
            later = simulate(problem, rule, Scenarios(drawn.status, normal=normal, inflation=prices))
            assert not np.array_equal(base.balances[:, t + 1], later.balances[:, t + 1])


@pytest.mark.parametrize("index", range(len(RULES)), ids=[rule.key for rule in RULES])
def test_every_rule_holds_its_portfolio_and_converts_nothing(index: int) -> None:
    problem = couple_problem(conversions=True)
    paths = simulate(
        problem, all_rules(problem)[index], draw_scenarios(problem, 50, np.random.default_rng(1))
    )
    assert (paths.portfolio[paths.alive] == 1).all()
    assert (paths.conversion == 0).all()
    assert np.isfinite(paths.spending).all()


@pytest.mark.parametrize("index", range(len(RULES)), ids=[rule.key for rule in RULES])
def test_every_rule_bears_an_empty_account(index: int) -> None:
    problem = single_problem(opening=np.zeros(3))
    paths = simulate(
        problem, all_rules(problem)[index], draw_scenarios(problem, 20, np.random.default_rng(1))
    )
    assert_allclose(paths.spending[paths.alive], 12_000.0)  # the pension
    assert (paths.balances >= 0).all()


# Each rule ---------------------------------------------------------------------------------------


def test_amount_is_before_tax_and_spent_with_income() -> None:
    problem = single_problem(opening=np.array([0.0, 1_000_000.0, 0.0]))
    decision = ConstantReal(0).decide(problem, 0, state_of(problem, [0.0, 1e6, 0.0]))
    assert decision.withdraw[0] == 40_000
    assert decision.spending[0] == pytest.approx(12_000 + 40_000 - float(bracket_tax()(40_000.0)))


def test_constant_real_goes_on_after_a_death() -> None:
    problem = plain_problem(3)
    couple = couple_problem(3, **{name: getattr(problem, name) for name in ("opening", "drag")})
    couple = replace(
        couple,
        income=np.zeros((3, 3)),
        minimum_share=np.zeros((3, 3)),
        tax=tuple(problem.tax[0] * 3 for _ in range(3)),
    )
    status = np.array([[0, 2, 2, 3]], dtype=np.int16)
    paths = simulate(couple, ConstantReal(0), Scenarios(status, normal=np.zeros((1, 3))))
    assert_allclose(paths.spending, 40_000.0)


def test_decision_rules_cut_stops_fifteen_years_before_the_end() -> None:
    """60,000 of 800,000 is above 1.2 x 5.5 %; with exactly 15 years left nothing is cut."""
    problem = plain_problem(2, inflation=0.0)
    state = state_of(problem, [800_000.0, 0.0, 0.0], memory=60_000.0, last_return=0.05)
    assert DecisionRules(0, years=17).decide(problem, 1, state).spending[0] == pytest.approx(54_000)
    assert DecisionRules(0, years=16).decide(problem, 1, state).spending[0] == 60_000


@pytest.mark.parametrize(
    ("inflation", "last_return", "balance", "nominal"),
    [
        (0.03, 0.05, 1_000_000.0, 51_500.0),  # with prices
        (0.09, 0.05, 1_000_000.0, 53_000.0),  # at most 6 %
        (0.03, -0.05, 1_000_000.0, 51_500.0),  # a bad year, but 5 % is below 5.5 %
        (0.03, -0.05, 900_000.0, 50_000.0),  # a bad year and 5.6 %: no raise
        (0.03, 0.05, 1_200_000.0, 56_650.0),  # 4.29 % is below 4.4 %: 10 % more
        (0.03, -0.05, 700_000.0, 45_000.0),  # no raise, then 7.1 % is above 6.6 %: 10 % less
    ],
)
def test_decision_rules_case_by_case(
    inflation: float, last_return: float, balance: float, nominal: float
) -> None:
    problem = plain_problem(2)
    price = 1.5
    state = state_of(
        problem,
        [balance / price, 0.0, 0.0],
        memory=50_000.0,
        price_level=price,
        last_inflation=inflation,
        last_return=last_return,
    )
    decision = DecisionRules(0).decide(problem, 1, state)
    assert decision.spending[0] * price == pytest.approx(nominal)
    assert decision.memory[0, 0] == pytest.approx(nominal)


def test_virtual_annuity_follows_the_youngest_alive() -> None:
    """Couple of 68 and 65: 35 years while both live; 32 when the younger has died; never below 5."""
    problem = couple_problem(3)
    balance = np.array([[100_000.0, 0.0, 0.0]] * 3)
    status = np.array([0, 1, 2])
    state = State(balance, status, np.ones(3), np.zeros(3), np.zeros(3), np.zeros((3, 0)))
    income = problem.income[0]
    paid = VirtualAnnuity(0, real_rate=0.0).decide(problem, 0, state).spending - income
    assert_allclose(paid, [100_000 / 35, 100_000 / 32, 100_000 / 35])
    old = replace(problem, ages=problem.ages + 40)
    paid = VirtualAnnuity(0, real_rate=0.0).decide(old, 0, state).spending - income
    assert_allclose(paid, 100_000 / 5)


def test_divisor_before_and_beyond_the_table() -> None:
    """Our extension: 62 is ten years before 72, so 27.4 + 10; beyond 120 the last divisor, 2."""
    problem = plain_problem(1)
    state = state_of(problem, [1_000_000.0, 0.0, 0.0])
    for age, divisor in ((62, 37.4), (72, 27.4), (90, 12.2), (120, 2.0), (125, 2.0)):
        at_age = replace(problem, ages=np.array([[age]]))
        assert Divisor(0).decide(at_age, 0, state).spending[0] == pytest.approx(1e6 / divisor)


def test_divisor_uses_the_first_person_alive() -> None:
    problem = couple_problem(1, ages=np.array([[80], [75]]))
    balance = np.array([[100_000.0, 0.0, 0.0]] * 3)
    state = State(balance, np.arange(3), np.ones(3), np.zeros(3), np.zeros(3), np.zeros((3, 0)))
    paid = Divisor(0).decide(problem, 0, state).spending - problem.income[0]
    assert_allclose(paid, 100_000 / np.array([20.2, 20.2, 24.6]))


def test_as_asked_spends_the_need_until_money_is_gone() -> None:
    problem = plain_problem(4, opening=np.array([70_000.0, 0.0, 0.0]), inflation=0.0)
    problem = replace(problem, need=np.array([[1.0], [0.8], [0.8], [0.8]]))
    status = np.array([[0, 0, 0, 0, 1]], dtype=np.int16)
    paths = simulate(problem, AsAsked(0, 30_000.0), Scenarios(status, gross=np.ones((1, 4, 2))))
    assert_allclose(paths.spending[0], [30_000, 24_000, 16_000, 0])


def test_uniform_lifetime_table_matches_the_reference_copy() -> None:
    source = Path(__file__).parents[2] / "shared" / "reference" / "irs_uniform_lifetime_table.csv"
    if not source.exists():
        pytest.skip("the reference copy of the table is not beside the project")
    rows = list(csv.reader(source.read_text("utf-8").splitlines()))[1:]
    assert UNIFORM_LIFETIME_DIVISORS == tuple((int(age), float(divisor)) for age, divisor in rows)


def test_uniform_lifetime_table_falls_with_age() -> None:
    ages, divisors = zip(*UNIFORM_LIFETIME_DIVISORS, strict=True)
    assert ages == tuple(range(72, 121))
    assert (np.diff(divisors) < 0).all()

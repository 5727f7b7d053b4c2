"""Grids, slopes on them, and the interpolation of the year's value: what choices and prices are read from."""

import numpy as np
import pytest
from builders import plain_problem

from planner.optimum.grids import CashGrid, LogGrid, limited_slopes, plausible_slopes
from planner.optimum.recursion import SolverSettings, solve
from planner.optimum.surface import hermite_basis
from planner.piecewise import PiecewiseLinear

NODES = np.array([0.0, 1.0, 2.0, 4.0, 8.0])


def three_accounts(conversions: bool):
    """Four years, three accounts, three brackets of tax."""
    tax = PiecewiseLinear(np.array([0.0, 10_000.0, 40_000.0]), np.array([0.0, 0.0, 6_000.0]), 0.4)
    return plain_problem(
        4,
        income=np.full((4, 1), 12_000.0),
        tax=((tax,),) * 4,
        opening=np.array([60_000.0, 150_000.0, 40_000.0]),
        has_account=(True, True, True),
        conversions=conversions,
    )


@pytest.mark.parametrize("conversions", [False, True])
def test_slopes_are_those_of_the_level(conversions: bool) -> None:
    """Central differences within the cells; the step's own error is below 1e-6 of a slope of about 1."""
    surface = solve(three_accounts(conversions), SolverSettings(10, 12, 8, 30)).surfaces[0][0]
    generator = np.random.default_rng(3)
    n, step = 300, 0.5
    free = generator.uniform(1_000.0, 90_000.0, n)
    cash = free + generator.uniform(5_000.0, 90_000.0, n)
    deferred = generator.uniform(1_000.0, 200_000.0, n)
    node = np.zeros(n, dtype=np.int64)

    def level(*shift: float) -> np.ndarray:
        return surface(cash + shift[0], deferred + shift[1], node, free + shift[2])[0]

    found = surface(cash, deferred, node, free)
    assert np.array_equal(surface.level(cash, deferred, node, free), found[0])
    for axis in range(3 if conversions else 2):
        shift = np.zeros(3)
        shift[axis] = step
        difference = (level(*shift) - level(*-shift)) / (2 * step)
        # Points whose step crosses a node, where the second derivative jumps, are a few of many.
        assert np.median(np.abs(difference - found[1 + axis])) < 1e-6
        assert np.quantile(np.abs(difference - found[1 + axis]), 0.98) < 1e-3


def test_the_level_never_rises_above_the_upper_corner_of_its_cell() -> None:
    surface = solve(three_accounts(False), SolverSettings(10, 12, 8, 30)).surfaces[0][0]
    grid = surface.grid
    generator = np.random.default_rng(4)
    n = 2_000
    m, j, i = (
        generator.integers(0, k - 1, n) for k in (grid.nodes.size, surface.deferred.size, surface.free.size)
    )
    share = generator.uniform(0.0, 1.0, (3, n))
    inside = grid.nodes[m + 1] > grid.nodes[m]
    m, j, i, share = m[inside], j[inside], i[inside], share[:, inside]

    def between(nodes: np.ndarray, k: np.ndarray, part: np.ndarray) -> np.ndarray:
        return nodes[k] + part * (nodes[k + 1] - nodes[k])

    found = surface.level(
        between(grid.nodes, m, share[0]),
        between(surface.deferred.nodes, j, share[1]),
        np.zeros(m.size, dtype=np.int64),
        between(surface.free.nodes, i, share[2]),
    )
    upper = surface.numbers[0].reshape(surface.shape)[j + 1, m + 1, i + 1]
    # Points at a cell's very end are rounded into the next: none here.
    assert (found <= upper * (1 + 1e-12)).all()


def test_hermite_weights_reproduce_a_cubic_and_go_on_straight() -> None:
    def cubic(x: np.ndarray) -> np.ndarray:
        return 2.0 + x * (3.0 + x * (0.5 - 0.25 * x))

    def slope(x: np.ndarray) -> np.ndarray:
        return 3.0 + x * (1.0 - 0.75 * x)

    left, right = np.full(5, 1.0), np.full(5, 3.0)
    x = np.array([1.0, 1.5, 2.9, 3.0, 4.0])
    (heights, tilts), (height_slopes, tilt_slopes) = hermite_basis(x, left, right)
    ends = np.array([1.0, 3.0])
    value = heights.T @ cubic(ends) + tilts.T @ slope(ends)
    found_slope = height_slopes.T @ cubic(ends) + tilt_slopes.T @ slope(ends)
    expected = np.where(x > 3.0, cubic(np.array(3.0)) + slope(np.array(3.0)) * (x - 3.0), cubic(x))
    np.testing.assert_allclose(value, expected, rtol=1e-13)
    np.testing.assert_allclose(found_slope, slope(np.minimum(x, 3.0)), rtol=1e-12)


def test_plausible_slopes_leave_a_concave_function_alone_and_stop_nonsense() -> None:
    values, slopes = np.log1p(NODES), 1.0 / (1.0 + NODES)
    assert np.array_equal(plausible_slopes(slopes, values, NODES), slopes)
    wild = slopes.copy()
    wild[0], wild[2], wild[3] = 50.0, -1e296, 1e296
    kept = plausible_slopes(wild, values, NODES)
    chords = np.diff(values) / np.diff(NODES)
    assert kept[0] == 50.0  # an account that starts to be used up may be worth that much
    assert kept[2] == pytest.approx(0.5 * chords[2])
    assert kept[3] == pytest.approx(2.0 * chords[2])


def test_limited_slopes_are_within_their_chords() -> None:
    values = np.log1p(NODES)
    chords = np.diff(values) / np.diff(NODES)
    kept = limited_slopes(np.full(5, 9.0), values, NODES)
    assert (kept[1:-1] <= chords[:-1] + 1e-15).all()
    assert (kept <= 3.0 * np.append(chords, chords[-1])).all()


@pytest.mark.parametrize("essential", [20.0, 2e4, 2e7])
def test_cash_grid_keeps_to_its_size_whatever_wealth_is_to_spending(essential: float) -> None:
    """A grid through 0 and the kink at the scale of wealth had a node for every essential spending."""
    grid = CashGrid.build(56, 6e7, -6e7, 3.6e10, essential)
    assert 28 <= grid.nodes.size <= 112
    assert grid.nodes[grid.kink] == grid.nodes[grid.kink + 1] == essential
    assert (grid.nodes == 0.0).sum() == 1
    assert grid.nodes[0] <= -6e7
    assert grid.nodes[-1] >= 3.6e10
    places = np.concatenate([grid.nodes[:-1] + 1e-3 * np.diff(grid.nodes), [essential]])
    cells = grid.cell(places)
    assert (grid.nodes[cells] <= places).all()
    assert (places <= grid.nodes[cells + 1]).all()


def test_log_grid_cells_hold_their_points() -> None:
    grid = LogGrid.build(12, 5_000.0, 2e6)
    x = np.linspace(0.0, 2e6, 997)
    cells = grid.cell(x)
    assert (grid.nodes[cells] <= x + 1e-6).all()
    assert (x <= grid.nodes[cells + 1] + 1e-6).all()

"""One year of money: tax, minimum distribution, funding order, growth. The only place it moves.

The solver tabulates with these primitives; the simulator's `advance` applies them in the order
of a year: income arrives, withdrawal and conversion are taxed, spending is paid from cash and
taxable, then tax-free; what remains earns the return.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from planner.piecewise import FloatArray, PiecewiseLinear
from planner.problem import TAX_DEFERRED, TAX_FREE, TAXABLE, Decision, IntArray, Problem, State


def cash_on_hand(
    taxable: FloatArray, income: FloatArray, withdrawal: FloatArray, tax: FloatArray
) -> FloatArray:
    """M = x1 + income + w2 - T; may be negative. Arguments broadcast."""
    return np.asarray(np.asarray(taxable) + income + withdrawal - tax)


def fund(
    cash: FloatArray, spending: FloatArray, tax_free: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Pay spending from cash, then tax-free (conversion included).

    Returns y1 = max(0, M - c), w3 = max(0, c - M) and y3 = x3 + k - w3. Arguments broadcast.
    """
    left = np.asarray(cash) - spending
    from_tax_free = np.maximum(0.0, -left)
    return np.maximum(0.0, left), from_tax_free, np.asarray(tax_free - from_tax_free)


def grow(balances: FloatArray, gross: FloatArray, drag: FloatArray) -> FloatArray:
    """Balances (..., 3) after a year at gross return R, and R - drag in taxable; R, drag (...)."""
    gross = np.asarray(gross)
    factors = (gross - drag, gross, gross)
    return by_account(*(balances[..., i] * factor for i, factor in enumerate(factors)))


def by_account(taxable: FloatArray, tax_deferred: FloatArray, tax_free: FloatArray) -> FloatArray:
    """Money (..., 3) from that of each account; an account's numbers lie side by side in memory."""
    columns = np.empty((3, *np.broadcast_shapes(taxable.shape, tax_deferred.shape, tax_free.shape)))
    columns[TAXABLE], columns[TAX_DEFERRED], columns[TAX_FREE] = taxable, tax_deferred, tax_free
    return np.moveaxis(columns, 0, -1)


def estate_money(problem: Problem, balances: FloatArray) -> FloatArray:
    """Estate, after heirs' tax: x1 + (1 - heirs' rate) x2 + x3 + cash aside. (..., 3) -> (...)."""
    keep = np.array([1.0, 1.0 - problem.heirs_tax_rate, 1.0])
    return np.asarray(balances @ keep + problem.cash_aside)


def tax_due(problem: Problem, t: int, status: IntArray, gross_withdrawal: FloatArray) -> FloatArray:
    """T(w2 + k) in year t for each path; all (n_paths,)."""
    tax = np.empty(gross_withdrawal.shape)
    for h, here in by_status(status, problem.n_statuses):
        tax[here] = problem.tax[t][h](gross_withdrawal[here])
    return tax


def by_status(status: IntArray, n_statuses: int) -> Iterator[tuple[int, slice | IntArray]]:
    """Each status that occurs, with the paths in it: a slice where all are, which spares copies."""
    for h in range(n_statuses):
        here = np.flatnonzero(status == h)
        if here.size:
            yield h, slice(None) if here.size == status.size else here


@dataclass(frozen=True, slots=True, eq=False)
class Year:
    """The ledger of a year on many paths, each (n_paths,) or (n_paths, 3).

    opening + income + contribution + growth == spending + tax + closing, to rounding, summed
    over accounts. `withdrawal` is gross, per account: taxable's is what left it, 0 where cash
    was added to it. `minimum` is the minimum distribution that was due.
    """

    opening: FloatArray
    income: FloatArray
    contribution: FloatArray
    withdrawal: FloatArray
    conversion: FloatArray
    minimum: FloatArray
    tax: FloatArray
    spending: FloatArray
    portfolio: IntArray
    growth: FloatArray
    closing: FloatArray


def advance(problem: Problem, t: int, state: State, decision: Decision, gross: FloatArray) -> Year:
    """Carry out a decision for one year on many paths.

    The decision is kept within what is possible: w2 between the minimum distribution and what is
    accessible, conversion 0 unless allowed, spending between min(0, available) and
    min(available, ceiling).

    Parameters
    ----------
    gross : ndarray of shape (n_paths,)
        Gross real return of the portfolio that each path holds.
    """
    x = state.balances
    status = state.status
    income = problem.income[t][status]
    minimum, accessible = withdrawal_range(problem, t, state)
    withdraw = np.clip(decision.withdraw, minimum, accessible)
    convert = (
        np.clip(decision.convert, 0.0, accessible - withdraw)
        if problem.conversions
        else np.zeros_like(withdraw)
    )
    tax = tax_due(problem, t, status, withdraw + convert)
    cash = cash_on_hand(x[:, TAXABLE], income, withdraw, tax)
    tax_free = x[:, TAX_FREE] + convert
    available = cash + tax_free
    most = np.minimum(available, problem.ceiling * problem.need[t][status])
    spending = np.clip(
        decision.spending, np.minimum(0.0, available), np.maximum(most, np.minimum(0.0, available))
    )
    y1, from_tax_free, y3 = fund(cash, spending, tax_free)
    y2 = np.maximum(0.0, x[:, TAX_DEFERRED] - withdraw - convert)
    invested = by_account(y1, y2, np.maximum(0.0, y3))
    if problem.contribution[t].any():
        contribution = problem.contribution[t][status]
        invested += contribution
    else:
        contribution = np.broadcast_to(0.0, invested.shape)
    closing = grow(invested, gross, problem.drag[decision.portfolio])
    withdrawal = by_account(np.maximum(0.0, x[:, TAXABLE] - y1), withdraw, from_tax_free)
    return Year(
        opening=x,
        income=income,
        contribution=contribution,
        withdrawal=withdrawal,
        conversion=convert,
        minimum=minimum,
        tax=tax,
        spending=spending,
        portfolio=decision.portfolio,
        growth=closing - invested,
        closing=closing,
    )


def withdraw_gross(
    problem: Problem, t: int, state: State, amount: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Turn a rule's gross withdrawal into (w2, spending), each (n_paths,).

    Order of accounts: minimum distribution, taxable, tax-deferred, tax-free. Spending is
    income + amount - tax, so a minimum distribution above the amount stays in taxable. Where
    that would leave spending below 0 (a large one-off cost), the withdrawal is raised until
    spending is 0 or everything accessible is used. Spending is held to the ceiling.
    """
    x = state.balances
    minimum, accessible = withdrawal_range(problem, t, state)
    amount = np.clip(amount, 0.0, x[:, TAXABLE] + accessible + x[:, TAX_FREE])
    withdraw = np.clip(amount - x[:, TAXABLE], minimum, accessible)
    spending = problem.income[t][state.status] + amount - tax_due(problem, t, state.status, withdraw)
    short = spending < 0
    if short.any():
        enough, reached = withdraw_for_spending(problem, t, state, np.zeros_like(amount))
        withdraw = np.where(short, enough, withdraw)
        spending = np.where(short, reached, spending)
    return withdraw, np.minimum(spending, problem.ceiling * problem.need[t][state.status])


def withdraw_for_spending(
    problem: Problem, t: int, state: State, target: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """(w2, spending) that reach a target of spending after tax, as far as the money goes.

    Income above the target stays in taxable. Same order of accounts as `withdraw_gross`, so w2
    is the least withdrawal, from the minimum distribution on, whose cash after tax covers what
    income and taxable do not. Where none does, everything accessible is withdrawn.
    """
    x = state.balances
    minimum, accessible = withdrawal_range(problem, t, state)
    target = np.minimum(target, problem.ceiling * problem.need[t][state.status])
    cash = x[:, TAXABLE] + problem.income[t][state.status]
    withdraw = np.empty_like(target)
    for h, here in by_status(state.status, problem.n_statuses):
        withdraw[here] = least_withdrawal(problem.tax[t][h], target[here] - cash[here], minimum[here])
    withdraw = np.minimum(withdraw, accessible)
    available = cash + withdraw - tax_due(problem, t, state.status, withdraw) + x[:, TAX_FREE]
    return withdraw, np.minimum(target, available)


def withdrawal_range(problem: Problem, t: int, state: State) -> tuple[FloatArray, FloatArray]:
    """Minimum distribution and largest accessible withdrawal in money, each (n_paths,)."""
    balance = state.balances[:, TAX_DEFERRED]
    return problem.minimum_share[t][state.status] * balance, problem.accessible_share[t][
        state.status
    ] * balance


def least_withdrawal(tax: PiecewiseLinear, net: ArrayLike, at_least: ArrayLike = 0.0) -> FloatArray:
    """Least w >= at_least with w - T(w) >= net; arguments broadcast.

    Exact for any piecewise-linear tax, jumps and rates above 1 included: cash after tax may fall
    and be regained, so segments are tried in order. The last marginal rate must be below 1.
    """
    if tax.last_slope >= 1:
        raise ValueError("no withdrawal raises cash where the last marginal rate is 1 or more")
    net, start = np.broadcast_arrays(np.asarray(net, np.float64), np.asarray(at_least, np.float64))
    w = start.copy()
    short = w - tax(w) < net
    for left, right, paid, slope in zip(tax.x, np.append(tax.x[1:], np.inf), tax.y, tax.slopes, strict=True):
        if not short.any():
            break
        if slope >= 1 or right <= left:
            continue
        crossing = left + (net - (left - paid)) / (1 - slope)
        found = short & (crossing <= right) & (start < right)
        w = np.where(found, np.maximum(crossing, np.maximum(left, start)), w)
        short &= ~found
    return w

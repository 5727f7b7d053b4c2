"""What must hold of the assumptions: markets, portfolios, tax rules, life table, history.

Comparisons are written so that a NaN trips only the rule that numbers are finite; see
`planner.household_rules`.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

from planner import shipped
from planner.checks import OLDEST, amount, between, names_differ, near_miss
from planner.diagnostics import Diagnostic
from planner.household import BEST_EACH_YEAR, Household

WEIGHT_TOLERANCE = 1e-6  # weights typed as 33.3333 % in three cells still pass at six decimals
EIGENVALUE_TOLERANCE = 1e-8  # correlations typed to two decimals at the edge of what is possible


def assumption_problems(household: Household) -> Iterator[Diagnostic]:
    """Yield every problem of a household's assumptions, errors and warnings."""
    yield from _markets(household)
    yield from _portfolios(household)
    yield from _tax(household)
    yield from _life_table(household)
    yield from _history(household)


def _markets(household: Household) -> Iterator[Diagnostic]:
    markets = household.markets
    yield from between("markets.inflation", markets.inflation, -0.1, 0.5, "rate-range")
    if 0.10 < markets.inflation <= 0.5:
        message = f"inflation of {markets.inflation:.1%} a year for life is unusual"
        yield Diagnostic("inflation-high", "markets.inflation", message, "warning")
    classes = markets.asset_classes
    if not classes:
        yield Diagnostic("asset-classes-missing", "markets.asset_classes", "no asset class is listed")
    yield from names_differ("markets.asset_classes", "asset class", (c.name for c in classes))
    for index, asset in enumerate(classes):
        path = f"markets.asset_classes[{index}]"
        yield from between(f"{path}.expected_return", asset.expected_return, -0.5, 1, "rate-range")
        if 0.12 < asset.expected_return <= 1:
            message = f"an expected return of {asset.expected_return:.1%} is unusually high"
            yield Diagnostic("return-high", f"{path}.expected_return", message, "warning")
        if not math.isfinite(asset.standard_deviation):
            yield Diagnostic("number-not-finite", f"{path}.standard_deviation", "expected a finite number")
        elif asset.standard_deviation < 0:
            message = f"found {asset.standard_deviation:g}; expected 0 or more"
            yield Diagnostic("deviation-negative", f"{path}.standard_deviation", message)
        elif asset.standard_deviation > 0.6:
            message = f"a standard deviation of {asset.standard_deviation:.0%} is unusually high"
            yield Diagnostic("deviation-high", f"{path}.standard_deviation", message, "warning")
        yield from between(f"{path}.income_yield", asset.income_yield, 0, 1, "rate-range")
    yield from _correlations(household)


def _correlations(household: Household) -> Iterator[Diagnostic]:
    classes, matrix = household.markets.asset_classes, household.markets.correlations
    size = len(classes)
    if len(matrix) != size or any(len(row) != size for row in matrix):
        message = f"expected {size} rows of {size} correlations, one for each pair of asset classes"
        yield Diagnostic("correlation-shape", "markets.correlations", message)
        return
    sound = all(math.isfinite(value) for row in matrix for value in row)
    for i in range(size):
        if abs(matrix[i][i] - 1) > 1e-9:
            sound = False
            message = f"{classes[i].name} with itself is {matrix[i][i]:g}; expected 1"
            yield Diagnostic("correlation-diagonal", f"markets.correlations[{i}][{i}]", message)
        for j in range(i):
            pair = f"{classes[i].name} with {classes[j].name}"
            for a, b in ((i, j), (j, i)):
                if abs(matrix[a][b]) > 1:
                    sound = False
                    message = f"{pair} is {matrix[a][b]:g}; expected -1 to 1"
                    yield Diagnostic("correlation-range", f"markets.correlations[{a}][{b}]", message)
            if abs(matrix[i][j] - matrix[j][i]) > 1e-9:
                sound = False
                message = f"{pair} is {matrix[i][j]:g} but the other way round {matrix[j][i]:g}"
                yield Diagnostic("correlation-asymmetric", f"markets.correlations[{i}][{j}]", message)
    if sound and size > 1:
        import numpy as np  # local: `planner check` of a broken workbook need not wait for it

        smallest = float(np.linalg.eigvalsh(np.array(matrix))[0])
        if smallest < -EIGENVALUE_TOLERANCE:
            message = (
                "these correlations cannot hold together (the matrix is not positive semidefinite: smallest "
                f"eigenvalue {smallest:.4f}); bring the largest ones closer to 0"
            )
            yield Diagnostic("correlation-impossible", "markets.correlations", message)


def _portfolios(household: Household) -> Iterator[Diagnostic]:
    portfolios, size = household.portfolios, len(household.markets.asset_classes)
    if not portfolios:
        yield Diagnostic("portfolios-missing", "portfolios", "no portfolio is listed; expected at least one")
    yield from names_differ("portfolios", "portfolio", (p.name for p in portfolios))
    fee = household.adviser_fee
    yield from between("adviser_fee", fee, 0, 0.2, "rate-range")
    for index, portfolio in enumerate(portfolios):
        path = f"portfolios[{index}]"
        if portfolio.name.strip().casefold() == BEST_EACH_YEAR:
            yield Diagnostic(
                "name-reserved", f"{path}.name", f"{BEST_EACH_YEAR!r} means a choice, not a portfolio"
            )
        yield from between(f"{path}.yearly_cost", portfolio.yearly_cost, 0, 0.2, "rate-range")
        if 0.03 < portfolio.yearly_cost + fee <= 0.4:
            message = (
                f"{portfolio.name} costs {portfolio.yearly_cost + fee:.2%} a year with the adviser's fee"
            )
            yield Diagnostic("cost-high", f"{path}.yearly_cost", message, "warning")
        if len(portfolio.weights) != size:
            message = f"found {len(portfolio.weights)} weights; expected {size}, one for each asset class"
            yield Diagnostic("weights-count", f"{path}.weights", message)
            continue
        for position, weight in enumerate(portfolio.weights):
            where = f"{path}.weights[{position}]"
            if not math.isfinite(weight):
                yield Diagnostic("number-not-finite", where, f"found {weight}; expected a finite weight")
            elif weight < 0:
                yield Diagnostic("weight-negative", where, f"found {weight:g}; a weight is 0 or more")
        total = sum(portfolio.weights)
        if abs(total - 1) > WEIGHT_TOLERANCE:
            message = f"the weights of {portfolio.name!r} add up to {total:.4%}; expected 100%"
            yield Diagnostic("weights-sum", f"{path}.weights", message)
    choice = household.portfolio_choice
    names = [p.name for p in portfolios]
    if choice is not None and choice not in names:
        hint = near_miss(choice, (BEST_EACH_YEAR, *names), "choices are")
        yield Diagnostic(
            "portfolio-unknown", "portfolio_choice", f"no portfolio is called {choice!r}; {hint}"
        )


def _tax(household: Household) -> Iterator[Diagnostic]:
    rules, shipped_names = household.tax_rules, shipped.tax_rule_names()
    rate = household.extra_income_tax_rate
    yield from between("extra_income_tax_rate", rate, 0, 0.5, "rate-range")
    if rules not in ("own", "none") and shipped_names and rules not in shipped_names:
        choices = tuple(dict.fromkeys(("none", "own", *shipped_names)))
        hint = near_miss(rules, choices, "sets are")
        yield Diagnostic("tax-rules-unknown", "tax_rules", f"no tax rules are called {rules!r}; {hint}")
    elif rate is None and rules not in ("own", "none"):
        from planner import taxes  # local: `planner new` need not wait for numpy

        regional = taxes.load(rules).regional if rules in shipped_names else ""
        remedy = regional or "give its rate on the sheet Tax"
        message = f"{rules} leaves out state or regional income tax; {remedy}, 0 if there is none"
        yield Diagnostic("no-local-tax", "extra_income_tax_rate", message, "warning")
    own = household.own_tax
    if rules == "own" and (own is None or not own.brackets):
        message = "the tax rules are 'own' but the sheet Tax has no brackets"
        yield Diagnostic("tax-own-missing", "tax_rules", message)
    if own is None:
        return
    for attribute in ("yield_rate", "gains_rate"):
        yield from between(f"own_tax.{attribute}", getattr(own, attribute), 0, 1 - 1e-9, "rate-range")
    share = own.withdrawal_taxable_share
    yield from between("own_tax.withdrawal_taxable_share", share, 0, 1, "share-range")
    starts: dict[str, list[float]] = {}
    for index, (status, start, bracket_rate) in enumerate(own.brackets):
        path = f"own_tax.brackets[{index}]"
        yield from amount(f"{path}.start", start)
        yield from between(f"{path}.rate", bracket_rate, 0, 1 - 1e-9, "rate-range")
        if start in starts.setdefault(status, []):
            yield Diagnostic("bracket-twice", f"{path}.start", f"two {status} brackets start at {start:,.0f}")
        starts[status].append(start)
    for name, values in starts.items():
        if min(values) > 0:
            first = next(i for i, bracket in enumerate(own.brackets) if bracket[0] == name)
            message = f"the lowest {name} bracket starts at {min(values):,.0f}; expected one from 0"
            yield Diagnostic("bracket-start", f"own_tax.brackets[{first}].start", message)
    needed = {"single"} if own.taxed == "each person" or not household.is_couple else {"single", "couple"}
    if rules == "own" and own.brackets and (missing := sorted(needed - set(starts))):
        message = f"no brackets for {' and '.join(missing)}; they are needed here"
        yield Diagnostic("tax-status-missing", "own_tax.brackets", message)
    yield from _divisors(household)
    for index, step in enumerate(own.surcharges):
        path = f"own_tax.surcharges[{index}]"
        yield from amount(f"{path}.income_above", step.income_above)
        yield from amount(f"{path}.extra_cost", step.extra_cost)
        yield from between(f"{path}.from_age", step.from_age, 0, OLDEST, "age-range")


def _divisors(household: Household) -> Iterator[Diagnostic]:
    own = household.own_tax
    if own is None:
        return
    last = -math.inf
    for index, (age, divisor) in enumerate(own.divisors):
        path = f"own_tax.divisors[{index}]"
        if age <= last:
            yield Diagnostic("divisors-order", f"{path}.age", f"age {age:g} does not come after {last:g}")
        if not math.isfinite(divisor):
            yield Diagnostic("number-not-finite", f"{path}.divisor", "expected a finite number")
        elif divisor < 1:
            message = f"found {divisor:g}; a divisor is 1 or more (the share to take is 1 / divisor)"
            yield Diagnostic("divisor-range", f"{path}.divisor", message)
        last = age
    start = own.minimum_distribution_age
    yield from between("own_tax.minimum_distribution_age", start, 0, OLDEST, "age-range")
    if start is not None and (not own.divisors or own.divisors[0][0] > start):
        message = f"minimum distributions start at {start:g} but the divisors do not reach down to it"
        yield Diagnostic("divisors-missing", "own_tax.minimum_distribution_age", message)


def _life_table(household: Household) -> Iterator[Diagnostic]:
    table = household.own_life_table
    if table is None:
        return
    for index, age in enumerate(table.ages):
        if index and age != table.ages[index - 1] + 1:
            message = f"age {age:g} does not follow {table.ages[index - 1]:g}; give every age, one by one"
            yield Diagnostic("life-table-ages", f"own_life_table.ages[{index}]", message)
    for sex in ("women", "men"):
        for index, chance in enumerate(getattr(table, sex)):
            yield from between(f"own_life_table.{sex}[{index}]", chance, 0, 1, "probability-range")


def _history(household: Household) -> Iterator[Diagnostic]:
    history = household.history
    if history is None:
        return
    size, length = len(household.markets.asset_classes), len(history.years)
    if len(history.inflation) != length or len(history.returns) != length:
        yield Diagnostic("history-shape", "history", "years, inflation and returns differ in length")
    for index, year in enumerate(history.years):
        if index and year != history.years[index - 1] + 1:
            message = f"{year:g} does not follow {history.years[index - 1]:g}; give every year, one by one"
            yield Diagnostic("history-years", f"history.years[{index}]", message)
    for index, value in enumerate(history.inflation):
        yield from between(f"history.inflation[{index}]", value, -0.9, 10, "rate-range")
    for index, row in enumerate(history.returns):
        if len(row) != size:
            message = f"found {len(row)} returns; expected {size}, one for each asset class"
            yield Diagnostic("history-shape", f"history.returns[{index}]", message)
        for position, value in enumerate(row):
            yield from between(f"history.returns[{index}][{position}]", value, -1, 10, "rate-range")

"""Household -> Problem: clients, accounts and incomes become arrays by year and status."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from planner import mortality, taxes
from planner.diagnostics import Diagnostic, InputError
from planner.household import (
    LARGER_OF_THE_TWO,
    AccountType,
    Household,
    Income,
    IncomeKind,
    Person,
    Rise,
)
from planner.markets import lognormal_returns, node_count, nominal_moments, taxable_drag
from planner.mortality import LifeTable
from planner.piecewise import FloatArray, PiecewiseLinear
from planner.preferences import EstateUtility, SpendingUtility, estate_strength
from planner.problem import BOTH, FIRST, SECOND, Problem
from planner.taxes import TaxedPerson, TaxRules

DEFAULT_FALLBACK_SHARE = 0.1  # of essential spending, where the workbook gives no fallback income
ACCOUNT_ORDER = (AccountType.TAXABLE, AccountType.TAX_DEFERRED, AccountType.TAX_FREE)


def life_table_of(household: Household, person: Person) -> LifeTable:
    """Return the person's life table: a shipped one, or the workbook's own."""
    if person.life_table == "own" and household.own_life_table is not None:
        return mortality.own_table(household.own_life_table, household.plan_date.year)
    return mortality.load_table(person.life_table)


def tax_rules_of(household: Household) -> TaxRules:
    """Return the household's tax rules: a shipped set, or the workbook's own."""
    if household.tax_rules == "own" and household.own_tax is not None:
        return taxes.own(household.own_tax)
    return taxes.load(household.tax_rules)


def build_problem(household: Household) -> Problem:
    """Turn a household into arrays.

    Raises
    ------
    InputError
        Something only the whole household shows: a client at or above the table's last age, cash
        kept aside above the taxable accounts.
    """
    return Builder.of(household).problem()


@dataclass(frozen=True, slots=True, eq=False)
class Builder:
    """A household with its tables and rules looked up, ready to be laid out by year.

    Attributes
    ----------
    deaths : ndarray of shape (n_people, n_years)
        One-year death probabilities.
    ages : ndarray of int, shape (n_people, n_years)
    deferred_shares : ndarray of shape (n_people,)
        s_i: each owner's share of tax-deferred money on the plan date.
    """

    household: Household
    rules: TaxRules
    deaths: FloatArray
    ages: np.ndarray
    deferred_shares: FloatArray

    @classmethod
    def of(cls, household: Household) -> Builder:
        """Look up tables and rules, and the horizon."""
        start = household.plan_date
        tables = [life_table_of(household, person) for person in household.people]
        ages = [person.age_on(start) for person in household.people]
        years = max(mortality.years_to_omega(table, age) for table, age in zip(tables, ages, strict=True))
        deaths = np.array(
            [
                mortality.death_probabilities(
                    table,
                    person.sex,
                    age,
                    years,
                    multiplier=person.mortality_multiplier,
                    plan_to_age=person.plan_to_age,
                    plan_year=start.year,
                )
                for person, table, age in zip(household.people, tables, ages, strict=True)
            ]
        )
        n_years = mortality.horizon(*deaths)
        deaths = deaths[:, :n_years].copy()
        deaths[:, -1] = 1.0  # the horizon is where anyone is alive with negligible chance
        pots = np.zeros(len(household.people))
        names = [person.name for person in household.people]
        for account in household.accounts:
            if account.type is AccountType.TAX_DEFERRED:
                pots[names.index(account.owner)] += account.balance
        if pots.sum() == 0:  # only paid into later: by who pays in
            for account in household.accounts:
                if account.type is AccountType.TAX_DEFERRED:
                    pots[names.index(account.owner)] += max(account.paid_in, 1e-12)
        shares = pots / pots.sum() if pots.sum() > 0 else np.full(len(names), 1 / len(names))
        return cls(
            household,
            tax_rules_of(household),
            deaths,
            np.array(ages)[:, None] + np.arange(n_years),
            shares,
        )

    @property
    def n_years(self) -> int:
        """Number of plan years."""
        return self.deaths.shape[1]

    @property
    def statuses(self) -> tuple[str, ...]:
        """Living statuses in the Problem's order."""
        return (BOTH, FIRST, SECOND) if self.household.is_couple else (FIRST,)

    def alive(self, status: str) -> tuple[int, ...]:
        """Indices of the people alive in a status."""
        return {BOTH: (0, 1), FIRST: (0,), SECOND: (1,)}[status]

    # Income ---------------------------------------------------------------------------------------
    def income_amount(self, income: Income, t: int) -> float:
        """Real amount of an income in year t, had its owner lived: its share of the year is counted."""
        owner = self._index(income.owner)
        age = float(self.ages[owner, t])
        to_age = np.inf if income.to_age is None else income.to_age
        share = min(max(min(age + 1.0, to_age) - max(age, income.from_age), 0.0), 1.0)
        if share == 0.0:
            return 0.0
        first_payment = max(0, int(np.floor(income.from_age)) - int(self.ages[owner, 0]))
        return income.amount * share * self._real_factor(income.rise, t, first_payment)

    def incomes(self, t: int, status: str) -> dict[int, list[tuple[Income, float]]]:
        """Incomes paid in year t to each person alive, a dead partner's continued ones included."""
        people = self.alive(status)
        paid: dict[int, list[tuple[Income, float]]] = {i: [] for i in people}
        for income in self.household.incomes:
            owner = self._index(income.owner)
            amount = self.income_amount(income, t)
            if amount == 0.0:
                continue
            if owner in paid:
                paid[owner].append((income, amount))
                continue
            survivor = people[0]
            continues = income.continues_to_partner
            if isinstance(continues, str):  # the larger of the two
                amount *= self._share_on_top(owner, survivor, t)
            else:
                amount *= continues
            if amount > 0.0:
                paid[survivor].append((income, amount))
        return paid

    def _share_on_top(self, dead: int, survivor: int, t: int) -> float:
        """Share of the dead partner's state pensions that lifts the survivor's own to the larger of the two.

        All rows of each person count together, so a pension listed in two rows is one.
        """
        own = theirs = 0.0
        for income in self.household.incomes:
            if income.kind is IncomeKind.STATE_PENSION:
                owner, amount = self._index(income.owner), self.income_amount(income, t)
                own += amount if owner == survivor else 0.0
                continues = income.continues_to_partner == LARGER_OF_THE_TWO
                theirs += amount if owner == dead and continues else 0.0
        return max(0.0, theirs - own) / theirs

    def contribution(self, t: int, status: str) -> FloatArray:
        """Paid into (taxable, tax-deferred, tax-free) in year t; taxable is 0 by definition."""
        return (
            np.array(self._contributions(t, status)).sum(axis=0) if self.household.accounts else np.zeros(3)
        )

    def one_offs(self, t: int) -> tuple[float, float]:
        """(cash, taxable part) of the one-offs that are in the plan, real."""
        cash = taxable = 0.0
        year = self.household.plan_date.year + t
        for item in self.household.one_offs:
            last = item.year if item.last_year is None else item.last_year
            if item.in_the_plan and item.year <= year <= last:
                factor = 1.0 if item.rises_with_prices else (1 + self._inflation) ** -t
                cash += item.amount * factor
                taxable += max(0.0, item.amount) * item.taxable_share * factor
        return cash, taxable

    # Tax ------------------------------------------------------------------------------------------
    def taxed_people(self, t: int, status: str) -> tuple[TaxedPerson, ...]:
        """The people alive in year t as the tax rules see them."""
        people = self.alive(status)
        paid = self.incomes(t, status)
        one_off = self.one_offs(t)[1] / len(people)
        shares = self._withdrawal_shares(people)
        taxable = self._taxable_shares()
        result = []
        for i, share in zip(people, shares, strict=True):
            wages = sum(a for income, a in paid[i] if income.kind is IncomeKind.WAGES)
            deducted = min(wages, self._paid_in_deferred(i, t))
            taxable_share = taxable[i] if len(people) == 2 else float(taxable @ self.deferred_shares)
            result.append(
                TaxedPerson(
                    age=self.tax_age(i, t),
                    birth_year=self.household.people[i].date_of_birth.year,
                    incomes=tuple((income.kind, a, income.taxable_share) for income, a in paid[i]),
                    other_taxable=one_off - deducted,
                    withdrawal_share=float(share),
                    withdrawal_taxable_share=float(taxable_share),
                )
            )
        return tuple(result)

    def tax_age(self, person: int, t: int) -> int:
        """Age that counts for tax in year t."""
        if self.rules.age_at == "plan date":
            return int(self.ages[person, t])
        return self.household.plan_date.year + t - self.household.people[person].date_of_birth.year

    @property
    def together(self) -> bool:
        """A couple that may be assessed jointly."""
        return self.household.couple_is != "not married"

    def tax(self, t: int, status: str) -> PiecewiseLinear:
        """T(g) in year t."""
        return self.rules.withdrawal_tax(
            self.taxed_people(t, status),
            law_year=self.household.plan_date.year + t,
            years_ahead=t,
            inflation=self._inflation,
            together=self.together,
            extra_rate=self.household.extra_income_tax_rate or 0.0,
            extra_on_state_pensions=self.household.extra_rate_on_state_pensions,
        )

    def minimum_share(self, t: int, status: str) -> float:
        """d: least share of the tax-deferred balance to withdraw in year t."""
        people = self.alive(status)
        share = 0.0
        for i, owned in zip(people, self._withdrawal_shares(people), strict=True):
            born = self.household.people[i].date_of_birth.year
            divisor = self.rules.minimum_distribution_divisor(self.tax_age(i, t), born)
            if divisor is not None:
                share += owned / max(divisor, 1.0)
        return min(share, 1.0)

    def accessible_share(self, t: int, status: str) -> float:
        """Largest share of the tax-deferred balance that may leave: accounts past their access age.

        A dead owner's account is open to the survivor. The law's access age holds where the
        workbook names none.
        """
        people = self.alive(status)
        law_age = self.rules.access_age(self.household.plan_date.year + t)
        total = reached = 0.0
        for account in self.household.accounts:
            if account.type is not AccountType.TAX_DEFERRED:
                continue
            weight = max(account.balance, 1e-12)
            total += weight
            owner = self._index(account.owner)
            limit = law_age if account.not_before_age is None else account.not_before_age
            if owner not in people or limit is None or self.ages[owner, t] >= limit:
                reached += weight
        return 1.0 if total == 0.0 else reached / total

    # Everything -----------------------------------------------------------------------------------
    def opening(self) -> FloatArray:
        """Opening balances; taxable net of the tax on its gain and of cash kept aside."""
        balances = np.zeros(3)
        for account in self.household.accounts:
            balances[ACCOUNT_ORDER.index(account.type)] += account.balance
            if account.type is AccountType.TAXABLE and account.cost_basis is not None:
                balances[0] -= self.rules.gains_rate * max(0.0, account.balance - account.cost_basis)
        balances[0] -= self.household.spending.cash_aside
        if balances[0] < 0:
            raise InputError(
                [
                    Diagnostic(
                        "cash-aside-above-taxable",
                        "spending.cash_aside",
                        f"{self.household.spending.cash_aside:,.0f} is to be kept aside, but the taxable "
                        f"accounts hold {balances[0] + self.household.spending.cash_aside:,.0f} after the "
                        "tax on their gains; expected no more than that",
                    )
                ]
            )
        return balances

    def need(self, t: int, status: str) -> float:
        """n: age profile times the survivor's share."""
        spending = self.household.spending
        profile = 1.0
        for age, multiple in spending.age_profile:
            if self.ages[0, t] >= age:
                profile = multiple
        alone = self.household.is_couple and status != BOTH
        return profile * (spending.survivor_share if alone else 1.0)

    def problem(self) -> Problem:
        """Lay everything out by year and status."""
        household = self.household
        wishes, spending = household.preferences, household.spending
        years, statuses = range(self.n_years), self.statuses
        transition, death = mortality.transitions(*self.deaths)
        contribution = np.array([[self.contribution(t, h) for h in statuses] for t in years])
        income = np.array(
            [
                [
                    sum(a for rows in self.incomes(t, h).values() for _, a in rows) + self.one_offs(t)[0]
                    for h in statuses
                ]
                for t in years
            ]
        )
        income -= contribution.sum(axis=2)

        def table(cell: object) -> FloatArray:
            return np.array([[cell(t, h) for h in statuses] for t in years])  # type: ignore[operator]

        minimum = table(self.minimum_share)
        chosen = self.portfolios()
        mean, deviation, income_yield = nominal_moments(household.markets, chosen, household.adviser_fee)
        returns = lognormal_returns(mean, deviation, self._inflation)
        gross, node_weights = returns.nodes(node_count(wishes.risk_aversion, returns.log_deviation))
        fallback = wishes.fallback_income
        utility = SpendingUtility(
            wishes.risk_aversion,
            wishes.shortfall_weight,
            spending.essential,
            DEFAULT_FALLBACK_SHARE * spending.essential if fallback is None else fallback,
        )
        strength = estate_strength(wishes.wish_to_leave, spending.essential, spending.wanted)
        return Problem(
            statuses=statuses,
            transition=transition,
            death=death,
            income=income,
            contribution=contribution,
            tax=tuple(tuple(self.tax(t, h) for h in statuses) for t in years),
            need=table(self.need),
            minimum_share=minimum,
            accessible_share=np.maximum(table(self.accessible_share), minimum),
            gross=gross,
            node_weights=node_weights,
            drag=taxable_drag(
                mean, income_yield, self._inflation, self.rules.yield_rate, self.rules.gains_rate
            ),
            utility=utility,
            estate=EstateUtility(utility, strength, spending.essential if strength > 0 else 0.0),
            discount=1.0 / (1.0 + wishes.time_preference),
            opening=self.opening(),
            has_account=self._has_account(),
            conversions=wishes.conversions_allowed and self._has(AccountType.TAX_DEFERRED),
            ceiling=np.inf if spending.ceiling is None else spending.ceiling,
            heirs_tax_rate=wishes.heirs_tax_rate,
            cash_aside=spending.cash_aside,
            portfolio_names=tuple(p.name for p in chosen),
            returns=returns,
            inflation=self._inflation,
            ages=self.ages,
        )

    def portfolios(self) -> tuple:  # type: ignore[type-arg]
        """Portfolios to choose from: the one to hold, or all, from the least to the most volatile."""
        household = self.household
        if household.portfolio_choice is not None:
            return tuple(p for p in household.portfolios if p.name == household.portfolio_choice)
        deviation = nominal_moments(household.markets, household.portfolios, 0.0)[1]
        return tuple(household.portfolios[k] for k in np.argsort(deviation, kind="stable"))

    # Small helpers --------------------------------------------------------------------------------
    @property
    def _inflation(self) -> float:
        return self.household.markets.inflation

    def _index(self, name: str) -> int:
        return [person.name for person in self.household.people].index(name)

    def _real_factor(self, rise: Rise, t: int, first_payment: int) -> float:
        """Real value in year t of one unit (today's money, or nominal at the first payment)."""
        if rise.kind == "prices":
            return 1.0
        rate = rise.rate if rise.kind == "fixed" else min(self._inflation, rise.rate)
        return (1 + rate) ** max(0, t - first_payment) / (1 + self._inflation) ** t

    def _withdrawal_shares(self, people: Sequence[int]) -> FloatArray:
        """s_i of the people alive; after a death everything is the survivor's."""
        return self.deferred_shares if len(people) == len(self.household.people) else np.ones(1)

    def _taxable_shares(self) -> FloatArray:
        """Taxable share of each person's withdrawals, from their own pot on the plan date."""
        pots = np.zeros(len(self.household.people))
        for account in self.household.accounts:
            if account.type is AccountType.TAX_DEFERRED:
                pots[self._index(account.owner)] += account.balance
        return np.array([self.rules.taxable_share(float(pot)) for pot in pots])

    def _contributions(self, t: int, status: str) -> list[list[float]]:
        rows = []
        people = self.alive(status)
        for account in self.household.accounts:
            row = [0.0, 0.0, 0.0]
            kind = ACCOUNT_ORDER.index(account.type)
            if kind > 0 and self._pays_in(account.owner, people, account.paid_in_until_age, t):
                row[kind] = account.paid_in
            rows.append(row)
        return rows

    def _pays_in(self, owner: str, people: Sequence[int], until: float | None, t: int) -> bool:
        i = self._index(owner)
        return i in people and (until is None or float(self.ages[i, t]) < until)

    def _paid_in_deferred(self, person: int, t: int) -> float:
        return sum(
            account.paid_in
            for account in self.household.accounts
            if account.type is AccountType.TAX_DEFERRED
            and self._index(account.owner) == person
            and self._pays_in(account.owner, (person,), account.paid_in_until_age, t)
        )

    def _has(self, kind: AccountType) -> bool:
        return any(a.type is kind and (a.balance > 0 or a.paid_in > 0) for a in self.household.accounts)

    def _has_account(self) -> tuple[bool, bool, bool]:
        deferred = self._has(AccountType.TAX_DEFERRED)
        converting = self.household.preferences.conversions_allowed and deferred
        return True, deferred, converting or self._has(AccountType.TAX_FREE)

"""A set of tax rules, evaluated in real money.

Within a year tax is a function of the gross tax-deferred withdrawal alone;
`TaxRules.withdrawal_tax` composes it exactly, as a piecewise-linear function with jumps.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

from planner.household import IncomeKind, SurchargeStep
from planner.piecewise import PiecewiseLinear, constant, identity, line, total
from planner.tax_provisions import (
    RISES_WITH_PRICES,
    Allowance,
    Bands,
    Indexing,
    MinimumDistributions,
    PartlyTaxedBenefits,
    Schedules,
    Status,
    schedules,
    surcharge_table,
)

AgeAt = Literal["end of year", "plan date"]
Treatment = float | Literal["benefit"]  # taxable share, or partly taxed by provisional income


@dataclass(frozen=True, slots=True)
class TaxedPerson:
    """One person alive in a year, as the tax rules see them; money real.

    Attributes
    ----------
    age : int
        Whole age that counts in the year (`TaxRules.age_at`).
    birth_year : int
        Calendar year of birth.
    incomes : tuple of (kind, amount, taxable share)
        This year's regular incomes; share None = as the rules treat that kind.
    other_taxable : float
        Further ordinary income, such as the taxable share of one-offs, less contributions; may be
        negative (total income does not fall below 0).
    withdrawal_share : float
        Share of the household's tax-deferred withdrawals that is this person's; sums to 1.
    withdrawal_taxable_share : float
        Taxable share of those withdrawals, from `TaxRules.taxable_share`.
    """

    age: int
    birth_year: int
    incomes: tuple[tuple[IncomeKind, float, float | None], ...] = ()
    other_taxable: float = 0.0
    withdrawal_share: float = 1.0
    withdrawal_taxable_share: float = 1.0


@dataclass(frozen=True, slots=True)
class WorkedCase:
    """A published or recomputed example kept inside a rules file; a test runs it to the cent."""

    label: str
    source: str
    law_year: int
    people: tuple[TaxedPerson, ...]
    withdrawal: float
    gains: float
    yields: float
    together: bool
    tax: float


@dataclass(frozen=True, slots=True, eq=False)
class TaxRules:
    """A set of tax rules.

    Attributes
    ----------
    name, title, publisher, source, checked : str
        Name used in workbooks; what it is; whose law; where the figures come from; how they were
        checked.
    year : int
        Law year of the amounts.
    notes : tuple of str
        Assumptions and what is not covered, for the plan's assumptions page.
    year_starts : (month, day)
        When the law year begins: `year` lasts until the day before in the next calendar year.
    regional : str
        Whose rates these are not, said where no state or regional rate is given.
    cautions : mapping of str to str
        What to say in a situation; the situations are in `planner.situation_rules`.
    taxed : "together" or "each person"
        Whether a couple is assessed jointly.
    age_at : "end of year" or "plan date"
        Date at which age counts in a year.
    treatment : mapping of IncomeKind to Treatment
        Kinds not listed are fully taxable.
    bands, bands_indexing
        Rates on taxable income by status; empty = no tax.
    yield_rate, gains_rate : float
        Planning rates on yields and gains in the taxable account.
    gains_bands : mapping of Status to Bands
        Rates on realised gains stacked on ordinary taxable income; empty = `gains_rate` applies.
    investment_surtax_rate, investment_surtax_above
        Charged on the lesser of yields and gains and the excess of total income.
    """

    name: str
    title: str
    publisher: str
    source: str
    year: int
    checked: str = ""
    notes: tuple[str, ...] = ()
    year_starts: tuple[int, int] = (1, 1)
    regional: str = ""
    cautions: Mapping[str, str] | None = None
    taxed: Literal["together", "each person"] = "together"
    age_at: AgeAt = "plan date"
    treatment: Mapping[IncomeKind, Treatment] | None = None
    bands: Mapping[Status, Bands] | None = None
    bands_indexing: Indexing = RISES_WITH_PRICES
    allowances: tuple[Allowance, ...] = ()
    benefits: PartlyTaxedBenefits | None = None
    surcharges: tuple[SurchargeStep, ...] = ()
    surcharges_indexing: Indexing = RISES_WITH_PRICES
    withdrawals_taxable: float = 1.0
    tax_free_share: float = 0.0
    tax_free_cap: float | None = None
    minimum_distributions: MinimumDistributions | None = None
    access_ages: tuple[tuple[int, float], ...] = ()
    yield_rate: float = 0.0
    gains_rate: float = 0.0
    gains_bands: Mapping[Status, Bands] | None = None
    investment_surtax_rate: float = 0.0
    investment_surtax_above: Mapping[Status, float] | None = None
    worked_cases: tuple[WorkedCase, ...] = ()

    def withdrawal_tax(
        self,
        people: Sequence[TaxedPerson],
        *,
        law_year: int,
        years_ahead: int,
        inflation: float,
        together: bool,
        extra_rate: float = 0.0,
        extra_on_state_pensions: bool = False,
    ) -> PiecewiseLinear:
        r"""Year's tax of a household as a function of its tax-deferred withdrawal.

        For one assessment with total income :math:`I(g) = \max(0, o + \rho g + A(p + \rho g))`,
        o ordinary income, A the taxable part of benefits at provisional income,

        .. math:: T(g) = \text{bands}(\max(0, I - \text{allowances}(I))) + \text{surcharges}(I)
            + e \max(0, I - \text{allowances}(I) - \text{state pensions taxed})

        and the household's tax is the sum over its assessments.

        Parameters
        ----------
        people
            Those alive, one or two.
        law_year
            Calendar year whose law applies.
        years_ahead
            Years since the plan date: amounts the law does not index are divided by
            ``(1 + inflation)^years_ahead``.
        inflation
            A year, as a fraction.
        together
            The couple may be assessed jointly; only has effect where the rules allow it.
        extra_rate
            State or regional rate on taxable income.
        extra_on_state_pensions
            Whether the extra rate falls on state pensions too.

        Returns
        -------
        PiecewiseLinear
            ``T(g)``; ``g`` = gross tax-deferred withdrawal plus conversion, real money of the
            plan date; surcharges are jumps.
        """
        parts = []
        for status, members in self._assessments(people, together):
            income = self._income(members)
            schedule = self._schedules(status, members, law_year, years_ahead, inflation)
            total_income = line(income.ordinary, income.withdrawal_share)
            state_pensions = constant(income.taxed_state_pensions)
            if income.benefits > 0.0 and self.benefits is not None:
                factor = self.benefits.indexing.real_factor(law_year, years_ahead, inflation)
                benefits = self.benefits.taxable_part(income.benefits, status, factor).of_line(
                    income.ordinary + self.benefits.counted * income.benefits, income.withdrawal_share
                )
                total_income = total_income + benefits
                state_pensions = state_pensions + benefits
            parts.append(schedule.tax.after(total_income))
            if extra_rate:
                taxable = schedule.taxable.after(total_income)
                if not extra_on_state_pensions:
                    taxable = identity().after(taxable - state_pensions)
                parts.append(taxable * extra_rate)
        return total(parts).simplified()

    def first_year_tax(
        self,
        people: Sequence[TaxedPerson],
        *,
        withdrawal: float,
        realised_gains: float = 0.0,
        yields: float = 0.0,
        law_year: int,
        together: bool,
        extra_rate: float = 0.0,
        extra_on_state_pensions: bool = False,
    ) -> float:
        """Tax of the first plan year, with the actual bands for gains and yields.

        Where the rules have bands for gains, long-term gains are part of total income and are
        stacked on ordinary taxable income, and yields count as ordinary income (interest; the
        cautious reading for dividends). Otherwise the planning rates apply to both. Losses are not
        set against other income. Between people assessed apart, gains and yields are halved.

        Parameters
        ----------
        people, law_year, together, extra_rate, extra_on_state_pensions
            As in `withdrawal_tax`.
        withdrawal
            Gross tax-deferred withdrawal plus conversion.
        realised_gains, yields
            Of the taxable account, this year.

        Returns
        -------
        float
            Not rounded.
        """
        assessments = self._assessments(people, together)
        gains, interest = (max(0.0, amount) / len(assessments) for amount in (realised_gains, yields))
        tax = 0.0
        for status, members in assessments:
            income = self._income(members)
            schedule = self._schedules(status, members, law_year, 0, 0.0)
            ordinary = income.ordinary + income.withdrawal_share * withdrawal
            investment = 0.0
            if self.gains_bands:
                ordinary += interest
                investment = gains
            else:
                tax += self.gains_rate * gains + self.yield_rate * interest
            state_pensions = income.taxed_state_pensions
            total_income = ordinary + investment
            if income.benefits > 0.0 and self.benefits is not None:
                provisional = max(0.0, total_income + self.benefits.counted * income.benefits)
                taxed = float(self.benefits.taxable_part(income.benefits, status, 1.0)(provisional))
                total_income += taxed
                state_pensions += taxed
            total_income = max(0.0, total_income)
            tax += float(schedule.tax(total_income))
            taxable = float(schedule.taxable(total_income))
            if self.gains_bands and investment > 0.0:
                bands = (self.bands or {}).get(status, Bands()).schedule()
                below = max(0.0, taxable - investment)
                stacked = self.gains_bands[status].schedule()
                tax += float(bands(below) - bands(taxable) + stacked(taxable) - stacked(below))
            if self.gains_bands and self.investment_surtax_above:
                excess = max(0.0, total_income - self.investment_surtax_above[status])
                tax += self.investment_surtax_rate * min(investment + interest, excess)
            base = taxable if extra_on_state_pensions else max(0.0, taxable - state_pensions)
            tax += extra_rate * base
        return tax

    def minimum_distribution_age(self, birth_year: int) -> float | None:
        """Age from which a least withdrawal is due, None if never."""
        due = self.minimum_distributions
        return None if due is None else due.starting_age(birth_year)

    def minimum_distribution_divisor(self, age: int, birth_year: int) -> float | None:
        """Divisor of last year-end's tax-deferred balance, None where nothing is due."""
        due = self.minimum_distributions
        return None if due is None else due.divisor(age, birth_year)

    @property
    def minimum_distribution_due(self) -> str:
        """When the least withdrawal must be taken, in words; empty where there is none."""
        return "" if self.minimum_distributions is None else self.minimum_distributions.due

    def access_age(self, law_year: int) -> float | None:
        """Age before which tax-deferred money cannot be reached, None if the law sets none."""
        ages = [age for from_year, age in self.access_ages if law_year >= from_year]
        return ages[-1] if ages else None

    def taxable_share(self, pot: float) -> float:
        """Taxable share of an owner's tax-deferred withdrawals.

        ``taxable (1 - min(tax-free share, tax-free cap left / pot))``.

        Parameters
        ----------
        pot
            The owner's tax-deferred money, real.
        """
        free = self.tax_free_share
        if self.tax_free_cap is not None and pot > 0.0:
            free = min(free, self.tax_free_cap / pot)
        return self.withdrawals_taxable * (1.0 - free)

    def _assessments(
        self, people: Sequence[TaxedPerson], together: bool
    ) -> list[tuple[Status, tuple[TaxedPerson, ...]]]:
        if len(people) == 2 and together and self.taxed == "together":
            return [("couple", tuple(people))]
        return [("single", (person,)) for person in people]

    def _income(self, members: Sequence[TaxedPerson]) -> _Income:
        ordinary = benefits = state_pensions = share = 0.0
        treatment = self.treatment or {}
        for person in members:
            ordinary += person.other_taxable
            share += person.withdrawal_share * person.withdrawal_taxable_share
            for kind, amount, own_share in person.incomes:
                rule = treatment.get(kind, 1.0) if own_share is None else own_share
                if isinstance(rule, str):
                    benefits += amount
                    continue
                ordinary += rule * amount
                if kind is IncomeKind.STATE_PENSION:
                    state_pensions += rule * amount
        return _Income(ordinary, benefits, state_pensions, share)

    def _schedules(
        self,
        status: Status,
        members: Sequence[TaxedPerson],
        law_year: int,
        years_ahead: int,
        inflation: float,
    ) -> Schedules:
        ages = [person.age for person in members]
        allowances = []
        for allowance in self.allowances:
            times = allowance.times(ages, law_year)
            if times and allowance.amount[status] > 0.0:
                factor = allowance.indexing.real_factor(law_year, years_ahead, inflation)
                above = None if allowance.reduced_above is None else allowance.reduced_above[status] * factor
                allowances.append((times, allowance.amount[status] * factor, above, allowance.reduced_by))
        surcharge_factor = self.surcharges_indexing.real_factor(law_year, years_ahead, inflation)
        return schedules(
            (self.bands or {}).get(status, Bands()),
            self.bands_indexing.real_factor(law_year, years_ahead, inflation),
            tuple(allowances),
            surcharge_table(self.surcharges, status, ages, surcharge_factor),
        )


@dataclass(frozen=True, slots=True)
class _Income:
    """Income of one assessment.

    Ordinary income, partly taxed benefits, the state pensions inside ordinary income, and the
    taxable income per unit of the household's withdrawal.
    """

    ordinary: float
    benefits: float
    taxed_state_pensions: float
    withdrawal_share: float

"""The parts a set of tax rules is made of, and the exact schedules they compose to.

Nothing here names a country: what differs between tax systems is data (`planner/data/taxes`).
Amounts are in the currency of the rules, as in the law year they were published for.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

from planner.household import SurchargeStep
from planner.piecewise import PiecewiseLinear, constant, identity, line, progressive, steps, total

Status = Literal["single", "couple"]
STATUSES: tuple[Status, ...] = ("single", "couple")


@dataclass(frozen=True, slots=True)
class Indexing:
    """Whether the law raises an amount with prices.

    Attributes
    ----------
    indexed
        False: fixed in nominal terms for good, so its real value falls every year.
    frozen_until
        Indexed, but not before this law year is over.
    """

    indexed: bool = True
    frozen_until: int | None = None

    def real_factor(self, law_year: int, years_ahead: int, inflation: float) -> float:
        """Real value of one unit, in money of the plan date: ``(1 + i)^-(years without a rise)``."""
        if self.indexed and self.frozen_until is None:
            return 1.0
        without_rise = years_ahead
        if self.indexed and self.frozen_until is not None:
            without_rise = min(max(self.frozen_until - (law_year - years_ahead), 0), years_ahead)
        return float((1.0 + inflation) ** -without_rise)


RISES_WITH_PRICES = Indexing()
FIXED_IN_MONEY = Indexing(indexed=False)


@dataclass(frozen=True, slots=True)
class Bands:
    """Progressive rates: ``rates[k]`` on what lies above ``starts[k]``, by status."""

    starts: tuple[float, ...] = ()
    rates: tuple[float, ...] = ()

    def schedule(self, factor: float = 1.0) -> PiecewiseLinear:
        """Tax as a function of income, starts multiplied by `factor`."""
        return _band_schedule(self.starts, self.rates, factor)


@dataclass(frozen=True, slots=True)
class Allowance:
    """An amount taken off income before the bands apply.

    Attributes
    ----------
    label : str
        What it is.
    amount : dict of status to float
        A person's amount where `per_person`, else the assessed couple's or person's.
    per_person, from_age
        Given once for every person, only to those who have reached the age (None: any age).
    reduced_above, reduced_by
        Each `amount` falls by ``reduced_by`` for every unit of total income above the threshold
        of the status, down to zero.
    first_year, last_year
        Law years between which it is in force; None = open.
    indexing
        Of the amount and of the threshold alike.
    """

    label: str
    amount: dict[Status, float]
    per_person: bool = False
    from_age: float | None = None
    reduced_above: dict[Status, float] | None = None
    reduced_by: float = 0.0
    first_year: int | None = None
    last_year: int | None = None
    indexing: Indexing = RISES_WITH_PRICES

    def times(self, ages: Sequence[int], law_year: int) -> int:
        """How often it is given to people of these ages."""
        if self.first_year is not None and law_year < self.first_year:
            return 0
        if self.last_year is not None and law_year > self.last_year:
            return 0
        entitled = sum(self.from_age is None or age >= self.from_age for age in ages)
        return entitled if self.per_person else int(entitled > 0)


@dataclass(frozen=True, slots=True)
class PartlyTaxedBenefits:
    """Benefits that become taxable in tiers of "provisional" income.

    With S the benefits, P = all other income + ``counted`` S, thresholds t_k and rates r_k,
    the taxable part A(P) is 0 up to t_1 and from each t_k on ``min(r_k S, A(t_k) + r_k (P - t_k))``.
    """

    counted: float
    thresholds: dict[Status, tuple[float, ...]]
    rates: tuple[float, ...]
    indexing: Indexing = FIXED_IN_MONEY

    def taxable_part(self, benefits: float, status: Status, factor: float) -> PiecewiseLinear:
        """A as a function of provisional income; thresholds multiplied by `factor`."""
        return _taxable_benefits(benefits, tuple(t * factor for t in self.thresholds[status]), self.rates)


@dataclass(frozen=True, slots=True)
class MinimumDistributions:
    """The least that must be withdrawn from tax-deferred accounts each year.

    Attributes
    ----------
    starting_ages : tuple of (first birth year, age)
        Ascending; the last entry not after the birth year applies.
    first_age, divisors
        ``divisors[k]`` belongs to age ``first_age + k``; beyond the last age the last applies.
    due : str
        When it must be taken.
    """

    starting_ages: tuple[tuple[int, float], ...]
    divisors: tuple[tuple[int, float], ...]
    due: str = ""

    def starting_age(self, birth_year: int) -> float | None:
        """Age from which distributions are due, None if never."""
        ages = [age for born_from, age in self.starting_ages if birth_year >= born_from]
        return ages[-1] if ages else None

    def divisor(self, age: int, birth_year: int) -> float | None:
        """Divisor at an age, None where nothing is due."""
        start = self.starting_age(birth_year)
        if start is None or age < start:
            return None
        reached = [divisor for from_age, divisor in self.divisors if age >= from_age]
        return reached[-1] if reached else None


@dataclass(frozen=True, slots=True)
class Schedules:
    """What an income costs: both are functions of total income, in real money.

    Attributes
    ----------
    taxable : PiecewiseLinear
        Income less allowances, not below 0.
    tax : PiecewiseLinear
        Bands applied to `taxable`, plus surcharges (jumps).
    """

    taxable: PiecewiseLinear
    tax: PiecewiseLinear


@lru_cache(maxsize=1024)
def schedules(
    bands: Bands,
    factor: float,
    allowances: tuple[tuple[int, float, float | None, float], ...],
    surcharges: tuple[tuple[float, tuple[tuple[float, float], ...]], ...],
) -> Schedules:
    """Compose the schedules of one assessment.

    Parameters
    ----------
    bands, factor
        Rates, and the real value of one unit of their starts.
    allowances
        (times given, real amount, real threshold of the reduction or None, reduction rate).
    surcharges
        (times paid, ((income above, extra cost) ...)), ascending.

    Returns
    -------
    Schedules
        Cached: most years of a plan share them.
    """
    fixed = sum(times * amount for times, amount, above, _ in allowances if above is None)
    parts = [line(-fixed, 1.0)]
    for times, amount, above, rate in allowances:
        if above is not None:
            falls = progressive([above, above + amount / rate], [rate, 0.0]) - amount
            parts.append(falls * times)
    after_allowances = total(parts)
    tax = bands.schedule(factor).after(after_allowances)
    extra = [
        steps([above for above, _ in table], [cost for _, cost in table]) * times
        for times, table in surcharges
    ]
    return Schedules(identity().after(after_allowances), total([tax, *extra]))


def surcharge_table(
    all_steps: Sequence[SurchargeStep], status: Status, ages: Sequence[int], factor: float
) -> tuple[tuple[float, tuple[tuple[float, float], ...]], ...]:
    """Surcharges of one assessment, as `schedules` takes them.

    A step's cost is the whole extra cost a year above that income, not an increment: the highest
    step passed applies. Steps with an age are paid by every person who has reached it; steps
    without one are paid once.
    """
    of_status = [s for s in all_steps if s.status == status]
    charges: dict[tuple[tuple[float, float], ...], int] = {}
    for payer in [None, *ages]:
        due = {
            s.income_above * factor: s.extra_cost
            for s in of_status
            if (s.from_age is None if payer is None else s.from_age is not None and payer >= s.from_age)
        }
        if due:
            table = tuple(sorted(due.items()))
            charges[table] = charges.get(table, 0) + 1
    return tuple((times, table) for table, times in charges.items())


@lru_cache(maxsize=256)
def _band_schedule(starts: tuple[float, ...], rates: tuple[float, ...], factor: float) -> PiecewiseLinear:
    return progressive([start * factor for start in starts], rates)


@lru_cache(maxsize=1024)
def _taxable_benefits(
    benefits: float, thresholds: tuple[float, ...], rates: tuple[float, ...]
) -> PiecewiseLinear:
    if benefits <= 0.0:
        return constant(0.0)
    starts: list[float] = []
    slopes: list[float] = []
    reached = 0.0  # A at the current threshold
    ends = (*thresholds[1:], float("inf"))
    for start, end, rate in zip(thresholds, ends, rates, strict=True):
        starts.append(start)
        slopes.append(rate)
        capped_at = start + max(0.0, rate * benefits - reached) / rate
        if capped_at < end:
            starts.append(capped_at)
            slopes.append(0.0)
        reached = min(rate * benefits, reached + rate * (end - start))
    # a tier already full at its start leaves two starts at one place: the second governs
    kept = [k for k in range(len(starts)) if k + 1 == len(starts) or starts[k + 1] > starts[k]]
    return progressive([starts[k] for k in kept], [slopes[k] for k in kept])

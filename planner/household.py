"""The client household: people, accounts, incomes, wishes. Frozen; knows no spreadsheet.

Money is a year's amount in the household's currency, in today's money unless a field says
nominal. Shares and rates are fractions (0.04). Ages are years, possibly fractional (66.67).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import date
from enum import StrEnum
from typing import Literal

from planner.diagnostics import Diagnostic, InputError

Sex = Literal["female", "male"]
JOINT = "joint"
LARGER_OF_THE_TWO = "larger of the two"
BEST_EACH_YEAR = "best each year"


class AccountType(StrEnum):
    """The three tax treatments of an account; the order of the balance axis everywhere."""

    TAXABLE = "taxable"
    TAX_DEFERRED = "tax-deferred"
    TAX_FREE = "tax-free"


class IncomeKind(StrEnum):
    """What an income is, for its taxation and its continuation to a partner."""

    STATE_PENSION = "state pension"
    PENSION = "pension"
    ANNUITY = "annuity"
    WAGES = "wages"
    RENT = "rent"
    OTHER = "other"


@dataclass(frozen=True, slots=True)
class Rise:
    """How an amount changes from year to year, in nominal terms.

    ``prices``: with inflation. ``fixed``: at `rate` a year (0 = level). ``capped``: with
    inflation up to `rate`.
    """

    kind: Literal["prices", "fixed", "capped"] = "prices"
    rate: float = 0.0


@dataclass(frozen=True, slots=True)
class Person:
    """One of at most two people. `life_table` is a shipped table's name or ``own``."""

    name: str
    date_of_birth: date
    sex: Sex
    life_table: str
    mortality_multiplier: float = 1.0
    plan_to_age: float | None = None

    def age_on(self, day: date) -> int:
        """Whole age on a day (29 February counts as 1 March in other years)."""
        born = self.date_of_birth
        return day.year - born.year - ((day.month, day.day) < (born.month, born.day))


@dataclass(frozen=True, slots=True)
class Account:
    """A savings account. `owner` is a person's name or ``joint``; `cost_basis` None = balance."""

    name: str
    owner: str
    type: AccountType
    balance: float
    cost_basis: float | None = None
    held_now: str | None = None
    not_before_age: float | None = None
    paid_in: float = 0.0
    paid_in_until_age: float | None = None
    balance_last_year_end: float | None = None
    taken_this_year: float = 0.0


@dataclass(frozen=True, slots=True)
class Income:
    """A regular income of one person.

    `amount` is today's money where it rises with prices, else nominal at the first payment.
    `continues_to_partner` is a share, or ``larger of the two`` (state pensions).
    `taxable_share` None = as the tax rules treat that kind.
    """

    name: str
    owner: str
    kind: IncomeKind
    amount: float
    from_age: float
    to_age: float | None = None
    rise: Rise = Rise()
    continues_to_partner: float | Literal["larger of the two"] = 0.0
    taxable_share: float | None = None


@dataclass(frozen=True, slots=True)
class StartChoice:
    """A provider's quote: the income's amount a year if it starts at `start_age`."""

    income: str
    start_age: float
    amount: float


@dataclass(frozen=True, slots=True)
class OneOff:
    """A sum received (+) or paid (-) in calendar years `year` to `last_year`."""

    item: str
    year: int
    amount: float
    last_year: int | None = None
    rises_with_prices: bool = True
    in_the_plan: bool = True
    taxable_share: float = 0.0


@dataclass(frozen=True, slots=True)
class Spending:
    """What the household needs and asks for, a year, after tax.

    `age_profile` holds (first person's age, spending compared with now) steps, ascending; the
    share is 1 before the first step.
    """

    essential: float
    wanted: float | None = None
    ceiling: float | None = None
    survivor_share: float = 0.7
    cash_aside: float = 0.0
    care_cost: float = 0.0
    care_from_age: float | None = None
    care_years: float | None = None
    care_for: Literal["first", "second", "last survivor"] | None = None
    age_profile: tuple[tuple[float, float], ...] = ()


@dataclass(frozen=True, slots=True)
class AssetClass:
    """Nominal arithmetic mean, standard deviation and yearly income (yield) of an asset class."""

    name: str
    expected_return: float
    standard_deviation: float
    income_yield: float = 0.0


@dataclass(frozen=True, slots=True)
class MarketAssumptions:
    """Inflation, asset classes and their correlation matrix (rows in the classes' order)."""

    inflation: float
    asset_classes: tuple[AssetClass, ...]
    correlations: tuple[tuple[float, ...], ...]


@dataclass(frozen=True, slots=True)
class Portfolio:
    """Weights over the asset classes (sum 1), rebalanced yearly, at a yearly cost (a share)."""

    name: str
    weights: tuple[float, ...]
    yearly_cost: float = 0.0


@dataclass(frozen=True, slots=True)
class Preferences:
    """What the client would rather have. Field terms: gamma, kappa, floor, time preference.

    `fallback_income` None = 10 % of essential spending. `accepts_third_cut` and
    `accepts_second_gamble` are the two income-gamble answers, kept for the record where they
    set `risk_aversion`.
    """

    risk_aversion: float = 4.0
    accepts_third_cut: bool | None = None
    accepts_second_gamble: bool | None = None
    shortfall_weight: float = 3.0
    fallback_income: float | None = None
    time_preference: float = 0.0
    wish_to_leave: float = 0.0
    heirs_tax_rate: float = 0.0
    conversions_allowed: bool = False


@dataclass(frozen=True, slots=True)
class SurchargeStep:
    """Own tax rules: an extra cost a year where income is above `income_above`."""

    status: Literal["couple", "single"]
    income_above: float
    extra_cost: float
    from_age: float | None = None


@dataclass(frozen=True, slots=True)
class OwnTaxRules:
    """The sheet Tax, used where the tax rules are ``own``.

    `brackets` are (status, from, rate); `divisors` (age, divisor) for minimum distributions.
    """

    yield_rate: float = 0.0
    gains_rate: float = 0.0
    withdrawal_taxable_share: float = 1.0
    minimum_distribution_age: float | None = None
    taxed: Literal["together", "each person"] = "together"
    brackets: tuple[tuple[Literal["couple", "single"], float, float], ...] = ()
    divisors: tuple[tuple[int, float], ...] = ()
    surcharges: tuple[SurchargeStep, ...] = ()


@dataclass(frozen=True, slots=True)
class OwnLifeTable:
    """The sheet Life table: chance of dying within the year by age, consecutive ages."""

    ages: tuple[int, ...]
    women: tuple[float, ...]
    men: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class AnnuityQuote:
    """An annuity for life that could be bought now: `rate` a year for each unit of its price.

    `account` is the name of the account it would be bought from.
    """

    owner: str
    account: str
    rate: float
    rise: Rise = Rise("fixed", 0.0)
    continues_to_partner: float | Literal["larger of the two"] = 0.0
    taxable_share: float | None = None


@dataclass(frozen=True, slots=True)
class RuleSetting:
    """A parameter of a spending rule set other than as published (see `planner.rule_terms`)."""

    rule: str
    parameter: str
    value: float


@dataclass(frozen=True, slots=True)
class WhatIf:
    """One named what-if: (address, new value as typed) pairs, in the workbook's own words."""

    name: str
    changes: tuple[tuple[str, str], ...]


@dataclass(frozen=True, slots=True)
class History:
    """Yearly inflation and nominal returns by asset class (rows: years)."""

    years: tuple[int, ...]
    inflation: tuple[float, ...]
    returns: tuple[tuple[float, ...], ...]


@dataclass(frozen=True, slots=True)
class LastYear:
    """What happened since the last plan, for the review."""

    spent: float | None = None
    paid_in: float | None = None
    one_offs_received: float | None = None


@dataclass(frozen=True, slots=True)
class Practice:
    """The firm's own words. Blank suitability fields mark the plan as a draft."""

    firm: str = ""
    adviser: str = ""
    registration_number: str = ""
    contact: str = ""
    logo_file: str = ""
    local_caution: str = ""
    required_wording: str = ""
    aims: str = ""
    agreed_risk_level: str = ""
    capacity_for_loss: str = ""
    why_this_suits: str = ""
    drawbacks: str = ""
    alternatives_considered: str = ""

    @property
    def is_draft(self) -> bool:
        """True while one of the six suitability texts is blank."""
        return not all(
            (
                self.aims,
                self.agreed_risk_level,
                self.capacity_for_loss,
                self.why_this_suits,
                self.drawbacks,
                self.alternatives_considered,
            )
        )


@dataclass(frozen=True, slots=True)
class Household:
    """Everything known about one client; valid by construction.

    Raises
    ------
    InputError
        Any rule of `problems` with severity ``error`` is broken; every problem is carried, each
        with a field path such as ``accounts[0].owner``.
    """

    client_name: str
    plan_date: date
    currency: str
    tax_rules: str
    people: tuple[Person, ...]
    accounts: tuple[Account, ...]
    spending: Spending
    markets: MarketAssumptions
    portfolios: tuple[Portfolio, ...]
    incomes: tuple[Income, ...] = ()
    start_choices: tuple[StartChoice, ...] = ()
    annuity_quote: AnnuityQuote | None = None
    rule_settings: tuple[RuleSetting, ...] = ()
    one_offs: tuple[OneOff, ...] = ()
    preferences: Preferences = Preferences()
    adviser_fee: float = 0.0
    portfolio_choice: str | None = None  # None = best each year
    couple_is: Literal["married", "civil partners", "not married"] = "married"
    home_value: float = 0.0
    extra_income_tax_rate: float | None = None
    extra_rate_on_state_pensions: bool = False
    own_tax: OwnTaxRules | None = None
    own_life_table: OwnLifeTable | None = None
    what_ifs: tuple[WhatIf, ...] = ()
    history: History | None = None
    last_year: LastYear = field(default_factory=LastYear)
    practice: Practice = field(default_factory=Practice)

    @property
    def is_couple(self) -> bool:
        """Two people."""
        return len(self.people) == 2

    def __post_init__(self) -> None:
        """Refuse a household that breaks a rule, with every problem at once."""
        found = tuple(problems(self))
        if any(problem.severity == "error" for problem in found):
            raise InputError(found)


def problems(household: Household) -> Iterator[Diagnostic]:
    """Yield every problem of a household: errors and, for what is merely unusual, warnings.

    Each carries a field path such as ``accounts[0].owner``; codes are listed in `planner.codes`.
    """
    from planner.household_rules import household_problems  # local: the rules import these classes

    yield from household_problems(household)


def risk_aversion_from_gambles(accepts_third_cut: bool, accepts_second_gamble: bool) -> float:
    """Relative risk aversion from two questions about lifetime income.

    A job doubles income for life or cuts it by a third, at even odds: take it? Then the same with
    a cut by half (after yes) or by a fifth (after no).

    Returns
    -------
    float
        5 (no, no), 2.7 (no, yes), 1.4 (yes, no) or 0.8 (yes, yes): our stand-ins for the groups
        "above 3.76", "2 to 3.76", "1 to 2" and "below 1".

    References
    ----------
    Barsky, Juster, Kimball & Shapiro (1997), Preference parameters and behavioral heterogeneity,
    Quarterly Journal of Economics 112(2), table I (the groups; from memory).
    """
    if accepts_third_cut:
        return 0.8 if accepts_second_gamble else 1.4
    return 2.7 if accepts_second_gamble else 5.0

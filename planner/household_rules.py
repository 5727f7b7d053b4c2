"""What must hold of a household, and what is unusual enough to say.

Every rule yields diagnostics with field paths (``accounts[0].owner``); none knows a spreadsheet.
Comparisons are written so that a NaN trips only the rule that numbers are finite: the reader puts
NaN where a cell could not be read, and one bad cell must not raise a second complaint elsewhere.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

from planner import shipped
from planner.assumption_rules import assumption_problems
from planner.checks import OLDEST, amount, between, names_differ, near_miss
from planner.diagnostics import Diagnostic, InputError
from planner.household import (
    JOINT,
    LARGER_OF_THE_TWO,
    AccountType,
    Household,
    IncomeKind,
    Person,
    risk_aversion_from_gambles,
)
from planner.rule_terms import RULE_TERMS
from planner.situation_rules import situation_problems
from planner.soa_tables import is_number, numbered_table

# ISO 4217 list one, active national currencies (from memory, 2025).
CURRENCIES = frozenset(
    """AED AFN ALL AMD ANG AOA ARS AUD AWG AZN BAM BBD BDT BGN BHD BIF BMD BND BOB BRL BSD BTN BWP BYN BZD
    CAD CDF CHF CLP CNY COP CRC CUP CVE CZK DJF DKK DOP DZD EGP ERN ETB EUR FJD FKP GBP GEL GHS GIP GMD
    GNF GTQ GYD HKD HNL HTG HUF IDR ILS INR IQD IRR ISK JMD JOD JPY KES KGS KHR KMF KPW KRW KWD KYD KZT
    LAK LBP LKR LRD LSL LYD MAD MDL MGA MKD MMK MNT MOP MRU MUR MVR MWK MXN MYR MZN NAD NGN NIO NOK NPR
    NZD OMR PAB PEN PGK PHP PKR PLN PYG QAR RON RSD RUB RWF SAR SBD SCR SDG SEK SGD SHP SLE SOS SRD SSP
    STN SVC SYP SZL THB TJS TMT TND TOP TRY TTD TWD TZS UAH UGX USD UYU UZS VED VES VND VUV WST XAF XCD
    XCG XOF XPF YER ZAR ZMW ZWG""".split()
)


def household_problems(household: Household) -> Iterator[Diagnostic]:
    """Yield every problem of a household, errors and warnings, with field paths."""
    yield from _identity(household)
    yield from _people(household)
    yield from _accounts(household)
    yield from _incomes(household)
    yield from _one_offs(household)
    yield from _spending(household)
    yield from _preferences(household)
    yield from assumption_problems(household)
    yield from _quote_and_rules(household)
    yield from _records(household)
    yield from _means(household)
    yield from situation_problems(household)


def _identity(household: Household) -> Iterator[Diagnostic]:
    if not household.client_name.strip():
        yield Diagnostic("name-missing", "client_name", "the client has no name")
    if household.currency not in CURRENCIES:
        hint = near_miss(household.currency, ("USD", "GBP", "EUR", "CHF", "CAD", "AUD"), "for instance")
        yield Diagnostic(
            "currency-unknown", "currency", f"{household.currency!r} is not an ISO 4217 code; {hint}"
        )
    yield from amount("home_value", household.home_value)


def _own_owner(owner: str, path: str, household: Household) -> Iterator[Diagnostic]:
    names = [person.name for person in household.people]
    if owner not in names:
        hint = near_miss(owner, names, "people are")
        yield Diagnostic("owner-unknown", path, f"no person is called {owner!r}; {hint}")


def _ages_now(household: Household) -> dict[str, int]:
    return {person.name: person.age_on(household.plan_date) for person in household.people}


def _last_age(person: Person, household: Household) -> float | None:
    """Last age of the person's table; None where the table cannot be loaded."""
    if person.life_table == "own":
        table = household.own_life_table
        return float(table.ages[-1]) if table is not None and table.ages else None
    if person.life_table not in shipped.life_table_names() and not is_number(person.life_table):
        return None
    from planner import mortality  # local: brings in numpy, and only this rule needs it

    try:
        return float(mortality.load_table(person.life_table).omega)
    except InputError:  # said by `_people`
        return None


def _people(household: Household) -> Iterator[Diagnostic]:
    people = household.people
    if len(people) not in (1, 2):
        yield Diagnostic("people-count", "people", f"found {len(people)} people; expected one or two")
    yield from names_differ("people", "person", (person.name for person in people))
    tables = shipped.life_table_names()
    for index, person in enumerate(people):
        path = f"people[{index}]"
        if person.name.strip().casefold() == JOINT:
            yield Diagnostic("name-reserved", f"{path}.name", "'joint' means both people, not a person")
        if person.date_of_birth >= household.plan_date:
            message = f"born {person.date_of_birth}, not before the plan date {household.plan_date}"
            yield Diagnostic("birth-date-future", f"{path}.date_of_birth", message)
            continue
        yield from between(
            f"{path}.mortality_multiplier",
            person.mortality_multiplier,
            0,
            20,
            "death-rates-range",
            open_low=True,
        )
        if person.life_table == "own" and household.own_life_table is None:
            message = "the life table is 'own' but the sheet Life table is blank"
            yield Diagnostic("life-table-own-missing", f"{path}.life_table", message)
        elif is_number(person.life_table):
            try:
                numbered_table(person.life_table)
            except InputError as error:
                message = error.diagnostics[0].message
                yield Diagnostic("life-table-number", f"{path}.life_table", message)
        elif person.life_table != "own" and tables and person.life_table not in tables:
            hint = near_miss(person.life_table, (*tables, "own"), "tables are")
            message = f"no life table is called {person.life_table!r}; {hint}"
            yield Diagnostic("life-table-unknown", f"{path}.life_table", message)
        if person.life_table in tables and person.mortality_multiplier == 1.0:
            message = (
                f"{person.life_table} describes a whole population; clients of advisers tend to live longer: "
                f"consider death rates below 1 for {person.name or 'this person'}"
            )
            yield Diagnostic("no-mortality-adjustment", f"{path}.mortality_multiplier", message, "warning")
        yield from _person_age(person, path, household)


def _person_age(person: Person, path: str, household: Household) -> Iterator[Diagnostic]:
    age, last_age = person.age_on(household.plan_date), _last_age(person, household)
    if last_age is not None and age >= last_age:
        message = f"{person.name} is {age} on the plan date; the life table ends at {last_age:g}"
        yield Diagnostic("age-above-table", f"{path}.date_of_birth", message)
    own = household.own_life_table
    if person.life_table == "own" and own is not None and own.ages and age < own.ages[0]:
        message = f"{person.name} is {age} on the plan date; the life table starts at {own.ages[0]}"
        yield Diagnostic("age-below-table", f"{path}.date_of_birth", message)
    to_age = person.plan_to_age
    if to_age is None:
        return
    yield from between(f"{path}.plan_to_age", to_age, 0, OLDEST, "age-range")
    if last_age is not None and to_age > last_age:
        message = f"found {to_age:g}; the life table ends at {last_age:g}"
        yield Diagnostic("plan-to-age-above-table", f"{path}.plan_to_age", message)
    if to_age <= age:
        message = f"found {to_age:g}; {person.name} is already {age}, so it changes nothing"
        yield Diagnostic("plan-to-age-past", f"{path}.plan_to_age", message, "warning")


def _accounts(household: Household) -> Iterator[Diagnostic]:
    if not household.accounts:
        yield Diagnostic("accounts-missing", "accounts", "no account is listed; expected at least one")
    yield from names_differ("accounts", "account", (account.name for account in household.accounts))
    portfolios = [portfolio.name for portfolio in household.portfolios]
    ages = _ages_now(household)
    for index, account in enumerate(household.accounts):
        path = f"accounts[{index}]"
        if account.owner != JOINT:
            yield from _own_owner(account.owner, f"{path}.owner", household)
        elif not household.is_couple:
            message = "the owner is 'joint' but there is one person"
            yield Diagnostic("owner-joint-single", f"{path}.owner", message)
        elif account.type is not AccountType.TAXABLE:
            message = f"a {account.type.value} account has one owner by law; name the person"
            yield Diagnostic("joint-not-taxable", f"{path}.owner", message)
        yield from amount(f"{path}.balance", account.balance)
        yield from amount(f"{path}.paid_in", account.paid_in)
        yield from amount(f"{path}.balance_last_year_end", account.balance_last_year_end)
        yield from amount(f"{path}.taken_this_year", account.taken_this_year)
        yield from amount(f"{path}.cost_basis", account.cost_basis)
        if account.cost_basis is not None and account.type is not AccountType.TAXABLE:
            message = f"a {account.type.value} account has no cost basis; the value is not used"
            yield Diagnostic("cost-basis-ignored", f"{path}.cost_basis", message, "warning")
        elif account.cost_basis is not None and account.cost_basis > account.balance:
            message = "the cost basis is above the balance; the loss is not counted"
            yield Diagnostic("cost-basis-above-balance", f"{path}.cost_basis", message, "warning")
        if account.held_now is not None and account.held_now not in portfolios:
            hint = near_miss(account.held_now, portfolios, "portfolios are")
            message = f"no portfolio is called {account.held_now!r}; {hint}"
            yield Diagnostic("portfolio-unknown", f"{path}.held_now", message)
        yield from between(f"{path}.not_before_age", account.not_before_age, 0, OLDEST, "age-range")
        yield from between(f"{path}.paid_in_until_age", account.paid_in_until_age, 0, OLDEST, "age-range")
        if account.paid_in > 0 and account.paid_in_until_age is None:
            message = "money is paid in each year with no age at which it stops"
            yield Diagnostic("paid-in-open-end", f"{path}.paid_in", message, "warning")
        age = ages.get(account.owner)
        until = account.paid_in_until_age
        if account.paid_in > 0 and until is not None and age is not None and until <= age:
            message = f"found {until:g}; {account.owner} is already {age}, so nothing is paid in"
            yield Diagnostic("paid-in-past", f"{path}.paid_in_until_age", message, "warning")


def _incomes(household: Household) -> Iterator[Diagnostic]:
    yield from names_differ("incomes", "income", (income.name for income in household.incomes))
    ages = _ages_now(household)
    for index, income in enumerate(household.incomes):
        path = f"incomes[{index}]"
        if income.owner == JOINT:
            message = "an income belongs to one person; split it into two rows"
            yield Diagnostic("owner-joint-income", f"{path}.owner", message)
        else:
            yield from _own_owner(income.owner, f"{path}.owner", household)
        yield from amount(f"{path}.amount", income.amount)
        yield from between(f"{path}.from_age", income.from_age, 0, OLDEST, "age-range")
        yield from between(f"{path}.to_age", income.to_age, 0, OLDEST, "age-range")
        if income.to_age is not None and income.to_age <= income.from_age:
            message = f"it ends at {income.to_age:g}, not after it starts at {income.from_age:g}"
            yield Diagnostic("ages-order", f"{path}.to_age", message)
        elif income.to_age is not None and income.to_age <= ages.get(income.owner, -1):
            message = f"it ended at {income.to_age:g}; {income.owner} is {ages[income.owner]}"
            yield Diagnostic("income-over", f"{path}.to_age", message, "warning")
        yield from between(f"{path}.rise", income.rise.rate, -0.5, 0.5, "rate-range")
        continues = income.continues_to_partner
        if continues == LARGER_OF_THE_TWO:
            if income.kind is not IncomeKind.STATE_PENSION:
                message = (
                    f"{LARGER_OF_THE_TWO!r} is for state pensions; give a share for a {income.kind.value}"
                )
                yield Diagnostic("continuation-kind", f"{path}.continues_to_partner", message)
        elif isinstance(continues, float | int):
            yield from between(f"{path}.continues_to_partner", continues, 0, 1, "share-range")
        if continues != 0.0 and len(household.people) == 1:
            message = "it continues to a partner but there is one person; not used"
            yield Diagnostic("partner-missing", f"{path}.continues_to_partner", message, "warning")
        yield from between(f"{path}.taxable_share", income.taxable_share, 0, 1, "share-range")
    owners = {income.name: income.owner for income in household.incomes}
    for index, choice in enumerate(household.start_choices):
        path = f"start_choices[{index}]"
        if choice.income not in owners:
            hint = near_miss(choice.income, list(owners), "incomes are")
            yield Diagnostic(
                "income-unknown", f"{path}.income", f"no income is called {choice.income!r}; {hint}"
            )
        yield from between(f"{path}.start_age", choice.start_age, 0, OLDEST, "age-range")
        yield from amount(f"{path}.amount", choice.amount)
        age = ages.get(owners.get(choice.income, ""), -1)
        if choice.start_age < age:
            message = f"found {choice.start_age:g}; the owner is already {age}"
            yield Diagnostic("start-age-past", f"{path}.start_age", message, "warning")


def _one_offs(household: Household) -> Iterator[Diagnostic]:
    for index, one_off in enumerate(household.one_offs):
        path = f"one_offs[{index}]"
        if not one_off.item.strip():
            yield Diagnostic("name-missing", f"{path}.item", "the one-off has no name")
        yield from amount(f"{path}.amount", one_off.amount, signed=True)
        if one_off.year < household.plan_date.year:
            message = f"found {one_off.year}; the plan starts in {household.plan_date.year}"
            yield Diagnostic("year-past", f"{path}.year", message)
        if one_off.last_year is not None and one_off.last_year < one_off.year:
            message = f"the last year {one_off.last_year} is before the first, {one_off.year}"
            yield Diagnostic("years-order", f"{path}.last_year", message)
        yield from between(f"{path}.taxable_share", one_off.taxable_share, 0, 1, "share-range")


def _spending(household: Household) -> Iterator[Diagnostic]:
    spending = household.spending
    essential = spending.essential
    if not math.isfinite(essential):
        yield Diagnostic(
            "number-not-finite", "spending.essential", f"found {essential}; expected a finite amount"
        )
    elif essential <= 0:
        message = f"found {essential:,.2f}; expected an amount above 0"
        yield Diagnostic("essential-not-positive", "spending.essential", message)
    yield from amount("spending.wanted", spending.wanted)
    yield from amount("spending.ceiling", spending.ceiling)
    if spending.wanted is not None and spending.wanted < essential:
        message = f"found {spending.wanted:,.0f}, below essential spending of {essential:,.0f}"
        yield Diagnostic("wanted-below-essential", "spending.wanted", message)
    if spending.ceiling is not None and spending.ceiling < essential:
        message = f"found {spending.ceiling:,.0f}, below essential spending of {essential:,.0f}"
        yield Diagnostic("ceiling-below-essential", "spending.ceiling", message)
    elif spending.ceiling is not None and spending.wanted is not None and spending.ceiling < spending.wanted:
        message = f"found {spending.ceiling:,.0f}, below wanted spending of {spending.wanted:,.0f}"
        yield Diagnostic("ceiling-below-wanted", "spending.ceiling", message, "warning")
    yield from between(
        "spending.survivor_share", spending.survivor_share, 0, 1, "survivor-share-range", open_low=True
    )
    yield from amount("spending.cash_aside", spending.cash_aside)
    taxable = sum(a.balance for a in household.accounts if a.type is AccountType.TAXABLE)
    if spending.cash_aside > max(taxable, 0.0):
        message = f"found {spending.cash_aside:,.0f}; the taxable accounts hold {taxable:,.0f}"
        yield Diagnostic("cash-aside-above-taxable", "spending.cash_aside", message)
    yield from _care(household)
    last = -math.inf
    for index, (age, factor) in enumerate(spending.age_profile):
        path = f"spending.age_profile[{index}]"
        yield from between(f"{path}.age", age, 0, OLDEST, "age-range")
        if age <= last:
            yield Diagnostic("profile-order", f"{path}.age", f"age {age:g} does not come after {last:g}")
        yield from between(f"{path}.factor", factor, 0, 10, "factor-range", open_low=True)
        last = age


def _care(household: Household) -> Iterator[Diagnostic]:
    spending = household.spending
    yield from amount("spending.care_cost", spending.care_cost)
    yield from between("spending.care_from_age", spending.care_from_age, 0, OLDEST, "age-range")
    yield from between("spending.care_years", spending.care_years, 0, 60, "factor-range", open_low=True)
    if spending.care_for in ("second", "last survivor") and len(household.people) == 1:
        message = f"care for {spending.care_for!r} but there is one person; write 'first'"
        yield Diagnostic("partner-missing", "spending.care_for", message)
    if spending.care_cost > 0:
        missing = [
            label
            for label, value in (
                ("Care from age", spending.care_from_age),
                ("Care years", spending.care_years),
                ("Care for", spending.care_for),
            )
            if value is None
        ]
        if missing:
            message = f"a care cost is given; fill in {', '.join(missing)} too"
            yield Diagnostic("care-incomplete", "spending.care_cost", message)


def _preferences(household: Household) -> Iterator[Diagnostic]:
    wishes, essential = household.preferences, household.spending.essential
    yield from between(
        "preferences.risk_aversion", wishes.risk_aversion, 0, 20, "risk-aversion-range", open_low=True
    )
    third, second = wishes.accepts_third_cut, wishes.accepts_second_gamble
    if third is not None and second is not None:
        implied = risk_aversion_from_gambles(third, second)
        if abs(implied - wishes.risk_aversion) > 1e-9:
            message = f"the two answers say {implied:g}; {wishes.risk_aversion:g} is used"
            yield Diagnostic("gamble-conflict", "preferences.risk_aversion", message, "warning")
    yield from between(
        "preferences.shortfall_weight", wishes.shortfall_weight, 1, 1000, "shortfall-weight-range"
    )
    fallback = wishes.fallback_income
    if fallback is not None:
        path = "preferences.fallback_income"
        if not math.isfinite(fallback):
            yield Diagnostic("number-not-finite", path, f"found {fallback}; expected a finite amount")
        elif fallback <= 0:
            message = f"found {fallback:,.2f}; expected an amount above 0, or blank for 10 % of essentials"
            yield Diagnostic("fallback-not-positive", path, message)
        elif fallback > essential:
            message = f"found {fallback:,.0f}, above essential spending of {essential:,.0f}"
            yield Diagnostic("fallback-above-essential", path, message)
        elif fallback > 0.25 * essential:
            message = (
                f"{fallback:,.0f} is {fallback / essential:.0%} of essential spending; a high fallback makes "
                "running out of money look harmless"
            )
            yield Diagnostic("fallback-high", path, message, "warning")
    yield from between(
        "preferences.time_preference",
        wishes.time_preference,
        -0.05,
        0.5,
        "time-preference-range",
        open_low=True,
    )
    yield from amount("preferences.wish_to_leave", wishes.wish_to_leave)
    heirs = wishes.heirs_tax_rate
    yield from between("preferences.heirs_tax_rate", heirs, 0, 1 - 1e-9, "heirs-tax-range")


def _quote_and_rules(household: Household) -> Iterator[Diagnostic]:
    quote = household.annuity_quote
    if quote is not None:
        yield from _own_owner(quote.owner, "annuity_quote.owner", household)
        yield from between("annuity_quote.rate", quote.rate, 0, 1, "annuity-rate-range", open_low=True)
        names = [account.name for account in household.accounts]
        if quote.account not in names:
            hint = near_miss(quote.account, names, "accounts are")
            message = f"no account is called {quote.account!r}; {hint}"
            yield Diagnostic("account-unknown", "annuity_quote.account", message)
        if isinstance(quote.continues_to_partner, str):
            message = "an annuity goes on to a partner as a share; 'larger of the two' is for state pensions"
            yield Diagnostic("continuation-kind", "annuity_quote.continues_to_partner", message)
        else:
            path = "annuity_quote.continues_to_partner"
            yield from between(path, quote.continues_to_partner, 0, 1, "share-range")
        yield from between("annuity_quote.taxable_share", quote.taxable_share, 0, 1, "share-range")
    terms = {(term.rule, term.parameter): term for term in RULE_TERMS}
    for setting in household.rule_settings:
        path = f"rules.{setting.rule}.{setting.parameter}"
        term = terms[setting.rule, setting.parameter]
        yield from between(path, setting.value, term.low, term.high, "rule-parameter")


def _records(household: Household) -> Iterator[Diagnostic]:
    last_year = household.last_year
    yield from amount("last_year.spent", last_year.spent)
    yield from amount("last_year.paid_in", last_year.paid_in)
    yield from amount("last_year.one_offs_received", last_year.one_offs_received, signed=True)


def level_means(household: Household) -> float:
    r"""Level yearly amount, before tax, that incomes and savings could carry.

    :math:`(\sum_a B_a + \sum_t v^t I_t) / \sum_t v^t`, with :math:`v = (1+i)/(1+m)`, :math:`m` the
    nominal mean of the portfolio of least risk after costs, until the youngest person is 90 (or
    the later "plan at least to age"): a rough yardstick for a warning, no part of any plan.

    Returns
    -------
    float
        Today's money a year. NaN where a number it needs is not finite.
    """
    classes, people = household.markets.asset_classes, household.people
    ages = _ages_now(household)
    years = max(max(90.0, p.plan_to_age or 0.0) - ages[p.name] for p in people)
    horizon = max(1, math.ceil(years)) if math.isfinite(years) else 1
    inflation = household.markets.inflation

    def risk(weights: tuple[float, ...]) -> float:
        return sum(w * c.standard_deviation for w, c in zip(weights, classes, strict=False))

    calmest = min(household.portfolios, key=lambda p: risk(p.weights))
    mean = sum(w * c.expected_return for w, c in zip(calmest.weights, classes, strict=False))
    mean -= calmest.yearly_cost + household.adviser_fee
    if not (mean > -1 and inflation > -1):
        return math.nan
    discount = (1 + inflation) / (1 + mean)
    annuity = sum(discount**t for t in range(horizon))
    total = sum(account.balance for account in household.accounts)
    for income in household.incomes:
        age = ages.get(income.owner, 0)
        for t in range(horizon):
            if income.from_age < age + t + 1 and (income.to_age is None or age + t < income.to_age):
                rate = {"prices": inflation, "fixed": income.rise.rate}.get(
                    income.rise.kind, min(inflation, income.rise.rate)
                )
                total += income.amount * (discount * (1 + rate) / (1 + inflation)) ** t
    for one_off in household.one_offs:
        if not math.isfinite(one_off.year + (one_off.last_year or 0)):
            return math.nan
        if one_off.in_the_plan:
            first = one_off.year - household.plan_date.year
            last = (one_off.last_year or one_off.year) - household.plan_date.year
            total += sum(one_off.amount * discount**t for t in range(max(0, first), min(last + 1, horizon)))
    return total / annuity


def _means(household: Household) -> Iterator[Diagnostic]:
    if not (household.people and household.portfolios and household.markets.asset_classes):
        return
    means, essential = level_means(household), household.spending.essential
    if essential > means:
        message = (
            f"essential spending of {essential:,.0f} a year is above about {means:,.0f}, what incomes and "
            "a level annuity from all savings could carry before tax"
        )
        yield Diagnostic("essentials-above-means", "spending.essential", message, "warning")

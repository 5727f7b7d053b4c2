"""Part 2: what you told us, for the client to correct and sign."""

from __future__ import annotations

from typing import Final

from planner.household import JOINT, Household, Income, OneOff, Rise, WhatIf
from planner.plan_record import Plan
from planner.reports.blocks import (
    Block,
    Bullets,
    Column,
    Contents,
    Facts,
    Heading,
    NewPage,
    Signatures,
    Table,
    Text,
)
from planner.reports.figures import DASH, Money, age_words, day_words, listed, number, percent
from planner.reports.wording import ACCOUNT_TYPES, DRAFT, INCOME_KINDS, SUITABILITY_TEXTS

LEFT: Final = "left"


def what_you_told_us(plan: Plan) -> tuple[Block, ...]:
    """Every input in plain words."""
    household = plan.household
    blocks: list[Block] = [
        NewPage(),
        Contents(),
        Heading("What you told us", 1, 2),
        Text(
            "Please read this, correct what is wrong and sign. The plan is only as good as these facts. "
            "Amounts are a year's, in today's money, before tax unless it says otherwise."
        ),
        Heading("You"),
        _people(plan),
        Facts(tuple(_household_rows(household))),
        Heading("Your savings"),
        _accounts(household),
        *_incomes(household),
        *_one_offs(household),
        *_start_choices(household),
        *_annuity_quote(household),
        Heading("Your spending"),
        Facts(tuple(_spending_rows(household))),
        Heading("What you would rather have"),
        Facts(tuple(_preference_rows(household))),
        *_what_ifs(household),
        *_last_year(household),
        Heading("Aims, risk and suitability"),
        *_suitability(household),
        Signatures(
            "These facts are right, or I have corrected them in this part.",
            tuple(p.name for p in household.people),
        ),
    ]
    return tuple(blocks)


def _people(plan: Plan) -> Table:
    household = plan.household
    rows = []
    for person, expectancy in zip(household.people, plan.life_expectancy, strict=False):
        age = person.age_on(household.plan_date)
        table = "the table on the sheet Life table" if person.life_table == "own" else person.life_table
        if person.mortality_multiplier != 1:
            table += f", death rates times {number(person.mortality_multiplier)}"
        if person.plan_to_age is not None:
            table += f", planned to live at least to {age_words(person.plan_to_age)}"
        rows.append(
            (
                person.name,
                f"{day_words(person.date_of_birth, household.currency)} ({age})",
                person.sex,
                table,
                f"to about {round(age + expectancy)}",
            )
        )
    return Table(
        (
            Column("Name", LEFT),
            Column("Born (age)", LEFT),
            Column("Sex", LEFT),
            Column("Life table", LEFT),
            Column("On average"),
        ),
        tuple(rows),
        "On average: the age the table gives as the middle of many lives like yours. Half live longer or "
        "less "
        "long, so the plan runs to the end of the table.",
    )


def _household_rows(household: Household) -> list[tuple[str, str]]:
    money = Money(household.currency)
    rows: list[tuple[str, str]] = []
    if household.is_couple:
        rows.append(("You are", household.couple_is))
    rows.append(("Currency and tax rules", f"{household.currency}, {tax_rules_words(household)}"))
    if household.extra_income_tax_rate is not None:
        covers = "also" if household.extra_rate_on_state_pensions else "not"
        rows.append(
            (
                "State or regional income tax",
                f"{percent(household.extra_income_tax_rate, 2)} of taxable income, {covers} on state "
                "pensions",
            )
        )
    if household.home_value:
        rows.append(("Home", f"worth {money.exact(household.home_value)}; not counted in the plan"))
    return rows


def tax_rules_words(household: Household) -> str:
    """The tax rules by name, for people."""
    return {"own": "your adviser's own tax rules", "none": "no tax"}.get(
        household.tax_rules, f"tax rules {household.tax_rules}"
    )


def _accounts(household: Household) -> Block:
    money = Money(household.currency)
    if not household.accounts:
        return Text("No savings were entered.")
    rows = []
    for account in household.accounts:
        details = []
        if account.cost_basis is not None:
            details.append(f"book cost {money.exact(account.cost_basis)}")
        if account.not_before_age is not None:
            details.append(f"not before age {age_words(account.not_before_age)}")
        if account.paid_in:
            until = account.paid_in_until_age
            span = "" if until is None else f" until {age_words(until)}"
            details.append(f"{money.exact(account.paid_in)} paid in a year{span}")
        if account.balance_last_year_end is not None:
            details.append(f"{money.exact(account.balance_last_year_end)} last year-end")
        if account.taken_this_year:
            details.append(f"{money.exact(account.taken_this_year)} taken so far this year")
        rows.append(
            (
                account.name,
                "both of you" if account.owner == JOINT else account.owner,
                ACCOUNT_TYPES[account.type],
                account.held_now or "not said",
                "; ".join(details) or DASH,
                money.exact_cell(account.balance),
            )
        )
    total = sum(a.balance for a in household.accounts)
    rows.append(("Together", "", "", "", "", money.exact_cell(total)))
    return Table(
        (
            Column("Account", LEFT),
            Column("Owner", LEFT),
            Column("Type", LEFT),
            Column("Held now", LEFT),
            Column("More", LEFT),
            Column(f"Balance ({money.unit})"),
        ),
        tuple(rows),
        strong=(len(rows) - 1,),
    )


def rise_words(rise: Rise) -> str:
    """How an income changes from year to year."""
    if rise.kind == "prices":
        return "with prices"
    if rise.kind == "capped":
        return f"with prices up to {percent(rise.rate)}"
    return "never (fixed)" if rise.rate == 0 else f"{percent(rise.rate)} a year"


def _income_row(income: Income, household: Household, money: Money) -> tuple[str, ...]:
    until = "for life" if income.to_age is None else f"to {age_words(income.to_age)}"
    share = income.continues_to_partner
    partner = share if isinstance(share, str) else (percent(share, 0) if share else "ends")
    taxed = "by the rules" if income.taxable_share is None else percent(income.taxable_share, 0)
    cells = (
        income.name,
        income.owner,
        INCOME_KINDS[income.kind],
        f"from {age_words(income.from_age)} {until}",
        rise_words(income.rise),
    )
    last = (taxed, money.exact_cell(income.amount))
    return (*cells, partner, *last) if household.is_couple else (*cells, *last)


def _incomes(household: Household) -> tuple[Block, ...]:
    money = Money(household.currency)
    if not household.incomes:
        return (Heading("Your incomes"), Text("No pension, work or other income was entered."))
    columns = [
        Column("Income", LEFT),
        Column("Of", LEFT),
        Column("Kind", LEFT),
        Column("Ages", LEFT),
        Column("Rises", LEFT),
        *((Column("To partner", LEFT),) if household.is_couple else ()),
        Column("Taxed", LEFT),
        Column(f"A year ({money.unit})"),
    ]
    table = Table(
        tuple(columns),
        tuple(_income_row(i, household, money) for i in household.incomes),
        "Amounts that do not rise with prices are as first paid, in the money of that year.",
    )
    return (Heading("Your incomes"), table)


def _one_off_row(item: OneOff, money: Money) -> tuple[str, ...]:
    years = str(item.year) if item.last_year is None else f"{item.year} to {item.last_year}"
    details = [
        "rises with prices" if item.rises_with_prices else "fixed amount",
        "in the plan" if item.in_the_plan else "only as a what-if",
    ]
    if item.taxable_share:
        details.append(f"{percent(item.taxable_share, 0)} taxable")
    kind = "you receive" if item.amount >= 0 else "you pay"
    return (item.item, years, kind, "; ".join(details), money.exact_cell(abs(item.amount)))


def _one_offs(household: Household) -> tuple[Block, ...]:
    if not household.one_offs:
        return ()
    money = Money(household.currency)
    columns = (
        Column("One-off sum", LEFT),
        Column("Years", LEFT),
        Column("", LEFT),
        Column("More", LEFT),
        Column(f"Amount ({money.unit})"),
    )
    return (
        Heading("One-off sums"),
        Table(columns, tuple(_one_off_row(o, money) for o in household.one_offs)),
    )


def _start_choices(household: Household) -> tuple[Block, ...]:
    if not household.start_choices:
        return ()
    money = Money(household.currency)
    rows = tuple(
        (c.income, f"at {age_words(c.start_age)}", money.exact_cell(c.amount))
        for c in household.start_choices
    )
    columns = (Column("Quoted income", LEFT), Column("If it starts", LEFT), Column(f"A year ({money.unit})"))
    return (Heading("When an income could start"), Table(columns, rows))


def _annuity_quote(household: Household) -> tuple[Block, ...]:
    quote = household.annuity_quote
    if quote is None:
        return ()
    money = Money(household.currency)
    share = quote.continues_to_partner
    partner = "ends with that life"
    if share:
        partner = f"{share if isinstance(share, str) else percent(share, 0)} goes on to the partner"
    taxed = "" if quote.taxable_share is None else f"; {percent(quote.taxable_share, 0)} of it taxable"
    text = (
        f"{money.exact(quote.rate * 100_000)} a year for each {money.exact(100_000)} paid from "
        f"{quote.account}, before tax, for the life of {quote.owner}; rises: {rise_words(quote.rise)}; "
        f"{partner}{taxed}. A quote to compare with, not part of this plan."
    )
    return (Heading("An annuity you could buy"), Text(text))


def _spending_rows(household: Household) -> list[tuple[str, str]]:
    money = Money(household.currency)
    spending = household.spending
    rows = [("Your bills (essential spending)", f"{money.exact(spending.essential)} a year, after tax")]
    asked = "not said" if spending.wanted is None else f"{money.exact(spending.wanted)} a year, after tax"
    rows.append(("What you ask for", asked))
    if spending.ceiling is not None:
        rows.append(("The most you would spend", f"{money.exact(spending.ceiling)} a year, after tax"))
    if household.is_couple:
        rows.append(
            ("A survivor needs", f"{percent(spending.survivor_share, 0)} of what the two of you need")
        )
    if spending.cash_aside:
        rows.append(
            ("Cash kept aside", f"{money.exact(spending.cash_aside)}, not spent; left for your heirs")
        )
    if spending.care_cost:
        who = {"first": household.people[0].name, "last survivor": "whoever lives longer"}
        person = who.get(spending.care_for or "last survivor", household.people[-1].name)
        start = "" if spending.care_from_age is None else f" from age {age_words(spending.care_from_age)}"
        span = "" if spending.care_years is None else f" for {number(spending.care_years)} years"
        rows.append(
            (
                "Care, if needed",
                f"{money.exact(spending.care_cost)} a year{start}{span} for {person}; tested as a what-if "
                "only",
            )
        )
    if spending.age_profile:
        name = household.people[0].name
        steps = [
            f"{percent(s, 0)} of today's from {name}'s age {age_words(a)}" for a, s in spending.age_profile
        ]
        rows.append(("Needs change with age", listed(steps)))
    return rows


def _preference_rows(household: Household) -> list[tuple[str, str]]:
    money = Money(household.currency)
    wishes = household.preferences
    yes_no = {True: "yes", False: "no"}
    rows = [
        (
            "How much you dislike ups and downs",
            f"{number(wishes.risk_aversion)} (risk aversion; 1 hardly at all, 4 usual, 8 very much)",
        )
    ]
    if wishes.accepts_third_cut is not None:
        answer = f"one-third cut: {yes_no[wishes.accepts_third_cut]}"
        if wishes.accepts_second_gamble is not None:
            answer += f"; the second question: {yes_no[wishes.accepts_second_gamble]}"
        rows.append(("Even chance to double your income or lose a part", answer))
    rows.append(
        (
            "How much worse cutting bills is",
            f"money short of your bills weighs {number(wishes.shortfall_weight)} times as much",
        )
    )
    if wishes.fallback_income is None:
        fallback = (
            f"{money.exact(0.1 * household.spending.essential)} a year (a tenth of your bills; not asked)"
        )
    else:
        fallback = f"{money.exact(wishes.fallback_income)} a year"
    rows.append(("Fallback income if savings are gone", fallback))
    earlier = "none" if wishes.time_preference == 0 else f"{percent(wishes.time_preference, 2)} a year"
    rows.append(("Preference for earlier spending", earlier))
    leave = "nothing in particular"
    if wishes.wish_to_leave:
        leave = f"{money.exact(wishes.wish_to_leave)}, after your heirs' tax"
    rows.append(("Wish to leave", leave))
    if wishes.heirs_tax_rate or wishes.wish_to_leave:
        rows.append(("Your heirs' tax", f"{percent(wishes.heirs_tax_rate)} of tax-deferred money left"))
    moves = "allowed" if wishes.conversions_allowed else "not considered"
    rows.append(("Moves from tax-deferred to tax-free", moves))
    choice = household.portfolio_choice
    rows.append(
        ("Portfolio", "the best of those in part 10, each year" if choice is None else f"'{choice}' always")
    )
    return rows


def _what_ifs(household: Household) -> tuple[Block, ...]:
    if not household.what_ifs:
        return ()
    return (
        Heading("What-ifs you asked about"),
        Bullets(tuple(_what_if_words(w) for w in household.what_ifs)),
    )


def _what_if_words(what_if: WhatIf) -> str:
    changes = listed([f"{address} becomes {value.strip() or 'blank'}" for address, value in what_if.changes])
    return f"{what_if.name}: {changes}"


def _last_year(household: Household) -> tuple[Block, ...]:
    money = Money(household.currency)
    last = household.last_year
    rows = [
        (label, money.exact(value))
        for label, value in (
            ("Spent", last.spent),
            ("Paid in", last.paid_in),
            ("One-off sums received", last.one_offs_received),
        )
        if value is not None
    ]
    return (Heading("Last year"), Facts(tuple(rows))) if rows else ()


def _suitability(household: Household) -> tuple[Block, ...]:
    """The adviser's six texts; a blank one says so."""
    blocks: list[Block] = []
    for name, title in SUITABILITY_TEXTS.items():
        if name in ("drawbacks", "alternatives_considered"):
            continue  # printed in part 10, beside the costs and assumptions
        text = getattr(household.practice, name).strip()
        blocks += [Heading(title, 3), Text(text or f"Not written yet ({DRAFT}).")]
    return tuple(blocks)

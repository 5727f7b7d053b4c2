"""Part 1: your year on one page."""

from __future__ import annotations

from planner.plan_record import Plan, StrategyResult
from planner.reports.blocks import (
    BarRow,
    Block,
    Facts,
    Heading,
    KeyFigure,
    KeyFigures,
    MoneyBars,
    OnePage,
    Text,
)
from planner.reports.figures import Money, day_words, listed, of_futures, one_year_after, percent
from planner.reports.wording import (
    ASSUMPTIONS,
    CALL_US,
    CALL_US_COUPLE,
    CALL_US_SINGLE,
    CHECK_TAX,
    ESTIMATES,
    SUITABILITY_TEXTS,
    as_long_as_alive,
)
from planner.reports.year_money import (
    investment_moves,
    tax_year_end,
    unknown_holdings,
    year_money,
)


def your_year(plan: Plan) -> tuple[Block, ...]:
    """What to spend this year, where it comes from, and what would change it."""
    household = plan.household
    until = day_words(one_year_after(household.plan_date), household.currency)
    start = day_words(household.plan_date, household.currency)
    blocks: list[Block] = [
        Heading("Your year on one page", 1, 1),
        Text(
            f"For {listed([p.name for p in household.people])}. Plan of {start}; use it until {until}.",
            "lead",
        ),
    ]
    if household.practice.is_draft:
        missing = [
            title for name, title in SUITABILITY_TEXTS.items() if not getattr(household.practice, name)
        ]
        blocks.append(
            Text(f"Draft: the adviser still has to write {listed([m.lower() for m in missing])}.", "strong")
        )
    first_reason = CALL_US_COUPLE if household.is_couple else CALL_US_SINGLE
    blocks += [
        _figures(plan),
        Heading("Where it comes from", 3),
        _sources(plan),
        Facts(
            tuple(
                row
                for row in (
                    _least(plan),
                    _investments(plan),
                    _next_review(plan),
                    _bills(plan),
                    _safety(plan),
                    ("Call us first if", "; ".join((first_reason, *CALL_US)) + "."),
                )
                if row[1]
            )
        ),
        *required_wording(plan),
        Text(
            f"{ESTIMATES} All amounts are in today's money. {ASSUMPTIONS} Part 6 explains 'futures tested'.",
            "body",
        ),
    ]
    return (OnePage(tuple(blocks)),)


def required_wording(plan: Plan) -> tuple[Block, ...]:
    """The firm's required wording, as typed, for every place that states a probability."""
    wording = plan.household.practice.required_wording
    return (Text(wording, "required"),) if wording.strip() else ()


def bills_sentence(plan: Plan, result: StrategyResult) -> str:
    """In how many futures tested the bills were paid, and how bad the rest is."""
    money = Money(plan.household.currency)
    span = as_long_as_alive(plan.household.is_couple)
    paid = 1 - result.chance_below_essential
    if result.chance_below_essential == 0:
        return (
            f"In all {plan.sources.n_paths:,} futures we tested your bills were paid {span}. Worse "
            "futures than "
            "those tested can happen."
        )
    head = f"In {of_futures(paid)} futures we tested your bills were paid {span}"
    if result.chance_below_essential == 1:
        head = f"In none of the futures we tested were all your bills paid {span}"
    after = "" if result.typical_age_below is None else _mostly_after(plan, result.typical_age_below)
    years = max(1, round(result.years_below_essential))
    spell = f"in about {years} {'year' if years == 1 else 'years'}"
    return (
        f"{head}; in the rest you were short by about {money.about(result.shortfall)} a year, {spell}{after}."
    )


def _mostly_after(plan: Plan, age: float) -> str:
    who = f"{plan.household.people[0].name} is" if plan.household.is_couple else "you are"
    return f", mostly after {who} {round(age)}"


def _figures(plan: Plan) -> KeyFigures:
    money = Money(plan.household.currency)
    rounded = year_money(plan)
    return KeyFigures(
        (
            KeyFigure(
                "Spend this year",
                money.exact(rounded.spending),
                "after tax: your bills and everything else you choose to buy",
            ),
            KeyFigure("That is about", money.monthly(rounded.spending), "a month, after tax"),
            KeyFigure("Set aside for tax", money.exact(rounded.tax), f"estimated for this year. {CHECK_TAX}"),
        )
    )


def _sources(plan: Plan) -> MoneyBars:
    """Where the money comes from, added up."""
    money = Money(plan.household.currency)
    rounded = year_money(plan)
    longest = max((line.amount for line in rounded.lines), default=0)
    rows = [
        BarRow(line.label, money.exact(line.amount), max(0.0, line.amount / longest) if longest > 0 else 0.0)
        for line in rounded.lines
    ]
    rows.append(BarRow("Comes in, before tax", money.exact(rounded.coming_in), None, total=True))
    rows.append(BarRow("less income tax", money.exact(-rounded.tax), None))
    if rounded.kept:
        rows.append(BarRow("less what is added to your taxable savings", money.exact(-rounded.kept), None))
    rows.append(BarRow("Yours to spend, after tax", money.exact(rounded.spending), None, total=True))
    return MoneyBars(tuple(rows))


def _least(plan: Plan) -> tuple[str, str]:
    money = Money(plan.household.currency)
    due = [a for a in plan.this_year.accounts if a.still_due >= 1]
    by = day_words(tax_year_end(plan.household), plan.household.currency)
    if not due:
        if plan.this_year.minimum_distribution >= 1:
            return ("The least you must take", "You have already taken this year's least amount.")
        return ("The least you must take", "Nothing has to be taken out this year.")
    parts = listed([f"{money.exact(a.still_due)} from {a.account}" for a in due])
    return ("The least you must take", f"{parts}, by {by}. The amounts above include it.")


def _investments(plan: Plan) -> tuple[str, str]:
    money = Money(plan.household.currency)
    target = plan.this_year.portfolio
    moves = investment_moves(plan)
    unknown = unknown_holdings(plan)
    if moves:
        text = "After the withdrawals, move " + listed(
            [f"about {money.about(amount)} from '{source}'" for source, _, amount in moves]
        )
        text += f" to '{target}'. Part 3 lists the trades."
    elif unknown:
        text = f"Hold '{target}' with what stays invested."
    else:
        text = f"Stay in '{target}'. Nothing to move."
    return ("Investments", text)


def _next_review(plan: Plan) -> tuple[str, str]:
    when = day_words(one_year_after(plan.household.plan_date), plan.household.currency)
    return ("Next review", f"{when}. {band_sentence(plan)}")


def band_sentence(plan: Plan) -> str:
    """Savings at the next review between which nothing changes, and a month's spending outside."""
    money = Money(plan.household.currency)
    band = plan.band
    if band.high <= 0:
        return "There will be no savings to read your spending from; it follows from your incomes."
    above = f"a tenth above it, about {money.monthly(band.spending_above)}"
    if band.low <= 0:
        return f"No change while your savings are then below {money.about(band.high)}; {above} a month."
    return (
        f"No change while your savings are then between {money.about(band.low)} and "
        f"{money.about(band.high)}. A tenth "
        f"below that, expect to spend about {money.monthly(band.spending_below)} a month; {above}."
    )


def _bills(plan: Plan) -> tuple[str, str]:
    text = f"Lifelong pensions, after tax, pay {percent(plan.bills_covered_now, 0)} of your bills now"
    if plan.survivors:
        text += "; " + listed(
            [f"{percent(s.bills_covered, 0)} for {s.survivor} alone" for s in plan.survivors]
        )
    return ("Your bills", f"{text}. {'Savings pay the rest.' if plan.bills_covered_now < 1 else ''}".rstrip())


def _safety(plan: Plan) -> tuple[str, str]:
    return ("How safe it is", bills_sentence(plan, plan.strategies[0]))

"""Part 1: your year on one page."""

from __future__ import annotations

from planner.plan_record import LookupRow, Plan, StrategyResult
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
from planner.reports.figures import Money, at_least, day_words, listed, of_futures, one_year_after, percent
from planner.reports.wording import (
    CALL_US,
    CALL_US_COUPLE,
    CALL_US_SINGLE,
    CHECK_TAX,
    ESTIMATES,
    LIFELONG_KINDS,
    SUITABILITY_TEXTS,
    as_long_as_alive,
)
from planner.reports.year_money import (
    grouped_incomes,
    investment_moves,
    tax_year_end,
    unknown_holdings,
    year_money,
)

# Characters of required wording that page one has room for; more stands right behind it.
_MOST_WORDING = 900


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
    wording = required_wording(plan)
    behind = sum(len(text.text) for text in wording) > _MOST_WORDING
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
                    ("Call us first if", "\n".join(f"– {reason}" for reason in (first_reason, *CALL_US))),
                )
                if row[1]
            )
        ),
        *(() if behind else wording),
        Text(
            f"{ESTIMATES} All amounts are in today's money. The {plan.sources.n_paths:,} futures are courses "
            "of markets and lives, drawn at random. Part 6 says more of them; part 10 has the assumptions."
            + (" The wording required by your adviser's firm stands on the next page." if behind else "")
        ),
    ]
    return (OnePage(tuple(blocks)), *(wording if behind else ()))


def required_wording(plan: Plan) -> tuple[Text, ...]:
    """The firm's local caution and required wording, as typed: for every place with a probability."""
    practice = plan.household.practice
    return tuple(
        Text(words, "required")
        for words in (practice.local_caution, practice.required_wording)
        if words.strip()
    )


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
    lines = grouped_incomes(rounded.lines)
    longest = max((line.amount for line in lines), default=0)
    rows = [
        BarRow(line.label, money.exact(line.amount), line.amount / longest if line.amount > 0 else None)
        for line in lines
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
    parts = listed([f"{money.exact(at_least(a.still_due))} from {a.account}" for a in due])
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


def planned_next_year(plan: Plan) -> LookupRow | None:
    """Row of the look-up for the present household that is nearest to the savings expected then."""
    if len(plan.schedule) < 2 or not plan.lookup:
        return None
    rows = [row for row in plan.lookup if row.status == plan.lookup[0].status]
    expected = plan.schedule[1].balance.p50
    return min(rows, key=lambda row: abs(row.balance - expected))


def band_sentence(plan: Plan) -> str:
    """Savings at the next review between which nothing changes, and a month's spending outside."""
    money = Money(plan.household.currency)
    band, now = plan.band, plan.this_year.spending
    if band.high <= 0:
        return "There will be no savings to read your spending from; it follows from your incomes."
    planned = planned_next_year(plan)
    changes = planned is not None and abs(planned.spending - now) > band.tolerance * abs(now)
    opening = f"Spend about {money.monthly(planned.spending)} a month" if planned and changes else "No change"
    if band.low <= 0:
        text = f"{opening} if your savings are then below {money.about(band.high)}."
    else:
        text = (
            f"{opening} if your savings are then between {money.about(band.low)} and "
            f"{money.about(band.high)}. If they are lower, spend less: about "
            f"{money.monthly(band.spending_below)} a month at {money.about(0.9 * band.low)}."
        )
    if band.spending_above > (planned.spending if planned and changes else now):
        text += (
            f" If they are higher, you can spend more: about {money.monthly(band.spending_above)} a month "
            f"at {money.about(1.1 * band.high)}."
        )
    return text


def _bills(plan: Plan) -> tuple[str, str]:
    lifelong = {i.name for i in plan.household.incomes if i.kind in LIFELONG_KINDS and i.to_age is None}
    works = any(name not in lifelong and amount > 0 for name, amount in plan.this_year.incomes)
    others = "Work, other income and savings" if works else "Savings"
    if plan.bills_covered_now < 0.005:
        text = f"No pension for life is paid yet. {others} pay your bills."
    else:
        text = f"Pensions for life pay {percent(plan.bills_covered_now, 0)} of your bills now, after tax."
        text += f" {others} pay the rest." if plan.bills_covered_now < 1 else ""
    if plan.survivors:
        alone = [f"{percent(s.bills_covered, 0)} for {s.survivor}" for s in plan.survivors]
        text += f" If one of you were left alone, pensions would pay {listed(alone)}."
    return ("Your bills", text)


def _safety(plan: Plan) -> tuple[str, str]:
    return ("How safe it is", bills_sentence(plan, plan.strategies[0]))

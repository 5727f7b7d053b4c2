"""Parts 7, 8 and 9: rules of thumb, what-ifs, and how close to the best possible."""

from __future__ import annotations

from planner.plan_record import Plan, StrategyResult
from planner.reports.blocks import Block, Column, CostChart, Facts, Heading, Table, Text
from planner.reports.figures import MINUS, Money, capitalised, number, percent
from planner.reports.section_year import required_wording
from planner.reports.wording import (
    PROOF_FOR_ANALYSTS,
    REASONS,
    RULES_INTRODUCTION,
    WORTH_STEADY,
    futures_tested,
)
from planner.rule_terms import RULE_TERMS


def compared_with_rules(plan: Plan) -> tuple[Block, ...]:
    """Part 7: the plan beside each rule on the same futures."""
    has_level = any(s.level_spending is not None for s in plan.strategies)
    text = f"{RULES_INTRODUCTION} {WORTH_STEADY}" if has_level else RULES_INTRODUCTION
    blocks: list[Block] = [Heading("Compared with rules of thumb", 1, 7), Text(text)]
    if len(plan.strategies) < 2:
        return (*blocks, Text("No rule was compared in this plan."))
    blocks += [
        _cost_chart(plan),
        Heading("In figures"),
        _values(plan, has_level),
        _risks(plan),
        Text(futures_tested(plan.sources.n_paths, plan.household.is_couple), "note"),
        *required_wording(plan),
        *_settings(plan),
        *_references(plan),
    ]
    return tuple(blocks)


def _name(plan: Plan, result: StrategyResult) -> str:
    return "This plan" if result is plan.strategies[0] else capitalised(result.name)


def _cost(result: StrategyResult, money: Money) -> str:
    return money.about(max(0.0, result.wealth_cost))


def _cost_chart(plan: Plan) -> CostChart:
    money = Money(plan.household.currency)
    ordered = sorted(plan.strategies[1:], key=lambda s: s.wealth_cost)
    return CostChart(
        "What each rule costs you",
        f"{money.unit} of today's savings",
        tuple((_name(plan, s), max(0.0, s.wealth_cost), _cost(s, money)) for s in ordered),
    )


def _values(plan: Plan, has_level: bool) -> Table:
    money = Money(plan.household.currency)
    columns = [Column("", "left"), Column("Spending this year"), Column("What this rule costs you")]
    if has_level:
        columns.append(Column("Worth a steady income of"))
    columns += [
        Column("Tax over life"),
        *(Column(t, group="Left for heirs") for t in ("Low", "Middle", "High")),
    ]
    rows = []
    for result in plan.strategies:
        cells = [_name(plan, result), money.about_cell(result.spending_this_year)]
        cells.append(money.about_cell(result.wealth_cost))
        if has_level:
            level = result.level_spending
            cells.append("" if level is None else money.about_cell(level))
        estate = result.estate
        cells += [money.about_cell(v) for v in (result.tax_paid, estate.p10, estate.p50, estate.p90)]
        rows.append(tuple(cells))
    errors = [s.wealth_cost_standard_error for s in plan.strategies[1:]]
    wobble = money.about(max(errors))
    note = (
        f"In {money.unit}, today's money, after costs. Spending and steady income are a year's, after "
        "tax; what a rule costs is "
        f"in today's savings, and may be off by about {wobble} because the number of futures is limited; "
        "'Tax over life' "
        "is the average total; 'Left for heirs' is after their tax, in one of ten cases less than the "
        "low figure and in one "
        "of ten more than the high one. The assumptions are in part 10."
    )
    return Table(tuple(columns), tuple(rows), note, strong=(0,))


def _risks(plan: Plan) -> Table:
    money = Money(plan.household.currency)
    explained = any(result.reason for result in plan.strategies)
    columns = (
        Column("", "left"),
        Column("Of 100 futures, bills not paid in"),
        Column("Short by, a year", group="In those futures"),
        Column("Years short", group="In those futures"),
        Column("First at age", group="In those futures"),
        Column("Largest yearly cut"),
        *((Column("What costs most", "left"),) if explained else ()),
    )
    rows = []
    for result in plan.strategies:
        never = result.chance_below_essential == 0
        age = result.typical_age_below
        rows.append(
            (
                _name(plan, result),
                _of_hundred(result.chance_below_essential),
                "" if never else money.about_cell(result.shortfall),
                "" if never else number(result.years_below_essential, 0),
                "" if never or age is None else f"{round(age)}",
                percent(result.largest_yearly_cut, 0),
                *((REASONS.get(result.reason, ""),) if explained else ()),
            )
        )
    whose = f" of {plan.household.people[0].name}" if plan.household.is_couple else ""
    note = (
        f"Short by: {money.unit} a year, today's money, after tax, on average over the years in which "
        "bills were not paid. First at "
        f"age: the middle age{whose} when it first happened. Largest yearly cut: the middle one over all "
        "futures."
    )
    if explained:
        note += " What costs most: where most of 'what this rule costs you' comes from."
    return Table(columns, tuple(rows), note, strong=(0,))


def _of_hundred(chance: float) -> str:
    if 0 < chance < 0.005:
        return "under 1"
    if 0.995 <= chance < 1:
        return "over 99"
    return f"{round(100 * chance)}"


def _settings(plan: Plan) -> tuple[Block, ...]:
    """Parameters of rules that the workbook sets otherwise than published."""
    labels = {(term.rule, term.parameter): term for term in RULE_TERMS}
    items = []
    for setting in plan.household.rule_settings:
        term = labels[setting.rule, setting.parameter]
        if setting.value != term.default:
            show = percent if term.kind == "share" else number
            items.append(f"{term.label} {show(setting.value, 2)} instead of {show(term.default, 2)}")
    if not items:
        return ()
    return (Text(f"Set by your adviser, not as published: {'; '.join(items)}.", "note"),)


def _references(plan: Plan) -> tuple[Block, ...]:
    lines = [f"{_name(plan, s)}: {s.reference}." for s in plan.strategies[1:] if s.reference]
    return (Heading("Where the rules come from", 3), Text(" ".join(lines), "note")) if lines else ()


def what_if(plan: Plan) -> tuple[Block, ...]:
    """Part 8: changed circumstances beside the plan."""
    heading = Heading("What if", 1, 8)
    if not plan.what_ifs:
        return (
            heading,
            Text(
                "No what-ifs were run for this plan, so it does not show how it would change with other "
                "assumptions."
            ),
        )
    money = Money(plan.household.currency)
    has_level = any(w.level_spending is not None for w in plan.what_ifs)
    columns = [
        Column("If", "left"),
        Column("Spending this year"),
        Column("Change"),
        Column("Late in life, low"),
        Column("Of 100 futures, bills not paid in"),
    ]
    if has_level:
        columns.append(Column("Worth a steady income of"))
    columns.append(Column("Left for heirs, middle"))
    base = plan.this_year.spending
    rows = []
    for result in plan.what_ifs:
        change = result.spending_this_year - base
        cells = [
            capitalised(result.name),
            money.about_cell(result.spending_this_year),
            _change(change, money),
            money.about_cell(result.spending_p10_late),
            _of_hundred(result.chance_below_essential),
        ]
        if has_level:
            cells.append("" if result.level_spending is None else money.about_cell(result.level_spending))
        rows.append((*cells, money.about_cell(result.estate_p50)))
    note = (
        f"In {money.unit}, today's money; spending and steady income are a year's, after tax. Each line "
        "is a new plan for the changed "
        f"case, compared with {money.about(base)} of spending this year. 'Late in life, low': in one of "
        "ten cases spending "
        "late in the plan is less than this. 'Left for heirs' is after their tax. The assumptions are in "
        "part 10."
    )
    return (
        heading,
        Text(
            "How the plan would change if one thing were different. It helps to see which assumption "
            "matters most."
        ),
        Table(tuple(columns), tuple(rows), note),
        Text(futures_tested(plan.sources.n_paths, plan.household.is_couple), "note"),
        *required_wording(plan),
    )


def _change(change: float, money: Money) -> str:
    text = money.about_cell(change)
    return f"+{text}" if change > 0 and text[0].isdigit() else text.replace("-", MINUS)


def how_close(plan: Plan) -> tuple[Block, ...]:
    """Part 9: the bound, in one sentence for the client and a line for the analyst."""
    heading = Heading("How close to the best possible", 1, 9)
    if plan.proof is None:
        text = (
            "The proof of how close this plan is to the best possible was not computed, so we make no claim "
            "about it here."
        )
        return (heading, Text(text), Facts((_check(plan),)))
    money, proof = Money(plan.household.currency), plan.proof
    # The bound is above the plan's value by what a loss of `gap_money` would take from it.
    sentence = (
        "On these assumptions, even the best possible way of spending, withdrawing and investing in the "
        "portfolios of part 10 could gain you no more than a loss of about "
        f"{money.about(proof.gap_money)} of your savings ({percent(proof.gap_share, 2)} of what you have) "
        "would cost you. This says nothing about whether the assumptions are right."
    )
    analyst = (
        f"Gap {percent(proof.gap_share, 3)} of savings (standard error "
        f"{percent(proof.gap_standard_error, 3)}). {PROOF_FOR_ANALYSTS}"
    )
    if proof.terms:
        terms = "; ".join(f"{name} {percent(value, 3)}" for name, value in proof.terms)
        analyst += f" By term, share of savings: {terms}."
    return (heading, Facts((("For you", sentence), ("For analysts", analyst), _check(plan))))


def _check(plan: Plan) -> tuple[str, str]:
    return (
        "Check",
        "The plan followed through the futures tested was worth "
        f"{percent(plan.value_share_simulated, 2)} of what the calculation backwards from the end of life "
        "had promised; about 100% is right.",
    )

"""Money of the year that is acted on: by month, by account, trades and tax to withhold; all add up."""

from dataclasses import replace
from datetime import date

import plan_builder
import pytest
from odd_households import odd_plan

from planner.plan_record import Plan
from planner.reports.blocks import Table
from planner.reports.figures import rounded
from planner.reports.month_money import even, months_after, year_by_month
from planner.reports.section_instructions import instructions, tax_withheld
from planner.reports.year_money import account_trades, grouped_incomes, tax_year_end, year_money

PLANS = [plan_builder.build(), plan_builder.build(plan_builder.single()), *map(odd_plan, range(30))]


@pytest.mark.parametrize("plan", PLANS, ids=range(len(PLANS)))
def test_twelve_months_add_up_to_the_year_line_by_line(plan):
    year, by_month = year_money(plan), year_by_month(plan)
    months = by_month.months
    assert len(months) == 12
    for month in months:
        assert month.spending == month.income + sum(month.withdrawals) - month.tax - month.kept
    assert sum(m.spending for m in months) == year.spending
    assert sum(m.tax for m in months) == year.tax
    assert sum(m.kept for m in months) == year.kept
    assert sum(m.income for m in months) == sum(x.amount for x in year.lines if x.account is None)
    from_accounts = [x.amount for x in year.lines if x.account is not None]
    assert [sum(column) for column in zip(*(m.withdrawals for m in months), strict=True)] == from_accounts


@pytest.mark.parametrize("plan", PLANS, ids=range(len(PLANS)))
def test_the_least_leaves_each_account_in_time(plan):
    """Payments up to the end of the tax year reach what is still due, or the whole withdrawal."""
    by_month = year_by_month(plan)
    end = tax_year_end(plan.household)
    for i, name in enumerate(by_month.accounts):
        account = next((a for a in plan.this_year.accounts if a.account == name), None)
        if account is None:
            continue
        paid = sum(m.withdrawals[i] for m in by_month.months if m.day <= end)
        whole = sum(m.withdrawals[i] for m in by_month.months)
        assert paid >= min(whole, account.still_due)


def test_payments_come_early_only_where_the_least_asks_for_it():
    """On 31 December one payment is in time: it carries all that is due."""
    plan = plan_builder.build()
    assert not year_by_month(plan).brought_forward
    late = plan_builder.build(replace(plan_builder.couple(), plan_date=date(2026, 12, 31)))
    by_month = year_by_month(late)
    assert by_month.brought_forward
    (due,) = [a for a in late.this_year.accounts if a.still_due > 0]
    column = [m.withdrawals[by_month.accounts.index(due.account)] for m in by_month.months]
    assert column[0] >= due.still_due
    assert max(column[1:]) - min(column[1:]) <= 1


@pytest.mark.parametrize(
    ("day", "n", "expected"),
    [
        (date(2026, 1, 31), 1, date(2026, 2, 28)),
        (date(2024, 1, 31), 1, date(2024, 2, 29)),
        (date(2026, 12, 5), 1, date(2027, 1, 5)),
        (date(2026, 3, 2), 11, date(2027, 2, 2)),
    ],
)
def test_the_same_day_months_later(day, n, expected):
    assert months_after(day, n) == expected


@pytest.mark.parametrize("total", [0, 1, 11, 12, 13, 99_999, -7])
def test_even_parts_differ_by_one_at_most(total):
    parts = even(total, 12)
    assert sum(parts) == total
    assert max(parts) - min(parts) <= 1


def shares_of(plan: Plan, name: str | None) -> tuple[float, ...]:
    return next(p.weights for p in plan.household.portfolios if p.name == name)


@pytest.mark.parametrize("plan", PLANS, ids=range(len(PLANS)))
def test_after_its_trades_an_account_is_in_this_years_portfolio(plan):
    """What was held, with the trades, is the target's share of what stays.

    Within three units: rounding of a trade, of what leaves, and of the sum on page one.
    """
    accounts = {a.account: a for a in plan.this_year.accounts}
    target = shares_of(plan, plan.this_year.portfolio)
    for trade in account_trades(plan):
        account = accounts[trade.account]
        assert sum(trade.amounts) == -trade.leaves
        withdrawn = sum(x.amount for x in year_money(plan).lines if x.account == trade.account)
        assert trade.leaves == withdrawn + rounded(account.convert)
        held = [share * account.balance for share in shares_of(plan, account.held_now)]
        stays = account.balance - max(account.sell, account.withdraw) - account.convert
        for before, bought, share in zip(held, trade.amounts, target, strict=True):
            assert before + bought == pytest.approx(share * max(stays, 0.0), abs=3.0)


def test_an_account_in_which_nothing_moves_has_no_trade():
    plan = plan_builder.build()
    quiet = tuple(
        replace(a, held_now="Balanced", withdraw=0.0, sell=0.0, convert=0.0) for a in plan.this_year.accounts
    )
    still = replace(plan, this_year=replace(plan.this_year, accounts=quiet))
    assert account_trades(still) == ()
    assert "No trades are needed." in str(instructions(still))


@pytest.mark.parametrize("plan", PLANS, ids=range(len(PLANS)))
def test_tax_is_withheld_from_tax_deferred_payments_and_never_more_than_they_are(plan):
    withheld = tax_withheld(plan)
    accounts = {a.account: a for a in plan.this_year.accounts}
    for name, amount in withheld.items():
        assert accounts[name].type == "tax-deferred"
        assert 0 <= amount <= accounts[name].withdraw + 1
    paid = sum(a.withdraw for a in accounts.values() if a.type == "tax-deferred" and a.withdraw >= 1)
    assert sum(withheld.values()) in (0, min(year_money(plan).tax, int(paid)))


def test_many_incomes_are_one_line_on_page_one():
    plan = plan_builder.build()
    lines = year_money(plan).lines
    assert grouped_incomes(lines) == lines
    many = (*lines, *lines)
    grouped = grouped_incomes(many)
    assert grouped[0].label == "Pensions, work and other income"
    assert sum(x.amount for x in grouped) == sum(x.amount for x in many)
    assert sum(x.account is None for x in grouped) == 1


def test_every_sum_row_of_the_instructions_adds_up():
    """The rows over a strong last row sum to it, column by column, as a client would add them."""

    def amount(text: str) -> int | None:
        plain = text.replace(",", "").replace("–", "-")
        if text == "–":
            return 0
        return int(plain) if plain.lstrip("-").isdigit() else None

    checked = 0
    for block in instructions(plan_builder.build()):
        if isinstance(block, Table) and block.strong == (len(block.rows) - 1,):
            for column in zip(*block.rows, strict=True):
                values = [amount(cell) for cell in column]
                if None not in values:
                    assert sum(values[:-1]) == values[-1]
                    checked += 1
    assert checked >= 10

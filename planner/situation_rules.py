"""Cautions that a client's situation calls for, in the words of the tax rules in use.

What to say differs by country, so it stands in the rules' file (`[cautions]` in
``planner/data/taxes``); here is when it applies. All are warnings.
"""

from __future__ import annotations

from collections.abc import Iterator

from planner import shipped
from planner.diagnostics import Diagnostic
from planner.household import AccountType, Household
from planner.tax_assessment import TaxRules


def situation_problems(household: Household) -> Iterator[Diagnostic]:
    """Yield what a household with shipped tax rules should be told; nothing for other rules."""
    if household.tax_rules not in shipped.tax_rule_names() or household.tax_rules == "none":
        return
    from planner import taxes  # local: brings in numpy

    rules = taxes.load(household.tax_rules)
    yield from _old_rules(household, rules)
    said = rules.cautions or {}
    if "minimum_above_needs" in said and _least(household, rules) > _needs(household):
        yield Diagnostic("minimum-above-needs", "spending.essential", said["minimum_above_needs"], "warning")
    if "paid_in_after_access" in said:
        access = rules.access_age(household.plan_date.year)
        for index, account in enumerate(household.accounts):
            age = _age(household, account.owner)
            drawn_on = account.taken_this_year > 0 or (
                access is not None and age is not None and age >= access
            )
            if account.type is AccountType.TAX_DEFERRED and account.paid_in > 0 and drawn_on:
                path = f"accounts[{index}].paid_in"
                yield Diagnostic("paid-in-after-access", path, said["paid_in_after_access"], "warning")
    deferred = any(a.type is AccountType.TAX_DEFERRED and a.balance > 0 for a in household.accounts)
    if "estate_without_rate" in said and deferred and household.preferences.heirs_tax_rate == 0:
        yield Diagnostic(
            "estate-without-rate", "preferences.heirs_tax_rate", said["estate_without_rate"], "warning"
        )


def _old_rules(household: Household, rules: TaxRules) -> Iterator[Diagnostic]:
    plan_date = household.plan_date
    law_year = plan_date.year - ((plan_date.month, plan_date.day) < rules.year_starts)
    if law_year > rules.year > 0:
        message = (
            f"{rules.name} holds the law of {rules.year}; on the plan date that of {law_year} applies: "
            "amounts are taken as they were, so check this year's tax with a tax preparer"
        )
        yield Diagnostic("tax-rules-old", "tax_rules", message, "warning")


def _least(household: Household, rules: TaxRules) -> float:
    """Return what must be taken this year from tax-deferred accounts."""
    least = 0.0
    for account in household.accounts:
        person = next((p for p in household.people if p.name == account.owner), None)
        if account.type is AccountType.TAX_DEFERRED and person is not None:
            age, born = person.age_on(household.plan_date), person.date_of_birth.year
            divisor = rules.minimum_distribution_divisor(age, born)
            if divisor is not None:
                at_year_end = account.balance_last_year_end
                least += (account.balance if at_year_end is None else at_year_end) / divisor
    return least


def _needs(household: Household) -> float:
    """Return essential spending beyond the incomes that have started and not ended."""
    incomes = 0.0
    for income in household.incomes:
        age = _age(household, income.owner)
        if age is not None and income.from_age <= age < (income.to_age or float("inf")):
            incomes += income.amount
    return max(0.0, household.spending.essential - incomes)


def _age(household: Household, name: str) -> int | None:
    return next((p.age_on(household.plan_date) for p in household.people if p.name == name), None)

"""Fifty odd households, the same every time: names, scripts, sizes and currencies that break layouts."""

import random
from dataclasses import replace
from datetime import date

import plan_builder

from planner.household import (
    Account,
    AccountType,
    AssetClass,
    Income,
    IncomeKind,
    MarketAssumptions,
    Portfolio,
)
from planner.plan_record import Plan

N_HOUSEHOLDS = 50
NAMES = (
    "Al",
    "Wilhelmina-Alexandrina Featherstonehaugh-Cholmondeley of Upper & <Lower> Slaughter",
    "X" * 80,
    "Ελένη Παπαδοπούλου-Κωνσταντινίδου",
    "Иван Сергеевич Достопримечательный",
    "אבי \u200fכהן\u202e (third)",
    "<b>Bold</b> & <para>Sons</para> &amp; Co.",
    "山田太郎",
    "O'Brien\u00a0\u00adde la Cruz y Núñez-Żółć",
    "=HYPERLINK(1)",
    "a very ordinary name",
    "100 % of 50 % & more",
)
# (currency, what a unit of the invented plan's money becomes)
CURRENCIES = (("JPY", 150), ("GBP", 1), ("EUR", 1), ("USD", 1), ("IDR", 16_000), ("CHF", 1), ("INR", 80))
ACCOUNT_TYPES = tuple(AccountType)


def odd_plan(seed: int) -> Plan:
    """An invented plan for one odd household."""
    draw = random.Random(seed)
    currency, scale = CURRENCIES[seed % len(CURRENCIES)]
    scale *= draw.choice((0.02, 1.0, 1.0, 40.0))
    whole = (plan_builder.couple if draw.random() < 0.6 else plan_builder.single)(currency, float(scale))
    texts = [name[:78] for name in draw.sample(NAMES, len(NAMES))]
    people = tuple(replace(p, name=f"{texts[i]}{i}") for i, p in enumerate(whole.people))
    owners = [p.name for p in people]
    n_classes = draw.randint(1, 7)
    classes = tuple(
        AssetClass(f"{i} {draw.choice(NAMES)}"[:60], 0.03 + 0.005 * i, 0.02 + 0.02 * i)
        for i in range(n_classes)
    )
    correlations = tuple(tuple(float(i == j) for j in range(n_classes)) for i in range(n_classes))
    portfolios = tuple(
        Portfolio(
            name if name == "Balanced" else f"{i} {draw.choice(NAMES)}"[:70],
            tuple(float(j == (i if name == "Balanced" else 0) % n_classes) for j in range(n_classes)),
            0.002,
        )
        for i, name in enumerate(("Balanced", *[""] * draw.randint(0, 4)))
    )
    accounts = []
    for i in range(draw.randint(1, 6)):
        kind = draw.choice(ACCOUNT_TYPES)
        deferred = kind is AccountType.TAX_DEFERRED
        balance = draw.choice((0.0, 900.0, 150_000.0, 1_250_000.0)) * scale
        accounts.append(
            Account(
                f"{i} {draw.choice(NAMES)}"[:80],
                draw.choice(owners),
                kind,
                balance,
                held_now=draw.choice((None, *(p.name for p in portfolios))),
                balance_last_year_end=balance if deferred and draw.random() < 0.5 else None,
                taken_this_year=balance / 100 if deferred else 0.0,
            )
        )
    incomes = tuple(
        Income(f"{i} {draw.choice(NAMES)}"[:80], draw.choice(owners), draw.choice(KINDS), 7_000.0 * scale, 60)
        for i in range(draw.randint(0, 6))
    )
    long_text = "What has to be said at length, and once more. " * draw.choice((1, 1, 12, 60))
    practice = replace(
        plan_builder.PRACTICE,
        firm=draw.choice(NAMES),
        adviser=draw.choice(NAMES),
        aims=draw.choice(("", "Aims.\nOn two lines.", long_text)),
        local_caution=draw.choice(("", long_text)),
        required_wording=draw.choice(("", "Exactly  as typed\n& <so>.", long_text)),
    )
    household = replace(
        whole,
        client_name=texts[-1],
        plan_date=draw.choice((date(2026, 3, 2), date(2024, 2, 29), date(2025, 12, 31))),
        people=people,
        accounts=tuple(accounts),
        incomes=incomes,
        markets=MarketAssumptions(0.025, classes, correlations),
        portfolios=portfolios,
        spending=replace(whole.spending, cash_aside=0.0),
        practice=practice,
    )
    return plan_builder.build(household, n_years=draw.choice((1, 2, 17, 45, 70)))


KINDS = (IncomeKind.PENSION, IncomeKind.ANNUITY, IncomeKind.WAGES, IncomeKind.RENT)

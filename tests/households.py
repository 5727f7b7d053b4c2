"""Invented households for tests, built without a workbook."""

from datetime import date

from planner.household import (
    Account,
    AccountType,
    AssetClass,
    Household,
    Income,
    IncomeKind,
    MarketAssumptions,
    OneOff,
    Person,
    Portfolio,
    Preferences,
    Spending,
)

MARKETS = MarketAssumptions(
    0.025,
    (AssetClass("Bonds", 0.04, 0.05, 0.03), AssetClass("Shares", 0.065, 0.16, 0.02)),
    ((1.0, 0.1), (0.1, 1.0)),
)
PORTFOLIOS = (
    Portfolio("Calm", (0.8, 0.2), 0.003),
    Portfolio("Middle", (0.5, 0.5), 0.004),
    Portfolio("Growth", (0.2, 0.8), 0.005),
)


def couple(**changes: object) -> Household:
    """Two people of 74 and 71 with every type of account; minimum distributions are due for the first."""
    fields: dict[str, object] = {
        "client_name": "Ola and Per Sample",
        "plan_date": date(2026, 1, 1),
        "currency": "USD",
        "tax_rules": "us-federal-2026",
        "people": (
            Person("Ola", date(1951, 5, 20), "female", "us-ssa-2022"),
            Person("Per", date(1954, 9, 2), "male", "us-ssa-2022", 0.9),
        ),
        "accounts": (
            Account("Brokerage", "joint", AccountType.TAXABLE, 160_000.0, 110_000.0, "Calm"),
            Account("Savings", "Per", AccountType.TAXABLE, 40_000.0),
            Account(
                "Ola's pot",
                "Ola",
                AccountType.TAX_DEFERRED,
                300_000.0,
                held_now="Middle",
                balance_last_year_end=290_000.0,
                taken_this_year=4_000.0,
            ),
            Account("Per's pot", "Per", AccountType.TAX_DEFERRED, 150_000.0),
            Account("Tax-free", "Ola", AccountType.TAX_FREE, 90_000.0),
        ),
        "incomes": (
            Income("State pension Ola", "Ola", IncomeKind.STATE_PENSION, 22_000.0, 67.0),
            Income("State pension Per", "Per", IncomeKind.STATE_PENSION, 16_000.0, 67.0),
            Income("Part-time work", "Per", IncomeKind.WAGES, 8_000.0, 60.0, 73.0),
        ),
        "one_offs": (OneOff("New roof", 2026, -12_000.0),),
        "spending": Spending(52_000.0, 70_000.0, 110_000.0, cash_aside=15_000.0),
        "markets": MARKETS,
        "portfolios": PORTFOLIOS,
        "adviser_fee": 0.005,
    }
    return Household(**{**fields, **changes})  # type: ignore[arg-type]


def single(**changes: object) -> Household:
    """One person of 80 with a pension and one taxable account; no tax."""
    fields: dict[str, object] = {
        "client_name": "Lin Sample",
        "plan_date": date(2026, 1, 1),
        "currency": "EUR",
        "tax_rules": "none",
        "people": (Person("Lin", date(1945, 3, 3), "female", "us-ssa-2022"),),
        "accounts": (Account("Deposit", "Lin", AccountType.TAXABLE, 250_000.0),),
        "incomes": (Income("Pension", "Lin", IncomeKind.PENSION, 14_000.0, 65.0),),
        "spending": Spending(20_000.0),
        "markets": MARKETS,
        "portfolios": PORTFOLIOS,
        "preferences": Preferences(risk_aversion=3.0),
    }
    return Household(**{**fields, **changes})  # type: ignore[arg-type]

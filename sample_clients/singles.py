"""Invented single clients."""

from __future__ import annotations

from datetime import date

from common import markets, portfolios, practice

from planner.workbook.writing import Values

SINGLE_WITH_PENSION: Values = {
    "Household": {
        "Client name": "Marta Lindqvist",
        "Plan date": date(2026, 3, 2),
        "Currency": "USD",
        "Tax rules": "us-federal-2026",
        "Home value": 310_000,
    },
    "People": {
        "people": [
            {
                "Person": "Marta",
                "Date of birth": date(1958, 9, 21),
                "Sex": "female",
                "Life table": "us-ssa-2022",
                "Death rates compared with the table": 0.85,
            }
        ]
    },
    "Accounts": {
        "accounts": [
            {
                "Account": "Rollover account",
                "Owner": "Marta",
                "Type": "tax-deferred (pension pot, IRA, 401(k))",
                "Balance": 420_000,
                "Held now": "40 % shares",
                "Balance last year-end": 412_000,
            },
            {
                "Account": "Brokerage",
                "Owner": "Marta",
                "Type": "taxable (general account)",
                "Balance": 85_000,
                "Cost basis": 61_000,
                "Held now": "40 % shares",
            },
        ]
    },
    "Income": {
        "incomes": [
            {
                "Income": "State pension",
                "Owner": "Marta",
                "Kind": "state pension",
                "Amount a year": 25_200,
                "From age": 67,
            },
            {
                "Income": "School pension",
                "Owner": "Marta",
                "Kind": "pension",
                "Amount a year": 14_400,
                "From age": 65,
                "Yearly rise": "none",
            },
        ]
    },
    "Spending": {
        "Essential spending a year": 41_000,
        "Wanted spending a year": 56_000,
        "Most you would spend a year": 80_000,
        "Cash kept aside": 10_000,
        "Care cost a year": 60_000,
        "Care from age": 86,
        "Care years": 3,
        "Care for": "first",
    },
    "Markets": markets(),
    "Portfolios": portfolios(),
    "Preferences": {"Accepts a one-third cut": "no", "Accepts the second gamble": "yes"},
    "Tax": {"Extra income tax rate": 0.03, "Also on state pensions": "no"},
    "What-ifs": {
        "what-ifs": [
            {
                "Name": "Spend less on bills",
                "Change": "Spending/Essential spending a year",
                "New value": 36_000,
            },
            {
                "Name": "Sell the brokerage account",
                "Change": "Accounts/Brokerage/Balance",
                "New value": 60_000,
            },
            {
                "Name": "Sell the brokerage account",
                "Change": "Accounts/Brokerage/Cost basis",
                "New value": None,
            },
        ]
    },
    "Practice": practice(
        aims="Keep the flat, visit her sister abroad once a year, and never worry about the bills.",
        agreed_risk_level="Cautious to balanced (3 of 7 on the firm's scale), agreed on 12 February 2026.",
        capacity_for_loss="High for the bills: the two pensions cover nearly all of them. A fall in "
        "savings would "
        "mean fewer journeys.",
        why_this_suits="Pensions carry the bills; savings are spent evenly over a long life and the "
        "share in markets "
        "stays within the agreed level.",
        drawbacks="The school pension does not rise with prices, so more has to come from savings later.",
        alternatives_considered="A lifelong annuity for half of the rollover account; set aside for now "
        "because it cannot be undone.",
    ),
}

EARLY_RETIREE: Values = {
    "Household": {
        "Client name": "Joel Okonjo",
        "Plan date": date(2026, 4, 1),
        "Currency": "USD",
        "Tax rules": "us-federal-2026",
    },
    "People": {
        "people": [
            {
                "Person": "Joel",
                "Date of birth": date(1972, 1, 17),
                "Sex": "male",
                "Life table": "us-ssa-2022",
                "Death rates compared with the table": 0.8,
                "Plan at least to age": 90,
            }
        ]
    },
    "Accounts": {
        "accounts": [
            {
                "Account": "Savings and funds",
                "Owner": "Joel",
                "Type": "taxable",
                "Balance": 520_000,
                "Cost basis": 350_000,
                "Held now": "80 % shares",
            },
            {
                "Account": "Old work plan",
                "Owner": "Joel",
                "Type": "tax-deferred",
                "Balance": 640_000,
                "Held now": "80 % shares",
                "Not before age": "59y6m",
            },
            {
                "Account": "Tax-free savings",
                "Owner": "Joel",
                "Type": "tax-free",
                "Balance": 95_000,
                "Held now": "80 % shares",
                "Not before age": "59y6m",
            },
        ]
    },
    "Income": {
        "incomes": [
            {
                "Income": "Consulting",
                "Owner": "Joel",
                "Kind": "wages",
                "Amount a year": 18_000,
                "From age": 54,
                "To age": 58,
            },
            {
                "Income": "Flat let out",
                "Owner": "Joel",
                "Kind": "rent",
                "Amount a year": 9_600,
                "From age": 54,
                "To age": 80,
            },
            {
                "Income": "State pension",
                "Owner": "Joel",
                "Kind": "state pension",
                "Amount a year": 23_400,
                "From age": 67,
            },
        ]
    },
    "One-offs": {
        "one-offs": [
            {"Item": "Health cover until 65", "Year": 2026, "Last year": 2036, "Amount": -6_500},
            {"Item": "A year at sea", "Year": 2029, "Amount": -40_000, "Counts": "only as a what-if"},
        ]
    },
    "Spending": {
        "Essential spending a year": 33_000,
        "Wanted spending a year": 47_000,
        "spending by age": [
            {"From age": 75, "Spending compared with now": 0.95},
            {"From age": 85, "Spending compared with now": 0.9},
        ],
    },
    "Markets": markets(),
    "Portfolios": portfolios(fee=0.004),
    "Preferences": {"Risk aversion": 3},
    "Tax": {"Extra income tax rate": 0},
}

LATE_RETIRED: Values = {
    "Household": {
        "Client name": "Walter Ostrander",
        "Plan date": date(2026, 2, 16),
        "Currency": "USD",
        "Tax rules": "us-federal-2026",
        "Home value": 420_000,
    },
    "People": {
        "people": [
            {
                "Person": "Walter",
                "Date of birth": date(1949, 6, 3),
                "Sex": "male",
                "Life table": "us-ssa-2022",
                "Death rates compared with the table": 0.85,
            }
        ]
    },
    "Accounts": {
        "accounts": [
            {
                "Account": "Rollover account",
                "Owner": "Walter",
                "Type": "tax-deferred (pension pot, IRA, 401(k))",
                "Balance": 1_150_000,
                "Held now": "40 % shares",
                "Balance last year-end": 1_162_000,
                "Taken so far this year": 8_000,
            },
            {
                "Account": "Second plan",
                "Owner": "Walter",
                "Type": "tax-deferred (pension pot, IRA, 401(k))",
                "Balance": 210_000,
                "Held now": "40 % shares",
                "Balance last year-end": 207_500,
            },
            {
                "Account": "Bank and brokerage",
                "Owner": "Walter",
                "Type": "taxable (general account)",
                "Balance": 130_000,
                "Cost basis": 118_000,
                "Held now": "20 % shares",
            },
            {
                "Account": "Tax-free account",
                "Owner": "Walter",
                "Type": "tax-free (ISA, Roth)",
                "Balance": 40_000,
                "Held now": "60 % shares",
            },
        ]
    },
    "Income": {
        "incomes": [
            {
                "Income": "State pension",
                "Owner": "Walter",
                "Kind": "state pension",
                "Amount a year": 33_600,
                "From age": 70,
            }
        ]
    },
    "Spending": {
        "Essential spending a year": 48_000,
        "Wanted spending a year": 75_000,
        "Cash kept aside": 25_000,
        "Care cost a year": 95_000,
        "Care from age": 88,
        "Care years": 2,
        "Care for": "first",
    },
    "Markets": markets(),
    "Portfolios": portfolios((0, 20, 40, 60), fee=0.006),
    "Preferences": {
        "Risk aversion": 5,
        "Wish to leave": 150_000,
        "Heirs' tax rate": 0.22,
        "Moves from tax-deferred to tax-free allowed": "yes",
    },
    "Tax": {"Extra income tax rate": "4.5%", "Also on state pensions": "no"},
    "What-ifs": {
        "what-ifs": [
            {
                "Name": "No moves to tax-free",
                "Change": "Preferences/Moves from tax-deferred to tax-free allowed",
                "New value": "no",
            },
        ]
    },
    "Last year": {"Spent": 71_500, "Paid in": 0, "One-offs received": 0},
    "Practice": practice(
        aims="Stay in the house with help when needed; leave something to two nieces.",
        agreed_risk_level="Cautious (2 of 7 on the firm's scale), agreed on 20 January 2026.",
        capacity_for_loss="High: the state pension and the least that must be taken exceed the bills.",
        why_this_suits="Tax is spread over the years, and money is moved while the tax band has room.",
        drawbacks="Moves to tax-free cost tax now and cannot be undone.",
        alternatives_considered="Taking only the least required; gifts in his lifetime.",
    ),
}

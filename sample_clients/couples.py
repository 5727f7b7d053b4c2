"""Invented couples."""

from __future__ import annotations

from datetime import date

from common import markets, portfolios, practice

from planner.workbook.writing import Values

COUPLE_THREE_ACCOUNTS: Values = {
    "Household": {
        "Client name": "Ana and Tom Keller",
        "Plan date": date(2026, 1, 5),
        "Currency": "USD",
        "Tax rules": "us-federal-2026",
        "Couple is": "married",
        "Home value": 540_000,
    },
    "People": {
        "people": [
            {
                "Person": "Ana",
                "Date of birth": date(1962, 4, 11),
                "Sex": "female",
                "Life table": "us-ssa-2022",
                "Death rates compared with the table": 0.85,
            },
            {
                "Person": "Tom",
                "Date of birth": date(1960, 11, 30),
                "Sex": "male",
                "Life table": "us-ssa-2022",
                "Death rates compared with the table": 0.9,
            },
        ]
    },
    "Accounts": {
        "accounts": [
            {
                "Account": "Joint brokerage",
                "Owner": "joint",
                "Type": "taxable (general account)",
                "Balance": 280_000,
                "Cost basis": 190_000,
                "Held now": "60 % shares",
            },
            {
                "Account": "Ana's work plan",
                "Owner": "Ana",
                "Type": "tax-deferred (pension pot, IRA, 401(k))",
                "Balance": 460_000,
                "Held now": "60 % shares",
                "Balance last year-end": 455_000,
            },
            {
                "Account": "Tom's rollover",
                "Owner": "Tom",
                "Type": "tax-deferred (pension pot, IRA, 401(k))",
                "Balance": 240_000,
                "Held now": "60 % shares",
                "Balance last year-end": 236_000,
            },
            {
                "Account": "Ana's tax-free",
                "Owner": "Ana",
                "Type": "tax-free (ISA, Roth)",
                "Balance": 120_000,
                "Held now": "80 % shares",
            },
        ]
    },
    "Income": {
        "incomes": [
            {
                "Income": "Ana's state pension",
                "Owner": "Ana",
                "Kind": "state pension",
                "Amount a year": 27_600,
                "From age": 67,
                "Continues to partner": "larger of the two",
            },
            {
                "Income": "Tom's state pension",
                "Owner": "Tom",
                "Kind": "state pension",
                "Amount a year": 21_000,
                "From age": "66y8m",
                "Continues to partner": "larger of the two",
            },
            {
                "Income": "Ana's part-time work",
                "Owner": "Ana",
                "Kind": "wages",
                "Amount a year": 24_000,
                "From age": 63,
                "To age": 66,
            },
            {
                "Income": "Tom's works pension",
                "Owner": "Tom",
                "Kind": "pension",
                "Amount a year": 12_000,
                "From age": 65,
                "Yearly rise": "prices up to 2.5%",
                "Continues to partner": 0.5,
            },
        ]
    },
    "Start choices": {
        "start choices": [
            {"Income": "Ana's state pension", "Start age": 65, "Amount a year": 23_900},
            {"Income": "Ana's state pension", "Start age": 70, "Amount a year": 34_200},
        ]
    },
    "One-offs": {
        "one-offs": [
            {
                "Item": "Mortgage",
                "Year": 2026,
                "Last year": 2030,
                "Amount": -14_400,
                "Rises with prices": "no",
            },
            {"Item": "New roof", "Year": 2028, "Amount": -22_000},
            {
                "Item": "Help with a first home",
                "Year": 2029,
                "Amount": -50_000,
                "Counts": "only as a what-if",
            },
        ]
    },
    "Spending": {
        "Essential spending a year": 58_000,
        "Wanted spending a year": 78_000,
        "Survivor needs, share of couple's": 0.7,
        "Cash kept aside": 20_000,
        "Care cost a year": 85_000,
        "Care from age": 87,
        "Care years": 3,
        "Care for": "last survivor",
        "spending by age": [{"From age": 80, "Spending compared with now": 0.92}],
    },
    "Markets": markets(),
    "Portfolios": portfolios(),
    "Preferences": {"Risk aversion": 4, "Moves from tax-deferred to tax-free allowed": "no"},
    "Tax": {"Extra income tax rate": 0.04, "Also on state pensions": "no"},
    "What-ifs": {
        "what-ifs": [
            {
                "Name": "Ana's state pension at 70",
                "Change": "Income/Ana's state pension/From age",
                "New value": 70,
            },
            {
                "Name": "Ana's state pension at 70",
                "Change": "Income/Ana's state pension/Amount a year",
                "New value": 34_200,
            },
            {"Name": "Prices rise faster", "Change": "Markets/Inflation", "New value": "3.5%"},
        ]
    },
    "Practice": practice(
        aims="Stop work by stages, keep the house, and help the children when it is safe to do so.",
        agreed_risk_level="Balanced (4 of 7 on the firm's scale), agreed on 9 December 2025.",
        capacity_for_loss="Medium: until both state pensions run, most of the bills are paid from savings.",
        why_this_suits="Savings bridge the years before the state pensions; spending then rests on "
        "lifelong income.",
        drawbacks="A bad first few years would fall together with the largest withdrawals.",
        alternatives_considered="Working full time to 67; a lifelong annuity at 70 for part of the savings.",
    ),
}

COUPLE_LEGACY: Values = {
    "Household": {
        "Client name": "Ines and Paul Varga",
        "Plan date": date(2026, 5, 4),
        "Currency": "USD",
        "Tax rules": "us-federal-2026",
        "Couple is": "married",
        "Home value": 780_000,
    },
    "People": {
        "people": [
            {
                "Person": "Ines",
                "Date of birth": date(1959, 8, 25),
                "Sex": "female",
                "Life table": "us-ssa-2022",
                "Death rates compared with the table": 0.8,
            },
            {
                "Person": "Paul",
                "Date of birth": date(1957, 2, 9),
                "Sex": "male",
                "Life table": "us-ssa-2022",
                "Death rates compared with the table": 0.85,
            },
        ]
    },
    "Accounts": {
        "accounts": [
            {
                "Account": "Joint account",
                "Owner": "joint",
                "Type": "taxable (general account)",
                "Balance": 350_000,
                "Cost basis": 290_000,
                "Held now": "40 % shares",
            },
            {
                "Account": "Paul's plan",
                "Owner": "Paul",
                "Type": "tax-deferred (pension pot, IRA, 401(k))",
                "Balance": 680_000,
                "Held now": "60 % shares",
                "Balance last year-end": 671_000,
                "Paid in a year": 12_000,
                "Paid in until age": 71,
            },
            {
                "Account": "Ines's tax-free",
                "Owner": "Ines",
                "Type": "tax-free (ISA, Roth)",
                "Balance": 140_000,
                "Held now": "60 % shares",
            },
        ]
    },
    "Income": {
        "incomes": [
            {
                "Income": "Ines's state pension",
                "Owner": "Ines",
                "Kind": "state pension",
                "Amount a year": 16_800,
                "From age": 66,
                "Continues to partner": "larger of the two",
            },
            {
                "Income": "Paul's state pension",
                "Owner": "Paul",
                "Kind": "state pension",
                "Amount a year": 38_400,
                "From age": 70,
                "Continues to partner": "larger of the two",
            },
            {
                "Income": "Paul's salary from the firm",
                "Owner": "Paul",
                "Kind": "wages",
                "Amount a year": 60_000,
                "From age": 65,
                "To age": 71,
            },
            {
                "Income": "Ines's annuity",
                "Owner": "Ines",
                "Kind": "annuity",
                "Amount a year": 7_200,
                "From age": 65,
                "Yearly rise": "2%",
                "Continues to partner": "50%",
                "Taxable share": 0.4,
            },
        ]
    },
    "One-offs": {
        "one-offs": [
            {"Item": "Sale of the firm", "Year": 2028, "Amount": 600_000, "Taxable share": 0.4},
            {"Item": "Wedding of a daughter", "Year": 2027, "Amount": -30_000},
        ]
    },
    "Spending": {
        "Essential spending a year": 72_000,
        "Wanted spending a year": 105_000,
        "Most you would spend a year": 160_000,
        "Survivor needs, share of couple's": "72%",
        "Cash kept aside": 40_000,
    },
    "Markets": markets(),
    "Portfolios": portfolios(fee=0.006),
    "Preferences": {
        "Accepts a one-third cut": "no",
        "Accepts the second gamble": "yes",
        "Wish to leave": 500_000,
        "Heirs' tax rate": "22%",
    },
    "Tax": {"Extra income tax rate": 0.05, "Also on state pensions": "no"},
    "What-ifs": {
        "what-ifs": [
            {
                "Name": "The firm sells for half",
                "Change": "One-offs/Sale of the firm/Amount",
                "New value": 300_000,
            },
            {"Name": "Leave nothing on purpose", "Change": "Preferences/Wish to leave", "New value": None},
        ]
    },
    "Practice": practice(
        aims="Sell the firm in good order, spend more in the first ten years, and leave half a million.",
        agreed_risk_level="Balanced (4 of 7 on the firm's scale), agreed on 2 April 2026.",
        capacity_for_loss="Medium to high: the state pensions pay about three quarters of the bills.",
        why_this_suits="The wish to leave money is kept apart from what is spent, and both are tested.",
        drawbacks="Much hangs on the sale of the firm; the plan is to be made anew if it falls through.",
        alternatives_considered="Selling the firm in instalments; life cover for the wish to leave money.",
    ),
}

# Bands of income tax 2025-26 for England, Wales and Northern Ireland with the personal allowance as
# a band of 0 %: GOV.UK, Income Tax rates and Personal Allowances, 2025. The taper of the allowance
# above 100,000 is left out. Full new State Pension 2025-26: 230.25 a week, GOV.UK, 2025 (x 52).
# The rates on interest, dividends and gains are round planning rates of this sample.
COUPLE_TAXED_EACH: Values = {
    "Household": {
        "Client name": "Priya and Alun Hartnoll",
        "Plan date": date(2026, 4, 7),
        "Currency": "GBP",
        "Tax rules": "own",
        "Couple is": "civil partners",
        "Home value": "£365,000",
    },
    "People": {
        "people": [
            {
                "Person": "Priya",
                "Date of birth": date(1961, 10, 2),
                "Sex": "female",
                "Life table": "uk-gompertz-2022-24",
                "Death rates compared with the table": 0.9,
            },
            {
                "Person": "Alun",
                "Date of birth": "1959-12-19",
                "Sex": "male",
                "Life table": "uk-gompertz-2022-24",
                "Death rates compared with the table": 0.9,
            },
        ]
    },
    "Accounts": {
        "accounts": [
            {
                "Account": "Priya's pension pot",
                "Owner": "Priya",
                "Type": "tax-deferred (pension pot, IRA, 401(k))",
                "Balance": "£310,000",
                "Held now": "60 % shares",
                "Not before age": 57,
            },
            {
                "Account": "Alun's pension pot",
                "Owner": "Alun",
                "Type": "tax-deferred (pension pot, IRA, 401(k))",
                "Balance": "£145,000",
                "Held now": "60 % shares",
                "Not before age": 57,
            },
            {
                "Account": "ISAs of both",
                "Owner": "Priya",
                "Type": "tax-free (ISA, Roth)",
                "Balance": "£118,000",
                "Held now": "60 % shares",
            },
            {
                "Account": "Savings account",
                "Owner": "joint",
                "Type": "taxable (general account)",
                "Balance": "£46,000",
                "Held now": "0 % shares",
            },
        ]
    },
    "Income": {
        "incomes": [
            {
                "Income": "Priya's state pension",
                "Owner": "Priya",
                "Kind": "state pension",
                "Amount a year": 11_973,
                "From age": 67,
            },
            {
                "Income": "Alun's state pension",
                "Owner": "Alun",
                "Kind": "state pension",
                "Amount a year": 10_400,
                "From age": 66,
            },
            {
                "Income": "Alun's council pension",
                "Owner": "Alun",
                "Kind": "pension",
                "Amount a year": 9_800,
                "From age": 60,
                "Continues to partner": 0.5,
            },
        ]
    },
    "Spending": {
        "Essential spending a year": "£29,500",
        "Wanted spending a year": "£42,000",
        "Survivor needs, share of couple's": 0.65,
        "Cash kept aside": "£10,000",
        "spending by age": [{"From age": 80, "Spending compared with now": "90%"}],
    },
    "Markets": markets(),
    "Portfolios": portfolios(fee=0.005),
    "Preferences": {"Risk aversion": 4, "Fallback income if savings are gone": 5_000},
    "Tax": {
        "Tax rate on interest and dividends": 0.1,
        "Gains tax rate": 0.1,
        "Taxable share of tax-deferred withdrawals": 0.75,
        "Taxed": "each person",
        "brackets": [
            {"Status": "single", "From": 0, "Rate": 0},
            {"Status": "single", "From": 12_570, "Rate": 0.2},
            {"Status": "single", "From": 50_270, "Rate": 0.4},
            {"Status": "single", "From": 125_140, "Rate": 0.45},
        ],
    },
    "Practice": practice(
        aims="Retire now, take the grandchildren to the coast every summer, keep the ISAs for late in life.",
        agreed_risk_level="Balanced (4 of 7 on the firm's scale), agreed on 18 March 2026.",
        capacity_for_loss="Medium: lifelong incomes pay all but a fifth of the bills from 2028.",
        why_this_suits="Both allowances are used each year before more is drawn from either pot.",
        drawbacks="Tax rules are simplified here: reliefs on savings income are left out.",
        alternatives_considered="Taking the tax-free quarter of both pots at once.",
    ),
}

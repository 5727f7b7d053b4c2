"""Write the sample clients anew from the workbook's layout: python sample_clients/make.py [FOLDER].

Every household here is invented. Market assumptions are round numbers chosen for the samples; they
come from no forecast.
"""

from __future__ import annotations

import sys
from datetime import date
from pathlib import Path

from planner.workbook.writing import Values, make_workbook

INVENTED = "This household is invented. Any likeness to real people is chance."

_MIXES = (0, 20, 40, 60, 80)


def _markets(inflation: float = 0.025) -> dict[str, object]:
    return {
        "Inflation": inflation,
        "asset classes": [
            {
                "Asset class": "Shares",
                "Expected return": 0.065,
                "Standard deviation": 0.16,
                "Income paid out a year": 0.02,
                "Shares": 1,
                "Bonds": 0.1,
                "Cash": 0,
            },
            {
                "Asset class": "Bonds",
                "Expected return": 0.04,
                "Standard deviation": 0.05,
                "Income paid out a year": 0.035,
                "Bonds": 1,
                "Cash": 0.2,
            },
            {
                "Asset class": "Cash",
                "Expected return": 0.03,
                "Standard deviation": 0.01,
                "Income paid out a year": 0.03,
                "Cash": 1,
            },
        ],
    }


def _portfolios(
    shares: tuple[int, ...] = _MIXES, fee: float = 0.005, cost: float = 0.002
) -> dict[str, object]:
    """Mixes of shares with nine tenths of the rest in bonds and one tenth in cash."""
    rows = []
    for percent in shares:
        rest = 100 - percent
        rows.append(
            {
                "Portfolio": f"{percent} % shares",
                "Yearly cost": cost,
                "Shares": percent / 100,
                "Bonds": round(rest * 0.9) / 100,
                "Cash": (rest - round(rest * 0.9)) / 100,
            }
        )
    return {"Adviser fee": fee, "Portfolio choice": "best each year", "portfolios": rows}


def _practice(**own: str) -> dict[str, object]:
    return {
        "Firm": "Larch & Linden Planning (invented)",
        "Adviser": "R. Moreau",
        "Registration number": "000000",
        "Contact": "desk@larch-linden.example",
    } | {label.replace("_", " ").capitalize(): text for label, text in own.items()}


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
    "Markets": _markets(),
    "Portfolios": _portfolios(),
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
    "Practice": _practice(
        aims="Keep the flat, visit her sister abroad once a year, and never worry about the bills.",
        agreed_risk_level="Cautious to balanced (3 of 7 on the firm's scale), agreed on 12 February 2026.",
        capacity_for_loss="High for the bills: the two pensions cover nearly all of them. A fall in savings would "
        "mean fewer journeys.",
        why_this_suits="Pensions carry the bills; savings are spent evenly over a long life and the share in markets "
        "stays within the agreed level.",
        drawbacks="The school pension does not rise with prices, so more has to come from savings later.",
        alternatives_considered="A lifelong annuity for half of the rollover account; set aside for now because it "
        "cannot be undone.",
    ),
}

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
    "Markets": _markets(),
    "Portfolios": _portfolios(),
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
    "Practice": _practice(
        aims="Stop work by stages, keep the house, and help the children when it is safe to do so.",
        agreed_risk_level="Balanced (4 of 7 on the firm's scale), agreed on 9 December 2025.",
        capacity_for_loss="Medium: until both state pensions run, most of the bills are paid from savings.",
        why_this_suits="Savings bridge the years before the state pensions; spending then rests on lifelong income.",
        drawbacks="A bad first few years would fall together with the largest withdrawals.",
        alternatives_considered="Working full time to 67; a lifelong annuity at 70 for part of the savings.",
    ),
}

CLIENTS: dict[str, Values] = {
    "single_with_pension": SINGLE_WITH_PENSION,
    "couple_three_accounts": COUPLE_THREE_ACCOUNTS,
}


def main(folder: Path) -> None:
    """Write every sample workbook into a folder, replacing those that are there."""
    for name, values in CLIENTS.items():
        make_workbook(values, remark=INVENTED).save(folder / f"{name}.xlsx")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)

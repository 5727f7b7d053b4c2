"""What the sample clients share: market assumptions, portfolio lists, the firm."""

from __future__ import annotations

from planner.workbook.writing import SheetValues

INVENTED = "This household is invented. Any likeness to real people is chance."

MIXES = (0, 20, 40, 60, 80)


def markets(inflation: float = 0.025) -> SheetValues:
    """Three asset classes; half of the correlation square is filled in."""
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


def portfolios(shares: tuple[int, ...] = MIXES, fee: float = 0.005, cost: float = 0.002) -> SheetValues:
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


def practice(**own: str) -> SheetValues:
    """The invented firm, with the suitability texts given by keyword."""
    return {
        "Firm": "Larch & Linden Planning (invented)",
        "Adviser": "R. Moreau",
        "Registration number": "000000",
        "Contact": "desk@larch-linden.example",
    } | {label.replace("_", " ").capitalize(): text for label, text in own.items()}

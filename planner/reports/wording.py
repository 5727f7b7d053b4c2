"""Fixed sentences for clients: cautions, definitions, and the plain words for terms of the field.

The cautions follow good practice for documents with hypothetical projections (drawn from
summaries of FINRA Rules 2210(d) and 2214 and of the FCA's Conduct of Business Sourcebook 4.5A, 4.6
and 13 Annex 2; own words; the rule texts themselves were not read).
"""

from __future__ import annotations

from planner.household import AccountType, IncomeKind
from planner.outcomes import BILLS, LEAVES_LESS, TOO_LITTLE_EARLY, TOO_LITTLE_LATE

DRAFT = "DRAFT - NOT FOR CLIENT"

ACCOUNT_TYPES = {
    AccountType.TAXABLE: "taxable",
    AccountType.TAX_DEFERRED: "tax-deferred",
    AccountType.TAX_FREE: "tax-free",
}
INCOME_KINDS = {
    IncomeKind.STATE_PENSION: "state pension",
    IncomeKind.PENSION: "pension",
    IncomeKind.ANNUITY: "annuity",
    IncomeKind.WAGES: "wages",
    IncomeKind.RENT: "rent",
    IncomeKind.OTHER: "other income",
}
LIFELONG_KINDS = frozenset({IncomeKind.STATE_PENSION, IncomeKind.PENSION, IncomeKind.ANNUITY})

SUITABILITY_TEXTS = {
    "aims": "Aims",
    "agreed_risk_level": "Agreed risk level",
    "capacity_for_loss": "Capacity for loss",
    "why_this_suits": "Why this suits",
    "drawbacks": "Drawbacks",
    "alternatives_considered": "Alternatives considered",
}

REASONS = {
    BILLS: "bills are cut",
    TOO_LITTLE_EARLY: "too little early on",
    TOO_LITTLE_LATE: "too little late on",
    LEAVES_LESS: "less left for heirs",
}

ESTIMATES = "These are estimates, not promises."
ASSUMPTIONS = "The assumptions are in part 10."
AFTER_TAX = "today's money, after tax"
BEFORE_TAX = "today's money, before the tax still due on tax-deferred money"
SAVINGS_MEAN = (
    "Savings are all accounts together without cash kept aside: taxable money after the tax on its gain "
    "so far, "
    "tax-deferred money before tax."
)

LOW_MIDDLE_HIGH = (
    "Low, middle and high: in one of ten cases less than the low figure, in half of them less than the "
    "middle one, in one of ten more than the high one. Each year counts only the futures in which {someone} "
    "alive."
)

WHY_SPENDING_FALLS = (
    "Why planned spending gets lower late in life: you spend a little more now because you are more "
    "likely to "
    "be here to enjoy it. Lifelong pensions keep coming, so late spending leans on them."
)

CANNOT_BE_UNDONE = (
    "A move from tax-deferred to tax-free cannot be undone and is taxed this year: ask your tax preparer "
    "first."
)

CHECK_TAX = "Check this with your tax preparer."

CALL_US_COUPLE = "one of you dies or falls seriously ill, or you separate"
CALL_US_SINGLE = "you fall seriously ill, marry or separate"
CALL_US = (
    "you want much more than this, or to give or lend a large sum",
    "an income or a large sum comes or goes, or you sell your home",
    "pension or tax law changes for you",
)

WHAT_A_REVIEW_DOES = (
    "Once a year we look at what your savings are worth and read this year's spending off the plan, before "
    "anything is calculated anew. That is why we can say today what a good or a bad year would change."
)

SURVIVOR_ACCOUNTS = "The tables assume that the split between the types of account is about what it is today."

RULES_INTRODUCTION = (
    "Many people use a rule of thumb for retirement spending. We ran this plan and each rule through the "
    "same "
    "futures, with your pensions, your taxes and your accounts. 'What this rule costs you' is the part "
    "of your "
    "savings you could lose today and be just as well off with this plan as with the rule and all your "
    "savings. It rests on what you said you prefer (part 2). Our plan is the yardstick, so it costs nothing "
    "by definition; part 9 says how far it may be from the best possible."
)

WORTH_STEADY = (
    "'Worth a steady income of' is the level yearly spending for life, with no ups and downs, that you "
    "would like "
    "just as much."
)

IMPORTANT_INFORMATION = (
    (
        "What this is for",
        "This plan shows how much you could spend, from which account, and what may change. It helps you and "
        "your adviser decide; by itself it is not financial, tax or legal advice, and no offer to buy or "
        "sell "
        "anything. It is advice only where a person licensed for it where you live gives it as such, under "
        "the local rules on suitability, disclosure and record keeping.",
    ),
    (
        "Hypothetical, no guarantee",
        "All figures after this year are projections from a model: hypothetical, not results of any real "
        "account, and no promise of what will happen. Markets, prices, tax law and your health can turn out "
        "worse than any of the futures tested. Investments can lose value and you may get back less than "
        "you put in.",
    ),
    (
        "Results vary",
        "Results change with each use and over time: with the date, your balances, the assumptions and the "
        "futures drawn. Small changes in expected returns or prices change the figures noticeably; part 8 "
        "shows by how much where what-ifs were run. Every plan should be renewed at least once a year and "
        "before any large decision.",
    ),
    (
        "Which investments were considered",
        "Only the portfolios listed in part 10, held across all accounts and brought back to their "
        "weights once "
        "a year. Other investments, or insurance such as a lifelong annuity, were considered only where part "
        "10 says so; they may be as good or better and may cost less.",
    ),
    (
        "Money and tax",
        "Each figure says whether it is before or after tax. All amounts are in today's money. "
        "Projections are after the costs in part "
        "10. Tax is computed from the rules named there; a tax preparer should check it before you act.",
    ),
    (
        "Figures",
        "Projections are rounded because they are not known more finely. Chances come from a limited "
        "number of "
        "futures and carry a small numerical error: parts 6 and 7 say how large.",
    ),
)

METHOD = (
    "The plan is found by working backwards from the end of life, year by year: for every amount of money "
    "you might hold in a year, and whoever is then alive, it finds how much to spend, how much to take from "
    "each type of account and which portfolio to hold, given that every later year is again decided in the "
    "best way. Taxes, the least that must be taken, pensions that start and stop, and the chance of "
    "living to each age are part of that calculation, not added afterwards.",
    "Then we test it. Yearly market returns and lifetimes are drawn at random from the assumptions in "
    "part 10, "
    "the plan is followed year by year knowing only the past, and the low, middle and high figures are read "
    "off. Every rule of thumb in part 7 meets exactly the same futures.",
    "What 'better' means comes from your answers in part 2: how you feel about ups and downs in spending, "
    "how much worse it is to cut bills than to cut extras, whether you would rather spend early, and what "
    "you wish to leave.",
)

LIMITS = (
    "The model moves in steps of one year; a bad month inside a year is not seen.",
    "Market returns in different years are drawn independently and without lasting good or bad spells, "
    "from a lognormal law; crashes worse than it allows can happen.",
    "Two people's lifetimes are drawn independently of each other and of markets.",
    "Prices rise at one assumed rate; a lasting surprise in prices is only a what-if.",
    "One portfolio is held across all accounts, brought back to its weights once a year.",
    "Tax law stays as it was in the year of the rules, with its thresholds rising with prices unless the "
    "rules "
    "say otherwise. Tax on gains in taxable accounts is spread over the years; a reset of the book cost at "
    "death is not counted, which understates what is left. How a couple's tax-deferred money is divided "
    "between "
    "the two stays as it is today; extra charges by income follow the same year's income; payroll taxes are "
    "left out.",
    "A survivor is taxed as a single person from the year after the death.",
    "Care costs, serious illness and changes in the law are left out, except where part 8 tests them.",
    "The value of your home is not counted.",
    "The plan is followed to the letter; people do not always do that.",
)

PROOF_FOR_ANALYSTS = (
    "Upper bound by Lagrangian duality with shadow prices along simulated paths (Rogers 2002; Haugh, Kogan & "
    "Wang 2006; Brown, Smith & Sun 2010), on the solver's own return law."
)


def someone(is_couple: bool) -> str:
    """Of a couple or a single client: who has to be alive."""
    return "at least one of you is" if is_couple else "you are"


def as_long_as_alive(is_couple: bool) -> str:
    """The span a promise to a client covers."""
    return "as long as either of you lived" if is_couple else "as long as you lived"


def futures_tested(n_paths: int, is_couple: bool) -> str:
    """The definition that stands near every probability."""
    return (
        f"'Futures tested' are {n_paths:,} courses of markets and lives, drawn at random from the "
        "assumptions in part "
        f"10. In a future your bills were 'not paid' if spending fell below your bills (essential spending) "
        f"in at least one year in which {someone(is_couple)} alive. A count of futures is not a forecast: "
        "it is "
        "only as good as the assumptions."
    )

"""The client workbook, declared once: sheets, forms, tables and fields.

The blank workbook, its guide page, the reader and its messages all come from `SHEETS`.
"""

from __future__ import annotations

from typing import Final

from planner import shipped
from planner.workbook.fields import Field, Form, Kind, Sheet, Table

GUIDE_SHEET: Final = "Guide"
LISTS_SHEET: Final = "Lists"
IGNORED_SHEETS: Final = (GUIDE_SHEET, LISTS_SHEET, "Notes")
IGNORED_COLUMNS: Final = ("Note", "Notes", "Comment", "Comments", "Remarks")

ACCOUNT_TYPES: Final = (
    "taxable (general account)",
    "tax-deferred (pension pot, IRA, 401(k))",
    "tax-free (ISA, Roth)",
)
INCOME_KINDS: Final = ("state pension", "pension", "annuity", "wages", "rent", "other")
YES_NO: Final = ("yes", "no")
IN_THE_PLAN: Final = "in the plan"
ONLY_A_WHAT_IF: Final = "only as a what-if"


def tax_rule_choices() -> tuple[str, ...]:
    """Every set of tax rules that may be named: the shipped ones, ``none`` and ``own``."""
    return tuple(dict.fromkeys(("none", "own", *shipped.tax_rule_names())))


def life_table_choices() -> tuple[str, ...]:
    """Every life table that may be named: the shipped ones and ``own``."""
    return (*shipped.life_table_names(), "own")


HOUSEHOLD = Sheet(
    "Household",
    "Who the plan is for, from when, in which currency and under which tax rules.",
    (
        Form(
            "household",
            (
                Field(
                    "Client name", Kind.TEXT, "As it should stand on the plan.", "client_name", required=True
                ),
                Field(
                    "Plan date",
                    Kind.DATE,
                    "First day of the plan; ages and balances are of this day.",
                    "plan_date",
                    required=True,
                ),
                Field(
                    "Currency",
                    Kind.CURRENCY,
                    "Three letters (ISO 4217), such as USD, GBP or EUR.",
                    "currency",
                    required=True,
                ),
                Field(
                    "Tax rules",
                    Kind.NAME,
                    "A shipped set by name, none, or own (then fill in the sheet Tax).",
                    "tax_rules",
                    required=True,
                ),
                Field(
                    "Couple is",
                    Kind.CHOICE,
                    "Only for couples; some tax rules ask.",
                    "couple_is",
                    default="married",
                    choices=("married", "civil partners", "not married"),
                ),
                Field(
                    "Home value",
                    Kind.MONEY,
                    "For the record and the estate; never spent by the plan.",
                    "home_value",
                    default="0",
                ),
            ),
        ),
    ),
    required=True,
)

PEOPLE = Sheet(
    "People",
    "One row for a single client, two for a couple. The first row is 'the first person'.",
    (
        Table(
            "people",
            "people",
            (
                Field("Person", Kind.TEXT, "Name used on the other sheets.", "name", required=True),
                Field("Date of birth", Kind.DATE, "A date, or 1960-05-14.", "date_of_birth", required=True),
                Field(
                    "Sex",
                    Kind.CHOICE,
                    "Which column of the life table.",
                    "sex",
                    required=True,
                    choices=("female", "male"),
                ),
                Field(
                    "Life table",
                    Kind.NAME,
                    "A shipped table by name, or own.",
                    "life_table",
                    required=True,
                ),
                Field(
                    "Death rates compared with the table",
                    Kind.FACTOR,
                    "0.85 = 15 % fewer deaths at every age (in good health).",
                    "mortality_multiplier",
                    default="1",
                ),
                Field(
                    "Plan at least to age",
                    Kind.AGE,
                    "Death before this age is ruled out.",
                    "plan_to_age",
                    blank_means="as the table says",
                ),
            ),
            required=True,
            blank_rows=2,
        ),
    ),
    required=True,
)

ACCOUNTS = Sheet(
    "Accounts",
    "Every savings account the plan may use, one a row.",
    (
        Table(
            "accounts",
            "accounts",
            (
                Field("Account", Kind.TEXT, "A name of its own.", "name", required=True),
                Field(
                    "Owner",
                    Kind.NAME,
                    "A person, or joint (taxable accounts only).",
                    "owner",
                    required=True,
                    names_of="People/Person",
                ),
                Field(
                    "Type",
                    Kind.CHOICE,
                    "How it is taxed; the first words suffice.",
                    "type",
                    required=True,
                    choices=ACCOUNT_TYPES,
                ),
                Field("Balance", Kind.MONEY, "Market value on the plan date.", "balance", required=True),
                Field(
                    "Cost basis",
                    Kind.MONEY,
                    "Book cost; taxable accounts only.",
                    "cost_basis",
                    blank_means="the balance",
                ),
                Field(
                    "Held now",
                    Kind.NAME,
                    "Portfolio it is in today (sheet Portfolios).",
                    "held_now",
                    blank_means="not known",
                    names_of="Portfolios/Portfolio",
                ),
                Field(
                    "Not before age",
                    Kind.AGE,
                    "Owner's age before which nothing can be taken.",
                    "not_before_age",
                    blank_means="no limit",
                ),
                Field("Paid in a year", Kind.MONEY, "Saved into it each year.", "paid_in", default="0"),
                Field(
                    "Paid in until age",
                    Kind.AGE,
                    "Owner's age at which paying in stops.",
                    "paid_in_until_age",
                    blank_means="never stops",
                ),
                Field(
                    "Balance last year-end",
                    Kind.MONEY,
                    "For the least that must be taken this year.",
                    "balance_last_year_end",
                    blank_means="the balance",
                ),
                Field(
                    "Taken so far this year",
                    Kind.MONEY,
                    "Counts towards the least that must be taken.",
                    "taken_this_year",
                    default="0",
                ),
            ),
            required=True,
            blank_rows=10,
        ),
    ),
    required=True,
)

INCOME = Sheet(
    "Income",
    "Regular incomes of each person: pensions, annuities, wages, rent.",
    (
        Table(
            "incomes",
            "incomes",
            (
                Field("Income", Kind.TEXT, "A name of its own.", "name", required=True),
                Field("Owner", Kind.NAME, "A person.", "owner", required=True, names_of="People/Person"),
                Field(
                    "Kind",
                    Kind.CHOICE,
                    "Decides its taxation.",
                    "kind",
                    required=True,
                    choices=INCOME_KINDS,
                ),
                Field(
                    "Amount a year",
                    Kind.MONEY,
                    "Today's money if it rises with prices, else the first payment's. Before tax.",
                    "amount",
                    required=True,
                ),
                Field(
                    "From age",
                    Kind.AGE,
                    "Owner's age at the first payment: 66 or 66y8m.",
                    "from_age",
                    required=True,
                ),
                Field("To age", Kind.AGE, "Age at which it stops.", "to_age", blank_means="for life"),
                Field(
                    "Yearly rise",
                    Kind.RISE,
                    "prices, none, 2%, or prices up to 2.5%.",
                    "rise",
                    default="prices",
                ),
                Field(
                    "Continues to partner",
                    Kind.CONTINUATION,
                    "Share paid on, or larger of the two (state pensions).",
                    "continues_to_partner",
                    default="0",
                ),
                Field(
                    "Taxable share",
                    Kind.SHARE,
                    "Share of it that is taxed.",
                    "taxable_share",
                    blank_means="as the tax rules treat that kind",
                ),
            ),
            blank_rows=10,
        ),
    ),
)

START_CHOICES = Sheet(
    "Start choices",
    "For 'when to start': what a provider quotes for starting an income at another age.",
    (
        Table(
            "start choices",
            "start_choices",
            (
                Field(
                    "Income",
                    Kind.NAME,
                    "One of the sheet Income.",
                    "income",
                    required=True,
                    names_of="Income/Income",
                ),
                Field("Start age", Kind.AGE, "Owner's age at the start.", "start_age", required=True),
                Field("Amount a year", Kind.MONEY, "As quoted for that start age.", "amount", required=True),
            ),
        ),
    ),
)

ONE_OFFS = Sheet(
    "One-offs",
    "Sums received or paid in particular calendar years.",
    (
        Table(
            "one-offs",
            "one_offs",
            (
                Field("Item", Kind.TEXT, "What it is.", "item", required=True),
                Field("Year", Kind.YEAR, "Calendar year.", "year", required=True),
                Field("Last year", Kind.YEAR, "If it repeats yearly.", "last_year", blank_means="once"),
                Field("Amount", Kind.MONEY, "Received +, paid -; each year.", "amount", required=True),
                Field(
                    "Rises with prices",
                    Kind.YES_NO,
                    "yes = the amount is in today's money.",
                    "rises_with_prices",
                    default="yes",
                    choices=YES_NO,
                ),
                Field(
                    "Counts",
                    Kind.CHOICE,
                    "In the plan, or only to be compared.",
                    "in_the_plan",
                    default=IN_THE_PLAN,
                    choices=(IN_THE_PLAN, ONLY_A_WHAT_IF),
                ),
                Field("Taxable share", Kind.SHARE, "Share taxed as income.", "taxable_share", default="0"),
            ),
        ),
    ),
)

SPENDING = Sheet(
    "Spending",
    "What the household needs and asks for, a year, in today's money after tax.",
    (
        Form(
            "spending",
            (
                Field(
                    "Essential spending a year",
                    Kind.MONEY,
                    "Bills that must be paid: today's money, after tax.",
                    "spending.essential",
                    required=True,
                ),
                Field(
                    "Wanted spending a year",
                    Kind.MONEY,
                    "What the client asks for; the plan is compared with it.",
                    "spending.wanted",
                    blank_means="not stated",
                ),
                Field(
                    "Most you would spend a year",
                    Kind.MONEY,
                    "The plan never spends more.",
                    "spending.ceiling",
                    blank_means="no limit",
                ),
                Field(
                    "Survivor needs, share of couple's",
                    Kind.SHARE,
                    "What one needs after the other's death.",
                    "spending.survivor_share",
                    default="0.7",
                ),
                Field(
                    "Cash kept aside",
                    Kind.MONEY,
                    "Not spent; part of the estate. Out of the taxable accounts.",
                    "spending.cash_aside",
                    default="0",
                ),
                Field(
                    "Care cost a year",
                    Kind.MONEY,
                    "Only for the what-if 'care needed'.",
                    "spending.care_cost",
                    default="0",
                ),
                Field(
                    "Care from age",
                    Kind.AGE,
                    "Age at which care starts.",
                    "spending.care_from_age",
                    blank_means="no care what-if",
                ),
                Field(
                    "Care years",
                    Kind.NUMBER,
                    "How many years it lasts.",
                    "spending.care_years",
                    blank_means="no care what-if",
                ),
                Field(
                    "Care for",
                    Kind.CHOICE,
                    "Who needs it.",
                    "spending.care_for",
                    blank_means="no care what-if",
                    choices=("first", "second", "last survivor"),
                ),
            ),
        ),
        Table(
            "spending by age",
            "spending.age_profile",
            (
                Field("From age", Kind.AGE, "First person's age.", "age", required=True),
                Field(
                    "Spending compared with now",
                    Kind.FACTOR,
                    "0.9 = ten per cent less than now.",
                    "factor",
                    required=True,
                ),
            ),
            blank_rows=4,
            note="Optional: how spending is expected to change with age.",
        ),
    ),
    required=True,
)

_RETURN = Field(
    "Expected return", Kind.RATE, "Nominal, arithmetic mean a year.", "expected_return", required=True
)

MARKETS = Sheet(
    "Markets",
    "What the firm expects of prices and markets. Give the source on the sheet Practice or in a note.",
    (
        Form(
            "markets",
            (
                Field(
                    "Inflation",
                    Kind.RATE,
                    "Expected rise of prices a year, such as 2.5%.",
                    "markets.inflation",
                    required=True,
                ),
            ),
        ),
        Table(
            "asset classes",
            "markets.asset_classes",
            (
                Field("Asset class", Kind.TEXT, "A name of its own.", "name", required=True),
                _RETURN,
                Field(
                    "Standard deviation", Kind.RATE, "Of yearly returns.", "standard_deviation", required=True
                ),
                Field(
                    "Income paid out a year",
                    Kind.RATE,
                    "Interest and dividends; taxed yearly in a taxable account.",
                    "income_yield",
                    default="0",
                ),
            ),
            per_class=Field(
                "Correlations",
                Kind.CORRELATION,
                "Correlations: put the asset classes' names here; half of the square suffices.",
                "correlations",
            ),
            required=True,
            blank_rows=6,
        ),
    ),
    required=True,
)

PORTFOLIOS = Sheet(
    "Portfolios",
    "The mixes the plan may choose from. Steps of 20 points or less are advised.",
    (
        Form(
            "portfolios",
            (
                Field(
                    "Adviser fee",
                    Kind.RATE,
                    "A year, of all savings, on top of each portfolio's cost.",
                    "adviser_fee",
                    default="0",
                ),
                Field(
                    "Portfolio choice",
                    Kind.NAME,
                    "best each year, or the name of one portfolio to hold throughout.",
                    "portfolio_choice",
                    default="best each year",
                    names_of="Portfolios/Portfolio",
                ),
            ),
        ),
        Table(
            "portfolios",
            "portfolios",
            (
                Field("Portfolio", Kind.TEXT, "A name of its own.", "name", required=True),
                Field("Yearly cost", Kind.RATE, "Of the funds it holds.", "yearly_cost", default="0"),
            ),
            per_class=Field(
                "Weights",
                Kind.SHARE,
                "Weights: put the asset classes' names here; each row adds up to 100%.",
                "weights",
            ),
            required=True,
            blank_rows=8,
        ),
    ),
    required=True,
)

PREFERENCES = Sheet(
    "Preferences",
    "What the client would rather have. Everything here may stay blank.",
    (
        Form(
            "preferences",
            (
                Field(
                    "Risk aversion",
                    Kind.NUMBER,
                    "1 = bold, 4 = usual, 10 = very careful. Or leave blank and give the two answers.",
                    "preferences.risk_aversion",
                    default="4",
                ),
                Field(
                    "Accepts a one-third cut",
                    Kind.YES_NO,
                    "A new job doubles your income for life or cuts it by a third, at even odds: take it?",
                    "preferences.accepts_third_cut",
                    blank_means="not asked",
                    choices=YES_NO,
                ),
                Field(
                    "Accepts the second gamble",
                    Kind.YES_NO,
                    "The same with a cut by half (after yes) or by a fifth (after no): take it?",
                    "preferences.accepts_second_gamble",
                    blank_means="not asked",
                    choices=YES_NO,
                ),
                Field(
                    "How much worse cutting bills is",
                    Kind.NUMBER,
                    "3 = money short of the bills weighs three times as much.",
                    "preferences.shortfall_weight",
                    default="3",
                ),
                Field(
                    "Fallback income if savings are gone",
                    Kind.MONEY,
                    "Family or state support a year, today's money.",
                    "preferences.fallback_income",
                    blank_means="10 % of essential spending",
                ),
                Field(
                    "Preference for earlier spending",
                    Kind.RATE,
                    "A rate a year; 0 = a year at 90 counts as much as one now, if alive.",
                    "preferences.time_preference",
                    default="0",
                ),
                Field(
                    "Wish to leave",
                    Kind.MONEY,
                    "Today's money, after heirs' tax.",
                    "preferences.wish_to_leave",
                    default="0",
                ),
                Field(
                    "Heirs' tax rate",
                    Kind.RATE,
                    "Tax heirs pay on tax-deferred money.",
                    "preferences.heirs_tax_rate",
                    default="0",
                ),
                Field(
                    "Moves from tax-deferred to tax-free allowed",
                    Kind.YES_NO,
                    "Whether the plan may advise such moves; they cannot be undone.",
                    "preferences.conversions_allowed",
                    default="no",
                    choices=YES_NO,
                ),
            ),
        ),
    ),
)

_STATUS = ("couple", "single")

TAX = Sheet(
    "Tax",
    "State or regional tax; and, only for the tax rules 'own', the rules themselves.",
    (
        Form(
            "tax",
            (
                Field(
                    "Extra income tax rate",
                    Kind.RATE,
                    "State or regional, on taxable income; 0 if there is none.",
                    "extra_income_tax_rate",
                    blank_means="none, with a warning",
                ),
                Field(
                    "Also on state pensions",
                    Kind.YES_NO,
                    "Whether the extra rate applies to them.",
                    "extra_rate_on_state_pensions",
                    default="no",
                    choices=YES_NO,
                ),
                Field(
                    "Tax rate on interest and dividends",
                    Kind.RATE,
                    "Only for own rules.",
                    "own_tax.yield_rate",
                    default="0",
                ),
                Field("Gains tax rate", Kind.RATE, "Only for own rules.", "own_tax.gains_rate", default="0"),
                Field(
                    "Taxable share of tax-deferred withdrawals",
                    Kind.SHARE,
                    "Only for own rules.",
                    "own_tax.withdrawal_taxable_share",
                    default="1",
                ),
                Field(
                    "Minimum distributions from age",
                    Kind.AGE,
                    "Only for own rules; then fill in the divisors.",
                    "own_tax.minimum_distribution_age",
                    blank_means="none",
                ),
                Field(
                    "Taxed",
                    Kind.CHOICE,
                    "Only for own rules: a couple's incomes.",
                    "own_tax.taxed",
                    default="together",
                    choices=("together", "each person"),
                ),
            ),
        ),
        Table(
            "brackets",
            "own_tax.brackets",
            (
                Field(
                    "Status",
                    Kind.CHOICE,
                    "Couple or single; taxed each person: single.",
                    "status",
                    required=True,
                    choices=_STATUS,
                ),
                Field("From", Kind.MONEY, "Taxable income a year.", "start", required=True),
                Field("Rate", Kind.RATE, "On income above it.", "rate", required=True),
            ),
            blank_rows=16,
            note="Only for own rules.",
        ),
        Table(
            "divisors",
            "own_tax.divisors",
            (
                Field("Age", Kind.AGE, "Owner's age.", "age", required=True),
                Field("Divisor", Kind.NUMBER, "Balance / divisor must be taken.", "divisor", required=True),
            ),
            blank_rows=16,
            beside=True,
        ),
        Table(
            "surcharges",
            "own_tax.surcharges",
            (
                Field(
                    "Surcharge status",
                    Kind.CHOICE,
                    "Couple or single.",
                    "status",
                    required=True,
                    choices=_STATUS,
                ),
                Field("Income above", Kind.MONEY, "Where the step applies.", "income_above", required=True),
                Field("Extra cost a year", Kind.MONEY, "At this step.", "extra_cost", required=True),
                Field("From age", Kind.AGE, "Of the person.", "from_age", blank_means="any age"),
            ),
            blank_rows=16,
            beside=True,
        ),
    ),
)

LIFE_TABLE = Sheet(
    "Life table",
    "Only for the life table 'own': every age from the youngest needed, one by one.",
    (
        Table(
            "life table",
            "own_life_table",
            (
                Field("Age", Kind.AGE, "Whole years.", "age", required=True),
                Field("Women", Kind.SHARE, "Chance of dying in the year.", "women", required=True),
                Field("Men", Kind.SHARE, "Chance of dying in the year.", "men", required=True),
            ),
            blank_rows=12,
        ),
    ),
)

WHAT_IFS = Sheet(
    "What-ifs",
    "Changes to compare with the plan. Rows with the same name make one what-if.",
    (
        Table(
            "what-ifs",
            "what_ifs",
            (
                Field("Name", Kind.TEXT, "What the client calls it.", "name", required=True),
                Field(
                    "Change",
                    Kind.TEXT,
                    "Sheet/Row/Column or Sheet/Field, such as Income/State pension/From age.",
                    "address",
                    required=True,
                ),
                Field(
                    "New value", Kind.AS_TYPED, "As you would type it there.", "value", blank_means="cleared"
                ),
            ),
            blank_rows=12,
        ),
    ),
)

HISTORY = Sheet(
    "History",
    "Yearly inflation and returns by asset class: a series the firm may use.",
    (
        Table(
            "history",
            "history",
            (
                Field("Year", Kind.YEAR, "Every year, one by one.", "year", required=True),
                Field("Inflation", Kind.RATE, "Rise of prices in the year.", "inflation", required=True),
            ),
            per_class=Field(
                "Returns",
                Kind.RATE,
                "Nominal returns: put the asset classes' names here.",
                "returns",
            ),
            blank_rows=12,
        ),
    ),
)

LAST_YEAR = Sheet(
    "Last year",
    "What happened since the last plan, for the review.",
    (
        Form(
            "last year",
            (
                Field(
                    "Spent",
                    Kind.MONEY,
                    "Spent since the last plan.",
                    "last_year.spent",
                    blank_means="not known",
                ),
                Field(
                    "Paid in",
                    Kind.MONEY,
                    "Paid into accounts.",
                    "last_year.paid_in",
                    blank_means="not known",
                ),
                Field(
                    "One-offs received",
                    Kind.MONEY,
                    "Received less paid.",
                    "last_year.one_offs_received",
                    blank_means="not known",
                ),
            ),
        ),
    ),
)


def _own_words(label: str, note: str, attribute: str) -> Field:
    return Field(label, Kind.TEXT, note, f"practice.{attribute}", blank_means="left out")


def _suitability(label: str, note: str, attribute: str) -> Field:
    return Field(label, Kind.TEXT, note, f"practice.{attribute}", blank_means="the plan is marked a draft")


PRACTICE = Sheet(
    "Practice",
    "The firm's own words. While one of the last six is blank the plan says DRAFT - NOT FOR CLIENT.",
    (
        Form(
            "practice",
            (
                _own_words("Firm", "Name on the plan.", "firm"),
                _own_words("Adviser", "Who signs it.", "adviser"),
                _own_words("Registration number", "Of the firm or adviser.", "registration_number"),
                _own_words("Contact", "Telephone, e-mail or address.", "contact"),
                _own_words("Logo file", "A picture's file name, beside this workbook.", "logo_file"),
                _own_words("Local caution", "What local rules want said.", "local_caution"),
                _own_words(
                    "Required wording",
                    "Printed exactly as typed, near every probability.",
                    "required_wording",
                ),
                _suitability("Aims", "What the client wants.", "aims"),
                _suitability("Agreed risk level", "As agreed with the client.", "agreed_risk_level"),
                _suitability(
                    "Capacity for loss",
                    "What a fall would mean for the client's life.",
                    "capacity_for_loss",
                ),
                _suitability("Why this suits", "Your reasons.", "why_this_suits"),
                _suitability("Drawbacks", "What speaks against it.", "drawbacks"),
                _suitability(
                    "Alternatives considered",
                    "And why they were set aside.",
                    "alternatives_considered",
                ),
            ),
        ),
    ),
)

SHEETS: Final[tuple[Sheet, ...]] = (
    HOUSEHOLD,
    PEOPLE,
    ACCOUNTS,
    INCOME,
    START_CHOICES,
    ONE_OFFS,
    SPENDING,
    MARKETS,
    PORTFOLIOS,
    PREFERENCES,
    TAX,
    LIFE_TABLE,
    WHAT_IFS,
    HISTORY,
    LAST_YEAR,
    PRACTICE,
)


def shown_choices(field: Field) -> tuple[str, ...]:
    """Fixed choices of a field, shipped names included; empty where there are none."""
    if field.target == "tax_rules":
        return tax_rule_choices()
    if field.target == "life_table":
        return life_table_choices()
    return field.choices

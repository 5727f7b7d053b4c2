"""The sheets about the client: household, people, accounts, income, spending, wishes."""

from __future__ import annotations

from typing import Final

from planner.workbook.fields import Form, Kind, Sheet, Table, needed, optional

ACCOUNT_TYPES: Final = (
    "taxable (general account)",
    "tax-deferred (pension pot, IRA, 401(k))",
    "tax-free (ISA, Roth)",
)
INCOME_KINDS: Final = ("state pension", "pension", "annuity", "wages", "rent", "other")
YES_NO: Final = ("yes", "no")
IN_THE_PLAN: Final = "in the plan"
ONLY_A_WHAT_IF: Final = "only as a what-if"

_HOUSEHOLD_FIELDS = (
    needed("Client name", Kind.TEXT, "client_name", "As it should stand on the plan."),
    needed("Plan date", Kind.DATE, "plan_date", "First day of the plan; ages and balances are of this day."),
    needed("Currency", Kind.CURRENCY, "currency", "Three letters (ISO 4217), such as USD, GBP or EUR."),
    needed(
        "Tax rules",
        Kind.NAME,
        "tax_rules",
        "A shipped set by name, none, or own (then fill in the sheet Tax).",
    ),
    optional(
        "Couple is",
        Kind.CHOICE,
        "couple_is",
        "Only for couples; some tax rules ask.",
        default="married",
        choices=("married", "civil partners", "not married"),
    ),
    optional(
        "Home value",
        Kind.MONEY,
        "home_value",
        "For the record and the estate; never spent by the plan.",
        default="0",
    ),
)

HOUSEHOLD = Sheet(
    "Household",
    "Who the plan is for, from when, in which currency and under which tax rules.",
    (Form("household", _HOUSEHOLD_FIELDS),),
    required=True,
)

_PEOPLE_COLUMNS = (
    needed("Person", Kind.TEXT, "name", "Name used on the other sheets."),
    needed("Date of birth", Kind.DATE, "date_of_birth", "A date, or 1960-05-14."),
    needed("Sex", Kind.CHOICE, "sex", "Which column of the life table.", choices=("female", "male")),
    needed("Life table", Kind.NAME, "life_table", "A shipped table by name, or own."),
    optional(
        "Death rates compared with the table",
        Kind.FACTOR,
        "mortality_multiplier",
        "0.85 = 15 % fewer deaths at every age (in good health).",
        default="1",
    ),
    optional(
        "Plan at least to age",
        Kind.AGE,
        "plan_to_age",
        "Death before this age is ruled out.",
        blank_means="as the table says",
    ),
)

PEOPLE = Sheet(
    "People",
    "One row for a single client, two for a couple. The first row is 'the first person'.",
    (Table("people", "people", _PEOPLE_COLUMNS, required=True, blank_rows=2),),
    required=True,
)

_ACCOUNTS_COLUMNS = (
    needed("Account", Kind.TEXT, "name", "A name of its own."),
    needed(
        "Owner", Kind.NAME, "owner", "A person, or joint (taxable accounts only).", names_of="People/Person"
    ),
    needed("Type", Kind.CHOICE, "type", "How it is taxed; the first words suffice.", choices=ACCOUNT_TYPES),
    needed("Balance", Kind.MONEY, "balance", "Market value on the plan date."),
    optional(
        "Cost basis", Kind.MONEY, "cost_basis", "Book cost; taxable accounts only.", blank_means="the balance"
    ),
    optional(
        "Held now",
        Kind.NAME,
        "held_now",
        "Portfolio it is in today (sheet Portfolios).",
        blank_means="not known",
        names_of="Portfolios/Portfolio",
    ),
    optional(
        "Not before age",
        Kind.AGE,
        "not_before_age",
        "Owner's age before which nothing can be taken.",
        blank_means="no limit",
    ),
    optional("Paid in a year", Kind.MONEY, "paid_in", "Saved into it each year.", default="0"),
    optional(
        "Paid in until age",
        Kind.AGE,
        "paid_in_until_age",
        "Owner's age at which paying in stops.",
        blank_means="never stops",
    ),
    optional(
        "Balance last year-end",
        Kind.MONEY,
        "balance_last_year_end",
        "For the least that must be taken this year.",
        blank_means="the balance",
    ),
    optional(
        "Taken so far this year",
        Kind.MONEY,
        "taken_this_year",
        "Counts towards the least that must be taken.",
        default="0",
    ),
)

ACCOUNTS = Sheet(
    "Accounts",
    "Every savings account the plan may use, one a row.",
    (Table("accounts", "accounts", _ACCOUNTS_COLUMNS, required=True, blank_rows=10),),
    required=True,
)

_INCOMES_COLUMNS = (
    needed("Income", Kind.TEXT, "name", "A name of its own."),
    needed("Owner", Kind.NAME, "owner", "A person.", names_of="People/Person"),
    needed("Kind", Kind.CHOICE, "kind", "Decides its taxation.", choices=INCOME_KINDS),
    needed(
        "Amount a year",
        Kind.MONEY,
        "amount",
        "Today's money if it rises with prices, else the first payment's. Before tax.",
    ),
    needed("From age", Kind.AGE, "from_age", "Owner's age at the first payment: 66 or 66y8m."),
    optional("To age", Kind.AGE, "to_age", "Age at which it stops.", blank_means="for life"),
    optional("Yearly rise", Kind.RISE, "rise", "prices, none, 2%, or prices up to 2.5%.", default="prices"),
    optional(
        "Continues to partner",
        Kind.CONTINUATION,
        "continues_to_partner",
        "Share paid on, or larger of the two (state pensions).",
        default="0",
    ),
    optional(
        "Taxable share",
        Kind.SHARE,
        "taxable_share",
        "Share of it that is taxed.",
        blank_means="as the tax rules treat that kind",
    ),
)

INCOME = Sheet(
    "Income",
    "Regular incomes of each person: pensions, annuities, wages, rent.",
    (Table("incomes", "incomes", _INCOMES_COLUMNS, blank_rows=10),),
)

_START_CHOICES_COLUMNS = (
    needed("Income", Kind.NAME, "income", "One of the sheet Income.", names_of="Income/Income"),
    needed("Start age", Kind.AGE, "start_age", "Owner's age at the start."),
    needed("Amount a year", Kind.MONEY, "amount", "As quoted for that start age."),
)

START_CHOICES = Sheet(
    "Start choices",
    "For 'when to start': what a provider quotes for starting an income at another age.",
    (Table("start choices", "start_choices", _START_CHOICES_COLUMNS),),
)

_ONE_OFFS_COLUMNS = (
    needed("Item", Kind.TEXT, "item", "What it is."),
    needed("Year", Kind.YEAR, "year", "Calendar year."),
    optional("Last year", Kind.YEAR, "last_year", "If it repeats yearly.", blank_means="once"),
    needed("Amount", Kind.MONEY, "amount", "Received +, paid -; each year."),
    optional(
        "Rises with prices",
        Kind.YES_NO,
        "rises_with_prices",
        "yes = the amount is in today's money.",
        default="yes",
        choices=YES_NO,
    ),
    optional(
        "Counts",
        Kind.CHOICE,
        "in_the_plan",
        "In the plan, or only to be compared.",
        default=IN_THE_PLAN,
        choices=(IN_THE_PLAN, ONLY_A_WHAT_IF),
    ),
    optional("Taxable share", Kind.SHARE, "taxable_share", "Share taxed as income.", default="0"),
)

ONE_OFFS = Sheet(
    "One-offs",
    "Sums received or paid in particular calendar years.",
    (Table("one-offs", "one_offs", _ONE_OFFS_COLUMNS),),
)

_SPENDING_FIELDS = (
    needed(
        "Essential spending a year",
        Kind.MONEY,
        "spending.essential",
        "Bills that must be paid: today's money, after tax.",
    ),
    optional(
        "Wanted spending a year",
        Kind.MONEY,
        "spending.wanted",
        "What the client asks for; the plan is compared with it.",
        blank_means="not stated",
    ),
    optional(
        "Most you would spend a year",
        Kind.MONEY,
        "spending.ceiling",
        "The plan never spends more.",
        blank_means="no limit",
    ),
    optional(
        "Survivor needs, share of couple's",
        Kind.SHARE,
        "spending.survivor_share",
        "What one needs after the other's death.",
        default="0.7",
    ),
    optional(
        "Cash kept aside",
        Kind.MONEY,
        "spending.cash_aside",
        "Not spent; part of the estate. Out of the taxable accounts.",
        default="0",
    ),
    optional(
        "Care cost a year",
        Kind.MONEY,
        "spending.care_cost",
        "Only for the what-if 'care needed'.",
        default="0",
    ),
    optional(
        "Care from age",
        Kind.AGE,
        "spending.care_from_age",
        "Age at which care starts.",
        blank_means="no care what-if",
    ),
    optional(
        "Care years",
        Kind.NUMBER,
        "spending.care_years",
        "How many years it lasts.",
        blank_means="no care what-if",
    ),
    optional(
        "Care for",
        Kind.CHOICE,
        "spending.care_for",
        "Who needs it.",
        blank_means="no care what-if",
        choices=("first", "second", "last survivor"),
    ),
)

_SPENDING_BY_AGE_COLUMNS = (
    needed("From age", Kind.AGE, "age", "First person's age."),
    needed("Spending compared with now", Kind.FACTOR, "factor", "0.9 = ten per cent less than now."),
)

SPENDING = Sheet(
    "Spending",
    "What the household needs and asks for, a year, in today's money after tax.",
    (
        Form("spending", _SPENDING_FIELDS),
        Table(
            "spending by age",
            "spending.age_profile",
            _SPENDING_BY_AGE_COLUMNS,
            blank_rows=4,
            note="Optional: how spending is expected to change with age.",
        ),
    ),
    required=True,
)

_PREFERENCES_FIELDS = (
    optional(
        "Risk aversion",
        Kind.NUMBER,
        "preferences.risk_aversion",
        "1 = bold, 4 = usual, 10 = very careful. Or leave blank and give the two answers.",
        default="4",
    ),
    optional(
        "Accepts a one-third cut",
        Kind.YES_NO,
        "preferences.accepts_third_cut",
        "A new job doubles your income for life or cuts it by a third, at even odds: take it?",
        blank_means="not asked",
        choices=YES_NO,
    ),
    optional(
        "Accepts the second gamble",
        Kind.YES_NO,
        "preferences.accepts_second_gamble",
        "The same with a cut by half (after yes) or by a fifth (after no): take it?",
        blank_means="not asked",
        choices=YES_NO,
    ),
    optional(
        "How much worse cutting bills is",
        Kind.NUMBER,
        "preferences.shortfall_weight",
        "3 = money short of the bills weighs three times as much.",
        default="3",
    ),
    optional(
        "Fallback income if savings are gone",
        Kind.MONEY,
        "preferences.fallback_income",
        "Family or state support a year, today's money.",
        blank_means="10 % of essential spending",
    ),
    optional(
        "Preference for earlier spending",
        Kind.RATE,
        "preferences.time_preference",
        "A rate a year; 0 = a year at 90 counts as much as one now, if alive.",
        default="0",
    ),
    optional(
        "Wish to leave",
        Kind.MONEY,
        "preferences.wish_to_leave",
        "Today's money, after heirs' tax.",
        default="0",
    ),
    optional(
        "Heirs' tax rate",
        Kind.RATE,
        "preferences.heirs_tax_rate",
        "Tax heirs pay on tax-deferred money.",
        default="0",
    ),
    optional(
        "Moves from tax-deferred to tax-free allowed",
        Kind.YES_NO,
        "preferences.conversions_allowed",
        "Whether the plan may advise such moves; they cannot be undone.",
        default="no",
        choices=YES_NO,
    ),
)

PREFERENCES = Sheet(
    "Preferences",
    "What the client would rather have. Everything here may stay blank.",
    (Form("preferences", _PREFERENCES_FIELDS),),
)

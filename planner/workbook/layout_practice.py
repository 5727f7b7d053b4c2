"""The sheets about assumptions and the firm: markets, portfolios, tax, what-ifs, records."""

from __future__ import annotations

from planner.rule_terms import RULE_TERMS, RuleTerm
from planner.workbook.fields import Field, Form, Kind, Sheet, Table, needed, optional
from planner.workbook.layout_client import YES_NO

_RETURN = needed("Expected return", Kind.RATE, "expected_return", "Nominal, arithmetic mean a year.")

_MARKETS_FIELDS = (
    needed("Inflation", Kind.RATE, "markets.inflation", "Expected rise of prices a year, such as 2.5%."),
)

_ASSET_CLASSES_COLUMNS = (
    needed("Asset class", Kind.TEXT, "name", "A name of its own."),
    _RETURN,
    needed("Standard deviation", Kind.RATE, "standard_deviation", "Of yearly returns."),
    optional(
        "Income paid out a year",
        Kind.RATE,
        "income_yield",
        "Interest and dividends; taxed yearly in a taxable account.",
        default="0",
    ),
)

MARKETS = Sheet(
    "Markets",
    "What the firm expects of prices and markets. Give the source on the sheet Practice or in a note.",
    (
        Form("markets", _MARKETS_FIELDS),
        Table(
            "asset classes",
            "markets.asset_classes",
            _ASSET_CLASSES_COLUMNS,
            most_rows=50,
            per_class=optional(
                "Correlations",
                Kind.CORRELATION,
                "correlations",
                "Correlations: put the asset classes' names here; half of the square suffices.",
            ),
            required=True,
            blank_rows=6,
        ),
    ),
    required=True,
)

_PORTFOLIOS_FIELDS = (
    optional(
        "Adviser fee",
        Kind.RATE,
        "adviser_fee",
        "A year, of all savings, on top of each portfolio's cost.",
        default="0",
    ),
    optional(
        "Portfolio choice",
        Kind.NAME,
        "portfolio_choice",
        "best each year, or the name of one portfolio to hold throughout.",
        default="best each year",
        names_of="Portfolios/Portfolio",
    ),
)

_PORTFOLIOS_COLUMNS = (
    needed("Portfolio", Kind.TEXT, "name", "A name of its own."),
    optional("Yearly cost", Kind.RATE, "yearly_cost", "Of the funds it holds.", default="0"),
)

PORTFOLIOS = Sheet(
    "Portfolios",
    "The mixes the plan may choose from. Steps of 20 points or less are advised.",
    (
        Form("portfolios", _PORTFOLIOS_FIELDS),
        Table(
            "portfolios",
            "portfolios",
            _PORTFOLIOS_COLUMNS,
            most_rows=100,
            per_class=optional(
                "Weights",
                Kind.SHARE,
                "weights",
                "Weights: put the asset classes' names here; each row adds up to 100%.",
            ),
            required=True,
            blank_rows=8,
        ),
    ),
    required=True,
)

_STATUS = ("couple", "single")

_TAX_FIELDS = (
    optional(
        "Extra income tax rate",
        Kind.RATE,
        "extra_income_tax_rate",
        "State or regional, on taxable income; 0 if there is none.",
        blank_means="none, with a warning",
    ),
    optional(
        "Also on state pensions",
        Kind.YES_NO,
        "extra_rate_on_state_pensions",
        "Whether the extra rate applies to them.",
        default="no",
        choices=YES_NO,
    ),
    optional(
        "Tax rate on interest and dividends",
        Kind.RATE,
        "own_tax.yield_rate",
        "Only for own rules.",
        default="0",
    ),
    optional("Gains tax rate", Kind.RATE, "own_tax.gains_rate", "Only for own rules.", default="0"),
    optional(
        "Taxable share of tax-deferred withdrawals",
        Kind.SHARE,
        "own_tax.withdrawal_taxable_share",
        "Only for own rules.",
        default="1",
    ),
    optional(
        "Minimum distributions from age",
        Kind.AGE,
        "own_tax.minimum_distribution_age",
        "Only for own rules; then fill in the divisors.",
        blank_means="none",
    ),
    optional(
        "Taxed",
        Kind.CHOICE,
        "own_tax.taxed",
        "Only for own rules: a couple's incomes.",
        default="together",
        choices=("together", "each person"),
    ),
)

_BRACKETS_COLUMNS = (
    needed("Status", Kind.CHOICE, "status", "Couple or single; taxed each person: single.", choices=_STATUS),
    needed("From", Kind.MONEY, "start", "Taxable income a year."),
    needed("Rate", Kind.RATE, "rate", "On income above it."),
)

_DIVISORS_COLUMNS = (
    needed("Age", Kind.AGE, "age", "Owner's age."),
    needed("Divisor", Kind.NUMBER, "divisor", "Balance / divisor must be taken."),
)

_SURCHARGES_COLUMNS = (
    needed("Surcharge status", Kind.CHOICE, "status", "Couple or single.", choices=_STATUS),
    needed("Income above", Kind.MONEY, "income_above", "Where the step applies."),
    needed("Extra cost a year", Kind.MONEY, "extra_cost", "At this step."),
    optional("From age", Kind.AGE, "from_age", "Of the person.", blank_means="any age"),
)

TAX = Sheet(
    "Tax",
    "State or regional tax; and, only for the tax rules 'own', the rules themselves.",
    (
        Form("tax", _TAX_FIELDS),
        Table("brackets", "own_tax.brackets", _BRACKETS_COLUMNS, blank_rows=16, note="Only for own rules."),
        Table("divisors", "own_tax.divisors", _DIVISORS_COLUMNS, blank_rows=16, beside=True),
        Table("surcharges", "own_tax.surcharges", _SURCHARGES_COLUMNS, blank_rows=16, beside=True),
    ),
)

_LIFE_TABLE_COLUMNS = (
    needed("Age", Kind.AGE, "age", "Whole years."),
    needed("Women", Kind.SHARE, "women", "Chance of dying in the year."),
    needed("Men", Kind.SHARE, "men", "Chance of dying in the year."),
)

LIFE_TABLE = Sheet(
    "Life table",
    "Only for the life table 'own': every age from the youngest needed, one by one.",
    (Table("life table", "own_life_table", _LIFE_TABLE_COLUMNS, blank_rows=12),),
)

_WHAT_IFS_COLUMNS = (
    needed("Name", Kind.TEXT, "name", "What the client calls it."),
    needed(
        "Change",
        Kind.TEXT,
        "address",
        "Sheet/Row/Column or Sheet/Field, such as Income/State pension/From age.",
    ),
    optional("New value", Kind.AS_TYPED, "value", "As you would type it there.", blank_means="cleared"),
)

WHAT_IFS = Sheet(
    "What-ifs",
    "Changes to compare with the plan. Rows with the same name make one what-if.",
    (Table("what-ifs", "what_ifs", _WHAT_IFS_COLUMNS, blank_rows=12),),
)

_ANNUITY_FIELDS = (
    optional(
        "Paid a year, share of the price",
        Kind.RATE,
        "annuity_quote.rate",
        "The quote: 6.1% = 6,100 a year for life, before tax, for 100,000 now.",
        blank_means="no quote",
    ),
    optional(
        "Paid to",
        Kind.NAME,
        "annuity_quote.owner",
        "For that person's life.",
        blank_means="the first person",
        names_of="People/Person",
    ),
    optional(
        "Bought from",
        Kind.NAME,
        "annuity_quote.account",
        "The account that pays for it.",
        blank_means="the first account",
        names_of="Accounts/Account",
    ),
    optional(
        "Yearly rise",
        Kind.RISE,
        "annuity_quote.rise",
        "prices, none, 2%, or prices up to 2.5%.",
        default="none",
    ),
    optional(
        "Continues to partner",
        Kind.CONTINUATION,
        "annuity_quote.continues_to_partner",
        "Share paid on.",
        default="0",
    ),
    optional(
        "Taxable share",
        Kind.SHARE,
        "annuity_quote.taxable_share",
        "Share of it that is taxed.",
        blank_means="as the tax rules treat annuities",
    ),
)

ANNUITY_QUOTE = Sheet(
    "Annuity quote",
    "For 'how much to turn into an annuity': what a provider quotes today.",
    (Form("annuity quote", _ANNUITY_FIELDS),),
)

_TERM_KINDS = {"share": Kind.RATE, "years": Kind.NUMBER, "age": Kind.AGE}


def _as_published(term: RuleTerm) -> Field:
    default = f"{100 * term.default:g}%" if term.kind == "share" else f"{term.default:g}"
    kind = _TERM_KINDS[term.kind]
    return optional(term.label, kind, f"rules.{term.rule}.{term.parameter}", "As published.", default=default)


RULES = Sheet(
    "Rules",
    "The rules of thumb that the plan is compared with, in their own terms. Blank = as published.",
    (Form("rules", tuple(_as_published(term) for term in RULE_TERMS)),),
)

_HISTORY_COLUMNS = (
    needed("Year", Kind.YEAR, "year", "Every year, one by one."),
    needed("Inflation", Kind.RATE, "inflation", "Rise of prices in the year."),
)

HISTORY = Sheet(
    "History",
    "Yearly inflation and returns by asset class: a series the firm may use.",
    (
        Table(
            "history",
            "history",
            _HISTORY_COLUMNS,
            per_class=optional(
                "Returns", Kind.RATE, "returns", "Nominal returns: put the asset classes' names here."
            ),
            blank_rows=12,
        ),
    ),
)

_LAST_YEAR_FIELDS = (
    optional("Spent", Kind.MONEY, "last_year.spent", "Spent since the last plan.", blank_means="not known"),
    optional("Paid in", Kind.MONEY, "last_year.paid_in", "Paid into accounts.", blank_means="not known"),
    optional(
        "One-offs received",
        Kind.MONEY,
        "last_year.one_offs_received",
        "Received less paid.",
        blank_means="not known",
    ),
)

LAST_YEAR = Sheet(
    "Last year",
    "What happened since the last plan, for the review.",
    (Form("last year", _LAST_YEAR_FIELDS),),
)


def _own_words(label: str, note: str, attribute: str) -> Field:
    return optional(label, Kind.TEXT, f"practice.{attribute}", note, blank_means="left out")


def _suitability(label: str, note: str, attribute: str) -> Field:
    return optional(label, Kind.TEXT, f"practice.{attribute}", note, blank_means="the plan is marked a draft")


_PRACTICE_FIELDS = (
    _own_words("Firm", "Name on the plan.", "firm"),
    _own_words("Adviser", "Who signs it.", "adviser"),
    _own_words("Registration number", "Of the firm or adviser.", "registration_number"),
    _own_words("Contact", "Telephone, e-mail or address.", "contact"),
    _own_words("Logo file", "A picture's file name, beside this workbook.", "logo_file"),
    _own_words("Local caution", "What local rules want said.", "local_caution"),
    _own_words("Required wording", "Printed exactly as typed, near every probability.", "required_wording"),
    _suitability("Aims", "What the client wants.", "aims"),
    _suitability("Agreed risk level", "As agreed with the client.", "agreed_risk_level"),
    _suitability("Capacity for loss", "What a fall would mean for the client's life.", "capacity_for_loss"),
    _suitability("Why this suits", "Your reasons.", "why_this_suits"),
    _suitability("Drawbacks", "What speaks against it.", "drawbacks"),
    _suitability("Alternatives considered", "And why they were set aside.", "alternatives_considered"),
)

PRACTICE = Sheet(
    "Practice",
    "The firm's own words. While one of the last six is blank the plan says DRAFT - NOT FOR CLIENT.",
    (Form("practice", _PRACTICE_FIELDS),),
)

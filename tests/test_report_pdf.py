"""The PDF: its text, structure and look, read back with pypdf."""

import io
import re
import time
from dataclasses import replace
from datetime import date
from pathlib import Path

import plan_builder
import pytest
from drawn_text import by_page, outside, overprinted, recorded
from pypdf import PdfReader

from planner.diagnostics import PlannerError
from planner.household import Account, AccountType
from planner.plan_record import NoChangeBand, Range
from planner.reports.export import results_json
from planner.reports.pdf import render_pdf, write_pdf
from planner.reports.protection import protected
from planner.reports.sections import SECTIONS
from planner.reports.wording import DRAFT
from planner.reports.year_money import year_money

GOLDEN = Path(__file__).parent / "golden" / "report.txt"
LONG_NAME = "Wilhelmina-Alexandrina Featherstonehaugh-Cholmondeley of Upper & <Lower> Slaughter"


def read(plan):
    return PdfReader(io.BytesIO(render_pdf(plan)))


def squeezed(text):
    return re.sub(r"\s+", " ", text.replace("\N{NO-BREAK SPACE}", " "))


def page_one(plan):
    return squeezed(read(plan).pages[0].extract_text())


@pytest.fixture(scope="module")
def plan():
    return plan_builder.build()


@pytest.fixture(scope="module")
def reader(plan):
    return read(plan)


def sources_of_page_one(data):
    """(figure, how far print may be from it), from the results file alone.

    This year's amounts are rounded to the unit so that they add up: within 1. A month's are to the
    nearest 10, projections to the nearest 100: within half of that.
    """
    now, band = data["this_year"], data["no_change_band"]
    by_unit = [now["spending"], now["tax"], now["spending"] + now["tax"] + now["kept"]]
    by_unit += [row["amount"] for row in now["incomes"]]
    by_unit += [row[key] for row in now["accounts"] for key in ("withdraw", "still_due")]
    monthly = [now["spending"], band["spending_below"], band["spending_above"]]
    about = [band["low"], 0.9 * band["low"], band["high"], 1.1 * band["high"]]
    about += [data["strategies"][0]["shortfall"]]
    held = {"Growth"}  # the invented plan moves what stays of this portfolio to another
    about += [
        row["balance"] - row["withdraw"] - row["convert"]
        for row, account in zip(now["accounts"], plan_builder.couple().accounts, strict=True)
        if account.held_now in held
    ]
    return (
        [(value, 1.0) for value in by_unit]
        + [(value / 12, 5.0) for value in monthly]
        + [(value, 50.0) for value in about]
    )


def test_every_number_of_page_one_is_in_the_json(plan):
    """Both ways: no other amount is printed, and none of the results file's is missing."""
    data = results_json(plan)
    text = page_one(plan)
    printed = {int(figure.replace(",", "")) for figure in re.findall(r"\$([\d,]*\d)", text)}
    sources = [(value, within) for value, within in sources_of_page_one(data) if value >= 1]
    for figure in printed:
        assert any(abs(figure - value) <= within for value, within in sources), figure
    for value, within in sources:
        assert any(abs(figure - value) <= within for figure in printed), value
    shares = [data["this_year"]["bills_covered_by_lifelong_income"]]
    shares += [view["bills_covered"] for view in data["survivors"]]
    assert [float(share) for share in re.findall(r"(\d+)%", text)] == [round(100 * s) for s in shares]
    paid = re.search(r"In (\d+) of (\d+) futures", text)
    assert paid is not None
    chance = 1 - data["strategies"][0]["chance_below_essential"]
    assert int(paid[1]) / int(paid[2]) == pytest.approx(chance, abs=0.01)
    assert f"{data['sources']['n_paths']:,} futures" in text


def test_instructions_repeat_the_sum_of_page_one(plan, reader):
    year = year_money(plan)
    page = next(
        p
        for p in reader.pages
        if "This year's instructions" in p.extract_text()
        and p is not reader.pages[0]
        and "Where this year's money" in p.extract_text()
    )
    text = squeezed(page.extract_text())
    for line in year.lines:
        assert f"{line.label} {line.amount:,}" in text
    assert f"Yours to spend, after tax {year.spending:,}" in text


def test_bookmarks_title_and_language(plan, reader):
    titles = [entry["/Title"] for entry in reader.outline if not isinstance(entry, list)]
    assert titles == [f"{s.number} {s.title}" for s in SECTIONS]
    assert reader.metadata.title == "Retirement spending plan for Maren and Tobias Quill"
    assert reader.trailer["/Root"]["/Lang"] == "en-US"
    assert reader.trailer["/Root"]["/ViewerPreferences"]["/DisplayDocTitle"]


def test_contents_name_the_page_on_which_each_part_starts(reader):
    contents = squeezed(reader.pages[1].extract_text())
    entries = [entry for entry in reader.outline if not isinstance(entry, list)]
    for entry in entries[1:]:
        number = reader.get_destination_page_number(entry)
        assert f"{entry.title} {number + 1}" in contents
        assert entry.title in squeezed(reader.pages[number].extract_text())


def test_a_password_changes_nothing_but_who_can_read_it(plan, reader):
    document = PdfReader(io.BytesIO(protected(render_pdf(plan), "a long password")))
    assert document.is_encrypted
    assert document.trailer["/Encrypt"]["/R"] == 6  # AES-256 as in ISO 32000-2
    assert not document.decrypt("another")
    assert document.decrypt("a long password")
    assert document.metadata.title == reader.metadata.title
    assert document.trailer["/Root"]["/Lang"] == "en-US"
    assert [e["/Title"] for e in document.outline if not isinstance(e, list)] == [
        e["/Title"] for e in reader.outline if not isinstance(e, list)
    ]
    assert [p.extract_text() for p in document.pages] == [p.extract_text() for p in reader.pages]


def test_same_plan_gives_the_same_bytes(plan):
    assert render_pdf(plan) == render_pdf(plan_builder.build())


def test_footer_names_client_adviser_workbook_version_and_page(reader):
    total = len(reader.pages)
    for number, page in enumerate(reader.pages, start=1):
        text = squeezed(page.extract_text())
        assert f"page {number} of {total}" in text
        for part in (
            "Maren and Tobias Quill",
            "March 2, 2026",
            "Robin Sample, Example Planning Ltd",
            "9f2c9f2c",
            "0.1.0",
            "Period life table 2022",
            "federal income tax",
            "seed 20260302",
        ):
            assert part in text


@pytest.mark.parametrize("blank", ["aims", "why_this_suits", "alternatives_considered"])
def test_a_draft_is_marked_on_every_page(blank):
    practice = replace(plan_builder.PRACTICE, **{blank: ""})
    reader = read(plan_builder.build(plan_builder.couple(practice=practice)))
    assert all(DRAFT in page.extract_text() for page in reader.pages)


def test_a_finished_plan_carries_no_draft_mark(reader):
    assert not any(DRAFT in page.extract_text() for page in reader.pages)


def test_fonts_are_embedded(reader):
    names = set()
    for page in reader.pages:
        for font in page["/Resources"]["/Font"].values():
            font = font.get_object()
            if "NotoSans" in font["/BaseFont"] or "DejaVu" in font["/BaseFont"]:
                names.add(font["/BaseFont"])
                assert "/FontFile2" in font["/FontDescriptor"]
    assert any("NotoSans" in name for name in names)


@pytest.mark.parametrize(
    ("currency", "size"), [("USD", (612, 792)), ("GBP", (595, 842)), ("CAD", (612, 792))]
)
def test_paper_follows_the_currency(currency, size):
    box = read(plan_builder.build(plan_builder.couple(currency))).pages[0].mediabox
    assert (round(box.width), round(box.height)) == size


def test_rendering_takes_under_a_second(plan):
    """After imports and fonts; the least of three, so that a busy machine does not fail it."""
    seconds = []
    for _ in range(3):
        start = time.process_time()
        render_pdf(plan)
        seconds.append(time.process_time() - start)
    assert min(seconds) < 1.0


def odd_households():
    couple, single = plan_builder.couple(), plan_builder.single()
    names = tuple(
        replace(p, name=f"{n}{LONG_NAME}"[:80])
        for n, p in zip(("First ", "Second "), couple.people, strict=True)
    )
    owners = {old.name: new.name for old, new in zip(couple.people, names, strict=True)} | {"joint": "joint"}
    long_names = replace(
        couple,
        client_name=LONG_NAME[:80],
        people=names,
        accounts=tuple(
            replace(a, owner=owners[a.owner], name=f"{i} {LONG_NAME}"[:80])
            for i, a in enumerate(couple.accounts)
        ),
        incomes=tuple(
            replace(i, owner=owners[i.owner], name=f"{k} {LONG_NAME}"[:80])
            for k, i in enumerate(couple.incomes)
        ),
        practice=replace(
            plan_builder.PRACTICE, adviser=LONG_NAME[:80], firm=LONG_NAME[:80], aims="Long aims. " * 400
        ),
    )
    six = replace(
        couple,
        accounts=tuple(
            Account(f"Account {i} with a usual name", "Maren Quill", kind, 100_000.0 * i, held_now="Growth")
            for i, kind in enumerate(
                (AccountType.TAX_DEFERRED, AccountType.TAXABLE, AccountType.TAX_FREE) * 2
            )
        ),
    )
    bare = replace(
        single,
        accounts=tuple(replace(a, balance=0.0) for a in single.accounts),
        incomes=(),
        practice=replace(plan_builder.PRACTICE, required_wording=""),
    )
    someone = replace(single.people[0], name="Ελένη Иванова \u202eאבי")
    scripts = replace(
        single,
        client_name="Ελένη & Иван \u200fאבי\u202e <b>x</b> 山田",
        people=(someone,),
        accounts=tuple(replace(a, owner=someone.name) for a in single.accounts),
        incomes=(),
    )
    return {
        "long names": plan_builder.build(long_names),
        "six accounts, one empty": plan_builder.build(six),
        "nothing but spending": plan_builder.build(
            bare,
            survivors=(),
            what_ifs=(),
            futures=(),
            proof=None,
            lookup=(),
            warnings=(),
            yearly_costs=(),
            band=NoChangeBand(0, 0, 0, 0, 0.1),
        ),
        "scripts": plan_builder.build(scripts),
        "yen": plan_builder.build(plan_builder.couple("JPY", scale=150.0)),
        "pounds": plan_builder.build(plan_builder.couple("GBP")),
        "eighty years": plan_builder.build(plan_builder.couple(), n_years=80),
        "one year": plan_builder.build(plan_builder.single(), n_years=1),
        "leap day": plan_builder.build(replace(single, plan_date=date(2024, 2, 29))),
    }


@pytest.mark.parametrize(
    ("name", "odd"), odd_households().items(), ids=lambda v: v if isinstance(v, str) else ""
)
def test_text_stays_inside_its_frame(name, odd):
    """See `test_report_layout` for fifty more; these are odd in ways that have a name."""
    with recorded() as pieces:
        render_pdf(odd)
    assert not outside(pieces)
    assert not [pair for here in by_page(pieces).values() for pair in overprinted(here)]


def test_page_one_is_one_page_whatever_the_names():
    reader = read(odd_households()["long names"])
    assert "What you told us" in reader.pages[1].extract_text()
    assert "These are estimates, not promises." in squeezed(reader.pages[0].extract_text())


def test_a_long_schedule_repeats_its_headers_and_shares_its_rows_out():
    plan = plan_builder.build(n_years=80)
    pages = [p for p in read(plan).pages if p.mediabox.width > p.mediabox.height]
    assert len(pages) > 1
    years = [re.findall(r"^(20\d\d)$", page.extract_text(), re.MULTILINE) for page in pages]
    assert max(map(len, years)) - min(map(len, years)) < len(pages)
    for page in pages:
        assert "Savings at the start" in squeezed(page.extract_text())
    shown = [str(row.year) for row in plan.schedule if row.chance_alive[-1] >= 0.001]
    assert [year for page in years for year in page] == shown
    assert f"Left out: the years after {shown[-1]}" in squeezed(pages[-1].extract_text())


def test_names_are_escaped_and_scripts_drawn():
    text = squeezed("".join(p.extract_text() for p in read(odd_households()["scripts"]).pages))
    assert "Ελένη Иванова" in text
    assert "\u202e" not in text
    many = squeezed("".join(p.extract_text() for p in read(odd_households()["long names"]).pages))
    assert "Upper & <Lower>" in many


def test_zero_everywhere_is_drawn():
    plan = plan_builder.build()
    rows = tuple(
        replace(r, spending=Range(0, 0, 0), balance=Range(0, 0, 0), income=0.0) for r in plan.schedule
    )
    assert read(replace(plan, schedule=rows)).pages


def test_write_is_whole_or_not_at_all(tmp_path, plan):
    target = tmp_path / "plan.pdf"
    write_pdf(plan, target)
    assert target.read_bytes() == render_pdf(plan)
    with pytest.raises(OSError, match="nowhere"):
        write_pdf(plan, tmp_path / "nowhere" / "plan.pdf")
    assert [p.name for p in tmp_path.iterdir()] == ["plan.pdf"]


def test_a_logo_that_is_gone_by_now_is_left_out_and_a_spoilt_one_refused(tmp_path):
    """Reading the workbook has checked it (see `test_workbook_logo`); this is what can change since."""
    logo = tmp_path / "logo.png"
    practice = replace(plan_builder.PRACTICE, logo_file=str(logo))
    plan = plan_builder.build(plan_builder.couple(practice=practice))
    assert not read(plan).pages[0].images
    logo.write_bytes(b"no picture")
    with pytest.raises(PlannerError, match="logo file"):
        render_pdf(plan)


def test_the_whole_text_is_the_golden_one(plan, reader):
    """Rewritten by running this file as a script; read the difference before committing it."""
    assert report_text(reader) == GOLDEN.read_text("utf-8")


def report_text(reader):
    pages = []
    for number, page in enumerate(reader.pages, start=1):
        lines = (
            re.sub(r"[ \N{NO-BREAK SPACE}]+", " ", line).rstrip() for line in page.extract_text().splitlines()
        )
        pages.append(f"=== page {number}\n" + "\n".join(lines) + "\n")
    return "".join(pages)


if __name__ == "__main__":
    GOLDEN.write_text(report_text(read(plan_builder.build())), "utf-8")

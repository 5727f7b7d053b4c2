"""Mutated client workbooks, read by `planner check`: each is read or refused in words.

As a script, for more than the test suite has time for:

    python tests/fuzzing.py --mutations 20000 [--seed 1] [--only 4711] [--plans 50] [--keep FOLDER]

Every mutation has a number; `--only` repeats one. The process limits its own memory to 1 GiB and
each reading to 10 s. With `--plans N`, N of the workbooks that can still be read are planned, too.
"""

from __future__ import annotations

import argparse
import os
import random
import re
import resource
import signal
import sys
import tempfile
import zipfile
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import date, datetime
from io import BytesIO
from pathlib import Path
from time import process_time
from xml.sax.saxutils import escape

MEMORY = 1 << 30  # bytes
SECONDS = 10  # for one workbook, of the processor's time: the machine may be busy
TIMERS = (
    (signal.ITIMER_PROF, signal.SIGPROF, SECONDS),
    (signal.ITIMER_REAL, signal.SIGALRM, 10 * SECONDS),  # waiting for something without end
)

FORMAT_CODES = ("General", "0.0%", "yyyy-mm-dd", "hh:mm", "[h]:mm", "@", '"£"#,##0', "_(* #,##0_)")
TEXTS = (
    "", " ", "\n", "=1+1", "'", "0", "-0", "1e999", "1e308", "-1", "nan", "inf", "1,000", "1.000,00", "12k",
    "3.5%", "350%", "٣٫٥%", "１２３", "²", "٤٠٠٠٠", "१२", "0x10", "1_000", "$", "£-5", "€ 1 250 000", "66y8m",
    "66y13m", "130y", "2026-02-30", "1899-12-31", "01/02/2026", "yes", "maybe", "own", "none", "joint", "Ana",
    "larger of the two", "prices up to 2.5%", "prices up to", "best each year", "<b>bold</b>",
    "a & b", "../../etc/passwd", "Balance", "Owner", "Inflation", "Essential spending a year",
    "\u202eabc", "\x9b31m",
    "{0}", "%s", "[red]", "[/]", "\\", "Income/State pension/From age", "/", "💥" * 40,
    "x" * 300, "x" * 40_000, " " * 40_000, "(" * 5_000, "9" * 400, "9" * 5_000, "1," * 3_000,
    "#REF!", "#N/A",
)  # fmt: skip
NUMBERS = (
    "0", "-0", "1", "-1", "0.5", "1.5", "100", "1e9", "1e15", "1e20", "-1e9", "1e-300", "1e308", "1e999",
    "nan", "inf", "-5", "2.5", "66", "112", "131", "1899", "2026", "2201", "43831", "2958465",
    "2958466", "-43831", "60", "9" * 400, "1e", "--1", "0.1.2", "0x1F", "٣", "",
)  # fmt: skip
ERRORS = ("#REF!", "#VALUE!", "#NAME?", "#DIV/0!", "#N/A", "#NUM!", "#NULL!", "#SPILL!", "#WRONG")


@dataclass
class CellXml:
    """One cell as it will be written: its type, what it holds, style and formula."""

    kind: str = ""  # the attribute t
    value: str = ""
    style: int = 0
    formula: str | None = None

    def write(self, place: str) -> str:
        kind = f' t="{self.kind}"' if self.kind else ""
        formula = f"<f>{escape(self.formula)}</f>" if self.formula is not None else ""
        if self.kind == "inlineStr":
            inside = f'<is><t xml:space="preserve">{_printable(self.value)}</t></is>'
        else:
            inside = f"<v>{_printable(self.value)}</v>" if self.value != "" else ""
        return f'<c r="{place}" s="{self.style}"{kind}>{formula}{inside}</c>'


@dataclass
class Draft:
    """A workbook to be: sheets of cells, and what else goes into the file."""

    sheets: dict[str, dict[tuple[int, int], CellXml]]
    extras: dict[str, str] = field(default_factory=dict)  # XML after the cells, by sheet
    hidden_rows: dict[str, set[int]] = field(default_factory=dict)
    hidden_sheets: set[str] = field(default_factory=set)
    date_1904: bool = False

    def copy(self) -> Draft:
        sheets = {
            title: {place: CellXml(c.kind, c.value, c.style, c.formula) for place, c in cells.items()}
            for title, cells in self.sheets.items()
        }
        return Draft(sheets, dict(self.extras))

    def without(self, titles: tuple[str, ...]) -> Draft:
        return Draft({title: cells for title, cells in self.sheets.items() if title not in titles})

    def content(self) -> bytes:
        """Bytes of the .xlsx file, written by hand so that anything at all can stand in it."""
        parts: dict[str, str] = {}
        listed, related, types = [], [], []
        for number, (title, cells) in enumerate(self.sheets.items(), start=1):
            parts[f"xl/worksheets/sheet{number}.xml"] = self._sheet(title, cells)
            hidden = ' state="hidden"' if title in self.hidden_sheets else ""
            name = escape(_printable(title), {'"': "&quot;"})
            listed.append(f'<sheet name="{name}" sheetId="{number}" r:id="rId{number}"{hidden}/>')
            related.append(
                f'<Relationship Id="rId{number}" Type="{OFFICE}/worksheet" '
                f'Target="worksheets/sheet{number}.xml"/>'
            )
            types.append(
                f'<Override PartName="/xl/worksheets/sheet{number}.xml" ContentType="{TYPE}.worksheet+xml"/>'
            )
        properties = '<workbookPr date1904="1"/>' if self.date_1904 else ""
        parts["xl/workbook.xml"] = (
            f'<workbook xmlns="{MAIN}" xmlns:r="{OFFICE}">{properties}<sheets>{"".join(listed)}</sheets>'
            "</workbook>"
        )
        parts["xl/_rels/workbook.xml.rels"] = (
            f'<Relationships xmlns="{PACKAGE}">{"".join(related)}<Relationship Id="styles" '
            f'Type="{OFFICE}/styles" Target="styles.xml"/></Relationships>'
        )
        parts["xl/styles.xml"] = STYLES
        parts["_rels/.rels"] = (
            f'<Relationships xmlns="{PACKAGE}"><Relationship Id="rId1" Type="{OFFICE}/officeDocument" '
            'Target="xl/workbook.xml"/></Relationships>'
        )
        parts["[Content_Types].xml"] = (
            f'<Types xmlns="{PACKAGE_TYPES}"><Default Extension="rels" ContentType="{RELATIONS}"/>'
            f'<Default Extension="xml" ContentType="application/xml"/><Override PartName="/xl/workbook.xml" '
            f'ContentType="{TYPE}.sheet.main+xml"/><Override PartName="/xl/styles.xml" '
            f'ContentType="{TYPE}.styles+xml"/>{"".join(types)}</Types>'
        )
        return packed({name: text.encode("utf-8", "surrogatepass") for name, text in parts.items()})

    def _sheet(self, title: str, cells: dict[tuple[int, int], CellXml]) -> str:
        rows: dict[int, list[str]] = {}
        for (row, column), cell in sorted(cells.items()):
            rows.setdefault(row, []).append(cell.write(f"{letters(column)}{row}"))
        hidden = self.hidden_rows.get(title, set())
        attributes = {row: ' hidden="1"' for row in hidden}
        written = "".join(
            f'<row r="{row}"{attributes.get(row, "")}>{"".join(texts)}</row>' for row, texts in rows.items()
        )
        extra = self.extras.get(title, "")
        return f'<worksheet xmlns="{MAIN}"><sheetData>{written}</sheetData>{extra}</worksheet>'


MAIN = "http://schemas.openxmlformats.org/spreadsheetml/2006/main"
OFFICE = "http://schemas.openxmlformats.org/officeDocument/2006/relationships"
PACKAGE = "http://schemas.openxmlformats.org/package/2006/relationships"
PACKAGE_TYPES = "http://schemas.openxmlformats.org/package/2006/content-types"
RELATIONS = "application/vnd.openxmlformats-package.relationships+xml"
TYPE = "application/vnd.openxmlformats-officedocument.spreadsheetml"
_FORMATS = "".join(
    f'<numFmt numFmtId="{164 + k}" formatCode="{escape(code, {chr(34): "&quot;"})}"/>'
    for k, code in enumerate(FORMAT_CODES)
)
_STYLED = "".join(
    f'<xf numFmtId="{164 + k}" fontId="0" fillId="0" borderId="0" xfId="0" applyNumberFormat="1"/>'
    for k in range(len(FORMAT_CODES))
)
STYLES = (
    f'<styleSheet xmlns="{MAIN}"><numFmts count="{len(FORMAT_CODES)}">{_FORMATS}</numFmts><fonts count="1">'
    '<font/></fonts><fills count="1"><fill><patternFill/></fill></fills><borders count="1"><border/>'
    '</borders><cellStyleXfs count="1"><xf numFmtId="0" fontId="0" fillId="0" borderId="0"/></cellStyleXfs>'
    f'<cellXfs count="{len(FORMAT_CODES)}">{_STYLED}</cellXfs></styleSheet>'
)
LONGEST_LABEL = 60
RARELY_FILLED = ("History", "Life table", "Last year", "Start choices", "Tax", "Practice", "What-ifs")
PERCENT, DAY = FORMAT_CODES.index("0.0%"), FORMAT_CODES.index("yyyy-mm-dd")


def _printable(text: str) -> str:
    """Text as XML 1.0 allows it."""
    allowed = re.sub("[\x00-\x08\x0b\x0c\x0e-\x1f\ud800-\udfff\ufffe\uffff]", "", text)
    return escape(allowed)


def letters(column: int) -> str:
    text = ""
    while column:
        column, rest = divmod(column - 1, 26)
        text = chr(65 + rest) + text
    return text


def packed(parts: dict[str, bytes]) -> bytes:
    content = BytesIO()
    with zipfile.ZipFile(content, "w", zipfile.ZIP_DEFLATED, compresslevel=1) as archive:
        for name, part in parts.items():
            archive.writestr(name, part)
    return content.getvalue()


def unpacked(content: bytes) -> dict[str, bytes]:
    with zipfile.ZipFile(BytesIO(content)) as archive:
        return {name: archive.read(name) for name in archive.namelist()}


def draft_of(content: bytes) -> Draft:
    """Bare cells of a workbook: values, dates and percentages, without its guide or drop-down lists."""
    import openpyxl

    sheets: dict[str, dict[tuple[int, int], CellXml]] = {}
    for sheet in openpyxl.load_workbook(BytesIO(content)).worksheets:
        cells: dict[tuple[int, int], CellXml] = {}
        for cell in sheet._cells.values():
            value = cell.value
            if value is None or (isinstance(value, str) and len(value) > LONGEST_LABEL):
                continue  # notes for the reader
            if isinstance(value, datetime | date):
                days = (date(value.year, value.month, value.day) - date(1899, 12, 30)).days
                cells[cell.row, cell.column] = CellXml("", str(days), DAY)
            elif isinstance(value, bool):
                cells[cell.row, cell.column] = CellXml("b", str(int(value)))
            elif isinstance(value, int | float):
                style = PERCENT if "%" in str(cell.number_format) else 0
                cells[cell.row, cell.column] = CellXml("", repr(value), style)
            else:
                cells[cell.row, cell.column] = CellXml("inlineStr", str(value))
        if sheet.title not in ("Guide", "Lists"):
            sheets[sheet.title] = cells
    return Draft(sheets)


# ------------------------------------------------------------------ mutations of a draft


def _some_cell(draft: Draft, chance: random.Random) -> tuple[str, tuple[int, int]]:
    title = chance.choice([title for title, cells in draft.sheets.items() if cells])
    return title, chance.choice(list(draft.sheets[title]))


def _set_cell(draft: Draft, chance: random.Random) -> None:
    title, place = _some_cell(draft, chance)
    cells = draft.sheets[title]
    kind = chance.choice(
        ("text", "number", "error", "bool", "iso", "formula", "clear", "other", "swap", "style")
    )
    if kind == "text":
        cells[place] = CellXml("inlineStr", chance.choice(TEXTS))
    elif kind == "number":
        cells[place] = CellXml("", chance.choice(NUMBERS), chance.randrange(len(FORMAT_CODES)))
    elif kind == "error":
        cells[place] = CellXml("e", chance.choice(ERRORS))
    elif kind == "bool":
        cells[place] = CellXml("b", chance.choice(("0", "1", "2", "x")))
    elif kind == "iso":
        cells[place] = CellXml(
            "d", chance.choice(("1960-05-14", "1066-01-01", "2026-13-01", "12:30:00", "x"))
        )
    elif kind == "formula":
        stored = chance.choice(("", "5", "Ana", "#REF!", "1e999"))
        kind = chance.choice(("", "str", "e", "b"))
        cells[place] = CellXml(kind, stored, 0, chance.choice(("A1+1", "[1]Other!A1", 'WEBSERVICE("x")', "")))
    elif kind == "clear":
        del cells[place]
    elif kind == "other":
        cells[place] = CellXml(
            chance.choice(("s", "n", "str", "zz")), chance.choice(NUMBERS), chance.choice((0, 99))
        )
    elif kind == "swap":
        other = chance.choice(list(cells))
        cells[place], cells[other] = cells[other], cells[place]
    else:
        cells[place].style = chance.randrange(len(FORMAT_CODES))


def _text_noise(draft: Draft, chance: random.Random) -> None:
    title, place = _some_cell(draft, chance)
    cell = draft.sheets[title][place]
    text = list(cell.value)
    for _ in range(chance.randint(1, 3)):
        at = chance.randint(0, len(text))
        text[at : at + chance.randint(0, 2)] = chance.choice(
            ("", " ", "\u00a0", "é", "\n", "a", "1", "%", "-")
        )
    draft.sheets[title][place] = CellXml("inlineStr", "".join(text), cell.style)


def _rename_sheet(draft: Draft, chance: random.Random) -> None:
    title = chance.choice(list(draft.sheets))
    new = chance.choice(
        (title.lower(), title + " ", title[:-1], "Sheet1", "", "a/b", "x" * 60, title * 2, "'; --")
    )
    draft.sheets = {new if t == title else t: cells for t, cells in draft.sheets.items()}


def _drop_sheet(draft: Draft, chance: random.Random) -> None:
    del draft.sheets[chance.choice(list(draft.sheets))]


def _shuffle_sheets(draft: Draft, chance: random.Random) -> None:
    titles = list(draft.sheets)
    chance.shuffle(titles)
    draft.sheets = {title: draft.sheets[title] for title in titles}
    draft.hidden_sheets = set(chance.sample(titles, k=min(3, len(titles))))


def _move_rows(draft: Draft, chance: random.Random) -> None:
    title, (row, column) = _some_cell(draft, chance)
    down, right = chance.choice(((1, 0), (-1, 0), (0, 1), (0, -1), (3, 2), (1_000_000, 0), (0, 16_000)))
    moved = {}
    for (r, c), cell in draft.sheets[title].items():
        moves = r >= row and c >= column
        moved[max(1, r + down * moves), max(1, c + right * moves)] = cell
    draft.sheets[title] = moved


def _delete_row_or_column(draft: Draft, chance: random.Random) -> None:
    title, (row, column) = _some_cell(draft, chance)
    axis, at = chance.choice(((0, row), (1, column)))
    draft.sheets[title] = {place: cell for place, cell in draft.sheets[title].items() if place[axis] != at}


def _repeat_rows(draft: Draft, chance: random.Random) -> None:
    title, (row, _) = _some_cell(draft, chance)
    cells = draft.sheets[title]
    line = {column: cell for (r, column), cell in cells.items() if r == row}
    last = max(r for r, _ in cells)
    for k in range(chance.choice((1, 2, 20, 600))):
        cells |= {(last + 1 + k, column): cell for column, cell in line.items()}


def _merge(draft: Draft, chance: random.Random) -> None:
    title, (row, column) = _some_cell(draft, chance)
    end = chance.choice(((0, 1), (1, 0), (2, 3), (1_048_575, 0), (1_000_000, 16_000), (200, 60)))
    first, last = f"{letters(column)}{row}", f"{letters(column + end[1])}{row + end[0]}"
    reference = chance.choice((f"{first}:{last}", f"{last}:{first}", first, "A:XFD", "#REF!"))
    draft.extras[title] = f'<mergeCells count="1"><mergeCell ref="{reference}"/></mergeCells>'


def _hide_rows(draft: Draft, chance: random.Random) -> None:
    title, _ = _some_cell(draft, chance)
    rows = {row for row, _ in draft.sheets[title]}
    draft.hidden_rows[title] = {row for row in rows if chance.random() < 0.5}


def _huge_sheet(draft: Draft, chance: random.Random) -> None:
    title, _ = _some_cell(draft, chance)
    rows, columns = chance.choice(((1, 16_384), (3_000, 1), (150, 100), (2, 2_000)))
    made = chance.choice((CellXml("inlineStr", "Balance"), CellXml("", "1"), CellXml("inlineStr", "x y z")))
    top = chance.choice((1, 40, 1_000_000))
    for row in range(top, top + rows):
        for column in range(1, columns + 1):
            draft.sheets[title].setdefault((row, column), made)


def _date_system(draft: Draft, chance: random.Random) -> None:
    draft.date_1904 = True
    if chance.random() < 0.5:
        _set_cell(draft, chance)


def _several_cells(draft: Draft, chance: random.Random) -> None:
    for _ in range(chance.randint(2, 12)):
        _set_cell(draft, chance)


DRAFT_MUTATIONS: tuple[tuple[int, Callable[[Draft, random.Random], None]], ...] = (
    (10, _set_cell), (6, _several_cells), (6, _text_noise), (2, _rename_sheet), (1, _drop_sheet),
    (1, _shuffle_sheets), (3, _move_rows), (2, _delete_row_or_column), (2, _repeat_rows), (2, _merge),
    (1, _hide_rows), (0, _huge_sheet), (2, _date_system),
)  # fmt: skip


# ------------------------------------------------------------------ mutations of the bytes


def _truncated(content: bytes, chance: random.Random) -> bytes:
    return content[: chance.randrange(len(content))]


def _bits_flipped(content: bytes, chance: random.Random) -> bytes:
    changed = bytearray(content)
    for _ in range(chance.choice((1, 1, 2, 8, 64))):
        changed[chance.randrange(len(changed))] ^= 1 << chance.randrange(8)
    return bytes(changed)


def _part_changed(content: bytes, chance: random.Random) -> bytes:
    """Cut, repeat or overwrite a stretch of one part, inside a sound archive."""
    parts = unpacked(content)
    name = chance.choice(list(parts))
    text = bytearray(parts[name])
    start = chance.randrange(len(text) + 1)
    end = min(len(text), start + chance.choice((1, 5, 50, 500)))
    way = chance.randrange(4)
    if way == 0:
        del text[start:end]
    elif way == 1:
        text[start:start] = text[start:end]
    elif way == 2:
        text[start:end] = bytes(chance.randrange(256) for _ in range(end - start))
    else:
        digits = [at for at, byte in enumerate(text) if 48 <= byte <= 57] or [0]
        for at in chance.sample(digits, k=min(4, len(digits))):
            text[at : at + 1] = chance.choice((b"9", b"0", b"-1", b"99999999", b"x"))
    return packed(parts | {name: bytes(text)})


def _part_dropped(content: bytes, chance: random.Random) -> bytes:
    parts = unpacked(content)
    del parts[chance.choice(list(parts))]
    return packed(parts)


def _parts_swapped(content: bytes, chance: random.Random) -> bytes:
    parts = unpacked(content)
    one, other = chance.sample(list(parts), k=2)
    parts[one], parts[other] = parts[other], parts[one]
    return packed(parts)


BYTE_MUTATIONS: tuple[Callable[[bytes, random.Random], bytes], ...] = (
    _truncated, _bits_flipped, _bits_flipped, _part_changed, _part_changed, _part_dropped, _parts_swapped,
)  # fmt: skip


def smallest() -> bytes:
    """The least that can be planned: two people, two accounts, an income, and no sheet that may be absent."""
    from client_workbooks import minimal

    from planner.workbook.saving import workbook_bytes
    from planner.workbook.writing import make_workbook

    values = minimal()
    book = make_workbook(values)
    for title in set(book.sheetnames) - set(values):
        del book[title]
    return workbook_bytes(book)


class Mutations:
    """Mutated workbooks by number; the same number gives the same bytes."""

    def __init__(self, originals: dict[str, bytes], seed: int = 1) -> None:
        self.originals = [originals[name] for name in sorted(originals)]
        self.drafts = [draft_of(content) for content in self.originals]
        self.lean = [draft.without(RARELY_FILLED) for draft in self.drafts]
        self.bare = [draft.content() for draft in self.lean]
        self.seed = seed

    def make(self, number: int) -> tuple[str, bytes]:
        """Return what was done, and the bytes."""
        chance = random.Random(self.seed * 1_000_003 + number)
        # Mostly the first, which has the fewest sheets and reads fastest.
        which = 0 if chance.random() < 0.6 else chance.randrange(len(self.drafts))
        if number % 500 == 499:  # costly, so counted rather than drawn
            draft = self.lean[which].copy()
            _huge_sheet(draft, chance)
            return "_huge_sheet", draft.content()
        if chance.random() < 0.4:
            change = chance.choice(BYTE_MUTATIONS)
            # The bare file is all substance; the full one has styles, drop-down lists and a guide.
            full = chance.random() < 0.1
            return change.__name__, change((self.originals if full else self.bare)[which], chance)
        draft = (self.drafts if chance.random() < 0.2 else self.lean)[which].copy()
        weights, changes = zip(*DRAFT_MUTATIONS, strict=True)
        mutate = chance.choices(changes, weights)[0]
        mutate(draft, chance)
        return mutate.__name__, draft.content()


# ------------------------------------------------------------------ reading them


class TooSlow(BaseException):
    """Raised by the alarm; no exception that the program may catch."""


def _too_slow(*_: object) -> None:
    raise TooSlow


def _read(path: Path) -> tuple[int, str]:
    """Read a workbook as the commands do, without printing: the exit code it leads to, or the fault."""
    from planner.diagnostics import InputError
    from planner.workbook.reading import read_workbook

    try:
        read_workbook(path)
    except InputError as error:
        return 2, "" if error.diagnostics else "refused without a reason"
    except Exception as error:
        return 1, f"{type(error).__name__}: {error}"
    return 0, ""


def _check(path: Path) -> tuple[int, str]:
    """Run `planner check`: its exit code, and what was wrong with that, or nothing."""
    from typer.testing import CliRunner

    from planner.cli import app

    result = CliRunner().invoke(app, ["check", str(path)])
    if result.exit_code not in (0, 2):
        return result.exit_code, f"exit {result.exit_code}: {result.stderr[-500:]} {result.exception!r}"
    if "Traceback" in result.output or "program failed" in result.output:
        return result.exit_code, f"a traceback: {result.output[-500:]}"
    if result.exit_code == 2 and not re.search(r"^error .+\([a-z0-9-]+\)$", result.stderr, re.MULTILINE):
        return 2, f"refused without a reason: {result.stderr[-500:]!r}"
    return result.exit_code, ""


def fault_of(path: Path, content: bytes, run: Callable[[Path], tuple[int, str]]) -> tuple[int, str]:
    """Read a workbook within the time; return the exit code and what was wrong, or nothing."""
    path.write_bytes(content)
    path.chmod(0o444)
    for timer, number, seconds in TIMERS:
        signal.signal(number, _too_slow)
        signal.setitimer(timer, seconds)
    try:
        code, fault = run(path)
    except TooSlow:
        code, fault = -1, f"over {SECONDS} s"
    finally:
        for timer, _, _ in TIMERS:
            signal.setitimer(timer, 0)
    if not fault and path.read_bytes() != content:
        fault = "the workbook was changed"
    elif others := [other.name for other in path.parent.iterdir() if other != path]:
        fault = f"left behind {others}"
    path.chmod(0o644)
    return code, fault


def _check_plans(path: Path, content: bytes) -> str:
    """Plan a workbook on a coarse grid; return what was wrong, or nothing."""
    import numpy as np

    from planner.diagnostics import InputError
    from planner.optimum.recursion import SolverSettings, solve
    from planner.problem_building import build_problem
    from planner.simulation import draw_scenarios, simulate
    from planner.workbook.reading import read_workbook

    path.write_bytes(content)
    try:
        problem = build_problem(read_workbook(path).household)
        policy = solve(problem, SolverSettings(8, 8, 6, 32))
        paths = simulate(problem, policy, draw_scenarios(problem, 200, np.random.default_rng(1)))
    except InputError:
        return ""
    except Exception as error:
        return f"{type(error).__name__}: {error}"
    return "" if np.isfinite(paths.spending).all() else "spending is not finite"


def main() -> int:
    root = Path(__file__).parents[1]
    sys.path.insert(0, str(root))
    parser = argparse.ArgumentParser(description="Read mutated client workbooks.")
    parser.add_argument("--mutations", type=int, default=20_000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--only", type=int, help="repeat this one")
    parser.add_argument("--plans", type=int, default=0, help="plan so many of those that can be read")
    parser.add_argument("--check-every", type=int, default=1, help="run the command on every n-th only")
    parser.add_argument("--keep", type=Path, help="write the workbooks that fail to this folder")
    options = parser.parse_args()
    os.environ["COLUMNS"] = "80"
    resource.setrlimit(resource.RLIMIT_AS, (MEMORY, MEMORY))

    samples = {path.name: path.read_bytes() for path in (root / "sample_clients").glob("*.xlsx")}
    mutations = Mutations({"": smallest()} | samples, options.seed)
    codes = {0: 0, 2: 0}
    faults, slowest, planned = 0, (0.0, 0), 0
    numbers = range(options.mutations) if options.only is None else [options.only]
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "client.xlsx"
        for number in numbers:
            what, content = mutations.make(number)
            start = process_time()
            run = _check if number % options.check_every == 0 or what == "_huge_sheet" else _read
            code, fault = fault_of(path, content, run)
            slowest = max(slowest, (process_time() - start, number))
            codes[code] = codes.get(code, 0) + 1
            if not fault and code == 0 and planned < options.plans:
                planned += 1
                fault = _check_plans(path, content)
            if fault:
                faults += 1
                print(f"mutation {number} ({what}): {fault}", flush=True)
                if options.keep is not None:
                    options.keep.mkdir(parents=True, exist_ok=True)
                    (options.keep / f"mutation_{number}.xlsx").write_bytes(content)
            path.chmod(0o644)
            path.unlink()
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    print(
        f"{sum(codes.values())} mutations: {codes[0]} read, {codes[2]} refused, {faults} faults; slowest "
        f"{slowest[0]:.1f} s (mutation {slowest[1]}), {memory / 1e6:.0f} MB"
    )
    return min(faults, 1)


if __name__ == "__main__":
    sys.exit(main())

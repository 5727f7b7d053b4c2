"""Files that are no sound .xlsx workbook: each a refusal with its own code, never a traceback."""

import io
import re
import zipfile

import openpyxl
import pytest
from client_workbooks import found, saved

from planner.diagnostics import InputError
from planner.workbook.reading import read_workbook

OLE_HEADER = b"\xd0\xcf\x11\xe0\xa1\xb1\x1a\xe1"


def archive(parts):
    content = io.BytesIO()
    with zipfile.ZipFile(content, "w") as zipped:
        for name, text in parts.items():
            zipped.writestr(name, text)
    return content.getvalue()


CASES = {
    "empty": (b"", "file-empty"),
    "password": (OLE_HEADER + bytes(500) + "EncryptedPackage".encode("utf-16-le"), "file-encrypted"),
    "xls": (OLE_HEADER + bytes(500) + "Workbook".encode("utf-16-le"), "file-old-format"),
    "ods": (archive({"mimetype": "application/vnd.oasis.opendocument.spreadsheet"}), "file-open-document"),
    "xlsm": (archive({"xl/workbook.xml": "<a/>", "xl/vbaProject.bin": "x"}), "file-macros"),
    "csv": (b"Client name,Sample\n", "file-not-xlsx"),
    "zip": (archive({"letter.txt": "hello"}), "file-not-xlsx"),
    "damaged": (archive({"xl/workbook.xml": "<workbook", "[Content_Types].xml": "<Types/>"}), "file-damaged"),
}


@pytest.mark.parametrize(("content", "code"), CASES.values(), ids=CASES)
def test_refused_with_the_reason(tmp_path, content, code):
    path = tmp_path / "client.xlsx"
    path.write_bytes(content)
    assert found(path) == [(code, "client.xlsx")]


@pytest.mark.parametrize("share", [0.1, 0.5, 0.9, 0.999])
def test_cut_short(tmp_path, share):
    path = saved(tmp_path)
    content = path.read_bytes()
    path.write_bytes(content[: int(len(content) * share)])
    assert found(path) == [("file-damaged", path.name)]


def test_a_damaged_sheet_inside_a_sound_archive(tmp_path):
    path = saved(tmp_path)
    with zipfile.ZipFile(path) as zipped:
        parts = {name: zipped.read(name) for name in zipped.namelist()}
    sheet = "xl/worksheets/sheet3.xml"
    parts[sheet] = parts[sheet][: len(parts[sheet]) // 2]
    path.write_bytes(archive(parts))
    assert found(path) == [("file-damaged", path.name)]


def test_unpacking_to_a_vast_size_is_refused(tmp_path, monkeypatch):
    monkeypatch.setattr("planner.workbook.archive.LARGEST_UNPACKED", 1000)
    assert found(saved(tmp_path))[0][0] == "file-too-large"


def test_no_such_file(tmp_path):
    with pytest.raises(FileNotFoundError):
        read_workbook(tmp_path / "none.xlsx")


def test_the_file_is_left_as_it_is(tmp_path):
    """Same bytes, same time of change; a file that may not be written is read all the same."""
    path = saved(tmp_path)
    path.chmod(0o444)
    before, changed = path.read_bytes(), path.stat().st_mtime_ns
    read_workbook(path)
    assert path.read_bytes() == before
    assert path.stat().st_mtime_ns == changed
    assert [p.name for p in tmp_path.iterdir()] == [path.name]


def test_a_workbook_of_something_else(tmp_path):
    path = tmp_path / "client.xlsx"
    openpyxl.Workbook().save(path)
    with pytest.raises(InputError) as refused:
        read_workbook(path)
    missing = {d.where for d in refused.value.diagnostics if d.code == "sheet-missing"}
    assert missing == {"Household", "People", "Accounts", "Spending", "Markets", "Portfolios"}


def changed(path, part, change):
    """The workbook with one part's text changed."""
    with zipfile.ZipFile(path) as zipped:
        parts = {name: zipped.read(name) for name in zipped.namelist()}
    parts[part] = change(parts[part].decode("utf-8")).encode("utf-8")
    path.write_bytes(archive(parts))
    return path


SHEET = "xl/worksheets/sheet3.xml"
ENTITIES = '<!DOCTYPE w [<!ENTITY a "aaaaaaaaaa"><!ENTITY b "&a;&a;&a;&a;&a;&a;&a;&a;">]>'
TAIL = "</sheetData>"
HOSTILE = {
    "entities": (lambda text: ENTITIES + text, "file-entities"),
    "nested": (lambda text: text.replace(TAIL, "<a>" * 200 + "</a>" * 200 + TAIL), "file-damaged"),
    "elements": (lambda text: text.replace(TAIL, "<row/>" * 400_001 + TAIL), "file-too-large"),
    "merged": (
        lambda text: text.replace(TAIL, TAIL + '<mergeCells><mergeCell ref="A1:XFD9"/></mergeCells>'),
        "file-too-large",
    ),
    "merged columns": (
        lambda text: text.replace(TAIL, TAIL + '<mergeCells><mergeCell ref="A:C"/></mergeCells>'),
        "file-too-large",
    ),
}


@pytest.mark.parametrize(("change", "code"), HOSTILE.values(), ids=HOSTILE)
def test_what_would_take_the_memory_is_refused_before_it_is_opened(tmp_path, monkeypatch, change, code):
    path = changed(saved(tmp_path), SHEET, change)
    monkeypatch.setattr("openpyxl.load_workbook", None)  # never reached
    assert found(path) == [(code, path.name)]


def test_a_bomb_is_not_unpacked(tmp_path):
    """100 MB of zeros in 100 kB; also where the part that says what the file is is the bomb."""
    for name in ("xl/media/image1.png", "mimetype"):
        content = io.BytesIO()
        with zipfile.ZipFile(content, "w", zipfile.ZIP_DEFLATED) as zipped:
            zipped.writestr("xl/workbook.xml", "<a/>")
            zipped.writestr(name, bytes(100_000_000))
        path = tmp_path / "client.xlsx"
        path.write_bytes(content.getvalue())
        assert found(path) == [("file-too-large", "client.xlsx")]


def test_thousands_of_parts(tmp_path):
    path = tmp_path / "client.xlsx"
    path.write_bytes(archive({"xl/workbook.xml": "<a/>"} | {f"xl/{k}.xml": "" for k in range(1_000)}))
    assert found(path) == [("file-too-large", "client.xlsx")]


def test_pictures_and_parts_that_are_no_xml_are_let_be(tmp_path):
    path = saved(tmp_path)
    with zipfile.ZipFile(path, "a") as zipped:
        zipped.writestr("xl/media/image1.png", b"\x89PNG\r\n")
        zipped.writestr("xl/drawings/vmlDrawing1.vml", "<xml><br></xml>")
    assert found(path) == []


def fill(sheet, rows, columns, value):
    def edit(workbook):
        for row in range(40, 40 + rows):
            for column in range(1, 1 + columns):
                workbook[sheet].cell(row, column, value)

    return edit


def test_more_cells_or_rows_than_can_be_planned_with(tmp_path):
    codes = [code for code, _ in found(saved(tmp_path, edit=fill("Income", 201, 100, "x")))]
    assert codes == ["sheet-too-large"]
    at = dict(found(saved(tmp_path, edit=fill("Accounts", 500, 1, "x"))))
    assert at["table-too-long"].startswith("Accounts!")


def set_cell(sheet, row, column, value):
    return lambda workbook: setattr(workbook[sheet].cell(row, column), "value", value)


def test_texts_too_long_and_numbers_beyond_all_bounds(tmp_path):
    path = saved(tmp_path)
    accounts = openpyxl.load_workbook(path)["Accounts"]
    row = next(r[0].row for r in accounts.iter_rows() if r[0].value == "Bank")
    long = found(saved(tmp_path, edit=set_cell("Accounts", row, 1, "x" * 201)))
    assert ("text-too-long", f"Accounts!A{row}") in long
    with zipfile.ZipFile(path) as zipped:
        part = next(name for name in zipped.namelist() if b"<v>300000</v>" in zipped.read(name))
    huge = changed(path, part, lambda text: text.replace("<v>300000</v>", "<v>1e999</v>"))
    assert found(huge) == [("number-not-finite", f"Accounts!D{row}")]


def test_a_number_format_that_is_not_there(tmp_path):
    """The dates can no longer be told from numbers, and are named; nothing else is the matter."""
    path = saved(tmp_path)
    pattern = r"<numFmts.*?</numFmts>"
    codes = [
        code for code, _ in found(changed(path, "xl/styles.xml", lambda text: re.sub(pattern, "", text)))
    ]
    assert codes == ["not-a-date"] * 3


def test_characters_that_steer_a_terminal_are_dropped(tmp_path):
    path = saved(tmp_path, edit=lambda book: None)
    book = openpyxl.load_workbook(path)
    place = next(c for row in book["Household"].iter_rows() for c in row if c.value == "Sample")
    place.value = "Sam\x9b31mple\u202e"
    book.save(path)
    assert read_workbook(path).household.client_name == "Sam31mple"

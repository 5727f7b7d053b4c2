"""Files that are no sound .xlsx workbook: each a refusal with its own code, never a traceback."""

import io
import os
import re
import struct
import zipfile
from pathlib import Path

import openpyxl
import pytest
from client_workbooks import found, saved
from fuzzing import MAIN, OFFICE, PACKAGE, TYPE
from openpyxl.chart import BarChart
from openpyxl.utils.datetime import CALENDAR_MAC_1904
from typer.testing import CliRunner

from planner.cli import app
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
    "xlsb": (
        archive({"[Content_Types].xml": "sheet.binary.macroEnabled.main", "xl/workbook.bin": "x"}),
        "file-binary",
    ),
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


def test_a_file_beyond_all_sizes_is_not_read_to_its_end(tmp_path):
    """Three gigabytes, and a device that never ends: the suite would notice the memory and the time."""
    path = tmp_path / "client.xlsx"
    with path.open("wb") as file:
        file.write(b"PK")
        file.truncate(3_000_000_000)  # takes no room: it is a hole
    assert found(path) == [("file-too-large", "client.xlsx")]


def test_pipes_and_devices_are_no_workbooks(tmp_path):
    """A pipe that nobody writes to would never end, and /dev/zero would never stop."""
    pipe = tmp_path / "client.xlsx"
    os.mkfifo(pipe)
    for path in (pipe, Path("/dev/zero")):
        result = CliRunner().invoke(app, ["check", str(path)])
        assert result.exit_code == 1
        assert result.stderr.endswith("this is a pipe or a device, not a file\n")
    with pytest.raises(IsADirectoryError):
        read_workbook(tmp_path)


def test_a_part_that_says_less_of_its_size_than_is_true(tmp_path):
    """It is unpacked as far as it says, 1 kB of 40 MB, and does not agree with its check sum."""
    packed = io.BytesIO()
    with zipfile.ZipFile(packed, "w", zipfile.ZIP_DEFLATED) as zipped:
        zipped.writestr("xl/workbook.xml", "<a/>")
        zipped.writestr("xl/a.xml", "<a>" + "<b/>" * 10_000_000 + "</a>")
    content = bytearray(packed.getvalue())
    entry = content.rfind(b"PK\x01\x02")  # of the last part, in the list at the end of the archive
    content[entry + 24 : entry + 28] = struct.pack("<I", 1_000)
    path = tmp_path / "client.xlsx"
    path.write_bytes(content)
    assert found(path) == [("file-damaged", "client.xlsx")]


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


def test_the_strict_form_is_refused_by_name(tmp_path):
    """It has other names for everything, so that no sheet would be found in it."""
    main, strict = (
        "schemas.openxmlformats.org/spreadsheetml/2006/main",
        "purl.oclc.org/ooxml/spreadsheetml/main",
    )
    path = changed(saved(tmp_path), "xl/workbook.xml", lambda text: text.replace(main, strict))
    assert found(path) == [("file-strict", path.name)]


def test_dates_of_the_1904_system(tmp_path):
    """The same days are stored as numbers smaller by 1,462, and read as the same days."""

    def since_1904(workbook):
        workbook.epoch = CALENDAR_MAC_1904

    path = saved(tmp_path, edit=since_1904)
    with zipfile.ZipFile(path) as zipped:
        assert b'date1904="1"' in zipped.read("xl/workbook.xml")
    assert read_workbook(path).household == read_workbook(saved(tmp_path)).household


def test_links_to_other_files_charts_and_repeated_parts_are_let_be(tmp_path):
    """What a formula took from another file is read as it was stored; nothing is looked up."""
    path = saved(tmp_path, edit=lambda book: book.create_chartsheet("Chart").add_chart(BarChart()))
    with zipfile.ZipFile(path) as zipped:
        parts = {name: zipped.read(name).decode("utf-8") for name in zipped.namelist()}
    part = next(name for name in parts if "<v>300000</v>" in parts[name])
    parts[part] = parts[part].replace("<v>300000</v>", "<f>[1]Other!A1</f><v>300000</v>")
    link = "xl/externalLinks/externalLink1.xml"
    parts[link] = (
        f'<externalLink xmlns="{MAIN}" xmlns:r="{OFFICE}"><externalBook r:id="rId1"><sheetNames>'
        '<sheetName val="Other"/></sheetNames></externalBook></externalLink>'
    )
    parts["xl/externalLinks/_rels/externalLink1.xml.rels"] = (
        f'<Relationships xmlns="{PACKAGE}"><Relationship Id="rId1" Type="{OFFICE}/externalLinkPath" '
        'Target="http://192.0.2.1/other.xlsx" TargetMode="External"/></Relationships>'
    )
    parts["xl/_rels/workbook.xml.rels"] = parts["xl/_rels/workbook.xml.rels"].replace(
        "</Relationships>",
        f'<Relationship Id="rId99" Type="{OFFICE}/externalLink" Target="externalLinks/externalLink1.xml"/>'
        "</Relationships>",
    )
    parts["[Content_Types].xml"] = parts["[Content_Types].xml"].replace(
        "</Types>", f'<Override PartName="/{link}" ContentType="{TYPE}.externalLink+xml"/></Types>'
    )
    parts["xl/workbook.xml"] = parts["xl/workbook.xml"].replace(
        "</sheets>",
        f'</sheets><externalReferences><externalReference xmlns:r="{OFFICE}" r:id="rId99"/>'
        "</externalReferences>",
    )
    path.write_bytes(archive(parts))
    assert openpyxl.load_workbook(path)._external_links  # or this would test nothing
    assert read_workbook(path).household == read_workbook(saved(tmp_path)).household


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

"""Files that are no sound .xlsx workbook: each a refusal with its own code, never a traceback."""

import io
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

"""Workbooks opened and saved by LibreOffice, and formulas that it has calculated."""

import shutil
import subprocess

import pytest
from client_workbooks import ROOT, SAMPLES, found, minimal, saved

from planner.diagnostics import InputError
from planner.workbook.reading import read_workbook

SOFFICE = shutil.which("soffice") or shutil.which("libreoffice")
pytestmark = pytest.mark.skipif(SOFFICE is None, reason="LibreOffice is not installed")

ORIGINALS = {path.name: path for path in (*SAMPLES.glob("*.xlsx"), ROOT / "templates/client_workbook.xlsx")}


def _cell_of(sheet, label):
    """Cell to the right of a label."""
    for row in sheet.iter_rows(max_col=2):
        if row[0].value == label:
            return row[1]
    raise AssertionError(f"no label {label}")


def _with_formulas(workbook):
    _cell_of(workbook["Spending"], "Essential spending a year").value = "=2500*12"
    _cell_of(workbook["Markets"], "Inflation").value = "=ROUND(1.025-1,4)"
    _cell_of(workbook["Household"], "Plan date").value = "=DATE(2026,1,1)"
    _cell_of(workbook["Household"], "Client name").value = '="Sam"&"ple"'
    workbook["Accounts"].cell(_row_of(workbook["Accounts"], "Pot"), 4).value = "=SUM(150000,250000)"


def _row_of(sheet, name):
    return next(row[0].row for row in sheet.iter_rows(max_col=1) if row[0].value == name)


@pytest.fixture(scope="module")
def converted(tmp_path_factory):
    """Everything converted once: LibreOffice takes seconds to start."""
    folder = tmp_path_factory.mktemp("office")
    source, target = folder / "from", folder / "to"
    source.mkdir()
    shutil.move(saved(source, minimal(), _with_formulas), source / "formulas.xlsx")
    shutil.move(saved(source, minimal()), source / "minimal.xlsx")
    files = [*ORIGINALS.values(), source / "formulas.xlsx"]
    profile = f"-env:UserInstallation=file://{folder}/profile"
    for suffix, which in (("xlsx", files), ("ods", files[-1:]), ("xls", files[-1:])):
        command = [SOFFICE, profile, "--headless", "--convert-to", suffix, "--outdir", str(target)]
        subprocess.run([*command, *map(str, which)], check=True, capture_output=True, timeout=120)
    shutil.move(source / "minimal.xlsx", target / "minimal.xlsx")
    shutil.move(source / "formulas.xlsx", target / "formulas_never_opened.xlsx")
    return target


def _outcome(path):
    """Household, or None, and the problems by code and cell."""
    try:
        household = read_workbook(path).household
    except InputError:
        household = None
    return household, [(code, where.replace(path.name, "")) for code, where in found(path)]


@pytest.mark.parametrize("name", ORIGINALS)
def test_saved_by_libreoffice_reads_to_the_same(converted, name):
    household, problems = _outcome(converted / name)
    expected, expected_problems = _outcome(ORIGINALS[name])
    assert household == expected
    # Saving calculates, so a formula that had no stored value has one afterwards.
    assert problems == [problem for problem in expected_problems if problem[0] != "formula-not-computed"]


def test_formulas_calculated_by_libreoffice(converted):
    """To what the same workbook with typed values reads to; before, every formula is named."""
    household, problems = _outcome(converted / "formulas.xlsx")
    assert (household, problems) == _outcome(converted / "minimal.xlsx")
    _, before = _outcome(converted / "formulas_never_opened.xlsx")
    assert [code for code, _ in before].count("formula-not-computed") == 5


def test_its_other_formats_are_refused_by_name(converted):
    assert found(converted / "formulas.ods") == [("file-open-document", "formulas.ods")]
    assert found(converted / "formulas.xls") == [("file-old-format", "formulas.xls")]

"""The firm's logo: taken from the workbook's folder, PNG or JPEG, within limits, never in the way."""

import io
from dataclasses import replace

import client_workbooks
import plan_builder
import pytest
from PIL import Image
from pypdf import PdfReader

from planner.reports.pdf import render_pdf
from planner.workbook.logo import MOST_BYTES, MOST_PIXELS, logo_problem, picture_size
from planner.workbook.reading import read_workbook


def picture(kind: str, size: tuple[int, int] = (80, 40)) -> bytes:
    stream = io.BytesIO()
    Image.new("RGB", size, "navy").save(stream, kind)
    return stream.getvalue()


def workbook(folder, name: str):
    values = client_workbooks.minimal() | {"Practice": {"Logo file": name}}
    return read_workbook(client_workbooks.saved(folder, values))


@pytest.mark.parametrize("kind", ["PNG", "JPEG"])
def test_a_logo_beside_the_workbook_is_drawn_on_page_one(tmp_path, monkeypatch, kind):
    """Whatever folder the program is started in."""
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    monkeypatch.chdir(elsewhere)
    (tmp_path / "logo").write_bytes(picture(kind))
    read = workbook(tmp_path, "logo")
    assert not [w for w in read.warnings if w.code == "logo-unusable"]
    practice = replace(plan_builder.PRACTICE, logo_file=read.household.practice.logo_file)
    document = render_pdf(plan_builder.build(plan_builder.couple(practice=practice)))
    pages = PdfReader(io.BytesIO(document)).pages
    assert len(pages[0].images) == 1
    assert not any(page.images for page in pages[1:])


def unusable(folder):
    (folder / "text.png").write_bytes(b"no picture")
    (folder / "cut.png").write_bytes(picture("PNG", (300, 300))[:150])
    (folder / "cut.jpg").write_bytes(picture("JPEG")[:30])
    (folder / "gif.gif").write_bytes(picture("GIF"))
    (folder / "wide.png").write_bytes(picture("PNG", (MOST_PIXELS + 1, 1)))
    (folder / "heavy.png").write_bytes(picture("PNG") + bytes(MOST_BYTES))
    outside = folder / "outside"
    outside.mkdir()
    (outside / "logo.png").write_bytes(picture("PNG"))
    return (
        "text.png",
        "cut.png",
        "cut.jpg",
        "gif.gif",
        "wide.png",
        "heavy.png",
        "none.png",
        "outside/logo.png",
    )


def test_a_logo_that_cannot_be_used_is_a_warning_at_its_cell(tmp_path):
    for name in unusable(tmp_path):
        read = workbook(tmp_path, name)
        (warning,) = [w for w in read.warnings if w.code == "logo-unusable"]
        assert warning.where.startswith("Practice!B"), name
        assert warning.severity == "warning"
        assert "without a logo" in warning.message
        assert read.household.practice.logo_file == ""


def test_a_bomb_is_refused_by_its_head_alone(tmp_path):
    """A PNG that claims 100,000 points a side is never decoded."""
    head = picture("PNG")
    claimed = head[:16] + (100_000).to_bytes(4, "big") * 2 + head[24:]
    path = tmp_path / "bomb.png"
    path.write_bytes(claimed)
    assert "100000 x 100000" in str(logo_problem(path, tmp_path))


@pytest.mark.parametrize("kind", ["PNG", "JPEG"])
def test_the_head_gives_the_size(kind):
    assert picture_size(picture(kind, (123, 45))) == (123, 45)


def test_no_logo_named_is_no_warning(tmp_path):
    assert not [w for w in workbook(tmp_path, "").warnings if w.code == "logo-unusable"]

"""True size of what is printed, read back from the files."""

import re
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pytest

from hybridtrack.report.target_print import sheet_pdf, sheet_svg, write_sheet
from hybridtrack.report.target_sheet import SHEETS_MM, Sheet, fitted, lay_out
from tests.report.chromium import Tab, chromium_tab
from tests.report.test_target_sheet import a_target

SVG = "{http://www.w3.org/2000/svg}"
# A point of PDF is 1/72 inch (ISO 32000-1, 8.3.2.3), an inch 25.4 mm.
MM_PER_POINT = 25.4 / 72.0


def svg_boxes(text: str) -> np.ndarray:
    """Boxes (N, 4) x, y, width, height of the board's path, mm."""
    path = next(e for e in ElementTree.fromstring(text).iter(f"{SVG}path") if e.get("id") == "board").get("d")
    assert path is not None
    return np.array(re.findall(r"M([\d.]+) ([\d.]+)h([\d.]+)v([\d.]+)h-[\d.]+z", path), float)


def pdf_boxes(data: bytes) -> np.ndarray:
    """Boxes (N, 4) of the PDF's path, mm from the upper left corner."""
    height = media_box(data)[1]
    points = np.array(re.findall(r"([\d.]+) ([\d.]+) ([\d.]+) ([\d.]+) re", data.decode("latin-1")), float)
    boxes = points * MM_PER_POINT
    boxes[:, 1] = height - boxes[:, 1] - boxes[:, 3]
    return boxes


def media_box(data: bytes) -> tuple[float, float]:
    """Width and height of the page, mm."""
    found = re.search(r"/MediaBox \[0 0 ([\d.]+) ([\d.]+)\]", data.decode("latin-1"))
    assert found is not None
    return float(found[1]) * MM_PER_POINT, float(found[2]) * MM_PER_POINT


def corners_of(boxes: np.ndarray, sheet: Sheet) -> np.ndarray:
    """Corners of clear squares (M, 2) from the board's origin, mm: inner corners lie among them."""
    x, y, w, h = boxes[1:].T
    return np.concatenate([np.stack(p, 1) for p in ((x, y), (x + w, y), (x, y + h), (x + w, y + h))]) - sheet.origin_mm


def box_of(tab: Tab, element: str) -> list[float]:
    """Box of an element, CSS px: x, y, width, height."""
    return tab.evaluate(f"(b => [b.x, b.y, b.width, b.height])({element}.getBoundingClientRect())")


@pytest.mark.parametrize("name", list(SHEETS_MM))
def test_the_page_has_the_sheets_size(name: str) -> None:
    """SVG in millimetres and PDF in points say the same sheet; one user unit of the SVG is a millimetre."""
    sheet = lay_out(fitted(a_target(), name), name)
    root = ElementTree.fromstring(sheet_svg(sheet))
    width, height = sorted(SHEETS_MM[name], reverse=True)
    assert (root.get("width"), root.get("height")) == (f"{width:g}mm", f"{height:g}mm")
    assert root.get("viewBox") == f"0 0 {width:g} {height:g}"
    assert media_box(sheet_pdf(sheet)) == pytest.approx((width, height), abs=1e-5)


@pytest.mark.parametrize("square", [0.03, 0.0213, (0.03, 0.02)])
def test_inner_corners_lie_where_the_target_says(square: object) -> None:
    """Every inner corner of `Target.corners_m` is a corner of a clear square in both files, to a micrometre."""
    sheet = lay_out(a_target(square_m=square, steady_dark=[]))
    wanted = sheet.target.corners_m()[..., :2].reshape(-1, 2) * 1e3
    for boxes in (svg_boxes(sheet_svg(sheet)), pdf_boxes(sheet_pdf(sheet))):
        drawn = corners_of(boxes, sheet)
        away = np.linalg.norm(wanted[:, None] - drawn[None], axis=-1).min(axis=1)
        assert away.max() < 1e-3


def test_the_pdf_is_whole() -> None:
    """The cross-reference table points at every object, the stream's length is its own, and no printer may scale it."""
    data = sheet_pdf(lay_out(a_target(name="Schrägbank (1) \\ 深")))
    start = int(re.search(rb"startxref\n(\d+)\n", data)[1])  # type: ignore[index]
    assert data[start:].startswith(b"xref\n")
    for number, offset in enumerate(re.findall(rb"(\d{10}) 00000 n ", data), start=1):
        assert data[int(offset) :].startswith(b"%d 0 obj" % number)
    length = int(re.search(rb"/Length (\d+)", data)[1])  # type: ignore[index]
    body = data[data.index(b"stream\n") + 7 :]
    assert body[length:].startswith(b"\nendstream")
    assert b"/PrintScaling /None" in data
    assert r"Schr" in data.decode("latin-1")
    assert r"\(1\) \\ ?" in data.decode("latin-1")


def test_ruler_and_words_are_in_both() -> None:
    """The line has the length that its words say; name and numbers are plain text, escaped."""
    sheet = lay_out(a_target())
    svg, pdf = sheet_svg(sheet), sheet_pdf(sheet).decode("latin-1")
    x, y, u, v = sheet.strokes[0]
    assert np.hypot(u - x, v - y) == pytest.approx(sheet.ruler_mm)
    moves = re.findall(r"([\d.]+) ([\d.]+) m ([\d.]+) ([\d.]+) l", pdf)
    line = np.array(moves[0], float) * MM_PER_POINT
    assert np.hypot(line[2] - line[0], line[3] - line[1]) == pytest.approx(sheet.ruler_mm, abs=1e-4)
    for text in (svg, pdf):
        assert f"this line is {sheet.ruler_mm:g} mm long" in text
        assert "12 x 9 squares of 30 mm" in text
    assert "Potting &lt;shed&gt;" in svg
    assert "Potting <shed>" in pdf


@pytest.mark.outside
def test_chromium_draws_it_in_true_size(tmp_path: Path) -> None:
    """CSS fixes 96 px to an inch (CSS Values and Units 3, 5.2): Chromium's boxes of page and board, in mm."""
    sheet = lay_out(a_target())
    drawn, _ = write_sheet(sheet, tmp_path)
    with chromium_tab(drawn, tmp_path / "profile", 1700, 1200) as tab:
        page = box_of(tab, "document.documentElement")[2:]
        board = box_of(tab, "document.getElementById('board')")
    assert np.array(page) * 25.4 / 96.0 == pytest.approx((420.0, 297.0), abs=0.01)
    assert np.array(board) * 25.4 / 96.0 == pytest.approx(sheet.frame, abs=0.01)

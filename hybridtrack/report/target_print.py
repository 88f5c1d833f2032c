"""A laid out sheet as SVG and as PDF, both in true size.

The PDF is written by hand (ISO 32000-1, sections 7 and 8): one page, one path filled by the even-odd rule, lines, and
Helvetica, which every reader has. Its viewer preferences ask printers not to scale it.
"""

from pathlib import Path
from xml.sax.saxutils import escape

from hybridtrack.files import replacing, write_text
from hybridtrack.report.target_sheet import Box, Sheet

POINTS_PER_MM = 72.0 / 25.4
STROKE_MM = 0.2


def _number(value: float) -> str:
    return f"{value:.6f}".rstrip("0").rstrip(".")


def sheet_svg(sheet: Sheet) -> str:
    """The sheet as SVG: one user unit is a millimetre, clear squares are not painted."""
    width, height = map(_number, sheet.size_mm)
    boxes = (sheet.frame, *sheet.clear)
    path = "".join(f"M{_number(x)} {_number(y)}h{_number(w)}v{_number(h)}h{_number(-w)}z" for x, y, w, h in boxes)
    strokes = "".join(f"M{_number(x)} {_number(y)}L{_number(u)} {_number(v)}" for x, y, u, v in sheet.strokes)
    texts = []
    for text in sheet.texts:
        turn = f' transform="rotate(-90 {_number(text.x)} {_number(text.y)})"' if text.turned else ""
        texts.append(
            f'<text x="{_number(text.x)}" y="{_number(text.y)}" font-size="{_number(text.size)}"{turn}>'
            f"{escape(text.words)}</text>"
        )
    lines = [
        f'<svg xmlns="http://www.w3.org/2000/svg" width="{width}mm" height="{height}mm" '
        f'viewBox="0 0 {width} {height}">',
        f"<title>{escape(sheet.target.name or 'Target')}</title>",
        f'<path id="board" fill="#000" fill-rule="evenodd" d="{path}"/>',
        f'<path id="ruler" fill="none" stroke="#000" stroke-width="{STROKE_MM}" d="{strokes}"/>',
        '<g fill="#000" font-family="Helvetica, Arial, sans-serif">',
        *texts,
        "</g>",
        "</svg>",
    ]
    return "\n".join(lines) + "\n"


def _content(sheet: Sheet) -> bytes:
    """Drawing operators, all coordinates in points from the lower left corner."""
    top = sheet.size_mm[1]

    def point(x: float, y: float) -> str:
        return f"{_number(x * POINTS_PER_MM)} {_number((top - y) * POINTS_PER_MM)}"

    def rectangle(box: Box) -> str:
        x, y, w, h = box
        return f"{point(x, y + h)} {_number(w * POINTS_PER_MM)} {_number(h * POINTS_PER_MM)} re"

    operators = ["0 g", *map(rectangle, (sheet.frame, *sheet.clear)), "f*", f"{_number(STROKE_MM * POINTS_PER_MM)} w"]
    operators += [f"{point(x, y)} m {point(u, v)} l" for x, y, u, v in sheet.strokes] + ["S", "BT"]
    for text in sheet.texts:
        words = text.words.encode("cp1252", "replace")
        for special in (b"\\", b"(", b")"):
            words = words.replace(special, b"\\" + special)
        turn = "0 1 -1 0" if text.turned else "1 0 0 1"
        operators.append(f"/F1 {_number(text.size * POINTS_PER_MM)} Tf {turn} {point(text.x, text.y)} Tm")
        operators.append(f"({words.decode('latin-1')}) Tj")
    return "\n".join([*operators, "ET"]).encode("latin-1")


def sheet_pdf(sheet: Sheet) -> bytes:
    """The sheet as a PDF of one page."""
    box = " ".join(_number(size * POINTS_PER_MM) for size in sheet.size_mm)
    content = _content(sheet)
    title = (sheet.target.name or "Target").encode("utf-16").hex()
    bodies = [
        b"<< /Type /Catalog /Pages 2 0 R /ViewerPreferences << /PrintScaling /None >> >>",
        b"<< /Type /Pages /Kids [3 0 R] /Count 1 >>",
        f"<< /Type /Page /Parent 2 0 R /MediaBox [0 0 {box}] /Contents 4 0 R "
        "/Resources << /Font << /F1 5 0 R >> >> >>".encode(),
        b"<< /Length %d >>\nstream\n%s\nendstream" % (len(content), content),
        b"<< /Type /Font /Subtype /Type1 /BaseFont /Helvetica /Encoding /WinAnsiEncoding >>",
        f"<< /Title <{title}> /Producer (hybridtrack) >>".encode(),
    ]
    out = bytearray(b"%PDF-1.7\n%\xe2\xe3\xcf\xd3\n")
    offsets = []
    for number, body in enumerate(bodies, start=1):
        offsets.append(len(out))
        out += b"%d 0 obj\n%s\nendobj\n" % (number, body)
    start = len(out)
    out += b"xref\n0 %d\n0000000000 65535 f \n" % (len(bodies) + 1)
    out += b"".join(b"%010d 00000 n \n" % offset for offset in offsets)
    out += b"trailer\n<< /Size %d /Root 1 0 R /Info 6 0 R >>\nstartxref\n%d\n%%%%EOF\n" % (len(bodies) + 1, start)
    return bytes(out)


def write_sheet(sheet: Sheet, folder: Path) -> list[Path]:
    """Write `sheet-A3.svg` and `.pdf` (with the sheet's own name) into `folder`; return where they are."""
    drawn, printed = (folder / f"sheet-{sheet.name}.{ending}" for ending in ("svg", "pdf"))
    write_text(drawn, sheet_svg(sheet))
    with replacing(printed) as temporary:
        temporary.write_bytes(sheet_pdf(sheet))
    return [drawn, printed]

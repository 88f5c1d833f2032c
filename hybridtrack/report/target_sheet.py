"""Where a printed board lies on its sheet: true size, a ruler beside it, its name and numbers in plain text.

All lengths are millimetres from the sheet's upper left corner, x right, y down. The board is drawn as one black area
with holes where set A is, so that film stays clear there, and no seam shows between black squares. A black frame
goes around it: bright film outside would blink with set A.
"""

import textwrap
from dataclasses import dataclass
from typing import Literal

import numpy as np

from hybridtrack.errors import OptionError
from hybridtrack.module import Target
from hybridtrack.report.target_caution import caution_sentences

Array = np.ndarray
Box = tuple[float, float, float, float]
Orientation = Literal["auto", "landscape", "portrait"]

# ISO 216, trimmed sizes: width and height of the upright sheet, mm.
SHEETS_MM = {"A4": (210.0, 297.0), "A3": (297.0, 420.0), "A2": (420.0, 594.0)}
MARGIN_MM = 5.0  # most printers leave so much of the sheet unprinted (common practice, no source)
LEAST_FRAME_MM, GAP_MM = 3.0, 2.0
TEXT_MM, LINE_MM, RULER_MM = 2.8, 3.6, 8.0
CHARACTER_SHARE = 0.54  # mean width of a character in text heights, on the safe side


@dataclass(frozen=True)
class Text:
    """A line of text: its baseline starts at (x, y); `turned` text runs upwards."""

    x: float
    y: float
    size: float
    words: str
    turned: bool


@dataclass(frozen=True)
class Sheet:
    """What is drawn. `frame` (x, y, width, height) is filled black less the `clear` squares; `strokes` are lines (x, y,
    x, y) of 0.2 mm; `origin_mm` is the outer corner of square (0, 0); `ruler_mm` the length of the ruler's line.
    """

    name: str
    target: Target
    size_mm: tuple[float, float]
    origin_mm: tuple[float, float]
    frame: Box
    clear: tuple[Box, ...]
    strokes: tuple[Box, ...]
    texts: tuple[Text, ...]
    ruler_mm: float

    @property
    def orientation(self) -> str:
        """Landscape or portrait."""
        return "landscape" if self.size_mm[0] > self.size_mm[1] else "portrait"

    def corners_mm(self) -> Array:
        """Inner corners (rows - 1, columns - 1, 2) on the sheet."""
        return np.asarray(self.origin_mm) + self.target.corners_m()[..., :2] * 1e3


@dataclass(frozen=True)
class Place:
    """A way to put the board on a sheet: ruler and text `below` it or to its right, `frame` mm of black around."""

    size_mm: tuple[float, float]
    below: bool
    frame: float
    lines: tuple[str, ...]

    @property
    def strip_mm(self) -> float:
        """Height of the strip."""
        return RULER_MM + LINE_MM * len(self.lines)


def board_size_mm(target: Target) -> tuple[float, float]:
    """Width and height of all squares."""
    across, down = target.square_xy_m
    return target.columns * across * 1e3, target.rows * down * 1e3


def sheet_sentences(target: Target) -> str:
    """Name and numbers of a target, as printed beside it."""
    across, down = (f"{size * 1e3:.4g}" for size in target.square_xy_m)
    square = f"{across} mm" if across == down else f"{across} x {down} mm"
    width, height = board_size_mm(target)
    dark = " ".join(f"({column}, {row})" for column, row in target.steady_dark) or "none"
    return (
        f"{target.name or 'Target'}: {target.columns} x {target.rows} squares of {square}, board {width:.5g} x "
        f"{height:.5g} mm, blinks at {target.blink_hz:g} Hz, bright for {target.duty:g} of a cycle, steady dark "
        f"squares {dark}; square (0, 0) is the upper left one of the sheet as printed. Print at 100 %, not fitted "
        f"to the page, and measure the line. Clear squares let light through. {caution_sentences(target.blink_hz)[0]} "
        f"{caution_sentences()[-1]}"
    )


def places(target: Target, upright_mm: tuple[float, float], orientation: Orientation) -> list[Place]:
    """Every way in which the board fits, with the widest frame first; none where it does not."""
    width, height = board_size_mm(target)
    widest = 500.0 * min(target.square_xy_m)
    sizes = {"portrait": upright_mm, "landscape": upright_mm[::-1]}
    found = []
    for name in ("landscape", "portrait") if orientation == "auto" else (orientation,):
        size = sizes[name]
        for below in (True, False):
            long = (size[0] if below else size[1]) - 2 * MARGIN_MM
            lines = tuple(textwrap.wrap(sheet_sentences(target), int(long / (CHARACTER_SHARE * TEXT_MM))))
            place = Place(size, below, 0.0, lines)
            taken = np.array([width, height]) + 2 * MARGIN_MM
            taken[1 if below else 0] += GAP_MM + place.strip_mm
            frame = min(widest, *(0.5 * (np.array(size) - taken)))
            if frame >= LEAST_FRAME_MM - 1e-9:
                found.append(Place(size, below, float(frame), lines))
    return sorted(found, key=lambda place: -round(place.frame, 6))


def scaled(target: Target, factor: float) -> Target:
    """The target with its squares `factor` times as large."""
    across, down = (size * factor for size in target.square_xy_m)
    return target.model_copy(update={"square_m": across if across == down else (across, down)})


def fitted(target: Target, sheet: str, orientation: Orientation = "auto") -> Target:
    """The target with the largest squares, in tenths of a millimetre across, that fit the sheet."""
    across = target.square_xy_m[0]
    tenths = int(10 * SHEETS_MM[sheet][1] / target.columns)
    while tenths > 10:
        trial = scaled(target, round(tenths * 1e-4, 7) / across)
        if places(trial, SHEETS_MM[sheet], orientation):
            return trial
        tenths -= 1
    raise OptionError(f"sheet {sheet}: squares of at least 1 mm are required, and the board does not fit with them")


def _ruler_and_text(place: Place, corner: tuple[float, float], length: float) -> tuple[list[Box], list[Text]]:
    """Strokes and texts of the strip whose upper left corner, before it is turned, lies at `corner`."""
    x0, y0 = corner

    def at(along: float, across: float) -> tuple[float, float]:
        return (x0 + along, y0 + across) if place.below else (x0 + across, y0 - along)

    strokes = [(*at(0.0, 3.0), *at(length, 3.0))]
    for tick in range(0, round(length) + 1, 5):
        strokes.append((*at(tick, 3.0), *at(tick, 0.4 if tick % 50 == 0 else 1.2 if tick % 10 == 0 else 2.0)))
    turned = not place.below
    texts = [Text(*at(0.0, 6.6), TEXT_MM, f"this line is {length:g} mm long", turned)]
    for number, line in enumerate(place.lines):
        texts.append(Text(*at(0.0, RULER_MM + LINE_MM * (number + 0.8)), TEXT_MM, line, turned))
    return strokes, texts


def _drawn(target: Target, name: str, place: Place) -> Sheet:
    width, height = board_size_mm(target)
    frame, extra = place.frame, GAP_MM + place.strip_mm
    group = (width + 2 * frame + (0.0 if place.below else extra), height + 2 * frame + (extra if place.below else 0.0))
    x, y = (0.5 * (place.size_mm[k] - group[k]) for k in (0, 1))
    origin = (x + frame, y + frame)
    # The strip is as long as the sheet allows, and centred with the board where the board is longer.
    long = (place.size_mm[0] if place.below else place.size_mm[1]) - 2 * MARGIN_MM
    length = 200.0 if long >= 220.0 else 100.0
    start = MARGIN_MM
    corner = (
        (start, y + 2 * frame + height + GAP_MM)
        if place.below
        else (x + 2 * frame + width + GAP_MM, place.size_mm[1] - start)
    )
    strokes, texts = _ruler_and_text(place, corner, length)
    across, down = (size * 1e3 for size in target.square_xy_m)
    clear = tuple(
        (origin[0] + column * across, origin[1] + row * down, across, down)
        for row, column in np.argwhere(target.square_sets() == 1).tolist()
    )
    return Sheet(name, target, place.size_mm, origin, (x, y, width + 2 * frame, height + 2 * frame), clear,
                 tuple(strokes), tuple(texts), length)  # fmt: skip


def _require_printable(target: Target) -> None:
    if target.is_counterphase:
        raise OptionError(
            "sheet: a shuttered board is required, for both sets of a counterphase board must brighten in turn, and a "
            "print cannot; show it on a screen"
        )


def lay_out(target: Target, sheet: str = "auto", orientation: Orientation = "auto") -> Sheet:
    """Put the board on A4, A3 or A2, or with `auto` on the smallest that holds it; squares are never scaled here.

    Raises OptionError for a counterphase board, an unknown sheet, and a board that does not fit.
    """
    _require_printable(target)
    if sheet != "auto" and sheet not in SHEETS_MM:
        raise OptionError(f"sheet: one of auto, {', '.join(SHEETS_MM)} is required, got '{sheet}'")
    if orientation not in ("auto", "landscape", "portrait"):
        raise OptionError(f"orientation: one of auto, landscape, portrait is required, got '{orientation}'")
    for name in SHEETS_MM if sheet == "auto" else (sheet,):
        ways = places(target, SHEETS_MM[name], orientation)
        if ways:
            return _drawn(target, name, ways[0])
    width, height = board_size_mm(target)
    largest = "A2" if sheet == "auto" else sheet
    turned = "" if orientation == "auto" else f" {orientation}"
    fit = fitted(target, largest, orientation).square_xy_m[0] * 1e3
    raise OptionError(
        f"sheet {largest}{turned}: a board that fits with {MARGIN_MM:g} mm of margin and its ruler is required, got "
        f"{width:.5g} x {height:.5g} mm; squares of {fit:.4g} mm would fit (--square-mm {fit:.4g}, or --fit)"
    )

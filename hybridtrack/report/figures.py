"""How every figure of a report is drawn: as inline SVG that follows the page's light or dark colours.

Figures are drawn with marker colours, which are then replaced by the page's colour variables, so that one picture
serves both schemes. Colours of the series are told apart by lightness as well as hue.
"""

import io
import re
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import matplotlib
import numpy as np
from cycler import cycler
from matplotlib.colors import to_hex
from matplotlib.figure import Figure as Canvas

from hybridtrack.report.page import Figure

INK, RULE, PAPER = "#010203", "#040506", "#070809"
SERIES = ("#0a0b01", "#0a0b02", "#0a0b03", "#0a0b04", "#0a0b05")
# Over a picture, which is dark in both schemes; also for what is rasterised, where markers can't be replaced.
ON_PICTURE = {"on": "#f5a04e", "off": "#5cb8ff", "trail": "#f2e14c", "feature": "#7df59a"}
_VARIABLES = {INK: "var(--ink)", RULE: "var(--rule)", PAPER: "var(--paper)"} | {
    colour: f"var(--series-{number})" for number, colour in enumerate(SERIES, start=1)
}
_STYLE: Any = {
    "svg.fonttype": "none",
    "font.family": "sans-serif",
    "font.size": 8.5,
    "axes.titlesize": 9,
    "axes.edgecolor": RULE,
    "axes.labelcolor": INK,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "axes.grid": True,
    "grid.color": RULE,
    "grid.linewidth": 0.6,
    "axes.axisbelow": True,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.prop_cycle": cycler(color=SERIES),
    "figure.facecolor": "none",
    "axes.facecolor": "none",
    "savefig.facecolor": "none",
    "legend.frameon": False,
    "lines.linewidth": 1.4,
    "image.cmap": "gray",
    "image.interpolation": "nearest",
}


def _require_colours_that_last(canvas: Canvas) -> None:
    """A rasterised artist in a marker colour would stay nearly black: none may be."""
    for artist in canvas.findobj(lambda artist: bool(artist.get_rasterized())):
        mapped = getattr(artist, "get_array", lambda: None)() is not None
        if mapped or not hasattr(artist, "get_facecolor"):
            continue
        for colour in np.atleast_2d(artist.get_facecolor()):
            assert to_hex(colour) not in _VARIABLES, f"rasterised in the marker colour {to_hex(colour)}"


def _to_svg(canvas: Canvas, name: str) -> str:
    _require_colours_that_last(canvas)
    buffer = io.StringIO()
    with matplotlib.rc_context({"svg.hashsalt": name}):
        canvas.savefig(
            buffer, format="svg", metadata={"Date": None, "Creator": None}, bbox_inches="tight", pad_inches=0.04
        )
    svg = buffer.getvalue()
    svg = svg[svg.index("<svg") :]
    svg = re.sub(r'(<svg[^>]*?) width="[^"]*"', r"\1", svg, count=1)
    svg = re.sub(r'(<svg[^>]*?) height="[^"]*"', r"\1", svg, count=1)
    for marker, variable in _VARIABLES.items():
        svg = svg.replace(marker, variable)
    return svg


class Drawing:
    """A figure being drawn: `axes` is one Axes or the array that matplotlib's `subplots` returns."""

    def __init__(self, canvas: Canvas, axes: Any) -> None:
        self.canvas, self.axes = canvas, axes
        self.figure: Figure | None = None


@contextmanager
def drawing(
    name: str, caption: str, *, wide: bool = False, rows: int = 1, columns: int = 1, height_in: float = 2.9
) -> Iterator[Drawing]:
    """Draw in the house style; the finished `Figure` is the drawing's `figure` once the block has ended.

    `name` must differ from figure to figure on a page, for it seeds the identifiers inside the SVG.
    """
    with matplotlib.rc_context(_STYLE):
        canvas = Canvas(figsize=(8.6 if wide else 4.2, height_in), layout="constrained")
        sheet = Drawing(canvas, canvas.subplots(rows, columns))
        yield sheet
        sheet.figure = Figure(_to_svg(canvas, name), caption, wide)


def finished(sheet: Drawing) -> Figure:
    """The figure of a drawing whose block has ended."""
    assert sheet.figure is not None
    return sheet.figure

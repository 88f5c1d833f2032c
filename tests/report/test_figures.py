"""How figures are drawn."""

import numpy as np
import pytest

from hybridtrack.report.figures import ON_PICTURE, SERIES, drawing, finished


def test_series_follow_the_pages_colours() -> None:
    """A line in a series colour becomes a variable of the page, and no marker colour is left."""
    with drawing("line", "A line.") as sheet:
        sheet.axes.plot([0, 1], [0, 1], color=SERIES[1])
    svg = finished(sheet).svg
    assert "var(--series-2)" in svg
    assert "#0a0b0" not in svg


def test_a_rasterised_artist_in_a_marker_colour_is_an_error() -> None:
    """Inside a raster a marker can't be replaced and would stay nearly black."""
    with pytest.raises(AssertionError, match="rasterised in the marker colour #0a0b01"), drawing("dots", "") as sheet:
        sheet.axes.scatter(np.arange(3), np.arange(3), color=SERIES[0], rasterized=True)


def test_colours_over_pictures_may_be_rasterised() -> None:
    """They are what they are."""
    with drawing("dots", "Dots.") as sheet:
        sheet.axes.scatter(np.arange(3), np.arange(3), color=ON_PICTURE["on"], rasterized=True)
    assert "<image" in finished(sheet).svg


def test_a_colour_bar_may_be_rasterised() -> None:
    """Its colours come from a map."""
    with drawing("map", "A map.") as sheet:
        shown = sheet.axes.imshow(np.eye(3))
        sheet.canvas.colorbar(shown, ax=sheet.axes)
    assert "<image" in finished(sheet).svg

"""Pages: self-contained, escaped, drawn in the page's own colours."""

import re

from hybridtrack.report.figures import SERIES, drawing, finished
from hybridtrack.report.page import Page, Section, Table, render


def a_page() -> str:
    with drawing("line", "A line.") as sheet:
        sheet.axes.plot([0, 1], [0, 1], color=SERIES[0])
    table = Table(("name", "value"), (("a < b", "1"),))
    section = Section("Part", "In <plain> words.", (table,), (finished(sheet),))
    return render(Page("Title", "sub", "good", "All well.", (("n", "1"),), ("one finding",), (section,), ("careful",)))


def test_a_page_fetches_nothing_and_runs_nothing() -> None:
    """No script, no link, no picture from elsewhere: the only addresses are names of XML vocabularies."""
    text = a_page()
    assert "<script" not in text
    assert "<link" not in text
    sources = re.findall(r'(?:src|href)="([^"]*)"', text)
    assert all(source.startswith(("#", "data:")) for source in sources)


def test_text_is_escaped() -> None:
    """What comes from a file name or a finding can't become markup."""
    text = a_page()
    assert "In &lt;plain&gt; words." in text
    assert "a &lt; b" in text


def test_figures_follow_the_colour_scheme() -> None:
    """Marker colours are all replaced by the page's variables, which exist for light and dark."""
    text = a_page()
    assert "var(--series-1)" in text
    assert "var(--ink)" in text
    assert not re.search(r"#0a0b0\d|#010203|#040506", text)
    assert "prefers-color-scheme: dark" in text
    assert text.count("--series-1:") == 2


def test_a_page_is_readable_on_a_phone() -> None:
    """The viewport is the device's, and figures have no fixed size."""
    text = a_page()
    assert 'name="viewport" content="width=device-width' in text
    assert not re.search(r'<svg[^>]*\swidth="', text)

"""The page that blinks a target, as Chromium runs it: still until a deliberate click, cautions in front, true rate."""

import json
import re
from collections.abc import Iterator
from pathlib import Path

import cv2
import numpy as np
import pytest

from hybridtrack.errors import OptionError
from hybridtrack.files import parse_document
from hybridtrack.module import Target
from hybridtrack.report.target_page import target_page, write_target_page
from hybridtrack.report.target_screen import Screen, draw_phase, lay_out_on_screen
from tests.report.chromium import Tab, chromium_tab
from tests.report.test_target_sheet import a_target

SIZE = (1280, 800)


def text_of(tab: Tab, name: str) -> str:
    return str(tab.evaluate(f"document.getElementById('{name}').textContent"))


def running(tab: Tab) -> bool:
    return not tab.evaluate("document.getElementById('stage').hidden")


@pytest.fixture(scope="module")
def counterphase() -> Target:
    """A counterphase board with its marker squares."""
    return a_target(kind="counterphase_checker", blink_hz=72.0)


@pytest.fixture
def tab(counterphase: Target, tmp_path: Path) -> Iterator[Tab]:
    """The page, open, its display measured. A headless Chromium refreshes 60 times a second."""
    page = write_target_page(counterphase, tmp_path / "screen.html")
    with chromium_tab(page, tmp_path / "profile", *SIZE) as tab:
        tab.wait_for("document.getElementById('rates').childElementCount > 0")
        yield tab


def ready_to_start(tab: Tab) -> None:
    """Take every step but the last."""
    tab.evaluate("document.getElementById('bar-mm').value = '200'")
    tab.evaluate("document.getElementById('bar-mm').dispatchEvent(new Event('input'))")
    tab.click("#rates input")
    tab.click("#consent")
    tab.click("#band-consent")
    assert not tab.evaluate("document.getElementById('start').disabled")


def test_the_page_fetches_nothing(counterphase: Target) -> None:
    """Self-contained: no address but names of vocabularies, no link, no source; the target's name is escaped."""
    text = target_page(counterphase)
    assert not re.search(r'(?:src|href)="', text)
    assert not re.search(r"https?://|@import|fetch\(|XMLHttpRequest|<link", text)
    assert "<title>Potting &lt;shed&gt; on this screen</title>" in text
    assert "prefers-color-scheme: dark" in text


def test_cautions_come_before_everything_else(counterphase: Target) -> None:
    """Seizures, band, WCAG, Escape and local codes are said in front of the first step."""
    front = target_page(counterphase).split('<ol class="steps">')[0]
    for words in ("photosensitive seizures", "3 to 30 Hz", "WCAG 2.3.1", "Escape", "62471", "Local codes"):
        assert words in front


def test_a_duty_that_no_cycle_holds_is_refused() -> None:
    """And a step that 8 bits cannot show."""
    with pytest.raises(OptionError, match="duty: whole refreshes"):
        target_page(a_target(duty=0.47))
    with pytest.raises(OptionError, match="log step"):
        target_page(a_target(), (7.0,))


@pytest.mark.outside
def test_nothing_blinks_before_a_deliberate_click(tab: Tab) -> None:
    """Loading, waiting, and clicks made by a script leave it still; so does a person's click before the consent."""
    tab.evaluate("document.getElementById('start').click()")
    tab.click("#start")
    assert not running(tab)
    ready_to_start(tab)
    tab.evaluate("document.getElementById('start').click()")
    tab.evaluate("document.getElementById('start').dispatchEvent(new MouseEvent('click', {bubbles: true}))")
    tab.evaluate("new Promise(done => setTimeout(done, 500))")
    assert not running(tab)
    first = cv2.imdecode(np.frombuffer(tab.picture(), np.uint8), cv2.IMREAD_GRAYSCALE)
    assert first.mean() > 200  # the page in its light colours, no board
    tab.click("#start")
    assert running(tab)


@pytest.mark.outside
def test_rates_in_the_risk_band_are_never_chosen_by_themselves(tab: Tab) -> None:
    """At 60 refreshes a second only 30 Hz is on offer: nothing is chosen, and choosing it asks for a second consent."""
    assert not tab.evaluate("[...document.getElementsByName('cycle')].some(e => e.checked)")
    tab.click("#consent")
    assert tab.evaluate("document.getElementById('start').disabled")
    tab.click("#rates input")
    assert tab.evaluate("document.getElementById('start').disabled")
    assert "risk band of 3 to 30 Hz" in text_of(tab, "rate-note")
    assert re.search(r"flashes (29|30)\.\d\d times a second, within that band", text_of(tab, "flash-rate"))
    tab.click("#band-consent")
    assert not tab.evaluate("document.getElementById('start').disabled")


@pytest.mark.outside
def test_the_board_is_right_to_the_pixel(tab: Tab, counterphase: Target) -> None:
    """Both phases as Chromium draws them equal the ones drawn for PNG frames, value by value."""
    ready_to_start(tab)
    tab.click("#start")
    tab.wait_for("Boolean(document.getElementById('stage').dataset.squarePx)")
    width, height = tab.evaluate("[window.innerWidth, window.innerHeight]")
    wanted = lay_out_on_screen(counterphase, Screen((width, height), 60.0), accept_risk_band=True)
    left, top, square = tab.evaluate("(d => [d.left, d.top, d.squarePx])(document.getElementById('stage').dataset)")
    assert (int(left), int(top)) == wanted.origin_px
    assert tuple(map(int, square.split())) == wanted.square_px
    for name, bright in (("phase-a", True), ("phase-b", False)):
        drawn = np.array(tab.evaluate(
            f"(c => {{ const d = c.getContext('2d').getImageData(0, 0, c.width, c.height).data, out = [];"
            " for (let i = 0; i < d.length; i += 4 * 7) out.push(d[i]); return out; })"
            f"(document.getElementById('{name}'))"
        ))  # fmt: skip
        np.testing.assert_array_equal(drawn, draw_phase(wanted, bright).ravel()[::7])
    shown = cv2.imdecode(np.frombuffer(tab.picture(), np.uint8), cv2.IMREAD_GRAYSCALE)
    x, y = wanted.origin_px
    board = np.s_[y : y + 9 * wanted.square_px[1], x : x + 12 * wanted.square_px[0]]
    assert any(np.array_equal(shown[board], draw_phase(wanted, bright)[board]) for bright in (True, False))


@pytest.mark.outside
def test_escape_stops_at_once_and_the_rate_is_told(tab: Tab) -> None:
    """Blinking ends with the key; the page says steady if and only if nothing was missed, and only then gives a file
    with the measured rate and square.
    """
    ready_to_start(tab)
    own = "new Promise(done => { const s = []; const f = t => { s.push(t); s.length < 90 ? requestAnimationFrame(f) : done(s) }; requestAnimationFrame(f) })"  # noqa: E501
    stamps = np.array(tab.evaluate(own))
    tab.click("#start")
    tab.wait_for("show.meter.ready && show.meter.reading().seconds > 3")
    tab.press("Escape")
    assert not running(tab)
    reading = tab.evaluate("show.meter.reading()")
    assert reading["hz"] == pytest.approx(1e3 / np.median(np.diff(stamps)), rel=0.01)
    assert f"{reading['hz'] / 2:.1f}" in text_of(tab, "numbers")
    verdict, file = text_of(tab, "verdict"), text_of(tab, "json")
    steady = reading["dropped"] == 0 and reading["crowded"] == 0 and reading["spreadMs"] <= 0.1 * reading["periodMs"]
    assert ("It was steady" in verdict) == steady
    assert ("NOT steady" in verdict) != steady
    assert bool(file) == steady
    # Each start is asked for anew.
    assert tab.evaluate("document.getElementById('start').disabled")


@pytest.mark.outside
def test_stamps_of_a_known_display_give_its_rate_and_a_file(tab: Tab, counterphase: Target) -> None:
    """A made-up display of 143.9 Hz with 0.05 ms of noise: rate within four deviations, none missed, and the file reads
    as a target with squares as large as the measured bar says.
    """
    ready_to_start(tab)
    rng = np.random.default_rng(3)
    stamps = 1000.0 + np.arange(900) * 1e3 / 143.9 + rng.normal(0, 0.05, 900)
    tab.evaluate(f"window.known = new RefreshMeter(); for (const t of {stamps.tolist()}) known.add(t); 0")
    reading = tab.evaluate("known.reading()")
    assert abs(reading["hz"] - 143.9) < 4 * reading["sigmaHz"] < 0.01
    # White noise of stamps makes intervals spread by root 2 times as much.
    assert reading["spreadMs"] == pytest.approx(0.05 * np.sqrt(2), rel=0.1)
    assert (reading["dropped"], reading["crowded"]) == (0, 0)
    tab.evaluate("show.board = layOut([1280, 800]); show.cycle = 2")
    text = tab.evaluate("JSON.stringify(targetFile(known.reading()))")
    target = parse_document(text, Target, "page", "hybridtrack-target")
    assert target.blink_hz == pytest.approx(143.9 / 2, rel=1e-5)
    pitch = 0.2 / tab.evaluate("show.barPx")
    square = lay_out_on_screen(counterphase, Screen(SIZE, 144.0)).square_px
    assert target.square_xy_m == pytest.approx((square[0] * pitch, square[1] * pitch), rel=1e-6)
    assert target.scanout_s == pytest.approx(1 / 143.9, rel=1e-5)
    assert target.steady_dark == counterphase.steady_dark
    assert json.loads(text)["measured"]["dropped"] == 0


@pytest.mark.outside
@pytest.mark.parametrize(("kind", "words"), [("missed", "NOT steady: 3 of 902 refreshes were missed"),
                                             ("jitter", "NOT steady: intervals spread by"),
                                             ("short", "not known to be steady yet")])  # fmt: skip
def test_what_is_not_steady_is_never_called_so(tab: Tab, kind: str, words: str) -> None:
    """Missed refreshes are counted one by one and leave the rate true; jitter and too little time are said."""
    rng = np.random.default_rng(4)
    number = np.arange(903 if kind == "missed" else 180 if kind == "short" else 900)
    number = np.delete(number, [300, 301, 700]) if kind == "missed" else number
    stamps = 50.0 + number * 1e3 / 120.0 + rng.normal(0, 0.7 if kind == "jitter" else 0.05, len(number))
    tab.evaluate(f"window.known = new RefreshMeter(); for (const t of {stamps.tolist()}) known.add(t); 0")
    verdict = tab.evaluate("verdictOf(known.reading())")
    assert not verdict["steady"]
    assert verdict["words"].startswith(words)
    assert tab.evaluate("known.reading().hz") == pytest.approx(120.0, rel=1e-3)
    tab.evaluate("show.board = layOut([1280, 800]); show.cycle = 2; document.getElementById('bar-mm').value = '200'")
    assert tab.evaluate("targetFile(known.reading())") is None

"""A board in pixels and refreshes: exact geometry, whole refreshes, honest rates, a film that plays them."""

from pathlib import Path

import cv2
import numpy as np
import pytest

from hybridtrack.errors import OptionError
from hybridtrack.report.target_screen import (
    Screen,
    bright_refreshes,
    caution_picture,
    choose_cycle,
    dark_dn,
    draw_phase,
    lay_out_on_screen,
    possible_cycles,
    write_film,
    write_pngs,
)
from tests.report.test_target_sheet import a_target

FAST = Screen((640, 400), 144.0, 0.25)


def test_dark_is_a_step_of_light_below_white() -> None:
    """The sRGB curve of IEC 61966-2-1: 0.2140 of the light is value 0.5 (its known mid grey), white is 255."""
    assert dark_dn(-float(np.log(0.2140))) == pytest.approx(127.5, abs=0.6)
    assert dark_dn(5.5) > 0
    with pytest.raises(OptionError, match=r"0.05 to 5.5 is required on a screen of 8 bits, got 9"):
        dark_dn(9.0)


def test_phases_hold_whole_refreshes() -> None:
    """A half of two is one; a quarter needs four; a third can't be had in an even cycle below six."""
    assert bright_refreshes(2, 0.5) == 1
    assert bright_refreshes(2, 0.25) is None
    assert possible_cycles(0.25)[:2] == [4, 8]
    assert possible_cycles(1 / 3)[0] == 6
    with pytest.raises(OptionError, match=r"whole refreshes in an even cycle of at most 24 are required, got 0.47"):
        possible_cycles(0.47)


def test_the_cycle_nearest_to_the_target_outside_the_band() -> None:
    """73 Hz at 144 Hz is two refreshes, at 240 Hz four; at 120 Hz two (60 Hz) rather than four in the band."""
    target = a_target()
    assert [choose_cycle(target, hz) for hz in (144.0, 240.0, 120.0)] == [2, 4, 2]
    assert choose_cycle(a_target(blink_hz=31.0), 120.0) == 2


def test_the_file_says_the_rate_and_size_that_are_shown() -> None:
    """Not what was wished: 72 Hz for 73, and 40 px of 0.25 mm."""
    board = lay_out_on_screen(a_target(), FAST)
    shown = board.shown_target()
    assert (shown.blink_hz, shown.square_m, shown.scanout_s) == (72.0, 0.01, 1 / 144.0)
    assert shown.steady_dark == a_target().steady_dark
    with pytest.raises(OptionError, match="pixel pitch is required"):
        lay_out_on_screen(a_target(), Screen((640, 400), 144.0)).shown_target()


@pytest.mark.parametrize("kind", ["shuttered_checker", "counterphase_checker"])
def test_pictures_follow_the_square_sets(kind: str) -> None:
    """Every pixel of every square, in both phases; around the board it stays dark."""
    board = lay_out_on_screen(a_target(kind=kind), FAST, square_px=37)
    sets = board.target.square_sets()
    for bright, lit in ((True, 1), (False, -1)):
        picture = draw_phase(board, bright)
        assert picture.shape == (400, 640)
        x, y = board.origin_px
        inner = picture[y : y + 9 * 37, x : x + 12 * 37].reshape(9, 37, 12, 37)
        assert np.all(np.ptp(inner, axis=(1, 3)) == 0)
        np.testing.assert_array_equal(inner[:, 0, :, 0] == 255, sets == lit)
        around = picture.copy()
        around[y : y + 9 * 37, x : x + 12 * 37] = board.dark
        assert np.all(around == board.dark)


def test_a_rate_in_the_risk_band_is_refused() -> None:
    """A display of 60 Hz can only blink at 30 Hz and below."""
    with pytest.raises(OptionError, match="got 30 Hz"):
        lay_out_on_screen(a_target(), Screen((640, 400), 60.0))
    assert lay_out_on_screen(a_target(), Screen((640, 400), 60.0), accept_risk_band=True).blink_hz == 30.0


def test_what_a_screen_cannot_show_is_refused() -> None:
    """Squares beyond its edge, broken refreshes, an absurd display."""
    with pytest.raises(OptionError, match=r"square_px: 4 to 40 is required .* got 80"):
        lay_out_on_screen(a_target(), FAST, square_px=80)
    with pytest.raises(OptionError, match=r"holds? whole refreshes is required .*got 3"):
        lay_out_on_screen(a_target(), FAST, refreshes=3)
    with pytest.raises(OptionError, match="10 to 2000 Hz are required, got 640x400 px at 4 Hz"):
        Screen((640, 400), 4.0)
    with pytest.raises(OptionError, match=r"pixel_mm: 0.01 to 20"):
        Screen((640, 400), 60.0, 0.0)


def test_pngs_are_one_cycle(tmp_path: Path) -> None:
    """A picture a refresh, lossless: duty 0.25 of four refreshes is one bright and three dark."""
    board = lay_out_on_screen(a_target(duty=0.25), FAST, refreshes=4)
    paths = write_pngs(board, tmp_path)
    assert [path.name for path in paths] == [f"refresh_0{k}.png" for k in range(4)]
    for path, bright in zip(paths, (True, False, False, False), strict=True):
        np.testing.assert_array_equal(cv2.imread(str(path), cv2.IMREAD_GRAYSCALE), draw_phase(board, bright))


def test_a_film_plays_the_refreshes(tmp_path: Path) -> None:
    """Decoded again: the display's rate, still cautions first, then each picture within what the codec loses."""
    board = lay_out_on_screen(a_target(kind="counterphase_checker"), FAST, refreshes=4, accept_risk_band=True)
    path = write_film(board, tmp_path / "film.mp4", seconds=0.3, lead_in_s=0.25)
    film = cv2.VideoCapture(str(path))
    assert film.get(cv2.CAP_PROP_FPS) == pytest.approx(144.0, abs=1e-6)
    pictures = []
    while (read := film.read())[0]:
        pictures.append(read[1][..., 0])
    lead = round(0.25 * 144)
    assert len(pictures) == lead + 44
    for picture in pictures[:lead]:  # sharp letters ring, and the codec fills them in over some pictures
        assert np.abs(picture.astype(int) - caution_picture(board)).mean() < 3.0
    for number, picture in enumerate(pictures[lead:]):
        wanted = draw_phase(board, number % 4 < 2).astype(int)
        assert np.percentile(np.abs(picture - wanted), 99.9) < 12
    assert list(tmp_path.iterdir()) == [path]
    with pytest.raises(OptionError, match=r"seconds: 0.1 to 600 is required of a film, got 0"):
        write_film(board, path, 0.0)

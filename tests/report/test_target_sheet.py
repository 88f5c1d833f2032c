"""The board on its sheet: ISO 216, true size, refusals with the size that would fit."""

import numpy as np
import pytest

from hybridtrack.errors import OptionError
from hybridtrack.module import Target
from hybridtrack.report.target_sheet import MARGIN_MM, SHEETS_MM, fitted, lay_out, scaled


def a_target(**changes: object) -> Target:
    """A shuttered board of 12x9 squares of 30 mm."""
    values = {"name": "Potting <shed>", "kind": "shuttered_checker", "columns": 12, "rows": 9, "square_m": 0.03,
              "blink_hz": 73.0, "steady_dark": [(4, 2), (9, 3), (5, 7)]}  # fmt: skip
    return Target(**(values | changes))


def test_sheets_are_iso_216() -> None:
    """ISO 216: A0 is 841 x 1189 mm (a square metre, sides as 1 to root 2, rounded); each next sheet is half of the one
    before across its long side, rounded down.
    """
    size = (841, 1189)
    assert size == (round(1000 * 2**-0.25), round(1000 * 2**0.25))
    halved = {}
    for number in range(1, 5):
        size = (size[1] // 2, size[0])
        halved[f"A{number}"] = size
    assert {name: halved[name] for name in SHEETS_MM} == SHEETS_MM


def test_the_smallest_sheet_that_holds_it_is_chosen() -> None:
    """360 x 270 mm do not fit A4, and lie across A3."""
    sheet = lay_out(a_target())
    assert (sheet.name, sheet.orientation) == ("A3", "landscape")
    assert lay_out(a_target(columns=9, rows=12, steady_dark=[])).orientation == "portrait"
    assert lay_out(a_target(square_m=0.015)).name == "A4"
    assert lay_out(a_target(square_m=0.04)).name == "A2"


@pytest.mark.parametrize("orientation", ["landscape", "portrait"])
@pytest.mark.parametrize("name", ["A4", "A3", "A2"])
def test_everything_lies_within_the_margin(name: str, orientation: str) -> None:
    """Board, frame, ruler and text; nothing overlaps the board's frame."""
    sheet = lay_out(fitted(a_target(), name, orientation), name, orientation)  # type: ignore[arg-type]
    assert sheet.orientation == orientation
    x, y, w, h = sheet.frame
    ends = np.array([[x, y], [x + w, y + h], *np.array(sheet.strokes).reshape(-1, 2).tolist()])
    ends = np.concatenate([ends, [(t.x, t.y) for t in sheet.texts]])
    assert np.all(ends >= MARGIN_MM - 1e-9)
    assert np.all(ends <= np.array(sheet.size_mm) - MARGIN_MM + 1e-9)
    for u, v in ends[2:]:
        assert not (x < u < x + w and y < v < y + h)
    for text in sheet.texts:
        length = 0.54 * text.size * len(text.words)
        assert (text.y - length if text.turned else sheet.size_mm[0] - text.x - length) >= -1e-9


def test_squares_are_never_scaled_unasked() -> None:
    """Corners on the sheet are the target's, shifted."""
    target = a_target()
    sheet = lay_out(target, "A2")
    away = sheet.corners_mm() - target.corners_m()[..., :2] * 1e3
    assert np.ptp(away.reshape(-1, 2), axis=0) == pytest.approx([0, 0], abs=1e-9)


def test_clear_squares_are_set_a_without_the_steady_dark() -> None:
    """Square (0, 0) is clear, its neighbour is not, and the three markers are black."""
    sheet = lay_out(a_target())
    cells = {
        (round((x - sheet.origin_mm[0]) / 30.0), round((y - sheet.origin_mm[1]) / 30.0)) for x, y, _, _ in sheet.clear
    }
    assert (0, 0) in cells
    assert not cells & {(1, 0), (4, 2), (9, 3), (5, 7)}
    assert len(cells) == 54 - 3


def test_a_board_that_does_not_fit_is_refused_with_the_size_that_does() -> None:
    """The size in the sentence fits, and a tenth of a millimetre more does not."""
    with pytest.raises(OptionError, match=r"sheet A4: .*got 360 x 270 mm; squares of ([\d.]+) mm would fit") as caught:
        lay_out(a_target(), "A4")
    size = float(str(caught.value).split("--square-mm ")[1].split(",")[0])
    lay_out(scaled(a_target(), size / 30.0), "A4")
    with pytest.raises(OptionError, match="would fit"):
        lay_out(scaled(a_target(), (size + 0.1) / 30.0), "A4")
    with pytest.raises(OptionError, match="sheet A3 portrait"):
        lay_out(a_target(), "A3", "portrait")
    with pytest.raises(OptionError, match="sheet A2"):
        lay_out(a_target(square_m=0.1))


def test_what_is_no_sheet_or_no_print_is_refused() -> None:
    """A counterphase board needs a screen; a sheet's name must be one of four."""
    with pytest.raises(OptionError, match="shuttered board is required"):
        lay_out(a_target(kind="counterphase_checker"))
    with pytest.raises(OptionError, match="one of auto, A4, A3, A2 is required, got 'B4'"):
        lay_out(a_target(), "B4")
    with pytest.raises(OptionError, match=r"orientation: .* got 'askew'"):
        lay_out(a_target(), "A3", "askew")  # type: ignore[arg-type]


def test_squares_that_are_no_squares_keep_their_shape() -> None:
    """A board of 30 x 20 mm cells scales in both directions alike."""
    target = fitted(a_target(square_m=(0.03, 0.02)), "A4")
    assert target.square_xy_m[1] / target.square_xy_m[0] == pytest.approx(2 / 3)
    sheet = lay_out(target, "A4")
    assert sheet.clear[0][2:] == pytest.approx((target.square_xy_m[0] * 1e3, target.square_xy_m[1] * 1e3))

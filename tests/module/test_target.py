"""Targets: geometry, square sets, refusals."""

from pathlib import Path

import numpy as np
import pytest
from pydantic import ValidationError

from hybridtrack.module import Target, load_target

TARGETS = Path(__file__).parents[2] / "calib_targets"


def make(**changes: object) -> Target:
    fields = {"name": "t", "kind": "shuttered_checker", "columns": 4, "rows": 3, "square_m": 0.02, "blink_hz": 70.0}
    return Target(**(fields | changes))


def test_only_the_first_eight_fields_are_required() -> None:
    """Duty and steady squares have their usual values when a file leaves them out."""
    target = make()
    assert target.duty == 0.5
    assert target.steady_dark == []


def test_corners_lie_on_multiples_of_the_square() -> None:
    """Corner (i, j) is at (i * square_x, j * square_y), indexed [j - 1, i - 1]."""
    corners = make(square_m=(0.02, 0.03)).corners_m()
    assert corners.shape == (2, 3, 3)
    np.testing.assert_allclose(corners[1, 2], [0.06, 0.06, 0.0])


def test_square_sets_follow_parity_kind_and_steady_squares() -> None:
    """Set A blinks, set B blinks only on a counterphase board, steady squares never brighten."""
    shuttered = make(steady_dark=[(0, 0), (2, 0), (1, 1)]).square_sets()
    np.testing.assert_array_equal(shuttered, [[0, 0, 0, 0], [0, 0, 0, 1], [1, 0, 1, 0]])
    counterphase = make(kind="counterphase_checker").square_sets()
    np.testing.assert_array_equal(counterphase[0], [1, -1, 1, -1])


def test_a_half_turn_swaps_the_sets() -> None:
    """With one side even and the other odd, a board turned by half shows set A where set B was."""
    sets = make(kind="counterphase_checker").square_sets()
    np.testing.assert_array_equal(sets[::-1, ::-1], -sets)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"columns": 5}, "one of columns and rows must be even"),
        ({"square_m": 0.0}, "square_m must be positive"),
        ({"steady_dark": [(4, 0)]}, "must lie on the board"),
        ({"duty": 1.0}, "less than 1"),
        ({"kind": "dots"}, "shuttered_checker"),
    ],
)
def test_impossible_boards_are_refused(changes: dict, message: str) -> None:
    """The message states the requirement."""
    with pytest.raises(ValidationError, match=message):
        make(**changes)


@pytest.mark.parametrize("path", sorted(TARGETS.glob("*.target.json")), ids=lambda p: p.name)
def test_shipped_targets_blink_above_the_risk_band(path: Path) -> None:
    """WCAG 2.3.1 allows three flashes a second; the band of risk for photosensitive people is 3 to 30 Hz."""
    assert load_target(path).blink_hz > 60.0

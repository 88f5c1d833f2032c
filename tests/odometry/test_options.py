"""Options are checked when made."""

import pytest

from hybridtrack.errors import OptionError
from hybridtrack.odometry.options import OdometryOptions


@pytest.mark.parametrize(
    ("changes", "names"),
    [
        ({"mode": "events"}, "mode"),
        ({"start_depth": 0.0}, "start_depth"),
        ({"inlier_sigma": float("nan")}, "inlier_sigma"),
        ({"window_keyframes": 2}, "window_keyframes"),
    ],
)
def test_what_makes_no_sense_is_refused(changes: dict, names: str) -> None:
    """Every refusal names the option, the requirement and what was given."""
    with pytest.raises(OptionError, match=f"{names}: expected"):
        OdometryOptions(**changes)

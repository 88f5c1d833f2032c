"""Options of the tracker."""

import pytest

from hybridtrack.errors import OptionError
from hybridtrack.tracking import TrackerOptions


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        ({"mode": "fast"}, "mode must be one of hybrid, frames, events, got 'fast'"),
        ({"max_features": 0}, "max_features must lie in 1 to 100000, got 0"),
        ({"patch_radius": 99}, "patch_radius must lie in 4 to 40, got 99"),
        ({"output_rate_hz": 4000.0, "fastest_rate_hz": 1000.0}, "fastest_rate_hz must be at least output_rate_hz"),
    ],
)
def test_values_out_of_range_are_refused(change: dict, sentence: str) -> None:
    """The option, its range and what was given are named."""
    with pytest.raises(OptionError, match=sentence):
        TrackerOptions(**change)

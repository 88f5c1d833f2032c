"""Cautions and the rates that need asking for twice."""

import pytest

from hybridtrack.errors import OptionError
from hybridtrack.report.target_caution import (
    FLASHES_A_SECOND,
    RISK_BAND_HZ,
    caution_sentences,
    in_risk_band,
    require_rate_accepted,
)


def test_limits_are_the_published_ones() -> None:
    """Three flashes in one second: WCAG 2.2, success criterion 2.3.1. The band of 3 to 30 Hz: the usual risk band of
    photosensitive epilepsy (Harding and Jeavons 1994; Fisher et al. 2005).
    """
    assert FLASHES_A_SECOND == 3
    assert RISK_BAND_HZ == (3.0, 30.0)


@pytest.mark.parametrize(("rate", "inside"), [(2.5, False), (3.0, True), (15.0, True), (30.0, True), (30.01, True),
                                              (31.0, False), (72.0, False)])  # fmt: skip
def test_the_band_holds_its_ends(rate: float, inside: bool) -> None:
    """A display of 59.99 or 60.02 Hz halved is in the band as well as 30 Hz exactly."""
    assert in_risk_band(rate) is inside


def test_a_rate_in_the_band_is_refused_unless_accepted() -> None:
    """The refusal names the rate and the option that accepts it."""
    require_rate_accepted(72.0, False)
    require_rate_accepted(15.0, True)
    with pytest.raises(OptionError, match=r"3 to 30 Hz.*got 15 Hz.*--accept-risk-band"):
        require_rate_accepted(15.0, False)


def test_the_cautions_say_what_they_must() -> None:
    """Seizures, the band, the rate, the limit for the public, strobed lamps, and that local codes come first."""
    text = " ".join(caution_sentences(20.0))
    for words in (
        "20 times a second",
        "seizures",
        "3 to 30 Hz",
        "LIES IN THAT BAND",
        "WCAG 2.3.1",
        "62471",
        "Local codes",
    ):
        assert words in text
    assert "LIES IN THAT BAND" not in " ".join(caution_sentences(72.0))

"""What must be said in front of a blinking target, and which rates are not made without being asked for twice.

Flashes of 3 to 30 a second are the likeliest to trigger a photosensitive seizure; content for the public holds at most
three flashes in any one second (WCAG 2.2, success criterion 2.3.1).
"""

from hybridtrack.errors import OptionError

RISK_BAND_HZ = (3.0, 30.0)
FLASHES_A_SECOND = 3


def in_risk_band(blink_hz: float) -> bool:
    """Whether a rate lies in the band of 3 to 30 Hz, its ends included, a measured rate's error allowed for."""
    return RISK_BAND_HZ[0] * 0.99 <= blink_hz <= RISK_BAND_HZ[1] * 1.01


def require_rate_accepted(blink_hz: float, accepted: bool) -> None:
    """Raise OptionError for a rate in the risk band unless the user has `accepted` it by name."""
    if in_risk_band(blink_hz) and not accepted:
        raise OptionError(
            f"blink rate: outside the risk band of {RISK_BAND_HZ[0]:g} to {RISK_BAND_HZ[1]:g} Hz, in which flashing "
            f"light is likeliest to trigger a seizure, is required, got {blink_hz:g} Hz; choose a faster display or "
            "fewer refreshes a cycle, or say --accept-risk-band"
        )


def caution_sentences(blink_hz: float | None = None) -> tuple[str, ...]:
    """The cautions, one sentence each, with the rate named where it is known."""
    named = "This target flashes" if blink_hz is None else f"This target flashes {blink_hz:g} times a second"
    band = "" if blink_hz is None or not in_risk_band(blink_hz) else " THIS RATE LIES IN THAT BAND."
    low, high = RISK_BAND_HZ
    return (
        f"{named}. Flashing light can trigger photosensitive seizures; the risk is highest from {low:g} to {high:g} "
        f"Hz.{band}",
        "Stop at once and look away at any discomfort. Keep everyone who may be sensitive out of sight of it.",
        f"It exceeds {FLASHES_A_SECOND} flashes in a second, the limit of WCAG 2.3.1 for content shown to the public: "
        "it is an instrument for a laboratory, to be shown to a camera.",
        "Strobed lamps can be brighter than they look (photobiological safety: IEC 62471).",
        "Local codes and licensed practice come first.",
    )

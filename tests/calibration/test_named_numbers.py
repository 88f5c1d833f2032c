"""Numbers by their names."""

from calibrated_modules import NAMES, SIGMA, TRUTH, module_with
from ideal_board import nominal_of, small_module

from hybridtrack.calibration.named_numbers import KNOWN, Number, named_numbers


def test_every_estimated_number_has_its_value_and_deviation() -> None:
    """As the module file holds them, under the paths that its uncertainty names."""
    numbers = named_numbers(module_with(TRUTH))
    for name, value, sigma in zip(NAMES, TRUTH, SIGMA, strict=True):
        assert numbers[name] == Number(value, sigma)


def test_names_are_the_known_ones() -> None:
    """With a summary, and for modules that lack blocks; deviations that were not estimated are None."""
    summary = {"blink_hz": {"value": 61.2, "sigma": 1e-6}, "corner_rms_px": 0.02, "views_with_board": 8}
    numbers = named_numbers(module_with(TRUTH), summary)
    assert set(numbers) <= set(KNOWN)
    assert numbers["blink_hz"] == Number(61.2, 1e-6)
    assert numbers["defects.hot"] == Number(1)
    assert numbers["lens.k3"] == Number(0.0)
    assert numbers["colour_from_event.centroid_u"].sigma == numbers["colour_from_event.c"].sigma
    assert "lens.fx" not in named_numbers(nominal_of(small_module()))

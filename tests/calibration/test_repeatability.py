"""Two calibrations of one module: exact without noise, honest with it, loud where the module changed."""

import numpy as np
import pytest
from calibrated_modules import NAMES, SIGMA, TRUTH, covariance, drawn, module_with, shifted
from scipy.stats import kstest

from hybridtrack.calibration.repeatability import Repeatability, compare_calibrations, repeatability_summary
from hybridtrack.module import EventGrid, FisheyeParameters

PERIOD_NS = 1e9 / 61.2


def deviations_of(result: Repeatability, name: str) -> float | None:
    return next(d for d in result.differences if d.name == name).deviations


def test_the_same_numbers_agree_exactly() -> None:
    """No difference, p-values of one."""
    result = compare_calibrations(module_with(TRUTH), module_with(TRUTH), PERIOD_NS)
    assert result.agrees
    assert all(d.difference == 0 for d in result.differences)
    assert all(block.p_value == 1 for block in result.blocks)
    assert [field.rms_px for field in result.fields] == pytest.approx([0, 0], abs=1e-9)


def test_a_shift_is_reported_in_deviations_of_both() -> None:
    """0.3 px of focal length at 0.1 px each is 0.3 / (0.1 root 2)."""
    result = compare_calibrations(module_with(TRUTH), shifted("lens.fx", 0.3))
    assert deviations_of(result, "lens.fx") == pytest.approx(0.3 / (0.1 * np.sqrt(2)))


def test_noise_as_stated_gives_deviations_and_p_values_as_stated() -> None:
    """300 pairs drawn from the covariance: each number's deviations are standard normal, each p-value is uniform
    (Kolmogorov and Smirnov), and about one pair in a hundred is called different.
    """
    results = [compare_calibrations(drawn(2 * k), drawn(2 * k + 1), PERIOD_NS) for k in range(300)]
    for name in NAMES:
        z = np.array([deviations_of(result, name) for result in results])
        assert kstest(z, "norm").pvalue > 1e-3, name
    for k in range(4):
        assert kstest([result.blocks[k].p_value for result in results], "uniform").pvalue > 1e-3
    assert sum(not result.agrees for result in results) <= 15


def test_field_p_values_are_nearly_uniform() -> None:
    """By two moments only: the share below 5 % is within 2 and 8 %, and the RMS is what covariances lead to expect."""
    pairs = [compare_calibrations(drawn(2 * k), drawn(2 * k + 1)).fields for k in range(300)]
    for k in range(2):
        p_values = np.array([fields[k].p_value for fields in pairs])
        assert 0.02 < np.mean(p_values < 0.05) < 0.08
        rms = np.sqrt(np.mean([fields[k].rms_px ** 2 for fields in pairs]))
        assert rms == pytest.approx(pairs[0][k].expected_px, rel=0.1)


@pytest.mark.parametrize(
    ("name", "words"),
    [("lens.fx", "lens"), ("colour_from_event.c", "event map"), ("timing.line_time_ns", "clocks"),
     ("contrast.on_threshold", "thresholds")],
)  # fmt: skip
def test_a_module_that_changed_is_found_in_its_block_alone(name: str, words: str) -> None:
    """Eight deviations of one number: its block is named, and itself."""
    result = compare_calibrations(module_with(TRUTH), shifted(name, 8 * np.sqrt(2) * SIGMA[NAMES.index(name)]))
    assert any(finding.startswith(f"{words}: the two differ") for finding in result.findings)
    assert any(finding.startswith(f"{name}: the two differ by +8.0 deviations") for finding in result.findings)
    assert [block.block for block in result.blocks if block.p_value < 1e-3] == [words]


def test_correlated_numbers_are_judged_together() -> None:
    """fx up and fy down by one deviation each is nothing by itself, and beyond a correlation of 0.97 it is."""
    values = TRUTH.copy()
    values[:2] += np.array([1.2, -1.2]) * np.sqrt(2) * SIGMA[:2]
    result = compare_calibrations(module_with(TRUTH), module_with(values))
    assert abs(deviations_of(result, "lens.fx") or 0) < 1.3
    assert result.blocks[0].p_value < 1e-6


def test_lens_models_that_differ_are_compared_by_what_they_do() -> None:
    """Single numbers get no deviation then; a fisheye of another focal length is found by its field."""
    fisheye = FisheyeParameters(fx=404.0, fy=405.0, cx=243.0, cy=157.0, radial=(0.1, 0.0, 0.0, 0.0))
    result = compare_calibrations(module_with(TRUTH), module_with(TRUTH, lens=fisheye))
    assert deviations_of(result, "lens.fx") is None
    assert "lens" not in [block.block for block in result.blocks]
    assert any(finding.startswith("lens field: the two differ by") for finding in result.findings)


def test_a_frame_offset_is_compared_modulo_the_blink_and_at_one_instant() -> None:
    """Two periods later is the same; so is what drift makes of 100 s; hours of uncertain drift leave it open."""
    first = module_with(TRUTH)
    moved = shifted("timing.frame_offset_ns", 2 * PERIOD_NS)
    result = compare_calibrations(first, moved, PERIOD_NS)
    assert deviations_of(result, "timing.frame_offset_ns") == pytest.approx(0.0, abs=1e-6)
    assert any("less 2 blink periods" in d.note for d in result.differences)
    values = TRUTH.copy()
    values[NAMES.index("timing.frame_offset_ns")] += 5.0e-6 * 100e9
    later = compare_calibrations(first, module_with(values, epoch_ns=105_000_000_000), PERIOD_NS)
    offset = next(d for d in later.differences if d.name == "timing.frame_offset_ns")
    assert offset.difference == pytest.approx(0.0, abs=1e-3)
    assert offset.sigma == pytest.approx(np.sqrt(2 * 3e3**2 + (0.07e-6 * 100e9) ** 2))
    hour = compare_calibrations(first, module_with(values, epoch_ns=3_605_000_000_000 * 20), PERIOD_NS)
    assert next(d for d in hour.differences if d.name == "timing.frame_offset_ns").sigma is None


def test_what_must_be_equal_is_named() -> None:
    """Mirroring and serial numbers have no deviation."""
    mirrored = module_with(TRUTH, event_grid=EventGrid(width=120, height=80, mirror_x=True), serial="B7")
    result = compare_calibrations(module_with(TRUTH), mirrored)
    assert "mirroring across: False in the first recording, True in the second" in result.findings
    assert not result.agrees


def test_the_summary_is_plain(tmp_path) -> None:
    """JSON without NaN, every number by its name."""
    import json

    data = repeatability_summary(compare_calibrations(module_with(TRUTH), drawn(3), PERIOD_NS))
    text = json.dumps(data, allow_nan=False)
    assert set(NAMES) <= set(json.loads(text)["numbers"])
    assert covariance().shape == (len(NAMES), len(NAMES))


def test_offsets_with_and_without_latency_are_compared_by_their_sum() -> None:
    """One calibration separated the latency, the other did not: the same sum does not differ."""
    first, second = module_with(TRUTH), module_with(TRUTH)
    assert second.timing is not None
    assert second.uncertainty is not None
    held = second.timing.frame_offset_ns or 0.0
    timing = second.timing.model_copy(update={"frame_offset_ns": held - 9e4, "event_latency_ns": 9e4})
    index = second.uncertainty.parameters.index("timing.frame_offset_ns")
    size = len(second.uncertainty.parameters)
    wide = np.zeros((size + 1, size + 1))
    wide[:size, :size] = second.uncertainty.covariance
    sum_variance = wide[index, index]
    wide[index, index] += 15e3**2
    wide[size, size] = 15e3**2
    wide[index, size] = wide[size, index] = -(15e3**2)
    uncertainty = second.uncertainty.model_copy(
        update={
            "parameters": [*second.uncertainty.parameters, "timing.event_latency_ns"],
            "sigma": np.sqrt(np.diag(wide)).tolist(),
            "covariance": wide.tolist(),
        }
    )
    split = second.model_copy(update={"timing": timing, "uncertainty": uncertainty})
    result = compare_calibrations(first, split, PERIOD_NS)
    offset = next(d for d in result.differences if d.name == "timing.frame_offset_ns")
    assert offset.difference == pytest.approx(0.0, abs=1e-6)
    assert offset.sigma == pytest.approx(np.sqrt(2 * sum_variance))
    assert "event latency included" in offset.note

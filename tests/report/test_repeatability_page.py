"""Limits, repeatability and lots as parts of pages."""

import sys
from pathlib import Path

from hybridtrack.calibration.batch import BatchEntry, spreads
from hybridtrack.calibration.limits import check_limits, parse_limits
from hybridtrack.calibration.named_numbers import Number, named_numbers
from hybridtrack.calibration.repeatability import compare_calibrations
from hybridtrack.report.batch_page import batch_page
from hybridtrack.report.page import Page, render
from hybridtrack.report.repeatability_page import limits_section, limits_summary, repeatability_section

sys.path.insert(0, str(Path(__file__).parents[1] / "calibration"))

from calibrated_modules import TRUTH, drawn, module_with, shifted


def test_a_limit_that_fails_is_said_on_the_page_and_in_the_summary() -> None:
    """Verdict, reason and bounds of each number."""
    limits = parse_limits({"lens.fx": {"min": 401}, "lens.fy": {"min": 400}}, "line.toml")
    checks = check_limits(named_numbers(module_with(TRUTH)), limits)
    text = render(Page("t", "s", "good", "v", sections=(limits_section(checks, "line.toml"),)))
    assert "1 of 2 numbers hold the limits of line.toml" in text
    assert "FAIL: not above min" in text
    plain = limits_summary(checks, "line.toml")
    assert plain["passed"] is False
    assert plain["numbers"]["lens.fy"]["passed"] is True  # type: ignore[index]


def test_two_calibrations_are_said_to_agree_or_not() -> None:
    """The section's sentence follows the comparison, and every number is in the table and the figure."""
    same = repeatability_section(compare_calibrations(drawn(1), drawn(2)), "a.h5", "b.h5")
    moved = repeatability_section(compare_calibrations(module_with(TRUTH), shifted("lens.fx", 2.0)), "a.h5", "b.h5")
    assert "a.h5 and b.h5 agree within their deviations" in same.text
    assert "do NOT agree" in moved.text
    assert {row[0] for row in same.tables[1].rows} >= {"lens.fx", "timing.frame_offset_ns", "contrast.on_threshold"}
    assert "timing.line_time_ns" in same.figures[0].svg


def test_a_lot_names_outliers_refusals_and_failures() -> None:
    """Each in a finding; the verdict counts them; a lot of two has no spread and says so."""
    entries = [BatchEntry(f"m{k:02d}", "Sparrow", None, named_numbers(drawn(k)), "k1k2") for k in range(12)]
    entries.append(BatchEntry("m12", "Sparrow", None, named_numbers(shifted("lens.fx", 9.0)), "k1k2"))
    entries.append(BatchEntry("m13", refusal="no blinking target"))
    entries.append(
        BatchEntry("m14", numbers={"lens.fx": Number(400.0)}, lens_model="k1", failed_limits=("lens.fx: high",))
    )
    page = batch_page(entries, spreads(entries))
    text = render(page)
    assert "14 of 15 recordings calibrated; 1 fail a limit" in text
    assert "lens.fx: outliers are m12" in page.findings
    assert "m13: refused: no blinking target" in page.findings
    assert "m14: fails lens.fx: high" in page.findings
    assert any("not with m14 (k1)" in finding for finding in page.findings)
    assert page.state == "attention"
    assert "three calibrated modules or more" in batch_page(entries[:2], []).sections[0].text

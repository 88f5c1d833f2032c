"""What two calibrations of one module say of each other, and how numbers hold their limits, as parts of a page."""

import numpy as np

from hybridtrack.calibration.limits import Limit, LimitCheck
from hybridtrack.calibration.repeatability import MODELS_DIFFER, Difference, Repeatability
from hybridtrack.report.calibration_page import with_deviation
from hybridtrack.report.figures import INK, SERIES, drawing, finished
from hybridtrack.report.page import Figure, Section, Table


def _difference_row(d: Difference) -> tuple[str, ...]:
    value, deviation = with_deviation(d.difference, d.sigma)
    far = "" if d.deviations is None else f"{d.deviations:+.2f}"
    return d.name, f"{d.first:.8g}", f"{d.second:.8g}", value, deviation if d.sigma else "", far, d.note


def difference_table(result: Repeatability) -> Table:
    """Every number of both, their difference, and the difference in deviations."""
    columns = ("number", "first", "second", "second - first", "deviation", "in deviations", "note")
    return Table(columns, tuple(_difference_row(d) for d in result.differences), prose=(6,))


def block_table(result: Repeatability) -> Table:
    """Blocks by chi square, lens and map by what they do over the array."""
    rows = [
        (block.block, f"chi square {block.chi_square:.2f} of {block.freedom}", f"{block.p_value:.3g}")
        for block in result.blocks
    ]
    for field in result.fields:
        expected = "" if field.expected_px is None else f", {field.expected_px:.4f} expected"
        p_value = "" if field.p_value is None else f"{field.p_value:.3g}"
        rows.append((field.what, f"{field.rms_px:.4f} px RMS{expected}", p_value))
    return Table(("block", "difference", "p-value"), tuple(rows))


def deviation_figure(result: Repeatability) -> Figure:
    """Each number's difference in its own deviations."""
    known = [d for d in result.differences if d.deviations is not None]
    caption = (
        "Second less first recording, in deviations of the difference. Two in three lie within the inner band, nearly "
        "all within the outer one, if deviations are honest and the module did not change."
    )
    with drawing("repeatability", caption, wide=True, height_in=0.9 + 0.19 * len(known)) as sheet:
        axes, place = sheet.axes, np.arange(len(known))
        for width, alpha in ((3.0, 0.10), (1.0, 0.16)):
            axes.axvspan(-width, width, color=SERIES[0], alpha=alpha, lw=0)
        axes.axvline(0, color=INK, lw=0.8)
        axes.plot([d.deviations for d in known], place, "o", color=SERIES[1], ms=5)
        most = max([3.5, *(1.1 * abs(d.deviations or 0.0) for d in known)])
        axes.set(yticks=place, yticklabels=[d.name for d in known], xlim=(-most, most), ylim=(len(known) - 0.4, -0.6))
        axes.set(xlabel="difference in deviations")
    return finished(sheet)


def repeatability_section(result: Repeatability, first: str, second: str) -> Section:
    """The part of a page on two recordings of one module."""
    verdict = "agree within their deviations" if result.agrees else "do NOT agree within their deviations"
    lead = f"{first} and {second} {verdict}."
    hint = "Lens models differ, and are compared by what they do; --lens-model makes their terms comparable."
    models = [hint] if any(d.note == MODELS_DIFFER for d in result.differences) else []
    text = " ".join([lead, *(f"{finding}." for finding in result.findings), *models])
    figures = (deviation_figure(result),) if any(d.deviations is not None for d in result.differences) else ()
    return Section("Repeatability", text, (block_table(result), difference_table(result)), figures)


def _bounds(limit: Limit) -> str:
    parts = []
    if limit.least is not None:
        parts.append(f"min {limit.least:g}")
    if limit.most is not None:
        parts.append(f"max {limit.most:g}")
    if limit.most_sigma is not None:
        parts.append(f"deviation at most {limit.most_sigma:g}")
    return ", ".join(parts)


def limits_table(checks: list[LimitCheck]) -> Table:
    """Pass or fail, number by number."""
    rows = []
    for check in checks:
        number = check.number
        value = "" if number.value is None else f"{number.value:.8g}"
        sigma = "" if number.sigma is None else f"{number.sigma:.3g}"
        verdict = "pass" if check.passed else f"FAIL: {check.reason}"
        rows.append((check.limit.name, value, sigma, verdict, _bounds(check.limit)))
    return Table(("number", "value", "deviation", "verdict", "limit"), tuple(rows), prose=(3, 4))


def limits_section(checks: list[LimitCheck], source: str) -> Section:
    """The part of a page on the limits of a line."""
    failed = [check for check in checks if not check.passed]
    text = f"{len(checks) - len(failed)} of {len(checks)} numbers hold the limits of {source}."
    return Section("Limits", text, (limits_table(checks),))


def limits_summary(checks: list[LimitCheck], source: str) -> dict[str, object]:
    """Plain values for `summary.json`."""
    return {
        "file": source,
        "passed": all(check.passed for check in checks),
        "numbers": {
            check.limit.name: {
                "value": check.number.value,
                "sigma": check.number.sigma,
                "min": check.limit.least,
                "max": check.limit.most,
                "max_sigma": check.limit.most_sigma,
                "passed": check.passed,
                "reason": check.reason,
            }
            for check in checks
        },
    }

"""The page of a field check: the verdict, and how far the map lies from where it was calibrated."""

import numpy as np

from hybridtrack.calibration.field_check import MAP_LIMIT_PX, FieldCheck
from hybridtrack.module import HybridModule
from hybridtrack.report.figures import SERIES, drawing, finished
from hybridtrack.report.page import Figure, Page, Section, Table

STATES = {"holds": "good", "drifted": "bad", "cannot tell": "attention"}
WORDS = {
    "holds": "The calibration holds.",
    "drifted": "The calibration has drifted: measure anew.",
    "cannot tell": "Whether the calibration holds cannot be told from this recording.",
}


def verify_table(result: FieldCheck) -> Table:
    """Each shift with its deviation and verdict."""
    sigma = np.sqrt(np.diag(result.covariance))
    rows = [
        ("map, across", f"{result.shift_px[0]:+.3f} px", f"{sigma[0]:.3f} px", result.map.verdict),
        ("map, down", f"{result.shift_px[1]:+.3f} px", f"{sigma[1]:.3f} px", result.map.verdict),
        ("events late by", f"{1e-3 * result.clock_us:+.2f} ms", f"{1e-3 * result.clock_sigma_us:.2f} ms",
         result.clock.verdict),
        ("change by events over change by frames", f"{result.gain:.3f}", "", ""),
    ]  # fmt: skip
    return Table(("quantity", "shift", "deviation", "verdict"), tuple(rows), prose=(3,))


def shift_figure(result: FieldCheck) -> Figure:
    """The map's shift with its 95 % ellipse, the shifts by single stretches over place and time, and the limit."""
    turn = np.linspace(0, 2 * np.pi, 200)
    values, vectors = np.linalg.eigh(result.covariance)
    ring = vectors @ (np.sqrt(5.991 * values)[:, None] * np.stack([np.cos(turn), np.sin(turn)]))
    stretches = result.stretch_px[np.isfinite(result.stretch_px).all(axis=1)]
    caption = (
        "Shift of the event map since calibration, in colour px: estimate with its 95 % ellipse, and what single "
        f"stretches of the recording say (points). Dashed: the shift of {MAP_LIMIT_PX:g} px that matters."
    )
    with drawing("map-shift", caption, wide=True, columns=2, height_in=3.2) as sheet:
        place, time = sheet.axes
        place.plot(MAP_LIMIT_PX * np.cos(turn), MAP_LIMIT_PX * np.sin(turn), "--", color=SERIES[3], lw=1)
        place.plot(stretches[:, 0], stretches[:, 1], ".", ms=4, alpha=0.5, color=SERIES[0])
        place.plot(*(result.shift_px[:, None] + ring), color=SERIES[1])
        place.plot(*result.shift_px, "+", ms=9, mew=1.6, color=SERIES[1])
        reach = 1.3 * max(MAP_LIMIT_PX, float(np.abs(result.shift_px).max() + np.abs(ring).max()))
        place.set(xlim=(-reach, reach), ylim=(reach, -reach), xlabel="across, px", ylabel="down, px")
        place.set_aspect("equal")
        for axis, name, colour in ((0, "across", SERIES[0]), (1, "down", SERIES[1])):
            time.plot(result.stretch_px[:, axis], ".-", ms=4, lw=0.8, color=colour, label=name)
            time.axhline(result.shift_px[axis], color=colour, lw=0.8, ls=":")
        time.set(xlabel="stretch of the recording", ylabel="shift, px", ylim=(-reach, reach))
        time.legend(loc="upper right")
    return finished(sheet)


def verify_page(result: FieldCheck, module: HybridModule, recording: str) -> Page:
    """Build the page."""
    return Page(
        title=f"{module.name or 'Module'}, checked in the field",
        subtitle=f"from {recording}",
        state=STATES[result.verdict],
        verdict=WORDS[result.verdict],
        facts=(("frames used", str(result.frames)), ("changes of light compared", f"{result.samples:,}")),
        findings=tuple(result.findings),
        sections=(
            Section("Shifts", "Deviations hold errors of the method, which more data do not lower.",
                    (verify_table(result),), (shift_figure(result),)),
        ),
    )  # fmt: skip

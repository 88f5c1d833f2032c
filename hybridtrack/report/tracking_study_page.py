"""The page of the tracking study: survival and error against image speed."""

import numpy as np

from hybridtrack.benchmark.tracking_study import ALL, TrackingStudy
from hybridtrack.report.figures import INK, SERIES, drawing, finished
from hybridtrack.report.page import SYNTHETIC_NOTICE, Figure, Page, Section, Table

STYLES = dict(
    zip(ALL, ((SERIES[1], "o-"), (SERIES[0], "s--"), (SERIES[3], "^:"), (SERIES[4], "v-."), (INK, "-")), strict=True)
)


def _survival_figure(result: TrackingStudy) -> Figure:
    caption = "Share of seeds that survive, with 95 % intervals by resampling. " + result.circumstances + "."
    with drawing("survival", caption, wide=True, height_in=3.0) as sheet:
        for mode, (colour, style) in STYLES.items():
            runs = [r for r in result.results if mode in r.followed]
            if not runs:
                continue
            speed, share = [r.speed_px_s for r in runs], [r.survival(mode) for r in runs]
            reach = [[100 * (s.value - s.low) for s in share], [100 * (s.high - s.value) for s in share]]
            sheet.axes.errorbar(
                speed, [100 * s.value for s in share], reach, fmt=style, color=colour, label=mode, ms=4, capsize=2
            )
        if result.breakdown_px_s is not None:
            sheet.axes.axvline(result.breakdown_px_s, color=INK, lw=0.8, ls=":")
        sheet.axes.set(xscale="log", xlabel="median image speed of the seeds, colour px/s", ylabel="survival, %")
        sheet.axes.set_ylim(-3, 103)
        sheet.axes.legend(ncols=5, loc="upper center", bbox_to_anchor=(0.5, 1.16))
    return finished(sheet)


def _error_figure(result: TrackingStudy) -> Figure:
    caption = "Median error at frame instants of the seeds still followed within 5 px. " + result.circumstances + "."
    with drawing("error", caption, wide=True, height_in=2.8) as sheet:
        for mode, (colour, style) in STYLES.items():
            runs = [r for r in result.results if mode in r.followed and np.isfinite(r.followed[mode].error_px).any()]
            if runs:
                median = [float(np.nanmedian(r.followed[mode].error_px)) for r in runs]
                sheet.axes.plot([r.speed_px_s for r in runs], median, style, color=colour, label=mode, ms=4)
        sheet.axes.set(xscale="log", yscale="log", xlabel="median image speed of the seeds, colour px/s")
        sheet.axes.set_ylabel("median error, colour px")
        sheet.axes.legend(ncols=5, loc="upper center", bbox_to_anchor=(0.5, 1.16))
    return finished(sheet)


def tracking_study_page(result: TrackingStudy) -> Page:
    """Build the page."""
    failed = [check.sentence() for check in result.study.checks if not check.passed]
    return Page(
        title="How far tracking can be trusted",
        subtitle=result.circumstances,
        state="good" if not failed else "attention",
        verdict=(
            "Every limit holds."
            if not failed
            else f"{len(failed)} of {len(result.study.checks)} limits fail: see below."
        ),
        sections=(
            Section("Against speed", figures=(_survival_figure(result), _error_figure(result))),
            Section("Numbers", tables=(Table(result.study.columns, result.study.rows),)),
            Section(
                "Limits", tables=(Table(("limit",), tuple((c.sentence(),) for c in result.study.checks), prose=(0,)),)
            ),
            Section("Notes", " ".join(result.study.notes)),
        ),
        notices=(SYNTHETIC_NOTICE,),
    )

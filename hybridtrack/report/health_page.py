"""The page that `inspect` draws: what is in a recording and whether it can be used."""

import numpy as np

from hybridtrack.recording.health import EventHealth, FrameHealth, HealthReport
from hybridtrack.report.figures import SERIES, Figure, drawing, finished
from hybridtrack.report.page import Page, Section, Table


def _rate_figure(events: EventHealth) -> Figure:
    per_bin = max(1, len(events.rate_on) // 600)
    length = len(events.rate_on) // per_bin * per_bin
    span_s = per_bin * events.bin_ns * 1e-9
    with drawing("rate", "Events a second over time, ON up and OFF down.", wide=True, height_in=2.3) as sheet:
        for rate, sign, name, colour in (
            (events.rate_on, 1, "ON", SERIES[1]),
            (events.rate_off, -1, "OFF", SERIES[0]),
        ):
            million = sign * rate[:length].reshape(-1, per_bin).sum(1) / span_s * 1e-6
            sheet.axes.fill_between(np.arange(len(million)) * span_s, million, step="post", color=colour, label=name)
        sheet.axes.set(xlabel="time from the first event, s", ylabel="million a second")
        sheet.axes.legend(loc="upper right", ncols=2)
    return finished(sheet)


def _pixel_figure(events: EventHealth) -> Figure:
    shown = np.log10(1.0 + events.pixels)
    with drawing("pixels", "Events a pixel (logarithmic). Circles mark pixels that fire without cause.") as sheet:
        image = sheet.axes.imshow(shown, cmap="viridis")
        sheet.axes.grid(False)
        sheet.axes.plot(events.hot[:, 0], events.hot[:, 1], "o", mfc="none", color=SERIES[1], ms=7)
        sheet.canvas.colorbar(image, ax=sheet.axes, label="log10(1 + events)", shrink=0.8)
        sheet.axes.set(xlabel="x, event grid", ylabel="y, event grid")
    return finished(sheet)


def _spectrum_figure(events: EventHealth) -> Figure:
    spectrum = events.spectrum
    with drawing("spectrum", "Power of the rate of ON less OFF events. Named lines are periodic light.") as sheet:
        sheet.axes.semilogy(spectrum.hz, spectrum.power + 1e-12, color=SERIES[0], lw=0.9)
        for line in spectrum.lines:
            if line.harmonic == 1:
                sheet.axes.axvline(line.hz, color=SERIES[1], lw=1, ls="--")
                sheet.axes.annotate(f"{line.hz:.1f} Hz", (line.hz, spectrum.power.max()), fontsize=8)
        top = max((line.hz for line in spectrum.lines if line.harmonic == 1), default=100.0)
        sheet.axes.set(xlabel="frequency, Hz", ylabel="power", xlim=(0, max(250.0, 2.5 * top)))
    return finished(sheet)


def _frame_figure(frames: FrameHealth) -> Figure:
    start_s = (frames.table.t_start_ns - frames.table.t_start_ns[0]) * 1e-9
    with drawing("intervals", "Frame intervals and exposures. A step is a dropped frame or a clock jump.") as sheet:
        sheet.axes.plot(start_s[1:], frames.interval_ns * 1e-6, ".-", ms=3, label="interval")
        sheet.axes.plot(start_s, frames.table.exposure_ns * 1e-6, label="exposure")
        sheet.axes.set(xlabel="time from the first frame, s", ylabel="ms", ylim=(0, None))
        sheet.axes.legend()
    return finished(sheet)


def health_table(report: HealthReport) -> Table:
    """The numbers that the command prints and the page repeats."""
    rows: list[tuple[str, str]] = []
    if report.events is not None:
        events = report.events
        rows += [
            ("events", f"{events.count:,}"),
            ("span of events", f"{events.duration_s:.3f} s"),
            ("mean rate", f"{events.count / max(events.duration_s, 1e-9) * 1e-6:.3f} million/s"),
            ("event pixels with no event", f"{events.silent_share:.2%}"),
            ("pixels that fire without cause", f"{len(events.hot)}"),
            ("longest gap", f"{events.longest_gap_ns * 1e-6:.3f} ms"),
            ("stamps running backwards", f"{events.steps_back}"),
            ("exact repeats", f"{events.duplicates}"),
        ]
        rows += [
            (f"{'lamp flicker' if line.is_mains_flicker else 'periodic light'}", f"{line.hz:.3f} Hz")
            for line in events.spectrum.lines
            if line.harmonic == 1
        ]
    if report.frames is not None:
        frames = report.frames
        rows += [
            ("frames", f"{len(frames.table)} of {'x'.join(map(str, frames.table.shape[::-1]))} {frames.table.dtype}"),
            ("frame rate", f"{frames.rate_hz:.4f} Hz"),
            ("frames missing", f"{frames.missing}"),
            ("exposure", f"{np.median(frames.table.exposure_ns) * 1e-6:.3f} ms"),
            ("most saturated frame", f"{frames.saturated.max():.2%} of its pixels"),
        ]
    return Table(("quantity", "value"), tuple(rows))


def health_page(report: HealthReport, name: str) -> Page:
    """Build the page of one recording."""
    figures: list[Figure] = []
    if report.events is not None:
        figures += [_rate_figure(report.events), _pixel_figure(report.events)]
        if len(report.events.spectrum.hz):
            figures.append(_spectrum_figure(report.events))
    if report.frames is not None and len(report.frames.interval_ns):
        figures.append(_frame_figure(report.frames))
    count = len(report.findings)
    verdict = (
        f"{count} finding{'s' if count != 1 else ''} to read below."
        if count
        else "Nothing out of the ordinary was found."
    )
    return Page(
        title="Recording examined",
        subtitle=name,
        state="attention" if count else "good",
        verdict=verdict,
        findings=report.findings,
        sections=(Section("Contents", tables=(health_table(report),), figures=tuple(figures)),),
    )

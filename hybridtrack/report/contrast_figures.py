"""The figures of contrast: events over the step of light, S-curves, and thresholds pixel by pixel."""

import numpy as np

from hybridtrack.calibration.calibrate import CalibrationResult
from hybridtrack.calibration.several_steps import SeveralSteps
from hybridtrack.report.figures import SERIES, drawing, finished
from hybridtrack.report.page import Figure

Array = np.ndarray


def step_figure(result: CalibrationResult) -> Figure:
    """Events a flip against the size of the step of light."""
    fit = result.thresholds
    caption = (
        "Events a flip against the step of light that the colour pixels of the same cluster measured. The "
        "lines are what the "
        "estimated thresholds predict."
    )
    with drawing("steps", caption) as sheet:
        for counts, threshold, name, colour in (
            (fit.curve.on, fit.on, "ON", SERIES[1]),
            (fit.curve.off, fit.off, "OFF", SERIES[0]),
        ):
            sheet.axes.plot(fit.curve.step, counts, "o", ms=4, color=colour, label=name)
            if threshold is not None and fit.on is not None and fit.off is not None:
                steps = np.linspace(0, float(fit.curve.step.max()) * 1.05, 50)
                mean_count = np.maximum(steps - 0.5 * (fit.on + fit.off), 0.0) / threshold
                sheet.axes.plot(steps, mean_count, "-", color=colour, lw=1)
        sheet.axes.set(xlabel="step of light, natural log", ylabel="events a flip", xlim=(0, None), ylim=(0, None))
        sheet.axes.legend()
    return finished(sheet)


def step_curve_figure(several: SeveralSteps) -> Figure:
    """The three curves over the step of light that thresholds, noise and the reference's model were fitted to."""
    seen, played = several.fit.seen, several.fit.played
    order = np.argsort(seen.log_step)
    caption = (
        "What pixels make of each step of light (points, with their deviation from view to view) and what model pixels "
        f"make of the same light (lines; reference '{several.fit.comparator.model}'). Left: events a flip. Middle: "
        "share of flips with any event, the S-curve. Right: variance of a pixel's count from flip to flip, which tells "
        "noise."
    )
    with drawing("step-curves", caption, wide=True, columns=3, height_in=2.6) as sheet:
        for axes, name, title in zip(
            sheet.axes, ("count", "fired", "scatter"), ("events a flip", "share fired", "variance"), strict=True
        ):
            for polarity, label, colour in ((0, "ON", SERIES[1]), (1, "OFF", SERIES[0])):
                values, sigma = (getattr(seen, which)[order, polarity] for which in (name, f"{name}_sigma"))
                axes.errorbar(seen.log_step[order], values, sigma, fmt="o", ms=3.5, color=colour, label=label)
                axes.plot(seen.log_step[order], getattr(played, name)[order, polarity], "-", color=colour, lw=1)
            axes.set(xlabel="step of light, natural log", title=title, xlim=(0, None), ylim=(0, None))
        sheet.axes[0].legend(loc="upper left")
    return finished(sheet)


def threshold_figure(result: CalibrationResult) -> Figure | None:
    """Maps of the thresholds over the grid."""
    fit = result.thresholds
    maps = [(fit.on_map, "ON"), (fit.off_map, "OFF")]
    if not any(np.isfinite(values).any() for values, _ in maps):
        return None
    caption = "Thresholds of the event pixels that saw the board, natural log; empty where none did."
    if fit.several is not None:
        share = 100 * float(np.mean(fit.several.known))
        caption += (
            f" Each is drawn towards the median as far as its own deviation goes; on {share:.0f} % of the grid that is "
            "under half of the spread from pixel to pixel."
        )
    with drawing("thresholds", caption, wide=True, columns=2, height_in=2.7) as sheet:
        for axes, (values, name) in zip(sheet.axes, maps, strict=True):
            known = values[np.isfinite(values)]
            low, high = np.percentile(known, [2, 98]) if len(known) else (0.0, 1.0)
            image = axes.imshow(values, cmap="viridis", vmin=low, vmax=high)
            axes.grid(False)
            axes.set(xlabel="x, event grid", ylabel="y, event grid", title=name)
            sheet.canvas.colorbar(image, ax=axes, shrink=0.8)
    return finished(sheet)


def contrast_figures(result: CalibrationResult) -> list[Figure | None]:
    """All that the result supports; of one step of light the counts over its sizes, of several the curves."""
    several = result.thresholds.several
    first = step_figure(result) if several is None else step_curve_figure(several)
    return [first, threshold_figure(result)]

"""The figure of the event latency: how late first events are, against light."""

import numpy as np

from hybridtrack.calibration.calibrate import CalibrationResult
from hybridtrack.report.figures import SERIES, drawing, finished
from hybridtrack.report.page import Figure


def latency_figure(result: CalibrationResult) -> Figure | None:
    """Delay of first events against inverse light with the line of a first-order photoreceptor, None where not seen.

    Delays count from where the line says that light flipped, so that they are what light alone explains.
    """
    curve = result.completed.latency if result.completed is not None else None
    if curve is None:
        return None
    separated = result.module.timing is not None and result.module.timing.event_latency_ns is not None
    caption = (
        "How late first events come, by the light of their pixels, less what does not depend on light. A first-order "
        "photoreceptor makes a straight line through zero. Its reach to zero, the left end, is "
        f"uncertain by {1e-3 * curve.intercept_sigma_ns:.1f} us"
        + (": the latency is separated by it." if separated else ": too much, or the line does not fit. See findings.")
    )
    inverse = 1e3 / curve.light_dn
    ends = np.array([0.0, 1.05 * inverse.max()])
    slope = 1e-6 * curve.slope_ns_dn
    with drawing("latency", caption) as sheet:
        axes = sheet.axes
        axes.errorbar(
            inverse,
            1e-3 * (curve.delay_ns - curve.intercept_ns),
            1e-3 * curve.sigma_ns,
            fmt="o",
            ms=3,
            color=SERIES[0],
            label="classes of pixels",
        )
        axes.plot(ends, slope * ends, color=SERIES[1], label="first-order photoreceptor")
        axes.set(xlabel="1 / light, 1 / (1000 DN)", ylabel="delay, us", xlim=(0.0, ends[1]), ylim=(0.0, None))
        axes.legend(loc="upper left")
    return finished(sheet)

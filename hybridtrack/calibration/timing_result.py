"""From fitted clocks to the module file's timing block, with covariance and plain sentences."""

from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.clocks import ClockFit, nearest_offset
from hybridtrack.calibration.onset import OnsetFit
from hybridtrack.module import FrameMode, Target, Timing

Array = np.ndarray

SWEPT_EXPOSURE_NS = 1000.0
LATENCY_FINDING = "offset includes event latency"
PERIODS_FINDING = "frame_offset_ns is known up to whole blink periods"


@dataclass(frozen=True)
class TimingResult:
    """`timing` and `row_order` for the module; `parameters` (paths in the file) with their `covariance`; findings."""

    timing: Timing
    row_order: int
    parameters: tuple[str, ...]
    covariance: Array
    findings: list[str]


def transform(fit: ClockFit, height: int) -> tuple[dict[str, float], Array, tuple[str, ...]]:
    """Values, covariance and names in units of the file; a negative line time is turned into the other row order."""
    clocks, free = fit.clocks, fit.free
    scale = {
        "offset_ns": 1.0,
        "line_time_ns": 1.0,
        "exposure_correction_ns": 1.0,
        "drift": 1e6,
        "duty": 1.0,
        "sweep": 1.0,
    }
    turn = np.diag([scale[name] for name in free])
    values = {name: getattr(clocks, name) * scale[name] for name in scale}
    if clocks.line_time_ns < 0 and "line_time_ns" in free:
        line = free.index("line_time_ns")
        turn[free.index("offset_ns"), line] = height - 1
        turn[line, line] = -1.0
        values["offset_ns"] += (height - 1) * clocks.line_time_ns
        values["line_time_ns"] = -clocks.line_time_ns
    return values, turn @ fit.covariance @ turn.T, free


def sweep_findings(target: Target, scanout_s: tuple[float, float]) -> list[str]:
    """What the sweep of a screen means for the clocks."""
    found, sigma = scanout_s
    findings = [
        f"the target is a screen whose picture is swept in {1e3 * found:.2f} +- {1e3 * sigma:.2f} ms: the sweep was "
        "estimated with the clocks and is counted in"
    ]
    if abs(found - target.scanout_s) > max(4.0 * sigma, 0.05 * target.scanout_s):
        findings.append(
            f"the target file states a sweep of {1e3 * target.scanout_s:.2f} ms, which the recording contradicts"
        )
    return findings


def timing_result(
    fit: ClockFit,
    onset: OnsetFit,
    mode: FrameMode,
    target: Target,
    nominal_offset_ns: float,
    scanout_s: tuple[float, float] | None = None,
    periods_known: bool = False,
) -> TimingResult:
    """Timing block, joint covariance of its parameters, and findings.

    `scanout_s`: how long a screen's sweep was found to take, with its deviation; it is counted in already.
    `periods_known`: cycles differ in their step of light, so that whole blink periods were told apart.
    """
    values, covariance, free = transform(fit, mode.height)
    findings = [LATENCY_FINDING]
    row_order = mode.row_order
    if fit.clocks.line_time_ns < 0:
        row_order = -mode.row_order
        findings.append(
            f"rows are read {'top down' if row_order == 1 else 'bottom up'}: row_order of the nominal module is the "
            "other way and is corrected"
        )
    period = onset.blink.period_ns
    if not periods_known:
        values["offset_ns"] = nearest_offset(values["offset_ns"], period, nominal_offset_ns)
        findings.append(
            f"{PERIODS_FINDING} of {period * 1e-6:.3f} ms; the one nearest "
            f"{'the nominal value' if nominal_offset_ns else 'zero'} is given"
        )
    covariance = covariance.copy()
    offset = free.index("offset_ns")
    # The drift's epoch need not be the centre of the flips: the blink clock's error between them counts too.
    apart_ns = fit.drift_epoch_ns + values["offset_ns"] - onset.centre_ns
    phase = np.array([1.0, apart_ns])
    covariance[offset, offset] += phase @ onset.covariance @ phase
    covariance[offset, offset] += onset.systematic_ns**2
    if "drift" in free:
        drift = free.index("drift")
        covariance[drift, drift] += onset.covariance[1, 1] * 1e12
    if scanout_s is not None:
        if "exposure_correction_ns" in free:
            exposure = free.index("exposure_correction_ns")
            # Pixels of a row within one band of the sweep are given one mean delay.
            covariance[exposure, exposure] += SWEPT_EXPOSURE_NS**2
        findings += sweep_findings(target, scanout_s)
    names = {
        "offset_ns": "frame_offset_ns",
        "line_time_ns": "line_time_ns",
        "exposure_correction_ns": "exposure_correction_ns",
        "drift": "frame_drift_ppm",
    }
    kept = [k for k, name in enumerate(free) if name in names]
    timing = Timing(
        frame_offset_ns=values["offset_ns"],
        frame_drift_ppm=values["drift"] if "drift" in free else None,
        drift_epoch_ns=fit.drift_epoch_ns,
        line_time_ns=values["line_time_ns"],
        exposure_correction_ns=values["exposure_correction_ns"] if "exposure_correction_ns" in free else None,
        event_latency_ns=None,
    )
    return TimingResult(
        timing, row_order, tuple(f"timing.{names[free[k]]}" for k in kept), covariance[np.ix_(kept, kept)], findings
    )

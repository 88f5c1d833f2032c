"""What is told of the clocks once the light at each event pixel is known: latency, hardware edges, row skew."""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.clock_row_skew import RowSkew, measure_row_skew
from hybridtrack.calibration.clock_triggers import EdgeOffset, offset_by_edges
from hybridtrack.calibration.event_light import EventSteps
from hybridtrack.calibration.first_fire import FirstFire
from hybridtrack.calibration.latency_curve import LatencyCurve, measure_latency
from hybridtrack.calibration.latency_split import with_latency
from hybridtrack.calibration.timing_result import PERIODS_FINDING, TimingResult
from hybridtrack.calibration.views import View
from hybridtrack.module import HybridModule, Target
from hybridtrack.recording import Recording

LATEST_NS, EARLIEST_NS = 2_000_000.0, -500_000.0  # of events against edges: beyond, the edge marks something else
POWER_FINDING = (
    "after a power cycle measure anew: frame_offset_ns, frame_drift_ppm and drift_epoch_ns; line time, exposure "
    "correction, event latency and row skew hold as long as the settings do"
)


@dataclass(frozen=True)
class CompletedTiming:
    """The final `timing`, and what it rests on: latency against light, row skew, hardware edges; each may be None."""

    timing: TimingResult
    latency: LatencyCurve | None
    row_skew: RowSkew | None
    edges: EdgeOffset | None


def compared_with_edges(result: TimingResult, edges: EdgeOffset, period_ns: float) -> tuple[TimingResult, bool]:
    """The timing with whole blink periods settled by hardware edges, findings that compare both, and whether the edges
    mark the exposures that the light shows."""
    timing = result.timing
    assert timing.frame_offset_ns is not None
    sigma = float(result.covariance[(result.parameters.index("timing.frame_offset_ns"),) * 2]) ** 0.5
    apart = timing.frame_offset_ns - edges.offset_ns
    periods = round(apart / period_ns)
    late = apart - periods * period_ns
    opens = "rising" if edges.edge > 0 else "falling"
    seen = f"the {opens} edge of channel {edges.channel}, taken as the start of {edges.meaning},"
    if not EARLIEST_NS < late < LATEST_NS:
        sentence = (
            f"{seen} is off the frame offset by {1e-3 * late:+.0f} us, more than events can be late: it marks "
            "something else and is not used"
        )
        return replace(result, findings=[*result.findings, sentence]), False
    joint_us = 1e-3 * (sigma**2 + edges.sigma_ns**2) ** 0.5
    sentence = (
        f"{seen} puts the frame offset at {1e-3 * edges.offset_ns:.1f} +- {1e-3 * edges.sigma_ns:.1f} us; by light it "
        f"is {1e-3 * late:.1f} us later, event latency included, +- {joint_us:.1f} us"
    )
    settled = timing.model_copy(update={"frame_offset_ns": timing.frame_offset_ns - periods * period_ns})
    findings = [each for each in result.findings if not each.startswith(PERIODS_FINDING)]
    return replace(result, timing=settled, findings=[*findings, sentence]), True


def with_row_skew(result: TimingResult, skew: RowSkew | None) -> TimingResult:
    """The timing with the readout's row skew, or why it has none."""
    if skew is None:
        sentence = "row skew of the event readout is not determined: rows are not seen to be read in order under load"
        return replace(result, findings=[*result.findings, sentence])
    sentence = (
        f"event rows are read {'upwards' if skew.direction > 0 else 'downwards'} in row number, "
        f"{1e-3 * skew.skew_ns:.2f} +- {1e-3 * skew.sigma_ns:.2f} us apart at {skew.events_a_row:.0f} events a row; "
        "the skew grows with load"
    )
    size = len(result.parameters)
    covariance = np.zeros((size + 1, size + 1))
    covariance[:size, :size] = result.covariance
    covariance[size, size] = skew.sigma_ns**2
    return replace(
        result,
        timing=result.timing.model_copy(update={"row_skew_ns": skew.skew_ns}),
        parameters=(*result.parameters, "timing.row_skew_ns"),
        covariance=covariance,
        findings=[*result.findings, sentence],
    )


def complete_timing(
    result: TimingResult,
    recording: Recording,
    placed: list[tuple[View, EventSteps]],
    clock: tuple[Blink, FirstFire | None],
    nominal: HybridModule,
    target: Target,
) -> CompletedTiming:
    """Separate the latency, use and compare hardware edges, measure the row skew, say what a power cycle undoes.

    `placed`: views with the light of their event pixels. `clock`: the blink clock and the mean first event it stands
    on. Of a screen neither latency nor skew is read: its sweep spreads the flips.
    """
    blink, first = clock
    views, steps = [view for view, _ in placed], [step for _, step in placed]
    is_lamp = target.scanout_s <= 0 and not target.is_counterphase
    curve = measure_latency(recording, views, steps, blink) if is_lamp else None
    skew = measure_row_skew(recording, views, blink) if is_lamp else None
    edges = offset_by_edges(recording.triggers, recording.frames, result.timing, nominal.frame_mode.height)
    used = False
    if edges is not None:
        result, used = compared_with_edges(result, edges, blink.period_ns)
    result = with_latency(result, curve, first, target, edges if used else None)
    result = with_row_skew(result, skew)
    return CompletedTiming(replace(result, findings=[*result.findings, POWER_FINDING]), curve, skew, edges)

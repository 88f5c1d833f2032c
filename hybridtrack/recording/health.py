"""What is in a recording, and whether it can be trusted: rates, clocks, gaps, defects, periodic light."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.ndimage import rank_filter

from hybridtrack.module import HybridModule
from hybridtrack.recording.arrays import Array, FrameTable
from hybridtrack.recording.health_kernels import tally
from hybridtrack.recording.reader import Recording
from hybridtrack.recording.spectrum import Spectrum, rate_spectrum

BIN_NS = 250_000
SATURATED_SHARE = 0.01


@dataclass(frozen=True)
class EventHealth:
    """Counts over all events.

    `rate_on`, `rate_off` (bins,) events in bins of `bin_ns` from `t0_ns`; `pixels` (rows, columns) events a pixel;
    `hot` (K, 2) `(x, y)` of pixels that fire far more than their neighbours; `silent_share` of pixels with no event.
    """

    count: int
    t0_ns: int
    t1_ns: int
    bin_ns: int
    rate_on: Array
    rate_off: Array
    pixels: Array
    hot: Array
    outside: int
    steps_back: int
    duplicates: int
    longest_gap_ns: int
    lost: Array
    spectrum: Spectrum

    @property
    def duration_s(self) -> float:
        """From first to last event."""
        return (self.t1_ns - self.t0_ns) * 1e-9

    @property
    def silent_share(self) -> float:
        """Share of event pixels with no event at all."""
        return float(np.mean(self.pixels == 0))


@dataclass(frozen=True)
class FrameHealth:
    """Stamps, exposures and saturation of the frames.

    `interval_ns` (N - 1,); `missing` frames by counter or by gap; `saturated` (M,) share of saturated pixels in the
    M frames looked at, whose indices are `looked_at`; `median_dn` (M,).
    """

    table: FrameTable
    interval_ns: Array
    missing: int
    looked_at: Array
    saturated: Array
    median_dn: Array

    @property
    def rate_hz(self) -> float:
        """Frames a second, from the median interval."""
        return 1e9 / float(np.median(self.interval_ns)) if len(self.interval_ns) else float("nan")


@dataclass(frozen=True)
class HealthReport:
    """All that was found; `findings` are plain sentences, the gravest first."""

    events: EventHealth | None
    frames: FrameHealth | None
    findings: tuple[str, ...]


def hot_pixels(pixels: Array) -> Array:
    """`(x, y)` (K, 2) of pixels that exceed ten times, and by ten deviations, their second busiest neighbour.

    The second busiest, so that two hot pixels side by side are found, and the corner of a busy region is not.
    """
    around = rank_filter(pixels.astype(float), rank=-3, size=3, mode="nearest")
    limit = np.maximum(10.0 * around, around + 10.0 * np.sqrt(around + 1.0))
    rows, columns = np.nonzero(pixels > np.maximum(limit, 20.0))
    return np.stack([columns, rows], axis=1)


def _grid_shape(recording: Recording, module: HybridModule | None) -> tuple[int, int]:
    if module is not None:
        return module.event_grid.shape
    width = height = 1
    for block in recording.event_blocks(check_order=False):
        width, height = max(width, int(block.x.max()) + 1), max(height, int(block.y.max()) + 1)
    return height, width


def _event_health(
    recording: Recording, module: HybridModule | None, progress: Callable[[str, float], None]
) -> EventHealth:
    t0, t1 = recording.event_span_ns
    bins = max(1, min((t1 - t0) // BIN_NS + 1, 1 << 26))
    rate_on, rate_off = np.zeros(bins, np.int64), np.zeros(bins, np.int64)
    pixels = np.zeros(_grid_shape(recording, module), np.int64)
    last, totals = np.array([t0, -1, -1, -1]), np.zeros(4, np.int64)
    done = 0
    for block in recording.event_blocks(check_order=False):
        tally(block.t, block.x, block.y, block.on, t0, BIN_NS, rate_on, rate_off, pixels, last, totals)
        done += len(block)
        progress("events", done / recording.event_count)
    spectrum = rate_spectrum(rate_on - rate_off, BIN_NS * 1e-9)
    outside, back, duplicates, gap = (int(n) for n in totals)
    return EventHealth(
        recording.event_count, t0, t1, BIN_NS, rate_on, rate_off, pixels, hot_pixels(pixels),
        outside, back, duplicates, gap, recording.events_lost, spectrum,
    )  # fmt: skip


def _frame_health(
    recording: Recording, module: HybridModule | None, progress: Callable[[str, float], None]
) -> FrameHealth:
    table = recording.frames
    interval = np.diff(table.t_start_ns)
    if table.number is not None:
        missing = int(table.number[-1] - table.number[0]) + 1 - len(table)
    elif len(interval):
        missing = int(np.sum(np.maximum(0, np.rint(interval / np.median(interval)) - 1)))
    else:
        missing = 0
    white = module.frame_mode.white_dn if module is not None else float(np.iinfo(table.dtype).max)
    looked_at = np.unique(np.linspace(0, len(table) - 1, min(len(table), 60)).astype(int))
    saturated, median = [], []
    for index in looked_at:
        image = recording.frame_image(int(index))
        saturated.append(float(np.mean(image >= white)))
        median.append(float(np.median(image)))
        progress("frames", (index + 1) / len(table))
    return FrameHealth(table, interval, missing, looked_at, np.array(saturated), np.array(median))


def _plural(count: int, noun: str) -> str:
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"


def _event_findings(events: EventHealth) -> list[str]:
    findings = []
    if events.steps_back:
        findings.append(
            f"Event stamps run backwards {events.steps_back} times; nothing that estimates will read this recording. "
            "Ingest it again with a longer --reorder-ms."
        )
    if events.outside:
        findings.append(
            f"{_plural(events.outside, 'event')} outside the {events.pixels.shape[1]}x{events.pixels.shape[0]} event "
            "grid: the module description does not belong to this recording."
        )
    if events.duplicates:
        findings.append(f"{_plural(events.duplicates, 'event')} repeat the one before exactly.")
    mean_gap = (events.t1_ns - events.t0_ns) / max(1, events.count)
    if events.longest_gap_ns > max(50e6, 1000 * mean_gap):
        findings.append(
            f"The longest gap between events is {events.longest_gap_ns * 1e-6:.1f} ms: a clock jump or a pause."
        )
    if len(events.lost):
        lost_ms = float((events.lost[:, 1] - events.lost[:, 0]).sum()) * 1e-6
        findings.append(
            f"The module reports {_plural(len(events.lost), 'interval')} of lost events, {lost_ms:.1f} ms in all."
        )
    if len(events.hot):
        verb = "fires" if len(events.hot) == 1 else "fire"
        findings.append(f"{_plural(len(events.hot), 'event pixel')} {verb} far more than the pixels around.")
    for line in events.spectrum.lines:
        if line.harmonic == 1:
            kind = "lamp flicker on mains" if line.is_mains_flicker else "periodic light"
            findings.append(
                f"{kind[0].upper()}{kind[1:]} at {line.hz:.2f} Hz (resolution {line.resolution_hz:.2f} Hz)."
            )
    return findings


def blink_locked_to_frames(blink_hz: float, frame_hz: float, frames: int, min_phases: int = 8) -> bool:
    """Whether the frames meet the blink in fewer than `min_phases` distinct phases.

    Bands of a blinking target then stand still in the frames and the clocks can't be told.
    """
    phase = np.sort((np.arange(max(frames, 2)) * blink_hz / frame_hz) % 1.0)
    gaps = np.diff(np.append(phase, phase[0] + 1.0))
    return bool(np.sum(gaps > 0.01) < min_phases)


def _frame_findings(frames: FrameHealth, events: EventHealth | None) -> list[str]:
    findings = []
    if len(frames.interval_ns) and frames.interval_ns.min() <= 0:
        findings.append(f"Frame stamps do not rise at {_plural(int(np.sum(frames.interval_ns <= 0)), 'place')}.")
    if frames.missing > 0:
        findings.append(f"{_plural(frames.missing, 'frame')} missing by counter or by gap.")
    bright = int(np.sum(frames.saturated > SATURATED_SHARE))
    if bright:
        findings.append(
            f"{bright} of {len(frames.saturated)} frames looked at are saturated in more than {SATURATED_SHARE:.0%} of "
            "their pixels: shorten the exposure."
        )
    if len(np.unique(frames.table.exposure_ns)) > 1:
        low, high = frames.table.exposure_ns.min() * 1e-6, frames.table.exposure_ns.max() * 1e-6
        findings.append(f"The exposure varies from {low:.3f} to {high:.3f} ms.")
    if events is not None and len(frames.interval_ns):
        for line in events.spectrum.lines:
            if line.harmonic == 1 and blink_locked_to_frames(line.hz, frames.rate_hz, len(frames.table)):
                findings.append(
                    f"The light at {line.hz:.2f} Hz is locked to the frame rate of {frames.rate_hz:.2f} Hz: its bands "
                    "stand still and clocks can't be estimated from them. Change one of the two rates."
                )
        overlap = min(events.t1_ns, int(frames.table.t_start_ns[-1])) - max(
            events.t0_ns, int(frames.table.t_start_ns[0])
        )
        if overlap <= 0:
            findings.append("Frames and events do not overlap in time by their stamps: their clocks start apart.")
    return findings


def examine(recording: Recording, module: HybridModule | None, progress: Callable[[str, float], None]) -> HealthReport:
    """Look through a whole recording, in constant memory. `module` defaults to the one that the recording names."""
    module = module if module is not None else recording.module
    events = _event_health(recording, module, progress) if recording.event_count else None
    frames = _frame_health(recording, module, progress) if len(recording.frames) else None
    findings = [] if events is not None else ["The recording holds no events."]
    findings += _event_findings(events) if events is not None else []
    findings += _frame_findings(frames, events) if frames is not None else ["The recording holds no frames."]
    return HealthReport(events, frames, tuple(findings))

"""From the frames of all views to clocks and demodulated pictures.

The first round knows neither clocks nor board: rows speak through their leading singular vector, and a search over
phase and line time finds the blinking. The pictures that follow give each pixel its proper weight, and the second
round fits the clocks with them.
"""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.agreement import Agreement, compare_pictures
from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.clocks import ClockFit, ClockModel, Clocks, fit_clocks, search
from hybridtrack.calibration.frame_demodulation import (
    FrameDemodulation,
    RowShares,
    Shares,
    SweptShares,
    demodulate_frames,
)
from hybridtrack.calibration.frame_light import view_light
from hybridtrack.calibration.light_steps import LightSteps, find_light_steps
from hybridtrack.calibration.row_signals import (
    LEAST_FRAMES,
    RowSignals,
    ViewSignals,
    banded_row_signals,
    join_row_signals,
    singular_row_signals,
    weighted_row_signals,
)
from hybridtrack.calibration.square_wave import CycleStrengths, Waveform, bright_share
from hybridtrack.calibration.views import View
from hybridtrack.errors import DegenerateDataError, ModuleMismatchError
from hybridtrack.module import HybridModule, Target, Timing
from hybridtrack.recording import FrameTable, Recording

Array = np.ndarray

LEAST_EXPLAINED = 0.5
STEPS_EXPLAINED = 0.9
LEAST_CORRELATION = 0.35
DELAY_STEPS = 192
FIRST_BAND_CYCLES = 1.0 / 20.0
FIRST_ROWS = 3
BAND_CYCLES = 1.0 / 128.0  # pixels of a row whose delay by a screen's sweep is alike are one signal for the clocks
DRIFT_DEVIATION = 10e-6  # a drift is fitted where the data tell it to better than this


@dataclass(frozen=True)
class FrameSettings:
    """What the fits of a recording share: nominal module, target, blink clock, the epoch of the drift, and the
    strengths of cycles where the target plays several steps of light."""

    nominal: HybridModule
    target: Target
    blink: Blink
    drift_epoch_ns: int
    strengths: CycleStrengths | None = None

    @property
    def edges(self) -> tuple[float, float]:
        """Rise and fall of the target's light in cycles, zero where it does not state them."""
        rate = self.blink.hz
        return (self.target.rise_s or 0.0) * rate, (self.target.fall_s or 0.0) * rate

    @property
    def nominal_offset_ns(self) -> float:
        """The offset to stay close to."""
        timing = self.nominal.timing or Timing()
        return timing.frame_offset_ns or 0.0

    def model(self, rows: RowSignals) -> ClockModel:
        """The clock model over these rows."""
        return ClockModel(rows, self.blink, *self.edges, self.drift_epoch_ns, self.strengths)

    def waveform(self, clocks: Clocks) -> Waveform:
        """Light of set A over a cycle."""
        return Waveform(clocks.duty, *self.edges, self.strengths)


@dataclass(frozen=True)
class FrameViews:
    """Clocks and pictures: `demodulated[k]` belongs to view `views[k]` (index into the list given), None where its
    frames could not be resolved; `frames[k]` indices of frames used. `rows` are the signals behind `clocks`, for
    figures."""

    demodulated: list[FrameDemodulation | None]
    frames: list[Array]
    clocks: ClockFit
    rows: RowSignals
    agreement: Agreement
    findings: list[str]
    light_steps: LightSteps | None = None


def frames_of_view(frames: FrameTable, view: View, offset_ns: float, readout_ns: float) -> Array:
    """Indices of frames all of whose rows are exposed within the view, by an offset that may still be rough."""
    start = frames.t_start_ns + offset_ns
    first, last = min(readout_ns, 0.0), max(readout_ns, 0.0)
    return np.flatnonzero((start + first >= view.t0_ns) & (start + frames.exposure_ns + last <= view.t1_ns))


def view_shares(
    settings: FrameSettings, clocks: Clocks, frames: FrameTable, chosen: Array, delay_ns: Array | None = None
) -> Shares:
    """Shares of the chosen frames' rows, or pixels where a screen's sweep delays them by `delay_ns` (H, W)."""
    mode, blink = settings.nominal.frame_mode, settings.blink
    # Stamps may be large: differences are taken before they turn to floating point.
    stamp = (frames.t_start_ns[chosen] - settings.drift_epoch_ns).astype(float)[:, None]
    order = mode.read_order(np.arange(mode.height))
    start = stamp + clocks.offset_ns + clocks.drift * stamp + order * clocks.line_time_ns
    length = frames.exposure_ns[chosen].astype(float)[:, None] + clocks.exposure_correction_ns
    cycles = (
        (start + float(settings.drift_epoch_ns - blink.epoch_ns)) * (blink.hz * 1e-9)
        + blink.epoch_phase
        + 0.5 * settings.edges[0]
    )
    rate, wave = blink.hz * 1e-9, settings.waveform(clocks)
    length = length * rate + np.zeros_like(cycles)
    if delay_ns is None:
        return RowShares(bright_share(cycles, length, wave))
    first, last = float(delay_ns.min()), float(delay_ns.max())
    step = max((last - first) / (DELAY_STEPS - 1), 1.0)
    delays = (first + step * np.arange(DELAY_STEPS)) * rate
    table = bright_share(cycles[..., None] - delays, np.broadcast_to(length[..., None], (*length.shape, 1)), wave)
    return SweptShares(table, (delay_ns - first) / step)


def candidate_line_times_ns(settings: FrameSettings, frames: FrameTable) -> Array:
    """Line times to search: zero for a global shutter, around the nominal one, or all that fit between frames."""
    mode, timing = settings.nominal.frame_mode, settings.nominal.timing
    if mode.shutter == "global":
        return np.zeros(1)
    if timing is not None and timing.line_time_ns:
        around = timing.line_time_ns * np.linspace(0.85, 1.15, 7)
        return np.r_[around, -around]
    interval = float(np.median(np.diff(frames.t_start_ns)))
    step = settings.blink.period_ns / 8.0 / mode.height
    return np.arange(-np.floor(interval / mode.height / step), interval / mode.height / step + 1) * step


def first_rows(settings: FrameSettings, recording: Recording, frames: list[Array]) -> RowSignals:
    """Row signals by singular vectors. Raises DegenerateDataError where no row of any view varies."""
    mode, table = settings.nominal.frame_mode, recording.frames
    signed = not settings.target.is_counterphase
    parts = []
    for k, chosen in enumerate(frames):
        if len(chosen) >= LEAST_FRAMES:
            signal, deviation = singular_row_signals(view_light(recording, chosen, settings.nominal), signed)
            parts.append(
                ViewSignals(
                    signal, deviation, table.t_start_ns[chosen], table.exposure_ns[chosen], k, np.zeros(mode.height)
                )
            )
    if not parts:
        raise DegenerateDataError(
            f"a view needs at least {LEAST_FRAMES} frames that lie wholly within it; the longest of {len(frames)} "
            f"views has {max((len(chosen) for chosen in frames), default=0)}"
        )
    rows = join_row_signals(parts, mode.read_order(np.arange(mode.height)), int(table.t_start_ns[0]), signed)
    if len(rows.row) < 20:
        raise DegenerateDataError(
            "the frames show no blinking: at least 20 rows that vary from frame to frame are required, got "
            f"{len(rows.row)} (exposure a whole number of blink periods, or blinking locked to the frame rate)"
        )
    return rows


def demodulate_view(
    settings: FrameSettings, recording: Recording, clocks: Clocks, chosen: Array, delay_ns: Array | None = None
) -> FrameDemodulation | None:
    """Pictures of one view, or None where it has too few frames or their rows all see the same share."""
    if len(chosen) < LEAST_FRAMES:
        return None
    light = view_light(recording, chosen, settings.nominal)
    result = demodulate_frames(light, view_shares(settings, clocks, recording.frames, chosen, delay_ns))
    return result if np.mean(np.isfinite(result.bright_dn)) > 0.02 else None


def swapped(clocks: Clocks, period_ns: float) -> Clocks:
    """The clocks under which set A is bright when it was dark."""
    return replace(clocks, offset_ns=clocks.offset_ns + 0.5 * period_ns)


def bootstrap(settings: FrameSettings, recording: Recording, frames: list[Array]) -> Clocks:
    """Rough clocks with no knowledge of the board."""
    model = settings.model(first_rows(settings, recording, frames))
    start = Clocks(settings.nominal_offset_ns, duty=settings.target.duty)
    clocks = search(model, start, candidate_line_times_ns(settings, recording.frames))
    free = ("offset_ns",) if settings.nominal.frame_mode.shutter == "global" else ("offset_ns", "line_time_ns")
    fit = fit_clocks(model, clocks, free, settings.nominal_offset_ns)
    if fit.explained < LEAST_EXPLAINED:
        raise DegenerateDataError(
            f"the frames' rows do not follow the blinking of the events at {settings.blink.hz:.3f} Hz: a share of "
            f"{LEAST_EXPLAINED:g} of their variance is required, got {max(fit.explained, 0.0):.2f}"
        )
    return fit.clocks


def agree(settings: FrameSettings, demodulated: list[FrameDemodulation | None], amplitudes: list[Array]) -> Agreement:
    """Compare frames with events. Raises ModuleMismatchError where no mirroring makes them alike."""
    pairs = [(d.swing_dn, a) for d, a in zip(demodulated, amplitudes, strict=True) if d is not None]
    if not pairs:
        raise DegenerateDataError(
            "no view's frames resolve the blinking: the rows of a view must see different shares of it from frame to "
            "frame (the blinking is locked to the frame rate, or the exposure is a whole number of blink periods)"
        )
    agreement = compare_pictures([s for s, _ in pairs], [a for _, a in pairs], settings.nominal)
    if abs(agreement.correlation) < LEAST_CORRELATION:
        raise ModuleMismatchError(
            "frames and events must show the same board: under the module's event grid, cluster and frame mode their "
            f"blinking pictures correlate by {agreement.correlation:.2f} at best over all mirrorings, where "
            f"{LEAST_CORRELATION:g} is required"
        )
    return agreement


def second_rows(
    settings: FrameSettings, recording: Recording, frames: list[Array], demodulated: list[FrameDemodulation | None]
) -> RowSignals:
    """Row signals weighted by the demodulated pictures."""
    mode, table = settings.nominal.frame_mode, recording.frames
    parts = []
    for k, (chosen, picture) in enumerate(zip(frames, demodulated, strict=True)):
        if picture is not None:
            used = chosen[picture.kept]
            signal, deviation = weighted_row_signals(
                view_light(recording, used, settings.nominal), picture.swing_dn, picture.noise_dn
            )
            times = table.t_start_ns[used], table.exposure_ns[used]
            parts.append(ViewSignals(signal, deviation, *times, k, np.zeros(mode.height)))
    return join_row_signals(parts, mode.read_order(np.arange(mode.height)), int(table.t_start_ns[0]), True)


def banded_singular_signals(light: Array, delay: Array, width_ns: float) -> tuple[Array, Array, Array]:
    """Signals (B * H, N) of every few rows by singular vectors, each band of delays (H, W) apart, with deviations and
    mean delays (B * H,)."""
    band, columns = np.floor(delay / width_ns), []
    height = light.shape[1]
    for number in np.unique(band):
        inside = band == number
        signal, deviation = np.zeros((height, len(light))), np.full(height, np.inf)
        thin = np.flatnonzero(inside.any(axis=1))[::FIRST_ROWS]
        part = np.where(inside[thin], light[:, thin], np.float32(np.nan))
        signal[thin], deviation[thin] = singular_row_signals(part, signed=False)
        mean_delay = np.sum(inside * delay, axis=1) / np.maximum(np.sum(inside, axis=1), 1)
        columns.append((signal, deviation, mean_delay))
    signals, deviations, delays = (np.concatenate(each) for each in zip(*columns, strict=True))
    return signals, deviations, delays


def swept_rows(
    settings: FrameSettings,
    recording: Recording,
    frames: list[Array],
    pictures: list[FrameDemodulation | None] | None,
    delays_ns: list[Array | None],
) -> RowSignals:
    """Signals of the parts of rows that a screen's sweep delays alike, each with its pixels' mean delay.

    Weighted by `pictures`, or by singular vectors where there are none yet.
    """
    mode, table = settings.nominal.frame_mode, recording.frames
    parts = []
    for k, (chosen, delay) in enumerate(zip(frames, delays_ns, strict=True)):
        picture = None if pictures is None else pictures[k]
        if delay is None or len(chosen) < LEAST_FRAMES or (picture is None and pictures is not None):
            continue
        light = view_light(recording, chosen, settings.nominal)
        if picture is None:
            lines = banded_singular_signals(light, delay, settings.blink.period_ns * FIRST_BAND_CYCLES)
        else:
            width_ns = settings.blink.period_ns * BAND_CYCLES
            lines = banded_row_signals(light, picture.swing_dn, picture.noise_dn, delay, width_ns)
        signal, deviation, mean_delay = lines
        times = table.t_start_ns[chosen], table.exposure_ns[chosen]
        parts.append(ViewSignals(signal, deviation, *times, k, mean_delay))
    if not parts:
        raise DegenerateDataError(f"a view needs at least {LEAST_FRAMES} frames that lie wholly within it; none has")
    order = mode.read_order(np.arange(mode.height))
    return join_row_signals(parts, order, int(table.t_start_ns[0]), pictures is not None)


def final_clocks(
    settings: FrameSettings, rows: RowSignals, clocks: Clocks, fit_sweep: bool = False
) -> tuple[ClockFit, list[str]]:
    """Fit everything the rows tell, leaving out what they don't, each with a sentence."""
    free = ["offset_ns", "exposure_correction_ns", "duty", "drift"]
    if fit_sweep:
        free.insert(1, "sweep")
    if settings.nominal.frame_mode.shutter == "rolling":
        free.insert(1, "line_time_ns")
    model, findings = settings.model(rows), []
    sentences = {
        "drift": "clock drift cannot be told from {views} views over {span:.1f} s: it is left out, and the offset "
        "holds for the time of this recording",
        "duty": "the target's duty is taken as stated: the frames do not tell it from the exposure",
        "exposure_correction_ns": "the stamped exposure is taken as it is: the frames do not tell a correction",
    }
    span_s = float(np.max(np.where(rows.weight > 0, rows.stamp_ns, 0.0))) * 1e-9
    for dropped in (None, "drift", "duty", "exposure_correction_ns"):
        if dropped is not None:
            free.remove(dropped)
            findings.append(sentences[dropped].format(views=len(np.unique(rows.view)), span=span_s))
        try:
            fit = fit_clocks(model, clocks, tuple(free), settings.nominal_offset_ns)
        except DegenerateDataError:
            continue
        if "drift" not in free or (fit.sigma("drift") or 0.0) < DRIFT_DEVIATION:
            return fit, findings
    return fit_clocks(model, clocks, tuple(free), settings.nominal_offset_ns), findings


def fit_frames(settings: FrameSettings, recording: Recording, views: list[View], amplitudes: list[Array]) -> FrameViews:
    """Clocks and pictures of all views.

    `amplitudes`: signed event images (rows, columns) of the views. Raises DegenerateDataError where the frames do not
    resolve the blinking, ModuleMismatchError where they do not show what the events show.
    """
    table = recording.frames
    frames = [frames_of_view(table, view, settings.nominal_offset_ns, 0.0) for view in views]
    clocks = bootstrap(settings, recording, frames)
    demodulated = [demodulate_view(settings, recording, clocks, chosen) for chosen in frames]
    agreement = agree(settings, demodulated, amplitudes)
    if agreement.correlation < 0:
        clocks = swapped(clocks, settings.blink.period_ns)
        demodulated = [None if picture is None else picture.swapped() for picture in demodulated]
    readout_ns = clocks.line_time_ns * settings.nominal.frame_mode.height
    first_choice, frames = frames, [frames_of_view(table, view, clocks.offset_ns, readout_ns) for view in views]
    demodulated = [
        picture if np.array_equal(before, chosen) else demodulate_view(settings, recording, clocks, chosen)
        for picture, before, chosen in zip(demodulated, first_choice, frames, strict=True)
    ]
    rows = second_rows(settings, recording, frames, demodulated)
    steps = None
    if settings.strengths is not None:
        steps = find_light_steps(settings.model(rows), clocks, settings.strengths, views, settings.target)
        settings = replace(settings, strengths=steps.strengths)
    fit, findings = final_clocks(settings, rows, clocks)
    if steps is not None and fit.explained < STEPS_EXPLAINED:
        raise DegenerateDataError(
            "the frames must show the steps of light of a target with several levels: a share of "
            f"{STEPS_EXPLAINED:g} of their rows' variance is required to follow {len(steps.strength)} steps, got "
            f"{max(fit.explained, 0.0):.2f}; more frames a view, or a shorter exposure, tell more"
        )
    demodulated = [demodulate_view(settings, recording, fit.clocks, chosen) for chosen in frames]
    used = [c if d is None else c[d.kept] for c, d in zip(frames, demodulated, strict=True)]
    return FrameViews(demodulated, used, fit, rows, agreement, findings, steps)


def fit_swept_frames(
    settings: FrameSettings,
    recording: Recording,
    views: list[View],
    amplitudes: list[Array],
    delays_ns: list[Array | None],
    fit_sweep: bool,
) -> FrameViews:
    """As `fit_frames`, for a screen whose flip is swept over the board: `delays_ns` (H, W) of each view's frame pixels,
    None where unknown; `fit_sweep`: whether their common factor is fitted, too."""
    frames = [frames_of_view(recording.frames, view, settings.nominal_offset_ns, 0.0) for view in views]
    rows = swept_rows(settings, recording, frames, None, delays_ns)
    model = settings.model(rows)
    clocks = search(model, Clocks(duty=settings.target.duty), candidate_line_times_ns(settings, recording.frames))
    free = ("offset_ns",) if settings.nominal.frame_mode.shutter == "global" else ("offset_ns", "line_time_ns")
    clocks = fit_clocks(model, clocks, free, settings.nominal_offset_ns).clocks

    def demodulated(clocks: Clocks) -> list[FrameDemodulation | None]:
        longer = 1.0 + clocks.sweep
        return [
            None if delay is None else demodulate_view(settings, recording, clocks, chosen, longer * delay)
            for chosen, delay in zip(frames, delays_ns, strict=True)
        ]

    pictures = demodulated(clocks)
    agreement = agree(settings, pictures, amplitudes)
    if agreement.correlation < 0:
        clocks = swapped(clocks, settings.blink.period_ns)
        pictures = [None if picture is None else picture.swapped() for picture in pictures]
    readout_ns = clocks.line_time_ns * settings.nominal.frame_mode.height
    frames = [frames_of_view(recording.frames, view, clocks.offset_ns, readout_ns) for view in views]
    rows = swept_rows(settings, recording, frames, pictures, delays_ns)
    fit, findings = final_clocks(settings, rows, clocks, fit_sweep)
    pictures = demodulated(fit.clocks)
    used = [c if d is None else c[d.kept] for c, d in zip(frames, pictures, strict=True)]
    return FrameViews(pictures, used, fit, rows, agreement, findings)

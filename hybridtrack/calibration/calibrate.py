"""Calibrate a hybrid module from one recording of a blinking target: every step in order.

    events -> blink, views -> frames demodulated, clocks -> corners, lens, event map -> contrast, defects -> module

Each step refuses with one sentence what it cannot do; what can be done but not fully trusted is said in findings.
"""

from collections.abc import Callable
from dataclasses import asdict, dataclass, field
from datetime import UTC, datetime
from importlib.metadata import version
from typing import Any

import numpy as np

from hybridtrack.calibration.blink import Blink, find_blink
from hybridtrack.calibration.clock_completion import CompletedTiming, complete_timing
from hybridtrack.calibration.contrast import StepCounts, ThresholdFit, fit_thresholds
from hybridtrack.calibration.defects import find_defects, quiet_counts, share_of_lamps
from hybridtrack.calibration.event_light import EventSteps, event_steps
from hybridtrack.calibration.first_fire import FirstFire
from hybridtrack.calibration.frame_views import FrameSettings, FrameViews
from hybridtrack.calibration.intervals import shortest_interval_ns
from hybridtrack.calibration.joint import join_blocks
from hybridtrack.calibration.kernels import OFF_BRIGHT, OFF_DARK, ON_BRIGHT, ON_DARK
from hybridtrack.calibration.light_and_place import geometry_module, measure_light_and_place
from hybridtrack.calibration.light_steps import has_several_steps
from hybridtrack.calibration.onset import OnsetFit
from hybridtrack.calibration.settling import Settling, measure_settling
from hybridtrack.calibration.several_steps import StepsSeen, thresholds_from_steps
from hybridtrack.calibration.timing_result import TimingResult, timing_result
from hybridtrack.calibration.view_data import BoardCorners, EventMapFit, LensFit, ViewImages
from hybridtrack.calibration.views import ViewFold, ViewOptions, find_views
from hybridtrack.errors import DegenerateDataError, ModuleMismatchError
from hybridtrack.module import Contrast, Defects, HybridModule, Target
from hybridtrack.recording import Recording
from hybridtrack.threads import each

Array = np.ndarray
Progress = Callable[[str, float], None]


@dataclass(frozen=True)
class CalibrationOptions:
    """`lens_model`: None lets held-out error choose. `views`: how views are found."""

    lens_model: str | None = None
    views: ViewOptions = field(default_factory=ViewOptions)


@dataclass(frozen=True)
class CalibratedView:
    """One view as the report draws it: pictures, corners, the board's pose, and steps at event pixels; None where the
    board was not found in it."""

    images: ViewImages
    board: BoardCorners | None
    camera_from_board: Array | None
    steps: EventSteps | None


@dataclass(frozen=True)
class CalibrationResult:
    """The calibrated `module` and what it rests on."""

    module: HybridModule
    target: Target
    views: list[CalibratedView]
    blink: Blink
    onset: OnsetFit
    first_fire: FirstFire | None
    frames: FrameViews
    frame_settings: FrameSettings
    lens_fit: LensFit
    map_fit: EventMapFit
    timing: TimingResult
    thresholds: ThresholdFit
    settling: Settling
    findings: list[str]
    completed: CompletedTiming | None = None


def require_frames_of(recording: Recording, nominal: HybridModule) -> None:
    """Raise ModuleMismatchError where pictures are not of the module's frame mode."""
    shape, mode = recording.frames.shape[:2], nominal.frame_mode
    if tuple(shape) != mode.shape:
        raise ModuleMismatchError(
            f"frames of {mode.width}x{mode.height} pixels are required by the module's frame_mode, and the recording's "
            f"are {shape[1]}x{shape[0]}"
        )
    if recording.frames.dtype == np.uint8 and mode.white_dn > 255:
        raise ModuleMismatchError(
            f"frame_mode.white_dn is {mode.white_dn:g}, and the recording's frames of 8 bits end at 255"
        )


def require_common_time(recording: Recording) -> None:
    """Raise DegenerateDataError where no frame falls into the span of the events."""
    first, last = recording.event_span_ns
    stamps = recording.frames.t_start_ns
    if stamps[-1] < first - 1e9 or stamps[0] > last + 1e9:
        raise DegenerateDataError(
            f"frames and events must overlap in time: events span {first * 1e-9:.3f} to {last * 1e-9:.3f} s, frames "
            f"{stamps[0] * 1e-9:.3f} to {stamps[-1] * 1e-9:.3f} s"
        )


def step_counts(folds: list[ViewFold], steps: list[EventSteps], share: float, healthy: Array) -> StepCounts:
    """Observations of all `healthy` (rows, columns) pixels of set A and B that saw a step, `share` of which they
    felt.
    """
    parts = []
    for view, (fold, step) in enumerate(zip(folds, steps, strict=True)):
        known = np.isfinite(step.log_step) & healthy
        set_a = step.hits.kind == 1
        p = fold.planes
        on = np.where(set_a, p[ON_BRIGHT], p[ON_DARK])[known] / fold.cycles
        off = np.where(set_a, p[OFF_DARK], p[OFF_BRIGHT])[known] / fold.cycles
        size = share * step.log_step[known]
        parts.append([np.flatnonzero(known.ravel()), np.full(len(on), view), size, on, off, on >= 0])
        # Across edges the sign of the step says which flip is to bright.
        edge = np.isfinite(step.edge_step) & healthy & (np.abs(step.edge_step) > 0.3)
        rising = step.edge_step > 0
        on = np.where(rising, p[ON_BRIGHT], p[ON_DARK])[edge] / fold.cycles
        off = np.where(rising, p[OFF_DARK], p[OFF_BRIGHT])[edge] / fold.cycles
        size = share * np.abs(step.edge_step)[edge]
        parts.append([np.flatnonzero(edge.ravel()), np.full(len(on), view), size, on, off, on < 0])
    return StepCounts(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def contrast_block(fit: ThresholdFit, refractory_ns: float | None) -> Contrast:
    """The module file's contrast."""
    return Contrast(
        on_threshold=fit.on,
        off_threshold=fit.off,
        on_spread=fit.on_spread,
        off_spread=fit.off_spread,
        noise_width=fit.noise[0] if fit.noise is not None else None,
        refractory_ns=refractory_ns,
    )


def provenance(recording: Recording, target: Target, options: CalibrationOptions) -> dict[str, Any]:
    """Where the numbers come from."""
    return {
        "recording": recording.path.name,
        "recording_sha256": recording.digest(),
        "target": target.name,
        "tool": "hybridtrack",
        "tool_version": version("hybridtrack"),
        "date": datetime.now(UTC).isoformat(timespec="seconds"),
        "options": asdict(options),
    }


def calibrate(
    recording: Recording,
    target: Target,
    nominal: HybridModule,
    options: CalibrationOptions | None = None,
    progress: Progress | None = None,
) -> CalibrationResult:
    """Calibrate the module that made `recording` of `target`, from its `nominal` description.

    Raises DegenerateDataError (no events, no frames, no blinking, board never in view, too few views, no tilt) and
    ModuleMismatchError (the nominal module is not the recording's), each with one sentence.
    """
    options = options or CalibrationOptions()
    tell = progress or (lambda stage, fraction: None)
    recording.require_events()
    recording.require_frames()
    require_frames_of(recording, nominal)
    require_common_time(recording)
    shape = nominal.event_grid.shape

    tell("blinking", 0.0)
    rough = find_blink(recording, shape, target)
    tell("views", 0.08)
    views, findings = find_views(recording, rough, shape, options.views, has_several_steps(target))
    measured = measure_light_and_place(
        recording,
        views,
        rough,
        target,
        nominal,
        options.lens_model,
        lambda stage, part: tell(stage, 0.16 + 0.69 * part),
    )
    onset, frames, geometry = measured.flips.onset, measured.frames, measured.geometry
    blink, images, folds = onset.blink, measured.images, measured.folds
    timing = timing_result(
        frames.clocks,
        onset,
        nominal.frame_mode,
        target,
        measured.settings.nominal_offset_ns,
        measured.scanout_s,
        periods_known=measured.light_steps is not None and len(measured.light_steps.strength) > 1,
    )
    lens_fit, map_fit = geometry.lens_fit, geometry.map_fit
    findings += blink_findings(blink, target) + frames.findings + geometry.findings

    tell("contrast", 0.85)
    module = geometry_module(nominal, lens_fit, map_fit)
    pose_of = dict(zip(lens_fit.views.tolist(), lens_fit.camera_from_board, strict=True))
    board_of = {board.view: board for board in geometry.search.boards}

    def shown_view(image: ViewImages) -> CalibratedView:
        pose = pose_of.get(image.index)
        steps = None if pose is None else event_steps(image, module, lens_fit.lens, pose, target)
        return CalibratedView(image, board_of.get(image.index), pose, steps)

    shown = each(shown_view, images)
    placed = [(fold, view.steps) for fold, view in zip(folds, shown, strict=True) if view.steps is not None]
    placed_folds, placed_steps = [fold for fold, _ in placed], [step for _, step in placed]
    seen_views = [view for view, show in zip(measured.kept_views, shown, strict=True) if show.steps is not None]
    completed = complete_timing(
        timing,
        measured.recording,
        list(zip(seen_views, placed_steps, strict=True)),
        (blink, measured.flips.first_fire),
        nominal,
        target,
    )
    timing = completed.timing
    findings += timing.findings
    everything, recording, kept_views = recording, measured.recording, measured.kept_views
    settling = measure_settling(recording, kept_views, folds, blink)
    quiet = quiet_counts(recording, kept_views, folds, blink, shape)
    defects, defect_findings = find_defects(
        quiet, placed_folds, placed_steps, share_of_lamps(recording, kept_views, blink, shape)
    )
    thresholds = fit_thresholds(
        step_counts(placed_folds, placed_steps, settling.share, healthy_mask(defects, shape)), shape
    )
    refractory = shortest_interval_ns(recording, kept_views, shape)
    if measured.light_steps is not None:
        tell("steps of light", 0.88)
        seen = StepsSeen(
            everything,
            [measured.views[view.images.index] for view in shown if view.steps is not None],
            placed_steps,
            blink,
            measured.light_steps,
            healthy_mask(defects, shape),
        )
        thresholds = thresholds_from_steps(seen, target, thresholds, settling, refractory or 0.0)
    findings += defect_findings + thresholds.findings

    tell("module", 0.97)
    mode = nominal.frame_mode.model_copy(update={"row_order": timing.row_order})
    module = module.model_copy(
        update={
            "frame_mode": mode,
            "timing": timing.timing,
            "contrast": contrast_block(thresholds, refractory),
            "defects": defects,
            "settings": recording.settings or nominal.settings,
            "uncertainty": join_blocks(lens_fit, map_fit, timing, thresholds),
            "findings": findings,
            "provenance": provenance(recording, target, options),
        }
    )
    tell("module", 1.0)
    return CalibrationResult(
        module,
        target,
        shown,
        blink,
        onset,
        measured.flips.first_fire,
        frames,
        measured.settings,
        lens_fit,
        map_fit,
        timing,
        thresholds,
        settling,
        findings,
        completed,
    )


def healthy_mask(defects: Defects, shape: tuple[int, int]) -> Array:
    """Mask (rows, columns) of pixels that are neither hot nor dead."""
    mask = np.ones(shape, bool)
    for x, y in [*defects.hot, *defects.dead]:
        mask[y, x] = False
    return mask


def blink_findings(blink: Blink, target: Target) -> list[str]:
    """What the spectrum says beyond the target's line."""
    findings = [
        f"the target blinks at {blink.hz:.5f} Hz, {1e6 * (blink.hz / target.blink_hz - 1.0):+.1f} ppm from its nominal "
        "rate"
    ]
    if blink.flicker_hz:
        lines = ", ".join(f"{hz:.1f}" for hz in blink.flicker_hz[:6])
        findings.append(f"other light flickers at {lines} Hz")
    return findings

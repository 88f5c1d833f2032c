"""From a recording and its views to flips, pictures, clocks and geometry: what contrast and defects then rest on.

A screen that sweeps takes two passes: delays of the first come from the events alone, those of the second from the
board's poses.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.first_fire import FirstFire, at_mean_first_event, measure_first_fire
from hybridtrack.calibration.frame_views import (
    FrameSettings,
    FrameViews,
    fit_frames,
    fit_swept_frames,
    frames_of_view,
)
from hybridtrack.calibration.geometry_fit import Geometry, fit_geometry
from hybridtrack.calibration.light_steps import ChosenCycles, LightSteps, first_guess, has_several_steps
from hybridtrack.calibration.onset import OnsetFit, fit_onsets
from hybridtrack.calibration.row_signals import LEAST_FRAMES
from hybridtrack.calibration.sweep import (
    SweptRecording,
    ViewSweep,
    flip_phase,
    sets_at_events,
    shortened,
    sweeps_of_views,
)
from hybridtrack.calibration.sweep_ramp import (
    activity,
    event_positions_of_frame,
    fit_ramp,
    mirrored_module,
    refined_rate,
    require_no_sweep,
    view_harmonic,
)
from hybridtrack.calibration.view_data import EventMapFit, LensFit, ViewImages
from hybridtrack.calibration.views import View, ViewFold, fold_view
from hybridtrack.errors import DegenerateDataError
from hybridtrack.module import HybridModule, Target, lens_parameters
from hybridtrack.recording import Recording

Array = np.ndarray
Progress = Callable[[str, float], None]

LEAST_STRONG = 3  # cycles of the strongest step of light in a view
SWEEP_DOUBT = 0.5  # deviations of the sweep's excess beyond which events are counted anew


@dataclass(frozen=True)
class Flips:
    """Events of each view by pixel and part of the cycle, and the blink clock by their bursts."""

    folds: list[ViewFold]
    onset: OnsetFit
    first_fire: FirstFire | None


@dataclass(frozen=True)
class LightAndPlace:
    """What was measured: `recording` and `views` as events were counted in them, the clocks' `settings` and `frames`,
    `images` with their `folds`, one a view whose frames could be demodulated, and `geometry`. `scanout_s`: the time
    that a screen's sweep takes, with its deviation, None where there is none.
    """

    recording: Recording
    views: list[View]
    flips: Flips
    settings: FrameSettings
    frames: FrameViews
    images: list[ViewImages]
    folds: list[ViewFold]
    geometry: Geometry
    scanout_s: tuple[float, float] | None = None

    @property
    def light_steps(self) -> LightSteps | None:
        """Which step of light each cycle played, None where the target has one."""
        return self.frames.light_steps

    @property
    def kept_views(self) -> list[View]:
        """The views of `images`."""
        return [self.views[image.index] for image in self.images]


def geometry_module(nominal: HybridModule, lens_fit: LensFit, map_fit: EventMapFit) -> HybridModule:
    """The nominal module with lens, map, mirroring and clear site as found."""
    grid = nominal.event_grid.model_copy(update={"mirror_x": map_fit.mirror_x, "mirror_y": map_fit.mirror_y})
    cluster = nominal.cluster
    if cluster.clear_site != map_fit.clear_site:
        # The filter pattern names the place of the clear pixel, and no longer holds.
        cluster = cluster.model_copy(update={"clear_site": map_fit.clear_site, "filters": None})
    return nominal.model_copy(
        update={
            "event_grid": grid,
            "cluster": cluster,
            "lens": lens_parameters(lens_fit.lens),
            "colour_from_event": map_fit.colour_from_event,
        }
    )


def fold_views(recording: Recording, views: list[View], blink: Blink, shape: tuple[int, int]) -> list[ViewFold]:
    """Fold every view; one of which only some cycles are kept counts those."""
    cycles = [recording.count_in(view) if isinstance(recording, ChosenCycles) else None for view in views]
    return [fold_view(recording, view, blink, shape, count) for view, count in zip(views, cycles, strict=True)]


def date_flips(recording: Recording, views: list[View], rough: Blink, shape: tuple[int, int]) -> Flips:
    """Fold the views by a rough blink clock, refine it by the bursts, and fold them again."""
    folds = fold_views(recording, views, rough, shape)
    onset = fit_onsets(recording, rough, views, folds)
    first_fire = measure_first_fire(recording, views, folds, onset)
    onset = at_mean_first_event(onset, first_fire)
    return Flips(fold_views(recording, views, onset.blink, shape), onset, first_fire)


def images_of_views(
    views: list[View], folds: list[ViewFold], frames: FrameViews
) -> tuple[list[ViewImages], list[ViewFold]]:
    """Pictures and folds of the views whose frames could be demodulated."""
    images, kept = [], []
    for k, (view, fold, picture) in enumerate(zip(views, folds, frames.demodulated, strict=True)):
        if picture is None:
            continue
        images.append(
            ViewImages(
                k,
                view.t0_ns,
                view.t1_ns,
                frames.frames[k],
                picture.bright_dn,
                picture.dark_dn,
                picture.bright_sigma_dn,
                picture.dark_sigma_dn,
                fold.on_count(),
                fold.off_count(),
                fold.amplitude(),
                fold.snr(),
                fold.cycles,
                view.sway_px,
            )
        )
        kept.append(fold)
    return images, kept


def measure_at_once(
    recording: Recording,
    views: list[View],
    rough: Blink,
    target: Target,
    nominal: HybridModule,
    lens_model: str | None,
    tell: Progress,
) -> LightAndPlace:
    """As if the board flipped all at once. Of several steps of light only the strongest counts here."""
    tell("flips", 0.0)
    shape, strengths, everything = nominal.event_grid.shape, None, recording
    if has_several_steps(target):
        guess, strong = first_guess(everything, views, rough, target, shape)
        recording = ChosenCycles(everything, rough, guess.first, strong)
        views = [view for view in views if recording.count_in(view) >= LEAST_STRONG]
        if not views:
            raise DegenerateDataError(
                f"a view of a target with several levels must hold {LEAST_STRONG} cycles of the largest, and none does"
            )
    flips = date_flips(recording, views, rough, shape)
    if has_several_steps(target):
        strengths, _ = first_guess(everything, views, flips.onset.blink, target, shape)
    tell("frames", 0.1)
    settings = FrameSettings(nominal, target, flips.onset.blink, int(recording.frames.t_start_ns.mean()), strengths)
    frames = fit_frames(settings, recording, views, [fold.amplitude() for fold in flips.folds])
    images, folds = images_of_views(views, flips.folds, frames)
    geometry = fit_geometry(
        images, target, nominal, lens_model, lambda stage, fraction: tell(stage, 0.4 + 0.6 * fraction)
    )
    return LightAndPlace(recording, views, flips, settings, frames, images, folds, geometry)


def measure_by_ramps(
    recording: Recording,
    views: list[View],
    rough: Blink,
    target: Target,
    nominal: HybridModule,
    lens_model: str | None,
    tell: Progress,
) -> LightAndPlace:
    """With the sweep of a screen as the events of each view show it, before the board's pose is known.

    The sets of a counterphase board may be named the wrong way round, in one view as in another.
    """
    tell("sweep", 0.0)
    shape, counterphase = nominal.event_grid.shape, target.is_counterphase
    rough = refined_rate(recording, views, rough, shape, 2 if counterphase else 1)
    harmonics = [view_harmonic(recording, view, rough, shape) for view in views]
    ramps = [fit_ramp(harmonic, counterphase, rough.duty) for harmonic in harmonics]
    frames = [frames_of_view(recording.frames, view, 0.0, 0.0) for view in views]
    seen = [k for k, chosen in enumerate(frames) if len(chosen) >= LEAST_FRAMES]
    mirrored = mirrored_module(
        [activity(recording, frames[k], nominal) for k in seen], [np.abs(harmonics[k]) for k in seen], nominal
    )
    grid = np.stack(np.meshgrid(np.arange(shape[1]), np.arange(shape[0])), axis=-1).astype(float)
    at_frames = event_positions_of_frame(mirrored)
    period = rough.period_ns
    events_ns = [period * ramp.cycles(grid) for ramp in ramps]
    frames_ns: list[Array | None] = [period * ramp.cycles(at_frames) for ramp in ramps]
    views = shortened(views, max(float(delay.max()) for delay in events_ns), period)
    swept = SweptRecording(recording, views, events_ns)
    flips = date_flips(swept, views, rough, shape)
    settings = FrameSettings(nominal, target, flips.onset.blink, int(recording.frames.t_start_ns.mean()))
    tell("frames of a swept screen", 0.1)
    found = fit_swept_frames(settings, swept, views, [fold.amplitude() for fold in flips.folds], frames_ns, False)
    images, folds = images_of_views(views, flips.folds, found)
    geometry = fit_geometry(images, target, nominal, lens_model, lambda stage, part: tell(stage, 0.4 + 0.6 * part))
    return LightAndPlace(swept, views, flips, settings, found, images, folds, geometry)


@dataclass(frozen=True)
class _Swept:
    """Recording and blink clock with every event put back by its pixel's delay."""

    recording: SweptRecording
    views: list[View]
    blink: Blink


def _towards(
    first: LightAndPlace, recording: Recording, views: list[View], way: ViewSweep, kinds: Array, scanout_ns: float
) -> tuple[float, float]:
    """Phase of the flips of one view, and how sharply they gather, under one way of the sweep."""
    swept = SweptRecording(recording, views, [scanout_ns * way.events])
    return flip_phase(swept, views, [kinds], first.flips.onset.blink)


def _put_back(first: LightAndPlace, recording: Recording, views: list[View], ways: list[ViewSweep],
              sets: list[Array], scanout_ns: float) -> _Swept:  # fmt: skip
    blink = first.flips.onset.blink
    views = shortened(views, scanout_ns, blink.period_ns)
    swept = SweptRecording(recording, views, [scanout_ns * way.events for way in ways])
    phase, _ = flip_phase(swept, views, sets, blink)
    return _Swept(swept, views, replace(blink, epoch_phase=(blink.epoch_phase - phase) % 1.0, fold_lead=0.05))


def measure_swept(
    first: LightAndPlace,
    recording: Recording,
    views: list[View],
    target: Target,
    nominal: HybridModule,
    lens_model: str | None,
    tell: Progress,
) -> LightAndPlace:
    """Measure again with the delays that the board's poses give. `first` is what the ramps of the events gave."""
    module = geometry_module(nominal, first.geometry.lens_fit, first.geometry.map_fit)
    known, sets = sweeps_of_views(first.geometry, target, module), sets_at_events(first.geometry, target, module)
    scanout_ns = 1e9 * target.scanout_s
    views = [views[k] for k in sorted(known)]
    ways, kinds = [], []
    for view, number in zip(
        shortened(views, scanout_ns, first.flips.onset.blink.period_ns), sorted(known), strict=True
    ):
        choices = [(known[number], sets[number])]
        if target.is_counterphase and not target.steady_dark:
            # Named half a turn round, perhaps: the sweep itself tells which way it goes.
            choices.append((known[number].turned(), -sets[number]))
        sharp = [_towards(first, recording, [view], way, kind, scanout_ns)[1] for way, kind in choices]
        way, kind = choices[int(np.argmax(sharp))]
        ways.append(way)
        kinds.append(kind)
    swept = _put_back(first, recording, views, ways, kinds, scanout_ns)
    for last in (False, True):
        tell("flips of a swept screen", 0.0)
        flips = date_flips(swept.recording, swept.views, swept.blink, nominal.event_grid.shape)
        tell("frames of a swept screen", 0.1)
        settings = replace(first.settings, blink=flips.onset.blink)
        delays: list[Array | None] = [scanout_ns * way.frames for way in ways]
        amplitudes = [fold.amplitude() for fold in flips.folds]
        frames = fit_swept_frames(settings, recording, swept.views, amplitudes, delays, True)
        excess, sigma = frames.clocks.clocks.sweep, frames.clocks.sigma("sweep") or 0.0
        if last or abs(excess) <= SWEEP_DOUBT * sigma:
            break
        scanout_ns *= 1.0 + excess
        swept = _put_back(first, recording, views, ways, kinds, scanout_ns)
    images, folds = images_of_views(swept.views, flips.folds, frames)
    geometry = fit_geometry(images, target, nominal, lens_model, lambda stage, part: tell(stage, 0.4 + 0.6 * part))
    found_s = 1e-9 * scanout_ns * (1.0 + excess)
    return LightAndPlace(
        swept.recording, swept.views, flips, settings, frames, images, folds, geometry, (found_s, found_s * sigma)
    )


def measure_light_and_place(
    recording: Recording,
    views: list[View],
    rough: Blink,
    target: Target,
    nominal: HybridModule,
    lens_model: str | None,
    tell: Progress,
) -> LightAndPlace:
    """Measure, and where the target is a screen that sweeps, measure again with the sweep counted in.

    Raises DegenerateDataError, ModuleMismatchError and BoardNotFoundError, each with one sentence.
    """
    if has_several_steps(target) and (target.is_counterphase or target.scanout_s > 0):
        raise DegenerateDataError(
            "steps of light of several sizes (levels) are read from a shuttered target that flips at once; this one is "
            f"{'counterphase' if target.is_counterphase else 'swept'}; state levels as null where it plays one step"
        )
    if target.scanout_s <= 0:
        if target.is_counterphase:
            require_no_sweep([view_harmonic(recording, v, rough, nominal.event_grid.shape) for v in views], rough)
        return measure_at_once(recording, views, rough, target, nominal, lens_model, tell)
    first = measure_by_ramps(
        recording, views, rough, target, nominal, lens_model, lambda stage, part: tell(stage, 0.5 * part)
    )
    return measure_swept(
        first, recording, views, target, nominal, lens_model, lambda stage, part: tell(stage, 0.5 + 0.5 * part)
    )

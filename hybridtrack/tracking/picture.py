"""Log brightness at any instant, from the frames next to it and the events between.

With level E(t) from the events of a pixel, a frame of blurred light B gives log light at any instant T, before, within
or after its exposure [t0, t1], as long as no events are missing in between:

    log L(T) = log B - log(1/(t1 - t0) * integral of exp E(t) dt) + E(T)                     (Pan et al. 2019)

Each row has its own exposure. The frame part has the frame's resolution; levels are known at event pixels and are
interpolated between them, through the module's map. Offline, the frames before and after an instant are blended: the
two disagree by what went wrong from one to the other, and each is trusted less with every event and every moment that
lies between it and the instant. Live, only the last frame that is complete at the instant is carried forward.
"""

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from hybridtrack.errors import ModuleMismatchError, OptionError
from hybridtrack.module import ContrastMap, HybridModule
from hybridtrack.recording import Events, Recording
from hybridtrack.tracking.light_levels import FrameClock
from hybridtrack.tracking.picture_grid import EventGrid, Lateness, check_module, event_grid, lateness
from hybridtrack.tracking.picture_kernels import (
    exposure_levels,
    levels_at,
    light_times,
    same_sign_intervals,
    sort_by_pixel,
)
from hybridtrack.tracking.picture_plan import FrameStore, Plan, Planner

Array = np.ndarray
Progress = Callable[[str, float], None]

FOREVER = 1 << 62
# An edge that passes a pixel makes several events of one sign; before and after it light stands still. Twice the median
# time between two such events was the best ramp at 100 to 5000 px/s.
RAMP_INTERVALS = 2.0
SHORTEST_RAMP_NS, LONGEST_RAMP_NS = 100_000, 20_000_000
FEWEST_INTERVALS = 200


@dataclass(frozen=True)
class PictureOptions:
    """`live`: forward from the last complete frame only. `ramp_ns`: longest time from one event of a pixel to the next
    within which its light moves; None: from the events. `blend_hz`: how many events a second are as bad as the passing
    of time."""

    live: bool = False
    ramp_ns: int | None = None
    blend_hz: float = 200.0

    def __post_init__(self) -> None:
        if (self.ramp_ns is not None and self.ramp_ns <= 0) or not self.blend_hz > 0:
            raise OptionError(f"ramp_ns and blend_hz must be positive, got {self.ramp_ns} and {self.blend_hz}")


@dataclass(frozen=True, eq=False)
class Picture:
    """Log brightness at one instant.

    `log_light` float32 (H, W) on the frame's grid, natural log of light as a share of white, NaN everywhere where
    `source` is "none"; `saturated` bool (H, W), no frame in use saw these pixels below white, and what is there is a
    lower bound; `frames`, indices of the frames in use; `source` is "both", "forward", "backward" or "none", and
    `missing` says in a clause why it is less than it could be.
    """

    t_ns: int
    log_light: Array
    saturated: Array
    frames: tuple[int, ...]
    source: str
    missing: str = ""


class Sweep:
    """Levels of one stretch of events at instants that only go forward."""

    def __init__(self, events: Events, grid: EventGrid, late: Lateness, ramp_ns: int, live: bool) -> None:
        self._grid, self._late, self._ramp_ns, self._live = grid, late, ramp_ns, live
        columns = (events.t, events.x, events.y, events.on)
        self._sorted = sort_by_pixel(*columns, grid.theta_on, grid.theta_off)
        self._begin = self._sorted[0]
        # The part that follows light is known once a frame has been looked at.
        self._light_ns = self._times(np.zeros(grid.usable.shape), replace(late, at_white_ns=0.0))
        self._cursor = self._begin[:-1].copy()

    def _times(self, base: Array, late: Lateness) -> Array:
        return light_times(*self._sorted, base, late.constant_ns, late.at_white_ns, late.longest_ns)

    def learn_light(self, log_lights: list[Array], clocks: list[FrameClock]) -> None:
        """Set the lateness of every event by the light at its pixel and time, as frames (H, W) and levels have it."""
        if self._late.at_white_ns <= 0:
            return
        bases = [
            self._grid.at_event_pixels(log_light) - self.exposure_mean(clock)
            for log_light, clock in zip(log_lights, clocks, strict=True)
        ]
        self._light_ns = self._times(np.mean(bases, axis=0), self._late)

    def exposure_mean(self, clock: FrameClock) -> Array:
        """Log of the mean of exp(level) over each pixel's exposure; live, with no event after the frame's end."""
        until = clock.span_ns[1] if self._live else FOREVER
        start = clock.start_ns(self._grid.frame_uv[..., 1])
        times = (start, clock.exposure_ns, self._ramp_ns, until)
        return exposure_levels(*self._sorted, self._light_ns, *times)

    def _levels(self, cursor: Array, when_ns: Array, until_ns: int) -> tuple[Array, Array]:
        return levels_at(*self._sorted, self._light_ns, cursor, when_ns, self._ramp_ns, until_ns)

    def counts_at_middle(self, clock: FrameClock) -> Array:
        """How many events of each pixel came up to the middle of its row's exposure."""
        return self._levels(self._begin[:-1].copy(), clock.middle_ns(self._grid.frame_uv[..., 1]), FOREVER)[1]

    def at(self, t_ns: int) -> tuple[Array, Array]:
        """Level at an instant no earlier than the one before, and the events up to then, each (rows, columns)."""
        when = np.full(self._grid.usable.shape, t_ns, np.int64)
        return self._levels(self._cursor, when, t_ns if self._live else FOREVER)


class Group:
    """Pictures at instants that share their frames: each frame is carried there once for all of them."""

    def __init__(self, sweep: Sweep, grid: EventGrid, store: FrameStore, frames: tuple[int, ...]) -> None:
        self._sweep, self._grid, self._frames = sweep, grid, frames
        self._numbers = tuple(int(store.index[order]) for order in frames)
        self._lights = [store.light(order) for order in frames]
        self._clocks = [store.clocks[order] for order in frames]
        sweep.learn_light([light.log_light for light in self._lights], self._clocks)
        # What a frame says of log light at level zero.
        self._anchors = [
            light.log_light - grid.at_frame_pixels(sweep.exposure_mean(clock))
            for light, clock in zip(self._lights, self._clocks, strict=True)
        ]
        self._counts = [sweep.counts_at_middle(clock) for clock in self._clocks] if len(frames) > 1 else []
        self._saturated = np.all([light.trust == 0.0 for light in self._lights], axis=0)

    def picture(self, plan: Plan, blend_hz: float) -> Picture:
        """The picture of a plan no earlier than the one before."""
        level, count = self._sweep.at(plan.t_ns)
        log_light = self._grid.at_frame_pixels(level)
        if len(self._anchors) == 1:
            log_light += self._anchors[0]
        else:
            self._add_blended(log_light, plan.t_ns, count, blend_hz)
        source = self._source(plan.t_ns, self._clocks)
        return Picture(plan.t_ns, log_light, self._saturated, self._numbers, source, plan.missing)

    @staticmethod
    def _source(t_ns: int, clocks: list[FrameClock]) -> str:
        forward = any(clock.middle_ns(np.arange(clock.height)).min() <= t_ns for clock in clocks)
        backward = any(clock.middle_ns(np.arange(clock.height)).max() > t_ns for clock in clocks)
        both = forward and backward and len(clocks) > 1
        return "both" if both else "forward" if forward else "backward"

    def _add_blended(self, log_light: Array, t_ns: int, count: Array, blend_hz: float) -> None:
        """Add to each row of `log_light` (H, W) the two frames about it; `count` of each event pixel's events so far.

        Between two frames a share falls linearly in events plus `blend_hz` times seconds since the frame's middle.
        """
        rows = np.arange(log_light.shape[0])
        middles = [clock.middle_ns(rows) for clock in self._clocks]
        for k in range(len(middles) - 1):
            first, last = k == 0, k == len(middles) - 2
            here = (first | (middles[k] <= t_ns)) & (last | (middles[k + 1] > t_ns))
            if not here.any():
                continue
            chosen = slice(int(np.argmax(here)), len(here) - int(np.argmax(here[::-1])))
            later = self._later_share(k, chosen, t_ns, count, blend_hz)
            log_light[chosen] += (1 - later) * self._anchors[k][chosen] + later * self._anchors[k + 1][chosen]

    def _later_share(self, k: int, rows: slice, t_ns: int, count: Array, blend_hz: float) -> Array:
        """Share (rows, W) of the later of frames `k` and `k + 1`."""
        height = self._saturated.shape[0]
        since_s = [1e-9 * (t_ns - self._clocks[m].middle_ns(np.arange(height)[rows, None])) for m in (k, k + 1)]
        ages = [
            self._grid.between(np.abs(count - self._counts[m]))[rows]
            + np.float32(blend_hz) * np.abs(since).astype("f4")
            for m, since in zip((k, k + 1), since_s, strict=True)
        ]
        share = ages[0] / np.maximum(ages[0] + ages[1], np.float32(1e-9))
        blind = [self._lights[m].trust[rows] == 0.0 for m in (k, k + 1)]
        share[blind[0] & ~blind[1]] = 1.0
        share[blind[1] & ~blind[0]] = 0.0
        # Outside the two frames, which happens where a third one can't be used, the nearer one has it all.
        share[since_s[0][:, 0] < 0] = 0.0
        share[since_s[1][:, 0] >= 0] = 1.0
        return share


def _silent(stage: str, fraction: float) -> None:
    """Show no progress."""


def _groups(plans: list[Plan]) -> Iterator[list[Plan]]:
    """Consecutive plans with the same frames."""
    begin = 0
    for k in range(1, len(plans) + 1):
        if k == len(plans) or plans[k].frames != plans[begin].frames:
            yield plans[begin:k]
            begin = k


def covered_ns(recording: Recording, module: HybridModule, live: bool = False) -> tuple[int, int]:
    """First and last instant (event clock) with a frame at hand: over all exposures; live, from the first one's end.

    Raises as `reconstruct` does.
    """
    check_module(module)
    spans = FrameStore(recording, module).span_ns
    return int(spans[:, 1].min() if live else spans[:, 0].min()), int(spans[:, 1].max())


def reconstruct(
    recording: Recording,
    module: HybridModule,
    instants_ns: Array,
    contrast_map: ContrastMap | None = None,
    options: PictureOptions | None = None,
    progress: Progress = _silent,
) -> Iterator[Picture]:
    """Yield the picture at each of `instants_ns` (K,) int64, event clock, sorted; memory holds two frame periods.

    An instant that no frame can be carried to, because events were lost on every way, yields a picture with source
    "none". Raises NotCalibratedError where the module lacks clocks, map or thresholds, ModuleMismatchError where
    recording and module disagree, DegenerateDataError without frames or events, OptionError for instants outside of
    the recording.
    """
    chosen = options or PictureOptions()
    grid = event_grid(module, contrast_map)
    store = FrameStore(recording, module)
    recording.require_events()
    planner = Planner(recording, store, chosen.live)
    plans = [planner.plan(t) for t in np.asarray(instants_ns, np.int64).tolist()]
    if any(after.t_ns < before.t_ns for before, after in pairwise(plans)):
        raise OptionError("instants must not run backwards")
    return _reconstruct(recording, module, grid, store, plans, chosen, progress)


def _ramp_ns(events: Events, grid: EventGrid) -> int:
    """How long the light of a pixel that fires takes from one event to the next."""
    intervals = same_sign_intervals(
        *sort_by_pixel(events.t, events.x, events.y, events.on, grid.theta_on, grid.theta_off)
    )
    if len(intervals) < FEWEST_INTERVALS:
        return LONGEST_RAMP_NS
    return int(np.clip(RAMP_INTERVALS * np.median(intervals), SHORTEST_RAMP_NS, LONGEST_RAMP_NS))


def _sweep(
    recording: Recording,
    module: HybridModule,
    grid: EventGrid,
    store: FrameStore,
    group: list[Plan],
    options: PictureOptions,
) -> Sweep:
    """Read the events that lead from the frames of a group to its instants, and those about them."""

    def read(t0_ns: int, t1_ns: int) -> Events:
        events = Events.joined(list(recording.event_blocks(t0_ns, t1_ns)))
        _check_places(recording, module, events)
        return events

    frames = list(group[0].frames)
    late = lateness(module)
    spans = store.span_ns[frames]
    low = min(int(spans[:, 0].min()), group[0].t_ns) + late.span_ns[0]
    high = max(int(spans[:, 1].max()), group[-1].t_ns) + late.span_ns[1]
    events = read(low, high)
    ramp = options.ramp_ns
    if ramp is None:
        ramp = _ramp_ns(events[events.t <= group[0].t_ns] if options.live else events, grid)
    parts = [read(low - ramp, low), events, *([] if options.live else [read(high, high + ramp)])]
    return Sweep(Events.joined(parts), grid, late, ramp, options.live)


def _reconstruct(
    recording: Recording,
    module: HybridModule,
    grid: EventGrid,
    store: FrameStore,
    plans: list[Plan],
    options: PictureOptions,
    progress: Progress,
) -> Iterator[Picture]:
    done, shape = 0, module.frame_mode.shape
    for group in _groups(plans):
        frames = group[0].frames
        if not frames:
            for plan in group:
                nothing = np.full(shape, np.nan, np.float32)
                yield Picture(plan.t_ns, nothing, np.zeros(shape, bool), (), "none", plan.missing)
                done += 1
            continue
        sweep = _sweep(recording, module, grid, store, group, options)
        made = Group(sweep, grid, store, frames)
        for plan in group:
            yield made.picture(plan, options.blend_hz)
            done += 1
            progress("pictures", done / len(plans))


def _check_places(recording: Recording, module: HybridModule, events: Events) -> None:
    height, width = module.event_grid.shape
    if len(events) and (int(events.x.max()) >= width or int(events.y.max()) >= height):
        raise ModuleMismatchError(
            f"{recording.path}: events must lie on the {width}x{height} grid of module '{module.name}', "
            f"got one at ({int(events.x.max())}, {int(events.y.max())})"
        )

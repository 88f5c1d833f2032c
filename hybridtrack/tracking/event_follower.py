"""Carry features on events: the buffer, the levels and the clock of updates."""

import numpy as np

from hybridtrack.errors import OptionError
from hybridtrack.recording import Events
from hybridtrack.tracking import track_state as ts
from hybridtrack.tracking.advance_kernels import advance
from hybridtrack.tracking.core import Core
from hybridtrack.tracking.event_buffer import EventBuffer
from hybridtrack.tracking.event_gaps import EventGaps
from hybridtrack.tracking.event_lag import EventLag
from hybridtrack.tracking.event_motion import CommonMotion, common_motion
from hybridtrack.tracking.light_levels import FrameClock, SharpPictures, new_levels
from hybridtrack.tracking.log_light import LogLight
from hybridtrack.tracking.tracks_file import Tracks

Array = np.ndarray
RAMP_PX = 3.0  # movement, frame px, within which light goes from one event to the next
SHORTEST_RAMP_NS, LONGEST_RAMP_NS = 300_000, 30_000_000
BEFORE_EXPOSURE_NS = 40_000_000  # events kept before an exposure, for the last one of each pixel


class EventFollower:
    """Takes events in order, and a frame's light to start from."""

    def __init__(self, core: Core) -> None:
        self._core = core
        self.levels = new_levels(core.module)
        self._pictures = SharpPictures(core.module, self.levels)
        self._buffer = EventBuffer(core.options.buffered_events)
        self._gaps = EventGaps(core.options.flash_log_step, self.levels.theta_on, self.levels.theta_off)
        self._latency_ns = int(core.module.known_timing().event_latency_ns or 0)
        self.lag = EventLag()
        self._measuring = False
        self._ramp_ns = LONGEST_RAMP_NS
        self._now_ns: int | None = None
        self._clock = np.zeros(2, np.int64)
        self._push = np.zeros(2)

    @property
    def theta(self) -> float:
        """Mean of the thresholds."""
        return float(0.5 * (self.levels.theta_on.mean() + self.levels.theta_off.mean()))

    def add_gap(self, t0_ns: int, t1_ns: int) -> None:
        """Note an interval without events to be trusted, on the stamp clock."""
        if t1_ns < t0_ns:
            raise OptionError(f"an interval of lost events must not end before it starts, got {t0_ns} to {t1_ns}")
        self._gaps.add(t0_ns - self._latency_ns, t1_ns - self._latency_ns)

    def push(self, events: Events) -> Tracks:
        """Take events and return the lines between frames."""
        kinds = (np.int64, np.uint16, np.uint16, np.uint8)
        columns = zip((events.t - self._latency_ns, events.x, events.y, events.on), kinds, strict=True)
        events = Events(*(np.ascontiguousarray(column, dtype=kind) for column, kind in columns))
        self._check(events)
        self._buffer.append(events)
        self._core.counters.events_dropped = self._buffer.dropped
        self._gaps.look_for_flashes(events)
        self._core.counters.flashes = self._gaps.flashes
        begin = int(events.t[0]) if self._now_ns is None else self._now_ns
        self._now_ns = int(events.t[-1])
        gap = self._gaps.first_in(begin, self._now_ns) if self._measuring else None
        if gap is None:
            return self._run(events, record=True)
        stop, by_flash = gap
        split = int(np.searchsorted(events.t, stop))
        before = self._run(events[:split], record=True) if split else Tracks.empty()
        self._stop_measuring(by_flash)
        return Tracks.joined([before, self._run(events[split:], record=True)]) if split < len(events) else before

    def _check(self, events: Events) -> None:
        if self._now_ns is not None and events.t[0] < self._now_ns:
            raise OptionError(f"events must be pushed in order, got {events.t[0]} ns after {self._now_ns} ns")
        rows, columns = self.levels.shape
        if events.x.max() >= columns or events.y.max() >= rows:
            raise OptionError(
                f"events must lie on the module's {columns}x{rows} grid, got ({events.x.max()}, {events.y.max()})"
            )

    def _stop_measuring(self, by_flash: bool) -> None:
        self._measuring = False
        active = self._core.active()
        self._core.slots.state[active] = ts.WEAK
        self._core.slots.reason[active] = ts.FLASH if by_flash else ts.EVENTS_LOST

    def _run(self, events: Events, record: bool) -> Tracks:
        """Run the kernel up to the last of these events."""
        core = self._core
        active = len(core.active())
        if not active or self._clock[1] == 0 or not len(events):
            return Tracks.empty()
        until = int(events.t[-1])
        room = active * (max(until - int(self._clock[0]), 0) // core.pace.output_ns + 2) if record else 0
        slot, when, rows = np.zeros(room, np.int64), np.zeros(room, np.int64), np.zeros((room, 5))
        pace = core.pace._replace(measuring=int(self._measuring), lag_ns=self.lag.ns)
        written, used = advance(
            events.t,
            events.x,
            events.y,
            events.on,
            until,
            self._ramp_ns,
            self.levels,
            core.table.records,
            core.features.work,
            pace,
            self._clock,
            self._push,
            slot,
            when,
            rows,
        )
        core.counters.events_used += used if record else 0
        lines = core.lines(slot[:written], when[:written], rows[:written, :2], rows[:written, 2:], ts.FROM_EVENTS)
        for gone in np.flatnonzero((core.table.active == 0) & (core.slots.id >= 0)):
            core.release(int(gone))
            core.counters.out_of_view += 1
        return lines

    def exposure_events(self, clock: FrameClock) -> Events:
        """Buffered events of a frame's exposure, and some before; older ones are dropped."""
        self._buffer.drop_before(clock.span_ns[0] - BEFORE_EXPOSURE_NS)
        return self._buffer.since(clock.span_ns[0] - BEFORE_EXPOSURE_NS)

    def bracket(self, clock: FrameClock, instant_ns: Array | None = None) -> tuple[Array, Array]:
        """The double integral's correction on the event grid and each pixel's last event, see `SharpPictures`."""
        bracket, last = self._pictures.correction(
            self.exposure_events(clock), clock, instant_ns, self._ramp_ns, self.lag.ns
        )
        if self._gaps.overlaps(*clock.span_ns):
            bracket = np.zeros_like(bracket)
        return bracket, last

    def common_motion(self, clock: FrameClock, at_ns: int) -> CommonMotion | None:
        """The picture's velocity about an instant near a frame's exposure, by its events."""
        cell_px = 1.0 / max(abs(self._core.pace.x_u), abs(self._core.pace.x_v))
        return common_motion(self.exposure_events(clock), self._pictures.frame_uv, at_ns + self.lag.ns, cell_px)

    def activity(self, clock: FrameClock, uv: Array, radius: float) -> tuple[Array, Array]:
        """Events in the rows' exposures within `radius` of frame positions (N, 2), and the event pixels there."""
        events = self._buffer.since(clock.span_ns[0])
        start = clock.start_ns(self.levels.v[events.y, events.x])
        events = events[(events.t >= start) & (events.t < start + clock.exposure_ns)]
        grid = self._pictures.frame_uv
        height, width = self._core.mode.shape
        sums = []
        for points in (grid[events.y, events.x], grid[self.levels.usable > 0]):
            at = np.clip(np.rint(points).astype(np.int64), 0, [width - 1, height - 1])
            image = np.bincount(at[:, 1] * width + at[:, 0], minlength=height * width).reshape(height, width)
            sums.append(np.pad(image, ((1, 0), (1, 0))).cumsum(axis=0).cumsum(axis=1))
        low = np.clip(np.rint(uv - radius).astype(int), 0, [width, height])
        high = np.clip(np.rint(uv + radius).astype(int) + 1, 0, [width, height])
        (u0, v0), (u1, v1) = low.T, high.T
        counts, pixels = (s[v1, u1] - s[v0, u1] - s[v1, u0] + s[v0, u0] for s in sums)
        return counts, pixels

    def sharp_at(self, light: LogLight, clock: FrameClock, share: float | None = None, t_ns: int = 0) -> Array:
        """Sharp log light (H, W) when `share` of each row's exposure has passed, or all rows at `t_ns`."""
        instants = self._pictures.instants(clock, share or 0.0)
        if share is None:
            instants[:] = t_ns
        return self.sharpen(light, self.bracket(clock, instants)[0])

    def sharpen(self, light: LogLight, bracket: Array) -> Array:
        """Sharp log light (H, W) of a frame."""
        return self._pictures.at_frame_pixels(light, bracket)

    def pace_ramps(self) -> None:
        """Set how long light takes from one event to the next, by how fast the features are."""
        ramp_ns = RAMP_PX / max(self._core.typical_speed(), 1.0) * 1e9
        self._ramp_ns = int(np.clip(ramp_ns, SHORTEST_RAMP_NS, LONGEST_RAMP_NS))

    def restart(self, light: LogLight, clock: FrameClock, bracket: Array, last_ns: Array) -> None:
        """Set the levels by a frame, and run the events since its first row's middle again over the features as they
        are then."""
        middles = clock.middle_ns(np.array([0.0, clock.height - 1.0]))
        self._pictures.set_levels(light, clock, bracket, last_ns, self.lag.ns)
        begin = int(middles.min())
        now = begin if self._now_ns is None else max(self._now_ns, begin)
        self._measuring = not self._gaps.overlaps(begin, now)
        self._gaps.forget_before(begin)
        base = self._core.pace.base_ns
        self._clock[:] = begin // base * base, base
        events = self._buffer.since(begin)
        if len(events):
            self._run(events, record=False)
        self._clock[0] = max(int(self._clock[0]), begin)

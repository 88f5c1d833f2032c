"""Which frames a picture is made of: those about its instant that events lead to without a gap."""

from dataclasses import dataclass

import numpy as np

from hybridtrack.errors import ModuleMismatchError, OptionError
from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording
from hybridtrack.tracking.light_levels import frame_clock
from hybridtrack.tracking.log_light import LogLight, LogLightReader

Array = np.ndarray

KEPT_FRAMES = 4  # one more than the rows of a frame can need at one instant


class FrameStore:
    """Frames of a recording in order of time with their clocks; those last read are kept."""

    def __init__(self, recording: Recording, module: HybridModule) -> None:
        recording.require_frames()
        mode, table = module.frame_mode, recording.frames
        if table.shape[:2] != mode.shape:
            raise ModuleMismatchError(
                f"{recording.path}: frames must be {mode.width}x{mode.height} px as module '{module.name}' says, "
                f"got {table.shape[1]}x{table.shape[0]}"
            )
        self.index = np.argsort(table.t_start_ns, kind="stable")
        stamps = zip(table.t_start_ns[self.index].tolist(), table.exposure_ns[self.index].tolist(), strict=True)
        self.clocks = [frame_clock(module, start, exposure) for start, exposure in stamps]
        self.span_ns = np.array([clock.span_ns for clock in self.clocks])
        halves = np.array([clock.exposure_ns // 2 for clock in self.clocks])
        self.first_middle_ns, self.last_middle_ns = self.span_ns[:, 0] + halves, self.span_ns[:, 1] - halves
        self._recording, self._reader = recording, LogLightReader(module)
        self._held: dict[int, LogLight] = {}

    def light(self, order: int) -> LogLight:
        """Log light of the frame that is number `order` in time."""
        if order not in self._held:
            self._held[order] = self._reader.read(self._recording.frame_image(int(self.index[order])))
            for old in list(self._held)[:-KEPT_FRAMES]:
                del self._held[old]
        return self._held[order]

    def row_frames(self, t_ns: int) -> Array:
        """For each frame row (H,), the last frame whose middle of exposure there is at or before `t_ns`, -1 if none."""
        lowest = int(np.searchsorted(self.last_middle_ns, t_ns, "right")) - 1
        highest = int(np.searchsorted(self.first_middle_ns, t_ns, "right")) - 1
        rows = np.arange(self.clocks[0].height)
        found = np.full(len(rows), lowest)
        for order in range(lowest + 1, highest + 1):
            found[self.clocks[order].middle_ns(rows) <= t_ns] = order
        return found


@dataclass(frozen=True)
class Plan:
    """One instant: `frames` in use (numbers in time), and a clause on what is missing."""

    t_ns: int
    frames: tuple[int, ...]
    missing: str = ""


class Planner:
    """Which frames can be carried to an instant: those with no lost events in between."""

    def __init__(self, recording: Recording, store: FrameStore, live: bool) -> None:
        self._store, self._live, self._lost = store, live, recording.events_lost
        first, last = recording.event_span_ns
        self.span_ns = (
            (int(store.span_ns[:, 1].min()) if live else min(first, int(store.span_ns[0, 0]))),
            max(last, int(store.span_ns[-1, 1])),
        )
        self._event_span_ns = (first, last)

    def check(self, t_ns: int) -> None:
        """Raise OptionError where the instant lies outside of what the recording covers."""
        if not self.span_ns[0] <= t_ns <= self.span_ns[1]:
            raise OptionError(
                f"an instant between {1e-9 * self.span_ns[0]:.6f} and {1e-9 * self.span_ns[1]:.6f} s (event clock) "
                f"is required{' for live pictures' if self._live else ''}, got {1e-9 * t_ns:.6f} s"
            )

    def _loss(self, t_ns: int, order: int) -> str:
        """Which lost events stand between a frame and an instant, "" where none."""
        start, end = self._store.span_ns[order]
        low, high = min(t_ns, start), max(t_ns, end)
        for t0, t1 in self._lost:
            if t0 <= high and t1 >= low:
                return f"events lost from {1e-9 * t0:.6f} to {1e-9 * t1:.6f} s"
        return ""

    def plan(self, t_ns: int) -> Plan:
        """Choose the frames of one instant."""
        self.check(t_ns)
        if self._live:
            wanted = [int(np.searchsorted(np.maximum.accumulate(self._store.span_ns[:, 1]), t_ns, "right")) - 1]
        else:
            rows = self._store.row_frames(t_ns)
            wanted = list(range(int(rows.min()), int(rows.max()) + 2))
        inside = [order for order in wanted if 0 <= order < len(self._store.clocks)]
        losses = [self._loss(t_ns, order) for order in inside]
        kept = tuple(order for order, loss in zip(inside, losses, strict=True) if not loss)
        return Plan(t_ns, kept, next((loss for loss in losses if loss), ""))

"""Row-scanned readout: raw events in, stamped events out, later the more there are.

The scan goes round the rows and skips the empty ones. A row costs `row_ns`, each of its events `event_ns`, and all of
a row's events bear the time at which the row was read: 41 000 simultaneous events at 20 ns leave in 0.8 ms. A pixel
whose event waits cannot send a second one. What becomes of that is approximate, for the pixel's own physics is not told
of the wait: by `while_waiting` its next events are held back in order ("wait", fitting pixels that forget nothing) or
lost ("lose", fitting pixels that reset on being read). Linear in events.
"""

from dataclasses import dataclass
from typing import Literal

import numpy as np

from hybridtrack.errors import OptionError
from hybridtrack.recording import Events
from hybridtrack.synthesis.kernels import LOST, READ, WAITS, read_rows

Array = np.ndarray


@dataclass(frozen=True)
class ReadoutPhysics:
    """`event_ns` an event, `row_ns` a non-empty row; events older than `wait_max_ns` when read are dropped.

    Stamps are rounded down to `resolution_ns`.
    """

    event_ns: float = 20.0
    row_ns: float = 100.0
    wait_max_ns: float = float("inf")
    resolution_ns: int = 1
    while_waiting: Literal["wait", "lose"] = "wait"

    def __post_init__(self) -> None:
        """Refuse what no readout has."""
        if self.event_ns < 0 or self.row_ns < 0:
            raise OptionError(f"event_ns and row_ns must not be negative, got {self.event_ns} and {self.row_ns}")
        if self.wait_max_ns <= 0 or self.resolution_ns < 1:
            got = f"{self.wait_max_ns} and {self.resolution_ns}"
            raise OptionError(f"wait_max_ns must be positive and resolution_ns at least 1, got {got}")
        if self.while_waiting not in ("wait", "lose"):
            raise OptionError(f"while_waiting must be 'wait' or 'lose', got {self.while_waiting!r}")


class RowScanReadout:
    """The readout of one event grid of `shape` (rows, columns); keeps what waits from call to call.

    `lost` counts events that were dropped, `lost_ns` lists intervals (t0, t1) in which some were dropped for having
    waited longer than `wait_max_ns`.
    """

    def __init__(self, shape: tuple[int, int], physics: ReadoutPhysics | None = None) -> None:
        self.shape, self.physics = shape, physics or ReadoutPhysics()
        self.lost = 0
        self.lost_ns: list[tuple[int, int]] = []
        self._clock, self._pointer = -np.inf, 0
        self._waiting = Events.empty()

    def read(self, raw: Events, until_ns: float | None = None) -> Events:
        """Read raw events, in order of time, as far as the scan gets by `until_ns` (default: the last raw event).

        Later raw events and unread ones are kept for the next call. Returns events in order of their stamps.
        """
        events = self._merged(raw)
        if len(events) == 0:
            return events
        until = float(events.t[-1]) if until_ns is None else float(until_ns)
        verdict = np.zeros(len(events), np.uint8)
        out_t, out_index = np.empty(len(events)), np.empty(len(events), np.int64)
        physics = self.physics
        size, self._clock, self._pointer = read_rows(
            events.t,
            events.x.astype(np.int64),
            events.y.astype(np.int64),
            until,
            self._clock,
            self._pointer,
            self.shape,
            physics.event_ns,
            physics.row_ns,
            physics.while_waiting == "wait",
            physics.wait_max_ns,
            verdict,
            out_t,
            out_index,
        )
        self._note_losses(events.t[verdict == LOST])
        self._waiting = events[verdict == WAITS]
        read = events[out_index[:size]]
        assert len(read) == np.count_nonzero(verdict == READ)
        stamps = out_t[:size].astype(np.int64)
        return Events(stamps - stamps % physics.resolution_ns, read.x, read.y, read.on)

    def flush(self) -> Events:
        """Read all that still waits."""
        return self.read(Events.empty(), np.inf)

    def _merged(self, raw: Events) -> Events:
        if len(self._waiting) == 0:
            return raw
        joined = Events.joined([self._waiting, raw])
        return joined[np.argsort(joined.t, kind="stable")]

    def _note_losses(self, t: Array) -> None:
        self.lost += len(t)
        if len(t) == 0 or not np.isfinite(self.physics.wait_max_ns):
            return
        first, last = int(t[0]), int(t[-1]) + 1
        if self.lost_ns and first <= self.lost_ns[-1][1] + 1_000_000:
            self.lost_ns[-1] = (self.lost_ns[-1][0], max(last, self.lost_ns[-1][1]))
        else:
            self.lost_ns.append((first, last))

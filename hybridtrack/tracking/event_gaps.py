"""Intervals in which events can't be trusted: those the module says it lost, and array-wide flashes."""

import numpy as np

from hybridtrack.recording import Events

Array = np.ndarray
BIN_NS = 1_000_000


class EventGaps:
    """Keeps the intervals; finds flashes as a mean change of log light over the array of more than `log_step` in 1 ms.

    Movement makes as many events of one sign as of the other and lamps at mains rates change by less, so that the
    mean over all pixels tells a flash apart.
    """

    def __init__(self, log_step: float, theta_on: Array, theta_off: Array) -> None:
        self._log_step = log_step
        self._on, self._off = float(np.mean(theta_on)), float(np.mean(theta_off))
        self._pixels = theta_on.size
        self._bin, self._sum = 0, 0.0
        self.intervals: list[tuple[int, int, bool]] = []  # begin, end, whether a flash
        self.flashes = 0

    def add(self, t0_ns: int, t1_ns: int, flash: bool = False) -> None:
        """Note an interval."""
        self.intervals.append((int(t0_ns), int(t1_ns), flash))

    def overlaps(self, t0_ns: int, t1_ns: int) -> bool:
        """Whether any interval touches [t0, t1]."""
        return any(begin <= t1_ns and end >= t0_ns for begin, end, _ in self.intervals)

    def first_in(self, t0_ns: int, t1_ns: int) -> tuple[int, bool] | None:
        """Where in [t0, t1] the first interval that touches it begins, and whether it is a flash; or None."""
        touching = [
            (max(begin, t0_ns), flash) for begin, end, flash in self.intervals if begin <= t1_ns and end >= t0_ns
        ]
        return min(touching) if touching else None

    def forget_before(self, t_ns: int) -> None:
        """Drop intervals that end before `t_ns`."""
        self.intervals = [interval for interval in self.intervals if interval[1] >= t_ns]

    def look_for_flashes(self, events: Events) -> None:
        """Add an interval for each flash in these events, which follow those looked at before."""
        bins = events.t // BIN_NS
        steps = np.where(events.on > 0, self._on, -self._off)
        first, last = int(bins[0]), int(bins[-1])
        if first != self._bin:
            self._bin, self._sum = first, 0.0
        starts = np.flatnonzero(np.diff(bins, prepend=first - 1))
        sums = np.add.reduceat(steps, starts)
        sums[0] += self._sum
        for index, total in zip(bins[starts].tolist(), sums.tolist(), strict=True):
            if abs(total) / self._pixels > self._log_step:
                begin, end = index * BIN_NS, (index + 1) * BIN_NS
                if self.intervals and self.intervals[-1][2] and self.intervals[-1][1] >= begin:
                    self.intervals[-1] = (self.intervals[-1][0], end, True)
                else:
                    self.add(begin, end, flash=True)
                    self.flashes += 1
        self._bin, self._sum = last, float(sums[-1])

"""The last events, kept for the frame whose exposure they fall into."""

import numpy as np

from hybridtrack.recording import Events

Array = np.ndarray


class EventBuffer:
    """Events in order, in one growing array; old ones are dropped by time, and by number beyond `limit` (counted)."""

    def __init__(self, limit: int) -> None:
        self._limit = limit
        self._columns = [np.empty(1 << 16, kind) for kind in (np.int64, np.uint16, np.uint16, np.uint8)]
        self._start = self._stop = 0
        self.dropped = 0

    def __len__(self) -> int:
        return self._stop - self._start

    def append(self, events: Events) -> None:
        """Add events that are no older than those held."""
        extra = len(events) - self._limit
        if extra > 0:
            self.dropped += extra + len(self)
            events, self._start = events[extra:], self._stop
        elif len(self) + len(events) > self._limit:
            drop = len(self) + len(events) - self._limit
            self.dropped += drop
            self._start += drop
        if self._stop + len(events) > len(self._columns[0]):
            self._make_room(len(self) + len(events))
        for column, values in zip(self._columns, (events.t, events.x, events.y, events.on), strict=True):
            column[self._stop : self._stop + len(events)] = values
        self._stop += len(events)

    def _make_room(self, needed: int) -> None:
        size = len(self._columns[0])
        held = slice(self._start, self._stop)
        new_size = size if needed <= size // 2 else 2 * needed
        self._columns = [_moved(column[held], new_size) for column in self._columns]
        self._start, self._stop = 0, held.stop - held.start

    def drop_before(self, t_ns: int) -> None:
        """Forget events stamped before `t_ns`."""
        self._start += int(np.searchsorted(self._columns[0][self._start : self._stop], t_ns))

    def since(self, t_ns: int) -> Events:
        """Events stamped at or after `t_ns`: views, valid until the next call of `append`."""
        begin = self._start + int(np.searchsorted(self._columns[0][self._start : self._stop], t_ns))
        return Events(*(column[begin : self._stop] for column in self._columns))


def _moved(values: Array, size: int) -> Array:
    moved = np.empty(size, values.dtype)
    moved[: len(values)] = values
    return moved

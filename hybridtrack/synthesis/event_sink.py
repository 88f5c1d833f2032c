"""Raw events through the readout into a recording, in large blocks."""

import numpy as np

from hybridtrack.recording import Events, RecordingWriter
from hybridtrack.synthesis.readout import RowScanReadout

BLOCK = 1 << 20


class EventSink:
    """Collects raw events, reads them out and appends them to `writer`; `count` events went through."""

    def __init__(self, writer: RecordingWriter, readout: RowScanReadout) -> None:
        self.writer, self.readout, self.count = writer, readout, 0
        self._parts: list[Events] = []
        self._held = 0

    def take(self, raw: Events, until_ns: float) -> None:
        """Take raw events up to `until_ns`."""
        self._keep(self.readout.read(raw, until_ns))

    def pause(self) -> None:
        """Read out all that waits, as before a gap in the recording."""
        self._keep(self.readout.flush())

    def finish(self) -> None:
        """Write what is left, and the intervals in which events were lost."""
        self.pause()
        self._write()
        if self.readout.lost_ns:
            starts, ends = zip(*self.readout.lost_ns, strict=True)
            self.writer.set_group("events_lost", t0=np.array(starts, np.int64), t1=np.array(ends, np.int64))

    def _keep(self, events: Events) -> None:
        self._parts.append(events)
        self._held += len(events)
        self.count += len(events)
        if self._held >= BLOCK:
            self._write()

    def _write(self) -> None:
        events = Events.joined(self._parts)
        self.writer.append_events(events.t, events.x, events.y, events.on)
        self._parts, self._held = [], 0

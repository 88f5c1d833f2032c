"""What a recording holds, as plain arrays. Times are int64 nanoseconds on the event clock unless said."""

from dataclasses import dataclass

import numpy as np

Array = np.ndarray


@dataclass(frozen=True)
class Events:
    """Events in stamp order: `t` int64 ns, `x`, `y` uint16 grid column and row, `on` uint8 (1 brighter, 0 darker)."""

    t: Array
    x: Array
    y: Array
    on: Array

    def __len__(self) -> int:
        return len(self.t)

    def __getitem__(self, selection: slice | Array) -> "Events":
        """Select events by slice, mask or index array."""
        return Events(self.t[selection], self.x[selection], self.y[selection], self.on[selection])

    @staticmethod
    def empty() -> "Events":
        """No events."""
        return Events(np.empty(0, np.int64), np.empty(0, np.uint16), np.empty(0, np.uint16), np.empty(0, np.uint8))

    @staticmethod
    def joined(parts: "list[Events]") -> "Events":
        """Concatenate in the order given."""
        if not parts:
            return Events.empty()
        return Events(*(np.concatenate([getattr(p, name) for p in parts]) for name in ("t", "x", "y", "on")))


@dataclass(frozen=True)
class FrameTable:
    """Everything about the frames but their pictures.

    `t_start_ns` int64 (N,) on the frame clock, start of exposure of the first row read; `exposure_ns` int64 (N,);
    `number` uint64 (N,) and `gain` float64 (N,) where recorded; `shape` of one picture and its dtype.
    """

    t_start_ns: Array
    exposure_ns: Array
    number: Array | None
    gain: Array | None
    shape: tuple[int, ...]
    dtype: np.dtype

    def __len__(self) -> int:
        return len(self.t_start_ns)


@dataclass(frozen=True)
class Imu:
    """Inertial samples: `t` int64 ns (N,), `gyro` rad/s (N, 3), `accel` m/s^2 specific force (N, 3), camera axes."""

    t: Array
    gyro: Array
    accel: Array


@dataclass(frozen=True)
class Triggers:
    """Hardware edges: `t` int64 ns, `channel` uint8, `edge` int8 (+1 rising, -1 falling), all (N,)."""

    t: Array
    channel: Array
    edge: Array


@dataclass(frozen=True)
class Series:
    """One side channel: `t` int64 ns (N,), `value` float64 (N,)."""

    t: Array
    value: Array

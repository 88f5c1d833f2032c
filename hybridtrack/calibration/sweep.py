"""A screen does not flip at once: its picture is swept over about one refresh, and each place flips a little later.

Once the board's pose in a view is known, so is the delay of every pixel, up to the time that the sweep takes. Events
are then counted as if the whole board had flipped with its first line, by stamps less their pixel's delay; frames by
shares that know each pixel's delay, and whose clocks tell how long the sweep really takes.
"""

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.board_view import board_from_colour_px
from hybridtrack.calibration.geometry_fit import Geometry
from hybridtrack.calibration.kernels import fold_phase, time_order
from hybridtrack.calibration.views import View
from hybridtrack.module import HybridModule, Target
from hybridtrack.recording import Events, Recording

Array = np.ndarray

SORT_BIN_NS = 1000


def gone_by(target: Target, xy_m: Array) -> Array:
    """The part of its way (...,) that the sweep has gone when it passes board positions (..., 2); 0 to 1 on the board,
    held at its ends beyond it, and 0 where positions are NaN."""
    width, height = target.columns * target.square_xy_m[0], target.rows * target.square_xy_m[1]
    along = {"down": xy_m[..., 1] / height, "right": xy_m[..., 0] / width}
    along |= {"up": 1.0 - xy_m[..., 1] / height, "left": 1.0 - xy_m[..., 0] / width}
    return np.clip(np.nan_to_num(along[target.scan_direction]), 0.0, 1.0)


@dataclass(frozen=True)
class ViewSweep:
    """The sweep's way at every event pixel `events` (rows, columns) and frame pixel `frames` (H, W) of one view."""

    events: Array
    frames: Array

    def turned(self) -> "ViewSweep":
        """That of the board half a turn round."""
        return ViewSweep(1.0 - self.events, 1.0 - self.frames)


def sweeps_of_views(geometry: Geometry, target: Target, module: HybridModule) -> dict[int, ViewSweep]:
    """By number of view, for the views whose pose is known. `module` has the event map that was found."""
    positions, pixels = module.event_pixel_positions(), module.frame_pixel_centres()
    lens, found = geometry.lens_fit.lens, {}
    for number, pose in zip(geometry.lens_fit.views.tolist(), geometry.lens_fit.camera_from_board, strict=True):
        found[number] = ViewSweep(
            *(gone_by(target, board_from_colour_px(lens, pose, place)) for place in (positions, pixels))
        )
    return found


def shortened(views: list[View], scanout_ns: float, period_ns: float) -> list[View]:
    """Views that end as many whole cycles after their start as leave room for the sweep."""
    return [
        replace(v, t1_ns=v.t0_ns + round(np.floor((v.t1_ns - v.t0_ns - scanout_ns) / period_ns) * period_ns))
        for v in views
    ]


class SweptRecording(Recording):
    """A recording whose event stamps within the views are as if the board had flipped as a whole.

    Only blocks of events within one view may be asked for; all else is the recording's own.
    """

    def __init__(self, recording: Recording, views: list[View], delays_ns: list[Array]) -> None:
        """`delays_ns` (rows, columns) of each view's event pixels."""
        self.__dict__.update(recording.__dict__)
        self._views, self._delays = views, [np.rint(delay).astype(np.int64) for delay in delays_ns]

    def event_blocks(
        self, t0_ns: int | None = None, t1_ns: int | None = None, size: int = 1 << 20, check_order: bool = True
    ) -> Iterator[Events]:
        """The events of a time range within a view, in one block, in order of their new stamps if `check_order`."""
        owner = [k for k, view in enumerate(self._views) if view.t0_ns <= (t0_ns or 0) and (t1_ns or 0) <= view.t1_ns]
        if t0_ns is None or t1_ns is None or not owner:
            yield from super().event_blocks(t0_ns, t1_ns, size, check_order)
            return
        delay = self._delays[owner[0]]
        events = Events.joined(list(super().event_blocks(t0_ns, t1_ns + int(delay.max()), size, check_order)))
        t = events.t - delay[events.y, events.x]
        inside = np.flatnonzero((t >= t0_ns) & (t < t1_ns))
        order = inside[time_order(t[inside], SORT_BIN_NS)] if check_order else inside
        yield Events(t[order], events.x[order], events.y[order], events.on[order])


def flip_phase(
    recording: Recording, views: list[View], sets: list[Array], blink: Blink, bins: int = 128
) -> tuple[float, float]:
    """Phase (cycles) of `blink` at which set A turns bright, and how sharply events gather there, 0 to 1.

    `sets` (rows, columns) of each view's event pixels: 1 in set A, -1 in a counterphase set B, else 0. First harmonic
    of ON less OFF events of A, those of B taken the other way round.
    """
    signed, total = np.zeros(bins), 0
    for view, kind in zip(views, sets, strict=True):
        for events in recording.event_blocks(view.t0_ns, view.t1_ns, check_order=False):
            for sign in (1, -1):
                phase = np.zeros((2, bins), np.int64)
                columns = events.t, events.x, events.y, events.on
                fold_phase(*columns, blink.epoch_ns, blink.epoch_phase, blink.hz, kind == sign, phase)
                signed += sign * (phase[0] - phase[1])
                total += int(phase.sum())
    harmonic = np.sum(signed * np.exp(-2j * np.pi * (np.arange(bins) + 0.5) / bins))
    pulse = 1.0 - np.exp(-2j * np.pi * blink.duty)
    return float(-np.angle(harmonic / pulse) / (2 * np.pi)), float(np.abs(harmonic) / max(total, 1))


def sets_at_events(geometry: Geometry, target: Target, module: HybridModule) -> dict[int, Array]:
    """Which set each event pixel (rows, columns) looks at, by number of view; 0 off the board and on dark squares."""
    positions, squares, found = module.event_pixel_positions(), target.square_sets(), {}
    size = np.array(target.square_xy_m)
    for number, pose in zip(geometry.lens_fit.views.tolist(), geometry.lens_fit.camera_from_board, strict=True):
        place = np.nan_to_num(board_from_colour_px(geometry.lens_fit.lens, pose, positions) / size, nan=-1.0)
        column, row = np.floor(place[..., 0]).astype(int), np.floor(place[..., 1]).astype(int)
        inside = (column >= 0) & (column < target.columns) & (row >= 0) & (row < target.rows)
        kinds = squares[np.clip(row, 0, target.rows - 1), np.clip(column, 0, target.columns - 1)]
        found[number] = np.where(inside, kinds, 0)
    return found

"""The tracker's memory as the kernels take it: one record a feature, one record an event pixel.

Records keep what is used together close in memory, and are one argument to a kernel, which makes it quick to compile.
"""

from typing import NamedTuple

import numpy as np

Array = np.ndarray
STATE_SIZE = 5  # position u, v (frame px), velocity u, v (frame px/s), log gain of the patch
HISTORY = 160
FORGOTTEN = np.iinfo(np.int64).min
NEVER = np.iinfo(np.int64).min // 4

PIXEL = np.dtype(
    [
        ("level", "f8"),  # log light at the anchor
        ("anchor_ns", "i8"),  # when its light had that level: before the last event, or the last frame's instant
        ("last_ns", "i8"),  # stamp of the last event
        ("reference_ns", "i8"),  # the last frame's instant; events up to it are part of the level
        ("u", "f8"),  # where the pixel looks, frame px
        ("v", "f8"),
        ("theta_on", "f4"),
        ("theta_off", "f4"),
        ("fresh", "u1"),  # 1: no event since the last frame's instant
        ("usable", "u1"),  # 0: hot, dead, outside the frame or saturated in it
    ],
    align=True,
)

FEATURE = np.dtype(
    [
        ("active", "u1"),
        ("from_frame", "u1"),  # 1: the work template is the last frame itself
        ("t_ns", "i8"),  # time of the state
        ("state", "f8", (STATE_SIZE,)),
        ("cov", "f8", (STATE_SIZE, STATE_SIZE)),
        ("warp", "f8", (2, 2)),  # image offset from offset in the own template
        ("own_offset", "f8", (2,)),  # the feature in its own template, from the middle, template px
        ("work_warp", "f8", (2, 2)),
        ("work_offset", "f8", (2,)),
        ("level_sigma", "f8"),  # misfit of levels to the template
        ("recent_speed", "f8"),  # frame px/s, decaying maximum
        ("static_cov", "f8", (2, 2)),  # position error from level errors that stay, frame px^2
        ("anchor_uv", "f8", (2,)),  # position at the last frame
        ("updates", "i8"),  # pixels that fired for it since the last frame
        ("history_next", "i8"),  # slot that is written next
        ("history_t", "i8", (HISTORY,)),
        ("history", "f8", (HISTORY, STATE_SIZE)),
        ("history_cov", "f8", (HISTORY, STATE_SIZE, STATE_SIZE)),
        # Room for the filter's normal equations.
        ("h", "f8", (STATE_SIZE, STATE_SIZE)),
        ("g", "f8", (STATE_SIZE,)),
        ("prior", "f8", (STATE_SIZE,)),
        ("information", "f8", (STATE_SIZE, STATE_SIZE)),
        ("factor", "f8", (STATE_SIZE, STATE_SIZE)),
        ("step", "f8", (STATE_SIZE,)),
    ],
    align=True,
)


class Pace(NamedTuple):
    """Constants of the event filter; lengths in frame px."""

    width: int  # of the picture
    height: int
    radius: float  # half width of the patch, template px
    x_u: float  # event-grid position from frame px, to find the pixels of a patch: x = x_u u + x_v v + x_0
    x_v: float
    x_0: float
    y_u: float
    y_v: float
    y_0: float
    reach_x: int  # half width of that search, event px
    reach_y: int
    acceleration_share: float  # 1/s, expected acceleration over recent speed
    acceleration_floor: float  # px/s^2
    acceleration_time_s: float
    speed_memory_s: float
    gain_rate: float  # 1/sqrt(s), random walk of the log gain
    level_discount: float  # how much of an event's information is new: events of one pixel share errors
    slack: float  # thresholds by which a silent pixel may have moved, if it fired since the frame
    slack_fresh: float  # the same if it did not
    output_ns: int
    history_ns: int
    base_ns: int  # longest time between updates; divides output_ns
    shortest_ns: int
    step_px: float  # movement between updates that is aimed at
    surprise: float  # squared deviations of an update from its prediction at which the velocity is doubted
    lag_ns: int  # of an event behind its light, see `event_lag`
    measuring: int  # 0: coast only
    common_share: float  # deviation of a feature's velocity from the common field, of the speed
    common_floor: float  # and px/s
    common_time_s: float  # for how long such a difference lasts


class FeatureTable:
    """The records of all slots, and views of their fields made once: looking a field up anew is slow in Python."""

    def __init__(self, capacity: int) -> None:
        self.records = np.zeros(capacity, FEATURE).view(np.recarray)
        self.rows: list[np.record] = [self.records[k] for k in range(capacity)]
        plain = self.records.view(np.ndarray)
        self.active, self.from_frame = plain["active"], plain["from_frame"]
        self.t_ns, self.state, self.cov = plain["t_ns"], plain["state"], plain["cov"]
        self.warp, self.own_offset = plain["warp"], plain["own_offset"]
        self.work_warp, self.work_offset = plain["work_warp"], plain["work_offset"]
        self.level_sigma, self.recent_speed = plain["level_sigma"], plain["recent_speed"]
        self.static_cov, self.anchor_uv, self.updates = plain["static_cov"], plain["anchor_uv"], plain["updates"]
        self.history_t, self.history_next = plain["history_t"], plain["history_next"]
        self.history_t[:] = FORGOTTEN


class Features(NamedTuple):
    """Every feature slot: `table` of M records, `own` (M, S, S) float32 log light around each where it was best
    seen, `work` (M, S, S, 3) float32 what events are compared to, log light and its two slopes."""

    table: FeatureTable
    own: Array
    work: Array


def new_features(capacity: int, template_size: int) -> Features:
    """Empty slots."""
    size = (capacity, template_size, template_size)
    return Features(FeatureTable(capacity), np.zeros(size, np.float32), np.zeros((*size, 3), np.float32))

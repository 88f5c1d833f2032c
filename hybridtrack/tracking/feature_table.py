"""The tracker's memory in plain arrays, as the kernels take it: pixel levels and features, of fixed size."""

from typing import NamedTuple

import numpy as np

Array = np.ndarray
STATE_SIZE = 5  # position u, v (frame px), velocity u, v (frame px/s), log gain of the patch
HISTORY = 160


class Levels(NamedTuple):
    """What is known of log light at each event pixel; every array is (rows, columns) of the event grid."""

    level: Array  # float32, log light at the anchor
    anchor_ns: Array  # int64, when it had that level: the last event, or the last frame's instant
    last_ns: Array  # int64, stamp of the last event
    fresh: Array  # uint8, 1: no event since the last frame's instant
    reference_ns: Array  # int64, the last frame's instant; events up to it are part of the level
    theta_on: Array  # float32
    theta_off: Array  # float32
    usable: Array  # uint8, 0: hot or dead
    frame_uv: Array  # float64 (rows, columns, 2), where the pixel looks, frame px


class Features(NamedTuple):
    """Every feature slot; arrays have one row a slot."""

    active: Array  # uint8, 1: followed
    t_ns: Array  # int64, time of the state
    state: Array  # float64 (M, 5)
    cov: Array  # float64 (M, 5, 5)
    shape: Array  # float64 (M, 2, 2): image offset from template offset
    level_sigma: Array  # float64 (M,): misfit of levels to the template
    own: Array  # float32 (M, S, S): log light around the feature when it was best seen
    own_offset: Array  # float64 (M, 2): the feature in the own template, from its middle, template px
    work: Array  # float32 (M, S, S, 3): what events are compared to: log light and its two slopes
    work_offset: Array  # float64 (M, 2)
    work_shape: Array  # float64 (M, 2, 2)
    static_cov: Array  # float64 (M, 2, 2): position error from level errors that stay, frame px^2
    anchor_uv: Array  # float64 (M, 2): position at the last frame
    from_frame: Array  # uint8, 1: the work template is the last frame itself
    history_t: Array  # int64 (M, HISTORY)
    history: Array  # float64 (M, HISTORY, 5)
    history_cov: Array  # float64 (M, HISTORY, 5, 5)
    history_next: Array  # int64 (M,): slot that is written next
    updates: Array  # int64 (M,): event updates since the last frame


def new_features(capacity: int, template_size: int) -> Features:
    """Empty slots."""
    m, s = capacity, template_size
    return Features(
        active=np.zeros(m, np.uint8),
        t_ns=np.zeros(m, np.int64),
        state=np.zeros((m, STATE_SIZE)),
        cov=np.zeros((m, STATE_SIZE, STATE_SIZE)),
        shape=np.tile(np.eye(2), (m, 1, 1)),
        level_sigma=np.zeros(m),
        own=np.zeros((m, s, s), np.float32),
        own_offset=np.zeros((m, 2)),
        work=np.zeros((m, s, s, 3), np.float32),
        work_offset=np.zeros((m, 2)),
        work_shape=np.tile(np.eye(2), (m, 1, 1)),
        static_cov=np.zeros((m, 2, 2)),
        anchor_uv=np.zeros((m, 2)),
        from_frame=np.zeros(m, np.uint8),
        history_t=np.full((m, HISTORY), np.iinfo(np.int64).min, np.int64),
        history=np.zeros((m, HISTORY, STATE_SIZE)),
        history_cov=np.zeros((m, HISTORY, STATE_SIZE, STATE_SIZE)),
        history_next=np.zeros(m, np.int64),
        updates=np.zeros(m, np.int64),
    )

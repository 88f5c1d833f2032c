"""The common velocity of a picture from its events alone."""

import numpy as np
import pytest

from hybridtrack.recording import Events
from hybridtrack.tracking.event_motion import common_motion


def moving_dots(velocity, dots=300, span_ns=16_000_000, pitch=2.0, grid=(120, 160), seed=0, noise=0.2):
    """Events of bright dots that cross event pixels `pitch` frame px apart: ON at the front, OFF behind."""
    rng = np.random.default_rng(seed)
    start = rng.uniform([0, 0], [grid[1] * pitch, grid[0] * pitch], (dots, 2))
    times = np.sort(rng.integers(0, span_ns, 60 * dots))
    which = rng.integers(0, dots, len(times))
    on = rng.integers(0, 2, len(times))
    heading = np.asarray(velocity) / max(np.linalg.norm(velocity), 1e-9)
    side = np.where(on[:, None] == 1, 1.0, -1.0) * heading * 3.0
    place = start[which] + np.outer(times * 1e-9, velocity) + side + rng.normal(0, 0.4, (len(times), 2))
    cell = np.rint(place / pitch).astype(int)
    stray = rng.random(len(times)) < noise
    cell[stray] = rng.integers(0, [grid[1], grid[0]], (int(stray.sum()), 2))
    inside = np.all((cell >= 0) & (cell < [grid[1], grid[0]]), axis=1)
    columns, rows = np.meshgrid(np.arange(grid[1]), np.arange(grid[0]))
    frame_uv = pitch * np.stack([columns, rows], axis=-1).astype(float)
    events = Events(
        times[inside], cell[inside, 0].astype(np.uint16), cell[inside, 1].astype(np.uint16), on[inside].astype(np.uint8)
    )
    return events, frame_uv


@pytest.mark.parametrize("velocity", [(900.0, -400.0), (-3000.0, 1000.0), (200.0, 4200.0)])
def test_velocity_is_found_at_any_speed(velocity):
    """Within a tenth, or one step of the last search, with a fifth of the events at random places."""
    events, frame_uv = moving_dots(velocity)
    found = common_motion(events, frame_uv, 8_000_000, 2.0)
    assert found is not None
    assert np.linalg.norm(found.velocity - velocity) < max(0.1 * np.linalg.norm(velocity), found.step)


def test_noise_and_stillness_have_no_velocity():
    """Events at random gather about nothing; too few say nothing."""
    events, frame_uv = moving_dots((0.0, 0.0), noise=1.0)
    assert common_motion(events, frame_uv, 8_000_000, 2.0) is None
    assert common_motion(events[:50], frame_uv, 8_000_000, 2.0) is None

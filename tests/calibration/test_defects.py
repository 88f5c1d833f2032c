"""Hot pixels, and pixels that only answer the room's lamps."""

import numpy as np

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.defects import QuietCounts, hot_pixels, share_of_lamps
from hybridtrack.calibration.views import View
from hybridtrack.recording import Recording, RecordingWriter

SHAPE = (12, 16)
BLINK = Blink(73.0, 1e-3, 0, 0.0, 0.5, (100.02,))
VIEWS = [View(int(k * 0.6e9), int(k * 0.6e9 + 0.4e9), 0.0, False) for k in range(3)]


def lamp_and_noise(path):
    """Pixel (3, 4) answers a lamp of 100 Hz, ON and OFF in turn; pixel (8, 5) fires at random, 200 times a second."""
    rng = np.random.default_rng(0)
    cycles = np.arange(0, 1.7e9, 1e7)
    lamp_t = np.concatenate([cycles + 2e6, cycles + 7e6]) + rng.normal(0, 3e5, 2 * len(cycles))
    lamp_on = np.repeat([1, 0], len(cycles))
    hot_t, hot_on = rng.uniform(0, 1.7e9, 340), rng.integers(0, 2, 340)
    t = np.concatenate([lamp_t, hot_t]).astype(np.int64)
    x = np.concatenate([np.full(len(lamp_t), 3), np.full(340, 8)])
    y = np.concatenate([np.full(len(lamp_t), 4), np.full(340, 5)])
    on, order = np.concatenate([lamp_on, hot_on]), np.argsort(t)
    with RecordingWriter(path) as writer:
        writer.append_events(np.maximum(t[order], 0), x[order], y[order], on[order].astype(np.uint8))


def test_a_pixel_in_step_with_a_lamp_is_told_from_a_hot_one(tmp_path):
    """Although the lamp's rate is known to a fifth of a hertz only."""
    lamp_and_noise(tmp_path / "a.h5")
    with Recording.open(tmp_path / "a.h5") as recording:
        share = share_of_lamps(recording, VIEWS, BLINK, SHAPE)
        none = share_of_lamps(recording, VIEWS, Blink(73.0, 1e-3, 0, 0.0, 0.5), SHAPE)
    assert share[4, 3] > 0.9
    assert share[5, 8] < 0.3
    assert not none.any()


def test_hot_is_far_above_the_neighbourhood():
    """One pixel among quiet ones is hot; what fires as all round it do is not."""
    count, time_s = np.full(SHAPE, 2), np.full(SHAPE, 2.0)
    count[2, 2], count[9:, :] = 300, 200
    hot = hot_pixels(QuietCounts(count, time_s))
    assert hot[2, 2]
    assert not hot[9:].any()

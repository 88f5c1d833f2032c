"""Finding the blinking: frequency, phase, other lines, and refusals."""

from dataclasses import replace

import numpy as np
import pytest
from ideal_board import board_target, opened, tilted_poses

from hybridtrack.calibration.blink import find_blink
from hybridtrack.errors import ModuleMismatchError, NoBlinkError
from hybridtrack.recording import Recording, RecordingWriter

SHAPE = (80, 120)


def test_frequency_of_a_shuttered_board(clean, clean_scene):
    """The rate is found to some parts in a million, and the phase to the lag of mean stamps."""
    blink = find_blink(clean, SHAPE, clean_scene.target)
    assert blink.hz == pytest.approx(clean_scene.true_blink_hz, rel=2e-5)
    late_ns = -((blink.phase(clean_scene.start_ns) + 0.5) % 1.0 - 0.5) * blink.period_ns
    assert 0 < late_ns < 2e6


def test_frequency_of_a_counterphase_board(counterphase, counterphase_scene):
    """Two sets in counterphase do not cancel, and either may be called A."""
    blink = find_blink(counterphase, SHAPE, counterphase_scene.target)
    assert abs(blink.hz - counterphase_scene.true_blink_hz) < 2 * blink.sigma_hz < 0.03
    half = (2 * blink.phase(counterphase_scene.start_ns) + 0.5) % 1.0 - 0.5
    assert abs(half) < 0.2


def test_steady_light_is_refused(clean_scene, folder):
    """With no blinking the sentence says what was looked for and what was found."""
    scene = replace(clean_scene, blinking=False, background_hz=3.0, poses=tilted_poses(2))
    with (
        opened(scene, folder, "steady") as recording,
        pytest.raises(NoBlinkError, match=r"within 1 % of 61 Hz is required .* no line above 20 Hz"),
    ):
        find_blink(recording, SHAPE, scene.target)


def test_another_rate_is_refused_and_named(counterphase):
    """A target file of another rate is refused with the rate that was found instead."""
    with pytest.raises(NoBlinkError, match=r"within 1 % of 90 Hz .* line is at 7[12]\.\d|strongest line is at 143"):
        find_blink(counterphase, SHAPE, board_target(blink_hz=90.0))


def test_events_off_the_grid_are_refused(clean, clean_scene):
    """A module with a smaller event grid is not the recording's."""
    with pytest.raises(ModuleMismatchError, match=r"event grid of 60x40 pixels, and they reach column \d+"):
        find_blink(clean, (40, 60), clean_scene.target)


def test_lamp_flicker_is_named(folder):
    """A patch that pulses at 100 Hz beside a board at 61 Hz is reported as flicker, and not taken for the board."""
    rng = np.random.default_rng(0)
    parts = []
    for hz, left in ((61.0, 10), (100.0, 70)):
        for k in range(int(3.0 * hz)):
            for phase, on in ((0.0, 1), (0.5, 0)):
                t = (k + phase) / hz * 1e9 + rng.uniform(0, 4e5, 300)
                parts.append(
                    np.stack([t, rng.integers(left, left + 40, 300), rng.integers(10, 70, 300), np.full(300, on)], 1)
                )
    events = np.concatenate(parts)
    events = events[np.argsort(events[:, 0])]
    path = folder / "lamp.h5"
    with RecordingWriter(path) as writer:
        writer.append_events(
            events[:, 0].astype(np.int64),
            events[:, 1].astype(np.uint16),
            events[:, 2].astype(np.uint16),
            events[:, 3].astype(np.uint8),
        )
    with Recording.open(path) as recording:
        blink = find_blink(recording, SHAPE, board_target())
    assert blink.hz == pytest.approx(61.0, rel=3e-5)
    assert any(abs(hz - 100.0) < 1.5 for hz in blink.flicker_hz)
    assert all(abs(hz - 61.0) > 3.0 for hz in blink.flicker_hz)

"""What the health check finds in recordings with known faults."""

from pathlib import Path

import h5py
import numpy as np
import pytest

from hybridtrack.module import load_module
from hybridtrack.recording import Recording, RecordingWriter
from hybridtrack.recording.health import HealthReport, blink_locked_to_frames, examine, hot_pixels
from hybridtrack.recording.spectrum import rate_spectrum

WREN = load_module(Path(__file__).parents[2] / "calib_targets" / "wren.module.json")


def blinking_stamps(
    hz: float, duration_s: float, per_flip: int, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Stamps and polarity of bursts at each flip of a square wave, over a floor of background."""
    flips = np.arange(0, duration_s, 0.5 / hz)
    t = np.repeat(flips, per_flip) + rng.exponential(2e-4, len(flips) * per_flip)
    on = np.repeat(np.arange(len(flips)) % 2 == 0, per_flip)
    noise = rng.uniform(0, duration_s, int(2000 * duration_s))
    t, on = np.concatenate([t, noise]), np.concatenate([on, rng.random(len(noise)) < 0.5])
    order = np.argsort(t)
    return (t[order] * 1e9).astype(np.int64), on[order].astype(np.uint8)


def make(path: Path, frame_hz: float = 60.0, blink_hz: float = 61.0, drop: int | None = None, dn: int = 90) -> None:
    rng = np.random.default_rng(3)
    t, on = blinking_stamps(blink_hz, 3.0, 60, rng)
    x, y = rng.integers(0, 320, len(t)), rng.integers(0, 200, len(t))
    hot = rng.random(len(t)) < 0.02
    x[hot], y[hot] = 17, 23
    number = np.array([n for n in range(int(3 * frame_hz)) if n != drop], np.uint64)
    with RecordingWriter(path, WREN) as writer:
        writer.append_events(t, x, y, on)
        images = np.full((len(number), 4, 6), dn, np.uint8)
        writer.append_frames(
            images, (number / frame_hz * 1e9).astype(np.int64), np.full(len(number), 4_000_000), number
        )


def report(path: Path) -> HealthReport:
    with Recording.open(path) as recording:
        return examine(recording, None, lambda stage, fraction: None)


def test_a_healthy_recording_yields_its_blink_and_its_hot_pixel(tmp_path: Path) -> None:
    """The blink line is found to its resolution, harmonics are not named as lines of their own."""
    make(tmp_path / "a.h5")
    health = report(tmp_path / "a.h5")
    assert health.events is not None
    fundamentals = [line for line in health.events.spectrum.lines if line.harmonic == 1]
    assert len(fundamentals) == 1
    assert fundamentals[0].hz == pytest.approx(61.0, abs=0.2)
    np.testing.assert_array_equal(health.events.hot, [[17, 23]])
    assert health.frames is not None
    assert health.frames.rate_hz == pytest.approx(60.0, rel=1e-6)
    assert not any("locked" in finding or "missing" in finding for finding in health.findings)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"drop": 50}, "1 frame missing"),
        ({"dn": 255}, "saturated"),
        ({"blink_hz": 60.0}, "locked to the frame rate"),
        ({"blink_hz": 100.0}, "Lamp flicker on mains at 100"),
    ],
)
def test_each_fault_is_named(tmp_path: Path, options: dict, words: str) -> None:
    """A dropped frame, saturation, a blink locked to the frames, mains flicker."""
    make(tmp_path / "a.h5", **options)
    assert any(words in finding for finding in report(tmp_path / "a.h5").findings)


def test_faulty_events_are_counted_not_refused(tmp_path: Path) -> None:
    """The health check reads what estimators refuse: steps back, duplicates, coordinates off the grid, lost spans."""
    path = tmp_path / "bad.h5"
    with h5py.File(path, "w") as handle:
        handle.attrs.update({"format": "hybridtrack-recording", "version": 1, "module": WREN.model_dump_json()})
        for name, values in (("t", [0, 5, 5, 3, 9]), ("x", [1, 2, 2, 900, 3]), ("y", [1, 2, 2, 0, 3]), ("on", [1] * 5)):
            handle[f"events/{name}"] = np.array(values)
        handle["events_lost/t0"], handle["events_lost/t1"] = np.array([4]), np.array([2_000_004])
    events = report(path).events
    assert events is not None
    assert (events.outside, events.steps_back, events.duplicates) == (1, 1, 1)
    text = " ".join(report(path).findings)
    assert "run backwards 1 times" in text
    assert "outside the 320x200" in text
    assert "1 interval of lost events, 2.0 ms" in text


def test_an_empty_recording_says_so(tmp_path: Path) -> None:
    """Nothing to examine is a finding, not an exception."""
    with RecordingWriter(tmp_path / "e.h5"):
        pass
    assert report(tmp_path / "e.h5").findings == ("The recording holds no events.", "The recording holds no frames.")


def test_white_noise_has_no_lines() -> None:
    """At the stated strength a Poisson rate shows no line in any of 20 draws."""
    rng = np.random.default_rng(0)
    assert all(not rate_spectrum(rng.poisson(20, 12000), 2.5e-4).lines for _ in range(20))


def test_a_bright_region_is_not_hot() -> None:
    """A block of busy pixels is a scene; one busy pixel alone is a defect."""
    pixels = np.random.default_rng(0).poisson(5, (60, 80))
    pixels[10:30, 10:40] += 5000
    pixels[50, 70] = 5000
    np.testing.assert_array_equal(hot_pixels(pixels), [[70, 50]])


def test_lock_is_judged_by_the_phases_that_frames_meet() -> None:
    """61 Hz at 60 frames a second walks through all phases; 60 Hz, 30 Hz and 90 Hz stand still."""
    assert not blink_locked_to_frames(61.0, 60.0, 120)
    assert all(blink_locked_to_frames(hz, 60.0, 120) for hz in (60.0, 30.0, 90.0, 120.0))

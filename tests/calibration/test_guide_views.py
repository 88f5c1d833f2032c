"""A quick look at recordings: boards where they are, and warnings where something is wrong."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from ideal_board import Scene, nominal_of, opened, small_module, tilted_poses

from hybridtrack.calibration.guide_views import RecordingLook, look_at
from hybridtrack.errors import DegenerateDataError, NoBlinkError
from hybridtrack.geometry import se3
from hybridtrack.module import EventGrid
from hybridtrack.recording import Recording, RecordingWriter


def errors_px(look: RecordingLook, scene: Scene) -> tuple[float, float]:
    """Median and largest distance of found corners from where the scene's lens puts them, colour px."""
    lens, corners = scene.module.lens_model(), scene.target.corners_m()
    errors = []
    for board in look.boards:
        points = se3.transform(scene.poses[board.view], corners[board.ij[:, 1] - 1, board.ij[:, 0] - 1])
        errors.append(np.linalg.norm(lens.project(points) - board.uv, axis=1))
    everything = np.concatenate(errors)
    return float(np.median(everything)), float(everything.max())


def assert_in_place(look: RecordingLook, scene: Scene) -> None:
    """Half of the corners within a quarter of an event pixel (1 colour px), all within one (4)."""
    median, largest = errors_px(look, scene)
    assert median < 1.0
    assert largest < 4.0


def test_boards_are_found_where_they_are(clean: Recording, clean_scene: Scene) -> None:
    """Every view, most corners, to a part of an event pixel; nothing to warn of."""
    look = look_at(clean, clean_scene.target, clean.module)
    assert look.views == len(look.boards) == 4
    assert min(len(board.uv) for board in look.boards) > 60
    assert_in_place(look, clean_scene)
    assert look.misses == ()
    assert look.warnings == ()


def test_noise_and_hot_pixels_do_not_matter(noisy: Recording, noisy_scene: Scene) -> None:
    """Eight-bit frames with noise, background events: as before."""
    look = look_at(noisy, noisy_scene.target, noisy.module)
    assert len(look.boards) == 6
    assert_in_place(look, noisy_scene)


def test_a_screen_is_seen_too(counterphase: Recording, counterphase_scene: Scene) -> None:
    """Both sets of a counterphase board blink."""
    assert len(look_at(counterphase, counterphase_scene.target, counterphase.module).boards) == 3


def test_a_wrong_mirroring_is_seen_through(clean_scene: Scene, tmp_path: Path) -> None:
    """A grid mirrored in one axis, nominal in none: corners lie where frames have them."""
    module = small_module(event_grid=EventGrid(width=120, height=80, mirror_x=True))
    scene = replace(clean_scene, module=module, poses=tilted_poses(2, 5))
    with opened(scene, tmp_path, "mirrored") as recording:
        nominal = recording.module.model_copy(update={"event_grid": EventGrid(width=120, height=80)})
        look = look_at(recording, scene.target, nominal)
    assert len(look.boards) == 2
    assert_in_place(look, scene)


def test_saturation_and_a_locked_blink_are_warned_of(clean_scene: Scene, tmp_path: Path) -> None:
    """A lamp twice as bright as white, frames at half the blink's rate: one sentence each."""
    scene = replace(clean_scene, poses=tilted_poses(2, 5), bright=600.0, frame_hz=30.6, view_s=0.6)
    with opened(scene, tmp_path, "bad") as recording:
        warnings = look_at(recording, scene.target, recording.module).warnings
    assert any("% of the board is white in frames" in warning for warning in warnings)
    assert any("locked to the frame rate of 30.60 Hz" in warning for warning in warnings)
    assert len(warnings) == 2


def test_a_board_at_the_black_level_is_warned_of(clean_scene: Scene, tmp_path: Path) -> None:
    """Dark squares that give no light at all, in eight bits."""
    scene = replace(clean_scene, poses=tilted_poses(2, 5), dark=0.4, quantise=True)
    with opened(scene, tmp_path, "black") as recording:
        warnings = look_at(recording, scene.target, recording.module).warnings
    assert any("at the black level" in warning for warning in warnings)


def queued(t_ns: np.ndarray, spacing_ns: int) -> np.ndarray:
    """Stamps (N,) of events that leave one after the other, `spacing_ns` apart at least."""
    place = np.arange(len(t_ns)) * spacing_ns
    return np.maximum.accumulate(t_ns - place) + place


def test_an_overloaded_readout_is_warned_of(clean: Recording, clean_scene: Scene, tmp_path: Path) -> None:
    """The same events through a readout that needs nine tenths of the time, and intervals said to be lost."""
    events = clean.events()
    inside = events.t[-1] - events.t[0]
    spacing = int(0.9 * 4 * 0.5 / (4 * 0.5 + 3 * 0.1) * inside / len(events))
    with RecordingWriter(tmp_path / "slow.h5", clean.module) as writer:
        writer.append_events(queued(events.t, spacing), events.x, events.y, events.on)
        middle = int(events.t[0] + 0.2e9)
        writer.set_group("events_lost", t0=np.array([middle]), t1=np.array([middle + 1_000_000]))
    with Recording.open(tmp_path / "slow.h5") as recording:
        warnings = look_at(recording, clean_scene.target, clean.module).warnings
    assert any(warning.startswith("readout overload: the module reports lost events in 1 of") for warning in warnings)
    assert any(warning.startswith("events come without pause") for warning in warnings)
    assert "the recording holds no frames" in warnings


def test_what_shows_no_target_is_refused(clean_scene: Scene, tmp_path: Path) -> None:
    """No blinking, no events: the sentences of the steps that calibrate takes."""
    scene = replace(clean_scene, blinking=False, poses=tilted_poses(1), background_hz=3.0)
    with opened(scene, tmp_path, "still") as recording, pytest.raises(NoBlinkError, match="no blinking target"):
        look_at(recording, scene.target, recording.module)
    with RecordingWriter(tmp_path / "empty.h5", nominal_of(scene.module)):
        pass
    with Recording.open(tmp_path / "empty.h5") as recording, pytest.raises(DegenerateDataError, match="holds none"):
        look_at(recording, scene.target, recording.module)

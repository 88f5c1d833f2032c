"""Frames of a board: clocks, bands of the rolling shutter, motion."""

import numpy as np
import pytest

from hybridtrack.errors import OptionError
from hybridtrack.module import HybridModule, Timing
from hybridtrack.synthesis.blink import Blink
from hybridtrack.synthesis.board_frames import BoardFrames, FrameClock, is_recorded
from hybridtrack.synthesis.board_kernels import COVER_A, STILL
from hybridtrack.synthesis.board_optics import BoardOptics
from hybridtrack.synthesis.board_views import BoardMotion, ViewRecipe, board_outline_m, choose_views
from hybridtrack.synthesis.frame_sensor import FrameSensor
from hybridtrack.synthesis.recipe_parts import FrameRecipe
from tests.synthesis.boards import board_scene, frame_mode, lens_module

TIMING = Timing(
    frame_offset_ns=700e3, frame_drift_ppm=15.0, drift_epoch_ns=0, line_time_ns=30e3, exposure_correction_ns=-20e3
)
BLINK = Blink(blink_hz=61.0, duty=0.5, epoch_ns=1.3e6, steps_dn=(90.0,), span_ns=(-1e9, 4e9))


def timed_module(**mode: object) -> HybridModule:
    """The small module with clocks."""
    return lens_module(timing=TIMING, frame_mode=frame_mode(**mode))


def frames_of(module: HybridModule, blink: Blink = BLINK, scanout_ns: float = 0.0, **views: object) -> BoardFrames:
    """Frames of two views."""
    scene = board_scene()
    recipe = ViewRecipe.model_validate({"count": 2, "dwell_s": 1.0, **views})
    random = np.random.default_rng(2)
    poses = choose_views(recipe, board_outline_m(scene.target, scene.square_m), module.lens_model(), (320, 200), random)
    motion = BoardMotion(recipe, poses, module.lens_model().fx, 4.0, random)
    return BoardFrames(
        module,
        BoardOptics.of_colour_pixels(module, scene),
        BoardOptics.of_frame_pixels(module, scene),
        FrameSensor(module),
        motion,
        blink,
        np.array([6e-7, 0.0, 0.0]),
        scanout_ns,
    )


def clock_of(module: HybridModule) -> FrameClock:
    """100 frames a second of 3 ms."""
    return FrameClock.of_recipe(FrameRecipe(rate_hz=100.0, exposure_ms=3.0), module)


@pytest.mark.parametrize("row_order", [1, -1])
def test_rows_expose_when_the_clocks_say(row_order: int) -> None:
    """A row starts at stamp + offset + drift + rows read before it * line time."""
    clock = clock_of(timed_module(row_order=row_order))
    starts = clock.row_starts_ns(2e9)
    before = np.arange(100) if row_order == 1 else 99 - np.arange(100)
    np.testing.assert_allclose(starts, 2e9 + 700e3 + 15e-6 * 2e9 + 30e3 * before)
    assert clock.true_exposure_ns == 2.98e6
    assert clock.exposure_ns == 3_000_000


def test_global_shutter_exposes_all_rows_at_once() -> None:
    """Without a rolling shutter the line time plays no part."""
    assert len(np.unique(clock_of(timed_module(shutter="global")).row_starts_ns(0.0))) == 1


@pytest.mark.parametrize("row_order", [1, -1])
def test_bands_integrate_the_blink_exactly(row_order: int) -> None:
    """Each row's light is still light plus cover times step times the part of the exposure that was bright."""
    module = timed_module(row_order=row_order)
    frames, clock = frames_of(module), clock_of(module)
    starts = clock.row_starts_ns(0.3e9)
    light = frames.light(starts, clock.true_exposure_ns)
    pictures = frames.optics.pictures(frames.motion.views[0])
    still, cover = (FrameSensor(module).light_from_colour(pictures[kind]) for kind in (STILL, COVER_A))
    # Brute force over the blink, edges of 1 us included.
    offsets = (np.arange(298000) + 0.5) * 10.0
    phase = (starts[:, None] + offsets[None, ::50] - BLINK.epoch_ns) % BLINK.period_ns
    share = np.mean(phase < 0.5 * BLINK.period_ns, axis=1)
    assert 0.0 < share.min() + 0.01 < share.max()
    np.testing.assert_allclose(light, still + 90.0 * share[:, None] * cover, atol=0.03)


def test_sweep_delays_the_bands() -> None:
    """On a screen that sweeps downwards lower pixels see the flip later, by their part of the sweep."""
    module = timed_module(shutter="global")
    swept, plain = frames_of(module, scanout_ns=4e6), frames_of(module)
    clock = clock_of(module)
    light = swept.light(clock.row_starts_ns(0.3e9), clock.true_exposure_ns)
    delays = FrameSensor(module).light_from_colour(swept.optics.pictures(swept.motion.views[0])[3])
    for row, column in ((30, 70), (50, 80), (70, 60)):
        late = plain.light(clock.row_starts_ns(0.3e9) - 4e6 * delays[row, column], clock.true_exposure_ns)
        assert light[row, column] == pytest.approx(late[row, column], abs=1e-3)


def test_moving_rows_see_the_pose_of_their_own_time() -> None:
    """Under sway a row shows the board where it is in the middle of that row's exposure."""
    module = timed_module()
    frames, clock = frames_of(module, sway_event_px=2.0), clock_of(module)
    starts = clock.row_starts_ns(0.41e9)
    light = frames.light(starts, clock.true_exposure_ns)
    still_blink = frames.blink
    for row in (10, 90):
        pose = frames.motion.poses(np.array([starts[row] + 0.5 * clock.true_exposure_ns]))
        pictures = np.stack([FrameSensor(module).light_from_colour(p) for p in frames.optics.pictures(pose)])
        expected = np.zeros((100, 160))
        frames._add(starts, clock.true_exposure_ns, 1 / clock.true_exposure_ns, pictures, expected)
        np.testing.assert_allclose(light[row], expected[row], atol=0.6)
    assert still_blink is frames.blink


def test_whole_bins_are_close_to_binned_pixels() -> None:
    """The quick way of rendering whole frame pixels is within 1.5 % of the step of binning colour pixels."""
    module = timed_module()
    frames = frames_of(module)
    exact = FrameSensor(module).light_from_colour(frames.optics.pictures(frames.motion.views[0])[COVER_A])
    quick = frames.quick_optics.pictures(frames.motion.views[0])[COVER_A]
    assert np.abs(exact - quick).max() < 0.015


def test_frames_in_a_gap_are_not_recorded() -> None:
    """A frame counts if all its rows expose inside the recording; a cut between views does not stop it."""
    gapped = frames_of(timed_module(), between="gap", between_s=0.5).motion
    assert is_recorded(gapped, 0.1e9, 0.2e9)
    assert not is_recorded(gapped, 0.99e9, 1.01e9)
    assert not is_recorded(gapped, 1.1e9, 1.2e9)
    assert not is_recorded(gapped, -0.01e9, 0.1e9)
    assert is_recorded(frames_of(timed_module(), between="cut").motion, 0.99e9, 1.01e9)


def test_exposure_longer_than_a_frame_is_refused() -> None:
    """Exposure and readout must fit into the frame's period."""
    with pytest.raises(OptionError, match="less than exposure or readout of 100 rows takes"):
        FrameClock.of_recipe(FrameRecipe(rate_hz=400.0, exposure_ms=3.0), timed_module())

"""Whole recordings of a board: repeatable, and in agreement with the truth they carry."""

from pathlib import Path

import cv2
import numpy as np
import pytest

from hybridtrack.errors import OptionError
from hybridtrack.recording import Recording
from hybridtrack.recording.truth import Truth, read_truth
from hybridtrack.synthesis.board import generate_board, set_up
from hybridtrack.synthesis.board_frames import FrameClock
from hybridtrack.synthesis.board_kernels import COVER_A, STILL
from hybridtrack.synthesis.board_optics import BoardOptics
from hybridtrack.synthesis.event_pixels import PixelPhysics
from hybridtrack.synthesis.frame_sensor import FrameSensor
from tests.synthesis.boards import board_recipe, board_target, frame_mode
from tests.synthesis.modules import small_module


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Truth]:
    """One small recording with its truth."""
    folder = tmp_path_factory.mktemp("board")
    generate_board(board_recipe(folder), folder / "one.h5", seed=3)
    return folder / "one.h5", read_truth(folder / "one.h5")


def test_recording_holds_what_it_should(made: tuple[Path, Truth]) -> None:
    """Events, frames, stamps and truth are there; the nominal module knows nothing that truth knows."""
    with Recording.open(made[0]) as recording:
        assert recording.event_count > 50_000
        assert len(recording.frames) > 30
        assert recording.module is not None
        assert recording.module.lens is None
        assert recording.module.timing is None
        assert recording.frames.shape == (100, 160)
        assert np.all(np.diff(recording.frames.t_start_ns) > 0)
        events = recording.events()
        assert events.x.max() < 80
        assert events.y.max() < 50
    truth = made[1]
    assert truth.module is not None
    assert truth.module.is_calibrated
    assert truth.extras["view_t"].shape == (3, 2)
    assert truth.extras["on_threshold"].shape == (50, 80)


def test_one_seed_one_recording(made: tuple[Path, Truth], tmp_path: Path) -> None:
    """The same recipe and seed give the same events and frames, another seed does not."""
    generate_board(board_recipe(tmp_path), tmp_path / "again.h5", seed=3)
    generate_board(board_recipe(tmp_path), tmp_path / "other.h5", seed=4)
    with Recording.open(made[0]) as one, Recording.open(tmp_path / "again.h5") as again:
        for name in ("t", "x", "y", "on"):
            np.testing.assert_array_equal(getattr(one.events(), name), getattr(again.events(), name))
        for k in (0, 11, 30):
            np.testing.assert_array_equal(one.frame_image(k), again.frame_image(k))
    with Recording.open(tmp_path / "other.h5") as other, Recording.open(made[0]) as one:
        assert other.event_count != one.event_count


@pytest.mark.parametrize("layout", ["binned", "omitted", "single"])
def test_truth_corners_land_on_the_corners_of_the_picture(layout: str, tmp_path: Path) -> None:
    """Corners projected by true pose and lens are the checker corners of a noise-free frame, to 0.05 frame px."""
    mode = {
        "binned": frame_mode(),
        "omitted": frame_mode(clear_in_frame="omitted"),
        "single": frame_mode(binning=1, width=320, height=200),
    }[layout]
    plain = small_module(80, 50).model_copy(update={"frame_mode": mode, "contrast": None, "colour_from_event": None})
    recipe = board_recipe(tmp_path, module=plain, target=board_target(steady_dark=[]), optics={"vignetting": 0.0})
    setup = set_up(recipe, 5)
    sensor = FrameSensor(setup.true)
    optics = BoardOptics.of_colour_pixels(setup.true, setup.scene)
    for pose in setup.motion.views:
        pictures = optics.pictures(pose)
        light = sensor.light_from_colour(pictures[STILL] + 90.0 * pictures[COVER_A]).astype(np.float32)
        corners = setup.target.corners_m().reshape(-1, 3)
        uv = setup.true.lens_model().project((corners - pose[:3, 3]) @ pose[:3, :3])
        start = mode.frame_from_colour(uv).astype(np.float32)
        side = 4 // mode.binning + 1
        criteria = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_MAX_ITER, 60, 1e-4)
        found = cv2.cornerSubPix(light, start[:, None].copy(), (side, side), (-1, -1), criteria)[:, 0]
        # The frame's own pixels sit where the module says, which matters where clear sites are omitted.
        offset = np.mean(
            setup.true.frame_pixel_centres()
            - mode.colour_from_frame(np.stack(np.meshgrid(np.arange(mode.width), np.arange(mode.height)), -1)),
            axis=(0, 1),
        )
        error = mode.colour_from_frame(found) + offset - uv
        assert np.median(np.abs(error)) < 0.05 * mode.binning
        assert np.abs(np.mean(error, axis=0)).max() < 0.05


def first_on_events(recording: Recording, truth: Truth) -> np.ndarray:
    """Delay of the first ON event after each bright flip, for pixels of full contrast, all views together."""
    assert truth.module is not None
    period, epoch = 1e9 / truth.extras["blink_hz"], truth.extras["flip_epoch_ns"] + 0.5 * truth.extras["rise_ns"]
    delays = []
    for t0, t1 in truth.extras["view_t"]:
        events = recording.events(int(t0 + 60e6), int(t1))
        on = events.on == 1
        pixel = events.y[on].astype(int) * 80 + events.x[on]
        t = events.t[on]
        cycle = np.floor((t - epoch) / period).astype(int)
        count = np.bincount(pixel, minlength=4000)
        full = count >= np.percentile(count[count > 0], 60)
        keys = pixel.astype(np.int64) * 10_000 + cycle
        _, first = np.unique(keys, return_index=True)
        first = first[full[pixel[first]]]
        delays.append(t[first] - epoch - cycle[first] * period)
    return np.concatenate(delays)


def test_latency_of_truth_is_that_of_the_events(made: tuple[Path, Truth]) -> None:
    """The stated latency is the mean delay of first ON events of full squares, here under little load, to 10 %."""
    truth = made[1]
    assert truth.module is not None
    with Recording.open(made[0]) as recording:
        delays = first_on_events(recording, truth)
    stated = truth.module.known_timing().event_latency_ns
    assert stated is not None
    assert np.median(delays) == pytest.approx(stated, rel=0.15)


def test_events_show_the_true_contrast(made: tuple[Path, Truth]) -> None:
    """Over full squares, ON events a cycle lie within one of the log step over the true threshold."""
    truth = made[1]
    assert truth.module is not None
    t0, t1 = truth.extras["view_t"][0]
    with Recording.open(made[0]) as recording:
        events = recording.events(int(t0), int(t1))
    cycles = (t1 - t0) * 1e-9 * truth.extras["blink_hz"]
    count = np.bincount((events.y.astype(int) * 80 + events.x)[events.on == 1], minlength=4000)
    ideal = np.log(truth.extras["bright_dn"][0] / truth.extras["dark_dn"]) / truth.module.contrast.on_threshold  # type: ignore[union-attr]
    assert ideal - 1.0 < np.percentile(count[count > 10], 80) / cycles < ideal + 0.3


def test_frames_show_the_flips_where_truth_says(made: tuple[Path, Truth]) -> None:
    """With true clocks and blink the light of every row of every frame is predicted to its noise."""
    truth = made[1]
    assert truth.module is not None
    recipe_exposure = 3_000_000
    clock = FrameClock(truth.module, 1e9 / 120, recipe_exposure, 0.0)
    period, epoch = 1e9 / truth.extras["blink_hz"], truth.extras["flip_epoch_ns"]
    t0, t1 = truth.extras["view_t"][0]
    with Recording.open(made[0]) as recording:
        table = recording.frames
        inside = [k for k, t in enumerate(table.t_start_ns) if t0 + 3e6 < t < t1 - 10e6]
        images = np.stack([recording.frame_image(k) for k in inside]).astype(float)
        stamps = table.t_start_ns[inside]
    share = []
    for stamp in stamps:
        starts = clock.row_starts_ns(float(stamp))
        t = starts[:, None] + (np.arange(3000) + 0.5) / 3000 * clock.true_exposure_ns
        share.append(np.mean((t - epoch) % period < 0.5 * period, axis=1))
    lit = np.stack(share)
    spread = images.max(axis=0) - images.min(axis=0)
    rows, columns = np.nonzero(spread > 0.9 * np.percentile(spread, 99))
    residuals = []
    for row in np.unique(rows):
        here = images[:, row, columns[rows == row]].mean(axis=1)
        fit = np.polyfit(lit[:, row], here, 1)
        residuals.append(here - np.polyval(fit, lit[:, row]))
    assert len(residuals) > 40
    # One noise of about 2 DN over the square root of the row's bright pixels.
    assert np.sqrt(np.mean(np.concatenate(residuals) ** 2)) < 1.2


@pytest.mark.parametrize(
    "change",
    [
        {"views": {"count": 2, "dwell_s": 0.06, "sway_event_px": 1.5, "between": "move", "between_s": 0.08}},
        {"views": {"count": 2, "dwell_s": 0.06, "between": "cut"}, "light": {"flicker_depth": 0.2}},
        {
            "pixels": {"reference": "resets", "leak_hz": 0.2},
            "readout": {"while_waiting": "lose", "resolution_ns": 1000},
            "views": {"count": 1, "dwell_s": 0.1},
        },
        {
            "truth": {"lens": "fisheye", "mirror_x": True, "off_lattice_px": 0.05, "radial_px": 0.1, "centre_px": 4.0},
            "views": {"count": 1, "dwell_s": 0.1},
        },
    ],
)
def test_variants_of_a_recipe_run(change: dict, tmp_path: Path) -> None:
    """Moves, cuts, flicker, another pixel model and another lens all give recordings that read back in order."""
    count = generate_board(board_recipe(tmp_path, **change), tmp_path / "v.h5", seed=1)
    with Recording.open(tmp_path / "v.h5") as recording:
        assert recording.event_count == count > 1000
        assert sum(len(block) for block in recording.event_blocks()) == count
        assert len(recording.frames) > 3
    truth = read_truth(tmp_path / "v.h5")
    assert truth.pose_t_ns[-1] >= recording.frames.t_start_ns[-1]


@pytest.mark.parametrize(
    "mode",
    [
        {"binning": 1, "width": 320, "height": 200, "mosaic": "RGGB", "clear_in_frame": "filled"},
        {"crop": (16, 8), "width": 140, "height": 90, "row_order": -1, "clear_in_frame": "omitted"},
        {"black_dn": 64.0, "white_dn": 1023.0, "response": "gamma", "shutter": "global"},
    ],
)
def test_frame_modes_run(mode: dict, tmp_path: Path) -> None:
    """Mosaic, crop, row order, gamma and sixteen bits come out as the module says."""
    plain = small_module(80, 50).model_copy(
        update={"contrast": None, "colour_from_event": None, "frame_mode": frame_mode(**mode)}
    )
    recipe = board_recipe(
        tmp_path, module=plain, views={"count": 1, "dwell_s": 0.1}, frames={"rate_hz": 100.0, "exposure_ms": 3.0}
    )
    generate_board(recipe, tmp_path / "m.h5", seed=2)
    with Recording.open(tmp_path / "m.h5") as recording:
        assert recording.frames.shape == plain.frame_mode.shape
        assert recording.frames.dtype == (np.uint16 if mode.get("white_dn") else np.uint8)
        image = recording.frame_image(1)
        assert image.max() > 60 + mode.get("black_dn", 0.0)
        assert image.min() >= 0.9 * mode.get("black_dn", 0.0)


def test_levels_of_a_target_step_through(tmp_path: Path) -> None:
    """A target with several levels shows them all, the dark level common to all."""
    target = board_target(levels=[0.5, 1.0, 1.5])
    recipe = board_recipe(tmp_path, target=target, views={"count": 1, "dwell_s": 0.3}, light={"cycles_per_level": 2})
    generate_board(recipe, tmp_path / "l.h5", seed=2)
    truth = read_truth(tmp_path / "l.h5")
    np.testing.assert_allclose(np.log(truth.extras["bright_dn"] / truth.extras["dark_dn"]), [0.5, 1.0, 1.5])


def test_refusals(tmp_path: Path) -> None:
    """Light beyond the frames' range, squares too small to render, and steps too small to fire are refused."""
    with pytest.raises(OptionError, match="must not exceed the frames' range of 255 DN, got 300"):
        set_up(board_recipe(tmp_path, light={"bright_dn": 300.0}), 0)
    with pytest.raises(OptionError, match="squares must be at least 8 px"):
        set_up(board_recipe(tmp_path, target=board_target(columns=40, rows=29, steady_dark=[])), 0)
    with pytest.raises(OptionError, match="fires too few event pixels"):
        set_up(board_recipe(tmp_path, light={"log_step": 0.1}), 0)
    with pytest.raises(ValueError, match="tau_ns must be positive"):
        board_recipe(tmp_path, pixels={"tau_ns": -1.0})
    assert PixelPhysics().tau_ns > 0

"""Recordings of a blinking board, with truth.

The light of each pixel is what does not blink, plus the steps of set A and set B times their share of the pixel. Those
shares are pictures, rendered once a view, and along the camera's path where it moves.
"""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np
from pydantic import Field, model_validator

from hybridtrack.errors import OptionError
from hybridtrack.geometry import se3
from hybridtrack.module import HybridModule, Target
from hybridtrack.recording import RecordingWriter
from hybridtrack.synthesis.blink import Blink
from hybridtrack.synthesis.board_events import expose_events
from hybridtrack.synthesis.board_frames import BoardFrames, FrameClock, record_frames
from hybridtrack.synthesis.board_optics import SMALLEST_SQUARE_PX, BoardOptics, BoardScene, background_waves
from hybridtrack.synthesis.board_views import BoardMotion, ViewRecipe, board_outline_m, choose_views
from hybridtrack.synthesis.event_pixels import EventPixels, PixelPhysics
from hybridtrack.synthesis.event_sink import EventSink
from hybridtrack.synthesis.frame_sensor import FrameSensor, SensorPhysics
from hybridtrack.synthesis.latency import first_event_delays
from hybridtrack.synthesis.module_truth import ModuleDraw, draw_module
from hybridtrack.synthesis.readout import ReadoutPhysics, RowScanReadout
from hybridtrack.synthesis.recipe_parts import FrameRecipe, ModuleSource, Strict, TargetSource

Array = np.ndarray
Progress = Callable[[str, float], None]
POSE_STEP_NS = 1e6


class LightRecipe(Strict):
    """Light in linear DN above black, as frames show it. `log_step` is the natural log of bright over dark light, used
    where the target names no `levels`; dark light follows from it and `bright_dn`. `flicker_depth` is the relative
    amplitude of the room's lamps on all that does not blink. `rise_us` and `fall_us` are used where the target
    states none.
    """

    bright_dn: float = Field(default=120.0, gt=0)
    log_step: float = Field(default=1.25, gt=0.05, le=6)
    mount_dn: float = Field(default=22.0, gt=0)
    background_dn: float = Field(default=18.0, gt=0)
    background_contrast: float = Field(default=0.3, ge=0, lt=0.6)
    flicker_hz: float = Field(default=100.0, gt=0)
    flicker_depth: float = Field(default=0.0, ge=0, lt=1)
    rise_us: float = Field(default=1.0, gt=0)
    fall_us: float = Field(default=1.0, gt=0)
    cycles_per_level: int = Field(default=4, ge=1)


class OpticsRecipe(Strict):
    """Point spread (standard deviation, colour px) and the fall-off of light at the picture's corner."""

    psf_px: float = Field(default=0.6, ge=0.2, le=3)
    vignetting: float = Field(default=0.1, ge=0, lt=0.9)


class BoardRecipe(Strict):
    """A recording of a blinking board. `blink_error` is the half width of the target clock's relative error;
    `square_scale` is what printing did to the squares.
    """

    kind: Literal["board"] = "board"
    name: str = "board"
    module: ModuleSource
    target: TargetSource
    truth: ModuleDraw = ModuleDraw()
    views: ViewRecipe = ViewRecipe()
    light: LightRecipe = LightRecipe()
    optics: OpticsRecipe = OpticsRecipe()
    frames: FrameRecipe = FrameRecipe()
    pixels: PixelPhysics = PixelPhysics()
    readout: ReadoutPhysics = ReadoutPhysics()
    sensor: SensorPhysics = SensorPhysics()
    blink_error: float = Field(default=0.003, ge=0, le=0.01)
    square_scale: tuple[float, float] = (1.0, 1.0)

    @model_validator(mode="after")
    def _consistent(self) -> "BoardRecipe":
        if not all(0.9 < scale < 1.1 for scale in self.square_scale):
            raise ValueError("square_scale must lie in 0.9..1.1")
        return self


@dataclass(frozen=True)
class BoardSetup:
    """Everything that one seed makes of a recipe."""

    nominal: HybridModule
    true: HybridModule
    target: Target
    scene: BoardScene
    blink: Blink
    motion: BoardMotion
    flicker: Array
    off_latency_ns: float


def draw_blink(
    recipe: BoardRecipe, target: Target, dark_dn: float, span_ns: tuple[float, float], random: np.random.Generator
) -> Blink:
    """The target's light with its clock's error and a random phase."""
    levels = target.levels or [recipe.light.log_step]
    blink_hz = target.blink_hz * (1.0 + recipe.blink_error * random.uniform(-1, 1))
    return Blink(
        blink_hz=blink_hz,
        duty=target.duty,
        epoch_ns=random.uniform(0, 1e9 / blink_hz),
        steps_dn=tuple(dark_dn * float(np.expm1(level)) for level in levels),
        counterphase=target.is_counterphase,
        rise_ns=1e9 * target.rise_s if target.rise_s else 1e3 * recipe.light.rise_us,
        fall_ns=1e9 * target.fall_s if target.fall_s else 1e3 * recipe.light.fall_us,
        cycles_per_level=recipe.light.cycles_per_level,
        span_ns=span_ns,
    )


def check_square_size(target: Target, square_m: tuple[float, float], module: HybridModule, poses: Array) -> None:
    """Raise OptionError where squares are too small in the picture for the renderer's assumption of few edges."""
    x, y = np.meshgrid(np.arange(target.columns + 1) * square_m[0], np.arange(target.rows + 1) * square_m[1])
    grid = np.stack([x, y, np.zeros_like(x)], axis=-1)
    for pose in poses:
        uv = module.lens_model().project((grid - pose[:3, 3]) @ pose[:3, :3])
        sides = [np.linalg.norm(np.diff(uv, axis=axis), axis=-1) for axis in (0, 1)]
        smallest = min(float(np.nanmin(side)) for side in sides)
        if smallest < SMALLEST_SQUARE_PX:
            raise OptionError(
                f"squares must be at least {SMALLEST_SQUARE_PX:.0f} px in the picture, and one is {smallest:.1f} px: "
                "raise views.fill or lower views.tilt_max_deg"
            )


def set_up(recipe: BoardRecipe, seed: int) -> BoardSetup:
    """Draw the module, the views and the target's clock. Raises OptionError where the recipe can't be met."""
    nominal, target = recipe.module.load(), recipe.target.load()
    light = recipe.light
    span = nominal.frame_mode.white_dn - nominal.frame_mode.black_dn
    if light.bright_dn > span:
        raise OptionError(f"light.bright_dn must not exceed the frames' range of {span:g} DN, got {light.bright_dn:g}")
    true = draw_module(nominal, recipe.truth, seed)
    random = np.random.default_rng([seed, 20])
    square = (target.square_xy_m[0] * recipe.square_scale[0], target.square_xy_m[1] * recipe.square_scale[1])
    dark_dn = light.bright_dn * float(np.exp(-max(target.levels or [light.log_step])))
    scene = BoardScene(
        target,
        square,
        dark_dn,
        light.mount_dn,
        light.background_dn,
        background_waves(light.background_contrast, random),
        recipe.optics.psf_px,
        recipe.optics.vignetting,
    )
    size = (true.colour_array.width, true.colour_array.height)
    views = choose_views(recipe.views, board_outline_m(target, square), true.lens_model(), size, random)
    check_square_size(target, square, true, views)
    motion = BoardMotion(recipe.views, views, true.lens_model().fx, true.cluster.width, random)
    blink = draw_blink(recipe, target, dark_dn, (-0.1e9, motion.segments[-1].t1_ns + 0.1e9), random)
    flicker = np.array([2e-9 * np.pi * light.flicker_hz, light.flicker_depth, random.uniform(0, 2 * np.pi)])
    on_delay, off_delay = first_event_delays(true, recipe.pixels, blink, dark_dn, seed)
    timing = true.timing.model_copy(  # type: ignore[union-attr]
        update={"event_latency_ns": on_delay + recipe.readout.row_ns, "reference_light_dn": light.bright_dn}
    )
    true = true.model_copy(update={"timing": timing})
    return BoardSetup(nominal, true, target, scene, blink, motion, flicker, off_delay + recipe.readout.row_ns)


def recorded_settings(recipe: BoardRecipe) -> dict[str, Any]:
    """What the module would say of its own settings."""
    return {
        "frame_rate_hz": recipe.frames.rate_hz,
        "exposure_ms": recipe.frames.exposure_ms,
        "gain": 1.0,
        "synthetic": True,
    }


def write_truth(writer: RecordingWriter, setup: BoardSetup, pixels: EventPixels) -> None:
    """Poses every millisecond of what was recorded, the true module, and what an estimate may be compared with."""
    segments = setup.motion.segments
    times = np.unique(np.concatenate([np.append(np.arange(s.t0_ns, s.t1_ns, POSE_STEP_NS), s.t1_ns) for s in segments]))
    blink, scene = setup.blink, setup.scene
    extras: dict[str, Any] = {
        "blink_hz": blink.blink_hz,
        "duty": blink.duty,
        "flip_epoch_ns": blink.epoch_ns,
        "rise_ns": blink.rise_ns,
        "fall_ns": blink.fall_ns,
        "dark_dn": scene.dark_dn,
        "bright_dn": scene.dark_dn + np.array(blink.steps_dn),
        "view_t": np.array([[s.t0_ns, s.t1_ns] for s in segments if not s.is_move]).astype(np.int64),
        "square_m": np.array(scene.square_m),
        "on_threshold": pixels.on_threshold,
        "off_threshold": pixels.off_threshold,
        "background_hz": pixels.background_hz,
        "off_latency_ns": setup.off_latency_ns,
    }
    poses = se3.to_position_quaternion(setup.motion.poses(times))
    writer.set_truth(
        np.rint(times).astype(np.int64),
        poses,
        setup.true,
        **{name: np.asarray(value) for name, value in extras.items()},
    )


def generate_board(recipe: BoardRecipe, out: Path | str, seed: int = 0, progress: Progress | None = None) -> int:
    """Write the recording of one seed to `out`; returns the number of events. Raises OptionError, FileFormatError."""
    tell = progress or (lambda stage, fraction: None)
    tell("draw module and views", 0.0)
    setup = set_up(recipe, seed)
    pixels = EventPixels(setup.true, recipe.pixels, seed)
    with RecordingWriter(out, setup.nominal, recorded_settings(recipe)) as writer:
        sink = EventSink(writer, RowScanReadout(pixels.shape, recipe.readout))
        optics = BoardOptics.of_event_pixels(setup.true, setup.scene)
        expose_events(
            setup.motion,
            setup.blink,
            setup.flicker,
            1e9 * setup.target.scanout_s,
            optics,
            pixels,
            sink,
            lambda part: tell("events", part),
        )
        clock = FrameClock.of_recipe(recipe.frames, setup.true)
        frames = BoardFrames(
            setup.true,
            BoardOptics.of_colour_pixels(setup.true, setup.scene),
            BoardOptics.of_frame_pixels(setup.true, setup.scene),
            FrameSensor(setup.true, recipe.sensor, seed),
            setup.motion,
            setup.blink,
            setup.flicker,
            1e9 * setup.target.scanout_s,
        )
        record_frames(frames, clock, writer, lambda part: tell("frames", part))
        write_truth(writer, setup, pixels)
    tell("done", 1.0)
    return sink.count

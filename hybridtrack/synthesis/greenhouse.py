"""Recordings of the greenhouse from the trolley, with truth.

`build_world` makes from a recipe and a seed what the recording is made of, so that a benchmark can rebuild the scene
and look at it anew. The events are made first, then the frames; both stream to the file.
"""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal

import numpy as np
from pydantic import Field

from hybridtrack.geometry import se3
from hybridtrack.module import HybridModule
from hybridtrack.recording import RecordingWriter
from hybridtrack.synthesis.board_frames import FrameClock
from hybridtrack.synthesis.event_pixels import EventPixels, PixelPhysics
from hybridtrack.synthesis.event_sink import EventSink
from hybridtrack.synthesis.frame_sensor import FrameSensor, SensorPhysics
from hybridtrack.synthesis.greenhouse_scene import greenhouse_scene
from hybridtrack.synthesis.imu import ImuRecipe, simulate_imu
from hybridtrack.synthesis.lamp import LampRecipe
from hybridtrack.synthesis.module_truth import ModuleDraw, draw_module
from hybridtrack.synthesis.motion import LapMotion, ReversingMotion, Trajectory
from hybridtrack.synthesis.picture_motion import PictureMotion
from hybridtrack.synthesis.readout import ReadoutPhysics, RowScanReadout
from hybridtrack.synthesis.recipe_parts import FrameRecipe, ModuleSource, Strict
from hybridtrack.synthesis.scene import Scene
from hybridtrack.synthesis.view import Optics, View

Progress = Callable[[str, float], None]
POSE_STEP_NS = 1e6
BLOCK_FRAMES = 8


class GreenhouseOptics(Strict):
    """Point spread (standard deviation, colour px) and the fall-off of light at the picture's corner."""

    psf_px: float = Field(default=0.6, ge=0, le=3)
    vignetting: float = Field(default=0.1, ge=0, lt=0.9)


class SceneRecipe(Strict):
    """`seed` null: the scene changes with the recording's seed. `texel_mm`: size of the finest texels."""

    seed: int | None = Field(default=None, ge=0)
    texel_mm: float = Field(default=1.2, ge=0.3, le=10)


class GreenhouseRecipe(Strict):
    """A recording of the greenhouse. `module_seed` null: the true module changes with the recording's seed."""

    kind: Literal["greenhouse"] = "greenhouse"
    name: str = "greenhouse"
    module: ModuleSource
    truth: ModuleDraw = ModuleDraw()
    module_seed: int | None = Field(default=None, ge=0)
    scene: SceneRecipe = SceneRecipe()
    motion: Annotated[LapMotion | ReversingMotion, Field(discriminator="preset")] = LapMotion()
    duration_s: float = Field(default=6.0, gt=0)
    lamp: LampRecipe = LampRecipe()
    optics: GreenhouseOptics = GreenhouseOptics()
    frames: FrameRecipe = FrameRecipe()
    pixels: PixelPhysics = PixelPhysics()
    readout: ReadoutPhysics = ReadoutPhysics()
    sensor: SensorPhysics = SensorPhysics()
    imu: ImuRecipe | None = ImuRecipe()


@dataclass(frozen=True)
class World:
    """Everything that one seed makes of a recipe."""

    nominal: HybridModule
    module_true: HybridModule
    module_seed: int
    scene: Scene
    trajectory: Trajectory
    view: View


def build_world(recipe: GreenhouseRecipe, seed: int) -> World:
    """The module, scene and motion of one recording, the same whenever it is called. Raises OptionError."""
    nominal = recipe.module.load()
    module_seed = seed if recipe.module_seed is None else recipe.module_seed
    module = draw_module(nominal, recipe.truth, module_seed)
    scene_seed = seed if recipe.scene.seed is None else recipe.scene.seed
    scene = greenhouse_scene(scene_seed, 1e-3 * recipe.scene.texel_mm)
    random = np.random.default_rng([seed, 22])
    if isinstance(recipe.motion, ReversingMotion):
        trajectory = recipe.motion.trajectory(random, module.lens_model().fx)
    else:
        trajectory = recipe.motion.trajectory(random)
    view = View(scene, module, trajectory, recipe.lamp, Optics(recipe.optics.psf_px, recipe.optics.vignetting))
    return World(nominal, module, module_seed, scene, trajectory, view)


def write_events(
    world: World,
    motion: PictureMotion,
    pixels: EventPixels,
    sink: EventSink,
    end_ns: float,
    tell: Callable[[float], None],
) -> None:
    """Run the event pixels from time 0 to the end."""
    for times, light in world.view.event_light(motion, 0.0, end_ns):
        sink.take(pixels.expose(times, light), float(times[-1]))
        tell(float(times[-1]) / end_ns)
    sink.finish()


def write_frames(
    world: World,
    motion: PictureMotion,
    clock: FrameClock,
    sensor: FrameSensor,
    writer: RecordingWriter,
    end_ns: float,
    tell: Callable[[float], None],
) -> None:
    """Write every frame that is exposed between time 0 and the end."""
    exposure = clock.true_exposure_ns
    images: list[np.ndarray] = []
    kept: list[tuple[int, int]] = []

    def flush() -> None:
        if images:
            stamps, numbers = zip(*kept, strict=True)
            t, exposures = np.array(stamps, np.int64), np.full(len(kept), clock.exposure_ns, np.int64)
            writer.append_frames(np.stack(images), t, exposures, np.array(numbers, np.uint64), np.ones(len(kept)))
            images.clear()
            kept.clear()

    stamps = clock.stamps_ns(end_ns)
    for number, stamp in enumerate(stamps):
        starts = clock.row_starts_ns(float(stamp))
        if starts.min() < 0 or starts.max() + exposure > end_ns:
            continue
        light = world.view.frame_light(motion, starts, exposure, clock.exposure_ns)
        images.append(sensor.record(light, number))
        kept.append((int(stamp), number))
        if len(images) == BLOCK_FRAMES:
            flush()
            tell(number / len(stamps))
    flush()


def write_truth(
    writer: RecordingWriter, world: World, motion: PictureMotion, pixels: EventPixels, end_ns: float
) -> None:
    """Poses every millisecond, the true module, and what an estimate may be compared with."""
    t = np.rint(np.append(np.arange(0.0, end_ns, POSE_STEP_NS), end_ns)).astype(np.int64)
    extras: dict[str, Any] = {
        "speed_t": np.rint(motion.t_ns).astype(np.int64),
        "speed_median_px_s": motion.median_px_s,
        "speed_upper_px_s": motion.upper_px_s,
        "speed_highest_px_s": motion.highest_px_s,
        "on_threshold": pixels.on_threshold,
        "off_threshold": pixels.off_threshold,
        "background_hz": pixels.background_hz,
    }
    poses = se3.to_position_quaternion(world.trajectory.poses(t))
    writer.set_truth(t, poses, world.module_true, **extras)


def recorded_settings(recipe: GreenhouseRecipe) -> dict[str, Any]:
    """What the module would say of its own settings."""
    frames = recipe.frames
    return {"frame_rate_hz": frames.rate_hz, "exposure_ms": frames.exposure_ms, "gain": 1.0, "synthetic": True}


def generate_greenhouse(
    recipe: GreenhouseRecipe, out: Path | str, seed: int = 0, progress: Progress | None = None
) -> int:
    """Write the recording of one seed to `out`; returns the number of events. Raises OptionError, FileFormatError."""
    tell = progress or (lambda stage, fraction: None)
    tell("draw scene", 0.0)
    world = build_world(recipe, seed)
    end_ns = 1e9 * recipe.duration_s
    clock = FrameClock.of_recipe(recipe.frames, world.module_true)
    pixels = EventPixels(world.module_true, recipe.pixels, world.module_seed)
    sensor = FrameSensor(world.module_true, recipe.sensor, world.module_seed)
    motion = world.view.motion(0.0, end_ns)
    with RecordingWriter(out, world.nominal, recorded_settings(recipe)) as writer:
        sink = EventSink(writer, RowScanReadout(pixels.shape, recipe.readout))
        write_events(world, motion, pixels, sink, end_ns, lambda part: tell("events", part))
        write_frames(world, motion, clock, sensor, writer, end_ns, lambda part: tell("frames", part))
        if recipe.imu is not None:
            imu = simulate_imu(world.trajectory, 0, int(end_ns), recipe.imu, seed)
            writer.set_group("imu", t=imu.t, gyro=imu.gyro, accel=imu.accel)
        write_truth(writer, world, motion, pixels, end_ns)
    tell("done", 1.0)
    return sink.count

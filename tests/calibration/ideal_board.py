"""A small recorder of blinking boards for tests: a pixel model that the estimators do not assume.

Light is exact: the board's plane is sampled through the lens, each pixel averages a 2x2 raster of its own aperture, and
each row integrates the square wave in closed form. Event pixels are plain comparators on the logarithm of light, with
a reference that steps by the threshold, or jumps to the present level (`reset_to_level`).
"""

from dataclasses import dataclass, field

import numpy as np

from hybridtrack.geometry import PerspectiveLens, se3, so3
from hybridtrack.module import (
    Cluster,
    ColourArray,
    Contrast,
    EventGrid,
    FrameMode,
    HybridModule,
    PerspectiveParameters,
    Target,
    Timing,
)
from hybridtrack.recording import Recording, RecordingWriter

RASTER = np.array([-0.25, 0.25])


def small_module(**changes) -> HybridModule:
    """A true module: 480x320 colour pixels, 4x4 clusters, frames binned by 2."""
    values = {
        "name": "Sparrow",
        "colour_array": ColourArray(width=480, height=320),
        "cluster": Cluster(width=4, height=4, clear_site=(2, 1)),
        "event_grid": EventGrid(width=120, height=80),
        "frame_mode": FrameMode(width=240, height=160, binning=2, black_dn=4.0),
        "lens": PerspectiveParameters(fx=400.0, fy=401.0, cx=243.0, cy=157.0, radial=(-0.08, 0.02, 0.0)),
        "timing": Timing(frame_offset_ns=1.2e6, line_time_ns=30e3, exposure_correction_ns=0.0, frame_drift_ppm=0.0),
        "contrast": Contrast(on_threshold=0.25, off_threshold=0.30, on_spread=0.0, off_spread=0.0),
    }
    return HybridModule(**(values | changes))


def nominal_of(module: HybridModule) -> HybridModule:
    """What a data sheet says of it: neither lens nor contrast, clocks by design."""
    timing = Timing(frame_offset_ns=None, line_time_ns=module.timing.line_time_ns)
    return module.model_copy(update={"lens": None, "contrast": None, "timing": timing, "colour_from_event": None})


def board_target(**changes) -> Target:
    """A 12x9 shuttered board with three steady dark squares."""
    values = {"kind": "shuttered_checker", "columns": 12, "rows": 9, "square_m": 0.03, "blink_hz": 61.0}
    return Target(**(values | {"steady_dark": [(3, 2), (8, 2), (5, 5)]} | changes))


def tilted_poses(count: int, seed: int = 0) -> np.ndarray:
    """Poses (count, 4, 4) camera_from_board: the board before the camera, tilted up to 30 degrees each way."""
    rng = np.random.default_rng(seed)
    poses = []
    for _ in range(count):
        tilt, roll = rng.uniform(-0.5, 0.5, 2), rng.uniform(-0.3, 0.3)
        rotation = so3.exp(np.array([tilt[0], tilt[1], 0.0])) @ so3.exp(np.array([0.0, 0.0, roll]))
        middle = np.array([rng.uniform(-0.04, 0.04), rng.uniform(-0.03, 0.03), rng.uniform(0.42, 0.52)])
        poses.append(se3.compose(rotation, middle - rotation @ np.array([0.18, 0.135, 0.0])))
    return np.array(poses)


@dataclass(frozen=True)
class Scene:
    """What is recorded: poses of the board, clocks of target and frames, light and noise."""

    module: HybridModule = field(default_factory=small_module)
    target: Target = field(default_factory=board_target)
    poses: np.ndarray = field(default_factory=lambda: tilted_poses(6))
    view_s: float = 0.5
    gap_s: float = 0.1
    true_blink_hz: float = 61.2
    frame_hz: float = 28.7
    exposure_ns: int = 9_000_000
    start_ns: int = 5_000_000_000
    bright: float = 180.0
    dark: float = 14.0
    shading: float = 0.5
    noise_dn: float = 0.0
    quantise: bool = False
    background_hz: float = 0.0
    reset_to_level: bool = False
    blinking: bool = True
    latency_ns: float = 40e3
    hot: tuple[tuple[int, int], ...] = ()
    dead: tuple[tuple[int, int], ...] = ()
    seed: int = 0

    @property
    def period_ns(self) -> float:
        return 1e9 / self.true_blink_hz


def board_light(scene: Scene, pose: np.ndarray, uv: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Light at colour-array positions (..., 2), set A bright and set A dark."""
    target = scene.target
    rays = PerspectiveLens.unproject(scene.module.lens_model(), uv)
    normal, origin = pose[:3, 2], pose[:3, 3]
    points = rays * ((normal @ origin) / (rays @ normal))[..., None]
    board = (points - origin) @ pose[:3, :2]
    size = np.array(target.square_xy_m)
    cell = np.floor(board / size).astype(int)
    inside = np.all((cell >= 0) & (cell < [target.columns, target.rows]), axis=-1)
    clipped = np.clip(cell, 0, [target.columns - 1, target.rows - 1])
    sets = np.where(inside, target.square_sets()[clipped[..., 1], clipped[..., 0]], 0)
    extent = size * [target.columns, target.rows]
    falloff = 1.0 - scene.shading * np.clip(board[..., 0] / extent[0], 0.0, 1.0)
    outside = 0.35 * scene.bright
    still = np.where(inside, scene.dark, outside)
    lamp = (scene.bright - scene.dark) * falloff
    return still + lamp * (sets == 1), still + lamp * (sets == -1)


def apertured(scene: Scene, pose: np.ndarray, uv: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """`board_light` averaged over one colour pixel's aperture around each position."""
    total = [0.0, 0.0]
    for du in RASTER:
        for dv in RASTER:
            for k, light in enumerate(board_light(scene, pose, uv + np.array([du, dv]))):
                total[k] = total[k] + light / 4.0
    return total[0], total[1]


def bright_time(t_ns: np.ndarray, scene: Scene) -> np.ndarray:
    """Time that set A has been bright since `start_ns`, up to each instant."""
    cycles = (np.asarray(t_ns) - scene.start_ns) / scene.period_ns
    whole = np.floor(cycles)
    duty = scene.target.duty
    return (whole * duty + np.minimum(cycles - whole, duty)) * scene.period_ns


def record_frames(scene: Scene, writer: RecordingWriter) -> None:
    """Frames of every view; each row integrates its own exposure."""
    rng = np.random.default_rng([scene.seed, 1])
    module, mode = scene.module, scene.module.frame_mode
    timing = module.timing
    rows = mode.read_order(np.arange(mode.height))
    columns, lines = np.meshgrid(np.arange(module.colour_array.width), np.arange(module.colour_array.height))
    uv = np.stack([columns, lines], -1)
    stamp = float(scene.start_ns) - timing.frame_offset_ns
    for k, pose in enumerate(scene.poses):
        binned = [
            light.reshape(mode.height, mode.binning, mode.width, mode.binning).mean((1, 3))
            for light in apertured(scene, pose, uv)
        ]
        end = scene.start_ns + ((k + 1) * scene.view_s + k * scene.gap_s) * 1e9 - timing.frame_offset_ns
        images, stamps = [], []
        while stamp < end:
            start = timing.exposure_start_ns(stamp, rows)
            true_exposure = timing.true_exposure_ns(scene.exposure_ns)
            share = (bright_time(start + true_exposure, scene) - bright_time(start, scene)) / true_exposure
            if not scene.blinking:
                share = np.ones_like(share)
            image = binned[1] + share[:, None] * (binned[0] - binned[1]) + mode.black_dn
            image = image + scene.noise_dn * rng.standard_normal(image.shape)
            images.append(np.clip(np.rint(image if scene.quantise else image * 256.0), 0, 65535))
            stamps.append(int(stamp))
            stamp += 1e9 / scene.frame_hz
        images = np.array(images).astype(np.uint8 if scene.quantise else np.uint16)
        writer.append_frames(images, np.array(stamps), np.full(len(stamps), scene.exposure_ns))
        stamp += scene.gap_s * 1e9


def flips(scene: Scene, t0_ns: float, t1_ns: float) -> list[tuple[float, int]]:
    """Instants in the interval at which set A turns bright (state 0) or dark (state 1)."""
    first = int(np.floor((t0_ns - scene.start_ns) / scene.period_ns)) - 1
    last = int(np.ceil((t1_ns - scene.start_ns) / scene.period_ns)) + 1
    instants = []
    for k in range(first, last):
        for phase, state in ((0.0, 0), (scene.target.duty, 1)):
            instants.append((scene.start_ns + (k + phase) * scene.period_ns, state))
    return [(t, state) for t, state in instants if t0_ns <= t < t1_ns]


class Comparators:
    """Event pixels with a stepping (or jumping) reference."""

    def __init__(self, scene: Scene, rng: np.random.Generator) -> None:
        contrast, shape = scene.module.contrast, scene.module.event_grid.shape
        self.scene, self.rng = scene, rng
        self.on = contrast.on_threshold * np.exp(
            contrast.on_spread / contrast.on_threshold * rng.standard_normal(shape)
        )
        self.off = contrast.off_threshold * np.exp(
            contrast.off_spread / contrast.off_threshold * rng.standard_normal(shape)
        )
        self.dead = np.zeros(shape, bool)
        for x, y in scene.dead:
            self.dead[y, x] = True
        self.reference: np.ndarray | None = None

    def step(self, t_ns: float, log_light: np.ndarray) -> np.ndarray:
        """Events (N, 4) t, x, y, on of a sudden change to `log_light`."""
        if self.reference is None:
            self.reference = log_light - self.off * self.rng.uniform(0, 0.999, log_light.shape)
        change = log_light - self.reference
        count = np.where(change > 0, np.floor(change / self.on), np.floor(-change / self.off)).astype(int)
        count[self.dead] = 0
        signed = np.where(change > 0, count * self.on, -count * self.off)
        if self.scene.reset_to_level:
            self.reference = np.where(count > 0, log_light, self.reference)
        else:
            self.reference = self.reference + signed
        y, x = np.nonzero(count)
        number = count[y, x]
        index = np.arange(number.sum()) - np.repeat(np.cumsum(number) - number, number)
        lag_ns = 20.0 * np.cumsum(np.bincount(y, number, minlength=len(count)))
        t = t_ns + self.scene.latency_ns + 100e3 * index + np.repeat(lag_ns[y], number) * (index > 0)
        on = np.repeat(change[y, x] > 0, number)
        return np.stack([t, np.repeat(x, number), np.repeat(y, number), on], 1)


def random_events(scene: Scene, rng: np.random.Generator, t0: float, t1: float) -> np.ndarray:
    """Background and hot pixels (N, 4): events without cause."""
    height, width = scene.module.event_grid.shape
    count = rng.poisson(scene.background_hz * (t1 - t0) * 1e-9 * width * height)
    noise = np.stack([rng.uniform(t0, t1, count), rng.integers(0, width, count), rng.integers(0, height, count)], 1)
    parts = [np.column_stack([noise, rng.integers(0, 2, count)])]
    for x, y in scene.hot:
        number = rng.poisson(300.0 * (t1 - t0) * 1e-9)
        parts.append(
            np.column_stack([rng.uniform(t0, t1, number), np.full(number, x), np.full(number, y), np.ones(number)])
        )
    return np.concatenate(parts)


def record_events(scene: Scene, writer: RecordingWriter) -> None:
    """Events of every view, the jump into it included."""
    rng = np.random.default_rng([scene.seed, 2])
    pixels = Comparators(scene, rng)
    uv = scene.module.event_pixel_positions()
    end = float(scene.start_ns)
    for k, pose in enumerate(scene.poses):
        log_light = [np.log(light) for light in apertured(scene, pose, uv)]
        begin, end = end, end + (scene.view_s + (scene.gap_s if k < len(scene.poses) - 1 else 0.0)) * 1e9
        parts = [random_events(scene, rng, begin, end)]
        if k == 0:
            pixels.step(begin, log_light[1])
        for t_ns, state in flips(scene, begin, end) if scene.blinking else [(begin, 0)]:
            parts.append(pixels.step(t_ns, log_light[state]))
        events = np.concatenate(parts)
        events = events[np.lexsort(events.T[::-1])]
        events = events[events[:, 0] < end]
        writer.append_events(
            events[:, 0].astype(np.int64),
            events[:, 1].astype(np.uint16),
            events[:, 2].astype(np.uint16),
            events[:, 3].astype(np.uint8),
        )


def record(scene: Scene, path) -> None:
    """Write the recording, nominal module included and truth left out."""
    if not scene.quantise:
        # Frames are written in 1/256 DN, and the module's levels with them.
        mode = scene.module.frame_mode
        scaled = mode.model_copy(update={"black_dn": mode.black_dn * 256.0, "white_dn": 65535.0})
        nominal = nominal_of(scene.module).model_copy(update={"frame_mode": scaled})
    else:
        nominal = nominal_of(scene.module)
    with RecordingWriter(path, nominal) as writer:
        record_events(scene, writer)
        record_frames(scene, writer)


def opened(scene: Scene, folder, name: str) -> Recording:
    """Record a scene into a folder and open it."""
    path = folder / f"{name}.h5"
    record(scene, path)
    return Recording.open(path)

"""A board recorder for tests, independent of the package's light model and of its synthesis.

Light is sampled on a fine grid (squares are looked up, not integrated in closed form), blurred by a Gaussian and
averaged over boxes; event pixels are ideal comparators with mismatched thresholds and noise, run over many blink
cycles, so that counts are quantised and show hysteresis.
"""

from dataclasses import dataclass

import numpy as np
from scipy.interpolate import RectBivariateSpline
from scipy.ndimage import gaussian_filter, map_coordinates, uniform_filter

from hybridtrack.calibration.view_data import ViewImages
from hybridtrack.geometry import PerspectiveLens, se3, so3
from hybridtrack.module import Cluster, ColourArray, EventGrid, FrameMode, HybridModule, Target

FINE = 3  # samples a colour pixel along each axis


@dataclass(frozen=True)
class Layout:
    """A small die: colour array, cluster, mirroring, clear site, centroid and frame mode."""

    width: int = 640
    height: int = 400
    cluster: tuple[int, int] = (4, 4)
    clear_site: tuple[int, int] = (2, 1)
    centroid: tuple[float, float] = (0.0, 0.0)
    mirror: tuple[bool, bool] = (False, False)
    binning: int = 2
    crop: tuple[int, int] = (0, 0)
    frame: tuple[int, int] | None = None
    clear_in_frame: str = "included"

    def module(self, known: bool = True) -> HybridModule:
        """The module as a data sheet gives it; `known` False: mirroring and clear site wrong."""
        size = self.frame or (self.width // self.binning, self.height // self.binning)
        site = self.clear_site if known else (0, 0)
        mirror = self.mirror if known else (not self.mirror[0], self.mirror[1])
        return HybridModule(
            colour_array=ColourArray(width=self.width, height=self.height),
            cluster=Cluster(width=self.cluster[0], height=self.cluster[1], clear_site=site),
            event_grid=EventGrid(width=self.width // self.cluster[0], height=self.height // self.cluster[1],
                                 mirror_x=mirror[0], mirror_y=mirror[1]),
            frame_mode=FrameMode(width=size[0], height=size[1], binning=self.binning, crop=self.crop,
                                 clear_in_frame=self.clear_in_frame),
        )  # fmt: skip

    def event_positions(self) -> np.ndarray:
        """True colour position (rows, columns, 2) of event pixels."""
        columns, rows = self.width // self.cluster[0], self.height // self.cluster[1]
        x, y = np.meshgrid(np.arange(columns), np.arange(rows))
        x = columns - 1 - x if self.mirror[0] else x
        y = rows - 1 - y if self.mirror[1] else y
        u = self.cluster[0] * x + self.clear_site[0] + self.centroid[0]
        v = self.cluster[1] * y + self.clear_site[1] + self.centroid[1]
        return np.stack([u, v], axis=-1)


@dataclass(frozen=True)
class Scene:
    """What the camera is pointed at: target, light levels and blur."""

    target: Target
    lens: PerspectiveLens
    bright_dn: float = 150.0
    dark_dn: float = 12.0
    surround_dn: float = 30.0
    blur_px: float = 0.8
    read_noise_dn: float = 0.3
    gain_dn: float = 0.02  # shot variance per DN of the averaged picture
    threshold: float = 0.2
    mismatch: float = 0.04
    flip_noise: float = 0.03
    hot_share: float = 0.001
    cycles: int = 30
    vignetting: float = 0.25


def random_pose(
    rng: np.random.Generator, lens: PerspectiveLens, target: Target, tilt_deg: float, fill: float, offset: float = 0.18
) -> np.ndarray:
    """camera_from_board with any roll and a random tilt; `fill`: board width over picture width."""
    extent = np.array([target.columns, target.rows]) * target.square_xy_m
    axis = rng.normal(size=2)
    axis /= np.linalg.norm(axis)
    tilt, roll = np.array([*axis * np.radians(tilt_deg), 0.0]), np.array([0.0, 0.0, rng.uniform(-np.pi, np.pi)])
    R = so3.exp(tilt) @ so3.exp(roll)
    z = lens.fx * extent[0] / (fill * 2.0 * lens.cx)
    centre = np.array([*rng.uniform(-offset, offset, 2) * 2.0 * np.array([lens.cx, lens.cy]) / lens.fx * z, z])
    return se3.compose(R, centre - R @ np.array([extent[0] / 2.0, extent[1] / 2.0, 0.0]))


def board_coordinates(lens: PerspectiveLens, pose: np.ndarray, uv: np.ndarray) -> np.ndarray:
    """Board coordinates (..., 2) m of colour positions."""
    d = lens.unproject(uv)
    R, t = pose[:3, :3], pose[:3, 3]
    s = (R[:, 2] @ t) / (d @ R[:, 2])
    return ((s[..., None] * d - t) @ R)[..., :2]


@dataclass(frozen=True)
class FineBoard:
    """Where each fine sample looks: weights over the four squares at its nearest crossing, sets, and shading."""

    column: np.ndarray
    row: np.ndarray
    share_x: np.ndarray
    share_y: np.ndarray
    shading: np.ndarray

    def light(self, values: np.ndarray, surround: float) -> np.ndarray:
        """Sharp light for the squares' `values` (R, C), each sample averaging its own small extent."""
        table = np.pad(values, 1, constant_values=surround)
        column = np.clip(self.column, 0, values.shape[1])
        row = np.clip(self.row, 0, values.shape[0])
        x, y = self.share_x, self.share_y
        top = (1 - x) * table[row, column] + x * table[row, column + 1]
        bottom = (1 - x) * table[row + 1, column] + x * table[row + 1, column + 1]
        return ((1 - y) * top + y * bottom) * self.shading


def fine_board(scene: Scene, layout: Layout, pose: np.ndarray, pad: int) -> FineBoard:
    """Look up every sample of the fine grid, `pad` colour px beyond the array."""
    coarse_u, coarse_v = np.arange(-pad, layout.width + pad), np.arange(-pad, layout.height + pad)
    grid = np.stack(np.meshgrid(coarse_u, coarse_v), axis=-1).astype(float)
    board = board_coordinates(scene.lens, pose, grid)
    offsets = (np.arange(FINE) + 0.5) / FINE - 0.5
    vv = (np.arange(len(coarse_v))[:, None] + offsets).ravel()
    uu = (np.arange(len(coarse_u))[:, None] + offsets).ravel()
    index, share = [], []
    counts = (scene.target.columns, scene.target.rows)
    for k, (size, count) in enumerate(zip(scene.target.square_xy_m, counts, strict=True)):
        smooth = RectBivariateSpline(np.arange(len(coarse_v)), np.arange(len(coarse_u)), board[..., k], kx=3, ky=3)
        fine = smooth(vv, uu)
        extent = sum(np.abs(np.gradient(fine, axis=axis)) for axis in (0, 1))
        edge = np.clip(np.round(fine / size), 0, count)
        index.append(edge.astype(int))
        share.append(np.clip((fine - edge * size) / np.maximum(extent, 1e-12) + 0.5, 0.0, 1.0))
    r2 = ((uu - pad - layout.width / 2) ** 2 + ((vv - pad - layout.height / 2) ** 2)[:, None]) / (layout.width / 2) ** 2
    return FineBoard(index[0], index[1], share[0], share[1], 1.0 - scene.vignetting * r2 / 2.0)


def state_light(scene: Scene, board: FineBoard, bright: tuple[bool, bool]) -> np.ndarray:
    """Sharp light on the fine grid. `bright`: whether sets A and B are."""
    target = scene.target
    parity = np.add.outer(np.arange(target.rows), np.arange(target.columns)) % 2 == 0
    lit = ((parity & bright[0]) | (~parity & bright[1])) & (target.square_sets() != 0)
    return board.light(np.where(lit, scene.bright_dn, scene.dark_dn), scene.surround_dn)


def _frame(layout: Layout, per_pixel: np.ndarray) -> np.ndarray:
    """Bin colour pixels (height, width) to a frame, clear sites handled as the layout says."""
    module = layout.module()
    mode = module.frame_mode
    u = mode.crop[0] + np.arange(mode.width * mode.binning)
    v = mode.crop[1] + np.arange(mode.height * mode.binning)
    picture = per_pixel[np.ix_(v, u)]
    (cu, cv), (site_u, site_v) = layout.cluster, layout.clear_site
    clear = (v % cv == site_v)[:, None] & (u % cu == site_u)
    used = np.ones_like(picture)
    if layout.clear_in_frame == "omitted" and mode.binning > 1:
        used = 1.0 - clear
    shape = (mode.height, mode.binning, mode.width, mode.binning)
    return (picture * used).reshape(shape).sum((1, 3)) / used.reshape(shape).sum((1, 3))


def _comparator_counts(
    rng: np.random.Generator, high: np.ndarray, low: np.ndarray, scene: Scene, thresholds: tuple[np.ndarray, np.ndarray]
) -> list[np.ndarray]:
    """Mean ON at the flip to `high`, OFF there, ON and OFF at the flip to `low`, after some cycles to settle."""
    reference = low + rng.uniform(-0.1, 0.1, low.shape)
    sums = [np.zeros(low.shape) for _ in range(4)]
    for cycle in range(scene.cycles + 4):
        for k, level in enumerate((high, low)):
            step = level + rng.normal(size=low.shape) * scene.flip_noise - reference
            on = np.where(step > 0, np.floor(step / thresholds[0]), 0.0)
            off = np.where(step < 0, np.floor(-step / thresholds[1]), 0.0)
            reference = reference + on * thresholds[0] - off * thresholds[1]
            if cycle >= 4:
                sums[2 * k] += on
                sums[2 * k + 1] += off
    return [s / scene.cycles for s in sums]


@dataclass
class Pixels:
    """Event pixels of one module: thresholds fixed over its views."""

    on: np.ndarray
    off: np.ndarray
    hot: np.ndarray

    @classmethod
    def draw(cls, rng: np.random.Generator, scene: Scene, shape: tuple[int, int]) -> "Pixels":
        """Draw thresholds and hot pixels."""
        on = scene.threshold * (1.0 + scene.mismatch * rng.normal(size=shape))
        off = scene.threshold * 1.1 * (1.0 + scene.mismatch * rng.normal(size=shape))
        return cls(on, off, rng.random(shape) < scene.hot_share)


def render_view(
    rng: np.random.Generator,
    scene: Scene,
    layout: Layout,
    pixels: Pixels,
    pose: np.ndarray,
    index: int,
    events: bool = True,
) -> ViewImages:
    """Record one view."""
    pad = 4
    states = ((True, False), (False, scene.target.is_counterphase))
    positions = layout.event_positions()
    frames, sigmas, logs = [], [], []
    board = fine_board(scene, layout, pose, pad)
    for bright in states:
        fine = gaussian_filter(state_light(scene, board, bright), scene.blur_px * FINE, truncate=5.0)
        per_pixel = fine.reshape(layout.height + 2 * pad, FINE, layout.width + 2 * pad, FINE).mean((1, 3))
        frame = _frame(layout, per_pixel[pad:-pad, pad:-pad])
        sigma = np.sqrt(scene.read_noise_dn**2 + scene.gain_dn * frame)
        frames.append(frame + rng.normal(size=frame.shape) * sigma)
        sigmas.append(sigma)
        if events:
            box = uniform_filter(fine, FINE)
            # An even box is centred half a sample before its pixel.
            at = [(positions[..., k] + pad + 0.5) * FINE - 0.5 + (0.5 if FINE % 2 == 0 else 0.0) for k in (1, 0)]
            logs.append(np.log(map_coordinates(box, at, order=1)))
    shape = positions.shape[:2]
    if events:
        on_h, off_h, on_l, off_l = _comparator_counts(rng, logs[0], logs[1], scene, (pixels.on, pixels.off))
        on_h = on_h + pixels.hot * 3.0
        amplitude = 0.5 * (on_h - off_h + off_l - on_l)
        on_count, off_count = on_h + on_l, off_h + off_l
    else:
        amplitude = on_count = off_count = np.zeros(shape)
    noise = 0.3 / np.sqrt(scene.cycles)
    return ViewImages(index, 0, 500_000_000, np.arange(3), frames[0], frames[1], sigmas[0], sigmas[1], on_count,
                      off_count, amplitude, np.abs(amplitude) / noise, scene.cycles)  # fmt: skip

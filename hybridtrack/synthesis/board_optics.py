"""How a module's lens and pixels see a blinking board.

Every pixel's aperture, one colour pixel square, and the point spread together are taken as one Gaussian whose variance
is psf^2 + 1/12 px^2: a square's variance is 1/12 along every direction. For a point spread of 0.6 px the light at any
distance from an edge is within 0.2 % of the step of the exact convolution. Geometry is exact: each pixel's own ray
through the true lens, met with the board's plane.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.errors import OptionError
from hybridtrack.module import HybridModule, Target
from hybridtrack.synthesis import board_kernels as kernels
from hybridtrack.synthesis.board_kernels import picture_board

Array = np.ndarray
SMALLEST_SQUARE_PX = 8.0


@dataclass(frozen=True)
class BoardScene:
    """The board and what is round it: light of things that are not lit, in DN, and the lens's fall-off.

    `waves` (W, 4) are the background's pattern: amplitude, kx, ky (rad/m), phase. `square_m` is the true size.
    """

    target: Target
    square_m: tuple[float, float]
    dark_dn: float
    mount_dn: float
    background_dn: float
    waves: Array
    psf_px: float = 0.6
    vignetting: float = 0.1

    @property
    def classes(self) -> Array:
        """The kernels' class of each square (rows, columns)."""
        sets = self.target.square_sets()
        return np.where(sets == 1, kernels.SET_A, np.where(sets == -1, kernels.SET_B, kernels.DARK)).astype(np.int64)

    @property
    def sweep(self) -> Array:
        """Coefficients (3,) of 1, x, y in the part of its way that a screen's sweep has gone at (x, y)."""
        width, height = self.target.columns * self.square_m[0], self.target.rows * self.square_m[1]
        along = {
            "down": (0, 0, 1 / height),
            "up": (1, 0, -1 / height),
            "right": (0, 1 / width, 0),
            "left": (1, -1 / width, 0),
        }
        return np.array(along[self.target.scan_direction], float)


def background_waves(contrast: float, random: np.random.Generator, count: int = 3) -> Array:
    """A smooth random pattern of RMS `contrast`: (count, 4), wavelengths of 5 to 50 cm."""
    wavelength = 0.05 * 10 ** random.uniform(0, 1, count)
    direction, phase = random.uniform(0, 2 * np.pi, (2, count))
    k = 2 * np.pi / wavelength
    amplitude = np.full(count, contrast * np.sqrt(2.0 / count))
    return np.stack([amplitude, k * np.cos(direction), k * np.sin(direction), phase], axis=1)


class BoardOptics:
    """Renders pictures of a board at a grid of positions on the colour array."""

    def __init__(
        self, module: HybridModule, scene: BoardScene, positions: Array, px_per_step: Array, aperture_px: float = 1.0
    ) -> None:
        """`positions` (rows, columns, 2) colour px; `px_per_step` (2, 2): change of position per column and row;
        `aperture_px` is the side of each pixel's square."""
        self.scene, self.shape = scene, positions.shape[:2]
        self.sigma_px = float(np.hypot(scene.psf_px, aperture_px / np.sqrt(12.0)))
        rays = module.lens_model().unproject(positions, allow_outside=True)
        by_row, by_column = np.gradient(rays, axis=(0, 1), edge_order=2)
        inverse = np.linalg.inv(px_per_step)  # ray_column = ray_u M[0, 0] + ray_v M[1, 0], and so on
        self._rays = np.ascontiguousarray(rays.reshape(-1, 3))
        self._rays_u = np.ascontiguousarray((by_column * inverse[0, 0] + by_row * inverse[1, 0]).reshape(-1, 3))
        self._rays_v = np.ascontiguousarray((by_column * inverse[0, 1] + by_row * inverse[1, 1]).reshape(-1, 3))
        array = module.colour_array
        offset = positions - np.array([(array.width - 1) / 2, (array.height - 1) / 2])
        gain = 1.0 - scene.vignetting * np.sum((offset / array.half_diagonal_px) ** 2, axis=-1)
        self._gain = np.ascontiguousarray(np.maximum(gain, 0.05).ravel())

    @classmethod
    def of_event_pixels(cls, module: HybridModule, scene: BoardScene) -> "BoardOptics":
        """At the module's event pixels, centroid and radial term included."""
        mapped = module.colour_from_event
        if mapped is None:
            raise OptionError(f"module '{module.name}': the true event map is required here, and is null")
        return cls(module, scene, module.event_pixel_positions(), np.asarray(mapped.matrix)[:, :2])

    @classmethod
    def of_colour_pixels(cls, module: HybridModule, scene: BoardScene) -> "BoardOptics":
        """At every pixel of the colour array."""
        columns, rows = np.meshgrid(np.arange(module.colour_array.width), np.arange(module.colour_array.height))
        return cls(module, scene, np.stack([columns, rows], axis=-1).astype(float), np.eye(2))

    @classmethod
    def of_frame_pixels(cls, module: HybridModule, scene: BoardScene) -> "BoardOptics":
        """At every frame pixel, its whole bin as one aperture: quick, and good enough where the picture is blurred."""
        binning = module.frame_mode.binning
        return cls(module, scene, module.frame_pixel_centres(), binning * np.eye(2), float(binning))

    def pictures(self, world_from_camera: Array, pose_rows: Array | None = None) -> Array:
        """Pictures (PICTURES, rows, columns), float32, of the board seen from poses (P, 4, 4).

        `pose_rows` (rows,) names each row's pose; by default all rows see the first.
        """
        scene = self.scene
        rows, columns = self.shape
        which = np.zeros(rows, np.int64) if pose_rows is None else np.asarray(pose_rows, np.int64)
        levels = np.array([scene.dark_dn] * 3 + [scene.mount_dn, scene.background_dn])
        out = np.empty((kernels.PICTURES, rows * columns), np.float32)
        poses = np.ascontiguousarray(np.asarray(world_from_camera, float).reshape(-1, 4, 4)[:, :3])
        picture_board(
            self._rays,
            self._rays_u,
            self._rays_v,
            self._gain,
            poses,
            which,
            columns,
            np.array(scene.square_m),
            scene.classes,
            self.sigma_px,
            levels,
            scene.waves,
            scene.sweep,
            out,
        )
        return out.reshape(kernels.PICTURES, rows, columns)

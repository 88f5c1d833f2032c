"""A small scene that the package's own synthesis has no part in: a photograph sliding before an ideal module.

Light is a photograph of scikit-image, in colour-array px, moved by `motion(t_s) -> (2,)` px and turned and scaled by
`shape(t_s) -> (2, 2)` about the array's middle. Frames average their bins over each row's exposure; event pixels are
ideal comparators behind a one-pixel aperture, with a given mismatch of thresholds.
"""

from collections.abc import Callable
from dataclasses import dataclass

import cv2
import numba
import numpy as np
from skimage import data

from hybridtrack.module import ColourFromEvent, Contrast, HybridModule, Timing, nominal_matrix
from hybridtrack.recording import Events

Array = np.ndarray
WHITE_LIGHT = 1.25  # light at the white level, the photograph's white being 1


def small_module(pitch: int = 4, binning: int = 2, mirror_x: bool = False, **changes: object) -> HybridModule:
    """A calibrated module of 480 x 320 colour px."""
    width, height = 480, 320
    module = HybridModule.model_validate(
        {
            "name": "small",
            "colour_array": {"width": width, "height": height},
            "cluster": {"width": pitch, "height": pitch, "clear_site": [pitch // 2, pitch // 2]},
            "event_grid": {"width": width // pitch, "height": height // pitch, "mirror_x": mirror_x},
            "frame_mode": {"width": width // binning, "height": height // binning, "binning": binning},
        }
    )
    matrix = nominal_matrix(module.cluster, module.event_grid)
    update = {
        "colour_from_event": ColourFromEvent(matrix=tuple(map(tuple, matrix.tolist()))),
        "timing": Timing(frame_offset_ns=0.0, line_time_ns=15_000.0, exposure_correction_ns=0.0),
        "contrast": Contrast(on_threshold=0.2, off_threshold=0.22),
    }
    return module.model_copy(update=update | changes)


def photograph(name: str = "brick", sigma_px: float = 1.2) -> Array:
    """Linear light (H, W), tiled to 1536 px, blurred as by a lens."""
    picture = getattr(data, name)()
    grey = picture if picture.ndim == 2 else picture.mean(axis=2)
    light = 0.04 + 0.96 * (grey.astype(np.float64) / 255.0) ** 1.5
    light = cv2.resize(light, (768, 768), interpolation=cv2.INTER_CUBIC)
    light = np.tile(np.concatenate([light, light[::-1]]), 2)
    light[:, 768:] = light[:, 767::-1][:, :768]
    return cv2.GaussianBlur(np.clip(light, 0.02, 1.0), (0, 0), sigma_px).astype(np.float32)


@numba.njit(cache=True)
def compare(before: Array, after: Array, memory: Array, on: Array, off: Array, t0: int, dt: int, out: Array) -> int:
    """Ideal comparators between two samples of log light (rows, columns); events to `out` (N, 4) as t, x, y, on."""
    count = 0
    for r in range(before.shape[0]):
        for c in range(before.shape[1]):
            rise = after[r, c] - before[r, c]
            while after[r, c] - memory[r, c] >= on[r, c] or memory[r, c] - after[r, c] >= off[r, c]:
                up = after[r, c] > memory[r, c]
                memory[r, c] += on[r, c] if up else -off[r, c]
                share = min(max((memory[r, c] - before[r, c]) / rise if rise != 0.0 else 1.0, 0.0), 1.0)
                if count < len(out):
                    out[count, 0], out[count, 1], out[count, 2], out[count, 3] = t0 + share * dt, c, r, up
                    count += 1
    return count


@dataclass
class PlanarScene:
    """The moving photograph and the module that looks at it."""

    module: HybridModule
    motion: Callable[[float], Array]
    shape: Callable[[float], Array] = lambda t: np.eye(2)
    light: Callable[[float], float] = lambda t: 1.0
    texture: Array | None = None
    mismatch: float = 0.03
    read_noise_dn: float = 0.6
    seed: int = 0

    def __post_init__(self) -> None:
        self.texture = photograph() if self.texture is None else self.texture
        self._rng = np.random.default_rng(self.seed)
        shape = self.module.event_grid.shape
        contrast = self.module.contrast
        self._on = contrast.on_threshold * (1 + self.mismatch * self._rng.standard_normal(shape))
        self._off = contrast.off_threshold * (1 + self.mismatch * self._rng.standard_normal(shape))
        self._positions = self.module.event_pixel_positions()
        self._middle = 0.5 * np.array([self.module.colour_array.width, self.module.colour_array.height])
        start = self._log_light(0.0)
        self._memory = start + self._rng.uniform(-0.5, 0.5, shape) * (self._on + self._off)

    def _sample(self, uv: Array, t_s: float | Array) -> Array:
        """Light at colour positions (..., 2) at one instant."""
        where = (uv - self._middle - self.motion(t_s)) @ np.linalg.inv(self.shape(t_s)).T + 768.0
        mapped = where.astype(np.float32)
        return cv2.remap(
            self.texture, mapped[..., 0], mapped[..., 1], cv2.INTER_CUBIC, borderMode=cv2.BORDER_WRAP
        ) * self.light(t_s)

    def _log_light(self, t_s: float) -> Array:
        return np.log(np.maximum(self._sample(self._positions, t_s), 0.004)).astype(np.float64)

    def carried(self, uv: Array, from_ns: Array, to_ns: Array) -> Array:
        """Position (N, 2) at `to_ns` (N,) of what of the photograph was at `uv` (N, 2) at `from_ns` (N,)."""
        moved = np.empty((len(to_ns), 2))
        for k, (place, t0, t1) in enumerate(zip(uv, from_ns * 1e-9, to_ns * 1e-9, strict=True)):
            on_photograph = np.linalg.inv(self.shape(t0)) @ (place - self._middle - self.motion(t0))
            moved[k] = self.shape(t1) @ on_photograph + self._middle + self.motion(t1)
        return moved

    def events(self, t0_ns: int, t1_ns: int, step_ns: int = 100_000) -> Events:
        """Events of an interval; call in order of time."""
        parts, room = [], np.zeros((self._on.size * 4, 4), np.int64)
        before = self._log_light(t0_ns * 1e-9)
        for t in range(t0_ns, t1_ns, step_ns):
            after = self._log_light((t + step_ns) * 1e-9)
            count = compare(before, after, self._memory, self._on, self._off, t, step_ns, room)
            parts.append(room[:count].copy())
            before = after
        every = np.concatenate(parts)
        every = every[np.argsort(every[:, 0], kind="stable")]
        return Events(
            every[:, 0], *(every[:, k].astype(kind) for k, kind in ((1, np.uint16), (2, np.uint16), (3, np.uint8)))
        )

    def frame(self, t_start_ns: int, exposure_ns: int, parts: int = 16) -> Array:
        """One frame, blurred over the exposure, rows one after the other."""
        mode, timing = self.module.frame_mode, self.module.timing
        height, width, b = mode.height, mode.width, mode.binning
        out = np.zeros((height, width), np.float64)
        u, v = np.meshgrid(mode.crop[0] + np.arange(width * b), mode.crop[1] + np.arange(height * b))
        uv = np.stack([u, v], axis=-1).astype(float)
        starts = timing.exposure_start_ns(t_start_ns, mode.read_order(np.arange(height)))
        block = 8  # rows that share an instant: their delay is small against the movement of a pixel
        for first in range(0, height, block):
            rows = slice(first * b, (first + block) * b)
            middle = starts[first : first + block].mean()
            for k in range(parts):
                t_s = (middle + (k + 0.5) / parts * exposure_ns) * 1e-9
                seen = self._sample(uv[rows], t_s)
                out[first : first + block] += seen.reshape(-1, b, width, b).mean(axis=(1, 3)) / parts
        scale = (mode.white_dn - mode.black_dn) / WHITE_LIGHT
        electrons = 20.0  # per DN
        dn = self._rng.poisson(out * scale * electrons) / electrons + self.read_noise_dn * self._rng.standard_normal(
            out.shape
        )
        return np.clip(np.rint(dn + mode.black_dn), 0, 255).astype(np.uint8)

"""Frames from light: clear sites, binning or mosaic, then photon noise, read noise, response and quantisation.

Light is in linear DN above black at gain one: what a frame pixel shows after its exposure. A frame pixel of mean S
DN collects `electrons_per_dn` * S electrons, Poisson distributed, so that variance over mean is 1 / electrons_per_dn
in DN: the photon-transfer line (Janesick 2007).
"""

from dataclasses import dataclass, field

import numpy as np

from hybridtrack.errors import OptionError, ShapeError
from hybridtrack.module import Cluster, FrameMode, HybridModule, clear_in_bin
from hybridtrack.synthesis.sensor_kernels import add_noise

Array = np.ndarray
GAMMA = 2.2


@dataclass(frozen=True)
class SensorPhysics:
    """What the module file does not state about its frames.

    `electrons_per_dn` of a frame pixel, `read_noise_e` electrons RMS, `full_well_e`; `gain_spread` is the pixel to
    pixel spread of sensitivity (relative), `black_spread_dn` that of the black level. `channel_gain` is the
    sensitivity under each filter of a mosaic, W the clear pixel's.
    """

    electrons_per_dn: float = 30.0
    read_noise_e: float = 12.0
    full_well_e: float = float("inf")
    gain_spread: float = 0.0
    black_spread_dn: float = 0.0
    channel_gain: dict[str, float] = field(default_factory=lambda: {"R": 0.75, "G": 1.0, "B": 0.65, "W": 1.0})

    def __post_init__(self) -> None:
        """Refuse what no sensor has."""
        if not (self.electrons_per_dn > 0 and self.full_well_e > 0):
            raise OptionError(
                f"electrons_per_dn and full_well_e must be positive, got {self.electrons_per_dn} and {self.full_well_e}"
            )
        if min(self.read_noise_e, self.gain_spread, self.black_spread_dn) < 0:
            raise OptionError("read_noise_e, gain_spread and black_spread_dn must not be negative")


def mosaic_letters(mode: FrameMode, shape: tuple[int, int]) -> Array | None:
    """Filter letters (rows, columns) of a mosaic such as "RGGB" (2x2, row by row), or None for "none"."""
    if mode.mosaic == "none":
        return None
    side = round(len(mode.mosaic) ** 0.5)
    if side * side != len(mode.mosaic):
        raise OptionError(f"frame_mode.mosaic must be 'none' or a square such as 'RGGB', got {mode.mosaic!r}")
    tile = np.array(list(mode.mosaic)).reshape(side, side)
    return np.tile(tile, (-(-shape[0] // side), -(-shape[1] // side)))[: shape[0], : shape[1]]


def clear_sites(shape: tuple[int, int], cluster: Cluster) -> Array:
    """Mask (rows, columns) of the colour array's clear sites."""
    mask = np.zeros(shape, bool)
    if cluster.clear_site is not None:
        mask[cluster.clear_site[1] :: cluster.height, cluster.clear_site[0] :: cluster.width] = True
    return mask


def fill_clear_sites(light: Array, cluster: Cluster, same_filter: Array | None = None) -> Array:
    """Replace each clear site by the mean of its neighbours that are not clear.

    `light` (rows, columns) at the colour array's resolution. Neighbours are the four beside it, or, where
    `same_filter` (rows, columns) names filters, those of its own filter within two pixels, else the four.
    """
    rows, columns = light.shape
    clear = clear_sites(light.shape, cluster)
    v, u = np.nonzero(clear)
    near = [(-1, 0), (1, 0), (0, -1), (0, 1)]
    wide = [(dv, du) for dv in range(-2, 3) for du in range(-2, 3) if (dv, du) != (0, 0)]

    def mean_of(offsets: list[tuple[int, int]], same: Array | None) -> tuple[Array, Array]:
        total, count = np.zeros(len(v)), np.zeros(len(v))
        for dv, du in offsets:
            vn, un = v + dv, u + du
            inside = (vn >= 0) & (vn < rows) & (un >= 0) & (un < columns)
            vn, un = np.clip(vn, 0, rows - 1), np.clip(un, 0, columns - 1)
            use = inside & ~clear[vn, un]
            if same is not None:
                use &= same[vn, un] == same[v, u]
            total += np.where(use, light[vn, un], 0.0)
            count += use
        return total, count

    total, count = mean_of(near, None)
    if same_filter is not None:
        total_same, count_same = mean_of(wide, same_filter)
        total, count = np.where(count_same > 0, total_same, total), np.where(count_same > 0, count_same, count)
    filled = light.copy()
    filled[v, u] = np.where(count > 0, total / np.maximum(count, 1), light[v, u])
    return filled


def bin_mean(light: Array, mode: FrameMode, weight: Array | None = None) -> Array:
    """Mean (or weighted mean) of the colour pixels in each frame pixel's bin: (rows, columns) to `mode.shape`."""
    size = mode.binning
    u0, v0 = mode.crop
    height, width = mode.height * size, mode.width * size
    part = light[v0 : v0 + height, u0 : u0 + width]
    if part.shape != (height, width):
        raise ShapeError(f"Expected a colour array of at least {(v0 + height, u0 + width)}, got {light.shape}.")
    blocks = part.reshape(mode.height, size, mode.width, size)
    if weight is None:
        return blocks.mean(axis=(1, 3))
    weights = weight[v0 : v0 + height, u0 : u0 + width].reshape(mode.height, size, mode.width, size)
    return (blocks * weights).sum(axis=(1, 3)) / weights.sum(axis=(1, 3))


class FrameSensor:
    """Turns light into frames of one module. Same seed, same light, same frame numbers: same frames."""

    def __init__(self, module: HybridModule, physics: SensorPhysics | None = None, seed: int = 0) -> None:
        self.module, self.physics, self.seed = module, physics or SensorPhysics(), seed
        mode = module.frame_mode
        random = np.random.default_rng([seed, 2])
        self.dtype = np.uint8 if mode.white_dn <= 255 else np.uint16
        self._gain = 1.0 + self.physics.gain_spread * random.standard_normal(mode.shape)
        self._gain *= self._channel_gain()
        self._black = mode.black_dn + self.physics.black_spread_dn * random.standard_normal(mode.shape)

    def _channel_gain(self) -> Array:
        """Sensitivity of each frame pixel under its filter."""
        mode, gains = self.module.frame_mode, self.physics.channel_gain
        letters = mosaic_letters(mode, mode.shape)
        if letters is None:
            return np.ones(mode.shape)
        missing = sorted(set(mode.mosaic) - set(gains))
        if missing:
            raise OptionError(f"channel_gain must name every filter of the mosaic, and lacks {missing[0]!r}")
        gain = np.vectorize(gains.__getitem__, otypes=[float])(letters)
        if mode.clear_in_frame == "included" and mode.binning == 1:
            gain[clear_in_bin(mode, self.module.cluster)[0] > 0] = gains.get("W", 1.0)
        return gain

    def light_from_colour(self, light: Array) -> Array:
        """Mean light in each frame pixel from light at each colour pixel: clear sites, crop and binning.

        `light` (colour rows, colour columns) to (frame rows, frame columns). The order of the steps is linear, so
        that coverage pictures may be binned once and scaled later.
        """
        module, mode = self.module, self.module.frame_mode
        expected = (module.colour_array.height, module.colour_array.width)
        if light.shape != expected:
            raise ShapeError(f"Expected light of the colour array's shape {expected}, got {light.shape}.")
        if mode.clear_in_frame == "included":
            return bin_mean(light, mode)
        if mode.clear_in_frame == "filled" or mode.binning == 1:
            # A single clear pixel that is omitted leaves nothing, and can only be filled.
            letters = mosaic_letters(mode, light.shape) if mode.binning == 1 else None
            if letters is not None:
                letters = np.roll(letters, mode.crop[::-1], axis=(0, 1))
            return bin_mean(fill_clear_sites(light, module.cluster, letters), mode)
        weight = 1.0 - clear_sites(light.shape, module.cluster)
        empty = bin_mean(weight, mode) == 0
        if np.any(empty):
            raise OptionError("frame_mode: clear sites can't be omitted from bins that hold nothing else; use 'filled'")
        return bin_mean(light, mode, weight)

    def record(self, light: Array, number: int) -> Array:
        """One frame, uint8 or uint16 (rows, columns), from mean light (rows, columns) in linear DN above black.

        `number` picks the noise: the same number draws the same.
        """
        mode, physics = self.module.frame_mode, self.physics
        if light.shape != mode.shape:
            raise ShapeError(f"Expected light of the frame's shape {mode.shape}, got {light.shape}.")
        noisy = np.empty(mode.shape)
        stream = np.random.default_rng([self.seed, 3, number]).integers(0, 2**63)
        add_noise(
            np.ascontiguousarray(light, dtype=float),
            self._gain,
            physics.electrons_per_dn,
            physics.read_noise_e,
            min(physics.full_well_e, 1e18),
            np.uint64(stream),
            noisy,
        )
        if mode.response == "gamma":
            span = mode.white_dn - mode.black_dn
            noisy = span * np.clip(noisy / span, 0.0, None) ** (1.0 / GAMMA)
        top = min(mode.white_dn, float(np.iinfo(self.dtype).max))
        return np.clip(np.rint(noisy + self._black), 0.0, top).astype(self.dtype)

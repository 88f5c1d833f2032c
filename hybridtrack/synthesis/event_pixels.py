"""Event pixels: light at each event pixel in, raw events out.

Logarithmic photoreceptor with a light-dependent first-order low pass, ON and OFF comparators with pixel-to-pixel
mismatch, refractory time, noise, background activity, hot and dead pixels (Lichtsteiner, Posch and Delbruck 2008).
The comparators' noise is one sample a decision: drawn anew after every event, and for ON or OFF when log light turns
up or down, so that a single step of size S fires a settled pixel of threshold theta with probability
Phi((S - theta) / noise_width), exactly.

Two models of what a fired pixel remembers: `steps` moves the reference by one threshold an event and forgets
nothing; `resets` ties the reference to the photoreceptor until the refractory time ends, and loses what happened then.
"""

from dataclasses import dataclass
from typing import Literal

import numpy as np

from hybridtrack.errors import OptionError, ShapeError
from hybridtrack.module import HybridModule
from hybridtrack.recording import Events
from hybridtrack.synthesis import kernels
from hybridtrack.synthesis.kernels import expose_pixels, unpack

Array = np.ndarray
CHUNK_PIXELS = 256


@dataclass(frozen=True)
class PixelPhysics:
    """What the module file does not state about its event pixels. Light is in DN-equivalents, times in ns.

    The low pass has tau = `tau_ns` at `reference_light_dn`, inversely proportional to light and held between
    `tau_min_ns` and `tau_max_ns`. `delay_ns` is the constant delay of comparator and bus. `background_hz` is the
    median rate of noise events a pixel, spread log-normally by `background_spread`; hot pixels fire at `hot_hz`.
    `leak_hz` is the rate of ON events that leakage alone would cause. `dark_light_dn` is dark current as light.
    """

    tau_ns: float = 150e3
    reference_light_dn: float = 120.0
    tau_min_ns: float = 5e3
    tau_max_ns: float = 20e6
    delay_ns: float = 20e3
    background_hz: float = 0.05
    background_spread: float = 0.5
    hot_hz: float = 200.0
    leak_hz: float = 0.0
    dark_light_dn: float = 0.0
    reference: Literal["steps", "resets"] = "steps"

    def __post_init__(self) -> None:
        """Refuse what no pixel has."""
        positive = {"tau_ns": self.tau_ns, "reference_light_dn": self.reference_light_dn, "tau_min_ns": self.tau_min_ns}
        for name, value in positive.items():
            if not value > 0:
                raise OptionError(f"{name} must be positive, got {value}")
        for name in ("delay_ns", "background_hz", "background_spread", "hot_hz", "leak_hz", "dark_light_dn"):
            if not getattr(self, name) >= 0:
                raise OptionError(f"{name} must not be negative, got {getattr(self, name)}")
        if self.tau_max_ns < self.tau_min_ns:
            raise OptionError(f"tau_max_ns must not be below tau_min_ns, got {self.tau_max_ns}")
        if self.reference not in ("steps", "resets"):
            raise OptionError(f"reference must be 'steps' or 'resets', got {self.reference!r}")


def mismatched(median: float, spread: float, shape: tuple[int, int], random: np.random.Generator) -> Array:
    """Thresholds (rows, columns) of a normal spread about `median`, none under three tenths of it."""
    return np.maximum(median + spread * random.standard_normal(shape), 0.3 * median)


class EventPixels:
    """The event pixels of one module, in the order of the grid's rows. Same seed, same light: same events.

    `on_threshold` and `off_threshold` (rows, columns) are the true maps, natural log units; `background_hz`
    (rows, columns) the true rates, hot pixels included.
    """

    def __init__(self, module: HybridModule, physics: PixelPhysics | None = None, seed: int = 0) -> None:
        contrast = module.contrast
        if contrast is None or contrast.on_threshold is None or contrast.off_threshold is None:
            raise OptionError(f"module '{module.name}': contrast.on_threshold and off_threshold are required, got null")
        physics = physics or PixelPhysics()
        shape = module.event_grid.shape
        random = np.random.default_rng([seed, 1])
        self.module, self.physics, self.shape = module, physics, shape
        self.on_threshold = mismatched(contrast.on_threshold, contrast.on_spread or 0.0, shape, random)
        self.off_threshold = mismatched(contrast.off_threshold, contrast.off_spread or 0.0, shape, random)
        self.background_hz = physics.background_hz * np.exp(physics.background_spread * random.standard_normal(shape))
        self._alive = np.ones(shape[0] * shape[1], np.bool_)
        if module.defects is not None:
            for x, y in module.defects.hot:
                self.background_hz[y, x] = physics.hot_hz
            for x, y in module.defects.dead:
                self._alive[y * shape[1] + x] = False
        leak = physics.leak_hz * self.on_threshold
        columns = (self.on_threshold, self.off_threshold, self.background_hz * 1e-9, leak * 1e-9)
        self._pixel = np.stack([column.ravel() for column in columns], axis=1)
        self._constants = np.zeros(kernels.CONSTANTS_SIZE)
        self._constants[kernels.TAU_REFERENCE], self._constants[kernels.LIGHT_REFERENCE] = (
            physics.tau_ns,
            physics.reference_light_dn,
        )
        self._constants[kernels.TAU_MIN], self._constants[kernels.TAU_MAX] = physics.tau_min_ns, physics.tau_max_ns
        self._constants[kernels.REFRACTORY] = contrast.refractory_ns or 0.0
        self._constants[kernels.NOISE_WIDTH] = contrast.noise_width or 0.0
        self._constants[kernels.DELAY], self._constants[kernels.DARK_LIGHT] = physics.delay_ns, physics.dark_light_dn
        self._constants[kernels.RESETS] = float(physics.reference == "resets")
        self._state = np.zeros((len(self._alive), kernels.STATE_SIZE))
        self._random = random.integers(0, 2**63, len(self._alive)).astype(np.uint64)
        self._last_ns: float | None = None
        self._capacity = 4 * CHUNK_PIXELS
        # A key holds pixel and polarity in its low bits, the stamp above them: it sorts by time.
        self._shift = np.uint64(max(1, int(len(self._alive) - 1).bit_length()) + 1)

    @property
    def count(self) -> int:
        """Number of event pixels."""
        return len(self._alive)

    @property
    def now_ns(self) -> float:
        """Time of the last sample, or minus infinity before the first."""
        return -np.inf if self._last_ns is None else self._last_ns

    def restart(self) -> None:
        """Let the next call of `expose` settle every pixel at its first sample, as after a gap in the recording."""
        self._last_ns = None

    def expose(self, t_ns: Array, light: Array) -> Events:
        """Carry every pixel on through samples of light, linear between them and on from the last call's last sample.

        `t_ns` (T,) rising, in ns; `light` (T, N) or (T, rows, columns) in DN-equivalents, N = rows * columns, best
        float32. The first call settles the pixels at its first sample. Returns raw events in order of time, before any
        readout. Raises ShapeError.
        """
        t = np.ascontiguousarray(t_ns, dtype=float)
        light = np.asarray(light)
        if light.shape not in ((len(t), self.count), (len(t), *self.shape)):
            raise ShapeError(f"Expected light of shape ({len(t)}, {self.count}), got {light.shape}.")
        if len(t) == 0:
            return Events.empty()
        light = np.ascontiguousarray(light.reshape(len(t), self.count), dtype=np.float32)
        first = t[0] if self._last_ns is None else self._last_ns
        if t[0] < first or np.any(np.diff(t) < 0):
            raise ShapeError("Expected times that do not run backwards, got a step back.")
        base = int(np.floor(first)) - 1
        keys = self._run(t, light, base)
        self._last_ns = float(t[-1])
        return self._sorted_events(keys, base)

    def _run(self, t: Array, light: Array, base: int) -> Array:
        """Run the kernel, again for chunks whose buffer was too small; return unsorted keys."""
        chunks = -(-self.count // CHUNK_PIXELS)
        todo, counts = np.ones(chunks, np.bool_), np.zeros(chunks, np.int64)
        parts = []
        while np.any(todo):
            keys = np.empty((chunks, self._capacity), np.uint64)
            expose_pixels(
                t,
                light,
                self._last_ns is None,
                self._state,
                self._random,
                self._pixel,
                self._alive,
                self._constants,
                CHUNK_PIXELS,
                todo,
                keys,
                counts,
                base,
                self._shift,
            )
            fits = todo & (counts <= self._capacity)
            parts += [keys[chunk, : counts[chunk]] for chunk in np.flatnonzero(fits)]
            todo &= ~fits
            self._capacity = max(self._capacity, int(1.25 * counts.max()))
        return np.concatenate(parts)

    def _sorted_events(self, keys: Array, base: int) -> Events:
        keys.sort()
        size = len(keys)
        events = Events(
            np.empty(size, np.int64), np.empty(size, np.uint16), np.empty(size, np.uint16), np.empty(size, np.uint8)
        )
        unpack(keys, base, self._shift, self.shape[1], events.t, events.x, events.y, events.on)
        return events

"""The light of a blinking target over time: two pulse trains of one clock, with exact integrals.

Set A turns bright at `epoch_ns + n * period`, set B (on a counterphase target) when A turns dark. Rise and fall are
linear. A target with `levels` steps through them, `cycles_per_level` cycles each, over and over.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from hybridtrack.errors import OptionError
from hybridtrack.synthesis import board_kernels as kernels

Array = np.ndarray


@dataclass(frozen=True)
class Blink:
    """`blink_hz` is the true rate. `steps_dn` are the steps of light, in DN, that cycle after cycle go through, each
    for `cycles_per_level` cycles. `span_ns` is the time for which cycles are laid out.
    """

    blink_hz: float
    duty: float
    epoch_ns: float
    steps_dn: tuple[float, ...]
    counterphase: bool = False
    rise_ns: float = 1000.0
    fall_ns: float = 1000.0
    cycles_per_level: int = 4
    span_ns: tuple[float, float] = (0.0, 60e9)

    def __post_init__(self) -> None:
        """Refuse pulses that run into each other."""
        if not (self.blink_hz > 0 and 0 < self.duty < 1 and self.steps_dn):
            raise OptionError(f"blink_hz must be positive and duty in 0..1, got {self.blink_hz} and {self.duty}")
        shortest = min(self.duty, 1 - self.duty) * self.period_ns
        if not (0 < self.rise_ns < shortest and 0 < self.fall_ns < shortest):
            raise OptionError(
                f"rise and fall must take time, but less than each phase of the blink ({shortest:.0f} ns), "
                f"got {self.rise_ns:.0f} and {self.fall_ns:.0f} ns"
            )

    @property
    def period_ns(self) -> float:
        """Length of a cycle."""
        return 1e9 / self.blink_hz

    @cached_property
    def first_cycle(self) -> int:
        """Number of the first cycle laid out, one ahead of the span."""
        return int(np.floor((self.span_ns[0] - self.epoch_ns) / self.period_ns)) - 2

    @cached_property
    def amplitude_dn(self) -> Array:
        """Step of light of each cycle from `first_cycle` on."""
        last = int(np.ceil((self.span_ns[1] - self.epoch_ns) / self.period_ns)) + 2
        cycles = np.arange(self.first_cycle, last + 1)
        return np.asarray(self.steps_dn, float)[(cycles // self.cycles_per_level) % len(self.steps_dn)]

    @cached_property
    def before_dn(self) -> Array:
        """Sum of `amplitude_dn` ahead of each cycle."""
        return np.concatenate([[0.0], np.cumsum(self.amplitude_dn)[:-1]])

    @cached_property
    def pulses(self) -> tuple[Array, Array]:
        """The kernels' pulse parameters of set A and of set B; without counterphase B has no length."""
        pulse = np.zeros((2, kernels.PULSE_SIZE))
        pulse[:, kernels.PERIOD] = self.period_ns
        pulse[:, kernels.RISE], pulse[:, kernels.FALL] = self.rise_ns, self.fall_ns
        pulse[0, kernels.EPOCH], pulse[0, kernels.ON_TIME] = self.epoch_ns, self.duty * self.period_ns
        pulse[1, kernels.EPOCH] = self.epoch_ns + self.duty * self.period_ns
        pulse[1, kernels.ON_TIME] = (1 - self.duty) * self.period_ns
        return pulse[0], pulse[1]

    def flips_ns(self, t0_ns: float, t1_ns: float) -> tuple[Array, Array]:
        """Instants in [t0, t1) at which set A starts to turn bright, and at which it starts to turn dark."""
        first = int(np.floor((t0_ns - self.epoch_ns) / self.period_ns)) - 1
        last = int(np.ceil((t1_ns - self.epoch_ns) / self.period_ns)) + 1
        bright = self.epoch_ns + self.period_ns * np.arange(first, last + 1)
        dark = bright + self.duty * self.period_ns
        return bright[(bright >= t0_ns) & (bright < t1_ns)], dark[(dark >= t0_ns) & (dark < t1_ns)]

    def kinks_ns(self, t0_ns: float, t1_ns: float) -> Array:
        """Sorted instants in (t0, t1) between which light is linear."""
        bright, dark = self.flips_ns(t0_ns - max(self.rise_ns, self.fall_ns), t1_ns)
        ends = [bright, bright + self.rise_ns, dark, dark + self.fall_ns]
        if self.counterphase:  # B falls while A rises
            ends += [bright + self.fall_ns, dark + self.rise_ns]
        kinks = np.unique(np.concatenate(ends))
        return kinks[(kinks > t0_ns) & (kinks < t1_ns)]

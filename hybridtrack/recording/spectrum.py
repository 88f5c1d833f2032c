"""Lines in the spectrum of an array-wide event rate: blinking targets, flickering lamps."""

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import median_filter
from scipy.signal import welch

from hybridtrack.recording.arrays import Array

MAINS_FLICKER_HZ = (100.0, 120.0)


@dataclass(frozen=True)
class SpectralLine:
    """A line at `hz`, known to `resolution_hz`, `strength` times its surroundings' power; `harmonic` 1 for itself."""

    hz: float
    resolution_hz: float
    strength: float
    harmonic: int

    @property
    def is_mains_flicker(self) -> bool:
        """Whether lamps on 50 or 60 Hz mains explain it (common practice, no source)."""
        return any(abs(self.hz - mains) < max(1.0, self.resolution_hz) for mains in MAINS_FLICKER_HZ)


@dataclass(frozen=True)
class Spectrum:
    """Power (F,) of the rate of ON less OFF events at `hz` (F,), and its lines, strongest first."""

    hz: Array
    power: Array
    lines: tuple[SpectralLine, ...]


def _harmonic_of(hz: float, found: list[SpectralLine], sample_hz: float, tolerance_hz: float) -> int:
    """Number of the harmonic of an earlier line that `hz` is, folded at the sampling rate or not; else 1."""
    for line in found:
        for unfolded in (hz, sample_hz - hz, sample_hz + hz):
            number = round(unfolded / line.hz)
            if line.harmonic == 1 and number >= 2 and abs(unfolded - number * line.hz) < tolerance_hz:
                return number
    return 1


def rate_spectrum(rate: Array, bin_s: float, max_lines: int = 8, min_strength: float = 20.0) -> Spectrum:
    """Find lines above 10 Hz in an event rate (N,) counted in bins of `bin_s` seconds.

    Welch's averaged periodogram with a Hann window (Welch 1967); a line stands `min_strength` times above the median
    of its surroundings and is refined by a parabola through the logarithm of its three points.
    """
    length = min(len(rate), round(2.0 / bin_s))
    if length < 64:
        return Spectrum(np.empty(0), np.empty(0), ())
    hz, power = welch(rate.astype(float), 1.0 / bin_s, nperseg=length, detrend="linear")
    floor = median_filter(power, size=max(9, len(power) // 60), mode="nearest") + 1e-12 * power.max() + 1e-30
    strength = power / floor
    inner = slice(1, -1)
    peaks = 1 + np.flatnonzero(
        (power[inner] > power[:-2])
        & (power[inner] >= power[2:])
        & (strength[inner] > min_strength)
        & (hz[inner] > 10.0)
    )
    resolution = float(hz[1])
    found: list[SpectralLine] = []
    for peak in sorted(peaks, key=lambda index: -power[index])[: 4 * max_lines]:
        low, middle, high = np.log(power[peak - 1 : peak + 2] + 1e-300)
        curvature = low - 2 * middle + high
        offset = 0.5 * (low - high) / curvature if curvature < 0 else 0.0
        line_hz = float(hz[peak] + np.clip(offset, -0.5, 0.5) * resolution)
        if any(abs(line_hz - other.hz) < 3 * resolution for other in found):
            continue
        found.append(SpectralLine(line_hz, resolution, float(strength[peak]), 1))
    fundamentals: list[SpectralLine] = []
    for line in sorted(found, key=lambda item: item.hz):
        harmonic = _harmonic_of(line.hz, fundamentals, 1.0 / bin_s, 2 * resolution)
        fundamentals.append(SpectralLine(line.hz, resolution, line.strength, harmonic))
    fundamentals.sort(key=lambda item: (item.harmonic > 1, -item.strength))
    return Spectrum(hz, power, tuple(fundamentals[:max_lines]))

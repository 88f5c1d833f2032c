"""Lines in the spectrum of an array-wide event rate: blinking targets, flickering lamps."""

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import median_filter
from scipy.signal import welch

from hybridtrack.recording.arrays import Array

MAINS_FLICKER_HZ = (100.0, 120.0)
SIDEBAND_SHARE, SIDEBAND_WIDTH = 0.1, 0.12  # of the line's power and frequency
LEAST_SHARE = 1e-5  # of the strongest line's power; a weaker one changes nothing


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
    """Number of the harmonic of an earlier line that `hz` is, folded at the sampling rate or not; else 0."""
    for line in found:
        for unfolded in (hz, sample_hz - hz, sample_hz + hz):
            number = round(unfolded / line.hz)
            if number >= 1 and abs(unfolded - number * line.hz) < tolerance_hz:
                return number
    return 0


def _classified(peaks: list[tuple[float, float, float]], sample_hz: float, resolution_hz: float) -> list[SpectralLine]:
    """Tell lines from their harmonics and sidebands; `peaks` are (hz, power, strength), the strongest first.

    Pauses and changes of view modulate a blink, so that much weaker companions around a line or its harmonics are that
    line's. Mains flicker is never taken for a companion.
    """
    own: list[SpectralLine] = []
    harmonics: list[SpectralLine] = []
    for hz, power, strength in peaks:
        line = SpectralLine(hz, resolution_hz, strength, 1)
        number = _harmonic_of(hz, own, sample_hz, 2 * resolution_hz)
        strongest = peaks[0]
        weak = power < SIDEBAND_SHARE * strongest[1] and not line.is_mains_flicker
        if number > 1:
            harmonics.append(SpectralLine(hz, resolution_hz, strength, number))
        elif number == 0 and not (weak and _harmonic_of(hz, own[:1], sample_hz, SIDEBAND_WIDTH * strongest[0])):
            own.append(line)
    return own + harmonics


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
    found: list[tuple[float, float, float]] = []
    for peak in sorted(peaks, key=lambda index: -power[index])[: 8 * max_lines]:
        if power[peak] < LEAST_SHARE * power[peaks].max():
            break
        low, middle, high = np.log(power[peak - 1 : peak + 2] + 1e-300)
        curvature = low - 2 * middle + high
        offset = 0.5 * (low - high) / curvature if curvature < 0 else 0.0
        line_hz = float(hz[peak] + np.clip(offset, -0.5, 0.5) * resolution)
        found.append((line_hz, float(power[peak]), float(strength[peak])))
    lines = _classified(found, 1.0 / bin_s, resolution)
    return Spectrum(hz, power, tuple(lines[:max_lines]))

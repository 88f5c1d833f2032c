"""Find the blinking of a target in the events: frequency, phase, and other lines in the spectrum.

Events of a tile (8x8 event pixels, smaller than a square) are counted with their polarity in bins of a millisecond.
In a block of half a second the Fourier sum of tile t at frequency f is z_t(f). Tiles on set A and on a counterphase
set B differ by half a turn, so that z_t^2 of all tiles point the same way: with

    S_b(f) = sum_t z_t(f)^2,    |S| large at a line,    angle(S_b) / 2 = phase of block b, modulo half a turn

sum_b of S_b turned back by 2 * 2 pi f t_b is the periodogram (Lomb 1976, Scargle 1982) of the whole recording; its peak
near the nominal rate gives the frequency to a small part of 1 / span. Reading the file once serves both.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from hybridtrack.calibration.kernels import tile_histogram
from hybridtrack.errors import ModuleMismatchError, NoBlinkError
from hybridtrack.module import Target
from hybridtrack.recording import Events, Recording

Array = np.ndarray

BIN_NS = 1_000_000
BLOCK_BINS = 512
TILE = 8
SEARCH = 0.012  # the target's clock may be off by 1 %
FINE_STEPS = 41
LINE_RATIO = 4.0  # a line stands out of the spectrum around it by this factor in power


@dataclass(frozen=True)
class Blink:
    """A periodic target on the event clock: set A turns bright at `epoch_ns + (k - epoch_phase) / hz`.

    `sigma_hz` is the deviation of `hz`. `flicker_hz`: other lines in the spectrum. `fold_lead`: a half of the cycle is
    counted from so many cycles before the flip, much while the phase is that of mean stamps, which lag.
    """

    hz: float
    sigma_hz: float
    epoch_ns: int
    epoch_phase: float
    duty: float
    flicker_hz: tuple[float, ...] = ()
    fold_lead: float = 0.1

    @property
    def period_ns(self) -> float:
        """Blink period on the event clock."""
        return 1e9 / self.hz

    def phase(self, t_ns: ArrayLike) -> Array:
        """Cycles (any shape) since set A turned bright at cycle 0."""
        return np.asarray((np.asarray(t_ns) - self.epoch_ns) * (self.hz * 1e-9) + self.epoch_phase)

    def flips_ns(self, t0_ns: float, t1_ns: float, to_bright: bool = True) -> Array:
        """Instants (K,), ns after `epoch_ns`, within the interval at which set A turns bright, or dark."""
        shift = 0.0 if to_bright else self.duty
        first, last = (float(edge(self.phase(t) - shift)) for edge, t in ((np.ceil, t0_ns), (np.floor, t1_ns)))
        return (np.arange(first, last + 1) + shift - self.epoch_phase) * self.period_ns


@dataclass(frozen=True)
class BlockSpectra:
    """Per block of the recording: `start_ns` (B,); summed power (B, F) over tiles at `hz` (F,); S_b (B, K) and sum of z
    (B, K) at the fine frequencies `fine_hz` (K,), phases counted from `origin_ns`."""

    origin_ns: int
    start_ns: Array
    hz: Array
    power: Array
    fine_hz: Array
    squares: Array
    sums: Array


def block_spectrum(histogram: Array, start_s: float, fine_hz: Array) -> tuple[Array, Array, Array]:
    """Power (F,), S (K,) and sum of z (K,) of one block's histogram (bins, rows, columns)."""
    series = histogram.reshape(len(histogram), -1)
    series = series[:, np.any(series != 0, axis=0)]
    spectrum = np.fft.rfft((series - series.mean(axis=0)) * np.hanning(len(series))[:, None], axis=0)
    time_s = start_s + (np.arange(len(series)) + 0.5) * BIN_NS * 1e-9
    z = np.exp(-2j * np.pi * fine_hz[:, None] * time_s) @ series
    return np.sum(np.abs(spectrum) ** 2, axis=1), np.sum(z**2, axis=1), np.sum(z * np.abs(z), axis=1)


def require_inside(events: Events, shape: tuple[int, int]) -> None:
    """Raise ModuleMismatchError where events lie outside the grid of `shape` (rows, columns)."""
    if len(events) and (int(events.x.max()) >= shape[1] or int(events.y.max()) >= shape[0]):
        raise ModuleMismatchError(
            f"events must lie on the module's event grid of {shape[1]}x{shape[0]} pixels, and they reach column "
            f"{int(events.x.max())} and row {int(events.y.max())}"
        )


def block_spectra(recording: Recording, shape: tuple[int, int], nominal_hz: float) -> BlockSpectra:
    """Read all events once and transform them block by block; `shape` of the event grid."""
    origin, last = recording.event_span_ns
    fine_hz = nominal_hz * (1.0 + np.linspace(-1.0, 1.0, FINE_STEPS) * SEARCH)
    tiles = (-(-shape[0] // TILE), -(-shape[1] // TILE))
    block_ns = BIN_NS * BLOCK_BINS
    starts: list[int] = []
    powers: list[Array] = []
    squares: list[Array] = []
    sums: list[Array] = []
    histogram = np.zeros((BLOCK_BINS, *tiles), np.float32)
    start = origin

    def close_block() -> None:
        if np.any(histogram):
            result = block_spectrum(histogram, (start - origin) * 1e-9, fine_hz)
            starts.append(start)
            for kept, value in zip((powers, squares, sums), result, strict=True):
                kept.append(value)
            histogram[:] = 0.0

    for block in recording.event_blocks():
        require_inside(block, shape)
        used = 0
        while True:
            part = block[used:]
            used += tile_histogram(part.t, part.x, part.y, part.on, start, BIN_NS, TILE, histogram)
            if used == len(block):
                break
            close_block()
            start += max(1, (int(block.t[used]) - start) // block_ns) * block_ns
    if last - start > block_ns // 4 or not starts:
        close_block()
    hz = np.fft.rfftfreq(BLOCK_BINS, BIN_NS * 1e-9)
    return BlockSpectra(origin, np.array(starts), hz, np.array(powers), fine_hz, np.array(squares), np.array(sums))


def spectral_lines(spectra: BlockSpectra) -> list[tuple[float, float, float]]:
    """Lines (Hz, power over the spectrum around it, power) above 20 Hz, strongest first, in the sum over all blocks."""
    power = spectra.power.sum(axis=0)
    lines = []
    for k in range(int(20.0 / spectra.hz[1]), len(power) - 3):
        if power[k] < np.max(power[k - 2 : k + 3]):
            continue
        around = np.r_[power[max(k - 12, 1) : k - 3], power[k + 4 : k + 13]]
        level = float(np.median(around))
        ratio = float(power[k]) / level if level > 0 else np.inf
        if ratio > LINE_RATIO:
            weights = power[k - 1 : k + 2]
            lines.append((float(weights @ spectra.hz[k - 1 : k + 2] / weights.sum()), ratio, float(power[k])))
    return sorted(lines, key=lambda line: -line[2])


def refine_frequency(spectra: BlockSpectra) -> tuple[float, float]:
    """Peak of the periodogram over all blocks: frequency and phase of S there, both for z^2."""
    middle_s = (spectra.start_ns - spectra.origin_ns) * 1e-9 + 0.5 * BLOCK_BINS * BIN_NS * 1e-9
    # Between fine steps z turns by the block's middle; taken out, |S| and the rest vary slowly and interpolate well.
    turned = spectra.squares * np.exp(4j * np.pi * spectra.fine_hz * middle_s[:, None])
    span_s = float(np.ptp(middle_s)) + 0.5
    grid = np.linspace(spectra.fine_hz[0], spectra.fine_hz[-1], int(np.ptp(spectra.fine_hz) * span_s * 16) + 2)

    def coherent(hz: Array) -> Array:
        total = np.zeros(len(hz), complex)
        for block, middle in zip(turned, middle_s, strict=True):
            value = np.interp(hz, spectra.fine_hz, block.real) + 1j * np.interp(hz, spectra.fine_hz, block.imag)
            total += value * np.exp(-4j * np.pi * hz * middle)
        return total

    for _ in range(4):
        best = int(np.argmax(np.abs(coherent(grid))))
        step = grid[1] - grid[0]
        grid = np.linspace(grid[best] - step, grid[best] + step, 33)
    best_hz = grid[int(np.argmax(np.abs(coherent(grid))))]
    return float(best_hz), float(np.angle(coherent(np.array([best_hz]))[0]))


def resolve_half_turn(spectra: BlockSpectra, hz: float, phase_of_squares: float) -> float:
    """Phase of z from that of z^2: set A is the side on which most of the blinking is."""
    nearest = int(np.argmin(np.abs(spectra.fine_hz - hz)))
    middle_s = (spectra.start_ns - spectra.origin_ns) * 1e-9 + 0.5 * BLOCK_BINS * BIN_NS * 1e-9
    turn = np.exp(2j * np.pi * (spectra.fine_hz[nearest] - hz) * middle_s)
    side = np.sum(spectra.sums[:, nearest] * turn * np.exp(-0.5j * phase_of_squares)).real
    return 0.5 * phase_of_squares + (0.0 if side >= 0 else np.pi)


def require_line(spectra: BlockSpectra, lines: list[tuple[float, float, float]], nominal_hz: float) -> None:
    """Raise NoBlinkError unless a line stands near the nominal rate in the sum, or strongly in some block."""
    close = SEARCH * nominal_hz + spectra.hz[1]
    if any(abs(hz - nominal_hz) < close for hz, *_ in lines):
        return
    near = np.abs(spectra.hz - nominal_hz) < close
    around = (np.abs(spectra.hz - nominal_hz) < close + 12 * spectra.hz[1]) & ~near & (spectra.hz > 10.0)
    level = np.median(spectra.power[:, around], axis=1)
    if np.any(spectra.power[:, near].max(axis=1) > 5 * LINE_RATIO * np.maximum(level, 1e-9)):
        return
    found = f"the strongest line is at {lines[0][0]:.1f} Hz" if lines else "the spectrum has no line above 20 Hz"
    raise NoBlinkError(
        f"no blinking target: a line within 1 % of {nominal_hz:g} Hz is required in the events' spectrum, and {found}"
    )


def flicker_lines(lines: list[tuple[float, float, float]], blink_hz: float, resolution_hz: float) -> tuple[float, ...]:
    """Lines that are no harmonic of the blinking, nor one that the bins alias.

    A harmonic above half the sampling rate shows at its alias with at most its power before, less what averaging over
    a bin leaves: sinc^2. Only a line well above that is another light's.
    """
    sampling_hz = 1e9 / BIN_NS
    harmonics = blink_hz * np.arange(1, int(4 * sampling_hz / blink_hz))
    folded = np.abs((harmonics + sampling_hz / 2) % sampling_hz - sampling_hz / 2)
    strongest = max(
        (power for hz, _, power in lines if np.min(np.abs(harmonics[:3] - hz)) < 1.6 * resolution_hz), default=0.0
    )
    limit = np.where(harmonics < sampling_hz / 2, np.inf, 4.0 * strongest * np.sinc(harmonics / sampling_hz) ** 2)
    found = []
    for hz, _, power in lines:
        explained = limit[np.abs(folded - hz) < 1.6 * resolution_hz]
        if power > explained.sum():
            found.append(hz)
    return tuple(found)


def find_blink(recording: Recording, shape: tuple[int, int], target: Target) -> Blink:
    """Frequency and phase of the target's blinking on the event clock.

    `shape` (rows, columns) of the event grid. The phase is that of mean stamps, late by photoreceptor and readout;
    `onset.py` refines it. On a counterphase target of even duty the name "set A" is a choice, the same in all views.
    Raises NoBlinkError with what was looked for and what was found, ModuleMismatchError for events off the grid.
    """
    spectra = block_spectra(recording, shape, target.blink_hz)
    lines = spectral_lines(spectra)
    require_line(spectra, lines, target.blink_hz)
    hz, phase_of_squares = refine_frequency(spectra)
    # ON at the start of the cycle and OFF at `duty`: the fundamental of that pair lies pi/2 - pi duty off its start.
    angle = resolve_half_turn(spectra, hz, phase_of_squares) - (0.5 - target.duty) * np.pi
    span_s = (spectra.start_ns[-1] - spectra.start_ns[0]) * 1e-9 + BLOCK_BINS * BIN_NS * 1e-9
    flicker = flicker_lines(lines, hz, float(spectra.hz[1]))
    return Blink(hz, float(0.02 / span_s), spectra.origin_ns, float(angle / (2 * np.pi)) % 1.0, target.duty, flicker)

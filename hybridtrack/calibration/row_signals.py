"""How bright each row's share of the board is, frame by frame: what the clocks are fitted to.

Under a rolling shutter the light of a pixel in row r of frame n is D + f[n, r] K, where f is the part of the row's
exposure in which set A is bright. Summed over the row with weights w, all pixels give one number s[n, r] = a + b
f[n, r] with a and b of the row alone. The first weights are the leading right singular vector of the row's pixels
over frames, which needs no knowledge of the clocks or the board; later ones are K / sigma^2 from the demodulated
pictures.
"""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.demodulation_kernels import sum_bands

Array = np.ndarray

LEAST_FRAMES = 4


@dataclass(frozen=True)
class RowSignals:
    """Signals of the rows of all views, one line a row, or several where a screen's sweep splits rows.

    `signal` (R, N) with `weight` (R, N): one over its deviation, zero where there is no frame; `stamp_ns`,
    `exposure_ns` (R, N) of the frames, stamps after `origin_ns`; `order` (R,): rows read before; `row`, `view` (R,):
    where it comes from; `delay_ns` (R,): how much later than the blink clock a screen flips there. `signed`: whether
    the sign of b is known to be positive.
    """

    origin_ns: int
    signal: Array
    weight: Array
    stamp_ns: Array
    exposure_ns: Array
    order: Array
    row: Array
    view: Array
    delay_ns: Array
    signed: bool

    def __getitem__(self, rows: Array) -> "RowSignals":
        """The lines selected by a mask or index array."""
        names = ("signal", "weight", "stamp_ns", "exposure_ns", "order", "row", "view", "delay_ns")
        return replace(self, **{name: getattr(self, name)[rows] for name in names})


def singular_row_signals(light: Array, signed: bool) -> tuple[Array, Array]:
    """Signals (H, N) of every row of a view's frames (N, H, W), and their deviation (H,), inf where a row shows
    nothing.

    For `signed` views (all pixels brighten together) the sign makes the row's sum of weights positive.
    """
    known = np.all(np.isfinite(light), axis=0)
    rows = np.where(known[:, None, :], np.moveaxis(light, 0, 1), np.float32(0.0))
    centred = rows - rows.mean(axis=1, keepdims=True)
    values, vectors = np.linalg.eigh((centred @ np.swapaxes(centred, 1, 2)).astype(np.float64))
    leading, second = values[:, -1], np.maximum(values[:, -2], 1e-12)
    weights = np.einsum("hnw,hn->hw", centred, vectors[:, :, -1]) / np.sqrt(np.maximum(leading, 1e-12))[:, None]
    if signed:
        weights *= np.where(weights.sum(axis=1) < 0, -1.0, 1.0)[:, None]
    signal = np.einsum("hnw,hw->hn", rows, weights)
    # Noise of a unit-weight sum: what the trailing singular values leave, and a floor for exact data.
    noise = np.sqrt(np.maximum(values[:, :-1].sum(axis=1), 0.0) / max(rows.shape[1] - 2, 1) / rows.shape[2])
    shows = (leading > 8.0 * second) & (leading > 0)
    return signal, np.where(shows, np.maximum(noise, 1e-4 * np.sqrt(leading / rows.shape[1])), np.inf)


def signal_weights(light: Array, swing: Array, sigma: Array) -> tuple[Array, Array]:
    """Weights `swing` / `sigma`^2 (H, W), zero where a pixel says nothing, and a deviation that is never zero."""
    usable = np.isfinite(swing) & np.isfinite(sigma) & np.all(np.isfinite(light), axis=0)
    usable &= sigma > 0
    safe = np.where(usable, sigma, 1.0)
    weights = np.where(usable, swing, 0.0) / safe**2
    # Pixels that don't blink carry noise only.
    weights[np.abs(weights) * safe < 4.0] = 0.0
    return weights, safe


def weighted_row_signals(light: Array, swing: Array, sigma: Array) -> tuple[Array, Array]:
    """Signals (H, N) and deviations (H,) with weights `swing` / `sigma`^2 (H, W): the signal is that of one pixel."""
    weights, safe = signal_weights(light, swing, sigma)
    total = np.abs(weights).sum(axis=1)
    signal = np.einsum("nhw,hw->hn", np.nan_to_num(light, copy=False), weights)
    variance = np.sum((weights * safe) ** 2, axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        return signal / np.maximum(total, 1e-300)[:, None], np.where(total > 0, np.sqrt(variance) / total, np.inf)


def banded_row_signals(
    light: Array, swing: Array, sigma: Array, delay: Array, width: float
) -> tuple[Array, Array, Array]:
    """As `weighted_row_signals`, for each band of `width` in the pixels' `delay` (H, W) apart: signals (B * H, N),
    deviations (B * H,) and the weighted mean delays (B * H,)."""
    weights, safe = signal_weights(light, swing, sigma)
    band = np.floor(delay / width).astype(np.int64)
    band -= band.min()
    count, height, _ = light.shape
    bands = int(band.max()) + 1
    signal, sums = np.zeros((bands, height, count)), np.zeros((3, bands, height))
    sum_bands(light, weights, safe, delay, band, signal, sums)
    total, variance, late = sums
    with np.errstate(divide="ignore", invalid="ignore"):
        deviation = np.where(total > 0, np.sqrt(variance) / total, np.inf)
    scale = np.maximum(total, 1e-300)
    return (signal / scale[..., None]).reshape(-1, count), deviation.ravel(), (late / scale).ravel()


@dataclass(frozen=True)
class ViewSignals:
    """What one view gives: `signal` (L, N) with `deviation` (L,), inf where there is none; `stamps`, `exposures` (N,)
    of its frames; its number; `delay_ns` (L,). Lines are rows (L = H), or parts of all rows one after the other."""

    signal: Array
    deviation: Array
    stamps: Array
    exposures: Array
    view: int
    delay_ns: Array


def join_row_signals(parts: list[ViewSignals], order: Array, origin_ns: int, signed: bool) -> RowSignals:
    """Join the views' signals; `order` (H,) of rows."""
    longest = max(part.signal.shape[1] for part in parts)
    columns: dict[str, list[Array]] = {
        name: [] for name in ("signal", "weight", "stamp_ns", "exposure_ns", "order", "row", "view", "delay_ns")
    }
    for part in parts:
        signal, deviation, stamps, exposures = part.signal, part.deviation, part.stamps, part.exposures
        lines = np.flatnonzero(np.isfinite(deviation))
        rows = lines % len(order)
        pad = ((0, 0), (0, longest - signal.shape[1]))
        times = [
            np.broadcast_to(np.asarray(a, float), (len(lines), len(stamps))) for a in (stamps - origin_ns, exposures)
        ]
        columns["signal"].append(np.pad(signal[lines], pad))
        columns["weight"].append(np.pad(np.repeat(1.0 / deviation[lines, None], len(stamps), axis=1), pad))
        columns["stamp_ns"].append(np.pad(times[0], pad))
        columns["exposure_ns"].append(np.pad(times[1], pad, constant_values=1.0))
        columns["order"].append(order[rows])
        columns["row"].append(rows)
        columns["view"].append(np.full(len(lines), part.view))
        columns["delay_ns"].append(part.delay_ns[lines])
    joined = {name: np.concatenate(column) for name, column in columns.items()}
    return RowSignals(origin_ns=origin_ns, signed=signed, **joined)

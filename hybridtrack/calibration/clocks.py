"""One clock model over all rows, frames and views.

The exposure of a row that was read after r others starts, on the event clock, at

    t_start + offset + drift (t_start - epoch) + r line_time,     and lasts   stamped exposure + correction,

and the row's signal is a + b f, f the share of that exposure in which set A is bright (square_wave.py). a and b
belong to the row of the view and are linear: they are projected out (Golub and Pereyra 1973, with Kaufman's 1975
Jacobian), which leaves offset, line time, exposure correction, drift and duty. A search over phase and line time
starts it, then damped least squares with Huber's weights. The covariance is a sandwich clustered by view.

f is periodic: the offset is known up to whole blink periods, and the one nearest the nominal is taken.
"""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.row_signals import RowSignals
from hybridtrack.calibration.square_wave import CycleStrengths, Waveform, bright_share, bright_share_slopes
from hybridtrack.errors import DegenerateDataError

Array = np.ndarray

PARAMETERS = ("offset_ns", "line_time_ns", "exposure_correction_ns", "drift", "duty", "sweep")
SEARCH_PERIODS = 2


@dataclass(frozen=True)
class Clocks:
    """Offset at `drift_epoch_ns`, line time (negative: rows are read the other way), correction, drift (ns per ns),
    duty; `sweep`: relative excess of a screen's sweep over the rows' delays.
    """

    offset_ns: float = 0.0
    line_time_ns: float = 0.0
    exposure_correction_ns: float = 0.0
    drift: float = 0.0
    duty: float = 0.5
    sweep: float = 0.0

    @property
    def values(self) -> Array:
        """In the order of PARAMETERS."""
        return np.array([getattr(self, name) for name in PARAMETERS])

    def moved(self, free: tuple[str, ...], step: Array) -> "Clocks":
        """These clocks with `step` added to the free parameters."""
        return replace(self, **{name: getattr(self, name) + float(d) for name, d in zip(free, step, strict=True)})


@dataclass(frozen=True)
class ClockFit:
    """Clocks with the `covariance` of the `free` parameters; residuals in deviations (R, N); how the signal is
    explained.
    """

    clocks: Clocks
    free: tuple[str, ...]
    covariance: Array
    drift_epoch_ns: int
    residuals: Array
    explained: float

    def sigma(self, name: str) -> float | None:
        """Deviation of a parameter, None where it was held."""
        return (
            float(np.sqrt(self.covariance[self.free.index(name)][self.free.index(name)])) if name in self.free else None
        )


@dataclass(frozen=True)
class ClockModel:
    """Row signals against the blink clock: shares f of every row and frame, and the projected residuals.

    `strengths` of the cycles where the target plays several steps of light: they tell whole periods apart.
    """

    rows: RowSignals
    blink: Blink
    rise: float
    fall: float
    drift_epoch_ns: int
    strengths: CycleStrengths | None = None

    def exposure_cycles(self, clocks: Clocks) -> tuple[Array, Array]:
        """Start and length (R, N) of all exposures, in cycles."""
        rows = self.rows
        from_epoch = rows.stamp_ns + float(rows.origin_ns - self.drift_epoch_ns)
        start_ns = (
            rows.stamp_ns + clocks.offset_ns + clocks.drift * from_epoch + rows.order[:, None] * clocks.line_time_ns
        )
        # A screen that flips later here is exposed as one that flips at once and is exposed earlier.
        start_ns = start_ns - (1.0 + clocks.sweep) * rows.delay_ns[:, None]
        length_ns = np.maximum(rows.exposure_ns + clocks.exposure_correction_ns, 1000.0)
        rate = self.blink.hz * 1e-9
        # The blink's phase counts from where light is half way up, the waveform from where it begins to rise.
        begin = (
            (start_ns + float(rows.origin_ns - self.blink.epoch_ns)) * rate + self.blink.epoch_phase + 0.5 * self.rise
        )
        return begin, length_ns * rate

    def waveform(self, clocks: Clocks) -> Waveform:
        """Light over a cycle for these clocks."""
        return Waveform(clocks.duty, self.rise, self.fall, self.strengths)

    def shares(self, clocks: Clocks) -> Array:
        """f (R, N)."""
        return bright_share(*self.exposure_cycles(clocks), self.waveform(clocks))

    def share_slopes(self, clocks: Clocks, free: tuple[str, ...]) -> Array:
        """Derivatives (P, R, N) of f by the free parameters."""
        by_start, by_length, by_duty = bright_share_slopes(*self.exposure_cycles(clocks), self.waveform(clocks))
        rate = self.blink.hz * 1e-9
        from_epoch = self.rows.stamp_ns + float(self.rows.origin_ns - self.drift_epoch_ns)
        slopes = {
            "offset_ns": by_start * rate,
            "line_time_ns": by_start * rate * self.rows.order[:, None],
            "exposure_correction_ns": by_length * rate,
            "drift": by_start * rate * from_epoch,
            "duty": by_duty,
            "sweep": -by_start * rate * self.rows.delay_ns[:, None],
        }
        return np.array([slopes[name] for name in free])


def row_mean(values: Array, weight: Array) -> Array:
    """Weighted mean over frames (..., R, 1)."""
    return np.sum(values * weight, axis=-1, keepdims=True) / np.maximum(np.sum(weight, axis=-1, keepdims=True), 1e-300)


def project(rows: RowSignals, share: Array) -> tuple[Array, Array, Array]:
    """Best a + b f for every row: gain b (R, 1), residuals (R, N) in signal units and centred f (R, N)."""
    weight = rows.weight**2
    centred_f = np.where(weight > 0, share - row_mean(share, weight), 0.0)
    centred_s = np.where(weight > 0, rows.signal - row_mean(rows.signal, weight), 0.0)
    spread = np.sum(weight * centred_f**2, axis=1, keepdims=True)
    gain = np.sum(weight * centred_f * centred_s, axis=1, keepdims=True) / np.maximum(spread, 1e-300)
    # Rows whose frames all see the same share tell nothing; their gain would be noise over nothing.
    gain = np.where(spread > 1e-6 * np.sum(weight, axis=1, keepdims=True), gain, 0.0)
    return gain, centred_s - gain * centred_f, centred_f


def explained_part(rows: RowSignals, share: Array) -> float:
    """Part of the rows' variance over frames that f explains, b of the right sign where that is known."""
    gain, residual, centred_f = project(rows, share)
    weight = rows.weight**2
    if rows.signed:
        residual = np.where(gain > 0, residual, residual + gain * centred_f)
    # Each row counts the same, however bright.
    centred = residual + gain * centred_f
    total = np.sum(weight * centred**2, axis=1)
    left = np.sum(weight * residual**2, axis=1)
    return float(np.mean(1.0 - left / np.maximum(total, 1e-300)))


def search(model: ClockModel, start: Clocks, line_times_ns: Array, steps: int = 48) -> Clocks:
    """The best of a grid over offset (one blink period, or the nearest ones where cycles differ) and line time."""
    thin = np.arange(0, len(model.rows.row), max(1, len(model.rows.row) // 150))
    coarse = replace(model, rows=model.rows[thin])
    best, best_part = start, -np.inf
    offsets = np.arange(steps) / steps * model.blink.period_ns
    if model.strengths is not None:
        around = start.offset_ns + np.arange(-SEARCH_PERIODS, SEARCH_PERIODS) * model.blink.period_ns
        offsets = np.concatenate([offsets + period for period in around])
    for line_time in line_times_ns:
        for offset in offsets:
            clocks = replace(start, offset_ns=float(offset), line_time_ns=float(line_time))
            part = explained_part(coarse.rows, coarse.shares(clocks))
            if part > best_part:
                best, best_part = clocks, part
    return best


def projected_problem(model: ClockModel, clocks: Clocks, free: tuple[str, ...]) -> tuple[Array, Array]:
    """Weighted residuals (R, N) and their Jacobian (P, R, N), a and b projected out."""
    rows = model.rows
    gain, residual, centred_f = project(rows, model.shares(clocks))
    slopes = model.share_slopes(clocks, free)
    weight = rows.weight**2
    centred = np.where(weight > 0, slopes - row_mean(slopes, weight), 0.0)
    spread = np.maximum(np.sum(weight * centred_f**2, axis=1, keepdims=True), 1e-300)
    along = np.sum(weight * centred * centred_f, axis=2, keepdims=True) / spread
    return residual * rows.weight, -gain * (centred - along * centred_f) * rows.weight


def huber(residual: Array, used: Array) -> Array:
    """Huber weights (R, N) at 2 robust deviations."""
    scale = max(1.4826 * float(np.median(np.abs(residual[used]))), 1e-6)
    return np.where(used, np.minimum(1.0, 2.0 * scale / np.maximum(np.abs(residual), 1e-12)), 0.0)


def refine(model: ClockModel, clocks: Clocks, free: tuple[str, ...], iterations: int = 30) -> Clocks:
    """Damped Gauss-Newton on the free parameters, reweighted."""
    used = model.rows.weight > 0
    damping = 1e-4

    def cost(candidate: Clocks, weight: Array) -> float:
        residual = project(model.rows, model.shares(candidate))[1] * model.rows.weight
        return float(np.sum(weight * residual**2))

    for _ in range(iterations):
        residual, jacobian = projected_problem(model, clocks, free)
        weight = huber(residual, used)
        now = float(np.sum(weight * residual**2))
        flat = jacobian.reshape(len(free), -1)
        normal = (flat * weight.ravel()) @ flat.T
        gradient = flat @ (weight * residual).ravel()
        scale = np.maximum(np.diag(normal), 1e-300)
        moved = False
        for _ in range(8):
            step = -np.linalg.solve(normal + damping * np.diag(scale), gradient)
            candidate = clocks.moved(free, step)
            if cost(candidate, weight) <= now:
                clocks, damping, moved = candidate, max(damping / 10, 1e-9), True
                break
            damping *= 10
        if not moved or np.max(np.abs(step) * np.sqrt(scale)) < 1e-4:
            break
    return clocks


def shrunk_scatter(per_view: Array, plain: Array) -> Array:
    """Scatter (P, P) of the views' scores (V, P), drawn towards what independent noise of the same size would give.

    Few views span few directions: their own scatter is singular, or too small by chance. Its mean size over all
    directions is told well, and scales `plain` (P, P); the two are mixed as P + 1 prior views against V real ones.
    """
    count, size = per_view.shape
    scatter = per_view.T @ per_view * count / max(count - 1, 1)
    larger = max(1.0, float(np.trace(np.linalg.solve(plain, scatter))) / size)
    return ((size + 1) * larger * plain + count * scatter) / (size + 1 + count)


def clustered_covariance(model: ClockModel, clocks: Clocks, free: tuple[str, ...]) -> tuple[Array, Array]:
    """Sandwich covariance (P, P) with views as clusters, and the weighted residuals (R, N)."""
    residual, jacobian = projected_problem(model, clocks, free)
    used = model.rows.weight > 0
    weight = huber(residual, used)
    flat = jacobian.reshape(len(free), -1)
    inside = (weight >= 1.0).ravel()
    bread = flat[:, inside] @ flat[:, inside].T
    size = np.sqrt(np.maximum(np.diag(bread), 1e-300))
    if np.linalg.cond(bread / np.outer(size, size)) > 1e10:
        raise DegenerateDataError(
            f"the rows of the frames cannot determine {', '.join(free)} together: their bright share hardly changes"
        )
    inverse = np.linalg.inv(bread)
    # Two numbers a row and the free parameters were fitted to the same samples.
    count = int(np.count_nonzero(used))
    freedom = count / max(count - 2 * len(used) - len(free), 1)
    psi = weight * residual
    scores = np.einsum("prn,rn->rp", jacobian, psi) * np.sqrt(freedom)
    per_view = np.array([scores[model.rows.view == view].sum(axis=0) for view in np.unique(model.rows.view)])
    plain = flat @ flat.T * max(freedom * float(np.mean(psi[used] ** 2)), 1e-12)
    return inverse @ shrunk_scatter(per_view, plain) @ inverse, residual


def nearest_offset(offset_ns: float, period_ns: float, nominal_ns: float) -> float:
    """The offset among all that differ by whole periods that lies nearest the nominal one."""
    return float(offset_ns - np.round((offset_ns - nominal_ns) / period_ns) * period_ns)


def fit_clocks(model: ClockModel, start: Clocks, free: tuple[str, ...], nominal_offset_ns: float = 0.0) -> ClockFit:
    """Fit from a start within reach (a fifth of a period).

    Raises DegenerateDataError where the rows do not determine the free parameters.
    """
    clocks = refine(model, start, free)
    covariance, residual = clustered_covariance(model, clocks, free)
    if model.strengths is None:
        clocks = replace(clocks, offset_ns=nearest_offset(clocks.offset_ns, model.blink.period_ns, nominal_offset_ns))
    explained = explained_part(model.rows, model.shares(clocks))
    return ClockFit(clocks, free, covariance, model.drift_epoch_ns, residual, explained)

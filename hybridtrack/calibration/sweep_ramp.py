"""How a screen's sweep runs over a view, read from the events alone, before anything is known of board or module.

A pixel's events at the blink frequency add up to z, whose phase is the delay of its flip. The two sets of a
counterphase board are half a turn apart, and z^2 points the same way for both; over the board its phase is a smooth
ramp, a plane to first order (the peak of its Fourier transform) with a little curvature by perspective. Delays are
known up to half a blink period, one view as another.
"""

from dataclasses import dataclass, replace

import numpy as np
from scipy.ndimage import gaussian_filter

from hybridtrack.calibration.agreement import compare_pictures
from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.frame_light import view_light
from hybridtrack.calibration.kernels import fold_harmonic
from hybridtrack.calibration.views import View
from hybridtrack.errors import DegenerateDataError
from hybridtrack.module import HybridModule, nominal_matrix
from hybridtrack.recording import Recording

Array = np.ndarray

LEAST_AMPLITUDE = 0.25  # of the strong pixels' that a pixel must have to count
STEPS = 8
DETAIL_PX = 12.0
LARGEST_UNSTATED_NS = 3e6  # slow pixels and a queueing readout spread phases by less


@dataclass(frozen=True)
class SweepRamp:
    """Delay in cycles over event positions: `coefficients` (6,) of 1, x, y, x^2, xy, y^2 about `centre` in units of
    `scale` px; held to `least` and `most`, its range over the board; `concentration` of phases about it, 0 to 1."""

    coefficients: Array
    centre: Array
    scale: float
    least: float
    most: float
    concentration: float

    def cycles(self, xy: Array) -> Array:
        """Delay (...) at event positions (..., 2)."""
        return np.clip(_terms((xy - self.centre) / self.scale) @ self.coefficients, self.least, self.most)


def _terms(xy: Array) -> Array:
    x, y = xy[..., 0], xy[..., 1]
    return np.stack([np.ones_like(x), x, y, x * x, x * y, y * y], axis=-1)


def view_harmonic(recording: Recording, view: View, blink: Blink, shape: tuple[int, int]) -> Array:
    """Complex amplitude z (rows, columns) of a view's events at the blink frequency."""
    out = np.zeros(shape, np.complex128)
    for events in recording.event_blocks(view.t0_ns, view.t1_ns):
        fold_harmonic(events.t, events.x, events.y, events.on, blink.epoch_ns, blink.epoch_phase, blink.hz, out)
    return out


def refined_rate(recording: Recording, views: list[View], blink: Blink, shape: tuple[int, int], folds: int) -> Blink:
    """The blink clock with a rate by how phases turn from the first half of each view to its second.

    Where views see the board at different places its sweep turns their phases against each other, and a rate found
    over all of them is off. `folds` 2 where two sets blink against each other.
    """
    turned, apart_s = 0.0 + 0.0j, []
    for view in views:
        middle = (view.t0_ns + view.t1_ns) // 2
        halves = replace(view, t1_ns=middle), replace(view, t0_ns=middle)
        first, second = (view_harmonic(recording, half, blink, shape) for half in halves)
        turned += np.sum((second * np.conj(first)) ** folds)
        apart_s.append(0.5e-9 * (view.t1_ns - view.t0_ns))
    excess = float(np.angle(turned)) / (2 * np.pi * folds * float(np.median(apart_s)))
    return replace(blink, hz=blink.hz + excess)


def _first_plane(phasor: Array) -> tuple[float, float]:
    """Phase gradient (radian a px in x and y) of a complex picture: the peak of its padded Fourier transform."""
    size = tuple(4 * n for n in phasor.shape)
    power = np.abs(np.fft.fft2(phasor, size))
    row, column = np.unravel_index(np.argmax(power), size)
    return 2 * np.pi * float(np.fft.fftfreq(size[1])[column]), 2 * np.pi * float(np.fft.fftfreq(size[0])[row])


def fit_ramp(harmonic: Array, counterphase: bool, duty: float) -> SweepRamp:
    """Fit the ramp to z (rows, columns). Raises DegenerateDataError where phases follow none."""
    strength = np.abs(harmonic)
    strong = float(np.quantile(strength[strength > 0], 0.95)) if np.any(strength > 0) else 0.0
    used = strength > LEAST_AMPLITUDE * max(strong, 1e-12)
    if np.count_nonzero(used) < 100:
        raise DegenerateDataError(
            f"the sweep of a screen needs at least 100 event pixels that blink, got {np.count_nonzero(used)}"
        )
    folds = 2 if counterphase else 1
    phasor = np.where(used, (harmonic / np.maximum(strength, 1e-12)) ** folds, 0.0)
    by_x, by_y = _first_plane(phasor)
    rows, columns = np.nonzero(used)
    xy = np.stack([columns, rows], axis=-1).astype(float)
    centre, scale = xy.mean(axis=0), float(np.max(np.ptp(xy, axis=0)) / 2 + 1)
    terms, values = _terms((xy - centre) / scale), phasor[used]
    angle = np.zeros(6)
    angle[1], angle[2] = by_x * scale, by_y * scale
    for _ in range(STEPS):
        left = values * np.exp(-1j * (terms @ angle))
        mean = float(np.angle(left.mean()))
        turn = np.angle(left * np.exp(-1j * mean))
        weight = np.maximum(np.cos(turn), 0.0)
        angle = angle + np.linalg.lstsq(terms * weight[:, None], turn * weight, rcond=None)[0]
        angle[0] += mean
    concentration = float(np.abs(np.mean(values * np.exp(-1j * (terms @ angle)))))
    if concentration < 0.5:
        raise DegenerateDataError(
            f"events at the blink frequency follow no sweep: their phases must gather about a ramp by 0.5, got "
            f"{concentration:.2f}"
        )
    coefficients = -angle / (2 * np.pi * folds)
    coefficients[0] += float(np.angle(1.0 - np.exp(-2j * np.pi * duty))) / (2 * np.pi)
    along = terms @ coefficients
    # Half turns more or less are all the same; the earliest flip of the board is delayed by less than one.
    whole = np.floor(folds * float(np.quantile(along, 0.005))) / folds
    coefficients[0] -= whole
    least, most = (float(np.quantile(along, q)) - whole for q in (0.005, 0.995))
    return SweepRamp(coefficients, centre, scale, least, most, concentration)


def require_no_sweep(harmonics: list[Array], blink: Blink) -> None:
    """Raise DegenerateDataError where a screen that is said to flip at once is swept: clocks would be off unseen."""
    spans = []
    for harmonic in harmonics:
        try:
            ramp = fit_ramp(harmonic, True, blink.duty)
        except DegenerateDataError:
            continue
        spans.append(ramp.most - ramp.least)
    span_ns = blink.period_ns * float(np.median(spans)) if spans else 0.0
    if span_ns > LARGEST_UNSTATED_NS:
        raise DegenerateDataError(
            f"the screen's picture is swept over the board in about {span_ns * 1e-6:.1f} ms, and the target states "
            "scanout_s 0: state scanout_s and scan_direction in the target file"
        )


def activity(recording: Recording, frames: Array, nominal: HybridModule) -> Array:
    """How much each frame pixel (H, W) changes over a view's frames."""
    return np.nan_to_num(view_light(recording, frames, nominal).std(axis=0))


def _detail(picture: Array, smooth_px: float) -> Array:
    return picture - gaussian_filter(picture, smooth_px)


def mirrored_module(activities: list[Array], strengths: list[Array], nominal: HybridModule) -> HybridModule:
    """The nominal module mirrored so that where frames change most is where events are."""
    pitch = nominal.cluster.width / nominal.frame_mode.binning
    found = compare_pictures(
        [_detail(picture, DETAIL_PX * pitch) for picture in activities],
        [_detail(strength, DETAIL_PX) for strength in strengths],
        nominal,
        signed=False,
    )
    grid = nominal.event_grid.model_copy(update={"mirror_x": found.mirror_x, "mirror_y": found.mirror_y})
    return nominal.model_copy(update={"event_grid": grid, "colour_from_event": None})


def event_positions_of_frame(module: HybridModule) -> Array:
    """Event-grid positions (H, W, 2) of all frame pixels under the nominal lattice."""
    matrix = nominal_matrix(module.cluster, module.event_grid)
    return np.asarray((module.frame_pixel_centres() - matrix[:, 2]) @ np.linalg.inv(matrix[:, :2]).T)

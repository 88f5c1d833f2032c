"""How far a calibrated module is from the true one."""

from dataclasses import dataclass

import numpy as np

from hybridtrack.benchmark.calibration_honesty import BlockNees, block_nees, clock_errors
from hybridtrack.benchmark.metrics import lens_displacement, map_displacement
from hybridtrack.module import HybridModule, nominal_matrix


@dataclass(frozen=True)
class CalibrationScore:
    """Errors of one calibration, estimate minus truth.

    `map_rms_px`: displacement of the event map over the field, colour px. `focal_percent`: the worse of fx and
    fy. `offset_us`: frame offset against true offset plus true event latency, where the estimate includes it.
    `offset_sigmas`: the same in stated deviations. `latency_separated`: whether the estimate's offset excludes it.
    Thresholds in percent of truth. `lens_rms_px`: displacement of the lens over the field, orientation removed.
    `off_lattice`: whether the estimate says that the map is not the plain lattice, and `off_lattice_true` whether it is
    not. `nees` of each block under the stated covariance.
    """

    mirror_right: bool
    clear_site_right: bool
    map_rms_px: float
    focal_percent: float
    lens_rms_px: float
    line_time_percent: float
    offset_us: float
    offset_sigmas: float
    latency_separated: bool
    exposure_us: float
    drift_ppm: float
    on_percent: float
    off_percent: float
    hot_found: float
    dead_found: float
    off_lattice: bool
    off_lattice_true: bool
    nees: dict[str, BlockNees]


def _percent(estimate: float | None, truth: float | None) -> float:
    if estimate is None or not truth:
        return float("nan")
    return 100.0 * (estimate / truth - 1.0)


def _share(found: list[tuple[int, int]], true: list[tuple[int, int]]) -> float:
    """The lower of precision and recall; 1 where there is nothing to find and nothing was found."""
    hits = len(set(found) & set(true))
    return min(hits / len(found) if found else 1.0, hits / len(true) if true else 1.0)


def _rms(displacement: np.ndarray) -> float:
    return float(np.sqrt(np.mean(np.sum(displacement**2, axis=-1))))


def is_lattice(module: HybridModule) -> bool:
    """Whether a module's event map has neither linear terms off the lattice nor a radial term."""
    fitted = module.colour_from_event
    if fitted is None:
        return True
    plain = nominal_matrix(module.cluster, module.event_grid)[:, :2]
    return fitted.radial == 0.0 and bool(np.allclose(np.array(fitted.matrix)[:, :2], plain, rtol=0.0, atol=1e-9))


def score_calibration(estimate: HybridModule, truth: HybridModule) -> CalibrationScore:
    """Compare two modules of one layout."""
    assert estimate.timing is not None
    assert truth.timing is not None
    assert estimate.contrast is not None
    assert truth.contrast is not None
    lens, true_lens = estimate.lens_model(), truth.lens_model()
    clocks = clock_errors(estimate, truth)
    offset_ns = clocks.get("frame_offset_ns", float("nan"))
    array = truth.colour_array
    sigma = estimate.uncertainty.of("timing.frame_offset_ns") if estimate.uncertainty is not None else None
    grid, true_grid = estimate.event_grid, truth.event_grid
    return CalibrationScore(
        mirror_right=(grid.mirror_x, grid.mirror_y) == (true_grid.mirror_x, true_grid.mirror_y),
        clear_site_right=estimate.cluster.clear_site == truth.cluster.clear_site,
        map_rms_px=_rms(map_displacement(estimate, truth)),
        focal_percent=max(abs(_percent(lens.fx, true_lens.fx)), abs(_percent(lens.fy, true_lens.fy))),
        lens_rms_px=_rms(lens_displacement(lens, true_lens, array.width, array.height)),
        line_time_percent=_percent(estimate.timing.line_time_ns, truth.timing.line_time_ns),
        offset_us=offset_ns * 1e-3,
        offset_sigmas=offset_ns / sigma if sigma else float("nan"),
        latency_separated=estimate.timing.event_latency_ns is not None,
        exposure_us=1e-3 * clocks.get("exposure_correction_ns", float("nan")),
        drift_ppm=clocks.get("frame_drift_ppm", float("nan")),
        on_percent=_percent(estimate.contrast.on_threshold, truth.contrast.on_threshold),
        off_percent=_percent(estimate.contrast.off_threshold, truth.contrast.off_threshold),
        hot_found=_share(
            (estimate.defects.hot if estimate.defects else []), truth.defects.hot if truth.defects else []
        ),
        dead_found=_share(
            (estimate.defects.dead if estimate.defects else []), truth.defects.dead if truth.defects else []
        ),
        off_lattice=not is_lattice(estimate),
        off_lattice_true=not is_lattice(truth),
        nees=block_nees(estimate, truth),
    )

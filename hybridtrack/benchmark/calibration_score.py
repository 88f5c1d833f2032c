"""How far a calibrated module is from the true one."""

from dataclasses import dataclass

import numpy as np

from hybridtrack.benchmark.metrics import map_displacement
from hybridtrack.module import HybridModule


@dataclass(frozen=True)
class CalibrationScore:
    """Errors of one calibration, estimate minus truth.

    `map_rms_px`: displacement of the event map over the field, colour px. `focal_percent`: the worse of fx and
    fy. `offset_us`: frame offset against true offset plus true event latency, where the estimate includes it.
    `offset_sigmas`: the same in stated deviations. Thresholds in percent of truth.
    """

    mirror_right: bool
    clear_site_right: bool
    map_rms_px: float
    focal_percent: float
    line_time_percent: float
    offset_us: float
    offset_sigmas: float
    on_percent: float
    off_percent: float
    hot_found: float
    dead_found: float


def _percent(estimate: float | None, truth: float | None) -> float:
    if estimate is None or not truth:
        return float("nan")
    return 100.0 * (estimate / truth - 1.0)


def _share(found: list[tuple[int, int]], true: list[tuple[int, int]]) -> float:
    """The lower of precision and recall; 1 where there is nothing to find and nothing was found."""
    hits = len(set(found) & set(true))
    return min(hits / len(found) if found else 1.0, hits / len(true) if true else 1.0)


def score_calibration(estimate: HybridModule, truth: HybridModule) -> CalibrationScore:
    """Compare two modules of one layout."""
    assert estimate.timing is not None
    assert truth.timing is not None
    assert estimate.contrast is not None
    assert truth.contrast is not None
    lens, true_lens = estimate.lens_model(), truth.lens_model()
    true_offset = (truth.timing.frame_offset_ns or 0.0) - (estimate.timing.event_latency_ns or 0.0)
    true_offset += truth.timing.event_latency_ns or 0.0
    offset_ns = (
        estimate.timing.frame_offset_ns if estimate.timing.frame_offset_ns is not None else np.nan
    ) - true_offset
    epoch_ns = (estimate.timing.drift_epoch_ns or 0) - (truth.timing.drift_epoch_ns or 0)
    offset_ns -= (truth.timing.frame_drift_ppm or 0.0) * 1e-6 * epoch_ns
    sigma = estimate.uncertainty.of("timing.frame_offset_ns") if estimate.uncertainty is not None else None
    grid, true_grid = estimate.event_grid, truth.event_grid
    return CalibrationScore(
        mirror_right=(grid.mirror_x, grid.mirror_y) == (true_grid.mirror_x, true_grid.mirror_y),
        clear_site_right=estimate.cluster.clear_site == truth.cluster.clear_site,
        map_rms_px=float(np.sqrt(np.mean(np.sum(map_displacement(estimate, truth) ** 2, axis=-1)))),
        focal_percent=max(abs(_percent(lens.fx, true_lens.fx)), abs(_percent(lens.fy, true_lens.fy))),
        line_time_percent=_percent(estimate.timing.line_time_ns, truth.timing.line_time_ns),
        offset_us=offset_ns * 1e-3,
        offset_sigmas=offset_ns / sigma if sigma else float("nan"),
        on_percent=_percent(estimate.contrast.on_threshold, truth.contrast.on_threshold),
        off_percent=_percent(estimate.contrast.off_threshold, truth.contrast.off_threshold),
        hot_found=_share(
            (estimate.defects.hot if estimate.defects else []), truth.defects.hot if truth.defects else []
        ),
        dead_found=_share(
            (estimate.defects.dead if estimate.defects else []), truth.defects.dead if truth.defects else []
        ),
    )

"""Join the covariances of lens, map, clocks and thresholds into the module file's one."""

import numpy as np

from hybridtrack.calibration.contrast import ThresholdFit
from hybridtrack.calibration.timing_result import TimingResult
from hybridtrack.calibration.view_data import EventMapFit, LensFit
from hybridtrack.module import Uncertainty

METHOD = (
    "sandwich clustered by view for clocks and map; lens from the bundle adjustment, poses marginalised; thresholds "
    "from the scatter of views with the pixel model's deviation"
)


def join_blocks(lens: LensFit, event_map: EventMapFit, timing: TimingResult, thresholds: ThresholdFit) -> Uncertainty:
    """One covariance over all parameters, in the order lens, map, clocks, thresholds."""
    names = [*lens.parameters, *event_map.parameters, *timing.parameters]
    blocks = [lens.covariance, event_map.covariance, timing.covariance]
    noise, noise_sigma = thresholds.noise or (None, None)
    for name, value, sigma in (
        ("on_threshold", thresholds.on, thresholds.on_sigma),
        ("off_threshold", thresholds.off, thresholds.off_sigma),
        ("noise_width", noise, noise_sigma),
    ):
        if value is not None and sigma is not None:
            names.append(f"contrast.{name}")
            blocks.append(np.array([[sigma**2]]))
    covariance = np.zeros((len(names), len(names)))
    start = 0
    for block in blocks:
        end = start + len(block)
        covariance[start:end, start:end] = block
        start = end
    if event_map.cross_covariance is not None:
        first, last = len(lens.parameters), len(lens.parameters) + len(event_map.parameters)
        covariance[first:last, :first] = event_map.cross_covariance
        covariance[:first, first:last] = event_map.cross_covariance.T
    sigma_all = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    return Uncertainty(parameters=names, sigma=sigma_all.tolist(), covariance=covariance.tolist(), method=METHOD)

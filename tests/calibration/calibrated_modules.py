"""Calibrated modules drawn around one truth with the covariance that they state: no recording needed."""

import numpy as np
from ideal_board import small_module

from hybridtrack.module import ColourFromEvent, Defects, HybridModule, PerspectiveParameters, Uncertainty
from hybridtrack.module.event_map import LatticeTest

NAMES = (
    "lens.fx", "lens.fy", "lens.cx", "lens.cy", "lens.k1", "lens.k2", "colour_from_event.a", "colour_from_event.b",
    "colour_from_event.c", "colour_from_event.d", "colour_from_event.e", "colour_from_event.f",
    "timing.frame_offset_ns", "timing.line_time_ns", "timing.frame_drift_ppm", "contrast.on_threshold",
    "contrast.off_threshold",
)  # fmt: skip
SIGMA = np.array([0.1, 0.1, 0.09, 0.07, 1e-3, 2e-3, 2e-5, 2e-5, 2e-3, 2e-5, 2e-5, 2e-3, 3e3, 4.0, 0.07, 5e-3, 6e-3])
TRUTH = np.array([400.0, 401.0, 243.0, 157.0, -0.08, 0.02, 4.0, 0.0, 2.1, 0.0, 4.0, 0.9, 1.2e6, 3e4, 5.0, 0.25, 0.30])


def covariance() -> np.ndarray:
    """The same for all: correlated as lens terms and offset with line time are."""
    correlation = np.eye(len(NAMES))
    for first, second, value in ((0, 1, 0.97), (4, 5, -0.9), (12, 13, -0.6), (2, 3, 0.3), (6, 8, -0.8), (15, 16, 0.5)):
        correlation[first, second] = correlation[second, first] = value
    return correlation * np.outer(SIGMA, SIGMA)


def module_with(values: np.ndarray, epoch_ns: int = 5_000_000_000, **changes: object) -> HybridModule:
    """A calibrated module that says `values` (17,), in the order of NAMES, with that covariance."""
    v = dict(zip(NAMES, map(float, values), strict=True))
    base = small_module()
    event_map = ColourFromEvent(
        matrix=tuple(tuple(v[f"colour_from_event.{name}"] for name in row) for row in ("abc", "def")),
        centroid=(v["colour_from_event.c"] - 2.0, v["colour_from_event.f"] - 1.0),
        lattice=LatticeTest(consistent=True, p_value=0.4),
    )
    timing = base.timing.model_copy(
        update={
            "frame_offset_ns": v["timing.frame_offset_ns"],
            "line_time_ns": v["timing.line_time_ns"],
            "frame_drift_ppm": v["timing.frame_drift_ppm"],
            "drift_epoch_ns": epoch_ns,
        }
    )
    contrast = base.contrast.model_copy(
        update={"on_threshold": v["contrast.on_threshold"], "off_threshold": v["contrast.off_threshold"]}
    )
    total = covariance()
    module = base.model_copy(
        update={
            "lens": PerspectiveParameters(
                fx=v["lens.fx"],
                fy=v["lens.fy"],
                cx=v["lens.cx"],
                cy=v["lens.cy"],
                radial=(v["lens.k1"], v["lens.k2"], 0),
            ),
            "colour_from_event": event_map,
            "timing": timing,
            "contrast": contrast,
            "defects": Defects(hot=[(3, 4)], dead=[]),
            "uncertainty": Uncertainty(
                parameters=list(NAMES), sigma=SIGMA.tolist(), covariance=total.tolist(), method="drawn"
            ),
        }
    )
    return module.model_copy(update=changes)


def drawn(seed: int) -> HybridModule:
    """A module drawn around the truth."""
    rng = np.random.default_rng(seed)
    return module_with(rng.multivariate_normal(TRUTH, covariance(), method="cholesky"))


def shifted(name: str, amount: float) -> HybridModule:
    """The truth with one number moved."""
    values = TRUTH.copy()
    values[NAMES.index(name)] += amount
    return module_with(values)

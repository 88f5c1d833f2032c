"""Lens, clocks, contrast, defects and uncertainty of a module, as they stand in its file."""

from typing import Annotated, Any, Literal

import numpy as np
from pydantic import Field, model_validator

from hybridtrack.geometry import FisheyeLens, PerspectiveLens
from hybridtrack.module.layout import Array, Part

Lens = PerspectiveLens | FisheyeLens


class PerspectiveParameters(Part):
    """Brown-Conrady lens in colour-array pixels (Brown 1971)."""

    model: Literal["perspective"] = "perspective"
    fx: float = Field(gt=0)
    fy: float = Field(gt=0)
    cx: float
    cy: float
    radial: tuple[float, float, float] = (0.0, 0.0, 0.0)
    tangential: tuple[float, float] = (0.0, 0.0)

    def lens(self) -> PerspectiveLens:
        """The geometric model."""
        return PerspectiveLens(self.fx, self.fy, self.cx, self.cy, self.radial, self.tangential)


class FisheyeParameters(Part):
    """Fisheye lens in colour-array pixels (Kannala and Brandt 2006)."""

    model: Literal["fisheye"] = "fisheye"
    fx: float = Field(gt=0)
    fy: float = Field(gt=0)
    cx: float
    cy: float
    radial: tuple[float, float, float, float] = (0.0, 0.0, 0.0, 0.0)
    tangential: None = None

    def lens(self) -> FisheyeLens:
        """The geometric model."""
        return FisheyeLens(self.fx, self.fy, self.cx, self.cy, self.radial)


LensParameters = Annotated[PerspectiveParameters | FisheyeParameters, Field(discriminator="model")]


def lens_parameters(lens: Lens) -> PerspectiveParameters | FisheyeParameters:
    """The file's form of a geometric lens model."""
    common: dict[str, Any] = {"fx": lens.fx, "fy": lens.fy, "cx": lens.cx, "cy": lens.cy, "radial": tuple(lens.radial)}
    if isinstance(lens, PerspectiveLens):
        return PerspectiveParameters(**common, tangential=tuple(lens.tangential))  # type: ignore[arg-type]
    return FisheyeParameters(**common)


class Timing(Part):
    """Clocks of a module; the event stamp clock is the reference. Null: not known."""

    frame_offset_ns: float | None = None
    frame_drift_ppm: float | None = None
    drift_epoch_ns: int | None = None
    line_time_ns: float | None = Field(default=None, ge=0)
    exposure_correction_ns: float | None = None
    event_latency_ns: float | None = None
    row_skew_ns: float | None = None
    reference_light_dn: float | None = None

    def exposure_start_ns(self, t_start_ns: Array | float, rows_read_before: Array | float) -> Array:
        """Start of exposure on the event clock, float64 ns, of rows read `rows_read_before` after the first.

        The two arguments broadcast. Unknown terms count as zero.
        """
        stamp = np.asarray(t_start_ns, dtype=float)
        drift = (self.frame_drift_ppm or 0.0) * 1e-6 * (stamp - (self.drift_epoch_ns or 0))
        return stamp + (self.frame_offset_ns or 0.0) + drift + np.asarray(rows_read_before) * (self.line_time_ns or 0.0)

    def true_exposure_ns(self, exposure_ns: Array | float) -> Array:
        """True exposure from the stamped one, float64 ns."""
        return np.asarray(exposure_ns, dtype=float) + (self.exposure_correction_ns or 0.0)


class Contrast(Part):
    """Thresholds in natural-log units; `spread` is pixel to pixel, not uncertainty."""

    on_threshold: float | None = Field(default=None, gt=0)
    off_threshold: float | None = Field(default=None, gt=0)
    on_spread: float | None = Field(default=None, ge=0)
    off_spread: float | None = Field(default=None, ge=0)
    noise_width: float | None = Field(default=None, ge=0)
    refractory_ns: float | None = Field(default=None, ge=0)
    map_file: str | None = None
    map_sha256: str | None = None


class Defects(Part):
    """Event pixels `[x, y]` that fire without cause (hot) or not at all (dead)."""

    hot: list[tuple[int, int]] = []
    dead: list[tuple[int, int]] = []


class Uncertainty(Part):
    """One joint covariance over lens, map and clocks; `parameters` names its rows."""

    parameters: list[str] = []
    sigma: list[float] = []
    covariance: list[list[float]] = []
    method: str = ""

    @model_validator(mode="after")
    def _square(self) -> "Uncertainty":
        size = len(self.parameters)
        if len(self.sigma) != size or len(self.covariance) not in (0, size):
            raise ValueError(f"sigma and covariance must have one row for each of the {size} parameters")
        if any(len(row) != size for row in self.covariance):
            raise ValueError(f"covariance must be {size} by {size}")
        return self

    def of(self, parameter: str) -> float | None:
        """Standard deviation of one parameter, or None where it was not estimated."""
        return self.sigma[self.parameters.index(parameter)] if parameter in self.parameters else None

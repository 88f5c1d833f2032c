"""The page and the summary of a lens calibrated from photographs."""

from typing import Any

import numpy as np

from hybridtrack.calibration.photos import PhotoCalibration
from hybridtrack.module import lens_parameters
from hybridtrack.report.calibration_page import with_deviation
from hybridtrack.report.figures import SERIES, drawing, finished
from hybridtrack.report.page import Figure, Page, Section, Table


def photo_summary(result: PhotoCalibration) -> dict[str, Any]:
    """What `summary.json` holds: the lens in photograph px, its covariance, and residuals by photograph."""
    fit = result.lens_fit
    return {
        "format": "hybridtrack-photo-summary",
        "version": 1,
        "size": list(result.size),
        "lens": lens_parameters(fit.lens).model_dump(mode="json"),
        "uncertainty": {
            "parameters": list(fit.parameters),
            "sigma": np.sqrt(np.diag(fit.covariance)).tolist(),
            "covariance": fit.covariance.tolist(),
        },
        "rms_px": fit.rms_px,
        "condition": fit.condition,
        "photographs": [
            {"file": photo.path.name, "corners": len(photo.uv), "rms_px": photo.rms_px} for photo in result.photos
        ],
        "findings": result.findings,
    }


def photo_table(result: PhotoCalibration) -> Table:
    """Lens parameters with their deviations."""
    fit = result.lens_fit
    sigma = dict(zip(fit.parameters, np.sqrt(np.diag(fit.covariance)), strict=True))
    rows = [
        (
            name,
            *with_deviation(float(value), sigma.get(f"lens.{name}"), "px" if name in ("fx", "fy", "cx", "cy") else ""),
        )
        for name, value in zip(fit.lens.names, fit.lens.parameters, strict=True)
        if value or f"lens.{name}" in sigma
    ]
    rows.append(("residual, RMS an axis", f"{fit.rms_px:.4f} px", ""))
    return Table(("quantity", "value", "deviation"), tuple(rows))


def _residual_figure(result: PhotoCalibration) -> Figure:
    fit = result.lens_fit
    size = max(float(np.percentile(np.linalg.norm(fit.residuals_px, axis=1), 95)), 1e-6)
    caption = f"Corners of all photographs with residual arrows; 95 % are shorter than {size:.2f} px."
    with drawing("photo-residuals", caption) as sheet:
        sheet.axes.quiver(
            *fit.residual_uv.T, *fit.residuals_px.T, angles="xy", scale_units="xy",
            scale=size / (0.05 * result.size[0]),
            color=SERIES[0], width=0.003,
        )  # fmt: skip
        sheet.axes.set(xlim=(0, result.size[0]), ylim=(result.size[1], 0), xlabel="u, px", ylabel="v, px")
        sheet.axes.set_aspect("equal")
    return finished(sheet)


def photo_page(result: PhotoCalibration) -> Page:
    """Build the page."""
    rows = tuple((photo.path.name, str(len(photo.uv)), f"{photo.rms_px:.3f}") for photo in result.photos)
    return Page(
        title="Lens from photographs",
        subtitle=f"{len(result.photos)} photographs of {result.size[0]}x{result.size[1]} px",
        state="attention" if result.skipped else "good",
        verdict=f"Corners fit the lens to {result.lens_fit.rms_px:.3f} px RMS an axis.",
        findings=tuple(result.findings),
        sections=(
            Section("Lens", tables=(photo_table(result),), figures=(_residual_figure(result),)),
            Section("Photographs", tables=(Table(("file", "corners", "RMS px"), rows),)),
        ),
    )

"""The figures of a calibration: each shows what one block of numbers rests on."""

import numpy as np

from hybridtrack.calibration.calibrate import CalibratedView, CalibrationResult
from hybridtrack.calibration.clocks import project
from hybridtrack.report.figures import INK, SERIES, drawing, finished
from hybridtrack.report.page import Figure

Array = np.ndarray


def busiest_view(result: CalibrationResult) -> CalibratedView | None:
    """The view whose board covers the most event pixels."""
    found = [view for view in result.views if view.board is not None]
    return max(found, key=lambda view: int(np.sum(view.images.snr > 5)), default=None)


def blink_figure(result: CalibrationResult, view: CalibratedView) -> Figure:
    """Event amplitudes laid over the frame through the estimated map."""
    module, images = result.module, view.images
    position = module.frame_mode.frame_from_colour(module.event_pixel_positions())
    strong = images.snr > 5
    scale = float(np.percentile(np.abs(images.amplitude[strong]), 95)) if strong.any() else 1.0
    caption = (
        "What blinks, seen by both halves of the module. Grey: the frames with set A bright. Coloured "
        "points: event pixels, "
        "placed by the estimated map; orange fire with set A, blue against it. They must fill the squares."
    )
    with drawing("blink", caption, wide=True, columns=2, height_in=2.9) as sheet:
        whole, close = sheet.axes
        for axes, size in ((whole, 0.6), (close, 14.0)):
            axes.imshow(images.bright_dn, vmin=0, vmax=np.nanpercentile(images.bright_dn, 99.5))
            axes.scatter(
                *position[strong].T, c=images.amplitude[strong] / scale, cmap="coolwarm", vmin=-1.3, vmax=1.3, s=size,
                alpha=0.75, linewidths=0, rasterized=True,
            )  # fmt: skip
            axes.grid(False)
        whole.set(xlabel="frame column", ylabel="frame row", title=f"view {images.index}")
        assert view.board is not None
        middle = module.frame_mode.frame_from_colour(np.median(view.board.uv, axis=0))
        half = np.array([42.0, 28.0])
        low, high = middle - half, middle + half
        close.set(xlim=(low[0], high[0]), ylim=(high[1], low[1]), title="close up", xlabel="frame column")
    return finished(sheet)


def band_figure(result: CalibrationResult) -> Figure | None:
    """The bands that the rolling shutter paints, measured and modelled, for the view with the most rows."""
    rows, clocks = result.frames.rows, result.frames.clocks
    view = int(np.bincount(rows.view).argmax()) if len(rows.view) else -1
    chosen = rows[rows.view == view] if view >= 0 else rows
    if not len(chosen.row):
        return None
    share = result.frame_settings.model(chosen).shares(clocks.clocks)
    gain, residual, centred = project(chosen, share)
    with np.errstate(divide="ignore", invalid="ignore"):
        measured = np.where(np.abs(gain) > 0, centred + residual / gain, np.nan)
    shown = np.flatnonzero(np.any(chosen.weight > 0, axis=0))[:24]
    order = np.argsort(chosen.row)
    caption = (
        "Bands of the blinking target down the rows of successive frames: share of each row's exposure in "
        "which set A is "
        "bright, less the row's mean. Offset, line time and exposure are those whose model (right) matches "
        "the frames (left)."
    )
    with drawing("bands", caption, wide=True, columns=3, height_in=2.6) as sheet:
        extent = (-0.5, len(shown) - 0.5, float(chosen.row.max()), float(chosen.row.min()))
        for axes, picture, title in ((sheet.axes[0], measured, "frames"), (sheet.axes[1], centred, "model")):
            axes.imshow(picture[order][:, shown], aspect="auto", cmap="viridis", vmin=-0.6, vmax=0.6, extent=extent)
            axes.set(title=title, xlabel="frame of the view", ylabel="row" if title == "frames" else "")
            axes.grid(False)
        first = shown[0]
        sheet.axes[2].plot(chosen.row[order], measured[order][:, first], ".", ms=2, label="frame")
        sheet.axes[2].plot(chosen.row[order], centred[order][:, first], label="model")
        sheet.axes[2].set(title="first of them", xlabel="row", ylim=(-0.9, 0.9))
        sheet.axes[2].legend(loc="upper right")
    return finished(sheet)


def coverage_figure(result: CalibrationResult) -> Figure:
    """Where corners were seen, and how far each lies from the fitted lens."""
    fit, array = result.lens_fit, result.module.colour_array
    step = max(1, len(fit.residual_uv) // 500)
    uv, residual = fit.residual_uv[::step], fit.residuals_px[::step]
    size = max(float(np.percentile(np.linalg.norm(residual, axis=1), 95)), 1e-6)
    caption = (
        f"Corners over the array with residual arrows (95 % are shorter than {size:.3f} px). Arrows should "
        f"point everywhere "
        "and nowhere in common; empty corners of the picture are where the lens is least known."
    )
    with drawing("corners", caption) as sheet:
        sheet.axes.quiver(
            uv[:, 0], uv[:, 1], residual[:, 0], residual[:, 1], angles="xy", scale_units="xy",
            scale=size / (0.05 * array.width), color=SERIES[0], width=0.004,
        )  # fmt: skip
        sheet.axes.set(xlim=(0, array.width), ylim=(array.height, 0), xlabel="u, colour px", ylabel="v, colour px")
        sheet.axes.set_aspect("equal")
    return finished(sheet)


def event_residual_figure(result: CalibrationResult) -> Figure | None:
    """Displacement of local patches of event pixels from the fitted map."""
    fit, grid = result.map_fit, result.module.event_grid
    if not len(fit.residual_xy):
        return None
    size = max(float(np.percentile(np.linalg.norm(fit.residuals_px, axis=1), 95)), 1e-6)
    caption = (
        f"What is left of the event map, patch by patch of event pixels (95 % are shorter than {size:.3f} colour px)."
    )
    with drawing("event-residuals", caption) as sheet:
        sheet.axes.quiver(
            *fit.residual_xy.T, *fit.residuals_px.T, angles="xy", scale_units="xy", scale=size / (0.05 * grid.width),
            color=SERIES[1], width=0.004,
        )  # fmt: skip
        sheet.axes.set(xlim=(0, grid.width), ylim=(grid.height, 0), xlabel="x, event grid", ylabel="y, event grid")
        sheet.axes.set_aspect("equal")
    return finished(sheet)


def correlation_figure(result: CalibrationResult) -> Figure | None:
    """The joint covariance as a correlation picture."""
    uncertainty = result.module.uncertainty
    if uncertainty is None or not uncertainty.parameters:
        return None
    covariance = np.array(uncertainty.covariance)
    sigma = np.sqrt(np.maximum(np.diag(covariance), 1e-300))
    names = [name.split(".", 1)[-1].removesuffix("_ns") for name in uncertainty.parameters]
    with drawing("correlation", "Correlation of all estimated numbers.", height_in=3.4) as sheet:
        image = sheet.axes.imshow(covariance / np.outer(sigma, sigma), cmap="RdBu_r", vmin=-1, vmax=1)
        sheet.axes.set_xticks(range(len(names)), names, rotation=90, fontsize=6.5)
        sheet.axes.set_yticks(range(len(names)), names, fontsize=6.5)
        sheet.axes.grid(False)
        sheet.axes.tick_params(colors=INK)
        sheet.canvas.colorbar(image, ax=sheet.axes, shrink=0.8)
    return finished(sheet)

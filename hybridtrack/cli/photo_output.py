"""What `hybridtrack calibrate --photos` leaves behind."""

from pathlib import Path

import numpy as np

from hybridtrack.calibration.photos import PhotoCalibration
from hybridtrack.cli.console import print_findings, print_table, report_written
from hybridtrack.errors import ModuleMismatchError
from hybridtrack.files import write_json
from hybridtrack.geometry import Lens
from hybridtrack.module import HybridModule, Uncertainty, lens_parameters, save_module
from hybridtrack.report.page import write_page
from hybridtrack.report.photo_page import photo_page, photo_summary, photo_table


def lens_on_colour_array(lens: Lens, module: HybridModule) -> tuple[Lens, np.ndarray]:
    """The lens in colour px from one in frame px, and what each parameter was multiplied by (P,)."""
    mode = module.frame_mode
    scale = np.ones(len(lens.names))
    scale[:4] = mode.binning
    parameters = lens.parameters * scale
    parameters[2:4] = mode.colour_from_frame(lens.parameters[2:4])
    return lens.with_parameters(parameters), scale


def _module_with_lens(result: PhotoCalibration, nominal: HybridModule) -> HybridModule:
    fit, mode = result.lens_fit, nominal.frame_mode
    if result.size != (mode.width, mode.height):
        raise ModuleMismatchError(
            f"photographs of {mode.width}x{mode.height} px are required by the module's frame_mode, "
            f"got {result.size[0]}x{result.size[1]}"
        )
    lens, scale = lens_on_colour_array(fit.lens, nominal)
    by_name = dict(zip((f"lens.{name}" for name in lens.names), scale, strict=True))
    turn = np.diag([by_name.get(name, 1.0) for name in fit.parameters])
    covariance = turn @ fit.covariance @ turn.T
    uncertainty = Uncertainty(
        parameters=list(fit.parameters),
        sigma=np.sqrt(np.diag(covariance)).tolist(),
        covariance=covariance.tolist(),
        method="bundle adjustment of photographs, lens only",
    )
    findings = [*result.findings, "lens from photographs; event map, clocks and contrast are not calibrated"]
    return nominal.model_copy(update={"lens": lens_parameters(lens), "uncertainty": uncertainty, "findings": findings})


def write_photo_calibration(result: PhotoCalibration, out: Path, nominal: HybridModule | None) -> None:
    """Write summary.json and report.html, and with a nominal module also calibrated.module.json; print the numbers."""
    if nominal is not None:
        save_module(_module_with_lens(result, nominal), out / "calibrated.module.json")
    write_json(out / "summary.json", photo_summary(result))
    write_page(photo_page(result), out / "report.html")
    print_table(photo_table(result), "Lens from photographs")
    print_findings(result.findings)
    report_written(out / "report.html")

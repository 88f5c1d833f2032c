"""One recording calibrated, held against limits, and written."""

from dataclasses import dataclass
from pathlib import Path
from typing import Any

from hybridtrack.calibration import CalibrationOptions, CalibrationResult, calibrate, summary
from hybridtrack.calibration.limits import LimitCheck, Limits, check_limits
from hybridtrack.calibration.named_numbers import Number, named_numbers
from hybridtrack.cli.console import ProgressCallback
from hybridtrack.errors import OptionError
from hybridtrack.files import write_json
from hybridtrack.module import ContrastMap, HybridModule, Target, save_contrast_map, save_module
from hybridtrack.recording import Recording
from hybridtrack.report.calibration_page import calibration_page
from hybridtrack.report.page import Section, write_page
from hybridtrack.report.repeatability_page import limits_section, limits_summary

MAP_NAME = "calibrated.contrast.h5"


@dataclass(frozen=True)
class CalibrationJob:
    """What all recordings of a command share; `nominal` None takes the module that each recording names."""

    target: Target
    nominal: HybridModule | None
    lens_model: str | None = None
    limits: Limits | None = None
    limits_source: str = ""


@dataclass(frozen=True)
class Calibrated:
    """One recording's outcome; `checks` is empty without limits."""

    path: Path
    result: CalibrationResult
    summary: dict[str, Any]
    numbers: dict[str, Number]
    checks: list[LimitCheck]

    @property
    def passed(self) -> bool:
        """Whether every limit holds."""
        return all(check.passed for check in self.checks)


def calibrate_file(path: Path, job: CalibrationJob, progress: ProgressCallback) -> Calibrated:
    """Calibrate one recording. Raises what `calibrate` raises, and OptionError where no module is named."""
    with Recording.open(path) as opened:
        nominal = job.nominal if job.nominal is not None else opened.module
        if nominal is None:
            raise OptionError(f"{path}: names no module; --module with a nominal one is required")
        result = calibrate(opened, job.target, nominal, CalibrationOptions(lens_model=job.lens_model), progress)
    plain = summary(result)
    numbers = named_numbers(result.module, plain)
    checks = check_limits(numbers, job.limits) if job.limits is not None else []
    return Calibrated(path, result, plain, numbers, checks)


def _with_map(result: CalibrationResult, path: Path) -> HybridModule:
    """The module, naming the map of its thresholds, which is written to `path`; without where none was measured."""
    several, contrast = result.thresholds.several, result.module.contrast
    if several is None or contrast is None:
        return result.module
    maps = several.maps
    digest = save_contrast_map(ContrastMap(maps.on, maps.off, maps.on_sigma, maps.off_sigma), path)
    named = contrast.model_copy(update={"map_file": path.name, "map_sha256": digest})
    return result.module.model_copy(update={"contrast": named})


def write_calibration(
    done: Calibrated,
    job: CalibrationJob,
    out: Path,
    more: dict[str, Any] | None = None,
    sections: tuple[Section, ...] = (),
) -> None:
    """Write calibrated.module.json, its threshold map where there is one, summary.json with `more`, and report.html
    with `sections` after its own.
    """
    plain = done.summary | (more or {})
    if done.checks:
        plain |= {"limits": limits_summary(done.checks, job.limits_source)}
        sections = (limits_section(done.checks, job.limits_source), *sections)
    save_module(_with_map(done.result, out / MAP_NAME), out / "calibrated.module.json")
    write_json(out / "summary.json", plain)
    write_page(calibration_page(done.result, str(done.path), sections), out / "report.html")

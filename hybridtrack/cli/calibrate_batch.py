"""A lot of recordings, calibrated one after the other: a refusal of one does not stop the rest."""

from pathlib import Path

from hybridtrack.calibration.batch import BatchEntry, batch_csv, spread_csv, spreads
from hybridtrack.cli.calibration_output import CalibrationJob, calibrate_file, write_calibration
from hybridtrack.cli.console import console, print_findings, print_table, report_written, shown_progress
from hybridtrack.errors import HybridtrackError, OptionError
from hybridtrack.files import write_json, write_text
from hybridtrack.report.batch_page import batch_page, entry_table, spread_table
from hybridtrack.report.page import write_page


def recordings_of(paths: list[Path]) -> dict[str, Path]:
    """Recordings by a name of their own, folders taken as the *.h5 in them. Raises OptionError where there are none."""
    files = [file for path in paths for file in (sorted(path.glob("*.h5")) if path.is_dir() else [path])]
    if not files:
        raise OptionError(
            f"calibrate --batch: recordings or folders of *.h5 are required, got {len(paths)} without any"
        )
    named: dict[str, Path] = {}
    for file in files:
        name, number = file.stem, 2
        while name in named:
            name, number = f"{file.stem}-{number}", number + 1
        named[name] = file
    return named


def _entry(name: str, path: Path, job: CalibrationJob, out: Path, stage: str) -> BatchEntry:
    with shown_progress() as progress:
        try:
            done = calibrate_file(path, job, lambda _, fraction: progress(stage, fraction))
        except HybridtrackError as refusal:
            return BatchEntry(name, refusal=str(refusal))
    write_calibration(done, job, out / name)
    failed = tuple(f"{check.limit.name}: {check.reason}" for check in done.checks if not check.passed)
    module, lens_model = done.result.module, done.result.lens_fit.model
    return BatchEntry(name, module.name, module.serial, done.numbers, lens_model, failed_limits=failed)


def calibrate_lot(paths: list[Path], job: CalibrationJob, out: Path) -> bool:
    """Calibrate all, write each one's folder, batch.csv, spread.csv, summary.json, report.html; whether all pass."""
    named = recordings_of(paths)
    entries = [
        _entry(name, path, job, out, f"{number} of {len(named)}: {name}")
        for number, (name, path) in enumerate(named.items(), start=1)
    ]
    found = spreads(entries)
    page = batch_page(entries, found)
    write_text(out / "batch.csv", batch_csv(entries))
    write_text(out / "spread.csv", spread_csv(found))
    states = {
        entry.name: {"state": entry.state, "reason": entry.refusal or "; ".join(entry.failed_limits)}
        for entry in entries
    }
    outliers = {spread.name: list(spread.outliers) for spread in found if spread.outliers}
    write_json(out / "summary.json", {"recordings": states, "outliers": outliers})
    write_page(page, out / "report.html")
    print_table(entry_table(entries, found), "Recordings")
    if found:
        print_table(spread_table(found), "Spread")
    print_findings(page.findings)
    console.print(page.verdict, soft_wrap=True)
    report_written(out / "report.html")
    return all(entry.state == "calibrated" for entry in entries)

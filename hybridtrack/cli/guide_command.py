"""`hybridtrack guide`: which view of the target to take next, while recordings arrive."""

import time
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from hybridtrack.cli.console import console, print_findings, print_table, report_written
from hybridtrack.errors import HybridtrackError, MissingFileError, OptionError
from hybridtrack.report.page import BLINK_CAUTION

if TYPE_CHECKING:
    from hybridtrack.calibration.guide import Guidance
    from hybridtrack.calibration.guide_views import RecordingLook
    from hybridtrack.module import HybridModule, Target


class Watch:
    """Recordings looked at so far: a file is looked at again when its size or time of change differs."""

    def __init__(self, source: Path, target: "Target", nominal: "HybridModule | None") -> None:
        self.source, self.target, self.nominal = source, target, nominal
        self.seen: dict[Path, tuple[int, int]] = {}
        self.looks: dict[Path, RecordingLook] = {}
        self.refusals: dict[Path, HybridtrackError] = {}

    def _files(self) -> list[Path]:
        if not self.source.exists():
            raise MissingFileError(f"{self.source}: a folder or a recording is required, found neither")
        return sorted(self.source.glob("*.h5")) if self.source.is_dir() else [self.source]

    def _look(self, path: Path) -> None:
        from hybridtrack.calibration.guide_views import look_at
        from hybridtrack.recording import Recording

        self.refusals.pop(path, None)
        try:
            with Recording.open(path, growing=True) as opened:
                nominal = self.nominal if self.nominal is not None else opened.module
                if nominal is None:
                    raise OptionError(f"{path}: names no module; --module with a nominal one is required")
                self.nominal = nominal
                self.looks[path] = look_at(opened, self.target, nominal)
        except HybridtrackError as refusal:
            self.looks.pop(path, None)
            self.refusals[path] = refusal

    def update(self) -> bool:
        """Look at what is new; whether there was anything."""
        changed = False
        for path in self._files():
            state = path.stat()
            signature = (state.st_size, state.st_mtime_ns)
            if self.seen.get(path) != signature:
                self.seen[path] = signature
                self._look(path)
                changed = True
        return changed

    def guidance(self) -> "Guidance":
        """What all of them cover. Raises OptionError where no module is known yet."""
        from hybridtrack.calibration.guide import guide

        if self.nominal is None:
            raise OptionError("guide: --module with a nominal module is required where no recording names one")
        return guide(list(self.looks.values()), self.target, self.nominal)


def _show(watch: Watch, out: Path | None) -> "Guidance":
    from hybridtrack.report.guide_page import guide_page, need_table
    from hybridtrack.report.page import write_page

    guidance = watch.guidance()
    print_table(need_table(guidance), f"{len(guidance.stands)} views from {len(watch.looks)} recordings")
    refused = [f"{path.name}: {refusal}" for path, refusal in watch.refusals.items()]
    print_findings([*(f"WARNING {warning}" for warning in guidance.warnings), *guidance.misses, *refused])
    console.print(guidance.next_step, soft_wrap=True, markup=False)
    if out is not None:
        assert watch.nominal is not None
        write_page(guide_page(guidance, watch.nominal, str(watch.source)), out / "report.html")
        report_written(out / "report.html")
    return guidance


def guide_command(
    source: Annotated[Path, typer.Argument(help="Folder that recordings arrive in, or one recording that grows.")],
    target: Annotated[Path, typer.Option(help="The blinking target (*.target.json).")],
    module: Annotated[Path | None, typer.Option(help="Nominal module; else the one that the recording names.")] = None,
    once: Annotated[bool, typer.Option("--once", help="Look once and end, instead of watching.")] = False,
    every_s: Annotated[float, typer.Option(help="Seconds from look to look.")] = 2.0,
    out: Annotated[Path | None, typer.Option(help="Folder for report.html with what is covered.")] = None,
) -> None:
    """Say which view of the target to take next, and warn while there is time.

    Watches a folder for new recordings, or one recording that another process appends to (HDF5, single writer, multiple
    readers), until all is covered: tilt both ways about both axes, turn, all corners of the picture, near and far.
    Warns of saturation, readout overload, and a blink locked to the frame rate. Control-C ends it.

    Example: hybridtrack guide captures --target calib_targets/lamp_panel.target.json --module
    calib_targets/wren.module.json
    """
    from hybridtrack.module import load_module, load_target

    if not 0.1 <= every_s <= 600.0:
        raise OptionError(f"--every-s: 0.1 to 600 is required, got {every_s:g}")
    watch = Watch(source, load_target(target), load_module(module) if module is not None else None)
    watch.update()
    if once:
        if source in watch.refusals:  # the one recording that was named
            raise watch.refusals[source]
        _show(watch, out)
        return
    changed = True
    while True:
        if changed and watch.nominal is not None and _show(watch, out).complete:
            return
        time.sleep(every_s)
        changed = watch.update()


guide_command.__doc__ = f"{guide_command.__doc__}\n\n    Caution: {BLINK_CAUTION}"

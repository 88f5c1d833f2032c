"""`hybridtrack target`: a blinking target in true size for printing, and for a screen as page, pictures and film."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from hybridtrack.cli.console import console, report_written
from hybridtrack.errors import OptionError
from hybridtrack.report.page import BLINK_CAUTION

if TYPE_CHECKING:
    from hybridtrack.module import Target
    from hybridtrack.report.target_screen import ScreenBoard
    from hybridtrack.report.target_sheet import Sheet


def _size_px(text: str) -> tuple[int, int]:
    try:
        width, height = (int(number) for number in text.lower().split("x"))
    except ValueError:
        raise OptionError(f"--screen-px: WIDTHxHEIGHT in pixels is required, got '{text}'") from None
    return width, height


def _sheet(target: "Target", sheet: str, orientation: str, square_mm: float | None, fit: bool) -> "Sheet | None":
    """The sheet to print, or None where none is to be made."""
    from hybridtrack.report.target_sheet import SHEETS_MM, fitted, lay_out, scaled

    if sheet == "none" or (target.is_counterphase and sheet == "auto"):
        return None
    if square_mm is not None:
        if fit:
            raise OptionError("target: --square-mm or --fit is required, got both")
        if not 1.0 <= square_mm <= 500.0:
            raise OptionError(f"--square-mm: 1 to 500 is required, got {square_mm:g}")
        target = scaled(target, square_mm * 1e-3 / target.square_xy_m[0])
    if fit:
        if sheet not in SHEETS_MM:
            raise OptionError(f"--fit: --sheet with one of {', '.join(SHEETS_MM)} is required, got '{sheet}'")
        target = fitted(target, sheet, orientation)  # type: ignore[arg-type]
    return lay_out(target, sheet, orientation)  # type: ignore[arg-type]


def _write_printed(sheet: "Sheet", measured_mm: float | None, out: Path) -> None:
    from hybridtrack.module import save_target
    from hybridtrack.report.target_print import write_sheet
    from hybridtrack.report.target_sheet import scaled

    target = sheet.target
    if measured_mm is not None:
        target = scaled(target, measured_mm / sheet.ruler_mm)
    for path in write_sheet(sheet, out):
        report_written(path)
    save_target(target, out / "printed.target.json")
    report_written(out / "printed.target.json")
    across, down = (size * 1e3 for size in target.square_xy_m)
    console.print(
        f"{sheet.name}, {sheet.orientation}: squares of {across:.4g} x {down:.4g} mm. Print at 100 %, then measure the "
        f"line of {sheet.ruler_mm:g} mm; where it differs, run again with --ruler-measured-mm.",
        soft_wrap=True,
    )


def _write_screen(board: "ScreenBoard", seconds: float, out: Path) -> None:
    from hybridtrack.module import save_target
    from hybridtrack.report.target_screen import write_film, write_pngs

    pictures = write_pngs(board, out / "screen")
    report_written(pictures[0].parent)
    report_written(write_film(board, out / "screen.mp4", seconds))
    if board.screen.pixel_mm is not None:
        save_target(board.shown_target(), out / "screen.target.json")
        report_written(out / "screen.target.json")
    else:
        console.print("No screen.target.json was written: the size of a pixel is not known; say --pixel-mm.")
    console.print(
        f"{board.refreshes} refreshes a cycle, {board.bright} of them bright: {board.blink_hz:.6g} Hz on a display of "
        f"{board.screen.display_hz:g} Hz; squares of {board.square_px[0]} x {board.square_px[1]} px.",
        soft_wrap=True,
    )


def target_command(
    target: Annotated[Path, typer.Argument(help="The target to make (*.target.json).")],
    out: Annotated[Path, typer.Option(help="Folder for what is made.")] = Path("target"),
    sheet: Annotated[str, typer.Option(help="auto (the smallest that holds it), A4, A3, A2, or none.")] = "auto",
    orientation: Annotated[str, typer.Option(help="auto, landscape or portrait.")] = "auto",
    square_mm: Annotated[float | None, typer.Option(help="Scale the squares to this size across.")] = None,
    fit: Annotated[bool, typer.Option("--fit", help="Scale the squares to fill the named sheet.")] = False,
    ruler_measured_mm: Annotated[
        float | None, typer.Option(help="Length of the printed line as measured; goes into printed.target.json.")
    ] = None,
    display_hz: Annotated[
        float | None, typer.Option(help="Also make PNG frames and a film, for a display of this refresh rate.")
    ] = None,
    screen_px: Annotated[str, typer.Option(help="Size of that display.")] = "1920x1080",
    pixel_mm: Annotated[float | None, typer.Option(help="Pixel pitch of that display, for screen.target.json.")] = None,
    square_px: Annotated[int | None, typer.Option(help="Square across, px; else the largest that fits.")] = None,
    refreshes: Annotated[int | None, typer.Option(help="Refreshes a cycle; else nearest to the target's rate.")] = None,
    seconds: Annotated[float, typer.Option(help="Length of the film.")] = 20.0,
    log_step: Annotated[
        float | None, typer.Option(help="Natural log of bright over dark on the screen; 2.1 is 8 to 1.")
    ] = None,
    accept_risk_band: Annotated[
        bool, typer.Option("--accept-risk-band", help="Make a film that flashes 3 to 30 times a second all the same.")
    ] = False,
) -> None:
    """Make a target: SVG and PDF in true size, a page that blinks it full screen, PNG frames and a film.

    A shuttered board is printed on film, clear where set A is, and laid over a strobed lamp. A counterphase board needs
    a screen: open screen.html on it. Squares keep their size unless --square-mm or --fit says so; what was made is
    described in printed.target.json or screen.target.json, and `calibrate` takes those.

    Example: hybridtrack target calib_targets/lamp_panel.target.json --sheet A3 --out panel
    """
    from hybridtrack.module import load_target
    from hybridtrack.report.target_page import write_target_page
    from hybridtrack.report.target_screen import DEFAULT_LOG_STEP, Screen, lay_out_on_screen

    wished = load_target(target)
    printed = _sheet(wished, sheet, orientation, square_mm, fit)
    if ruler_measured_mm is not None and (printed is None or abs(ruler_measured_mm / printed.ruler_mm - 1.0) > 0.1):
        length = "a printed sheet" if printed is None else f"a length within a tenth of {printed.ruler_mm:g} mm"
        raise OptionError(f"--ruler-measured-mm: {length} is required, got {ruler_measured_mm:g}")
    board = None
    if display_hz is not None:
        board = lay_out_on_screen(
            wished,
            Screen(_size_px(screen_px), display_hz, pixel_mm),
            square_px=square_px,
            refreshes=refreshes,
            log_step=log_step or DEFAULT_LOG_STEP,
            accept_risk_band=accept_risk_band,
        )
    page = write_target_page(wished, out / "screen.html", None if log_step is None else (log_step,))
    if printed is not None:
        _write_printed(printed, ruler_measured_mm, out)
    elif sheet != "none":
        console.print("No sheet: both sets of a counterphase board brighten in turn, and a print cannot.")
    if board is not None:
        _write_screen(board, seconds, out)
    console.print(f"Caution: {BLINK_CAUTION}", soft_wrap=True)
    report_written(page)


target_command.__doc__ = f"{target_command.__doc__}\n\n    Caution: {BLINK_CAUTION}"

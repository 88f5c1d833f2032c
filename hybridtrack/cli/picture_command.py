"""`hybridtrack picture`: log brightness at any instant, as pictures and clips."""

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from hybridtrack.cli.console import print_findings, print_table, report_written, shown_progress

if TYPE_CHECKING:
    from hybridtrack.tracking.picture import Picture

CLIP_NAME = "clip.mp4"


@dataclass(frozen=True)
class Note:
    """What the summary says of one picture."""

    t_ns: int
    source: str
    frames: tuple[int, ...]
    saturated: int
    missing: str

    @staticmethod
    def of(picture: "Picture") -> "Note":
        """Keep the words and drop the pixels."""
        saturated = int(picture.saturated.sum())
        return Note(picture.t_ns, picture.source, picture.frames, saturated, picture.missing)


def instant_ns(option: str, text: str, first_ns: int) -> int:
    """Read an instant in seconds, to the nanosecond: on the event clock, or with a leading + after `first_ns`.

    Raises OptionError.
    """
    from decimal import Decimal, InvalidOperation

    from hybridtrack.errors import OptionError

    try:
        number = Decimal(text) * 10**9
        whole = int(number.to_integral_value())
    except (InvalidOperation, ValueError, OverflowError):
        raise OptionError(f"{option}: seconds are required, such as 0.35 or +0.35, got '{text}'") from None
    return first_ns + whole if text.strip().startswith("+") else whole


def clip_instants_ns(rate_hz: float, begin_ns: int, end_ns: int) -> Any:
    """Instants (K,) int64, `rate_hz` of them a second. Raises OptionError."""
    import numpy as np

    from hybridtrack.errors import OptionError

    if not rate_hz > 0:
        raise OptionError(f"--rate: pictures a second above zero are required, got {rate_hz:g}")
    if end_ns <= begin_ns:
        raise OptionError(
            f"--from, --to: an end after the beginning is required, got {1e-9 * begin_ns:.6f} to {1e-9 * end_ns:.6f} s"
        )
    count = int((end_ns - begin_ns) * 1e-9 * rate_hz) + 1
    return begin_ns + np.rint(np.arange(count) * (1e9 / rate_hz)).astype(np.int64)


def findings_of(notes: list[Note], defects: int) -> list[str]:
    """Plain sentences on what was masked and what is missing."""
    found = []
    if defects:
        found.append(f"{defects} event pixels are hot or dead by the module file: filled from their neighbours")
    most = max((note.saturated for note in notes), default=0)
    if most:
        found.append(f"up to {most} frame pixels are saturated: drawn white, their light is a lower bound")
    for clause, mine in by_clause(notes):
        empty = [note for note in mine if note.source == "none"]
        one_sided = len(mine) - len(empty)
        where = f"{1e-9 * mine[0].t_ns:.6f} to {1e-9 * mine[-1].t_ns:.6f} s"
        if empty:
            found.append(
                f"{clause}: no picture at {len(empty)} of the instants from {1e-9 * empty[0].t_ns:.6f} to "
                f"{1e-9 * empty[-1].t_ns:.6f} s; the clip repeats the one before in a marked border"
            )
        if one_sided:
            found.append(f"{clause}: {one_sided} pictures about {where} rest on the frames of one side alone")
    return found


def by_clause(notes: list[Note]) -> Iterator[tuple[str, list[Note]]]:
    """Notes that miss something, by what they miss."""
    for clause in dict.fromkeys(note.missing for note in notes if note.missing):
        yield clause, [note for note in notes if note.missing == clause]


def picture_command(
    recording: Annotated[Path, typer.Argument(help="Recording with frames and events (*.h5).")],
    module: Annotated[
        Path | None, typer.Option(help="Calibrated module (*.module.json); by default the one the recording carries.")
    ] = None,
    at: Annotated[
        list[str] | None,
        typer.Option(help="Instant in seconds on the event clock; +0.35 counts from the first frame. May be repeated."),
    ] = None,
    rate: Annotated[float | None, typer.Option(help="Write a clip of so many pictures a second.")] = None,
    begin: Annotated[str | None, typer.Option("--from", help="Where the clip begins, as --at.")] = None,
    end: Annotated[str | None, typer.Option("--to", help="Where the clip ends, as --at.")] = None,
    shown_rate: Annotated[float, typer.Option(help="Pictures of the clip that a player shows a second.")] = 30.0,
    live: Annotated[
        bool, typer.Option("--live", help="Use only what a module has delivered by the instant: forward from a frame.")
    ] = False,
    bits: Annotated[int, typer.Option(help="Depth of the pictures' grey: 8 or 16.")] = 8,
    out: Annotated[Path, typer.Option(help="Folder for picture_*.png, clip.mp4, summary.json.")] = Path("out"),
) -> None:
    """Reconstruct what the module saw at any instant, sharp, from frames and the events between them.

    A frame is blurred over its exposure and comes some dozen times a second; events say how light moved meanwhile.
    Together they give a picture without motion blur, without the skew of a rolling shutter, at any instant and any
    rate. Frames before and after the instant are both used; with --live only those that are complete.

    Grey is linear in log brightness; summary.json says which level is black and which is white, where each picture
    comes from, and what is masked. Where events were lost on every way from a frame, --at is refused, and a clip marks
    the time. Needs a calibrated module: clocks, map and contrast thresholds; threshold maps beside the module file are
    used.

    Examples:

    hybridtrack picture lap.h5 --module bench-1/calibrated.module.json --at +0.35 --out look

    hybridtrack picture lap.h5 --module bench-1/calibrated.module.json --rate 1000 --from +0.3 --to +0.5 --out slow
    """
    from hybridtrack.cli.module_choice import module_for
    from hybridtrack.errors import OptionError
    from hybridtrack.module import load_contrast_map
    from hybridtrack.recording import Recording
    from hybridtrack.tracking.picture import covered_ns

    if not at and rate is None:
        raise OptionError("at least one of --at and --rate is required, got neither")
    if bits not in (8, 16):
        raise OptionError(f"--bits: 8 or 16 is required, got {bits}")
    if not 1.0 <= shown_rate <= 240.0:
        raise OptionError(f"--shown-rate: 1 to 240 pictures a second are required, got {shown_rate:g}")
    with Recording.open(recording) as opened:
        description = module_for(opened, module)
        thresholds = None if module is None else load_contrast_map(description, module)
        first, last = covered_ns(opened, description, live)
        instants = sorted({instant_ns("--at", text, first) for text in at or []})
        task = PictureTask(opened, description, thresholds, live, out)
        pictures = task.pictures(instants, bits)
        clip: dict[str, Any] | None = None
        if rate is not None:
            start = first if begin is None else instant_ns("--from", begin, first)
            stop = last if end is None else instant_ns("--to", end, first)
            clip = task.clip(clip_instants_ns(rate, start, stop), shown_rate)
    task.report(str(recording), pictures, clip)


class PictureTask:
    """Writes pictures and clips of one recording into a folder, and says what they are."""

    def __init__(self, recording: Any, module: Any, thresholds: Any, live: bool, out: Path) -> None:
        from hybridtrack.tracking.picture import PictureOptions

        self._recording, self._module, self._thresholds = recording, module, thresholds
        self._options = PictureOptions(live=live)
        self._out = out
        self._notes: list[Note] = []

    def _made(self, instants: Any, progress: Any) -> "Iterator[Picture]":
        from hybridtrack.tracking.picture import reconstruct

        return reconstruct(self._recording, self._module, instants, self._thresholds, self._options, progress)

    def pictures(self, instants: list[int], bits: int) -> list[dict[str, Any]]:
        """Write a PNG for each instant; a line for each. Raises DegenerateDataError before any is written."""
        from hybridtrack.errors import DegenerateDataError
        from hybridtrack.tracking.picture_files import Greys, write_png

        with shown_progress() as progress:
            made = list(self._made(instants, progress))
        for picture in made:
            if picture.source == "none":
                raise DegenerateDataError(
                    f"{self._recording.path}: no picture at {1e-9 * picture.t_ns:.6f} s: "
                    f"events are required from a frame up to the instant, got {picture.missing}"
                )
        lines = []
        for picture in made:
            note, greys = Note.of(picture), Greys.of(picture.log_light)
            name = f"picture_{picture.t_ns}.png"
            write_png(self._out / name, picture, greys, bits)
            self._notes.append(note)
            lines.append({"file": name, **vars(note), **greys_of(greys)})
        return lines

    def clip(self, instants: Any, shown_hz: float) -> dict[str, Any]:
        """Write the clip; what the summary says of it."""
        from hybridtrack.tracking.picture_files import write_clip

        notes: list[Note] = []
        with shown_progress() as progress:
            made = self._made(instants, lambda _, part: progress("clip", part))
            written = write_clip(self._out / CLIP_NAME, made, shown_hz, lambda picture: notes.append(Note.of(picture)))
        self._notes += notes
        return {
            "file": CLIP_NAME,
            "pictures": len(notes),
            "from_ns": notes[0].t_ns,
            "to_ns": notes[-1].t_ns,
            "shown_hz": shown_hz,
            "sources": {name: sum(note.source == name for note in notes) for name in SOURCES},
            "flashes_a_second": written.flashes_a_second,
            **greys_of(written.greys),
        }

    def report(self, title: str, pictures: list[dict[str, Any]], clip: dict[str, Any] | None) -> None:
        """Write summary.json, print the table and the findings."""
        from hybridtrack.files import write_json
        from hybridtrack.report.page import Table

        defects = self._module.defects
        bad = 0 if defects is None else len({*defects.hot, *defects.dead})
        findings = findings_of(self._notes, bad)
        if clip is not None:
            findings += flash_findings(clip["flashes_a_second"])
        summary = {"pictures": pictures, "clip": clip, "live": self._options.live, "findings": findings}
        write_json(self._out / "summary.json", summary)
        rows = [
            (line["file"], f"{1e-9 * line['t_ns']:.6f}", line["source"], str(line["saturated"])) for line in pictures
        ]
        if clip is not None:
            used = ", ".join(f"{count} {name}" for name, count in clip["sources"].items() if count)
            times = f"{1e-9 * clip['from_ns']:.6f} to {1e-9 * clip['to_ns']:.6f}"
            rows.append((CLIP_NAME, times, used, str(max(note.saturated for note in self._notes))))
        print_table(Table(("file", "instant [s]", "frames carried", "saturated px"), tuple(rows), prose=(2,)), title)
        print_findings(findings)
        report_written(self._out / (pictures[-1]["file"] if clip is None else CLIP_NAME))


def flash_findings(flashes_a_second: int) -> list[str]:
    """The caution that a clip needs which flashes."""
    from hybridtrack.report.target_caution import FLASHES_A_SECOND

    if flashes_a_second <= FLASHES_A_SECOND:
        return []
    return [
        f"CAUTION: the clip flashes up to {flashes_a_second} times in a second, above the {FLASHES_A_SECOND} of WCAG "
        "2.3.1, and can trigger photosensitive seizures: do not show it to the public; another --rate or --shown-rate "
        "changes it"
    ]


SOURCES = ("both", "forward", "backward", "none")


def greys_of(greys: Any) -> dict[str, float]:
    """What is drawn black and white, natural log of light as a share of the frame's white."""
    return {"log_light_black": greys.black, "log_light_white": greys.white}

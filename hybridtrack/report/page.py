"""One self-contained HTML page: verdict first, then what it rests on. No script, nothing fetched, light and dark."""

from dataclasses import dataclass, field
from pathlib import Path

from hybridtrack import __version__
from hybridtrack.files import write_text

SYNTHETIC_NOTICE = (
    "Figures on this page come from synthesis. No recording of a real hybrid module was available to this "
    "project: the gap between its pixel models and silicon is untested."
)
POSE_CAUTION = (
    "A robot that moves on estimated poses needs an independent stop; the health column is not a safety function. "
    "Local codes and licensed practice come first."
)
BLINK_CAUTION = (
    "A blinking target can trigger photosensitive seizures, and a strobed lamp can be brighter than it looks "
    "(photobiological safety: IEC 62471). Local codes and licensed practice come first."
)


@dataclass(frozen=True)
class Figure:
    """One drawn figure: inline `svg`, a `caption` that says what to see in it, and whether it spans the page."""

    svg: str
    caption: str
    wide: bool = False


@dataclass(frozen=True)
class Table:
    """A table of ready text: `columns` are its heads, each of `rows` has as many cells; `prose` columns read from the
    left, the first always does, others are numbers."""

    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    caption: str = ""
    prose: tuple[int, ...] = ()


@dataclass(frozen=True)
class Section:
    """A heading, a paragraph in plain words, then tables and figures."""

    title: str
    text: str = ""
    tables: tuple[Table, ...] = ()
    figures: tuple[Figure, ...] = ()


@dataclass(frozen=True)
class Page:
    """What a page says. `state` is good, attention or bad and colours the verdict; `facts` are (name, value) pairs."""

    title: str
    subtitle: str
    state: str
    verdict: str
    facts: tuple[tuple[str, str], ...] = ()
    findings: tuple[str, ...] = ()
    sections: tuple[Section, ...] = ()
    cautions: tuple[str, ...] = ()
    notices: tuple[str, ...] = field(default=())


def render(page: Page) -> str:
    """The page as one HTML text."""
    import jinja2  # here, for commands that only print tables load this module too

    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("hybridtrack", "report"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template("page.html").render(page=page, version=__version__)


def write_page(page: Page, path: Path | str) -> None:
    """Write the page atomically."""
    write_text(path, render(page))

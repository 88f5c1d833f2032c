"""The page of a tracker run: how many features, for how long, by what, and how they ended."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from hybridtrack.module import HybridModule
from hybridtrack.recording import Events
from hybridtrack.report.figures import ON_PICTURE, SERIES, drawing, finished
from hybridtrack.report.page import Figure, Page, Section, Table
from hybridtrack.tracking import Tracks

Array = np.ndarray


@dataclass(frozen=True)
class Lives:
    """One line a feature: `id` (N,), first and last stamp ns (N,), number of samples, last state and reason."""

    id: Array
    first_ns: Array
    last_ns: Array
    samples: Array
    state: Array
    reason: Array

    @property
    def seconds(self) -> Array:
        """Span (N,) of each feature."""
        return (self.last_ns - self.first_ns) * 1e-9


def lives_of(tracks: Tracks) -> Lives:
    """Summarise tracks sorted by time, feature by feature; a feature ends where it is first lost or out of view."""
    following = tracks.with_state("alive") | tracks.with_state("weak")
    ids, first, inverse, counts = np.unique(tracks.id, return_index=True, return_inverse=True, return_counts=True)
    last_ns = np.full(len(ids), np.iinfo(np.int64).min)
    np.maximum.at(last_ns, inverse[following], tracks.t_ns[following])
    end = len(tracks) - 1 - np.unique(tracks.id[::-1], return_index=True)[1]
    first_ns = tracks.t_ns[first]
    return Lives(ids, first_ns, np.maximum(last_ns, first_ns), counts, tracks.state[end], tracks.reason[end])


def picture_figure(
    module: HybridModule,
    tracks: Tracks,
    image: Array,
    t_ns: int,
    events: Events,
    name: str = "tracks",
    trail_ns: int = 200_000_000,
) -> Figure:
    """Tracks over a frame, with the events of the moments around it.

    `image` (H, W[, 3]) taken at `t_ns`; `events` to lay over it; each feature's path of the last `trail_ns` is drawn.
    """
    caption = (
        "Features over a frame: the dot is where each is, the line where it came from. Coloured points are events just "
        "before it: orange ON, blue OFF."
    )
    mode = module.frame_mode
    grey = image if image.ndim == 2 else image.mean(axis=2)
    with drawing(name, caption, wide=True, height_in=4.6) as sheet:
        sheet.axes.imshow(grey, vmin=0, vmax=np.percentile(grey, 99.7))
        position = mode.frame_from_colour(module.colour_from_event_px(np.stack([events.x, events.y], axis=1)))
        for value, colour in ((0, ON_PICTURE["off"]), (1, ON_PICTURE["on"])):
            chosen = position[events.on == value][:60_000]
            sheet.axes.scatter(*chosen.T, s=2.2, color=colour, alpha=0.6, linewidths=0, rasterized=True)
        recent = tracks[
            (tracks.t_ns <= t_ns)
            & (tracks.t_ns > t_ns - trail_ns)
            & (tracks.with_state("alive") | tracks.with_state("weak"))
        ]
        for identity in np.unique(recent.id[recent.t_ns > t_ns - 30_000_000]):
            path = mode.frame_from_colour(recent.of(int(identity)).uv)
            step = max(1, len(path) // 40)
            sheet.axes.plot(*path[::-step][::-1].T, color=ON_PICTURE["trail"], lw=1.0)
            sheet.axes.plot(*path[-1], ".", color=ON_PICTURE["feature"], ms=5)
        sheet.axes.set(xlim=(-0.5, grey.shape[1] - 0.5), ylim=(grey.shape[0] - 0.5, -0.5))
        sheet.axes.set(xlabel="frame column", ylabel="frame row")
        sheet.axes.grid(False)
    return finished(sheet)


def _life_figure(lives: Lives) -> Figure:
    with drawing("lives", "How long features were followed.") as sheet:
        sheet.axes.hist(lives.seconds, bins=30, color=SERIES[0])
        sheet.axes.set(xlabel="seconds followed", ylabel="features")
    return finished(sheet)


def _count_figure(tracks: Tracks, lives: Lives) -> Figure:
    start, stop = int(tracks.t_ns[0]), int(tracks.t_ns[-1])
    times = np.linspace(start, stop, 200)
    alive = np.searchsorted(np.sort(lives.first_ns), times, "right") - np.searchsorted(
        np.sort(lives.last_ns), times, "left"
    )
    with drawing("count", "Features followed at each moment.") as sheet:
        sheet.axes.plot((times - start) * 1e-9, alive)
        sheet.axes.set(xlabel="time, s", ylabel="features", ylim=(0, None))
    return finished(sheet)


def _deviation_figure(tracks: Tracks) -> Figure:
    sigma = np.sqrt(np.maximum(0.5 * (tracks.cov[:, 0] + tracks.cov[:, 2]), 0))
    with drawing("deviation", "Stated standard deviation of a position, by what it came from.") as sheet:
        bins = np.geomspace(0.01, 20, 50)
        for index, source in enumerate(tracks.sources):
            chosen = sigma[(tracks.source == index) & np.isfinite(sigma)]
            if len(chosen):
                sheet.axes.hist(
                    chosen, bins=bins, histtype="step", lw=1.5, label=source, color=SERIES[index], density=True
                )
        sheet.axes.set(xscale="log", xlabel="colour px", ylabel="share of samples")
        sheet.axes.legend()
    return finished(sheet)


def ending_table(tracks: Tracks, lives: Lives) -> Table:
    """How features ended: last state and reason, with counts."""
    pairs, counts = np.unique(np.stack([lives.state, lives.reason], axis=1), axis=0, return_counts=True)
    order = np.argsort(-counts)
    rows = tuple((tracks.states[pairs[i, 0]], tracks.reasons[pairs[i, 1]], str(counts[i])) for i in order)
    return Table(("last state", "reason", "features"), rows, "How features ended", prose=(1,))


def track_table(tracks: Tracks) -> Table:
    """The numbers of a run."""
    lives = lives_of(tracks)
    span_s = (int(tracks.t_ns[-1]) - int(tracks.t_ns[0])) * 1e-9 if len(tracks) else 0.0
    rows = [
        ("features", f"{len(lives.id)}"),
        ("samples", f"{len(tracks):,}"),
        ("span", f"{span_s:.3f} s"),
        ("median life", f"{np.median(lives.seconds):.3f} s" if len(lives.id) else "none"),
        ("samples a second and feature", f"{len(tracks) / max(float(lives.seconds.sum()), 1e-9):.0f}"),
    ]
    rows += [(f"samples from {name}", f"{np.mean(tracks.source == i):.1%}") for i, name in enumerate(tracks.sources)]
    return Table(("quantity", "value"), tuple(rows))


def track_summary(tracks: Tracks, mode: str) -> dict[str, object]:
    """What `summary.json` holds."""
    lives = lives_of(tracks)
    endings: dict[str, int] = {}
    for state, reason in zip(lives.state, lives.reason, strict=True):
        key = f"{tracks.states[state]}: {tracks.reasons[reason]}"
        endings[key] = endings.get(key, 0) + 1
    return {
        "format": "hybridtrack-tracking-summary",
        "version": 1,
        "mode": mode,
        "features": len(lives.id),
        "samples": len(tracks),
        "median_life_s": float(np.median(lives.seconds)) if len(lives.id) else 0.0,
        "endings": endings,
    }


def track_page(tracks: Tracks, recording: str, mode: str, picture: Callable[[], Figure | None]) -> Page:
    """Build the page of one run; `picture` draws tracks over a frame where there is one."""
    lives = lives_of(tracks)
    over_frame = picture()
    figures = tuple(
        figure
        for figure in (over_frame, _count_figure(tracks, lives), _life_figure(lives), _deviation_figure(tracks))
        if figure
    )
    return Page(
        title="Features followed",
        subtitle=f"{recording}, mode {mode}",
        state="good" if len(lives.id) else "bad",
        verdict=f"{len(lives.id)} features, followed for {np.median(lives.seconds):.2f} s in the median.",
        sections=(Section("Run", tables=(track_table(tracks), ending_table(tracks, lives)), figures=figures),),
    )

"""The page of the guide: what the views cover so far, and the next one."""

import numpy as np

from hybridtrack.calibration.guide import LEAST_TILT_DEG, Guidance
from hybridtrack.module import HybridModule
from hybridtrack.report.figures import INK, RULE, SERIES, Figure, drawing, finished
from hybridtrack.report.page import BLINK_CAUTION, Page, Section, Table


def need_table(guidance: Guidance) -> Table:
    """Every need, what there is of it, and whether that is enough."""
    rows = tuple((need.name, need.found, "met" if need.met else "OPEN") for need in guidance.needs)
    return Table(("need", "so far", "state"), rows, prose=(1, 2))


def stand_table(guidance: Guidance) -> Table:
    """How the board stood in each view."""
    rows = tuple(
        (
            f"{stand.board.source}, view {stand.board.view}",
            str(len(stand.board.uv)),
            f"{stand.tilt_deg[0]:+.0f}",
            f"{stand.tilt_deg[1]:+.0f}",
            f"{stand.roll_deg:+.0f}",
            f"{stand.distance_m:.2f}",
        )
        for stand in guidance.stands
    )
    return Table(("view", "corners", "tilt across", "tilt down", "roll", "distance, m"), rows)


def coverage_figure(guidance: Guidance, module: HybridModule) -> Figure:
    """Where corners were seen, and how the board was tilted."""
    width, height = module.colour_array.width, module.colour_array.height
    caption = (
        "Left: corners of all views on the colour array; its four corners must be reached. Right: tilt of the board in "
        f"each view, degrees; dots are wanted outside the band of {LEAST_TILT_DEG:.0f} degrees on all four sides."
    )
    with drawing("guide", caption, wide=True, columns=2, height_in=3.0) as sheet:
        left, right = sheet.axes
        for number, stand in enumerate(guidance.stands):
            left.plot(*stand.board.uv.T, ".", ms=3, color=SERIES[number % len(SERIES)])
        left.plot([0, width, width, 0, 0], [0, 0, height, height, 0], color=INK, lw=1)
        left.set(
            xlim=(-0.02 * width, 1.02 * width), ylim=(1.02 * height, -0.02 * height), xlabel="u, px", ylabel="v, px"
        )
        left.set_aspect("equal")
        tilts = np.array([stand.tilt_deg for stand in guidance.stands]).reshape(-1, 2)
        right.axhspan(-LEAST_TILT_DEG, LEAST_TILT_DEG, color=RULE, alpha=0.5, lw=0)
        right.axvspan(-LEAST_TILT_DEG, LEAST_TILT_DEG, color=RULE, alpha=0.5, lw=0)
        right.plot(tilts[:, 0], tilts[:, 1], "o", color=SERIES[1], ms=5)
        most = max(45.0, 1.1 * float(np.abs(tilts).max(initial=0.0)))
        right.set(xlim=(-most, most), ylim=(-most, most), xlabel="left nearer  |  right nearer",
                  ylabel="upper nearer  |  lower nearer")  # fmt: skip
        right.set_aspect("equal")
    return finished(sheet)


def guide_page(guidance: Guidance, module: HybridModule, source: str) -> Page:
    """Build the page."""
    return Page(
        title="Views of the target",
        subtitle=f"from {source}",
        state="good" if guidance.complete and not guidance.warnings else "attention",
        verdict=guidance.next_step,
        findings=(*guidance.warnings, *guidance.misses),
        cautions=(BLINK_CAUTION,),
        sections=(
            Section("Coverage", tables=(need_table(guidance),), figures=(coverage_figure(guidance, module),)),
            Section("Views", "Poses are rough, and only for guidance.", (stand_table(guidance),)),
        ),
    )

"""`hybridtrack synthesise`: make a synthetic recording, with its truth, from a recipe."""

from pathlib import Path
from typing import Annotated

import typer

from hybridtrack.cli.console import console, report_written, shown_progress


def synthesise_command(
    recipe: Annotated[Path, typer.Argument(help="Recipe (*.toml); examples lie in the folder sequences.")],
    out: Annotated[Path, typer.Argument(help="Recording to write (*.h5).")],
    seed: Annotated[int, typer.Option(help="One seed, one result.")] = 0,
) -> None:
    """Make a synthetic recording of a blinking board or of a run through the greenhouse.

    The recording carries its truth, which no estimator reads; 'bench' and 'demo' score against it. Example:
    hybridtrack synthesise sequences/board_quick.toml board.h5 --seed 7
    """
    import time

    from hybridtrack.recording import Recording
    from hybridtrack.synthesis.generate import generate

    began = time.perf_counter()
    with shown_progress() as progress:
        count = generate(recipe, out, seed, progress)
    took_s = time.perf_counter() - began
    with Recording.open(out) as opened:
        frames = opened.frames.t_start_ns
        recorded_s = 1e-9 * float(frames[-1] - frames[0]) if len(frames) else 0.0
    console.print(
        f"{count:,} events; {recorded_s:.2f} s recorded in {took_s:.1f} s, {recorded_s / took_s:.3f} s a second"
    )
    report_written(out)

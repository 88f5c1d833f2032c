"""The `hybridtrack` command: every subcommand registered, every refusal turned into one sentence and exit code 2.

Commands import the rooms when they run, so that help answers at once.
"""

import sys

import hybridtrack.threads  # noqa: F401  before anything that starts a pool

# isort: split

import typer

from hybridtrack.cli.bench_command import bench_app
from hybridtrack.cli.calibrate_command import calibrate_command
from hybridtrack.cli.demo_command import demo_command
from hybridtrack.cli.guide_command import guide_command
from hybridtrack.cli.ingest_command import ingest_command
from hybridtrack.cli.inspect_command import inspect_command
from hybridtrack.cli.odometry_command import odometry_command
from hybridtrack.cli.picture_command import picture_command
from hybridtrack.cli.synthesise_command import synthesise_command
from hybridtrack.cli.target_command import target_command
from hybridtrack.cli.track_command import track_command
from hybridtrack.cli.verify_command import verify_command
from hybridtrack.errors import HybridtrackError

app = typer.Typer(
    name="hybridtrack",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
    help=(
        "Calibrate, track and navigate with hybrid modules: "
        "event pixels and colour pixels on one die behind one lens.\n\n"
        "A new module usually goes through: inspect, calibrate, track, odometry. Try 'hybridtrack demo' first."
    ),
)
app.command("target")(target_command)
app.command("ingest")(ingest_command)
app.command("inspect")(inspect_command)
app.command("guide")(guide_command)
app.command("calibrate")(calibrate_command)
app.command("verify")(verify_command)
app.command("track")(track_command)
app.command("picture")(picture_command)
app.command("odometry")(odometry_command)
app.command("synthesise")(synthesise_command)
app.add_typer(bench_app, name="bench")
app.command("demo")(demo_command)


def main() -> None:
    """Run the command line. Exit code 0: done; 1: done, and a limit or check failed; 2: refused."""
    try:
        app()
    except HybridtrackError as refusal:
        print(f"hybridtrack: {refusal}", file=sys.stderr)
        sys.exit(2)
    except KeyboardInterrupt:
        print("hybridtrack: stopped; nothing half-written was left", file=sys.stderr)
        sys.exit(130)

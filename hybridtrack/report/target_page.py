"""One self-contained HTML page that blinks a target full screen: still until a deliberate click, and honest about its
rate.
"""

from pathlib import Path

import jinja2

from hybridtrack import __version__
from hybridtrack.files import write_text
from hybridtrack.module import Target
from hybridtrack.report.target_caution import RISK_BAND_HZ, caution_sentences
from hybridtrack.report.target_screen import DEFAULT_LOG_STEP, dark_dn, possible_cycles


def target_page(target: Target, log_steps: tuple[float, ...] | None = None) -> str:
    """The page as one HTML text; `log_steps` between dark and bright are offered, else the target's levels.

    Raises OptionError where no even number of refreshes holds the target's duty, or a step is beyond a screen.
    """
    steps = log_steps or tuple(target.levels or ()) or (DEFAULT_LOG_STEP,)
    setup = {
        "target": target.model_dump(mode="json"),
        "cycles": possible_cycles(target.duty),
        "risk_band_hz": RISK_BAND_HZ,
        "levels": [{"log_step": step, "dark_dn": dark_dn(step)} for step in steps],
    }
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("hybridtrack", "report"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template("target_page.html").render(
        title=target.name or "Blinking target",
        target=target,
        cautions=caution_sentences(),
        setup=setup,
        version=__version__,
    )


def write_target_page(target: Target, path: Path, log_steps: tuple[float, ...] | None = None) -> Path:
    """Write the page atomically; return where it is."""
    write_text(path, target_page(target, log_steps))
    return path

"""How late event stamps are: the delay of the first event after a blinking target's flip, from the pixel physics.

`timing.event_latency_ns` of a true module is, by this project's definition, the mean over healthy pixels and flips of

    stamp of the first ON event  -  the instant at which light is half way up

for a flip from the dark to the bright level of the recording (with several levels: the highest), seen by an unloaded
readout. It holds photoreceptor, comparator, constant delay and the reading of one row; what waiting for other events
adds is left out. Where light rises slowly, as on a screen, the threshold may be passed before half way: the latency is
then negative.
"""

import numpy as np

from hybridtrack.errors import OptionError
from hybridtrack.module import HybridModule
from hybridtrack.synthesis.blink import Blink
from hybridtrack.synthesis.event_pixels import EventPixels, PixelPhysics

Array = np.ndarray
GRID = (64, 40)
CYCLES, SETTLING = 14, 4


def first_event_delays(
    module: HybridModule, physics: PixelPhysics, blink: Blink, dark_dn: float, seed: int
) -> tuple[float, float]:
    """Mean delay in ns of the first ON event after a bright flip, and of the first OFF event after a dark one.

    Simulates a small grid of the module's pixels, without defects and background. Raises OptionError where the step
    is too small to fire at most flips.
    """
    grid = module.event_grid.model_copy(update={"width": GRID[0], "height": GRID[1]})
    quiet = PixelPhysics(**{**physics.__dict__, "background_hz": 0.0})
    pixels = EventPixels(module.model_copy(update={"event_grid": grid, "defects": None}), quiet, seed)
    step = max(blink.steps_dn)
    bright = blink.period_ns * np.arange(CYCLES)
    dark = bright + blink.duty * blink.period_ns
    t = np.stack([bright, bright + blink.rise_ns, dark, dark + blink.fall_ns], axis=1).ravel()
    light = np.tile([dark_dn, dark_dn + step, dark_dn + step, dark_dn], CYCLES)
    events = pixels.expose(
        np.append(t, CYCLES * blink.period_ns), np.repeat(np.append(light, dark_dn)[:, None], pixels.count, axis=1)
    )
    pixel = events.y.astype(np.int64) * GRID[0] + events.x
    delays: tuple[list[Array], list[Array]] = ([], [])
    for on, flips, ramp, length in ((1, bright, blink.rise_ns, blink.duty), (0, dark, blink.fall_ns, 1 - blink.duty)):
        for flip in flips[SETTLING:]:
            after = (events.on == on) & (events.t >= flip) & (events.t < flip + length * blink.period_ns)
            _, first = np.unique(pixel[after], return_index=True)
            delays[on].append(events.t[after][first] - (flip + 0.5 * ramp))
    on_delays, off_delays = np.concatenate(delays[1]), np.concatenate(delays[0])
    least = 0.5 * (CYCLES - SETTLING) * pixels.count
    if min(len(on_delays), len(off_delays)) < least:
        raise OptionError(f"a step from {dark_dn:.1f} to {dark_dn + step:.1f} DN fires too few event pixels")
    return float(on_delays.mean()), float(off_delays.mean())

"""Recipes of board recordings that the calibration study draws, one a seed.

Layouts, target kinds, mirroring, clear site and centroid vary; the nominal module that the estimator is given always
says that nothing is mirrored and that the clear site is where the data sheet puts it.
"""

from pathlib import Path
from typing import Any

from hybridtrack.synthesis.recipe import Recipe, recipe_from_data

LAYOUTS: dict[str, dict[str, Any]] = {
    "4x4, bin 2": {},
    "2x2, bin 1": {
        "colour_array": {"width": 640, "height": 400},
        "cluster": {"width": 2, "height": 2, "filters": None, "clear_site": [1, 0]},
        "frame_mode": {"width": 640, "height": 400, "binning": 1},
    },
    "4x4, bin 2, omitted": {"frame_mode": {"clear_in_frame": "omitted"}},
    "4x4, cropped, filled": {
        "frame_mode": {"width": 600, "height": 380, "crop": [40, 20], "clear_in_frame": "filled"},
    },
}
TARGETS = ("lamp_panel", "bench_screen")


MIXES = (("4x4, bin 2", "bench_screen"), ("2x2, bin 1", "lamp_panel"), ("4x4, bin 2, omitted", "lamp_panel"),
         ("4x4, cropped, filled", "bench_screen"))  # fmt: skip


def mix_of(seed: int) -> tuple[str, str]:
    """Layout and target of a seed: four layouts in turn, and every four seeds the targets change places."""
    layout, target = MIXES[seed % len(MIXES)]
    swapped = seed // len(MIXES) % 2
    return layout, TARGETS[(TARGETS.index(target) + swapped) % len(TARGETS)]


def layout_of(seed: int) -> str:
    """Name of the layout that a seed uses."""
    return mix_of(seed)[0]


def map_terms_of(seed: int) -> tuple[float, float]:
    """Largest displacement by linear terms off the lattice and by a radial term, px: a quarter of the seeds has one."""
    odd = seed // len(MIXES)
    if (seed + odd) % 4 != 3:
        return 0.0, 0.0
    return (0.05, 0.0) if odd % 2 else (0.0, 0.05)


def board_scenario(targets: Path, seed: int, views: int = 12, dwell_s: float = 0.5) -> Recipe:
    """The recipe of one seed. `targets` is the folder that holds the example targets and modules."""
    layout, target = mix_of(seed)
    odd = seed // len(MIXES)  # independent of layout and target
    centroid_px = 0.25 if (seed + odd) % 2 else 0.0
    off_lattice_px, radial_px = map_terms_of(seed)
    data = {
        "kind": "board",
        "name": f"board {seed}",
        "module": {"file": targets / "wren.module.json", "overrides": LAYOUTS[layout]},
        "target": {"file": targets / f"{target}.target.json"},
        "truth": {
            "mirror_x": "random",
            "mirror_y": "random",
            "clear_site": "random",
            "centroid_px": centroid_px,
            "off_lattice_px": off_lattice_px,
            "radial_px": radial_px,
        },
        "views": {"count": views, "dwell_s": dwell_s, "tilt_max_deg": 35.0},
    }
    return recipe_from_data(data, f"board scenario {seed}")

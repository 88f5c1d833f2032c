"""Draw a true module from a nominal one: lens, event map, clocks, thresholds and defects."""

from typing import Literal

import numpy as np
from pydantic import Field

from hybridtrack.errors import OptionError
from hybridtrack.geometry import FisheyeLens, Lens, PerspectiveLens
from hybridtrack.module import (
    ColourFromEvent,
    Contrast,
    Defects,
    HybridModule,
    Timing,
    lens_parameters,
    nominal_matrix,
)
from hybridtrack.synthesis.recipe_parts import Strict

Array = np.ndarray
Mirror = bool | Literal["nominal", "random"]


class ModuleDraw(Strict):
    """How a true module may differ from its nominal one. Spreads are half widths of uniform draws unless said.

    Lens: `focal_per_width` times the colour array's width. Map: `centroid_px` a half width, `off_lattice_px` the
    largest displacement over the array of an affine term that no lattice has, `radial_px` the radial term's
    displacement at the array's corner; the last two are kept as given, with a random direction or sign. Clocks:
    `frame_offset_ms` and `drift_ppm` half widths, `exposure_correction_us` likewise. Thresholds: a range each for the
    medians; `threshold_spread` and `noise_width` in parts of the median.
    """

    mirror_x: Mirror = "nominal"
    mirror_y: Mirror = "nominal"
    clear_site: tuple[int, int] | Literal["nominal", "random"] = "nominal"
    centroid_px: float = Field(default=0.25, ge=0, le=0.5)
    off_lattice_px: float = Field(default=0.0, ge=0)
    radial_px: float = Field(default=0.0, ge=0)
    lens: Literal["perspective", "fisheye", "nominal"] = "perspective"
    focal_per_width: float | None = Field(default=None, gt=0)
    focal_spread: float = Field(default=0.03, ge=0, lt=0.3)
    centre_px: float = Field(default=15.0, ge=0)
    distortion: float = Field(default=1.0, ge=0, le=1.5)
    frame_offset_ms: float = Field(default=2.0, ge=0)
    drift_ppm: float = Field(default=20.0, ge=0)
    line_time_us: float = Field(default=18.0, ge=0)
    line_time_spread: float = Field(default=0.03, ge=0, lt=1)
    exposure_correction_us: float = Field(default=40.0, ge=0)
    threshold: tuple[float, float] = (0.28, 0.42)
    threshold_spread: float = Field(default=0.04, ge=0, lt=0.3)
    noise_width: float = Field(default=0.05, ge=0, lt=0.5)
    refractory_us: float = Field(default=150.0, ge=0)
    hot: int = Field(default=12, ge=0)
    dead: int = Field(default=8, ge=0)


def draw_lens(draw: ModuleDraw, width: int, height: int, random: np.random.Generator) -> Lens:
    """A lens that is one to one over the whole array, drawn about the nominal focal length."""
    wide = draw.lens == "fisheye"
    per_width = draw.focal_per_width or (0.45 if wide else 0.72)
    for _ in range(50):
        fx = per_width * width * (1.0 + draw.focal_spread * random.uniform(-1, 1))
        fy = fx * (1.0 + 0.001 * random.uniform(-1, 1))
        cx, cy = np.array([width - 1, height - 1]) / 2 + draw.centre_px * random.uniform(-1, 1, 2)
        scale = draw.distortion
        lens: Lens
        if wide:
            k1, k2 = scale * random.uniform(-0.03, 0.03), scale * random.uniform(-0.006, 0.006)
            lens = FisheyeLens(fx, fy, cx, cy, (k1, k2, 0.0, 0.0))
        else:
            k1, k2 = scale * random.uniform(-0.16, -0.06), scale * random.uniform(0.0, 0.04)
            p1, p2 = scale * random.uniform(-5e-4, 5e-4, 2)
            lens = PerspectiveLens(fx, fy, cx, cy, (k1, k2, 0.0), (p1, p2))
        if lens.is_monotonic_over(width, height):
            return lens
    raise OptionError(f"focal_per_width {per_width} with this distortion is never one to one over the array")


def draw_map(draw: ModuleDraw, module: HybridModule, random: np.random.Generator) -> ColourFromEvent:
    """The true event map of a module whose cluster and mirroring are true already."""
    array, grid = module.colour_array, module.event_grid
    matrix = nominal_matrix(module.cluster, grid)
    centroid = draw.centroid_px * random.uniform(-1, 1, 2)
    matrix[:, 2] += centroid
    middle = np.array([(array.width - 1) / 2, (array.height - 1) / 2])
    skew = random.standard_normal((2, 2))
    corners = np.array([[-1, -1], [-1, 1], [1, -1], [1, 1]]) * middle
    skew *= draw.off_lattice_px / np.linalg.norm(corners @ skew.T, axis=1).max()
    matrix = (np.eye(2) + skew) @ matrix
    matrix[:, 2] -= skew @ middle
    radial = draw.radial_px / array.half_diagonal_px * random.choice([-1.0, 1.0])
    return ColourFromEvent.model_validate(
        {"matrix": matrix.tolist(), "centroid": centroid.tolist(), "radial": radial, "centre": middle.tolist()}
    )


def draw_defects(draw: ModuleDraw, shape: tuple[int, int], random: np.random.Generator) -> Defects:
    """Hot and dead pixels at distinct places."""
    rows, columns = shape
    if draw.hot + draw.dead > rows * columns:
        raise OptionError(f"hot and dead must not exceed the {rows * columns} event pixels, got {draw.hot + draw.dead}")
    places = random.choice(rows * columns, draw.hot + draw.dead, replace=False)
    pairs = [(int(place % columns), int(place // columns)) for place in places]
    return Defects(hot=sorted(pairs[: draw.hot]), dead=sorted(pairs[draw.hot :]))


def draw_layout(nominal: HybridModule, draw: ModuleDraw, random: np.random.Generator) -> HybridModule:
    """The nominal module with the true mirroring and clear site."""
    grid, cluster = nominal.event_grid, nominal.cluster

    def mirror(choice: Mirror, said: bool) -> bool:
        drawn = bool(random.integers(2))
        if choice == "random":
            return drawn
        return said if choice == "nominal" else bool(choice)

    clear = (int(random.integers(cluster.width)), int(random.integers(cluster.height)))
    if draw.clear_site == "nominal":
        clear = cluster.clear_site or clear
    elif draw.clear_site != "random":
        clear = draw.clear_site
    if not (0 <= clear[0] < cluster.width and 0 <= clear[1] < cluster.height):
        raise OptionError(f"clear_site must lie inside the {cluster.width}x{cluster.height} cluster, got {clear}")
    mirrors = {"mirror_x": mirror(draw.mirror_x, grid.mirror_x), "mirror_y": mirror(draw.mirror_y, grid.mirror_y)}
    moved = clear != cluster.clear_site
    true_cluster = cluster.model_copy(update={"clear_site": clear, "filters": None if moved else cluster.filters})
    return nominal.model_copy(update={"event_grid": grid.model_copy(update=mirrors), "cluster": true_cluster})


def draw_timing(draw: ModuleDraw, rolling: bool, random: np.random.Generator) -> Timing:
    """The clocks; `event_latency_ns` is left to who knows the light."""
    line_time = 1e3 * draw.line_time_us * (1 + draw.line_time_spread * random.uniform(-1, 1))
    return Timing(
        frame_offset_ns=1e6 * draw.frame_offset_ms * random.uniform(-1, 1),
        frame_drift_ppm=draw.drift_ppm * random.uniform(-1, 1),
        drift_epoch_ns=0,
        line_time_ns=line_time if rolling else 0.0,
        exposure_correction_ns=1e3 * draw.exposure_correction_us * random.uniform(-1, 1),
    )


def draw_contrast(draw: ModuleDraw, random: np.random.Generator) -> Contrast:
    """Medians of the thresholds and what belongs to them."""
    on, off = random.uniform(*draw.threshold, 2)
    return Contrast(
        on_threshold=on,
        off_threshold=off,
        on_spread=draw.threshold_spread * on,
        off_spread=draw.threshold_spread * off,
        noise_width=draw.noise_width * 0.5 * (on + off),
        refractory_ns=1e3 * draw.refractory_us,
    )


def draw_module(nominal: HybridModule, draw: ModuleDraw, seed: int) -> HybridModule:
    """The true module of one recording. `timing.event_latency_ns` and `reference_light_dn` are left null.

    Raises OptionError where the draw does not fit the module, NotCalibratedError where it takes a lens that is null.
    """
    random = np.random.default_rng([seed, 10])
    true = draw_layout(nominal, draw, random)
    array = nominal.colour_array
    lens = nominal.lens_model() if draw.lens == "nominal" else draw_lens(draw, array.width, array.height, random)
    return true.model_copy(
        update={
            "lens": lens_parameters(lens),
            "colour_from_event": draw_map(draw, true, random),
            "timing": draw_timing(draw, nominal.frame_mode.shutter == "rolling", random),
            "contrast": draw_contrast(draw, random),
            "defects": draw_defects(draw, nominal.event_grid.shape, random),
            "findings": None,
            "uncertainty": None,
        }
    )

"""The invented greenhouse: benches with trays and pots, tall plants, hoses, lamps, signs, walls.

World axes: x along the benches, y away from the trolley's cable, z up; the floor is z = 0. The trolley hangs near
x = y = 0 at about 2.3 m and looks towards +y and down. Everything is drawn from one seed, and nothing is used twice
where the camera could take it for the same place.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from hybridtrack.synthesis import foliage, textures
from hybridtrack.synthesis.scene import GREY, Box, Scene, SceneBuilder, Surface, shaded, vector

Array = np.ndarray
Tint = tuple[float, float, float, float]
Vector = tuple[float, float, float]

LEAF_GREEN: Tint = (1.0, 0.75, 1.15, 0.6)
TERRACOTTA: Tint = (1.0, 1.5, 0.85, 0.6)
TIMBER: Tint = (1.0, 1.2, 1.0, 0.7)

HALF_LENGTH_M = 4.6  # of the house along x
NEAR_WALL_M, FAR_WALL_M, HEIGHT_M = -1.6, 4.4, 2.9


@dataclass(frozen=True)
class Bench:
    """A bench along x: where it is across, how deep and how high, and how much coarser its textures may be."""

    middle_y_m: float
    depth_m: float
    height_m: float
    coarse: float = 1.0


BENCHES = (
    Bench(-0.35, 0.75, 0.62, 1.2),
    Bench(0.95, 0.95, 0.8),
    Bench(2.35, 0.85, 1.0, 1.5),
    Bench(3.75, 0.8, 1.25, 2.2),
)
WORDS = ("BED", "FERN", "MINT", "SAGE", "TRAY", "MIST", "WARM", "SEED", "SOIL", "LEAF")


class Greenhouse:
    """Puts the house together, one kind of thing at a time."""

    def __init__(self, seed: int, texel_m: float) -> None:
        self.random = np.random.default_rng([seed, 20])
        self.texel_m = texel_m
        self.coarse = 1.0
        self.builder = SceneBuilder()

    def material(
        self, draw: Callable[..., Array], width_m: float, height_m: float, *look: object, coarse: float = 1.0
    ) -> int:
        """Draw a texture for a surface of this size, `coarse` times coarser than the finest; return its index."""
        shape = tuple(max(round(side / (coarse * self.coarse * self.texel_m)), 8) for side in (height_m, width_m))
        return self.builder.texture(draw(self.random, shape, *look))

    def shell(self) -> None:
        """Floor and walls."""
        length, depth = 2 * HALF_LENGTH_M, FAR_WALL_M - NEAR_WALL_M
        floor = self.material(textures.concrete, length, depth, coarse=2.5)
        corner = (-HALF_LENGTH_M, FAR_WALL_M, 0.0)
        self.builder.add(Surface(corner, (length, 0, 0), (0, -depth, 0), floor, one_sided=True))
        walls: list[tuple[tuple[float, float], tuple[float, float], Callable[..., Array]]] = [
            ((-HALF_LENGTH_M, FAR_WALL_M), (length, 0.0), textures.wall),
            ((HALF_LENGTH_M, NEAR_WALL_M), (-length, 0.0), textures.slats),
            ((-HALF_LENGTH_M, NEAR_WALL_M), (0.0, depth), textures.slats),
            ((HALF_LENGTH_M, FAR_WALL_M), (0.0, -depth), textures.wall),
        ]
        for (x, y), (dx, dy), draw in walls:
            texture = self.material(draw, float(np.hypot(dx, dy)), HEIGHT_M, coarse=2.5)
            edges: tuple[Vector, Vector] = (dx, dy, 0.0), (0.0, 0.0, -HEIGHT_M)
            self.builder.add(Surface((x, y, HEIGHT_M), *edges, texture, tint=shaded(GREY, 0.8), one_sided=True))

    def bench(self, bench: Bench) -> None:
        """A bench: mesh top, slatted front and ends, legs implied by a skirt that stops above the floor."""
        length = 2 * HALF_LENGTH_M - 1.6
        box = Box((0.0, bench.middle_y_m, 0.22), (length, bench.depth_m, bench.height_m - 0.22))
        top = self.material(textures.mesh, length, bench.depth_m, coarse=1.8)
        front = self.material(textures.slats, length, box.size[2], coarse=2.0)
        end = self.material(textures.slats, bench.depth_m, box.size[2], coarse=2.0)
        self.builder.add(box.surface("top", top), box.surface("front", front, tint=TIMBER))
        self.builder.add(box.surface("left", end, tint=TIMBER), box.surface("right", end, tint=TIMBER))

    def tray(self, foot: tuple[float, float, float], turn_rad: float) -> None:
        """A seedling tray, 54 by 28 cm."""
        random = self.random
        size = (0.54, 0.28, random.uniform(0.05, 0.11))
        cells = (int(random.integers(4, 10)), int(random.integers(2, 6)))
        top = self.material(foliage.tray, size[0], size[1], cells)
        side = self.material(textures.plastic, size[0], size[2], random.uniform(50, 200), coarse=1.5)
        self.builder.add(*Box(foot, size, turn_rad).surfaces(top, side, tint=LEAF_GREEN))

    def pot(self, foot: tuple[float, float, float], side_m: float, height_m: float) -> None:
        """A square pot with one large plant drawn on it."""
        random = self.random
        tone = random.uniform(70, 190)
        top = self.builder.texture(foliage.pot_top(random, round(side_m / (self.coarse * self.texel_m)), tone))
        side = self.material(textures.plastic, side_m, height_m, tone, coarse=1.5)
        box = Box(foot, (side_m, side_m, height_m), random.uniform(-0.6, 0.6))
        self.builder.add(box.surface("top", top, tint=LEAF_GREEN))
        self.builder.add(*(box.surface(face, side, tint=TERRACOTTA) for face in ("front", "back", "left", "right")))

    def crate(self, foot: tuple[float, float, float]) -> None:
        """A plain crate or a white carton: something flat among all the corners."""
        random = self.random
        size = tuple(random.uniform([0.25, 0.2, 0.12], [0.42, 0.32, 0.3]))
        top = self.material(textures.mesh if random.random() < 0.5 else textures.slats, size[0], size[1], coarse=1.5)
        side = self.material(textures.slats, size[0], size[2], coarse=1.5)
        self.builder.add(*Box(foot, size, random.uniform(-0.3, 0.3)).surfaces(top, side, tint=TIMBER))

    def tall_plant(self, foot: tuple[float, float, float], blades: Array) -> None:
        """A plant of leaning parallelogram leaves around a stem."""
        random = self.random
        start = random.uniform(0, 2 * np.pi)
        for leaf in range(int(random.integers(6, 10))):
            heading = start + 2.39996 * leaf
            rise, length = random.uniform(0.25, 1.1), random.uniform(0.11, 0.2)
            out = np.array([np.cos(heading) * np.cos(rise), np.sin(heading) * np.cos(rise), np.sin(rise)])
            across = np.array([-np.sin(heading), np.cos(heading), 0.0])
            half = 0.5 * random.uniform(0.35, 0.6) * length * across
            base = np.asarray(foot) + [0, 0, random.uniform(0.04, 0.22)] + 0.015 * out
            edges = [vector(0.5 * length * out + side) for side in (half, -half)]
            tint = shaded(LEAF_GREEN, random.uniform(0.55, 1.1))
            texture = int(random.choice(blades))
            self.builder.add(Surface(vector(base), edges[0], edges[1], texture, tint=tint))

    def stock(self, bench: Bench, blades: Array) -> None:
        """Fill a bench: places 60 cm apart, each with trays, a pot, a crate or a tall plant."""
        random = self.random
        end = HALF_LENGTH_M - 1.15
        for x in np.arange(-end, end + 0.01, 0.6):
            for y in bench.middle_y_m + bench.depth_m * np.array([-0.24, 0.24]):
                place = (x + random.uniform(-0.03, 0.03), y + random.uniform(-0.03, 0.03), bench.height_m)
                kind = random.choice(["tray", "pots", "crate", "tall", "bare"], p=[0.48, 0.24, 0.09, 0.17, 0.02])
                if kind == "tray":
                    self.tray(place, random.uniform(-0.12, 0.12))
                elif kind == "crate":
                    self.crate(place)
                elif kind != "bare":
                    for side in (-0.19, 0.0, 0.19):
                        foot = (place[0] + side, place[1] + random.uniform(-0.08, 0.08), place[2])
                        height, width = random.uniform(0.07, 0.2), random.uniform(0.11, 0.18)
                        self.pot(foot, width, height)
                        if kind == "tall" and random.random() < 0.6:
                            self.tall_plant((foot[0], foot[1], foot[2] + height), blades)

    def signs(self) -> None:
        """Boards on the benches' fronts and on the far wall, and bed numbers on short posts."""
        random = self.random
        words = iter(random.permutation(WORDS).tolist() * 9)
        for bench in BENCHES:
            for x in np.arange(-3.1, 3.2, 1.24) + random.uniform(-0.3, 0.3, 6):
                text = f"{next(words)} {random.integers(1, 90)}"
                texture = self.material(textures.sign, 0.3, 0.2, text, bool(random.random() < 0.4), coarse=1.3)
                front = bench.middle_y_m - 0.5 * bench.depth_m - 0.012
                top = bench.height_m - random.uniform(0.03, 0.2)
                self.builder.add(Surface((x, front, top), (0.3, 0, 0), (0, 0, -0.2), texture, one_sided=True))
        for x in np.arange(-3.9, 4.0, 1.3) + random.uniform(-0.3, 0.3, 7):
            text = f"{next(words)}"
            texture = self.material(textures.sign, 0.6, 0.42, text, bool(random.random() < 0.5), coarse=2.0)
            top = random.uniform(1.75, 2.2)
            self.builder.add(Surface((x, FAR_WALL_M - 0.02, top), (0.6, 0, 0), (0, 0, -0.42), texture, one_sided=True))

    def hangings(self) -> None:
        """Drip hoses along the benches, heating pipes at the wall, lamp housings and their cables."""
        random = self.random
        for bench in BENCHES[1:]:
            y, z = bench.middle_y_m + random.uniform(-0.1, 0.1), bench.height_m + random.uniform(0.3, 0.42)
            self.rod((0.0, y, z), (2 * HALF_LENGTH_M - 1.5, 0.022, 0.022))
        for z in (0.5, 0.62, 1.7):
            self.rod((0.0, FAR_WALL_M - 0.1, z), (2 * HALF_LENGTH_M, 0.06, 0.06))
        for x in np.arange(-3.6, 3.7, 1.8) + random.uniform(-0.35, 0.35, 5):
            y, z = random.uniform(2.6, 3.4), random.uniform(1.6, 1.8)
            self.rod((x, y, z), (0.7, 0.12, 0.07))
            for side in (-0.3, 0.3):
                self.rod((x + side, y, z + 0.07), (0.012, 0.012, HEIGHT_M - z - 0.07))

    def rod(self, foot: tuple[float, float, float], size: tuple[float, float, float]) -> None:
        """A pipe, hose, cable or housing of painted metal."""
        longest, thickness = max(size), sorted(size)[1]
        texture = self.material(textures.metal, longest, max(thickness, 0.02), self.random.uniform(90, 200), coarse=1.5)
        box = Box(foot, size)
        if size[2] == longest:  # upright: the bands of the texture go round the rod, so turn it by its edges
            for face in ("front", "left", "right", "back"):
                surface = box.surface(face, texture)
                self.builder.add(Surface(surface.origin, surface.edge_v, surface.edge_u, texture, tint=surface.tint))
        else:
            self.builder.add(*box.surfaces(texture, texture))

    def build(self) -> Scene:
        """The whole house."""
        blades = np.array([self.builder.texture(foliage.leaf_blade(self.random)) for _ in range(12)])
        self.shell()
        for bench in BENCHES:
            self.coarse = bench.coarse
            self.bench(bench)
            self.stock(bench, blades)
        self.coarse = 1.0
        self.signs()
        self.hangings()
        return self.builder.build()


def greenhouse_scene(seed: int, texel_m: float = 1.2e-3) -> Scene:
    """The greenhouse of one seed; its finest textures have texels of `texel_m`."""
    return Greenhouse(seed, texel_m).build()

"""Invented plants, seen from above: leaves, seedlings in trays, rosettes in pots."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from hybridtrack.synthesis.textures import Array, Generator, dot, fill, linear_light, noise, rectangle, speckle, stroke


@dataclass(frozen=True)
class Species:
    """How a kind of plant looks: leaves a plant, width over length, tone (8 bit), paleness of veins, jaggedness."""

    leaves: int
    slimness: float
    tone: float
    vein: float
    teeth: float

    @staticmethod
    def drawn(rng: Generator) -> "Species":
        """An invented species."""
        return Species(
            leaves=int(rng.integers(4, 11)),
            slimness=rng.uniform(0.22, 0.6),
            tone=rng.uniform(85, 185),
            vein=rng.uniform(20, 60),
            teeth=rng.uniform(0, 0.14),
        )


@lru_cache(maxsize=512)
def leaf_shape(slimness: float, teeth: float, points: int = 14) -> Array:
    """A leaf of length one along x: right half (points, 2) from base to tip, left half, then ribs (2 points each)."""
    s = np.linspace(0.0, 1.0, points)
    across = 0.5 * slimness * np.sin(np.pi * s**0.85) ** 0.9
    across[1:-1:2] *= 1.0 + teeth
    across[2:-1:2] *= 1.0 - teeth
    right = np.stack([s, across], axis=1)
    ribs = [[0.0, 0.0], [0.96, 0.0]]
    for start in (0.2, 0.38, 0.57, 0.75):
        for side in (0.34 * slimness, -0.34 * slimness):
            ribs += [[start, 0.0], [start + 0.14, side]]
    return np.concatenate([right, right * [1.0, -1.0], np.array(ribs)])


def draw_leaf(canvas: Array, base: Array, heading: float, length: float, look: Species, tone: float) -> None:
    """Draw one leaf with its shadow, a light and a dark half, midrib and side veins, in place."""
    cosine, sine = np.cos(heading), np.sin(heading)
    points = leaf_shape(look.slimness, look.teeth) @ (length * np.array([[cosine, sine], [-sine, cosine]])) + base
    right, left, ribs = points[:14], points[14:28], points[28:]
    fill(canvas, np.concatenate([right, left[::-1]]) + length * np.array([0.06, 0.09]), 32)
    fill(canvas, right, min(max(tone * 1.1, 30.0), 235.0))
    fill(canvas, left, min(max(tone * 0.86, 28.0), 225.0))
    pale = min(max(tone + look.vein, 40.0), 245.0)
    stroke(canvas, ribs[:2], pale, 1 if length < 60 else 2)
    if length > 16:
        for k in range(2, len(ribs), 2):
            stroke(canvas, ribs[k : k + 2], 0.5 * (pale + tone), 1)


def draw_plant(canvas: Array, rng: Generator, centre: Array, radius: float, look: Species) -> None:
    """Draw a rosette: leaves turning by the golden angle, older and longer ones first, in place."""
    start = rng.uniform(0, 2 * np.pi)
    for leaf in range(look.leaves):
        length = radius * (1.0 - 0.55 * leaf / look.leaves) * rng.uniform(0.8, 1.1)
        heading = start + 2.39996 * leaf + rng.normal(0, 0.15)
        tone = look.tone * (0.8 + 0.5 * leaf / look.leaves) * rng.uniform(0.9, 1.1)
        base = centre + 0.08 * radius * np.array([np.cos(heading), np.sin(heading)])
        draw_leaf(canvas, base, heading, length, look, tone)
    dot(canvas, centre, max(0.05 * radius, 1.0), min(look.tone + 70, 240))


def soil(rng: Generator, shape: tuple[int, int]) -> Array:
    """Dark potting soil (8-bit tones) with crumbs and white grit."""
    canvas = np.clip(52 + 12 * noise(rng, shape, 14.0, 3), 26, 120).astype(np.uint8)
    area = shape[0] * shape[1]
    speckle(canvas, rng, area // 260, (0.6, 1.8), (28, 95))
    speckle(canvas, rng, area // 900, (0.6, 1.4), (170, 235))
    return canvas


def tray(rng: Generator, shape: tuple[int, int], cells: tuple[int, int]) -> Array:
    """A seedling tray from above: `cells` (columns, rows) of soil between pale plastic ribs, most with a seedling."""
    height, width = shape
    canvas = soil(rng, shape)
    look, rim = Species.drawn(rng), rng.uniform(80, 190)
    across, down = width / cells[0], height / cells[1]
    for column in range(cells[0] + 1):
        rectangle(canvas, column * across - 2.5, 0, 5, height, rim)
    for row in range(cells[1] + 1):
        rectangle(canvas, 0, row * down - 2.5, width, 5, rim)
    growth = rng.uniform(0.45, 0.85)
    for row in range(cells[1]):
        for column in range(cells[0]):
            centre = np.array([(column + 0.5) * across, (row + 0.5) * down]) + rng.normal(0, 0.06 * across, 2)
            if rng.random() < 0.88:
                draw_plant(canvas, rng, centre, growth * min(across, down) * rng.uniform(0.55, 1.1), look)
    draw_tag(canvas, rng)
    return linear_light(canvas, rng, 0.07)


def draw_tag(canvas: Array, rng: Generator) -> None:
    """Stick a white plant tag with a few strokes of writing somewhere, in place."""
    height, width = canvas.shape
    left, top = rng.uniform(0.05, 0.75) * width, rng.uniform(0.05, 0.8) * height
    rectangle(canvas, left, top, 46, 17, 228)
    for line in (5, 11):
        x = left + 4
        while x < left + 38:
            step = rng.uniform(2, 7)
            stroke(canvas, np.array([[x, top + line], [x + step, top + line + rng.uniform(-1.5, 1.5)]]), 60, 1)
            x += step + 2.0


def pot_top(rng: Generator, size: int, rim: float) -> Array:
    """A square pot from above: rim, soil and one large rosette."""
    canvas = np.full((size, size), int(rim), np.uint8)
    inner = int(0.86 * size)
    edge = (size - inner) // 2
    canvas[edge : edge + inner, edge : edge + inner] = soil(rng, (inner, inner))
    draw_plant(canvas, rng, np.full(2, size / 2.0), 0.5 * size, Species.drawn(rng))
    return linear_light(canvas, rng, 0.07)


def leaf_blade(rng: Generator, size: int = 256) -> Array:
    """Texture of a leaf that is a parallelogram: midrib from corner (0, 0) to the opposite one, veins fanning out."""
    tone, vein = rng.uniform(95, 180), rng.uniform(20, 60)
    canvas = np.full((size, size), int(tone * 0.74), np.uint8)
    fill(canvas, np.array([[0.0, 0.0], [size, 0.0], [size, size]]), min(tone * 1.1, 240))
    for s in np.linspace(0.06, 0.9, 8):
        start = np.array([s, s]) * size
        stroke(canvas, np.array([start, [min(s + 0.45, 1.0) * size, s * size]]), min(tone + 1.2 * vein, 245), 3)
        stroke(canvas, np.array([start, [s * size, min(s + 0.45, 1.0) * size]]), tone + 0.4 * vein, 3)
    stroke(canvas, np.array([[0.0, 0.0], [size, size]]), min(tone + vein, 245), 7)
    for centre in rng.uniform(0, size, (int(rng.integers(0, 14)), 2)):
        dot(canvas, centre, rng.uniform(3, 10), rng.uniform(50, 220))
    return linear_light(canvas, rng, 0.1)

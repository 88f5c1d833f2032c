"""Invented materials of the greenhouse: concrete, slatted wood, mesh, plastic, metal, glass walls, tags and signs.

Pictures are drawn as 8-bit tones with smooth edges, taken to linear light by a gamma of 2.2 (common practice), and
roughened by noise on many scales, so that corners and gradients are there at every distance, as in nature. Values
stay within `DARKEST`..`BRIGHTEST`, a contrast of 1:30.
"""

import cv2
import numpy as np

Array = np.ndarray
Generator = np.random.Generator

DARKEST, BRIGHTEST = 0.03, 0.9
_SUBPIXEL_BITS = 4


def noise(rng: Generator, shape: tuple[int, int], coarsest: float, octaves: int = 5, fall: float = 0.6) -> Array:
    """Smooth noise (H, W) float32 of about unit deviation: octaves from `coarsest` texels, each weaker by `fall`."""
    total: Array = np.zeros((2, 2), np.float32)
    power = 0.0
    for octave in range(octaves):
        cell = max(coarsest / 2**octave, 1.0)
        size = [max(int(np.ceil(side / cell)) + 1, 2) for side in shape]
        total = np.asarray(cv2.resize(total, size[::-1], interpolation=cv2.INTER_CUBIC))
        total = total + np.float32(fall**octave) * rng.standard_normal(size, dtype=np.float32)
        power += fall ** (2 * octave)
        if cell == 1.0:
            break
    return cv2.resize(total, shape[::-1], interpolation=cv2.INTER_CUBIC) / np.float32(np.sqrt(power))


def linear_light(tones: Array, rng: Generator, roughness: float = 0.08, grain: float = 0.03) -> Array:
    """Turn 8-bit tones (H, W) into linear light float32, with mottling (`roughness`) and fine `grain`."""
    light = (np.arange(256, dtype=np.float32) / 255.0) ** 2.2
    shape = tones.shape[0], tones.shape[1]
    mottle = 1.0 + roughness * noise(rng, shape, 60.0) + grain * rng.standard_normal(shape, dtype=np.float32)
    return np.clip(light[tones] * np.maximum(mottle, 0.2), DARKEST, BRIGHTEST)


def fixed_point(points: Array | list[float]) -> Array:
    """Points (N, 2) in texels as OpenCV's fixed-point integers, drawn with `shift=_SUBPIXEL_BITS`."""
    return np.rint(np.asarray(points) * (1 << _SUBPIXEL_BITS)).astype(np.int32)


def fill(canvas: Array, points: Array, tone: float) -> None:
    """Fill a polygon (N, 2) with smooth edges."""
    cv2.fillPoly(canvas, [fixed_point(points)], float(tone), cv2.LINE_AA, _SUBPIXEL_BITS)


def stroke(canvas: Array, points: Array, tone: float, width: int = 1) -> None:
    """Draw an open line through points (N, 2) with smooth edges."""
    cv2.polylines(canvas, [fixed_point(points)], False, float(tone), width, cv2.LINE_AA, _SUBPIXEL_BITS)


def dot(canvas: Array, centre: Array | list[float], radius: float, tone: float) -> None:
    """Fill a disc with smooth edges."""
    unit = 1 << _SUBPIXEL_BITS  # plain numbers: there are tens of thousands of dots
    place = round(float(centre[0]) * unit), round(float(centre[1]) * unit)
    cv2.circle(canvas, place, int(radius * unit), float(tone), -1, cv2.LINE_AA, _SUBPIXEL_BITS)


def rectangle(canvas: Array, left: float, top: float, width: float, height: float, tone: float) -> None:
    """Fill an upright rectangle."""
    right, bottom = left + width, top + height
    fill(canvas, np.array([[left, top], [right, top], [right, bottom], [left, bottom]]), tone)


def speckle(canvas: Array, rng: Generator, count: int, radius: tuple[float, float], tones: tuple[float, float]) -> None:
    """Scatter dots of random radius and tone."""
    height, width = canvas.shape
    for centre in rng.uniform([0, 0], [width, height], (count, 2)):
        dot(canvas, centre, rng.uniform(*radius), rng.uniform(*tones))


def wander(rng: Generator, start: Array, heading: float, steps: int, length: float, wobble: float) -> Array:
    """A line (steps + 1, 2) that wanders off from `start`, as cracks and hoses do."""
    headings = heading + np.cumsum(wobble * rng.standard_normal(steps))
    moves = length * np.stack([np.cos(headings), np.sin(headings)], axis=1)
    return np.concatenate([[start], start + np.cumsum(moves, axis=0)])


def concrete(rng: Generator, shape: tuple[int, int], slab: float = 220.0) -> Array:
    """Floor slabs with joints, cracks, stains, spilt soil and fallen leaves; `slab` texels a side."""
    height, width = shape
    canvas = np.clip(118 + 16 * noise(rng, shape, 180.0), 40, 220).astype(np.uint8)
    for row, top in enumerate(np.arange(0.0, height, slab)):
        for left in np.arange(-0.5 * slab * (row % 2), width, slab):
            tone = rng.uniform(-22, 22)
            block = canvas[int(top) : int(top + slab), max(int(left), 0) : max(int(left + slab), 0)]
            block[:] = np.clip(block + tone, 20, 235)
            rectangle(canvas, left, top, slab, 4, 48)
            rectangle(canvas, left, top, 4, slab, 48)
    area = height * width
    for _ in range(area // 40000):
        crack = wander(rng, rng.uniform([0, 0], [width, height]), rng.uniform(0, 2 * np.pi), 14, 9.0, 0.4)
        stroke(canvas, crack, rng.uniform(35, 70), 1)
    speckle(canvas, rng, area // 900, (0.7, 2.6), (30, 200))
    for centre in rng.uniform([0, 0], [width, height], (area // 26000, 2)):
        spill = centre + rng.normal(0.0, rng.uniform(6, 22), (40, 2))
        for crumb in spill:
            dot(canvas, crumb, rng.uniform(1.0, 3.0), rng.uniform(30, 70))
    return linear_light(canvas, rng, 0.12, 0.04)


def slats(
    rng: Generator, shape: tuple[int, int], board: float = 36.0, gap: float = 6.0, bright: float = 150.0
) -> Array:
    """Upright wooden boards with dark gaps, grain, knots and screws."""
    height, width = shape
    canvas = np.full(shape, 30, np.uint8)
    for left in np.arange(0.0, width, board + gap):
        tone = np.clip(bright + rng.uniform(-35, 30), 50, 230)
        rectangle(canvas, left, 0, board, height, tone)
        for _ in range(5):
            start = np.array([left + rng.uniform(3, board - 3), 0.0])
            line = wander(rng, start, np.pi / 2, height // 24 + 1, 24.0, 0.01)
            line[:, 0] = np.clip(line[:, 0], left + 1, left + board - 1)
            stroke(canvas, line, tone - rng.uniform(12, 35), 1)
        for _ in range(rng.poisson(height / 300)):
            dot(canvas, [left + rng.uniform(8, board - 8), rng.uniform(0, height)], rng.uniform(2, 5), tone - 70)
        for screw in np.arange(rng.uniform(10, 30), height, 190.0):
            dot(canvas, [left + board / 2, screw], 2.4, rng.uniform(200, 235))
    return linear_light(canvas, rng, 0.1)


def mesh(rng: Generator, shape: tuple[int, int], pitch: float = 24.0) -> Array:
    """Bench top: a worn wire mesh of uneven pitch over a dark ground, with mats, spilt soil and crumbs."""
    height, width = shape
    canvas = np.clip(70 + 14 * noise(rng, shape, 90.0), 25, 150).astype(np.uint8)
    for left in np.cumsum(rng.uniform(0.5 * pitch, 1.6 * pitch, int(1.3 * width / pitch) + 1)):
        rectangle(canvas, left, 0, rng.uniform(2, 4), height, rng.uniform(105, 185))
    for top in np.cumsum(rng.uniform(0.5 * pitch, 1.6 * pitch, int(1.3 * height / pitch) + 1)):
        rectangle(canvas, 0, top, width, rng.uniform(2, 4), rng.uniform(105, 185))
    for _ in range(max(height * width // 45000, 2)):
        size = rng.uniform([60, 50], [240, 170])
        corner = rng.uniform([0, 0], np.maximum([width, height] - size, 1))
        rectangle(canvas, corner[0], corner[1], size[0], size[1], rng.uniform(50, 215))
    for centre in rng.uniform([0, 0], [width, height], (height * width // 12000, 2)):
        tone = rng.uniform(30, 90)
        for crumb in centre + rng.normal(0.0, rng.uniform(4, 14), (24, 2)):
            dot(canvas, crumb, rng.uniform(1.0, 3.4), tone + rng.uniform(-12, 12))
    speckle(canvas, rng, height * width // 700, (0.8, 2.6), (25, 225))
    return linear_light(canvas, rng, 0.1)


def plastic(rng: Generator, shape: tuple[int, int], tone: float, ribs: float = 18.0) -> Array:
    """Moulded sides of trays, crates and pots: upright ribs under a rim, scratches, dirt splashes below."""
    height, width = shape
    canvas = np.full(shape, np.clip(tone, 25, 235), np.uint8)
    for left in np.arange(rng.uniform(0, ribs), width, ribs):
        rectangle(canvas, left, 0.28 * height, 0.35 * ribs, height, max(tone - 38, 22))
    rectangle(canvas, 0, 0, width, 0.16 * height, min(tone + 38, 240))
    for _ in range(max(height * width // 700, 2)):
        start = rng.uniform([0, 0], [width, height])
        stroke(canvas, np.array([start, start + rng.normal(0, 7, 2)]), tone + rng.uniform(-45, 45), 1)
    for centre in rng.uniform([0, 0.6 * height], [width, height], (max(height * width // 350, 2), 2)):
        dot(canvas, centre, rng.uniform(0.6, 2.2), rng.uniform(28, 60))
    return linear_light(canvas, rng, 0.06)


def metal(rng: Generator, shape: tuple[int, int], tone: float = 165.0) -> Array:
    """Painted metal of pipes and lamp housings: bands, rivets, scuffs."""
    height, width = shape
    profile = tone * (0.72 + 0.5 * np.exp(-(((np.arange(height) / height - 0.4) / 0.22) ** 2)))
    canvas = np.repeat(np.clip(profile, 25, 240).astype(np.uint8)[:, None], width, axis=1)
    for left in np.arange(rng.uniform(10, 50), width, rng.uniform(70, 130)):
        rectangle(canvas, left, 0, rng.uniform(4, 14), height, rng.uniform(40, 220))
    for _ in range(max(height * width // 900, 3)):
        dot(canvas, rng.uniform([0, 0], [width, height]), rng.uniform(0.8, 2.5), rng.uniform(40, 230))
    return linear_light(canvas, rng, 0.07)


def wall(rng: Generator, shape: tuple[int, int], pane: float = 260.0) -> Array:
    """Greenhouse wall: whitewashed panes with runs of dirt between dark bars, over a brick plinth."""
    height, width = shape
    plinth = int(0.62 * height)
    canvas = np.clip(172 + 18 * noise(rng, shape, 200.0), 90, 235).astype(np.uint8)
    for _ in range(width // 9):
        run = wander(rng, np.array([rng.uniform(0, width), rng.uniform(0, plinth)]), np.pi / 2, 16, 9.0, 0.05)
        stroke(canvas, run, rng.uniform(95, 215), int(rng.integers(1, 4)))
    for left in np.arange(rng.uniform(0, pane), width, pane):
        rectangle(canvas, left, 0, 13, plinth, 44)
        rectangle(canvas, left + 4, 0, 3, plinth, 120)
    rectangle(canvas, 0, 0.34 * height, width, 10, 52)
    bricks(canvas, rng, plinth)
    return linear_light(canvas, rng, 0.1)


def bricks(canvas: Array, rng: Generator, top: int, brick: tuple[float, float] = (84.0, 28.0)) -> None:
    """Lay bricks from row `top` down, in place."""
    height, width = canvas.shape
    canvas[top:] = 150
    for row, y in enumerate(np.arange(float(top), height, brick[1])):
        for x in np.arange(-0.5 * brick[0] * (row % 2), width, brick[0]):
            rectangle(canvas, x + 2, y + 2, brick[0] - 5, brick[1] - 5, rng.uniform(62, 128))


def sign(rng: Generator, shape: tuple[int, int], text: str, dark: bool = False) -> Array:
    """A board with a word, a frame, lines of small print and a pattern of squares."""
    height, width = shape
    paper, ink = (58.0, 225.0) if dark else (222.0, 45.0)
    canvas = np.full(shape, int(paper), np.uint8)
    rectangle(canvas, 0.03 * width, 0.05 * height, 0.94 * width, 0.9 * height, ink)
    rectangle(canvas, 0.05 * width, 0.08 * height, 0.9 * width, 0.84 * height, paper)
    scale = 0.8 * width / max(cv2.getTextSize(text, cv2.FONT_HERSHEY_DUPLEX, 1.0, 2)[0][0], 1)
    scale = min(scale, height / 75.0)
    place = (int(0.1 * width), int(0.5 * height))
    cv2.putText(canvas, text, place, cv2.FONT_HERSHEY_DUPLEX, scale, ink, max(int(2 * scale), 1), cv2.LINE_AA)
    for top in (0.6, 0.7, 0.8):
        left = 0.1 * width
        while left < 0.52 * width:
            word = rng.uniform(0.02, 0.09) * width
            rectangle(canvas, left, top * height, word, 0.035 * height, ink)
            left += word + 0.015 * width
    cell = 0.055 * height
    for i, j in np.argwhere(rng.random((5, 5)) < 0.5):
        rectangle(canvas, 0.68 * width + j * cell, 0.6 * height + i * cell, cell, cell, ink)
    return linear_light(canvas, rng, 0.05, 0.02)

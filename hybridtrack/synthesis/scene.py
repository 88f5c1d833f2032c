"""Scenes made of textured parallelograms, and of boxes put together from them.

Light is linear and relative: 1 is what a white surface sends under the scene's full lamps. World axes: z up, metres.
"""

from dataclasses import dataclass, field

import cv2
import numpy as np

from hybridtrack.errors import OptionError, ShapeError
from hybridtrack.geometry.arrays import FloatArray, with_trailing_shape

Array = np.ndarray

TEXEL_FULL = 65535.0
CHANNELS = "WRGB"
Vector = tuple[float, float, float]
Tint = tuple[float, float, float, float]
GREY: Tint = (1.0, 1.0, 1.0, 1.0)
_MOST_LEVELS = 16


def halved(picture: Array) -> Array:
    """Average 2 x 2 texels, repeating the last row or column of an odd size, so that the scale is exactly one half."""
    height, width = picture.shape
    if height % 2 or width % 2:
        picture = np.pad(picture, ((0, height % 2), (0, width % 2)), mode="edge")
    return np.asarray(
        cv2.resize(picture, (picture.shape[1] // 2, picture.shape[0] // 2), interpolation=cv2.INTER_AREA), np.float32
    )


def pyramid(picture: Array) -> list[Array]:
    """The picture and its halvings down to one texel, all float32."""
    levels = [np.asarray(picture, np.float32)]
    while max(levels[-1].shape) > 1 and len(levels) < _MOST_LEVELS:
        levels.append(halved(levels[-1]))
    return levels


def texture_from_picture(path: str, brightest: float = 1.0) -> Array:
    """Read any picture file as a texture: linear light (H, W), its gamma (2.2, common practice) taken off.

    Raises OptionError where the file can't be read as a picture.
    """
    encoded = cv2.imread(str(path), cv2.IMREAD_GRAYSCALE)
    if encoded is None:
        raise OptionError(f"{path}: expected a picture file, and it can't be read as one")
    return brightest * (encoded.astype(np.float32) / 255.0) ** 2.2


@dataclass(frozen=True)
class Surface:
    """The parallelogram `origin + s edge_u + t edge_v`, s and t in 0..1, textured so that s runs along texture columns.

    `window` is the part of the texture used, in texels (x, y, width, height); None: all of it. `tint` scales the
    texture for clear, red, green and blue pixels. A `one_sided` surface is seen only from the side on which its texture
    is not mirrored: `edge_u x edge_v` points away from the eye.
    """

    origin: Vector
    edge_u: Vector
    edge_v: Vector
    texture: int
    window: tuple[float, float, float, float] | None = None
    tint: Tint = GREY
    one_sided: bool = False


@dataclass(frozen=True)
class Scene:
    """Surfaces and textures packed for ray casting.

    `origins`, `edges_u`, `edges_v` (Q, 3) m; `windows` (Q, 5) see the kernels; `tints` (Q, 4) float32; `texels` uint16
    (all pyramid levels of all textures, `TEXEL_FULL` = 1); `levels` (textures, 16, 4) start, width, height, count.
    """

    origins: FloatArray
    edges_u: FloatArray
    edges_v: FloatArray
    one_sided: Array
    textures: Array
    windows: FloatArray
    tints: FloatArray
    texels: Array = field(repr=False)
    levels: Array = field(repr=False)
    background: float = 0.02

    @property
    def size(self) -> int:
        """Number of surfaces."""
        return len(self.origins)

    def triangles(self) -> tuple[FloatArray, Array]:
        """Corners (4 Q, 3) and triangles (2 Q, 3) of the surfaces, two a surface in order, for other ray casters."""
        o, u, v = self.origins, self.edges_u, self.edges_v
        corners = np.stack([o, o + u, o + u + v, o + v], axis=1).reshape(-1, 3)
        first = 4 * np.arange(self.size)[:, None]
        return corners, (first + np.array([0, 1, 2, 0, 2, 3])).reshape(-1, 3)

    def points(self, surface: Array, place: FloatArray) -> FloatArray:
        """World points (..., 3) at (s, t) `place` (..., 2) of surfaces by index (...)."""
        along_u = place[..., 0, None] * self.edges_u[surface]
        return np.asarray(self.origins[surface] + along_u + place[..., 1, None] * self.edges_v[surface])


class SceneBuilder:
    """Collects textures and surfaces, and packs them."""

    def __init__(self, background: float = 0.02) -> None:
        self.background = background
        self.surfaces: list[Surface] = []
        self._pyramids: list[list[Array]] = []

    def texture(self, picture: Array) -> int:
        """Add a texture: linear light (H, W) in 0..1. Returns its index."""
        picture = np.asarray(picture)
        if picture.ndim != 2 or min(picture.shape) < 1:
            raise ShapeError(f"Expected a texture of shape (H, W), got {picture.shape}.")
        if float(picture.min()) < 0.0 or not float(picture.max()) <= 1.0:
            raise ShapeError(f"Expected texture values in 0..1, got {picture.min():g} to {picture.max():g}.")
        self._pyramids.append(pyramid(picture))
        return len(self._pyramids) - 1

    def texture_size(self, texture: int) -> tuple[int, int]:
        """(width, height) in texels."""
        height, width = self._pyramids[texture][0].shape
        return width, height

    def add(self, *surfaces: Surface) -> None:
        """Add surfaces."""
        self.surfaces.extend(surfaces)

    def _levels(self) -> tuple[Array, Array]:
        table = np.zeros((len(self._pyramids), _MOST_LEVELS, 4), np.int64)
        start = 0
        for index, levels in enumerate(self._pyramids):
            for level, picture in enumerate(levels):
                table[index, level] = start, picture.shape[1], picture.shape[0], len(levels)
                start += picture.size
        texels = np.empty(start, np.uint16)
        for index, levels in enumerate(self._pyramids):
            for level, picture in enumerate(levels):
                begin = table[index, level, 0]
                texels[begin : begin + picture.size] = np.rint(picture * TEXEL_FULL).astype(np.uint16).ravel()
        return texels, table

    def _window(self, surface: Surface) -> list[float]:
        width, height = self.texture_size(surface.texture)
        window = surface.window or (0.0, 0.0, float(width), float(height))
        area = float(np.linalg.norm(np.cross(surface.edge_u, surface.edge_v)))
        if area <= 0.0:
            raise ShapeError(f"Expected a surface with an area, got edges {surface.edge_u} and {surface.edge_v}.")
        return [*window, abs(window[2] * window[3]) / area]

    def build(self) -> Scene:
        """Pack. Raises ShapeError where a surface has no area or there is none."""
        if not self.surfaces:
            raise ShapeError("Expected at least one surface in a scene, got none.")
        texels, levels = self._levels()
        return Scene(
            origins=np.array([s.origin for s in self.surfaces], float),
            edges_u=np.array([s.edge_u for s in self.surfaces], float),
            edges_v=np.array([s.edge_v for s in self.surfaces], float),
            one_sided=np.array([s.one_sided for s in self.surfaces]),
            textures=np.array([s.texture for s in self.surfaces], np.int64),
            windows=np.array([self._window(s) for s in self.surfaces]),
            tints=np.array([s.tint for s in self.surfaces], float) / TEXEL_FULL,
            texels=texels,
            levels=levels,
            background=self.background,
        )


def shaded(tint: Tint, factor: float) -> Tint:
    """A tint darkened or lightened by one factor."""
    clear, red, green, blue = tint
    return factor * clear, factor * red, factor * green, factor * blue


def vector(values: Array) -> Vector:
    """Three numbers as a tuple."""
    x, y, z = (float(value) for value in values)
    return x, y, z


# Corner, edge along texture columns and edge along texture rows of each face of the unit box, seen from outside, and
# the share of lamp light that it gets: lamps hang overhead.
_FACES: dict[str, tuple[tuple[int, int, int], tuple[int, int, int], tuple[int, int, int], float]] = {
    "top": ((0, 1, 1), (1, 0, 0), (0, -1, 0), 1.0),
    "front": ((0, 0, 1), (1, 0, 0), (0, 0, -1), 0.72),
    "back": ((1, 1, 1), (-1, 0, 0), (0, 0, -1), 0.6),
    "left": ((0, 1, 1), (0, -1, 0), (0, 0, -1), 0.55),
    "right": ((1, 0, 1), (0, 1, 0), (0, 0, -1), 0.64),
}


@dataclass(frozen=True)
class Box:
    """A box standing on its `foot` (the middle of its base), `size` along its axes, turned by `turn_rad` about z."""

    foot: tuple[float, float, float]
    size: tuple[float, float, float]
    turn_rad: float = 0.0

    def surface(self, face: str, texture: int, tint: Tint = GREY) -> Surface:
        """One face, `top`, `front`, `back`, `left` or `right`, one-sided, darkened by how it faces the lamps."""
        corner, along_u, along_v, light = _FACES[face]
        cosine, sine = np.cos(self.turn_rad), np.sin(self.turn_rad)
        turn = np.array([[cosine, -sine, 0.0], [sine, cosine, 0.0], [0.0, 0.0, 1.0]])
        size = np.asarray(self.size)
        origin = np.asarray(self.foot) + turn @ ((np.asarray(corner) - [0.5, 0.5, 0.0]) * size)
        edges = [vector(turn @ (np.asarray(axis) * size)) for axis in (along_u, along_v)]
        return Surface(vector(origin), edges[0], edges[1], texture, tint=shaded(tint, light), one_sided=True)

    def surfaces(self, top: int, sides: int, tint: Tint = GREY) -> list[Surface]:
        """All faces but the bottom, the sides sharing one texture."""
        return [self.surface(face, top if face == "top" else sides, tint) for face in _FACES]


def flat_panel(picture: Array, width_m: float, height_m: float) -> Scene:
    """A scene of one upright picture: centred on the z axis at z = 0, texture columns along x and rows along y.

    Camera axes serve as world axes here: a camera at z = -d looks at it from the distance d.
    """
    with_trailing_shape(np.asarray(picture), "picture", ("H", "W"))
    builder = SceneBuilder()
    texture = builder.texture(picture)
    origin = (-0.5 * width_m, -0.5 * height_m, 0.0)
    builder.add(Surface(origin, (width_m, 0.0, 0.0), (0.0, height_m, 0.0), texture))
    return builder.build()

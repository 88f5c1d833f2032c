"""The map that odometry builds: keyframes, points, and which ray of which keyframe saw which point.

A point belongs to the track that found it. Keyframes share points; that is the covisibility graph (networkx), its edges
weighted by how many.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field

import networkx as nx
import numpy as np

from hybridtrack.geometry import sim3
from hybridtrack.odometry.bundle import Bundle
from hybridtrack.odometry.motion import camera_from_frame
from hybridtrack.odometry.observations import View

Array = np.ndarray


@dataclass(eq=False)
class Keyframe:
    """A frame kept in the map: its view, pose (4, 4), body twist (6,) 1/s, and the point of each ray (N,), -1 for
    none."""

    id: int
    view: View
    world_from_camera: Array
    twist: Array
    segment: int
    points: Array = field(default_factory=lambda: np.empty(0, np.int64))

    def poses_at(self, dt_s: Array) -> Array:
        """world_from_camera (N, 4, 4) at times `dt_s` (N,) after the frame's."""
        return self.world_from_camera @ camera_from_frame(self.twist, -dt_s)  # exp(dt w) inverts exp(-dt w)


class SparseMap:
    """Keyframes in time order and points under whole-number ids; positions (P, 3) in `positions`."""

    def __init__(self) -> None:
        self.keyframes: list[Keyframe] = []
        self.positions = np.empty((0, 3))
        self.alive = np.empty(0, bool)
        self._point_of_track: dict[int, dict[int, int]] = {}
        self.covisibility = nx.Graph()
        self._tied: dict[int, int] = {}

    @property
    def point_count(self) -> int:
        """Points in use."""
        return int(np.count_nonzero(self.alive))

    def points_of(self, ids: Array, segment: int) -> Array:
        """Point of each track (N,) in a segment, -1 where it has none."""
        known = self._point_of_track.setdefault(segment, {})
        return np.array([known.get(track, -1) for track in ids.tolist()], dtype=np.int64)

    def give_points(self, ids: Array, points: Array, segment: int) -> None:
        """Let tracks (N,) of a segment follow existing points (N,)."""
        self._point_of_track.setdefault(segment, {}).update(zip(ids.tolist(), points.tolist(), strict=True))

    def cut_tracks(self, ids: Array, segment: int) -> None:
        """Part tracks (N,) from their points: what they follow now is not the point."""
        known = self._point_of_track.setdefault(segment, {})
        for track in ids.tolist():
            known.pop(track, None)

    def add_keyframe(self, view: View, world_from_camera: Array, twist: Array, segment: int) -> Keyframe:
        """Append a keyframe; its rays take the points of their tracks."""
        keyframe = Keyframe(
            len(self.keyframes), view, world_from_camera, twist, segment, self.points_of(view.ids, segment)
        )
        self.keyframes.append(keyframe)
        self.covisibility.add_node(keyframe.id)
        self.count_shared(keyframe)
        return keyframe

    def count_shared(self, keyframe: Keyframe, reach: int = 60) -> None:
        """Bring the covisibility of one keyframe with the `reach` before it up to date."""
        mine = keyframe.points[keyframe.points >= 0]
        for other in self.keyframes[max(0, keyframe.id - reach) : keyframe.id]:
            shared = len(np.intersect1d(mine, other.points[other.points >= 0], assume_unique=True))
            if shared:
                self.covisibility.add_edge(keyframe.id, other.id, shared=shared)
            elif self.covisibility.has_edge(keyframe.id, other.id):
                self.covisibility.remove_edge(keyframe.id, other.id)

    def adopt(self, fresh: "SparseMap", segment: int) -> None:
        """Append all of another map, its tracks under `segment`."""
        first_point, first_keyframe = len(self.positions), len(self.keyframes)
        self.positions = np.concatenate([self.positions, fresh.positions])
        self.alive = np.concatenate([self.alive, fresh.alive])
        for known in fresh._point_of_track.values():
            mine = self._point_of_track.setdefault(segment, {})
            mine.update({track: point + first_point for track, point in known.items()})
        for keyframe in fresh.keyframes:
            keyframe.id += first_keyframe
            keyframe.segment = segment
            keyframe.points = np.where(keyframe.points >= 0, keyframe.points + first_point, -1)
            self.keyframes.append(keyframe)
            self.covisibility.add_node(keyframe.id)
            self.count_shared(keyframe)

    def nearest_keyframe(self, t_ns: int, segment: int) -> Keyframe:
        """The keyframe of a segment nearest in time."""
        return min((k for k in self.keyframes if k.segment == segment), key=lambda k: abs(k.view.t_ns - t_ns))

    def frame_of(self, segment: int) -> int:
        """The segment in whose frame of reference a segment's poses are: its own number until it is tied to another."""
        while segment in self._tied:
            segment = self._tied[segment]
        return segment

    def tie(self, segment: int, to_segment: int, to_from_segment: Array) -> None:
        """Move the frame of reference of one segment into that of another by a similarity (4, 4)."""
        source, target = self.frame_of(segment), self.frame_of(to_segment)
        members = [k.id for k in self.keyframes if self.frame_of(k.segment) == source]
        self.transform(members, to_from_segment)
        self._tied[source] = target

    def groups(self) -> list[list[int]]:
        """Ids of the keyframes of each frame of reference, in time order."""
        found: dict[int, list[int]] = {}
        for keyframe in self.keyframes:
            found.setdefault(self.frame_of(keyframe.segment), []).append(keyframe.id)
        return list(found.values())

    def neighbours(self, keyframe: Keyframe, at_most: int) -> list[int]:
        """Ids of the keyframes that share most points, the most first."""
        edges = self.covisibility.adj[keyframe.id]
        return sorted(edges, key=lambda other: (-edges[other]["shared"], -other))[:at_most]

    def add_points(self, positions: Array, track_ids: Array, segment: int, first_frame: Array | None = None) -> Array:
        """Add points (G, 3) found by tracks (G,) of a segment, give them to its keyframes' rays, return their ids.

        `first_frame` (G,): rays of earlier frames are left alone.
        """
        first = len(self.positions)
        new = np.arange(first, first + len(positions))
        self.positions = np.concatenate([self.positions, positions])
        self.alive = np.concatenate([self.alive, np.ones(len(positions), bool)])
        known = self._point_of_track.setdefault(segment, {})
        known.update(zip(track_ids.tolist(), new.tolist(), strict=True))
        order = np.argsort(track_ids)
        since = np.zeros(len(new)) if first_frame is None else first_frame
        for keyframe in self.keyframes:
            if keyframe.segment == segment:
                rows = np.flatnonzero((keyframe.points < 0) & np.isin(keyframe.view.ids, track_ids))
                found = order[np.searchsorted(track_ids, keyframe.view.ids[rows], sorter=order)]
                in_time = keyframe.view.index >= since[found]
                keyframe.points[rows[in_time]] = new[found[in_time]]
        return new

    def drop_points(self, points: Array) -> None:
        """Forget points and everything that looks at them."""
        if not len(points):
            return
        self.alive[points] = False
        gone = set(points.tolist())
        for known in self._point_of_track.values():
            for track in [track for track, point in known.items() if point in gone]:
                del known[track]
        for keyframe in self.keyframes:
            keyframe.points[np.isin(keyframe.points, points)] = -1

    def transform(self, keyframe_ids: Sequence[int], similarity: Array) -> None:
        """Move keyframes and the points that only they see by a similarity (4, 4)."""
        scale, turn, shift = sim3.decompose(similarity)
        seen: list[Array] = []
        for number in keyframe_ids:
            keyframe = self.keyframes[number]
            pose = keyframe.world_from_camera.copy()
            pose[:3, :3] = turn @ pose[:3, :3]
            pose[:3, 3] = scale * turn @ pose[:3, 3] + shift
            keyframe.world_from_camera = pose
            keyframe.twist = np.concatenate([scale * keyframe.twist[:3], keyframe.twist[3:]])
            seen.append(keyframe.points[keyframe.points >= 0])
        if seen:
            points = np.unique(np.concatenate(seen))
            self.positions[points] = sim3.transform(similarity, self.positions[points])


@dataclass(frozen=True, eq=False)
class BundleIndex:
    """Where a bundle's parts come from: `keyframes` (K,) ids, `points` (P,) ids, and each ray's `rows` (M,) in its
    view."""

    keyframes: Array
    points: Array
    rows: Array


def ray_ids(world: SparseMap, bundle: Bundle, index: BundleIndex) -> Array:
    """Track id (M,) of every ray of a bundle; negative ones are features of places."""
    keyframes = index.keyframes[bundle.pose_of].tolist()
    return np.array([world.keyframes[k].view.ids[row] for k, row in zip(keyframes, index.rows.tolist(), strict=True)])


def assemble(
    world: SparseMap, keyframe_ids: Sequence[int], points: Array, held: set[int]
) -> tuple[Bundle, BundleIndex]:
    """The bundle of the rays from some keyframes to some points (sorted ids); keyframes in `held` do not move."""
    wanted = np.zeros(len(world.positions), bool)
    wanted[points] = True
    slot, columns = [], []
    for number, keyframe_id in enumerate(keyframe_ids):
        keyframe = world.keyframes[keyframe_id]
        rows = np.flatnonzero(keyframe.points >= 0)
        rows = rows[wanted[keyframe.points[rows]]]
        own = camera_from_frame(keyframe.twist, keyframe.view.dt_s[rows])
        slot.append(np.full(len(rows), number, np.int64))
        columns.append((keyframe.points[rows], own, keyframe.view.rays[rows], keyframe.view.whitening[rows], rows))
    point_ids, own, rays, whitening, rows = (np.concatenate(parts) for parts in zip(*columns, strict=True))
    order = np.argsort(point_ids, kind="stable")
    bundle = Bundle(
        np.array([world.keyframes[i].world_from_camera for i in keyframe_ids]),
        np.array([i in held for i in keyframe_ids]),
        world.positions[points].copy(),
        np.concatenate(slot)[order],
        np.searchsorted(points, point_ids[order]),
        own[order],
        rays[order],
        whitening[order],
    )
    return bundle, BundleIndex(np.asarray(keyframe_ids), points, rows[order])

# mypy: allow-untyped-defs
"""Compiled ray casting of textured parallelograms.

A surface is the parallelogram `origin + s * edge_u + t * edge_v`, s and t in 0..1. For a camera at `c` with rotation
`R`, the ray of unit direction d (camera axes) meets its plane where `r R d = (origin - c) + s edge_u + t edge_v`. With
`M = [edge_u, edge_v, origin - c]` and the *surface map* `H = M^-1 R`, the product `(a, b, w) = H d` holds
`s = a / w`, `t = b / w` and the inverse distance `w = 1 / r`: no search and one division a ray, whatever the lens.

Rays are cast tile by tile: a tile is a bundle of rays inside a cone, and a short list of surfaces that may meet it.
Texture is read between two levels of a pyramid of halved pictures, mixed by variance (see `_read`). Where a
ray passes close to an outline, it is replaced by a few rays spread over the pixel's aperture.
"""

import math

import numba
import numpy as np

from hybridtrack.compiled import kernel

# A row of `maps`: H by rows, lengths of the four outline functionals, texels^2 per m^2 over the plane's distance.
MAP_SIZE = 14
# A row of `windows`: first texel (x, y) and span in texels (x, y) of a surface's part of its texture, texels^2 per m^2.
WINDOW_SIZE = 5
# A row of `looks`: the first four of a row of `windows`, the tints of the four channels, the texture's index.
LOOK_TEXTURE, LOOK_SIZE = 8, 9
# A row of `rays`: direction, spans of the aperture along u and v (3 each), solid angle of the footprint, outline margin
# in rad, channel. One array, for passing many to a compiled function costs as much as its work.
RAY, ALONG_U, ALONG_V, SOLID_ANGLE, MARGIN, CHANNEL, RAY_SIZE = 0, 3, 6, 9, 10, 11, 12
# A row of `found`: what a ray meets (see `_meet`), and the light along it.
BEST, MET_A, MET_B, MET_W, OUTLINE, SEEN, FOUND_SIZE = range(7)

# Four positions in the unit square, no two in one row or column, to spread rays over an aperture.
SPREAD_U = np.array([-0.375, -0.125, 0.125, 0.375])
SPREAD_V = np.array([-0.125, 0.375, -0.375, 0.125])


@kernel
def surface_maps(origins, edges_u, edges_v, one_sided, windows, world_from_camera, maps):
    """Fill `maps` (T, Q, MAP_SIZE) for poses (T, 4, 4); a surface that shows its back or its rim becomes zeros."""
    h = np.empty((3, 3))
    for i in range(world_from_camera.shape[0]):
        pose = world_from_camera[i]
        for q in range(origins.shape[0]):
            maps[i, q] = 0.0
            ox, oy, oz = origins[q, 0] - pose[0, 3], origins[q, 1] - pose[1, 3], origins[q, 2] - pose[2, 3]
            ux, uy, uz = edges_u[q, 0], edges_u[q, 1], edges_u[q, 2]
            vx, vy, vz = edges_v[q, 0], edges_v[q, 1], edges_v[q, 2]
            nx, ny, nz = uy * vz - uz * vy, uz * vx - ux * vz, ux * vy - uy * vx
            volume = nx * ox + ny * oy + nz * oz
            if abs(volume) < 1e-12 or (one_sided[q] and volume < 0.0):
                continue
            h[0, 0], h[0, 1], h[0, 2] = vy * oz - vz * oy, vz * ox - vx * oz, vx * oy - vy * ox
            h[1, 0], h[1, 1], h[1, 2] = oy * uz - oz * uy, oz * ux - ox * uz, ox * uy - oy * ux
            h[2, 0], h[2, 1], h[2, 2] = nx, ny, nz
            row = maps[i, q]
            for j in range(3):
                for k in range(3):
                    total = h[j, 0] * pose[0, k] + h[j, 1] * pose[1, k] + h[j, 2] * pose[2, k]
                    row[3 * j + k] = total / volume
            for j in range(2):
                near, far = 0.0, 0.0
                for k in range(3):
                    near += row[3 * j + k] ** 2
                    far += (row[6 + k] - row[3 * j + k]) ** 2
                row[9 + 2 * j], row[10 + 2 * j] = math.sqrt(near), math.sqrt(far)
            row[13] = windows[q, 4] * math.sqrt(row[6] ** 2 + row[7] ** 2 + row[8] ** 2)


@kernel
def _may_meet(row, axis, sine):
    """Whether a cone of rays (unit axis, sine of its half angle) may meet the surface: 0 no, 1 maybe, 2 all of it does.

    The cone is outside when it lies beyond one of the four planes through the camera and an outline, or behind.
    """
    if row[13] == 0.0:
        return 0
    a = row[0] * axis[0] + row[1] * axis[1] + row[2] * axis[2]
    b = row[3] * axis[0] + row[4] * axis[1] + row[5] * axis[2]
    w = row[6] * axis[0] + row[7] * axis[1] + row[8] * axis[2]
    depth = math.sqrt(row[6] ** 2 + row[7] ** 2 + row[8] ** 2)
    # Sines of the angles by which the axis lies inside each of the five planes.
    inside = min(min(a / row[9], (w - a) / row[10]), min(b / row[11], (w - b) / row[12]))
    inside = min(inside, w / depth)
    if inside < -sine:
        return 0
    return 2 if inside > sine else 1


@kernel
def _inverse_distances(row, axis, sine):
    """Smallest and largest inverse distance of the surface's plane over a cone."""
    w = row[6] * axis[0] + row[7] * axis[1] + row[8] * axis[2]
    square = row[6] ** 2 + row[7] ** 2 + row[8] ** 2
    off_axis = max(square - w * w, 0.0)
    across, along = math.sqrt(off_axis) * sine, w * math.sqrt(1.0 - sine * sine)
    if w > 0.0 and off_axis <= square * sine * sine:
        return along - across, math.sqrt(square)
    return along - across, along + across


@kernel
def _list_tile(maps, parents, axis, sine, candidates):
    """Write the surfaces that may meet a cone at one of the poses; return how many. -1: the list is full.

    Near ones come first, so that most rays reject the rest by distance alone.
    """
    count = 0
    floor = 0.0  # inverse distance beyond which a surface that fills the cone at every pose hides the others
    for q in parents:
        meets, fills, farthest = 0, True, np.inf
        for i in range(maps.shape[0]):
            meet = _may_meet(maps[i, q], axis, sine)
            meets = max(meets, meet)
            fills = fills and meet == 2
            if fills:
                farthest = min(farthest, _inverse_distances(maps[i, q], axis, sine)[0])
        if meets == 0:
            continue
        if count == len(candidates):
            return -1
        candidates[count] = q
        count += 1
        if fills:
            floor = max(floor, farthest)
    kept = 0
    near = np.empty(count)
    for c in range(count):
        q = candidates[c]
        nearest = 0.0
        for i in range(maps.shape[0]):
            nearest = max(nearest, _inverse_distances(maps[i, q], axis, sine)[1])
        if nearest < floor:
            continue
        place = kept
        while place > 0 and near[place - 1] < nearest:
            near[place], candidates[place] = near[place - 1], candidates[place - 1]
            place -= 1
        near[place], candidates[place] = nearest, q
        kept += 1
    return kept


@kernel
def list_candidates(maps, groups, group_axes, group_sines, axes, sines, candidates, counts):
    """List for every tile the surfaces that may meet it at some pose of a short, smooth motion.

    `maps` (K, Q, MAP_SIZE) holds poses along the motion, close enough that the cones' margin covers what lies between.
    Tiles lie in larger groups, which are tried first: `groups` (tiles,) names each tile's, tiles of a group adjoin.
    Fills `candidates` (tiles, room) and `counts`; returns whether the room sufficed.
    """
    everything = np.arange(maps.shape[1])
    parents = np.empty(maps.shape[1], np.int64)
    group, found = -1, 0
    for tile in range(len(groups)):
        if groups[tile] != group:
            group = groups[tile]
            found = _list_tile(maps, everything, group_axes[group], group_sines[group], parents)
        counts[tile] = _list_tile(maps, parents[:found], axes[tile], sines[tile], candidates[tile])
        if counts[tile] < 0:
            return False
    return True


@kernel
def _meet(maps, rays, first, last, margin_scale, found):
    """Meet rays first..last-1 with the listed surfaces, nearest first.

    Fills columns of `found`: place in the list (-1: nothing met), a, b, w of the module's docstring, and whether an
    outline not hidden by the surface met lies within the ray's margin times `margin_scale`.
    """
    for n in range(first, last):
        dx, dy, dz, margin = rays[n, RAY], rays[n, RAY + 1], rays[n, RAY + 2], margin_scale * rays[n, MARGIN]
        best, best_a, best_b, best_w, outline_w = -1, 0.0, 0.0, 0.0, 0.0
        for c in range(maps.shape[0]):
            w = maps[c, 6] * dx + maps[c, 7] * dy + maps[c, 8] * dz
            if w <= best_w:
                continue
            a = maps[c, 0] * dx + maps[c, 1] * dy + maps[c, 2] * dz
            b = maps[c, 3] * dx + maps[c, 4] * dy + maps[c, 5] * dz
            left, right = maps[c, 9] * margin, maps[c, 10] * margin
            top, bottom = maps[c, 11] * margin, maps[c, 12] * margin
            if a < -left or w - a < -right or b < -top or w - b < -bottom:
                continue
            if w > outline_w and (a < left or w - a < right or b < top or w - b < bottom):
                outline_w = w
            if a >= 0.0 and a <= w and b >= 0.0 and b <= w:
                best, best_a, best_b, best_w = c, a, b, w
        found[n, BEST], found[n, MET_A], found[n, MET_B], found[n, MET_W] = best, best_a, best_b, best_w
        found[n, OUTLINE] = margin > 0.0 and outline_w > 0.0 and outline_w >= best_w


@kernel
def _read(maps, looks, texels, levels, background, rays, first, last, found):
    """Fill the column of light of `found` for rays first..last-1 that `_meet` has met.

    Texels are read with a quadratic B-spline (3 x 3 weights), whose variance, 1/4 texel^2, does not depend on where
    between texels the ray falls, as that of bilinear reading does. With the box that a texel of level L averages, the
    variance is 4^L / 3; mixing two levels mixes variances: one of S texels^2 takes the share (3 S / 4^L - 1) / 3 of the
    level after L. The column SOLID_ANGLE of `rays` holds that of the square 3 S.
    """
    for n in range(first, last):
        best = int(found[n, BEST])
        if best < 0:
            found[n, SEEN] = background
            continue
        inverse = 1.0 / found[n, MET_W]
        x = looks[best, 0] + found[n, MET_A] * inverse * looks[best, 2]
        y = looks[best, 1] + found[n, MET_B] * inverse * looks[best, 3]
        square = rays[n, SOLID_ANGLE] * maps[best, 13] * inverse * inverse * inverse
        texture, level, scale = int(looks[best, LOOK_TEXTURE]), 0, 1.0
        coarsest = levels[texture, 0, 3] - 1
        while square >= 4.0 and level < coarsest:
            square, scale, level = 0.25 * square, 0.5 * scale, level + 1
        share = min(max(square - 1.0, 0.0), 3.0) / 3.0 if level < coarsest else 0.0
        total, weight = 0.0, 1.0 - share
        while weight > 0.0:
            start, width, height = levels[texture, level, 0], levels[texture, level, 1], levels[texture, level, 2]
            px = min(max(x * scale, 0.5), width - 0.5)
            py = min(max(y * scale, 0.5), height - 0.5)
            i, j = min(int(px), width - 1), min(int(py), height - 1)
            fx, fy = px - i - 0.5, py - j - 0.5
            before_x, after_x = 0.5 * (0.5 - fx) ** 2, 0.5 * (0.5 + fx) ** 2
            before_y, after_y = 0.5 * (0.5 - fy) ** 2, 0.5 * (0.5 + fy) ** 2
            here = start + j * width + i
            left, right = (1 if i > 0 else 0), (1 if i < width - 1 else 0)
            above, below = here - (width if j > 0 else 0), here + (width if j < height - 1 else 0)
            middle_x = 0.75 - fx * fx
            top = before_x * texels[above - left] + middle_x * texels[above] + after_x * texels[above + right]
            middle = before_x * texels[here - left] + middle_x * texels[here] + after_x * texels[here + right]
            bottom = before_x * texels[below - left] + middle_x * texels[below] + after_x * texels[below + right]
            total += weight * (before_y * top + (0.75 - fy * fy) * middle + after_y * bottom)
            weight, share = share, 0.0
            level, scale = level + 1, 0.5 * scale
        found[n, SEEN] = total * looks[best, 4 + int(rays[n, CHANNEL])]


@kernel
def _spread(maps, looks, texels, levels, background, rays, first, last, found, spread, met):
    """Replace the light of rays near an outline by the mean of a few rays spread over their aperture.

    `spread` and `met` are room for those rays and for what they meet.
    """
    size, count = len(SPREAD_U), 0
    for n in range(first, last):
        if found[n, OUTLINE] != 0.0:
            for k in range(size):
                for j in range(3):
                    along = SPREAD_U[k] * rays[n, ALONG_U + j] + SPREAD_V[k] * rays[n, ALONG_V + j]
                    spread[count, RAY + j] = rays[n, RAY + j] + along
                spread[count, SOLID_ANGLE], spread[count, CHANNEL] = rays[n, SOLID_ANGLE] / size, rays[n, CHANNEL]
                count += 1
    if count == 0:
        return
    _meet(maps, spread, 0, count, 0.0, met)
    _read(maps, looks, texels, levels, background, spread, 0, count, met)
    count = 0
    for n in range(first, last):
        if found[n, OUTLINE] != 0.0:
            total = 0.0
            for k in range(size):
                total += met[count + k, SEEN]
            found[n, SEEN] = total / size
            count += size


@kernel
def _looks_of(scene, ids, count):
    """Windows, tints and texture index (C, LOOK_SIZE) of listed surfaces."""
    _, _, textures, windows, tints, _ = scene
    looks = np.empty((count, LOOK_SIZE))
    for c in range(count):
        looks[c, LOOK_TEXTURE] = textures[ids[c]]
        for m in range(4):
            looks[c, m] = windows[ids[c], m]
            looks[c, 4 + m] = tints[ids[c], m]
    return looks


@kernel(parallel=True)
def render_instants(maps, scene, tiles, candidates, counts, rays, light):
    """Fill `light` (T, P) with what pixels see at T poses, `maps` (T, Q, MAP_SIZE).

    `scene` is (texels, levels, textures, windows, tints, background); `tiles` is (order (R,), start (tiles + 1,)): rays
    start[i] to start[i + 1] of `rays` (R, RAY_SIZE) lie in tile i, and ray n is pixel order[n]'s.
    """
    order, start = tiles
    texels, levels, background = scene[0], scene[1], scene[5]
    for tile in numba.prange(len(counts)):
        count, ids, begin, end = counts[tile], candidates[tile], start[tile], start[tile + 1]
        looks, own = _looks_of(scene, ids, count), rays[begin:end]
        found = np.empty((end - begin, FOUND_SIZE))
        room = len(SPREAD_U) * (end - begin)
        spread, met = np.zeros((room, RAY_SIZE)), np.empty((room, FOUND_SIZE))
        local = np.empty((count, MAP_SIZE))
        for i in range(maps.shape[0]):
            for c in range(count):
                for m in range(MAP_SIZE):
                    local[c, m] = maps[i, ids[c], m]
            _meet(local, own, 0, end - begin, 1.0, found)
            _read(local, looks, texels, levels, background, own, 0, end - begin, found)
            _spread(local, looks, texels, levels, background, own, 0, end - begin, found, spread, met)
            for n in range(begin, end):
                light[i, order[n]] = found[n - begin, SEEN]


@kernel
def _between(maps, i, knot, share, ids, local):
    """Fill `local` (C, MAP_SIZE) with the maps (samples, knots, Q, MAP_SIZE) of listed surfaces at sample `i`, `share`
    of the way from a knot to the next."""
    for c in range(local.shape[0]):
        for m in range(MAP_SIZE):
            below = maps[i, knot, ids[c], m]
            local[c, m] = below + share * (maps[i, knot + 1, ids[c], m] - below)


@kernel(parallel=True)
def render_exposures(maps, weights, places, rows, scene, tiles, candidates, counts, rays, light):
    """Add to `light` (P,) what pixels see, each exposed over samples at its own row's time.

    `maps` (samples, knots, Q, MAP_SIZE) holds every sample's surface maps at a few instants of the readout, between
    which they are taken as straight lines; `places` (rows,) says where between the knots each row is, a real number.
    `weights` (samples, rows): each sample's share of the exposure, lamp included. `rows` (P,): each pixel's row. The
    rest as in `render_instants`.
    """
    order, start = tiles
    texels, levels, background = scene[0], scene[1], scene[5]
    last_knot = maps.shape[1] - 2
    for tile in numba.prange(len(counts)):
        count, ids, begin, end = counts[tile], candidates[tile], start[tile], start[tile + 1]
        looks, own = _looks_of(scene, ids, count), rays[begin:end]
        found = np.empty((end - begin, FOUND_SIZE))
        room = len(SPREAD_U) * (end - begin)
        spread, met = np.zeros((room, RAY_SIZE)), np.empty((room, FOUND_SIZE))
        local = np.empty((count, MAP_SIZE))
        first = 0
        while first < end - begin:
            row, last = rows[order[begin + first]], first
            while last < end - begin and rows[order[begin + last]] == row:
                last += 1
            knot = min(int(places[row]), last_knot)
            share = places[row] - knot
            for i in range(maps.shape[0]):
                _between(maps, i, knot, share, ids, local)
                _meet(local, own, first, last, 1.0, found)
                _read(local, looks, texels, levels, background, own, first, last, found)
                _spread(local, looks, texels, levels, background, own, first, last, found, spread, met)
                for n in range(first, last):
                    light[order[begin + n]] += weights[i, row] * found[n, SEEN]
            first = last


@kernel
def cast_rays(maps, poses, directions, surface, place, distance):
    """Meet rays (N, 3) with every surface, no lists: fills surface index (N,) or -1, (s, t) (N, 2), distance (N,).

    `maps` (T, Q, MAP_SIZE); `poses` (N,) names the pose of each ray.
    """
    ray, found = np.zeros((1, RAY_SIZE)), np.empty((1, FOUND_SIZE))
    for n in range(directions.shape[0]):
        for j in range(3):
            ray[0, RAY + j] = directions[n, j]
        _meet(maps[poses[n]], ray, 0, 1, 0.0, found)
        surface[n] = int(found[0, BEST])
        place[n, 0], place[n, 1] = found[0, MET_A] / found[0, MET_W], found[0, MET_B] / found[0, MET_W]
        distance[n] = 1.0 / found[0, MET_W] if surface[n] >= 0 else np.inf


@kernel(parallel=True)
def light_between(seen, index, share, level, gain, light):
    """Fill `light` (M, P): what is seen (T, P) at `share` (M,) of the way from instant `index` (M,) to the next, times
    the lamps' `level` (M,) and each pixel's `gain` (P,)."""
    for m in numba.prange(len(index)):
        i, part, lamp = index[m], np.float32(share[m]), np.float32(level[m])
        after = min(i + 1, seen.shape[0] - 1)
        for p in range(seen.shape[1]):
            light[m, p] = (seen[i, p] + part * (seen[after, p] - seen[i, p])) * lamp * gain[p]

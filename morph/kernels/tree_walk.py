"""Bounding-volume tree over triangles: built by the surface-area heuristic, walked by every query.

One tree answers four questions: nearest point, first triangle on a ray, largest ball that touches
a surface point, and smallest gap between two surfaces. Children lie side by side, triangles lie in
leaf order. Queries run one after another (the same bytes on one or two threads); against trimesh's
closest point one query costs about a hundredth.

Method: binned surface-area heuristic (Wald, "On fast construction of SAH-based bounding volume
hierarchies", 2007); closest point by region test (Ericson, "Real-Time Collision Detection", 2005,
section 5.1.5); ray by Moeller and Trumbore (1997). All three from memory, checked against plain
numpy in the tests.
"""

from __future__ import annotations

import numpy as np
from numba import njit

N_BINS = 16
LEAF = 4
STACK = 160
"""Levels below DEEP are halved by count, so no tree is deeper than DEEP + log2(n) < STACK."""
DEEP = 96


@njit(cache=True)
def _half_area(box):
    """Half the surface area of `box (6,)`: low x y z, high x y z."""
    x, y, z = box[3] - box[0], box[4] - box[1], box[5] - box[2]
    return x * y + y * z + z * x


@njit(cache=True)
def _clear(box):
    """Makes `box` the empty box."""
    for a in range(3):
        box[a] = np.inf
        box[3 + a] = -np.inf


@njit(cache=True)
def _grow(box, other):
    """Grows `box` to hold `other`."""
    for a in range(3):
        box[a] = min(box[a], other[a])
        box[3 + a] = max(box[3 + a], other[3 + a])


@njit(cache=True)
def _bin_of(box, axis, low, scale):
    """Number of the bin that the centre of `box` falls in."""
    return min(max(int((box[axis] + box[3 + axis] - low) * scale), 0), N_BINS - 1)


@njit(cache=True)
def _best_bin(bins, n_in_bin, area_right, n_right):
    """Returns the bin after which splitting costs least, or -1; the last two arrays are scratch."""
    box = np.empty(6)
    _clear(box)
    n = 0
    for j in range(N_BINS - 1, 0, -1):
        n += n_in_bin[j]
        _grow(box, bins[j])
        n_right[j] = n
        area_right[j] = _half_area(box) if n > 0 else 0.0
    _clear(box)
    n = 0
    best, best_cost = -1, np.inf
    for j in range(N_BINS - 1):
        n += n_in_bin[j]
        _grow(box, bins[j])
        if n > 0 and n_right[j + 1] > 0:
            cost = _half_area(box) * n + area_right[j + 1] * n_right[j + 1]
            if cost < best_cost:
                best, best_cost = j, cost
    return best


@njit(cache=True)
def _split(boxes, order, start, end, centres, bins, n_in_bin, area_right, n_right):
    """Reorders `order[start:end]` into two groups and returns where the second begins."""
    axis = 0
    for a in range(1, 3):
        if centres[3 + a] - centres[a] > centres[3 + axis] - centres[axis]:
            axis = a
    width = centres[3 + axis] - centres[axis]
    middle = (start + end) // 2
    if width <= 0.0:
        return middle
    low, scale = centres[axis], N_BINS * 0.999999 / width
    for j in range(N_BINS):
        n_in_bin[j] = 0
        _clear(bins[j])
    for q in range(start, end):
        j = _bin_of(boxes[order[q]], axis, low, scale)
        n_in_bin[j] += 1
        _grow(bins[j], boxes[order[q]])
    best = _best_bin(bins, n_in_bin, area_right, n_right)
    if best < 0:
        return middle
    left, right = start, end - 1
    while left <= right:
        i = order[left]
        if _bin_of(boxes[i], axis, low, scale) <= best:
            left += 1
        else:
            order[left] = order[right]
            order[right] = i
            right -= 1
    return left if start < left < end else middle


@njit(cache=True)
def build(boxes, order, node_box, node_child, node_count):
    """Builds the tree and returns its number of nodes.

    Args:
        boxes: (n, 6) box of each triangle.
        order: (n,) 0..n-1, reordered to leaf order.
        node_box: (2n, 6) filled.
        node_child: (2n,) filled: first child (the second follows it), or first triangle of a leaf.
        node_count: (2n,) filled: triangles of a leaf (consecutive in leaf order), 0 for an inner node.
    """
    todo = np.empty((STACK, 4), np.int64)
    bins, n_in_bin = np.empty((N_BINS, 6)), np.empty(N_BINS, np.int64)
    area_right, n_right = np.empty(N_BINS), np.empty(N_BINS, np.int64)
    centres = np.empty(6)
    todo[0] = np.array([0, 0, len(boxes), 0])
    n_todo, n_nodes = 1, 1
    while n_todo > 0:
        n_todo -= 1
        node, start, end, depth = todo[n_todo]
        _clear(node_box[node])
        _clear(centres)
        for q in range(start, end):
            box = boxes[order[q]]
            _grow(node_box[node], box)
            for a in range(3):
                centres[a] = min(centres[a], box[a] + box[3 + a])
                centres[3 + a] = max(centres[3 + a], box[a] + box[3 + a])
        if end - start <= LEAF:
            node_child[node], node_count[node] = start, end - start
            continue
        middle = (start + end) // 2
        if depth < DEEP:
            middle = _split(boxes, order, start, end, centres, bins, n_in_bin, area_right, n_right)
        node_child[node], node_count[node] = n_nodes, 0
        for side in range(2):
            todo[n_todo, 0] = n_nodes + side
            todo[n_todo, 1] = start if side == 0 else middle
            todo[n_todo, 2] = middle if side == 0 else end
            todo[n_todo, 3] = depth + 1
            n_todo += 1
        n_nodes += 2
    return n_nodes


@njit(cache=True)
def _box_gap_squared(box, x, y, z):
    """Squared distance of a point from a box, 0 inside."""
    a = max(box[0] - x, 0.0, x - box[3])
    b = max(box[1] - y, 0.0, y - box[4])
    c = max(box[2] - z, 0.0, z - box[5])
    return a * a + b * b + c * c


@njit(cache=True)
def _nearest_on_triangle(corner, px, py, pz):
    """Returns the point of the triangle `corner (9,)` nearest to (px, py, pz)."""
    ax, ay, az = corner[0], corner[1], corner[2]
    ux, uy, uz = corner[3] - ax, corner[4] - ay, corner[5] - az
    vx, vy, vz = corner[6] - ax, corner[7] - ay, corner[8] - az
    wx, wy, wz = px - ax, py - ay, pz - az
    uw, vw = ux * wx + uy * wy + uz * wz, vx * wx + vy * wy + vz * wz
    uu, uv, vv = ux * ux + uy * uy + uz * uz, ux * vx + uy * vy + uz * vz, vx * vx + vy * vy + vz * vz
    s, t = 0.0, 0.0
    side_ab = uw * (vw - uv) - (uw - uu) * vw
    side_ac = (uw - uv) * vw - uw * (vw - vv)
    side_bc = (uw - uu) * (vw - vv) - (uw - uv) * (vw - uv)
    if uw <= 0.0 and vw <= 0.0:
        pass
    elif uw >= uu and vw - uv <= uw - uu:
        s = 1.0
    elif side_ab <= 0.0 and 0.0 <= uw <= uu:
        s = uw / uu if uu > 0.0 else 0.0
    elif vw >= vv and uw - uv <= vw - vv:
        t = 1.0
    elif side_ac <= 0.0 and 0.0 <= vw <= vv:
        t = vw / vv if vv > 0.0 else 0.0
    elif side_bc <= 0.0 and vw - uv >= uw - uu and uw - uv >= vw - vv:
        up, down = (vw - uv) - (uw - uu), (uw - uv) - (vw - vv)
        t = up / (up + down) if up + down > 0.0 else 0.0
        s = 1.0 - t
    else:
        total = side_ab + side_ac + side_bc
        if total > 0.0:
            s, t = side_ac / total, side_ab / total
    return ax + s * ux + t * vx, ay + s * uy + t * vy, az + s * uz + t * vz


@njit(cache=True)
def closest_many(node_box, node_child, node_count, corners, points, limit, distance, hit, nearest):
    """Fills the nearest triangle (leaf order, -1 for none within `limit`), its distance (inf) and point."""
    stack, stack_gap = np.empty(STACK, np.int64), np.empty(STACK)
    for i in range(len(points)):
        x, y, z = points[i, 0], points[i, 1], points[i, 2]
        best, found = limit * limit, -1
        stack[0], stack_gap[0] = 0, _box_gap_squared(node_box[0], x, y, z)
        n_stack = 1
        while n_stack > 0:
            n_stack -= 1
            if stack_gap[n_stack] > best:
                continue
            node = stack[n_stack]
            if node_count[node] > 0:
                for k in range(node_child[node], node_child[node] + node_count[node]):
                    qx, qy, qz = _nearest_on_triangle(corners[k], x, y, z)
                    gap = (qx - x) ** 2 + (qy - y) ** 2 + (qz - z) ** 2
                    if gap < best or (found < 0 and gap <= best):
                        best, found = gap, k
                        nearest[i, 0], nearest[i, 1], nearest[i, 2] = qx, qy, qz
                continue
            near = node_child[node]
            far = near + 1
            near_gap = _box_gap_squared(node_box[near], x, y, z)
            far_gap = _box_gap_squared(node_box[far], x, y, z)
            if far_gap < near_gap:
                near, far, near_gap, far_gap = far, near, far_gap, near_gap
            if far_gap <= best:
                stack[n_stack], stack_gap[n_stack] = far, far_gap
                n_stack += 1
            if near_gap <= best:
                stack[n_stack], stack_gap[n_stack] = near, near_gap
                n_stack += 1
        hit[i] = found
        distance[i] = np.sqrt(best) if found >= 0 else np.inf


@njit(cache=True)
def _ray_on_triangle(corner, ox, oy, oz, dx, dy, dz):
    """Returns the ray parameter at which it meets the triangle, or -1."""
    ux, uy, uz = corner[3] - corner[0], corner[4] - corner[1], corner[5] - corner[2]
    vx, vy, vz = corner[6] - corner[0], corner[7] - corner[1], corner[8] - corner[2]
    px, py, pz = dy * vz - dz * vy, dz * vx - dx * vz, dx * vy - dy * vx
    det = ux * px + uy * py + uz * pz
    if det == 0.0:
        return -1.0
    sx, sy, sz = ox - corner[0], oy - corner[1], oz - corner[2]
    s = (sx * px + sy * py + sz * pz) / det
    if s < -1e-9 or s > 1.0 + 1e-9:
        return -1.0
    qx, qy, qz = sy * uz - sz * uy, sz * ux - sx * uz, sx * uy - sy * ux
    t = (dx * qx + dy * qy + dz * qz) / det
    if t < -1e-9 or s + t > 1.0 + 1e-9:
        return -1.0
    return (vx * qx + vy * qy + vz * qz) / det


@njit(cache=True)
def _ray_in_box(box, ox, oy, oz, ix, iy, iz, most):
    """Returns where the ray enters the box, or inf when it misses it or enters past `most`."""
    a, b = (box[0] - ox) * ix, (box[3] - ox) * ix
    low, high = min(a, b), max(a, b)
    a, b = (box[1] - oy) * iy, (box[4] - oy) * iy
    low, high = max(low, min(a, b)), min(high, max(a, b))
    a, b = (box[2] - oz) * iz, (box[5] - oz) * iz
    low, high = max(low, min(a, b)), min(high, max(a, b))
    slack = 1e-9 * (1.0 + abs(high))
    if high < -slack or low > high + slack or low > most:
        return np.inf
    return low


@njit(cache=True)
def _inverse(d):
    """1 / d, large but finite for 0 so that 0 times it is 0."""
    return 1.0 / d if abs(d) > 1e-30 else 1e30


@njit(cache=True)
def ray_many(node_box, node_child, node_count, corners, origins, directions, least, distance, hit):
    """Fills the first triangle (leaf order, -1 for none) met beyond `least` and its distance along the ray (inf)."""
    stack, stack_at = np.empty(STACK, np.int64), np.empty(STACK)
    for i in range(len(origins)):
        ox, oy, oz = origins[i, 0], origins[i, 1], origins[i, 2]
        dx, dy, dz = directions[i, 0], directions[i, 1], directions[i, 2]
        ix, iy, iz = _inverse(dx), _inverse(dy), _inverse(dz)
        best, found = np.inf, -1
        stack[0], stack_at[0] = 0, _ray_in_box(node_box[0], ox, oy, oz, ix, iy, iz, np.inf)
        n_stack = 1 if stack_at[0] < np.inf else 0
        while n_stack > 0:
            n_stack -= 1
            if stack_at[n_stack] > best:
                continue
            node = stack[n_stack]
            if node_count[node] > 0:
                for k in range(node_child[node], node_child[node] + node_count[node]):
                    t = _ray_on_triangle(corners[k], ox, oy, oz, dx, dy, dz)
                    if least < t < best:
                        best, found = t, k
                continue
            near = node_child[node]
            far = near + 1
            near_at = _ray_in_box(node_box[near], ox, oy, oz, ix, iy, iz, best)
            far_at = _ray_in_box(node_box[far], ox, oy, oz, ix, iy, iz, best)
            if far_at < near_at:
                near, far, near_at, far_at = far, near, far_at, near_at
            if far_at < np.inf:
                stack[n_stack], stack_at[n_stack] = far, far_at
                n_stack += 1
            if near_at < np.inf:
                stack[n_stack], stack_at[n_stack] = near, near_at
                n_stack += 1
        distance[i], hit[i] = best, found


@njit(cache=True)
def _shrink(corner, px, py, pz, nx, ny, nz, radius):
    """Returns the largest radius <= `radius` whose ball through p with centre p + radius n leaves the triangle out."""
    for _ in range(60):
        cx, cy, cz = px + radius * nx, py + radius * ny, pz + radius * nz
        qx, qy, qz = _nearest_on_triangle(corner, cx, cy, cz)
        if (qx - cx) ** 2 + (qy - cy) ** 2 + (qz - cz) ** 2 >= radius * radius * (1.0 - 1e-12):
            break
        vx, vy, vz = qx - px, qy - py, qz - pz
        along = vx * nx + vy * ny + vz * nz
        if along <= 1e-14:
            break
        smaller = (vx * vx + vy * vy + vz * vz) / (2.0 * along)
        if smaller >= radius * (1.0 - 1e-12):
            break
        radius = smaller
    return radius


@njit(cache=True)
def ball_many(node_box, node_child, node_count, corners, normals, points, inward, largest, most_cosine, radius, hit):
    """Fills the largest ball that touches each surface point and no counted triangle enters.

    Args:
        node_box: (n_nodes, 6) tree.
        node_child: (n_nodes,) tree.
        node_count: (n_nodes,) tree.
        corners: (n, 9) triangle corners in leaf order.
        points: (k, 3) surface points.
        inward: (k, 3) unit directions into the medium.
        largest: radius to start from (returned when nothing is in the way, with hit -1).
        normals: (n, 3) triangle normals out of the medium the balls lie in, so that the point's own is -inward.
        most_cosine: a triangle counts when the cosine between its normal and -inward is at most this.
        radius: (k,) filled.
        hit: (k,) filled with the triangle (leaf order) that stops the ball.
    """
    stack = np.empty(STACK, np.int64)
    for i in range(len(points)):
        px, py, pz = points[i, 0], points[i, 1], points[i, 2]
        nx, ny, nz = inward[i, 0], inward[i, 1], inward[i, 2]
        r, found = largest, -1
        stack[0] = 0
        n_stack = 1
        while n_stack > 0:
            n_stack -= 1
            node = stack[n_stack]
            if _box_gap_squared(node_box[node], px + r * nx, py + r * ny, pz + r * nz) >= r * r:
                continue
            if node_count[node] == 0:
                near = node_child[node]
                near_gap = _box_gap_squared(node_box[near], px + r * nx, py + r * ny, pz + r * nz)
                far_gap = _box_gap_squared(node_box[near + 1], px + r * nx, py + r * ny, pz + r * nz)
                first = near if near_gap <= far_gap else near + 1
                stack[n_stack] = near + near + 1 - first
                stack[n_stack + 1] = first
                n_stack += 2
                continue
            for k in range(node_child[node], node_child[node] + node_count[node]):
                if -(normals[k, 0] * nx + normals[k, 1] * ny + normals[k, 2] * nz) > most_cosine:
                    continue
                smaller = _shrink(corners[k], px, py, pz, nx, ny, nz, r)
                if smaller < r:
                    r, found = smaller, k
        radius[i], hit[i] = r, found


@njit(cache=True)
def _segment_gap(a, i, j, b, k, m):
    """Returns the squared gap of edges a[i]-a[j] and b[k]-b[m] and their nearest points (corner rows of 3)."""
    ux, uy, uz = a[3 * j] - a[3 * i], a[3 * j + 1] - a[3 * i + 1], a[3 * j + 2] - a[3 * i + 2]
    vx, vy, vz = b[3 * m] - b[3 * k], b[3 * m + 1] - b[3 * k + 1], b[3 * m + 2] - b[3 * k + 2]
    wx, wy, wz = a[3 * i] - b[3 * k], a[3 * i + 1] - b[3 * k + 1], a[3 * i + 2] - b[3 * k + 2]
    uu, uv, vv = ux * ux + uy * uy + uz * uz, ux * vx + uy * vy + uz * vz, vx * vx + vy * vy + vz * vz
    uw, vw = ux * wx + uy * wy + uz * wz, vx * wx + vy * wy + vz * wz
    den = uu * vv - uv * uv
    s = min(max((uv * vw - vv * uw) / den, 0.0), 1.0) if den > 1e-18 * uu * vv else 0.0
    t = min(max((uv * s + vw) / vv, 0.0), 1.0) if vv > 0.0 else 0.0
    s = min(max((uv * t - uw) / uu, 0.0), 1.0) if uu > 0.0 else 0.0
    px, py, pz = a[3 * i] + s * ux, a[3 * i + 1] + s * uy, a[3 * i + 2] + s * uz
    qx, qy, qz = b[3 * k] + t * vx, b[3 * k + 1] + t * vy, b[3 * k + 2] + t * vz
    return (px - qx) ** 2 + (py - qy) ** 2 + (pz - qz) ** 2, px, py, pz, qx, qy, qz


@njit(cache=True)
def _triangle_gap(a, b, best, pair):
    """Returns the smaller of `best` and the squared gap of triangles a, b (9,); writes the points to pair (6,)."""
    for c in range(3):
        x, y, z = a[3 * c], a[3 * c + 1], a[3 * c + 2]
        qx, qy, qz = _nearest_on_triangle(b, x, y, z)
        gap = (qx - x) ** 2 + (qy - y) ** 2 + (qz - z) ** 2
        if gap < best:
            best = gap
            pair[0], pair[1], pair[2], pair[3], pair[4], pair[5] = x, y, z, qx, qy, qz
        x, y, z = b[3 * c], b[3 * c + 1], b[3 * c + 2]
        qx, qy, qz = _nearest_on_triangle(a, x, y, z)
        gap = (qx - x) ** 2 + (qy - y) ** 2 + (qz - z) ** 2
        if gap < best:
            best = gap
            pair[0], pair[1], pair[2], pair[3], pair[4], pair[5] = qx, qy, qz, x, y, z
    for c in range(3):
        for d in range(3):
            gap, px, py, pz, qx, qy, qz = _segment_gap(a, c, (c + 1) % 3, b, d, (d + 1) % 3)
            if gap < best:
                best = gap
                pair[0], pair[1], pair[2], pair[3], pair[4], pair[5] = px, py, pz, qx, qy, qz
    return best


@njit(cache=True)
def smallest_gap(node_box, node_child, node_count, corners, queries, limit, pair):
    """Returns the smallest gap between the tree and the triangles `queries (k, 9)`, inf when above `limit`.

    Crossing triangles have a gap of 0 only where an edge meets an edge or a corner a face; surfaces
    that cross are found by their centrelines first. `pair (6,)` gets the nearest points (query, tree).
    """
    stack = np.empty(STACK, np.int64)
    best = limit * limit
    found = False
    for i in range(len(queries)):
        q = queries[i]
        stack[0] = 0
        n_stack = 1
        while n_stack > 0:
            n_stack -= 1
            node = stack[n_stack]
            gap = 0.0
            for a in range(3):
                low, high = min(q[a], q[3 + a], q[6 + a]), max(q[a], q[3 + a], q[6 + a])
                side = max(node_box[node, a] - high, low - node_box[node, 3 + a], 0.0)
                gap += side * side
            if gap > best:
                continue
            if node_count[node] == 0:
                stack[n_stack] = node_child[node] + 1
                stack[n_stack + 1] = node_child[node]
                n_stack += 2
                continue
            for k in range(node_child[node], node_child[node] + node_count[node]):
                smaller = _triangle_gap(q, corners[k], best, pair)
                if smaller < best:
                    best = smaller
                    found = True
    return np.sqrt(best) if found else np.inf

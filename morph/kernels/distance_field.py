"""The channel field: the least distance to swept balls, blended where channels meet.

Pieces (swept_ball.py) of one half branch form a *run*; runs that end on the same node are blended there, all
others simply united (least distance wins). Arrays used throughout: `pieces (n, 17)`; `owner (n, 2)` = run and node
of each piece, sorted by run; `nodes (k, 4)` = place and the distance at which blending has faded out. Blocks are
8 x 8 x 8 cells; a block's key is (x * ny + y) * nz + z.

All functions return the same numbers whatever list of pieces they are given, as long as it holds
every piece that matters there: neighbouring blocks agree on shared samples to the last bit.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from morph.core.arrays import Floats, Ints
from morph.kernels.stretch import is_swept
from morph.kernels.swept_ball import piece_direction, piece_distance, piece_gradient

BLOCK = 8
"""Cells per block edge."""

NO_VALUE = np.float32(1e9)
"""Marks samples that provably lie on no cell with a sign change."""

SMALLEST = 1e-6
"""Samples nearer to the surface than this (mm) count as outside, so that no sample is exactly zero."""

LIST_REACH_BLOCKS = 0.3
"""A block's list also serves points up to this many blocks outside it: crease vertices look there."""

RISE_FULL, RISE_NONE = 0.2, 0.9
"""Blends of roofs are full up to, and gone from, these shares of the elevation at which a wall is a ceiling."""

SQRT3 = 1.7320508075688772


@njit(cache=True, nogil=True, error_model="numpy")
def blend_weight(px: float, py: float, pz: float, pieces: Floats, nodes: Floats, node: int, a: int, b: int) -> float:
    """Returns how much pieces a and b of one node blend here, 0..1.

    (1 - cosine of the angle between the two ball directions) squared: nothing where both balls look the same way (a
    channel that runs straight on must not bulge), fully where they look at right angles or against each other; fading
    with the distance from the node, so that branches which share a node but approach elsewhere are not blended there.
    Between roofs it also fades as the mean of the two directions rises, and is gone where a fillet would be flatter
    than the roofs it joins.
    """
    dx = px - nodes[node, 0]
    dy = py - nodes[node, 1]
    dz = pz - nodes[node, 2]
    away = np.sqrt(dx * dx + dy * dy + dz * dz) / nodes[node, 3]
    if away >= 1.0:
        return 0.0
    ax, ay, az = piece_direction(px, py, pz, pieces, a)
    bx, by, bz = piece_direction(px, py, pz, pieces, b)
    turn = min(max(1.0 - (ax * bx + ay * by + az * bz), 0.0), 1.0)
    weight = turn * turn
    if away > 0.5:
        fade = 2.0 * (1.0 - away)
        weight *= fade * fade * (3.0 - 2.0 * fade)
    share = max(pieces[a, 16], pieces[b, 16])
    if share > 0.0:
        limit = min(pieces[a, 13], pieces[b, 13])
        ax += bx
        ay += by
        az += bz
        rise = ax * pieces[a, 10] + ay * pieces[a, 11] + az * pieces[a, 12]
        rise /= limit * (np.sqrt(ax * ax + ay * ay + az * az) + 1e-9)
        fade = min(max((RISE_NONE - rise) / (RISE_NONE - RISE_FULL), 0.0), 1.0)
        weight *= 1.0 - share * (1.0 - fade * fade * (3.0 - 2.0 * fade))
    return weight


@njit(cache=True, nogil=True, error_model="numpy")
def field_at(
    px: float,
    py: float,
    pz: float,
    pieces: Floats,
    owner: Ints,
    nodes: Floats,
    blend_mm: float,
    near: Ints,
    n_near: int,
    run_distance: Floats,
    run_piece: Ints,
    gradient: Floats,
) -> tuple[float, float]:
    """Returns the field in mm at a point, negative in the coolant, and how much of it is blend (mm).

    Two distances a, b of runs on one node are joined by the quadratic smooth minimum
    min - k w / 4 (1 - |a - b| / k)^2, k = blend_mm, w from `blend_weight`; of several pairs the largest blend counts.

    The pieces that matter here are `near[:n_near]`, in order; `blend_mm` 0 means no blend. `run_distance` and `run_piece`
    are work space, one entry per run in the list. `gradient (3,)` receives the gradient with blend weights held
    constant; with length 0 it is not wanted.
    """
    n_runs = 0
    last = -1
    best = 0
    least = 1e30
    for q in range(n_near):
        i = near[q]
        d = piece_distance(px, py, pz, pieces, i)
        if owner[i, 0] != last:
            last = owner[i, 0]
            run_distance[n_runs] = d
            run_piece[n_runs] = i
            n_runs += 1
        elif d < run_distance[n_runs - 1]:
            run_distance[n_runs - 1] = d
            run_piece[n_runs - 1] = i
        if d < least:
            least = d
            best = i
    wanted = gradient.shape[0] == 3
    if wanted:
        gradient[0], gradient[1], gradient[2], _ = piece_gradient(px, py, pz, pieces, best)
    most = 0.0
    for a in range(n_runs):
        qa = 1.0 - (run_distance[a] - least) / blend_mm if blend_mm > 0.0 else 0.0
        if qa <= 0.0:
            continue
        for b in range(a + 1, n_runs):
            qb = 1.0 - (run_distance[b] - least) / blend_mm
            node = owner[run_piece[a], 1]
            if qb <= 0.0 or node != owner[run_piece[b], 1] or 0.25 * blend_mm * (qa * qb) ** 2 <= most:
                continue
            weight = blend_weight(px, py, pz, pieces, nodes, node, run_piece[a], run_piece[b])
            amount = 0.25 * blend_mm * weight * (qa * qb) ** 2
            if amount > most:
                most = amount
                if wanted:
                    gx, gy, gz, _ = piece_gradient(px, py, pz, pieces, best)
                    ax, ay, az, _ = piece_gradient(px, py, pz, pieces, run_piece[a])
                    bx, by, bz, _ = piece_gradient(px, py, pz, pieces, run_piece[b])
                    ca = 0.5 * weight * qa * qb * qb
                    cb = 0.5 * weight * qa * qa * qb
                    gradient[0] = gx + ca * (ax - gx) + cb * (bx - gx)
                    gradient[1] = gy + ca * (ay - gy) + cb * (by - gy)
                    gradient[2] = gz + ca * (az - gz) + cb * (bz - gz)
    return least - most, most


@njit(cache=True, nogil=True, error_model="numpy")
def keep_near(
    cx: float,
    cy: float,
    cz: float,
    reach_mm: float,
    pieces: Floats,
    owner: Ints,
    blend_mm: float,
    near: Ints,
    n_near: int,
    kept: Ints,
    distance: Floats,
) -> int:
    """Returns how many of the pieces `near[:n_near]` matter within `reach_mm` of a centre, written to `kept` in order.

    0 when the field provably has no zero there: all balls are too far, or one covers the whole neighbourhood.
    `distance` is work space as long as the list.
    """
    least = 1e30
    for q in range(n_near):
        distance[q] = piece_distance(cx, cy, cz, pieces, near[q])
        least = min(least, distance[q])
    if least > reach_mm + 0.25 * blend_mm or least < -reach_mm:
        return 0
    n_kept = 0
    q = 0
    while q < n_near:
        run = owner[near[q], 0]
        end = q
        nearest = 1e30
        while end < n_near and owner[near[end], 0] == run:
            nearest = min(nearest, distance[end])
            end += 1
        if nearest <= least + 2.0 * reach_mm + blend_mm:
            for j in range(q, end):
                if distance[j] <= nearest + 2.0 * reach_mm:
                    kept[n_kept] = near[j]
                    n_kept += 1
        q = end
    return n_kept


@njit(cache=True, nogil=True, error_model="numpy")
def blocks_of_piece(
    i: int,
    pieces: Floats,
    origin: Floats,
    block_mm: float,
    shape: Ints,
    pad_mm: float,
    keys: Ints,
    piece_of: Ints,
    at: int,
) -> int:
    """Returns how many blocks lie within `pad_mm` of piece i; from position `at` on (if not negative) writes them."""
    half = 0.5 * SQRT3 * block_mm * 1.0001
    radius = max(pieces[i, 7], pieces[i, 7] + pieces[i, 8] * pieces[i, 6]) + pad_mm
    low = np.empty(3, np.int64)
    high = np.empty(3, np.int64)
    rise = 0.0
    if pieces[i, 15] > 0.0:
        widest = radius - pad_mm
        k = pieces[i, 15]
        rise = np.sqrt((k * widest + pad_mm) ** 2 - ((k - 1.0) * widest) ** 2) - radius
    elif pieces[i, 13] < 1.0:
        rise = (1.0 / pieces[i, 13] - 1.0) * radius
    for a in range(3):
        p = pieces[i, a]
        q = p + pieces[i, 3 + a] * pieces[i, 6]
        below = min(p, q) - radius + min(rise * pieces[i, 10 + a], 0.0)
        above = max(p, q) + radius + max(rise * pieces[i, 10 + a], 0.0)
        low[a] = max(0, int(np.floor((below - origin[a]) / block_mm)))
        high[a] = min(shape[a] - 1, int(np.floor((above - origin[a]) / block_mm)))
    count = 0
    for x in range(low[0], high[0] + 1):
        for y in range(low[1], high[1] + 1):
            for z in range(low[2], high[2] + 1):
                cx = origin[0] + (x + 0.5) * block_mm
                cy = origin[1] + (y + 0.5) * block_mm
                cz = origin[2] + (z + 0.5) * block_mm
                if piece_distance(cx, cy, cz, pieces, i) <= half + pad_mm:
                    if at >= 0:
                        keys[at + count] = (x * shape[1] + y) * shape[2] + z
                        piece_of[at + count] = i
                    count += 1
    return count


@njit(cache=True, nogil=True, error_model="numpy")
def list_blocks(
    first: int,
    last: int,
    pieces: Floats,
    origin: Floats,
    block_mm: float,
    shape: Ints,
    pad_mm: float,
    offset: Ints,
    keys: Ints,
    piece_of: Ints,
    fill: bool,
) -> None:
    """Counts (fill False: `offset[i]` receives the number) or lists the blocks near the pieces first..last - 1."""
    for i in range(first, last):
        if fill:
            blocks_of_piece(i, pieces, origin, block_mm, shape, pad_mm, keys, piece_of, offset[i])
        else:
            offset[i] = blocks_of_piece(i, pieces, origin, block_mm, shape, pad_mm, keys, piece_of, -1)


@njit(cache=True, nogil=True, error_model="numpy")
def prune_blocks(
    first: int,
    last: int,
    keys: Ints,
    start: Ints,
    near: Ints,
    length: Ints,
    pieces: Floats,
    owner: Ints,
    blend_mm: float,
    origin: Floats,
    block_mm: float,
    shape: Ints,
    end: Ints,
    planes: Floats,
) -> None:
    """Shortens each block's list `near[start[b]:start[b + 1]]` to what matters; `length[b]` 0 means nothing to sample.

    `end` and `planes` (stretch.py) tell where rings make the wall.
    """
    for b in range(first, last):
        n = start[b + 1] - start[b]
        kept = np.empty(n, np.int64)
        distance = np.empty(n)
        cx = origin[0] + (keys[b] // (shape[1] * shape[2]) + 0.5) * block_mm
        cy = origin[1] + ((keys[b] // shape[2]) % shape[1] + 0.5) * block_mm
        cz = origin[2] + (keys[b] % shape[2] + 0.5) * block_mm
        reach = 0.5 * SQRT3 * block_mm * 1.0001
        own = near[start[b] : start[b + 1]]
        length[b] = keep_near(cx, cy, cz, reach, pieces, owner, blend_mm, own, n, kept, distance)
        if length[b] > 0 and is_swept(cx, cy, cz, reach, kept, length[b], end, planes):
            length[b] = 0
        if length[b] > 0:
            reach += LIST_REACH_BLOCKS * block_mm
            length[b] = keep_near(cx, cy, cz, reach, pieces, owner, blend_mm, own, n, kept, distance)
        for q in range(length[b]):
            own[q] = kept[q]


@njit(cache=True, nogil=True, error_model="numpy")
def sample_blocks(
    first: int, last: int, corner: Ints, start: Ints, length: Ints, near: Ints,
    pieces: Floats, owner: Ints, nodes: Floats, blend_mm: float, origin: Floats, h_mm: float, end: Ints, planes: Floats,
    values: NDArray[np.float32], codes: NDArray[np.uint8],
) -> None:  # fmt: skip
    """Samples the blocks first..last - 1 where a surface may pass and writes each cell's case.

    Descends from the block to cubes of 4 and 2 cells with ever shorter lists; cubes that hold no surface, or one that
    rings make (`end`, `planes`: stretch.py), are skipped.

    `corner (n, 3)` is the lowest cell of each block, `near[start : start + length]` its list; sample (0, 0, 0) lies at
    `origin`. `values (n, 9, 9, 9)` receives the samples in mm, NO_VALUE where skipped; `codes (n, 8, 8, 8)` the cases:
    bit c is set when corner c = x + 2 y + 4 z of the cell is inside.
    """
    longest = 1
    for b in range(first, last):
        longest = max(longest, length[b])
    lists = np.empty((2, longest), np.int64)
    distance = np.empty(longest)
    run_piece = np.empty(longest, np.int64)
    no_gradient = np.empty(0)
    for b in range(first, last):
        own = near[start[b] : start[b] + length[b]]
        value = values[b]
        value[:] = NO_VALUE
        for part in range(64 + 8):
            # parts 0, 9, 18 ... open a cube of 4 cells, the 8 after each are its cubes of 2 cells
            big, small = part // 9, part % 9 - 1
            x = 4 * (big & 1)
            y = 4 * ((big >> 1) & 1)
            z = 4 * (big >> 2)
            if small < 0:
                px = origin[0] + (corner[b, 0] + x + 2.0) * h_mm
                py = origin[1] + (corner[b, 1] + y + 2.0) * h_mm
                pz = origin[2] + (corner[b, 2] + z + 2.0) * h_mm
                reach = 2.0001 * SQRT3 * h_mm
                n_big = keep_near(px, py, pz, reach, pieces, owner, blend_mm, own, length[b], lists[0], distance)
                if is_swept(px, py, pz, reach, lists[0], n_big, end, planes):
                    n_big = 0
                continue
            if n_big == 0:
                continue
            x += 2 * (small & 1)
            y += 2 * ((small >> 1) & 1)
            z += 2 * (small >> 2)
            px = origin[0] + (corner[b, 0] + x + 1.0) * h_mm
            py = origin[1] + (corner[b, 1] + y + 1.0) * h_mm
            pz = origin[2] + (corner[b, 2] + z + 1.0) * h_mm
            reach = 1.0001 * SQRT3 * h_mm
            n = keep_near(px, py, pz, reach, pieces, owner, blend_mm, lists[0], n_big, lists[1], distance)
            if n == 0 or is_swept(px, py, pz, reach, lists[1], n, end, planes):
                continue
            for s in range(27):
                i = x + s // 9
                j = y + (s // 3) % 3
                k = z + s % 3
                if value[i, j, k] == NO_VALUE:
                    px = origin[0] + (corner[b, 0] + i) * h_mm
                    py = origin[1] + (corner[b, 1] + j) * h_mm
                    pz = origin[2] + (corner[b, 2] + k) * h_mm
                    f, _ = field_at(
                        px, py, pz, pieces, owner, nodes, blend_mm, lists[1], n, distance, run_piece, no_gradient
                    )
                    value[i, j, k] = f if abs(f) > SMALLEST else SMALLEST
        code_cells(value, codes[b])


@njit(cache=True, nogil=True, error_model="numpy")
def code_cells(value: NDArray[np.float32], code: NDArray[np.uint8]) -> None:
    """Writes the case of each of 8 x 8 x 8 cells from 9 x 9 x 9 samples; 0 where a corner was skipped."""
    for x in range(BLOCK):
        for y in range(BLOCK):
            for z in range(BLOCK):
                bits = 0
                for c in range(8):
                    v = value[x + (c & 1), y + ((c >> 1) & 1), z + (c >> 2)]
                    if v == NO_VALUE:
                        bits = 0
                        break
                    if v < 0.0:
                        bits |= 1 << c
                code[x, y, z] = bits

"""Synthetic layouts whose channel graph is known: drawn from a random planar graph, then spoilt in a stated way.

Everything is in pixels here: x along columns, y along rows, pixel centres at integer + 0.5, row 0 at the bottom.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

MODES = (
    "clean", "width", "noise", "blur", "islands", "necks", "checkerboard", "ragged", "close_pairs", "everything",
)  # fmt: skip


@dataclass
class Edge:
    a: int
    b: int
    line: np.ndarray  # (k, 2) dense centreline from a to b
    half: np.ndarray  # (k,) half-width
    necks: list[tuple[float, float, float]] = field(default_factory=list)  # from, to (arc px), density factor

    @property
    def arc(self) -> np.ndarray:
        return np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(self.line, axis=0).T))])


@dataclass
class Truth:
    nodes: list[np.ndarray]
    kinds: list[str]  # junction | port | dead-end
    edges: list[Edge]


@dataclass
class Case:
    seed: int
    mode: str
    value: np.ndarray
    width: float
    truth: Truth  # as drawn
    cut: Truth  # with the necks below the level taken as cut
    ports: list[tuple[str, np.ndarray]]  # role, place


def make_case(seed: int, mode: str) -> Case:
    """Draws the case; draws again where the picture itself would not show the graph (channels that touch)."""
    for attempt in range(200):
        rng = np.random.default_rng([seed, MODES.index(mode), attempt])
        case = _draw(rng, seed, mode)
        if case is not None:
            return case
    raise RuntimeError(f"no layout for seed {seed} mode {mode}")


def _bezier(p, q, bulge, n):
    t = np.linspace(0.0, 1.0, n)[:, None]
    chord = q - p
    normal = np.array([-chord[1], chord[0]])
    control = 0.5 * (p + q) + 2.0 * bulge * normal
    return (1 - t) ** 2 * p + 2 * t * (1 - t) * control + t**2 * q


def _resampled(line, step=0.25):
    arc = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(line, axis=0).T))])
    at = np.linspace(0.0, arc[-1], max(4, int(arc[-1] / step)))
    return np.column_stack([np.interp(at, arc, line[:, k]) for k in (0, 1)])


def _heading(edge, node, width):
    line = edge.line if edge.a == node else edge.line[::-1]
    away = line[min(len(line) - 1, int(1.5 * width / 0.25))] - line[0]
    return away / np.hypot(*away)


def _angles_ok(edges, node, new, width, least_deg):
    heading = _heading(new, node, width)
    others = [_heading(e, node, width) for e in edges if node in (e.a, e.b)]
    return all(heading @ other < np.cos(np.radians(least_deg)) for other in others)


def _graph(rng, rows, columns, width, spacing):
    from scipy.spatial import Delaunay

    margin = 2.4 * width
    gx = max(2, int((columns - 2 * margin) // spacing) + 1)
    gy = max(2, int((rows - 2 * margin) // spacing) + 1)
    xs, ys = np.linspace(margin, columns - margin, gx), np.linspace(margin, rows - margin, gy)
    places = np.array([[x, y] for y in ys for x in xs]) + rng.uniform(-0.2, 0.2, (gx * gy, 2)) * spacing
    places = np.clip(places, margin, [columns - margin, rows - margin])
    triangles = Delaunay(places + rng.uniform(-1e-6, 1e-6, places.shape)).simplices
    pairs = sorted({tuple(sorted((int(t[i]), int(t[j])))) for t in triangles for i, j in ((0, 1), (1, 2), (0, 2))})
    rng.shuffle(pairs)
    root = list(range(len(places)))

    def find(i):
        while root[i] != i:
            i = root[i]
        return i

    edges, wait = [], []
    for a, b in [(int(a), int(b)) for a, b in pairs]:
        length = np.hypot(*(places[a] - places[b]))
        if not 3.4 * width < length < 1.75 * spacing:
            continue
        edge = Edge(a, b, _resampled(_bezier(places[a], places[b], rng.uniform(-0.16, 0.16), 200)), np.empty(0))
        if not (_angles_ok(edges, a, edge, width, 50) and _angles_ok(edges, b, edge, width, 50)):
            continue
        if find(a) != find(b):
            root[find(a)] = find(b)
            edges.append(edge)
        else:
            wait.append(edge)
    for edge in wait:
        fits = _angles_ok(edges, edge.a, edge, width, 50) and _angles_ok(edges, edge.b, edge, width, 50)
        if fits and rng.random() < 0.6:
            edges.append(edge)
    return places, edges


def _add_ports(rng, places, edges, rows, columns, width):
    ports, n_wanted = [], int(rng.integers(2, 5))
    used = sorted({e.a for e in edges} | {e.b for e in edges})
    away = {"L": places[:, 0], "R": columns - places[:, 0], "B": places[:, 1], "T": rows - places[:, 1]}
    tries = [
        (side, node)
        for side in "LRBT"
        for node in used
        if away[side][node] < 0.45 * (columns if side in "LR" else rows)
    ]
    for number in rng.permutation(len(tries)):
        side, node = tries[number]
        if len(ports) == n_wanted:
            break
        depth = away[side][node]
        shift = rng.uniform(-0.35, 0.35) * depth
        x, y = places[node]
        place = np.array(
            {"L": (0, y + shift), "R": (columns, y + shift), "B": (x + shift, 0), "T": (x + shift, rows)}[side], float
        )
        along, limit = (place[1], rows) if side in "LR" else (place[0], columns)
        if not 1.5 * width < along < limit - 1.5 * width or depth < 2.2 * width:
            continue
        edge = Edge(len(places), node, _resampled(_bezier(place, places[node], 0.0, 200)), np.empty(0))
        near_other = any(
            np.hypot(
                *(e.line[::8, None] - edge.line[: max(8, len(edge.line) - int(3 * width / 0.25)) : 8][None]).transpose(
                    2, 0, 1
                )
            ).min()
            < 2 * width
            for e in edges
        )
        if near_other or not _angles_ok(edges, node, edge, width, 50):
            continue
        if any(np.hypot(*(place - p)) < 4 * width for _, p, _ in ports):
            continue
        ports.append((len(places), place, len(ports)))
        places = np.vstack([places, place])
        edges.append(edge)
    return places, edges, ports


def _simplify(rng, places, edges, ports, width):
    """Keeps the piece with the ports, at most two dead ends, and joins edges through nodes where just two meet."""
    port_nodes = {index for index, _, _ in ports}
    edges = list(edges)
    degree = lambda n: sum((e.a == n) + (e.b == n) for e in edges)  # noqa: E731
    n_blind = int(rng.integers(0, 3))
    while True:
        blind = sorted(n for n in {e.a for e in edges} | {e.b for e in edges} if degree(n) == 1 and n not in port_nodes)
        if len(blind) <= n_blind:
            break
        gone = blind[int(rng.integers(len(blind)))]
        edges = [e for e in edges if gone not in (e.a, e.b)]
    while True:
        through = [
            n for n in sorted({e.a for e in edges} | {e.b for e in edges}) if degree(n) == 2 and n not in port_nodes
        ]
        through = [n for n in through if sum(n in (e.a, e.b) for e in edges) == 2]
        if not through:
            break
        n = through[0]
        one, two = (e for e in edges if n in (e.a, e.b))
        first = one.line if one.b == n else one.line[::-1]
        second = two.line if two.a == n else two.line[::-1]
        a, b = one.a if one.b == n else one.b, two.b if two.a == n else two.a
        edges = [e for e in edges if e is not one and e is not two]
        edges.append(Edge(a, b, _rounded(np.vstack([first, second[1:]]), len(first) - 1, 3.0 * width), np.empty(0)))
    return edges


def _rounded(line, corner, reach_px):
    """Replaces the line near its corner by a quadratic arc that leaves and joins it tangentially."""
    n = min(int(reach_px / 0.25), corner - 1, len(line) - corner - 2)
    p, q, r = line[corner - n], line[corner], line[corner + n]
    t = np.linspace(0.0, 1.0, 4 * n)[:, None]
    arc = (1 - t) ** 2 * p + 2 * t * (1 - t) * q + t**2 * r
    return _resampled(np.vstack([line[: corner - n], arc, line[corner + n + 1 :]]))


def _twin(rng, places, edges, width, port_nodes):
    """Splits a stretch of the longest edges into two channels that run side by side with a narrow wall between them."""
    out, made = [], 0
    for edge in sorted(edges, key=lambda e: -e.arc[-1]):
        arc = edge.arc
        if made >= 3 or arc[-1] < 15 * width or edge.a == edge.b:
            out.append(edge)
            continue
        lens = rng.uniform(8.0, max(8.1, min(20.0, arc[-1] / width - 7.0))) * width
        first = int(np.searchsorted(arc, 0.5 * (arc[-1] - lens)))
        last = int(np.searchsorted(arc, 0.5 * (arc[-1] + lens)))
        u, v = len(places), len(places) + 1
        places = np.vstack([places, edge.line[first], edge.line[last]])
        middle = Edge(u, v, edge.line[first : last + 1], np.empty(0))
        share = np.clip(np.minimum(middle.arc, middle.arc[-1] - middle.arc) / (1.4 * width), 0.0, 1.0)
        tangent = np.gradient(middle.line, axis=0)
        tangent /= np.hypot(*tangent.T)[:, None]
        normal = np.column_stack([-tangent[:, 1], tangent[:, 0]])
        apart = 0.5 * (width + rng.uniform(3.0, 4.5)) * np.sin(0.5 * np.pi * share)[:, None] * normal
        out += [Edge(u, v, _resampled(middle.line + sign * apart), np.empty(0)) for sign in (1.0, -1.0)]
        out += [Edge(edge.a, u, edge.line[: first + 1], np.empty(0)), Edge(v, edge.b, edge.line[last:], np.empty(0))]
        made += 1
    return places, out, made


def _distance(rows, columns, edges):
    """Signed distance to the channel walls (negative inside) per pixel, and edge number and arc of the nearest centreline."""
    from scipy.spatial import cKDTree

    signed = np.full((rows, columns), 1e3)
    owner = np.full((rows, columns), -1)
    arc = np.zeros((rows, columns))
    for number, edge in enumerate(edges):
        reach = float(edge.half.max()) + 6.0
        low = np.maximum(np.floor(edge.line.min(axis=0) - reach), 0).astype(int)
        high = np.minimum(np.ceil(edge.line.max(axis=0) + reach), [columns, rows]).astype(int)
        x, y = np.meshgrid(np.arange(low[0], high[0]) + 0.5, np.arange(low[1], high[1]) + 0.5)
        line, half, edge_arc = edge.line, edge.half, edge.arc
        away, index = cKDTree(line).query(np.column_stack([x.ravel(), y.ravel()]))
        value = (away - half[index]).reshape(x.shape)
        window = (slice(low[1], high[1]), slice(low[0], high[0]))
        better = value < signed[window]
        signed[window][better] = value[better]
        owner[window][better] = number
        arc[window][better] = edge_arc[index].reshape(x.shape)[better]
    return signed, owner, arc


def _betti(mask):
    from scipy import ndimage

    pieces = ndimage.label(mask, np.ones((3, 3)))[1]
    return pieces, ndimage.label(~np.pad(mask, 1))[1] - 1


def _over_frame(edges, ports, width):
    """Carries port edges on past the frame so that their rounded caps lie outside."""
    indices = {index for index, _, _ in ports}
    return [_longer(edge, edge.a in indices, edge.b in indices, width) for edge in edges]


def _longer(edge, before, after, width):
    n = int(8 * width)
    line, half, shift = edge.line, edge.half, 0.0
    if before:
        step = (line[0] - line[4]) / np.hypot(*(line[0] - line[4])) * 0.25
        line = np.vstack([line[0] + np.arange(n, 0, -1)[:, None] * step, line])
        half, shift = np.concatenate([np.full(n, half[0]), half]), 0.25 * n
    if after:
        step = (line[-1] - line[-5]) / np.hypot(*(line[-1] - line[-5])) * 0.25
        line = np.vstack([line, line[-1] + np.arange(1, n + 1)[:, None] * step])
        half = np.concatenate([half, np.full(n, half[-1])])
    return Edge(edge.a, edge.b, line, half, [(u + shift, v + shift, g) for u, v, g in edge.necks])


def _draw(rng, seed, mode):
    every = mode == "everything"
    rows, columns = (int(v) for v in rng.integers(96, 513, 2))
    width = float(rng.uniform(6.0, 12.0))
    if mode == "necks" or mode == "close_pairs":
        width = min(width, 9.0)
    spacing = float(rng.uniform(5.5, 9.0)) * width * (1.3 if mode == "close_pairs" else 1.0)
    places, edges = _graph(rng, rows, columns, width, spacing)
    places, edges, ports = _add_ports(rng, places, edges, rows, columns, width)
    if len(ports) < 2:
        return None
    edges = _simplify(rng, places, edges, ports, width)
    port_nodes = {index for index, _, _ in ports}
    if len(edges) < 4 or not port_nodes <= {n for e in edges for n in (e.a, e.b)}:
        return None
    if mode == "close_pairs":
        places, edges, made = _twin(rng, places, edges, width, port_nodes)
        if not made:
            return None
    if min(e.arc[-1] / (0.7 if {e.a, e.b} & port_nodes else 1.0) for e in edges) < 3.2 * width or any(
        e.a == e.b for e in edges
    ):
        return None
    for edge in edges:
        if mode == "width" or every:
            ends = rng.uniform(0.6, 1.3, 2) * 0.5 * width
            edge.half = np.interp(edge.arc, [0.0, edge.arc[-1]], ends)
        else:
            edge.half = np.full(len(edge.line), 0.5 * width)
    signed, _, _ = _distance(rows, columns, _over_frame(edges, ports, width))
    used = sorted({n for e in edges for n in (e.a, e.b)})
    wanted = (1, len(edges) - len(used) + 1)
    spoil = 1.0 if mode == "close_pairs" else 2.0
    if any(_betti(signed < s) != wanted for s in (-1.0, 0.0, spoil)) or _smallest_hole(signed < 0) < width**2:
        return None
    _set_necks(rng, edges, width, mode)
    return _spoil(rng, seed, mode, rows, columns, width, places, edges, ports)


def _smallest_hole(mask):
    from scipy import ndimage

    label, n = ndimage.label(~np.pad(mask, 1))
    sizes = np.sort(np.bincount(label.ravel(), minlength=n + 1)[1:])
    return float(sizes[0]) if n > 1 else np.inf


def _set_necks(rng, edges, width, mode):
    if mode not in ("necks", "everything"):
        return
    long = [e for e in edges if e.arc[-1] > 9 * width]
    rng.shuffle(long)
    n = int(rng.integers(1, 4)) if mode == "necks" else 1
    for edge in long[:n]:
        middle = edge.arc[-1] * rng.uniform(0.45, 0.55)
        stretch = width * rng.uniform(0.8, 1.4)
        density = rng.uniform(0.28, 0.44) if rng.random() < 0.6 else rng.uniform(0.62, 0.85)
        edge.necks.append((middle - 0.5 * stretch, middle + 0.5 * stretch, density))


def _spoil(rng, seed, mode, rows, columns, width, places, edges, ports):
    from scipy import ndimage

    every = mode == "everything"
    signed, owner, arc = _distance(rows, columns, _over_frame(edges, ports, width))
    if mode == "ragged" or every:
        rough = ndimage.gaussian_filter(rng.normal(size=signed.shape), 1.5)
        signed = signed + rough / rough.std() * (rng.uniform(0.35, 0.6) if mode == "ragged" else 0.25)
    value = np.clip(0.5 - signed, 0.0, 1.0)
    for number, edge in enumerate(_over_frame(edges, ports, width)):
        for u, v, density in edge.necks:
            inside = (owner == number) & (arc > u - 2) & (arc < v + 2)
            ramp = np.clip(np.minimum(arc - (u - 2), (v + 2) - arc) / 4.0, 0.0, 1.0)
            value = np.where(inside, value * (1.0 - ramp * (1.0 - density)), value)
    if mode == "islands" or every:
        value = _add_crumbs(rng, value, signed, width)
    if mode == "blur" or every:
        value = ndimage.gaussian_filter(value, rng.uniform(0.8, 1.8) if mode == "blur" else 0.6, mode="nearest")
    if mode == "checkerboard" or every:
        amplitude = rng.uniform(0.1, 0.3) if mode == "checkerboard" else 0.08
        sign = (-1.0) ** np.add.outer(np.arange(rows), np.arange(columns))
        value = 0.5 + (value - 0.5) * (1 - 2 * amplitude) + amplitude * sign
    if mode == "noise" or every:
        value = value + rng.normal(size=value.shape) * (rng.uniform(0.06, 0.14) if mode == "noise" else 0.05)
    value = np.clip(value, 0.0, 1.0)
    truth = _truth(places, edges, ports)
    roles = ["in", "out"] + [("in", "out", "access")[int(rng.integers(3))] for _ in ports[2:]]
    declared = [(role, place) for role, (_, place, _) in zip(roles, ports, strict=True)]
    return Case(seed, mode, value, width, truth, _cut(truth), declared)


def _add_crumbs(rng, value, signed, width):
    rows, columns = value.shape
    y, x = np.mgrid[:rows, :columns] + 0.5
    for _ in range(int(rng.integers(3, 9))):
        radius = rng.uniform(1.0, 0.45 * width)
        free = np.argwhere(signed > radius + 4)
        if len(free):
            r, c = free[int(rng.integers(len(free)))]
            value = np.maximum(value, np.clip(0.5 - (np.hypot(x - c, y - r) - radius), 0, 1))
    for _ in range(int(rng.integers(2, 6))):
        radius = rng.uniform(0.6, 0.14 * width)
        inner = np.argwhere(signed < -radius - 1.5)
        if len(inner):
            r, c = inner[int(rng.integers(len(inner)))]
            value = np.minimum(value, np.clip(0.5 + (np.hypot(x - c, y - r) - radius), 0, 1))
    return value


def _truth(places, edges, ports):
    port_nodes = {index for index, _, _ in ports}
    used = sorted({n for e in edges for n in (e.a, e.b)})
    number = {n: i for i, n in enumerate(used)}
    kinds = []
    for n in used:
        degree = sum((e.a == n) + (e.b == n) for e in edges)
        kinds.append("port" if n in port_nodes else "dead-end" if degree == 1 else "junction")
    return Truth(
        [places[n] for n in used], kinds, [Edge(number[e.a], number[e.b], e.line, e.half, e.necks) for e in edges]
    )


def _cut(truth):
    nodes, kinds, edges = list(truth.nodes), list(truth.kinds), []
    for edge in truth.edges:
        cuts = [neck for neck in edge.necks if neck[2] < 0.5]
        if not cuts:
            edges.append(edge)
            continue
        start, a = 0.0, edge.a
        for u, v, _ in [*cuts, (edge.arc[-1], None, 0.0)]:
            keep = (edge.arc >= start) & (edge.arc <= u)
            line, half = edge.line[keep], edge.half[keep]
            if v is None:
                edges.append(Edge(a, edge.b, line, half))
            else:
                nodes += [line[-1], edge.line[np.searchsorted(edge.arc, v)]]
                kinds += ["dead-end", "dead-end"]
                edges.append(Edge(a, len(nodes) - 2, line, half))
                start, a = v, len(nodes) - 1
    return Truth(nodes, kinds, edges)

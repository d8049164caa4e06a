"""More ways to draw a layout whose graph is known: wide curved channels, diagonal ports, full wraps, mirrored halves.

The first two change how the graph is drawn, the last two what is done with a drawn image.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from morph.layout.density import Density
from morph.settings.job import LayoutSettings, MirrorAt, PortSettings, Role, Samples, Seam
from tests.layout.synthetic import MODES, Edge, Truth, _cut, _draw, make_case

MORE_MODES = ("wide_curved", "diagonal_ports", "periodic", "mirrored")
PITCH_MM = 0.5


@dataclass
class Laid:
    """A case ready for the layout stage: its inputs, what is true, and how far the image was turned, in pixels."""

    seed: int
    mode: str
    density: Density
    settings: LayoutSettings
    ports: tuple[PortSettings, ...]
    truth: Truth
    cut: Truth
    width: float
    turned: int = 0


def lay(seed: int, mode: str) -> Laid:
    if mode == "periodic":
        return _periodic(seed)
    if mode == "mirrored":
        return _mirrored(seed)
    case = (
        _curved(seed)
        if mode == "wide_curved"
        else _diagonal(seed)
        if mode == "diagonal_ports"
        else make_case(seed, mode)
    )
    return _laid(case, mode)


def _density(value, seam=Seam.OPEN):
    rows, columns = value.shape
    return Density(value, (columns * PITCH_MM, rows * PITCH_MM), Samples.CELLS, seam, "synthetic.npy", "0" * 16)


def _ports(declared, size_mm):
    return tuple(
        PortSettings(f"p{i}", Role(role), tuple(float(v) for v in np.clip(np.asarray(place) * PITCH_MM, 0, size_mm)))
        for i, (role, place) in enumerate(declared)
    )


def _laid(case, mode):
    density = _density(case.value)
    settings = LayoutSettings(image=None, size_mm=density.size_mm)
    ports = _ports(case.ports, density.size_mm)
    return Laid(case.seed, mode, density, settings, ports, case.truth, case.cut, case.width)


class _Other:
    """The generator's random numbers, some of its ranges changed."""

    def __init__(self, rng, ranges):
        self._rng, self._ranges = rng, ranges

    def __getattr__(self, name):
        return getattr(self._rng, name)

    def uniform(self, low=0.0, high=1.0, size=None):
        if size is None and (low, high) in self._ranges:
            return self._ranges[low, high](self._rng)
        return self._rng.uniform(low, high, size)


def _drawn(seed, mode, number, ranges):
    """Draws `mode` with some ranges of the generator changed, until a drawing comes out."""
    for attempt in range(1000):
        case = _draw(_Other(np.random.default_rng([seed, number, attempt]), ranges), seed, mode)
        if case is not None:
            return case
    raise RuntimeError(f"no layout for seed {seed}")


def _curved(seed):
    """Channels of 13 to 22 pixels on arcs that bend by up to 60 degrees, their widths changing along them."""
    wide = {
        (6.0, 12.0): lambda rng: float(rng.uniform(13.0, 22.0)),
        (-0.16, 0.16): lambda rng: float(rng.uniform(-0.27, 0.27)),
    }
    return _drawn(seed, "width", 101, wide)


def _diagonal(seed):
    """Ports whose channel meets the frame at 31 to 44 degrees off the square, slightly blurred."""
    steep = {(-0.35, 0.35): lambda rng: float(rng.choice([-1.0, 1.0]) * rng.uniform(0.6, 0.95))}
    return _drawn(seed, "blur", 102, steep)


def _upright(case):
    rows = case.value.shape[0]
    return all(min(place[1], rows - place[1]) < 1e-6 for _, place in case.ports)


def _periodic(seed):
    """A case with ports below and above only, turned by any number of columns, its edges joined."""
    mode = MODES[seed % len(MODES)]
    number = seed
    while True:
        case = make_case(number, mode)
        if _upright(case):
            break
        number += 10_000
    rng = np.random.default_rng([seed, 103])
    turned = int(rng.integers(case.value.shape[1]))
    density = _density(np.roll(case.value, turned, axis=1), Seam.JOINED)
    columns = case.value.shape[1]
    declared = [(role, ((place[0] + turned) % columns, place[1])) for role, place in case.ports]
    settings = LayoutSettings(image=None, size_mm=density.size_mm, seam=Seam.JOINED)
    ports = _ports(declared, density.size_mm)
    return Laid(seed, "periodic", density, settings, ports, case.truth, case.cut, case.width, turned)


def _mirrored(seed):
    """A case taken as the left half; channels that reach its right edge run on into their mirror image."""
    case = make_case(seed, MODES[seed % len(MODES)])
    columns = case.value.shape[1]
    value = np.hstack([case.value, case.value[:, ::-1]])
    truth = _doubled(case.truth, columns)
    declared = []
    for role, place in case.ports:
        if columns - place[0] > 1e-6:
            declared += [(role, place), (role, (2 * columns - place[0], place[1]))]
    if not declared:
        return _mirrored(seed + 10_000)
    density = _density(value)
    settings = LayoutSettings(image=None, size_mm=(columns * PITCH_MM, density.size_mm[1]), mirror_at=MirrorAt.RIGHT)
    ports = _ports(declared, density.size_mm)
    return Laid(seed, "mirrored", density, settings, ports, truth, _cut(truth), case.width)


def _doubled(truth, columns):
    n = len(truth.nodes)
    flip = lambda p: np.column_stack([2 * columns - p[:, 0], p[:, 1]])  # noqa: E731
    on_line = {i for i, p in enumerate(truth.nodes) if columns - p[0] < 1e-6}
    nodes = list(truth.nodes) + [flip(p[None])[0] for p in truth.nodes]
    kinds = list(truth.kinds) * 2
    edges = []
    for edge in truth.edges:
        ends = on_line & {edge.a, edge.b}
        if not ends:
            edges += [edge, Edge(edge.a + n, edge.b + n, flip(edge.line), edge.half, list(edge.necks))]
            continue
        walked = edge if edge.b in ends else _reversed(edge)
        total = 2 * walked.arc[-1]
        necks = walked.necks + [(total - v, total - u, g) for u, v, g in walked.necks]
        line = np.vstack([walked.line, flip(walked.line)[-2::-1]])
        half = np.concatenate([walked.half, walked.half[-2::-1]])
        edges.append(Edge(walked.a, walked.a + n, line, half, sorted(necks)))
    used = sorted({i for e in edges for i in (e.a, e.b)})
    number = {i: k for k, i in enumerate(used)}
    edges = [replace(e, a=number[e.a], b=number[e.b]) for e in edges]
    return Truth([nodes[i] for i in used], [kinds[i] for i in used], edges)


def _reversed(edge):
    total = edge.arc[-1]
    return Edge(edge.b, edge.a, edge.line[::-1], edge.half[::-1], [(total - v, total - u, g) for u, v, g in edge.necks])

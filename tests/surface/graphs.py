"""Channel graphs made by hand: a straight line, a letter F, a ladder, a fan; and a process profile."""

from __future__ import annotations

import numpy as np
from scipy.interpolate import make_interp_spline

from morph.geometry.curve import Curve, curve_at, curve_length_mm
from morph.layout.graph import Branch, ChannelGraph, Node, NodeKind
from morph.settings.profile import Profile, Sourced, SourcedRange

TEST = "made for the test"


def make_profile(**changed: float) -> Profile:
    """A process with round numbers; any figure can be changed by name."""
    figures = {
        "layer_um": 40.0,
        "roof_angle_deg": 45.0,
        "free_span_mm": 1.0,
        "wall_mm": 1.0,
        "smallest_bore_mm": 2.0,
        "largest_bore_mm": 12.0,
        "powder_ball_mm": 1.5,
        "position_band_mm": 0.1,
        "bore_band_mm": 0.2,
        "bend_radius_bores": 1.5,
        "density_kg_m3": 8000.0,
    } | changed
    rows = {name: Sourced(value, "", TEST) for name, value in figures.items()}
    side = Sourced(250.0, "mm", TEST)
    conducts, rough = SourcedRange(14.0, 15.0, "W/mK", TEST), SourcedRange(5.0, 20.0, "um", TEST)
    ranges = {
        "conductivity_as_printed_w_mk": conducts,
        "conductivity_heat_treated_w_mk": conducts,
        "roughness_ra_um": rough,
    }
    return Profile(name="test-process", material="test alloy", machine_mm=(side, side, side), **rows, **ranges)


def line_curve(points: np.ndarray) -> Curve:
    """The straight line from the first to the last point as an exact cubic B-spline."""
    points = np.asarray(points, dtype=float)
    share = np.linspace(0.0, 1.0, 4)[:, None]
    return Curve(np.repeat([0.0, 1.0], 4), (1 - share) * points[0] + share * points[-1])


def smooth_curve(points: np.ndarray) -> Curve:
    """A cubic B-spline through four or more points."""
    points = np.asarray(points, dtype=float)
    chord = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(points, axis=0), axis=1))])
    spline = make_interp_spline(chord / chord[-1], points, k=3)
    return Curve(spline.t, spline.c)


def make_branch(name: str, start: Node, end: Node, bore: float | np.ndarray, via: list | None = None) -> Branch:
    """A branch from node to node, straight or through the points `via`."""
    points = np.array([start.sheet_mm, *(via or []), end.sheet_mm])
    curve = smooth_curve(points) if via else line_curve(points)
    length = curve_length_mm(curve)
    spacing = min(float(np.min(bore)) / 4.0, 1.0)
    parameter = np.linspace(0.0, 1.0, max(3, int(np.ceil(1.5 * length / spacing)) + 1))
    sheet = curve_at(curve, parameter)
    sheet[0], sheet[-1] = start.sheet_mm, end.sheet_mm
    bores = np.interp(np.linspace(0, 1, len(sheet)), np.linspace(0, 1, np.size(bore)), np.atleast_1d(bore))
    return Branch(name, start.id, end.id, curve, parameter, sheet, bores, length, 0.0)


def make_graph(size: tuple[float, float], places: dict[str, tuple], links: list[tuple]) -> ChannelGraph:
    """A graph from places {id: (x, y) or (x, y, port)} and links (from, to, bore[, via points])."""
    degree = {name: sum(name in link[:2] for link in links) for name in places}
    nodes = {}
    for name, place in places.items():
        port = place[2] if len(place) > 2 else None
        kind = NodeKind.PORT if port else NodeKind.JUNCTION if degree[name] > 1 else NodeKind.DEAD_END
        nodes[name] = Node(name, kind, port, np.array(place[:2], dtype=float))
    branches = [
        make_branch(f"B{k + 1}", nodes[link[0]], nodes[link[1]], link[2], link[3] if len(link) > 3 else None)
        for k, link in enumerate(links)
    ]
    return ChannelGraph(size, 0.5, 0.3, tuple(nodes.values()), tuple(branches))


def straight_line(size=(60.0, 40.0), bore: float = 4.0) -> ChannelGraph:
    """One channel from bottom to top in the middle of the sheet."""
    return make_graph(size, {"N1": (size[0] / 2, 0.0, "in"), "N2": (size[0] / 2, size[1], "out")}, [("N1", "N2", bore)])


def letter_f(size=(60.0, 40.0), bore: float = 4.0) -> ChannelGraph:
    """The letter F as it reads: stem at the left, arms to the right, the longer one on top."""
    places = {
        "N1": (20.0, 5.0, "foot"),
        "N2": (20.0, 20.0),
        "N3": (35.0, 20.0),
        "N4": (20.0, 35.0),
        "N5": (40.0, 35.0, "arm"),
    }
    links = [("N1", "N2", bore), ("N2", "N3", bore), ("N2", "N4", bore), ("N4", "N5", bore)]
    return make_graph(size, places, links)


def ladder(rungs: int = 4, size=(70.0, 50.0), bore: float = 4.0, gap: float | None = None) -> ChannelGraph:
    """Two rails with rungs between; in at the lower left, out at the upper right."""
    gap = gap or (size[1] - 10.0) / (rungs - 1)
    rows = [5.0 + gap * k for k in range(rungs)]
    places = {"N1": (0.0, rows[0], "in"), "N2": (size[0], rows[-1], "out")}
    for k, y in enumerate(rows):
        places[f"A{k}"] = (12.0, y)
        places[f"Z{k}"] = (size[0] - 12.0, y)
    links = [("N1", "A0", bore), (f"Z{rungs - 1}", "N2", bore)]
    for k in range(rungs):
        links.append((f"A{k}", f"Z{k}", bore))
        if k:
            links += [(f"A{k - 1}", f"A{k}", bore), (f"Z{k - 1}", f"Z{k}", bore)]
    return make_graph(size, places, links)


def cross(size=(96.0, 72.0), bore: float = 6.0) -> ChannelGraph:
    """A ring in the middle of the sheet with a way to a port on each of its four sides."""
    w, h = size
    places = {
        "N1": (0.7 * w, 0.0, "bottom"),
        "N2": (0.0, 0.15 * h, "left"),
        "N3": (w, 0.35 * h, "right"),
        "N4": (0.48 * w, h, "top"),
        "S": (0.6 * w, 0.25 * h),
        "W": (0.25 * w, 0.45 * h),
        "E": (0.75 * w, 0.5 * h),
        "T": (0.5 * w, 0.75 * h),
    }
    links = [
        ("N1", "S", bore),
        ("N2", "W", bore, [(0.08 * w, 0.17 * h), (0.18 * w, 0.32 * h)]),
        ("N3", "E", bore, [(0.92 * w, 0.36 * h), (0.82 * w, 0.42 * h)]),
        ("N4", "T", bore),
        ("S", "W", bore),
        ("S", "E", bore),
        ("W", "T", bore),
        ("E", "T", bore),
    ]
    return make_graph(size, places, links)

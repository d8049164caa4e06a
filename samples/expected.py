"""Figures of the sample images by another route than morph: `python samples/expected.py [NAME...]`.

Writes samples/NAME/expected.json. Nothing of morph is imported: the image is enlarged by cubic
interpolation and cut at 0.5, pieces and holes come from scikit-image's labels and Euler number, the
centreline from scikit-image's thinning traced by skan. Each figure stands with its method, unit and
the tolerance a comparison should allow. Of a joined sheet the left and the right edge are one line: the image is
repeated past both, and pieces, Euler number and traced paths are glued there.
"""

from __future__ import annotations

import json
import sys
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

HERE = Path(__file__).resolve().parent
ENLARGE = 8
PAST = 8
"""Cells repeated past a joined edge before the image is enlarged: far more than a cubic spline reaches."""
SMOOTH_PIXELS = 8.0


def read_coolant(folder: Path) -> tuple[NDArray[np.bool_], float, float, bool]:
    """Returns the enlarged coolant mask (row 0 at the bottom), its pixel in mm, the sheet in mm2, and if joined."""
    from scipy.ndimage import zoom

    job = tomllib.loads((folder / "job.toml").read_text(encoding="utf-8"))["layout"]
    image = np.load(folder / job["image"], allow_pickle=False).astype(np.float64)
    picture = image if job.get("rows", "top-down") == "bottom-up" else image[::-1]
    joined = job.get("seam", "open") == "joined"
    width, height = job["size_mm"]
    more = PAST if joined else 0
    wide = np.pad(picture, ((0, 0), (more, more)), mode="wrap")
    fine = zoom(wide, ENLARGE, order=3, mode="nearest", grid_mode=True)
    fine = fine[:, more * ENLARGE : fine.shape[1] - more * ENLARGE]
    return fine > 0.5, width / fine.shape[1], width * height, joined


def measure_topology(coolant: NDArray[np.bool_], *, joined: bool) -> tuple[int, int]:
    """Returns pieces and holes of the mask, coolant 8-connected.

    Joined: a strip whose last column repeats its first is glued along it, so Euler(ring) = Euler(strip) -
    Euler(column), and labels that meet there are one piece. A channel that goes all the way round counts as a hole.
    """
    import networkx as nx
    from skimage.measure import euler_number, label

    strip = np.hstack([coolant, coolant[:, :1]]) if joined else coolant
    labels, euler = label(strip, connectivity=2), int(euler_number(strip, connectivity=2))
    if not joined:
        return int(labels.max()), int(labels.max()) - euler
    euler -= int(label(coolant[:, 0]).max())
    meeting = nx.Graph()
    meeting.add_nodes_from(range(1, int(labels.max()) + 1))
    meeting.add_edges_from(labels[coolant[:, 0]][:, [0, -1]].tolist())
    pieces = nx.number_connected_components(meeting)
    return pieces, pieces - euler


def measure_centreline(coolant: NDArray[np.bool_], pixel_mm: float, *, joined: bool) -> dict[str, Any]:
    """Returns length in mm and counts of branches, junctions and dead ends of the thinned mask's circuits.

    A circuit is a piece that reaches the image's frame at least twice; others lead nowhere and do not count.
    End branches that stay inside the channel they leave (shorter than 1.5 half-widths) are thinning
    spurs and are dropped, unless they end on the image's frame; junctions closer than a half-width
    are one junction.
    """
    import networkx as nx
    from scipy.ndimage import distance_transform_edt
    from skan import Skeleton, summarize
    from skimage.morphology import skeletonize

    pad = 10 * ENLARGE
    wide = np.pad(coolant, ((pad, pad), (0, 0)), mode="edge")
    wide = np.pad(wide, ((0, 0), (pad, pad)), mode="wrap" if joined else "edge")
    half_width = distance_transform_edt(wide)[pad:-pad, pad:-pad]
    thin = skeletonize(wide)[pad:-pad, pad:-pad]
    skeleton = Skeleton(thin)
    table = summarize(skeleton, separator="_")
    graph = nx.MultiGraph()
    for index, row in table.iterrows():
        path = skeleton.path_coordinates(index)
        graph.add_edge(int(row["node_id_src"]), int(row["node_id_dst"]), length=_path_length(path))
    place = {node: skeleton.coordinates[node] for node in graph}
    if joined:
        _glue_at_seam(graph, place, coolant.shape[1])
    height = coolant.shape[0]
    frame = (height, 0 if joined else coolant.shape[1])
    _drop_spurs(graph, place, half_width, frame)
    for piece in [list(nodes) for nodes in nx.connected_components(graph)]:
        if sum(graph.degree(node) == 1 and _on_frame(place[node], frame) for node in piece) < 2:
            graph.remove_nodes_from(piece)
    length = sum(data["length"] for *_, data in graph.edges(data=True)) * pixel_mm
    _merge_near_junctions(graph, place, half_width)
    _join_through(graph)
    ends = [node for node, degree in graph.degree() if degree == 1]
    loose = [node for node in ends if not _on_frame(place[node], frame)]
    junctions = sum(1 for _, degree in graph.degree() if degree > 2)
    return {
        "length_mm": length,
        "branches": graph.number_of_edges(),
        "junctions": junctions,
        "dead_ends": len(loose),
        "frame_ends": len(ends) - len(loose),
    }


def _path_length(path: NDArray[np.int64]) -> float:
    """Returns the length in pixels of a traced path, smoothed because a chain of pixels reads up to 8 % long."""
    from scipy.ndimage import gaussian_filter1d

    if len(path) < 3:
        return float(np.linalg.norm(np.diff(path, axis=0), axis=1).sum())
    straight = np.linspace(path[0], path[-1], len(path))
    odd = path - straight
    mirrored = np.concatenate([-odd[:0:-1], odd, -odd[-2::-1]])
    smooth = gaussian_filter1d(mirrored, SMOOTH_PIXELS, axis=0)[len(path) - 1 : 2 * len(path) - 1] + straight
    return float(np.linalg.norm(np.diff(smooth, axis=0), axis=1).sum())


def _glue_at_seam(graph: Any, place: dict[int, Any], columns: int) -> None:
    """Joins each path that ends on the left edge to the one that goes on at its height on the right edge."""
    ends = [node for node in sorted(graph) if graph.degree(node) == 1]
    right = [node for node in ends if place[node][1] == columns - 1]
    for node in (node for node in ends if place[node][1] == 0):
        other = min(right, key=lambda n: abs(int(place[n][0]) - int(place[node][0])))
        if abs(int(place[other][0]) - int(place[node][0])) > 1:
            raise ValueError(f"the path at row {place[node][0]} of the left edge does not go on at the right one")
        right.remove(other)
        graph.add_edge(node, other, length=1.0)


def _on_frame(point: NDArray[np.int64], frame: tuple[int, int]) -> bool:
    """Returns whether a pixel lies on the frame of `frame` rows and columns, 0 columns: no left and right edge."""
    away = [point[0], frame[0] - 1 - point[0]]
    if frame[1]:
        away += [point[1], frame[1] - 1 - point[1]]
    return bool(min(away) <= 1)


def _drop_spurs(graph: Any, place: dict[int, Any], half_width: NDArray[np.float64], frame: tuple[int, int]) -> None:
    while True:
        spurs = []
        for a, b, key, data in graph.edges(keys=True, data=True):
            for end, root in ((a, b), (b, a)):
                free = graph.degree(end) == 1 and graph.degree(root) > 2
                inside = data["length"] < 1.5 * half_width[tuple(place[root])]
                if free and inside and not _on_frame(place[end], frame):
                    spurs.append((a, b, key, end))
        if not spurs:
            return
        a, b, key, end = spurs[0]
        graph.remove_edge(a, b, key)
        graph.remove_node(end)


def _merge_near_junctions(graph: Any, place: dict[int, Any], half_width: NDArray[np.float64]) -> None:
    import networkx as nx

    while True:
        near = [
            (a, b)
            for a, b, data in graph.edges(data=True)
            if a != b
            and min(graph.degree(a), graph.degree(b)) > 2
            and data["length"] < max(half_width[tuple(place[a])], half_width[tuple(place[b])])
        ]
        if not near:
            return
        nx.contracted_nodes(graph, *near[0], self_loops=True, copy=False)
        short = min(graph.get_edge_data(near[0][0], near[0][0]).items(), key=lambda item: item[1]["length"])
        graph.remove_edge(near[0][0], near[0][0], short[0])


def _join_through(graph: Any) -> None:
    for node in list(graph):
        if graph.degree(node) == 2 and not graph.has_edge(node, node):
            (_, a, one), (_, b, other) = graph.edges(node, data=True)
            graph.add_edge(a, b, length=one["length"] + other["length"])
            graph.remove_node(node)


def expected_figures(folder: Path) -> dict[str, Any]:
    """Returns the figures of one sample, each with value, tolerance and method."""
    coolant, pixel_mm, sheet_mm2, joined = read_coolant(folder)
    pieces, loops = measure_topology(coolant, joined=joined)
    line = measure_centreline(coolant, pixel_mm, joined=joined)
    area = float(coolant.sum()) * pixel_mm**2
    cut = f"cubic enlargement {ENLARGE}x (scipy.ndimage.zoom), cut at 0.5"
    thinning = "scikit-image skeletonize traced by skan"
    return {
        "pieces": {"value": pieces, "tolerance": 0, "method": f"{cut}; scikit-image label, 8-connected"},
        "loops": {"value": loops, "tolerance": 0, "method": f"{cut}; scikit-image euler_number"},
        "coolant_area_mm2": {"value": round(area, 2), "tolerance_ratio": 0.03, "method": f"{cut}; pixels counted"},
        "area_ratio": {
            "value": round(area / sheet_mm2, 5),
            "tolerance_ratio": 0.03,
            "method": "coolant area over sheet",
        },
        "centreline_mm": {
            "value": round(line["length_mm"], 2),
            "tolerance_ratio": 0.03,
            "method": f"{thinning}, paths smoothed over {SMOOTH_PIXELS:g} pixels, spurs below 1.5 half-widths dropped",
        },
        "branches": {
            "value": line["branches"],
            "tolerance": max(1, line["branches"] // 10),
            "method": f"{thinning}; junctions closer than a half-width merged, which is a choice: hence a tolerance",
        },
        "dead_ends_of_circuits": {
            "value": line["dead_ends"],
            "tolerance": 0,
            "method": f"{thinning}; ends away from the frame",
        },
        "frame_ends": {"value": line["frame_ends"], "tolerance": 0, "method": f"{thinning}; ends on the frame: ports"},
    }


def main(names: list[str]) -> int:
    """Writes expected.json for the named samples, or for all; returns the exit status."""
    folders = [HERE / name for name in names] or sorted(path.parent for path in HERE.glob("*/job.toml"))
    for folder in folders:
        figures = expected_figures(folder)
        text = json.dumps(figures, indent=1, sort_keys=True) + "\n"
        (folder / "expected.json").write_text(text, encoding="utf-8")
        print(folder.name, {key: row["value"] for key, row in figures.items()})
    return 0


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))

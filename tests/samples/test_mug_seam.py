"""The jacket that goes all the way round: where its image was cut leaves no mark on graph and solid.

The image is turned by whole columns, its ports with it; everything must come out turned and otherwise the same. The
meshes are compared by trimesh's nearest points.
"""

import dataclasses
import math
from pathlib import Path

import numpy as np
import pytest
import trimesh

from morph.layout.density import make_density
from morph.layout.extract import make_graph
from morph.pipeline import build
from morph.settings.read_job import read_job

JOB = Path(__file__).resolve().parents[2] / "samples" / "mug-jacket" / "job.toml"
COLUMNS = 176
GRAPH_MM = 1e-6  # promised
VOLUME_RATIO = 1e-3  # promised
SEAM_MM = 3.0  # half the width of the strip that counts as the seam
APART_MM = 0.02  # twice what simplification may take, and the field's own grid, which does not turn with the image


def turned(columns, folder):
    """The sample with its image and ports turned by whole columns to the right."""
    job = read_job(JOB)
    image = np.load(job.layout.image, allow_pickle=False)
    np.save(folder / f"turned-{columns}.npy", np.roll(image, columns, axis=1))
    width = job.layout.size_mm[0]
    shift = columns * width / COLUMNS
    ports = tuple(dataclasses.replace(p, at_mm=((p.at_mm[0] + shift) % width, p.at_mm[1])) for p in job.ports)
    layout = dataclasses.replace(job.layout, image=folder / f"turned-{columns}.npy")
    return dataclasses.replace(job, layout=layout, ports=ports), shift


def graph_of(job):
    return make_graph(make_density(job.layout), job.layout, job.ports)


def sorted_nodes(graph, shift):
    """Kind, and place turned back, of every node in an order that does not depend on where the image was cut."""
    width = graph.size_mm[0]
    rows = [(n.sheet_mm[1], (n.sheet_mm[0] - shift + 1.0) % width - 1.0, n.kind.value) for n in graph.nodes]
    return sorted(rows, key=lambda row: (round(row[0], 3), row[1]))


@pytest.mark.quick
@pytest.mark.parametrize("columns", [1, 40, 103])
def test_turned_by_whole_columns_the_graph_is_the_same(columns, tmp_path):
    (one, none), (two, shift) = turned(0, tmp_path), turned(columns, tmp_path)
    first, second = graph_of(one), graph_of(two)
    for a, b in zip(sorted_nodes(first, none), sorted_nodes(second, shift), strict=True):
        assert a[2] == b[2]
        np.testing.assert_allclose(a[:2], b[:2], atol=GRAPH_MM)

    def measures(graph):
        return sorted((b.length_mm, b.bore_mm.min(), b.bore_mm.mean(), b.bore_mm.max()) for b in graph.branches)

    np.testing.assert_allclose(measures(first), measures(second), atol=GRAPH_MM)


@pytest.mark.quick
def test_channels_cross_the_seam_and_go_round():
    graph = graph_of(read_job(JOB))
    width = graph.size_mm[0]
    crossing = [b for b in graph.branches if b.sheet_mm[:, 0].min() < 0.0 or b.sheet_mm[:, 0].max() > width]
    assert len(crossing) >= 2


def shown(job):
    """The channels as written, as trimesh sees them."""
    mesh = build(job).records.solid.trimmed
    return trimesh.Trimesh(mesh.vertices_mm, mesh.triangles, process=False)


@pytest.mark.slow
def test_no_mark_on_the_solid_where_the_image_was_cut(tmp_path):
    """Near the seam the two solids differ no more than elsewhere, and their walls turn no sharper."""
    (one, _), (two, _) = turned(0, tmp_path), turned(60, tmp_path)
    cut_here, cut_elsewhere = shown(one), shown(two)
    assert cut_elsewhere.volume == pytest.approx(cut_here.volume, rel=VOLUME_RATIO)
    # seen from the cavity the drawing runs against the angle, so a turn to the right is one by a negative angle
    cut_elsewhere.apply_transform(trimesh.transformations.rotation_matrix(2.0 * math.pi * 60 / COLUMNS, [0, 0, 1]))
    points = cut_here.vertices[cut_here.vertices[:, 2] > -40.0][::5]  # the leads are searched anew
    _, away, _ = trimesh.proximity.closest_point(cut_elsewhere, points)
    seam = (np.abs(points[:, 1]) < SEAM_MM) & (points[:, 0] < 0.0)
    assert seam.sum() > 200
    high = [float(np.quantile(away[where], 0.999)) for where in (seam, ~seam)]
    print(
        f"seam {high[0]:.4f} mm, elsewhere {high[1]:.4f} mm apart (99.9 %), largest at the seam {away[seam].max():.4f}"
    )
    assert high[0] <= max(APART_MM, 1.2 * high[1])
    middle = cut_here.triangles_center[cut_here.face_adjacency[:, 0]]
    at_seam = (np.abs(middle[:, 1]) < SEAM_MM) & (middle[:, 0] < 0.0)
    other = trimesh.Trimesh(cut_elsewhere.vertices, cut_elsewhere.faces, process=False)
    there = other.triangles_center[other.face_adjacency[:, 0]]
    same_place = (np.abs(there[:, 1]) < SEAM_MM) & (there[:, 0] < 0.0)
    turns = [np.degrees(m.face_adjacency_angles[w]) for m, w in ((cut_here, at_seam), (other, same_place))]
    print("turn between facets at the seam, median and 99 %:", [np.quantile(t, [0.5, 0.99]).round(2) for t in turns])
    assert np.quantile(turns[0], 0.99) <= 1.1 * np.quantile(turns[1], 0.99) + 1.0

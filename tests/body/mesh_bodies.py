"""Bodies for mesh blanks, made by an outside library: cores, a box with a round front and a boss, an L."""

from __future__ import annotations

import math

import numpy as np
import trimesh

from morph.body.skin import Skin
from morph.geometry.mesh import Mesh

ENGINE = "manifold"


def sections(radius_mm, chord_mm):
    """Sides of a prism inside a cylinder that leave it by at most `chord_mm`."""
    return 4 * math.ceil(0.25 * math.pi / math.acos(1.0 - chord_mm / radius_mm))


def block(low, high):
    low, high = np.array(low, float), np.array(high, float)
    body = trimesh.creation.box(high - low)
    body.apply_translation(0.5 * (low + high))
    return body


def rod(radius_mm, low_mm, high_mm, at=(0.0, 0.0), chord_mm=0.004):
    body = trimesh.creation.cylinder(radius_mm, high_mm - low_mm, sections=sections(radius_mm, chord_mm))
    body.apply_translation([*at, 0.5 * (low_mm + high_mm)])
    return body


def united(*bodies):
    return trimesh.boolean.union(list(bodies), engine=ENGINE)


def common(*bodies):
    return trimesh.boolean.intersection(list(bodies), engine=ENGINE)


def without(body, *others):
    return trimesh.boolean.difference([body, *others], engine=ENGINE)


def round_front():
    """A box of 60 x 76 x 60 mm with a round front of radius 60 mm about z at its +x side, and a boss on its top."""
    return united(common(block((0, -38, -30), (80, 38, 30)), rod(60, -40, 40)), rod(11, 29, 45, (30.0, 0.0)))


def mesh_of(body):
    return Mesh(np.asarray(body.vertices, float), np.asarray(body.faces))


def skin_of(body, region=None, names=("all",)):
    mesh = mesh_of(body)
    return Skin(mesh, np.zeros(len(mesh.triangles), int) if region is None else region, names)

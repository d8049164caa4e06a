"""Plans and meshes every export test shares."""

import importlib.util
from pathlib import Path

import numpy as np
import pytest

from morph.geometry.mesh import Mesh


def _load(path: Path):
    spec = importlib.util.spec_from_file_location(path.stem, path)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def plans():
    """The hand-made plans and blanks of the solid tests."""
    return _load(Path(__file__).parent.parent / "solid" / "plans.py")


def box_mesh(low, high) -> Mesh:
    """An axis-parallel box of 12 triangles, counter-clockwise seen from outside, worked out by hand."""
    (x0, y0, z0), (x1, y1, z1) = low, high
    corner = [(x0, y0, z0), (x1, y0, z0), (x1, y1, z0), (x0, y1, z0)]
    corner += [(x0, y0, z1), (x1, y0, z1), (x1, y1, z1), (x0, y1, z1)]
    quad = [(0, 3, 2, 1), (4, 5, 6, 7), (0, 1, 5, 4), (1, 2, 6, 5), (2, 3, 7, 6), (3, 0, 4, 7)]
    triangles = [t for a, b, c, d in quad for t in ((a, b, c), (a, c, d))]
    return Mesh(np.array(corner, float), np.array(triangles))


@pytest.fixture
def box():
    """The unit cube."""
    return box_mesh((0, 0, 0), (1, 1, 1))


@pytest.fixture
def box_of():
    """A maker of boxes."""
    return box_mesh

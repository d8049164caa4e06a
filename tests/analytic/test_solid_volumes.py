"""Volumes of channel solids against closed forms, an own quadrature, and an independent tube union.

Sources: torus and capsule are textbook solids (Pappus-Guldin; ball plus cylinder). Two equal cylinders crossing at a
right angle share 16 r^3 / 3 (Archimedes, Zu Chongzhi; textbook); half of that for a tee. Two cylinders of any
radii at angle t: slices parallel to both axes are parallelograms, integrated here.
"""

import dataclasses

import manifold3d
import numpy as np
import pytest

from morph.geometry.mesh import mesh_volume_mm3
from morph.solid.channel import make_channel_solid
from morph.solid.field import choose_h_mm
from tests.solid import plans
from tests.solid.tubes import tube_union

# The promise is 0.5 %; closed forms meet 0.1 % (chords and simplification by 0.008 mm).
PROMISED, CLOSED_FORM = 5e-3, 1e-3


class Auto:
    h_mm = None


def trimmed_volume(plan, blank=None, h_mm=None):
    blank = blank or plans.box_blank()
    return mesh_volume_mm3(make_channel_solid(plan, blank, h_mm or choose_h_mm(plan, Auto())).trimmed)


def through(name, a, b, face_a, face_b, bore):
    """A straight channel a-b as two leads from its middle; exits on both faces."""
    a, b = np.asarray(a, float), np.asarray(b, float)
    middle, along = 0.5 * (a + b), (b - a) / np.linalg.norm(b - a)
    items = [
        plans.branch(f"L-{name}1", f"M{name}", f"X{name}1", plans.sampled([middle, a], bore), bore, lead=True),
        plans.branch(f"L-{name}2", f"M{name}", f"X{name}2", plans.sampled([middle, b], bore), bore, lead=True),
    ]
    exits = [
        (f"{name}1", "in", f"L-{name}1", face_a, -along, 0.0),
        (f"{name}2", "out", f"L-{name}2", face_b, along, 0.0),
    ]
    return items, exits


def test_torus():
    big, bore = 12.0, 6.0
    path = plans.arc((30.0, 20.0, 15.0), big, 0.0, 360.0, 2.0)
    path[-1] = path[0]
    plan = plans.plan_of([plans.branch("B1", "N1", "N1", path, bore)])
    assert trimmed_volume(plan) == pytest.approx(2.0 * np.pi**2 * big * (bore / 2) ** 2, rel=CLOSED_FORM)


def test_capsule():
    bore, length = 6.0, 20.0
    path = plans.sampled([(20.0, 20.0, 15.0), (40.0, 20.0, 15.0)], bore)
    plan = plans.plan_of([plans.branch("B1", "N1", "N2", path, bore)], dead_ends=("N1", "N2"))
    r = bore / 2
    assert trimmed_volume(plan) == pytest.approx(4.0 / 3.0 * np.pi * r**3 + np.pi * r**2 * length, rel=CLOSED_FORM)


def test_tapered_capsule():
    """Two balls and the cone tangent to both: frustum between the contact circles plus the outer caps."""
    r1, r2, length = 2.0, 3.5, 24.0
    n = 49
    path = np.column_stack([np.linspace(18.0, 42.0, n), np.full(n, 20.0), np.full(n, 15.0)])
    plan = plans.plan_of([plans.branch("B1", "N1", "N2", path, np.linspace(2 * r1, 2 * r2, n))], dead_ends=("N1", "N2"))
    s = (r2 - r1) / length
    c = np.sqrt(1.0 - s * s)
    x1, x2, c1, c2 = -s * r1, length - s * r2, c * r1, c * r2
    frustum = np.pi * (x2 - x1) * (c1**2 + c1 * c2 + c2**2) / 3.0
    caps = sum(np.pi * h**2 * (3 * r - h) / 3.0 for r, h in ((r1, r1 * (1 - s)), (r2, r2 * (1 + s))))
    assert trimmed_volume(plan) == pytest.approx(frustum + caps, rel=CLOSED_FORM)


def test_tee_with_sharp_edges():
    bore, r = 6.0, 3.0
    items, exits = through("a", (0.0, 20.0, 15.0), (60.0, 20.0, 15.0), "-x", "+x", bore)
    items.append(plans.branch("L-b", "Ma", "Xb", plans.sampled([(30, 20, 15), (30, 40, 15)], bore), bore, lead=True))
    exits.append(("b", "out", "L-b", "+y", (0, 1, 0), 0.0))
    plan = dataclasses.replace(plans.plan_of(items, exits), blend_mm=0.0)
    assert trimmed_volume(plan) == pytest.approx(np.pi * r**2 * (60 + 20) - 8 * r**3 / 3, rel=CLOSED_FORM)


@pytest.mark.parametrize(("angle_deg", "bores"), [(90.0, (6.0, 6.0)), (55.0, (6.0, 6.0)), (50.0, (6.0, 4.0))])
def test_crossed_cylinders_with_sharp_edges(angle_deg, bores):
    items, exits = through("a", (0.0, 20.0, 15.0), (60.0, 20.0, 15.0), "-x", "+x", bores[0])
    reach = 20.0 / np.tan(np.radians(angle_deg))
    more, more_exits = through("b", (30 - reach, 0.0, 15.0), (30 + reach, 40.0, 15.0), "-y", "+y", bores[1])
    plan = dataclasses.replace(plans.plan_of(items + more, exits + more_exits), blend_mm=0.0)
    r1, r2, sine = bores[0] / 2, bores[1] / 2, np.sin(np.radians(angle_deg))
    # z = r2 sin(u) takes the square root at the end of the slices away
    u, w = np.polynomial.legendre.leggauss(60)
    u, w = 0.5 * np.pi * u, 0.5 * np.pi * w
    shared = float(np.sum(w * 4 * np.sqrt(r1**2 - (r2 * np.sin(u)) ** 2) * r2 * np.cos(u) * r2 * np.cos(u))) / sine
    if r1 == r2:
        assert shared == pytest.approx(16 * r1**3 / 3 / sine, rel=1e-6)
    expected = np.pi * r1**2 * 60 + np.pi * r2**2 * 40 / sine - shared
    assert trimmed_volume(plan) == pytest.approx(expected, rel=CLOSED_FORM)


@pytest.mark.parametrize("make", [plans.straight_pipe, plans.tee, plans.ring, plans.ladder])
def test_against_the_tube_union(make):
    plan = make()
    on_cylinder = make is plans.ladder
    blank = plans.cylinder_blank() if on_cylinder else plans.box_blank()
    around = (
        manifold3d.Manifold.cylinder(80.0, 30.0, 30.0, 400) if on_cylinder else manifold3d.Manifold.cube([60, 40, 30])
    )
    other = (tube_union(plan) ^ around).volume()
    assert trimmed_volume(plan, blank) == pytest.approx(other, rel=PROMISED)


def test_volume_error_falls_with_the_square_of_h():
    """Extraction alone (no simplification): halving h quarters the error on a torus cut from balls."""
    from morph.core.progress import SILENT
    from morph.geometry.mesh import Mesh
    from morph.solid.extract import extract_surface
    from morph.solid.field import sample_field
    from morph.solid.sweep import make_sweep

    big, bore = 12.0, 5.0
    path = plans.arc((30.0, 20.0, 15.0), big, 0.0, 360.0, 0.4)
    path[-1] = path[0]
    sweep = make_sweep(plans.plan_of([plans.branch("B1", "N1", "N1", path, bore)], blend_mm=0.0))
    surfaces = [extract_surface(sample_field(sweep, h, SILENT), SILENT) for h in (0.5, 0.25, 0.125)]
    volume = [mesh_volume_mm3(Mesh(surface.vertices, surface.triangles)) for surface in surfaces]
    order = np.log2((volume[0] - volume[1]) / (volume[1] - volume[2]))
    assert 1.6 < order < 2.4
    assert volume[2] == pytest.approx(2.0 * np.pi**2 * big * (bore / 2) ** 2, rel=3e-4)

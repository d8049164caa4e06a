"""Tubes along given centrelines lofted and fused by a CAD kernel (OpenCASCADE by OCP), run as a process of its own.

`python cad_tubes.py tubes.npz` reads `count` and, per tube k, `rows{k} (n, 4)`: x, y, z and radius in mm. Each tube is
lofted smoothly through circles square to its centreline, with a ball at both ends, and all are fused one after the other.
Prints one line: processor seconds for lofts and for fusing, whether the result is valid, and its volume in mm3.
A process of its own, because the kernel may end it on a hard case.
"""

import sys
import time

import numpy as np

BALL_SHARE = 1.02
"""Balls stand out by this much: where they touch the tubes along a circle the kernel loses whole tubes."""


def circle_wire(place, along, side, radius):
    from OCP.BRepBuilderAPI import BRepBuilderAPI_MakeEdge, BRepBuilderAPI_MakeWire
    from OCP.gp import gp_Ax2, gp_Circ, gp_Dir, gp_Pnt

    axes = gp_Ax2(gp_Pnt(*place.tolist()), gp_Dir(*along.tolist()), gp_Dir(*side.tolist()))
    return BRepBuilderAPI_MakeWire(BRepBuilderAPI_MakeEdge(gp_Circ(axes, float(radius))).Edge()).Wire()


def loft(rows):
    from OCP.BRepOffsetAPI import BRepOffsetAPI_ThruSections

    step = np.diff(rows[:, :3], axis=0)
    step /= np.linalg.norm(step, axis=1)[:, None]
    along = np.vstack([step[:1], step[:-1] + step[1:], step[-1:]])
    along /= np.linalg.norm(along, axis=1)[:, None]
    maker = BRepOffsetAPI_ThruSections(True, False, 1e-3)
    side = np.cross(along[0], np.eye(3)[np.abs(along[0]).argmin()])
    for row, way in zip(rows, along, strict=True):
        side = side - (side @ way) * way  # carried along, so that the loft does not twist
        side /= np.linalg.norm(side)
        maker.AddWire(circle_wire(row[:3], way, side, row[3]))
    maker.Build()
    return maker.Shape()


def ball(row):
    from OCP.BRepPrimAPI import BRepPrimAPI_MakeSphere
    from OCP.gp import gp_Pnt

    return BRepPrimAPI_MakeSphere(gp_Pnt(*row[:3].tolist()), BALL_SHARE * float(row[3])).Shape()


def fuse(shapes):
    from OCP.BRepAlgoAPI import BRepAlgoAPI_Fuse

    whole = shapes[0]
    for shape in shapes[1:]:
        whole = BRepAlgoAPI_Fuse(whole, shape).Shape()
    return whole


def main(path):
    from OCP.BRepCheck import BRepCheck_Analyzer
    from OCP.BRepGProp import BRepGProp
    from OCP.GProp import GProp_GProps

    with np.load(path) as file:
        tubes = [file[f"rows{k}"] for k in range(int(file["count"]))]
    start = time.process_time()
    shapes = [loft(rows) for rows in tubes]
    places = {tuple(np.round(row[:3], 6)): row for rows in tubes for row in rows[[0, -1]]}
    for rows in tubes:
        for row in rows[[0, -1]]:
            key = tuple(np.round(row[:3], 6))
            places[key] = max(places[key], row, key=lambda r: r[3])
    shapes += [ball(places[key]) for key in sorted(places)]
    lofted = time.process_time()
    whole = fuse(shapes)
    fused = time.process_time()
    weight = GProp_GProps()
    BRepGProp.VolumeProperties_s(whole, weight)
    valid = int(BRepCheck_Analyzer(whole).IsValid())
    sys.stdout.write(f"{lofted - start:.3f} {fused - lofted:.3f} {valid} {weight.Mass():.3f}\n")


if __name__ == "__main__":
    main(sys.argv[1])

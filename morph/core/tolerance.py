"""The one table of geometric tolerances, all in mm.

Every comparison of lengths in morph uses one of these; a new one needs a reason here.
"""

COINCIDE_MM = 1e-6
"""Two points closer than this are the same point (branch ends and their nodes)."""

WELD_MM = 1e-5
"""Vertices of a written mesh closer than this are one vertex (float32 has 4e-6 at 64 mm)."""

SIMPLIFY_MM = 0.008
"""Each body is simplified once, moving its surface by at most this: half the O(h^2) error of a
field at h = 0.3 mm on a 3 mm bore, far below any printing band."""

FACET_MM = 0.002
"""Round faces of a blank are facetted to this sagitta, so a wall never loses more than this."""

EXIT_RIM_MM = 0.05
"""An opening found on a mesh matches a declared exit when its centre is within this of the axis."""

BUILD_MM = 0.03
"""Planned on top of every wall, so that a wall built at its limit still passes on the written mesh: field 0.011 mm,
simplification 0.008 mm, and samples up to 1 mm apart on a bend."""

BUILD_BORE_MM = 0.07
"""Planned on top of every smallest bore, so that one built at its limit still passes on the written mesh: both sides
lose what a wall gains, 0.04 mm over most bends and 0.064 mm at the worst place found (own measurement)."""

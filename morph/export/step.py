"""The centrelines as a STEP file: one cubic B-spline per branch and lead, schema AP242, unit mm.

Every curve is a B_SPLINE_CURVE_WITH_KNOTS in one GEOMETRIC_CURVE_SET. A curve has no place for the
bore along it, so the bore is written twice, for two kinds of reader:

* in the curve's own name, "B3 bore 4.20..5.10 mm": the one text that stays with a curve wherever
  it is shown, in a selection list, a text editor or a script;
* as user-defined attributes of the product, one per branch under its id, "bore 4.20..5.10 mm, mean
  4.63 mm; at mm along: 0 4.2, 5 4.31, ...": importers that drop curve names show these in the
  part's property list, and they hold the taper as well.

The header is constant. FILE_NAME demands a time stamp; it always reads 1970-01-01T00:00:00, which
stands for "not stated", so that the same build gives the same bytes.
"""

from __future__ import annotations

import itertools

import numpy as np

from morph.body.plan import ChannelPlan, PlanBranch
from morph.core.arrays import Floats
from morph.core.errors import ExportError
from morph.core.tolerance import COINCIDE_MM
from morph.export.part21 import Data, exchange_bytes, integers, real, reals, ref, refs, text
from morph.export.spline_fit import FittedCurve, fit_curve
from morph.geometry.curve import DEGREE

SCHEMA = "AP242_MANAGED_MODEL_BASED_3D_ENGINEERING_MIM_LF { 1 0 10303 442 1 1 4 }"
TIME_STAMP = "1970-01-01T00:00:00"
BORE_STEP_MM = 5.0
"""Spacing of the bores listed along a branch; enough to see a taper, short enough to read."""

HEADER = (
    "FILE_DESCRIPTION(('channel centrelines, bore in each name'),'2;1');",
    f"FILE_NAME('centrelines','{TIME_STAMP}',(''),(''),'morph','morph','');",
    f"FILE_SCHEMA(('{SCHEMA}'));",
)


def curve_name(branch: PlanBranch) -> str:
    """Returns the name of a branch's curve: its id and its least and largest bore."""
    return f"{branch.id} bore {branch.bore_mm.min():.2f}..{branch.bore_mm.max():.2f} mm"


def _bore_text(branch: PlanBranch) -> str:
    """Returns the bore along `branch` in one line: range, mean along the length, and stations."""
    step = np.linalg.norm(np.diff(branch.xyz_mm, axis=0), axis=1)
    along = np.concatenate([[0.0], np.cumsum(step)])
    weight = 0.5 * (branch.bore_mm[1:] + branch.bore_mm[:-1])
    mean = float(weight @ step / along[-1])
    station = np.linspace(0.0, along[-1], max(2, int(np.ceil(along[-1] / BORE_STEP_MM)) + 1))
    pairs = ", ".join(
        f"{s:.1f} {b:.3f}" for s, b in zip(station, np.interp(station, along, branch.bore_mm), strict=True)
    )
    low, high = branch.bore_mm.min(), branch.bore_mm.max()
    return f"bore {low:.2f}..{high:.2f} mm, mean {mean:.2f} mm; at mm along: {pairs}"


def _add_context(data: Data) -> tuple[int, int]:
    """Adds units, accuracy and application; returns the geometric and the application context."""
    millimetre = data.add_written("(LENGTH_UNIT()NAMED_UNIT(*)SI_UNIT(.MILLI.,.METRE.))")
    radian = data.add_written("(NAMED_UNIT(*)PLANE_ANGLE_UNIT()SI_UNIT($,.RADIAN.))")
    steradian = data.add_written("(NAMED_UNIT(*)SI_UNIT($,.STERADIAN.)SOLID_ANGLE_UNIT())")
    accuracy = data.add(
        "UNCERTAINTY_MEASURE_WITH_UNIT",
        f"LENGTH_MEASURE({real(COINCIDE_MM)})",
        ref(millimetre),
        text("distance_accuracy_value"),
        text("points closer than this are one"),
    )
    geometric = data.add_written(
        f"(GEOMETRIC_REPRESENTATION_CONTEXT(3)GLOBAL_UNCERTAINTY_ASSIGNED_CONTEXT(({ref(accuracy)}))"
        f"GLOBAL_UNIT_ASSIGNED_CONTEXT({refs([millimetre, radian, steradian])})REPRESENTATION_CONTEXT('','3D'))"
    )
    application = data.add("APPLICATION_CONTEXT", text("managed model based 3d engineering"))
    data.add(
        "APPLICATION_PROTOCOL_DEFINITION",
        text("international standard"),
        text("ap242_managed_model_based_3d_engineering"),
        "2014",
        ref(application),
    )
    return geometric, application


def _add_product(data: Data, name: str, application: int) -> int:
    """Adds the product that carries the curves; returns its definition."""
    context = data.add("PRODUCT_CONTEXT", text(""), ref(application), text("mechanical"))
    title = text(f"{name} channel centrelines")
    product = data.add("PRODUCT", title, title, text(""), refs([context]))
    data.add("PRODUCT_RELATED_PRODUCT_CATEGORY", text("part"), "$", refs([product]))
    formation = data.add("PRODUCT_DEFINITION_FORMATION", text(""), text(""), ref(product))
    design = data.add("PRODUCT_DEFINITION_CONTEXT", text("part definition"), ref(application), text("design"))
    return data.add("PRODUCT_DEFINITION", text("design"), text(""), ref(formation), ref(design))


def _knots_with_multiplicity(knots: Floats) -> tuple[list[float], list[int]]:
    groups = [(value, len(list(same))) for value, same in itertools.groupby(knots.tolist())]
    return [value for value, _ in groups], [count for _, count in groups]


def _add_curve(data: Data, name: str, fitted: FittedCurve) -> int:
    curve = fitted.curve
    points = [data.add("CARTESIAN_POINT", text(""), reals(point)) for point in curve.control_mm.tolist()]
    value, multiplicity = _knots_with_multiplicity(curve.knots)
    closed = float(np.abs(curve.control_mm[0] - curve.control_mm[-1]).max()) <= COINCIDE_MM
    return data.add(
        "B_SPLINE_CURVE_WITH_KNOTS",
        text(name),
        str(DEGREE),
        refs(points),
        ".UNSPECIFIED.",
        ".T." if closed else ".F.",
        ".U.",
        integers(multiplicity),
        reals(value),
        ".UNSPECIFIED.",
    )


def _add_attribute(data: Data, name: str, value: str, definition: int, context: int) -> None:
    """Adds a user-defined attribute of the product: a general property of that name with a text as its value."""
    prop = data.add("PROPERTY_DEFINITION", text(name), text("user defined attribute"), ref(definition))
    general = data.add("GENERAL_PROPERTY", text(name), text(name), text("user defined attribute"))
    data.add("GENERAL_PROPERTY_ASSOCIATION", text(""), text(""), ref(general), ref(prop))
    item = data.add("DESCRIPTIVE_REPRESENTATION_ITEM", text(name), text(value))
    holder = data.add("REPRESENTATION", text(name), refs([item]), ref(context))
    data.add("PROPERTY_DEFINITION_REPRESENTATION", ref(prop), ref(holder))


def _fit(branch: PlanBranch) -> FittedCurve:
    if float(np.abs(branch.xyz_mm - branch.xyz_mm[0]).max()) <= COINCIDE_MM:
        raise ExportError(
            "curve-without-length",
            expected="a branch with a length",
            found="all its samples on one point",
            where=f"branch {branch.id}",
            do="Look at the layout near this branch; a branch of no length should not reach the export.",
        )
    return fit_curve(branch.xyz_mm)


def step_fit_error_mm(plan: ChannelPlan) -> float:
    """Returns the largest distance in mm of a sample of `plan` from the curve that stands for its branch."""
    return max((_fit(branch).error_mm for branch in plan.branches), default=0.0)


def step_bytes(plan: ChannelPlan, name: str) -> bytes:
    """Returns centrelines.step: every branch and lead of `plan` as one named cubic B-spline, mm, AP242.

    Args:
        plan: its samples are met within 5e-4 mm, the ends exactly.
        name: of the job; part of the product's name.

    Raises:
        ExportError: there is no branch, or one has no length.
    """
    if not plan.branches:
        raise ExportError(
            "curves-none",
            expected="at least one branch",
            found="none",
            where="centrelines.step",
            do="Build a layout with at least one channel.",
        )
    data = Data()
    context, application = _add_context(data)
    definition = _add_product(data, name, application)
    curves = [_add_curve(data, curve_name(branch), _fit(branch)) for branch in plan.branches]
    curve_set = data.add("GEOMETRIC_CURVE_SET", text("channel centrelines"), refs(curves))
    shape = data.add("PRODUCT_DEFINITION_SHAPE", text(""), text(""), ref(definition))
    representation = data.add(
        "GEOMETRICALLY_BOUNDED_WIREFRAME_SHAPE_REPRESENTATION",
        text("channel centrelines"),
        refs([curve_set]),
        ref(context),
    )
    data.add("SHAPE_DEFINITION_REPRESENTATION", ref(shape), ref(representation))
    for branch in plan.branches:
        _add_attribute(data, branch.id, _bore_text(branch), definition, context)
    return exchange_bytes(HEADER, data)

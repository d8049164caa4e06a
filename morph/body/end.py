"""Finishes from the job: thread depths, the printed pilot, seal lands.

A thread is not printed at drill size: the pilot, with its roof, stays inside the drill less the
drilling stock, and inside the minor circle. A roofed section stands bore / 2 x s / cos b above its centreline
(s the sine between the exit's axis and the build direction, b the roof angle), so

    pilot <= min(drill - 2 stock, D1 - BUILD_MM) / max(1, s / cos b)

The depths and the land are common practice, no source; all can be set in the job. Sizes of a seal
groove are the user's: no standard's table was at hand to check them against.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from morph.body.blank import Blank
from morph.body.cap import TAPER
from morph.body.exit import given_leave
from morph.body.face import FaceRole, PlaneFace
from morph.body.finish import PLAIN, Finish, ThreadHole
from morph.body.room import Limits
from morph.body.section import SectionRule, apex_mm, climb_sine
from morph.body.thread import Thread, make_thread
from morph.core.arrays import Floats
from morph.core.errors import GeometryError, SettingError
from morph.core.tolerance import BUILD_BORE_MM, BUILD_MM
from morph.settings.job import FaceSealEnd, PlainEnd, PortSettings, SectionShape, ServiceSettings, ThreadEnd
from morph.settings.profile import Profile

DEPTH_DIAMETERS, DEPTH_PITCHES = 1.5, 3.0
"""Full thread below the face in major diameters plus pitches (common practice, no source)."""

RUN_OUT_PITCHES = 4.0
"""How much deeper the drill goes than the full thread, in pitches (common practice, no source)."""

LAND_DIAMETERS = 1.6
"""Diameter of the flat seal land in major diameters (common practice, no source)."""


SQUARE_COSINE = float(np.cos(np.radians(0.1)))
"""An end's axis is square to its face within a tenth of a degree."""


def require_ends(ports: Sequence[PortSettings]) -> None:
    """Raises `thread-unknown` or `land-too-small` for the first port whose end cannot be made anywhere."""
    for port in ports:
        if isinstance(port.end, ThreadEnd):
            _land_mm(port, make_thread(port.end.designation, f"[[port]] '{port.name}' thread"))


def _land_mm(port: PortSettings, thread: Thread) -> float:
    end = port.end
    land = LAND_DIAMETERS * thread.major_mm if not isinstance(end, ThreadEnd) or end.land_mm is None else end.land_mm
    if land < thread.major_mm:
        raise SettingError(
            "land-too-small",
            expected=f"a land of at least the thread's major diameter of {thread.major_mm:.3f} mm",
            found=f"{land:.3f} mm",
            where=f"[[port]] '{port.name}' land_mm",
            do=f"Leave it out for {LAND_DIAMETERS * thread.major_mm:.2f} mm, or give the seal's outer diameter.",
        )
    return land


def roof_ratio(leave: Floats, rule: SectionRule) -> float:
    """Returns how far the section of a channel along `leave (3,)` reaches above its centreline, over its radius.

    The auto section counts with its full roof, which is never less than it gets.

    >>> round(roof_ratio(np.array([1.0, 0.0, 0.0]), SectionRule(SectionShape.ROOFED, 45.0)), 6)
    1.414214
    """
    full = replace(rule, shape=SectionShape.ROOFED) if rule.shape is SectionShape.AUTO else rule
    return float(apex_mm(np.array([2.0]), np.asarray(leave)[None, :], full)[0])


def pilot_mm(hole: ThreadHole, leave: Floats, rule: SectionRule, profile: Profile) -> float:
    """Returns the bore to print for a thread along `leave (3,)`, the largest whose section stays inside.

    A round section that lies too flat to print without a roof is held to the profile's largest bore.
    """
    thread = hole.thread
    circle = min(thread.drill_mm - 2.0 * hole.drill_stock_mm, thread.minor_mm - BUILD_MM)
    pilot = circle / roof_ratio(leave, rule)
    lies = float(climb_sine(np.asarray(leave)[None, :], rule)[0]) > rule.roof_cosine
    return min(pilot, profile.largest_bore_mm.value) if rule.shape is SectionShape.ROUND and lies else pilot


def make_finish(
    port: PortSettings, leave: Floats, rule: SectionRule, service: ServiceSettings, profile: Profile
) -> Finish:
    """Returns how the exit of `port` is finished when it leaves along `leave (3,)`.

    Raises:
        SettingError: `thread-unknown`, `land-too-small`; `thread-too-small` when the pilot would not print.
    """
    if isinstance(port.end, FaceSealEnd):
        seal = port.end
        return Finish(seal, 0.0, seal.groove_outer_mm, seal.groove_depth_mm, seal.land_mm)
    if not isinstance(port.end, ThreadEnd):
        return PLAIN
    hole = _thread_hole(port.end, make_thread(port.end.designation, f"[[port]] '{port.name}' thread"))
    pilot = pilot_mm(hole, leave, rule, profile)
    least = max(service.smallest_bore_mm, profile.smallest_bore_mm.value) + profile.bore_band_mm.value + BUILD_BORE_MM
    if pilot < least:
        raise SettingError(
            "thread-too-small",
            expected=f"a pilot of at least {least:.3f} mm (smallest bore of service and process with its band)",
            found=f"{pilot:.3f} mm inside {hole.thread.designation} (drill {hole.thread.drill_mm:g} mm, stock "
            f"{hole.drill_stock_mm:g} mm per side, roof factor {roof_ratio(leave, rule):.3f})",
            where=f"[[port]] '{port.name}' thread",
            do="Choose a larger thread, less drill_stock_mm, or an exit along the build direction.",
        )
    land = _land_mm(port, hole.thread)
    level = np.cross(rule.up, np.eye(3)[int(np.abs(rule.up).argmin())])
    reach = 0.5 * pilot * roof_ratio(level / np.linalg.norm(level), rule)
    return Finish(hole, pilot, hole.thread.major_mm, hole.drill_depth_mm, land, reach)


def _thread_hole(end: ThreadEnd, thread: Thread) -> ThreadHole:
    depth = DEPTH_DIAMETERS * thread.major_mm + DEPTH_PITCHES * thread.pitch_mm
    run_out = RUN_OUT_PITCHES * thread.pitch_mm
    return ThreadHole(
        thread,
        depth if end.thread_depth_mm is None else end.thread_depth_mm,
        run_out if end.run_out_mm is None else end.run_out_mm,
        end.drill_stock_mm,
    )


def require_groove_clear(port: PortSettings, bore_mm: float, limits: Limits) -> None:
    """Raises `groove-too-near-bore` when too little metal is left between a bore of `bore_mm` and its seal groove."""
    if not isinstance(port.end, FaceSealEnd):
        return
    wall = 0.5 * (port.end.groove_inner_mm - bore_mm)
    if wall < limits.process_mm + limits.band_mm:
        raise GeometryError(
            "groove-too-near-bore",
            expected=f"at least {limits.process_mm + limits.band_mm:.3f} mm between channel and groove (thinnest wall "
            "that prints, bands included)",
            found=f"{wall:.3f} mm (groove_inner_mm {port.end.groove_inner_mm:g} mm, bore {bore_mm:.3f} mm)",
            where=f"[[port]] '{port.name}' groove_inner_mm",
            do=f"Give groove_inner_mm of at least {bore_mm + 2.0 * (limits.process_mm + limits.band_mm):.2f} mm.",
        )


def straight_run_mm(finish: Finish, bore_mm: float) -> float:
    """Returns the straight run that `finish` needs behind the exit of a lead of `bore_mm`."""
    return finish.straight_mm(bore_mm, TAPER)


def list_finishes(
    port: PortSettings, blank: Blank, rule: SectionRule, service: ServiceSettings, profile: Profile
) -> tuple[tuple[str, Finish], ...]:
    """Returns the flat port faces where the end of `port` can be made, by name, each with its finish.

    A plain end fits every face and lists none.

    Args:
        port: the port.
        blank: its port faces.
        rule: how the pilot is shaped.
        service: smallest bore.
        profile: smallest and largest bore.

    Raises:
        GeometryError: `land-not-flat` when no port face is flat, `end-not-square` when `leave` is square to none.
        SettingError: `thread-unknown`, `land-too-small`, `thread-too-small`.
    """
    if isinstance(port.end, PlainEnd):
        return ()
    flat = [face for face in blank.faces if face.role is FaceRole.PORT and isinstance(face, PlaneFace)]
    where = f"[[port]] '{port.name}' end"
    if not flat:
        raise GeometryError(
            "land-not-flat",
            expected="a flat port face for the land of the seal",
            found="only round faces: " + ", ".join(face.name for face in blank.faces if face.role is FaceRole.PORT),
            where=where,
            do='Name a flat face in [blank] port_faces, or use end = "plain".',
        )
    leave = given_leave(port)
    square = [face for face in flat if leave is None or float(face.normal @ leave) > SQUARE_COSINE]
    if not square:
        raise GeometryError(
            "end-not-square",
            expected="leave square to a flat port face, because the land lies square to the axis",
            found=f"leave = {list(port.leave or ())}, faces " + ", ".join(face.name for face in flat),
            where=where,
            do="Leave it out, or give the normal of the face.",
        )
    found: list[tuple[str, Finish]] = []
    refused: SettingError | None = None
    for face in square:
        try:
            found.append((face.name, make_finish(port, face.normal, rule, service, profile)))
        except SettingError as error:
            refused = error
    if refused is not None and not found:
        raise refused
    return tuple(found)

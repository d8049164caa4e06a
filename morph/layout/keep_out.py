"""Keep-outs: discs and polygons on the sheet that every channel must stay clear of.

The metal between a keep-out and a channel's wall is measured on the sheet, from the centreline's samples less half
the bore; where the carrier shrinks the sheet, the metal shrinks with it (holes in the part are `[[hole]]`).
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from morph.core.arrays import Floats
from morph.core.errors import SettingError
from morph.core.verdict import Outcome, Verdict
from morph.settings.job import KeepOutSettings, PortSettings

Line = tuple[str, Floats, Floats]
"""A branch: its id, its samples (k, 2) on the sheet in mm, its bore (k,) in mm."""

N_CORNERS = 96
SOURCE = "[[keep_out]] clearance_mm of the job"


def outline_mm(keep_out: KeepOutSettings, away_mm: float = 0.0) -> Floats:
    """Returns the closed outline (k, 2) of a keep-out, or of everything within `away_mm` of it, for drawing."""
    from shapely import Polygon

    if keep_out.polygon_mm is None:
        assert keep_out.at_mm is not None and keep_out.diameter_mm is not None
        turn = np.linspace(0.0, 2.0 * np.pi, N_CORNERS + 1)
        radius_mm = 0.5 * keep_out.diameter_mm + away_mm
        return np.asarray(keep_out.at_mm) + radius_mm * np.column_stack([np.cos(turn), np.sin(turn)])
    return np.asarray(Polygon(keep_out.polygon_mm).buffer(away_mm).exterior.coords, dtype=np.float64)


def measure_away_mm(keep_out: KeepOutSettings, place_mm: Floats, turn_mm: float | None = None) -> Floats:
    """Returns the distance (k,) of places (k, 2) from a keep-out, negative inside, by the shorter way around."""
    place = np.asarray(place_mm, dtype=np.float64).reshape(-1, 2)
    if turn_mm is not None:
        place = np.column_stack([place[:, 0] % turn_mm, place[:, 1]])
        turns = [place + np.array([turn * turn_mm, 0.0]) for turn in (-1.0, 0.0, 1.0)]
        return np.asarray(np.min([measure_away_mm(keep_out, moved) for moved in turns], axis=0))
    if keep_out.polygon_mm is None:
        assert keep_out.at_mm is not None and keep_out.diameter_mm is not None
        return np.asarray(np.hypot(*(place - keep_out.at_mm).T) - 0.5 * keep_out.diameter_mm)
    import shapely

    polygon, points = shapely.Polygon(keep_out.polygon_mm), shapely.points(place)
    away = shapely.distance(points, polygon.exterior)
    return np.asarray(np.where(shapely.contains(polygon, points), -away, away), dtype=np.float64)


def require_keep_outs(
    keep_outs: tuple[KeepOutSettings, ...],
    ports: tuple[PortSettings, ...],
    size_mm: tuple[float, float],
    turn_mm: float | None = None,
) -> None:
    """Raises unless every keep-out touches the sheet and leaves every port free.

    Args:
        keep_outs: the job's [[keep_out]] tables.
        ports: declared ports.
        size_mm: of the sheet.
        turn_mm: width after which the sheet repeats, None on an open sheet.

    Raises:
        SettingError: `keep-out-outside` or `keep-out-over-port`.
    """
    for keep_out in keep_outs:
        low, high = outline_mm(keep_out).min(axis=0), outline_mm(keep_out).max(axis=0)
        if (high < 0.0).any() or (low > np.asarray(size_mm)).any():
            raise SettingError(
                "keep-out-outside",
                expected=f"a keep-out on the sheet, {size_mm[0]:g} x {size_mm[1]:g} mm",
                found=f"x {low[0]:g} to {high[0]:g} mm, y {low[1]:g} to {high[1]:g} mm",
                where=f'[[keep_out]] "{keep_out.name}"',
                do="The sheet's origin is its lower left corner, x to the right, y up.",
            )
        for port in ports:
            away_mm = float(measure_away_mm(keep_out, np.array([port.at_mm]), turn_mm)[0])
            if away_mm <= keep_out.clearance_mm:
                raise SettingError(
                    "keep-out-over-port",
                    expected=f"every port more than the clearance of {keep_out.clearance_mm:g} mm away",
                    found=f'port "{port.name}" at [{port.at_mm[0]:g}, {port.at_mm[1]:g}] mm, '
                    + (f"{-away_mm:.2f} mm inside" if away_mm < -5e-3 else f"{abs(away_mm):.2f} mm away"),
                    where=f'[[keep_out]] "{keep_out.name}"',
                    do="Move the keep-out or the port.",
                )


def check_keep_outs(
    keep_outs: tuple[KeepOutSettings, ...], lines: Iterable[Line], turn_mm: float | None = None
) -> tuple[Verdict, ...]:
    """Returns one verdict per keep-out: the least metal between it and a channel's wall, where, and of which branch.

    Args:
        keep_outs: the job's [[keep_out]] tables.
        lines: the branches on the sheet with their final bores.
        turn_mm: width after which the sheet repeats, None on an open sheet.
    """
    lines = list(lines)
    return tuple(_verdict(keep_out, lines, turn_mm) for keep_out in keep_outs)


def _verdict(keep_out: KeepOutSettings, lines: list[Line], turn_mm: float | None) -> Verdict:
    found: list[tuple[float, str, tuple[float, float]]] = []
    for branch, sheet_mm, bore_mm in lines:
        walls_mm = measure_away_mm(keep_out, sheet_mm, turn_mm) - 0.5 * np.asarray(bore_mm)
        index = int(np.argmin(walls_mm))
        found.append((float(walls_mm[index]), branch, (float(sheet_mm[index, 0]), float(sheet_mm[index, 1]))))
    found.sort(key=lambda item: item[0])
    wall_mm, name, place = found[0]
    ok = wall_mm >= keep_out.clearance_mm
    close = tuple(branch for wall, branch, _ in found if wall < keep_out.clearance_mm)
    at = f"at [{place[0]:.1f}, {place[1]:.1f}] mm"
    said = f"{wall_mm:.2f} mm of metal to branch {name} {at}" if wall_mm > 0 else f"branch {name} runs into it {at}"
    return Verdict(
        code="keep-out",
        outcome=Outcome.PASS if ok else Outcome.FAIL,
        text=f"Keep-out {keep_out.name}: {said}; {keep_out.clearance_mm:g} mm asked for.",
        value=wall_mm,
        unit="mm",
        limit=keep_out.clearance_mm,
        source=SOURCE,
        branch_ids=close or (name,),
        sheet_mm=place,
        hint="" if ok else "Give the optimiser this keep-out, move it, or trim the branch.",
    )

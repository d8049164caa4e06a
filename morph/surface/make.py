"""The carrier of a job, whatever its kind."""

from __future__ import annotations

from morph.settings.job import CarrierSettings, ConeSettings, Seam, SeenFrom
from morph.surface.cone import ConeCarrier, make_cone
from morph.surface.cylinder import CylinderCarrier, make_cylinder

RoundCarrier = CylinderCarrier | ConeCarrier
"""A carrier about the z axis."""


def make_carrier(
    settings: CarrierSettings | ConeSettings,
    size_mm: tuple[float, float],
    seen_from: SeenFrom,
    depth_mm: float,
    seam: Seam = Seam.OPEN,
) -> RoundCarrier:
    """Returns the carrier of a job.

    Args:
        settings: the [carrier] table.
        size_mm: width and height of the sheet.
        seen_from: from which side the drawing reads.
        depth_mm: depth of the centrelines below the face.
        seam: joined: the sheet goes all the way round.

    Raises:
        SettingError: `carrier-not-positive` when radius, depth or sheet size is not a positive number;
            `seam-needs-polar` when a flat cone map is to close.
        GeometryError: `sheet-past-apex`, `depth-past-axis`, `sheet-wraps-past-itself` or `seam-width` when the
            sheet does not fit on the surface.
    """
    if isinstance(settings, ConeSettings):
        return make_cone(settings, size_mm, seen_from, depth_mm, seam)
    return make_cylinder(settings, size_mm, seen_from, depth_mm, seam)

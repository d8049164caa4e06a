"""Bores that fit: from the bores wanted down to what faces, holes and neighbours leave.

A bore is only ever lowered, never below the least bore, and stays smooth along its branch (its
change per mm is bounded). Two channels too near to each other give up bore in proportion to what
each has above the least; where even the least bores leave too thin a wall the pair is a Merge. A
part face that leaves no room for the least bore is an error: the channel would thin or open it.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from morph.body.blank import Blank
from morph.body.face import FaceRole
from morph.body.island import Island, island_samples, list_islands
from morph.body.neighbour import Network, Pairs, close_pairs, count_as_wall, keep_apart_mm, ribs
from morph.body.plan import Cap, Merge, PlanBranch
from morph.body.room import Limits, Room, face_wall_mm, room_to_face_mm
from morph.core.arrays import Floats
from morph.core.errors import GeometryError
from morph.core.tolerance import BUILD_MM
from morph.core.verdict import Notice
from morph.core.words import counted

TAPER = 0.5
"""Greatest change of bore per mm of branch: a wall angle of 14 degrees, which prints and flows as smoothly as
the bends (common practice, no source)."""

BORE_SLACK_MM = 1e-9
"""Bores that differ by less are equal."""

ROUNDS = 12
"""Rounds of thinning; each only lowers bores, and one settles a pair unless the pairs that count change."""


def lower_to_taper(bore_mm: Floats, arc_mm: Floats, taper: float = TAPER) -> Floats:
    """Returns the largest bores (k,) not above `bore_mm` whose change per mm of `arc_mm (k,)` is at most `taper`.

    >>> lower_to_taper(np.array([8.0, 3.0, 8.0]), np.array([0.0, 2.0, 4.0])).tolist()
    [4.0, 3.0, 4.0]
    """
    rise = taper * arc_mm
    forth = np.minimum.accumulate(bore_mm - rise) + rise
    back = np.minimum.accumulate((bore_mm + rise)[::-1])[::-1] - rise
    # The subtraction and addition of the rise may lose the last digit; nothing lies below the least bore.
    envelope = np.minimum(bore_mm, np.minimum(forth, back))
    return np.asarray(np.maximum(envelope, bore_mm.min(initial=np.inf)), dtype=np.float64)


def taper_network(network: Network, bore_mm: Floats) -> Floats:
    """Returns the bores (n,) of a network lowered to the taper, strand by strand."""
    result = bore_mm.copy()
    for low, high in zip(network.first[:-1], network.first[1:], strict=True):
        result[low:high] = lower_to_taper(bore_mm[low:high], network.arc_mm[low:high])
    return result


def fit_bores(network: Network, room: Room, limits: Limits) -> Network:
    """Returns the network with bores that fit.

    Args:
        network: strands with the bores wanted.
        room: what faces and holes leave at each sample (n,).
        limits: walls, bands, least bore.
    """
    wall = limits.between_mm + limits.band_mm
    bore = np.maximum(np.minimum(network.bore_mm, room.room_mm), limits.least_bore_mm)
    network = _keep_islands(network.with_bores(taper_network(network, bore)), limits)
    near = close_pairs(network, wall + 1.0)
    for _ in range(ROUNDS):
        lowered = _share_out(network, *_to_keep(network, near, limits), limits.least_bore_mm)
        if (network.bore_mm - lowered).max(initial=0.0) <= BORE_SLACK_MM:
            break
        network = network.with_bores(taper_network(network, lowered))
    return network


def _to_keep(network: Network, near: Pairs, limits: Limits) -> tuple[Pairs, Floats]:
    """Returns the pairs of `near` that are walls or ribs, and the metal (p,) each must keep, bands included."""
    wall = limits.between_mm + limits.band_mm
    counted = count_as_wall(network, near, wall)
    kept = counted | ribs(network, near, counted)
    return near.only(kept), np.where(counted[kept], wall, limits.process_mm + limits.band_mm)


def thin_islands(network: Network, wall_mm: float) -> list[Island]:
    """Returns the islands of small loops whose widest place is thinner than a wall between channels.

    Args:
        network: strands with their bores.
        wall_mm: the wall to keep, bands included.
    """
    return [island for island in list_islands(network, wall_mm) if island.width_mm < wall_mm - BORE_SLACK_MM]


def _keep_islands(network: Network, limits: Limits) -> Network:
    """Returns the network with the bores around thin islands lowered by what the island lacks."""
    wall = limits.between_mm + limits.band_mm
    for _ in range(ROUNDS):
        bore = network.bore_mm.copy()
        for island in thin_islands(network, wall):
            around = island_samples(network, island)
            lowered = np.maximum(network.bore_mm[around] - (wall - island.width_mm), limits.least_bore_mm)
            bore[around] = np.minimum(bore[around], lowered)
        if (network.bore_mm - bore).max(initial=0.0) <= BORE_SLACK_MM:
            break
        network = network.with_bores(taper_network(network, bore))
    return network


def _share_out(network: Network, pairs: Pairs, wall_mm: Floats, least_mm: float) -> Floats:
    """Returns the bores (n,) after every pair gives up what it lacks, in proportion to bore above the least."""
    excess = 2.0 * (keep_apart_mm(network, pairs, wall_mm) - pairs.distance_mm)
    short = excess > BORE_SLACK_MM
    i, j, excess = pairs.i[short], pairs.j[short], excess[short]
    spare_i, spare_j = network.bore_mm[i] - least_mm, network.bore_mm[j] - least_mm
    share = np.minimum(excess / np.maximum(spare_i + spare_j, 1e-12), 1.0)
    bore = network.bore_mm.copy()
    np.minimum.at(bore, i, network.bore_mm[i] - share * spare_i)
    np.minimum.at(bore, j, network.bore_mm[j] - share * spare_j)
    return np.maximum(bore, np.minimum(network.bore_mm, least_mm))


def find_merges(network: Network, limits: Limits) -> tuple[Merge, ...]:
    """Returns each pair of branches nearer than their wall and its band, at its worst place, thinnest wall first.

    A rib that does not print counts too. A small loop whose island is thinner than a wall is named by two
    of the branches around it.

    Args:
        network: strands with final bores.
        limits: walls and bands.
    """
    pairs, keep = _to_keep(network, close_pairs(network, limits.between_mm + limits.band_mm), limits)
    left = pairs.distance_mm - keep_apart_mm(network, pairs, 0.0)
    # BUILD_MM is planned on top for the written mesh; a wall that holds without it holds.
    lack = left < keep - BUILD_MM - 1e-6
    worst: dict[tuple[int, int], int] = {}
    for p in map(int, np.flatnonzero(lack)):
        a, b = network.owner[pairs.i[p]], network.owner[pairs.j[p]]
        key = (int(min(a, b)), int(max(a, b)))
        if key not in worst or left[p] < left[worst[key]]:
            worst[key] = p
    found = []
    for (one, two), p in worst.items():
        x, y, z = (float(v) for v in 0.5 * (network.xyz_mm[pairs.i[p]] + network.xyz_mm[pairs.j[p]]))
        found.append(Merge((network.strands[one].id, network.strands[two].id), (x, y, z), float(left[p])))
    named = {frozenset(merge.branch_ids) for merge in found}
    for island in thin_islands(network, limits.between_mm + limits.band_mm - BUILD_MM - 1e-6):
        ids = (network.strands[island.strands[0]].id, network.strands[island.strands[-1]].id)
        if frozenset(ids) not in named:
            x, y, z = (float(value) for value in island.centre_mm)
            found.append(Merge(ids, (x, y, z), island.width_mm))
    return tuple(sorted(found, key=lambda merge: (merge.wall_mm, merge.branch_ids)))


def require_least_bore_fits(blank: Blank, network: Network, limits: Limits) -> None:
    """Raises unless the least bore keeps its wall to every part face and stays inside every other face.

    Raises:
        GeometryError: `no-room-for-smallest-bore` with branch, place, wall left and wall needed.
    """
    least = np.full(len(network.owner), limits.least_bore_mm)
    for face in blank.faces:
        wall = face.distance_mm(network.xyz_mm) - 0.5 * least - limits.band_mm
        part = face.role is FaceRole.PART
        needed = face_wall_mm(face, least, limits) if part else np.zeros_like(least)
        lack = needed - wall
        # Closed-form rooms and walls agree to rounding only.
        if part:
            lack = np.where(room_to_face_mm(face, network.xyz_mm, limits) >= least - BORE_SLACK_MM, -1.0, lack)
        worst = int(np.argmax(lack))
        if lack[worst] > 0.0:
            x, y, z = network.xyz_mm[worst]
            raise GeometryError(
                "no-room-for-smallest-bore",
                expected=(
                    f"a wall of at least {needed[worst]:.3f} mm to face '{face.name}' for the least bore of "
                    f"{limits.least_bore_mm:.3f} mm"
                    if part
                    else f"the least bore of {limits.least_bore_mm:.3f} mm to stay inside face '{face.name}'"
                ),
                found=f"{_wall_words(float(wall[worst]))} after a band of {limits.band_mm:.3f} mm, at "
                f"{int((lack > 0.0).sum())} of {len(lack)} places",
                where=f"branch {network.strands[network.owner[worst]].id} at ({x:.2f}, {y:.2f}, {z:.2f}) mm",
                do=f"Move the channels {lack[worst]:.3f} mm further from '{face.name}' (depth, margin or blank size), "
                "or allow a smaller bore or wall.",
            )


def _wall_words(wall_mm: float) -> str:
    return f"a wall of {wall_mm:.3f} mm" if wall_mm >= 0.0 else f"a channel that stands out by {-wall_mm:.3f} mm"


def list_caps(branches: Sequence[PlanBranch]) -> tuple[Cap, ...]:
    """Returns how much of each branch was capped, worst plan area first, with what limited it most."""
    found = []
    for branch in branches:
        if not branch.capped.any():
            continue
        step = np.linalg.norm(np.diff(branch.xyz_mm, axis=0), axis=1)
        weight = 0.5 * (np.concatenate([[0.0], step]) + np.concatenate([step, [0.0]]))
        lost = weight * np.where(branch.capped, branch.wanted_mm - branch.bore_mm, 0.0)
        binding = branch.capped & (branch.room_mm < branch.wanted_mm)
        by = sorted({branch.room_by[i] for i in np.flatnonzero(binding if binding.any() else branch.capped)})
        area = {name: sum(float(lost[i]) for i in range(len(lost)) if branch.room_by[i] == name) for name in by}
        worst = max(by, key=lambda name: area[name])
        found.append(Cap(branch.id, float(weight[branch.capped].sum()), float(lost.sum()), worst))
    return tuple(sorted(found, key=lambda cap: (-round(cap.area_mm2, 6), cap.branch)))


def clamp_notices(
    ids: Sequence[str], raw_mm: Sequence[Floats], arcs_mm: Sequence[Floats], allowed_mm: tuple[float, float]
) -> tuple[Notice, ...]:
    """Returns one `bore-clamped` notice for the branches raised and one for those lowered to the allowed range.

    Args:
        ids: branch ids.
        raw_mm: scaled layout bores (k,) of each.
        arcs_mm: arc lengths (k,) of each.
        allowed_mm: least and greatest bore.
    """
    notices = []
    for verb, limit, sign in (("raised", allowed_mm[0], 1.0), ("lowered", allowed_mm[1], -1.0)):
        by_branch = []
        for name, raw, arc in zip(ids, raw_mm, arcs_mm, strict=True):
            out = sign * (limit - raw)
            if out.max() > BORE_SLACK_MM:
                length = float(((out > BORE_SLACK_MM) * np.gradient(arc)).sum())
                by_branch.append((name, float(raw[int(out.argmax())]), length))
        if by_branch:
            name, raw_worst, _ = max(by_branch, key=lambda row: sign * (limit - row[1]))
            total = sum(row[2] for row in by_branch)
            text = (
                f"{counted(len(by_branch), 'branch', 'branches')} {verb} to the allowed bore of {limit:.3f} mm over "
                f"{total:.1f} mm in all; "
                f"the furthest is {name}, {raw_worst:.3f} mm in the layout."
            )
            notices.append(Notice("bore-clamped", text, tuple(row[0] for row in by_branch)))
    return tuple(notices)

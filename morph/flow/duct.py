"""Laminar flow and heat transfer in a straight duct of any star-shaped section, by finite elements.

The section is meshed by rings that shrink its outline towards a centre: nine-node quadrilaterals (biquadratic in
place and in value), those of the innermost ring collapsed to the centre. On it three problems are solved with zero
at the wall: the axial velocity w of fully developed laminar flow, -lap w = 1; the temperature at uniform heat per
length with a uniform wall temperature around the section (H1), -lap T = w; and the slowest decaying temperature
at a wall temperature that is the same everywhere (T), -lap T = L w T. Then, with hydraulic diameter D, perimeter P,
area A and Q = int w:

    f Re = 2 D^2 A / Q        Nu_H1 = Q^2 D / (P int w T)        Nu_T = L Q D / P

f is the Darcy factor (R. K. Shah, A. L. London, Laminar Flow Forced Convection in Ducts, 1978, chapter III).
Integrals of the discrete solution converge with the fourth power of the element size where the outline has no
corner that points inwards.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from morph.core.arrays import Floats, Ints

RING_GRADING = 1.6
"""Rings crowd towards the wall: the radius of ring x in 0..1 is 1 - (1 - x) ^ this."""

MOST_ITERATIONS = 60
"""Rounds of inverse iteration for the slowest temperature; each gains a factor of four or more."""


@dataclass(frozen=True, slots=True)
class DuctFlow:
    """Laminar factors of a section; lengths in the unit of the outline.

    Args:
        area, perimeter, hydraulic_diameter: of the section as meshed.
        friction_re: Darcy friction factor times Reynolds number, on the hydraulic diameter.
        nusselt_h1: Nusselt number at uniform heat per length, wall temperature uniform around the section.
        nusselt_t: Nusselt number at uniform wall temperature.
    """

    area: float
    perimeter: float
    hydraulic_diameter: float
    friction_re: float
    nusselt_h1: float
    nusselt_t: float


def _shape_1d(x: Floats) -> tuple[Floats, Floats]:
    """Returns values and slopes (3, k) of the quadratics on nodes -1, 0, 1 at places x (k,)."""
    value = np.stack([0.5 * x * (x - 1.0), 1.0 - x * x, 0.5 * x * (x + 1.0)])
    return value, np.stack([x - 0.5, -2.0 * x, x + 0.5])


def _mesh(outline: Floats, centre: Floats, n_rings: int) -> tuple[Floats, Ints, int]:
    """Returns the places (n, 2) of the nodes, the nodes (m, 9) of the elements, and how many nodes are free.

    Node 0 is the centre; ring after ring follows, the wall last.
    """
    n_around = len(outline)
    share = np.arange(1, 2 * n_rings + 1) / (2.0 * n_rings)
    radius = 1.0 - (1.0 - share) ** RING_GRADING
    radius[::2] = 0.5 * (np.concatenate([[0.0], radius[1:-1:2]]) + radius[1::2])
    nodes = np.concatenate([centre[None], (centre + radius[:, None, None] * (outline - centre)).reshape(-1, 2)])
    ring, step = np.meshgrid(2 * np.arange(n_rings), 2 * np.arange(n_around // 2), indexing="ij")
    columns = []
    for i in range(3):
        for j in range(3):
            at = ring + i
            number = 1 + (at - 1) * n_around + (step + j) % n_around
            columns.append(np.where(at == 0, 0, number).ravel())
    return nodes, np.stack(columns, axis=1), len(nodes) - n_around


def _weights() -> tuple[Floats, Floats, Floats]:
    """Returns shape values (9, q), slopes (2, 9, q) and weights (q,) at the 3 x 3 Gauss points."""
    x, w = np.polynomial.legendre.leggauss(3)
    value, slope = _shape_1d(x)
    first, second = np.repeat(np.arange(3), 3), np.tile(np.arange(3), 3)
    flat = np.einsum("ip,jq->ijpq", value, value).reshape(9, 9)
    along = np.einsum("ip,jq->ijpq", slope, value).reshape(9, 9)
    across = np.einsum("ip,jq->ijpq", value, slope).reshape(9, 9)
    return flat, np.stack([along, across]), w[first] * w[second]


def _assemble(nodes: Floats, elements: Ints) -> tuple[Any, Floats, Floats, float]:
    """Returns the stiffness (n, n), the shape values (9, q), the weight (m, q) of each Gauss point, and the area."""
    from scipy.sparse import coo_array

    value, slope, weight = _weights()
    corner = nodes[elements]  # (m, 9, 2)
    jacobian = np.einsum("dkq,mkc->mqdc", slope, corner)
    size = np.linalg.det(jacobian)
    gradient = np.einsum("mqcd,dkq->mqck", np.linalg.inv(jacobian), slope)
    measure = np.abs(size) * weight
    local = np.einsum("mq,mqck,mqcl->mkl", measure, gradient, gradient)
    n = len(nodes)
    rows, columns = np.repeat(elements, 9, axis=1).ravel(), np.tile(elements, 9).ravel()
    stiffness = coo_array((local.ravel(), (rows, columns)), shape=(n, n)).tocsc()
    return stiffness, value, measure, float(measure.sum())


def _perimeter(outline: Floats) -> float:
    """Returns the length of the closed outline of quadratic arcs."""
    x, w = np.polynomial.legendre.leggauss(4)
    _, slope = _shape_1d(x)
    arcs = np.stack([outline[0::2], outline[1::2], np.roll(outline[0::2], -1, axis=0)])
    return float((np.linalg.norm(np.einsum("kq,kmc->mqc", slope, arcs), axis=-1) * w).sum())


def solve_duct(outline: Floats, centre: Floats, n_rings: int = 12) -> DuctFlow:
    """Returns the laminar factors of a section.

    Args:
        outline: (2 n, 2) points around it, counter-clockwise: even ones are corners of elements (every corner of
            the section among them), odd ones lie between on the wall.
        centre: (2,) a point that sees the whole outline.
        n_rings: rings of elements between centre and wall.

    Raises:
        ValueError: the outline has an odd number of points, or does not go around the centre counter-clockwise.

    >>> import numpy as np
    >>> a = 2.0 * np.pi * np.arange(48) / 48
    >>> circle = solve_duct(np.stack([np.cos(a), np.sin(a)], axis=1), np.zeros(2))
    >>> round(circle.friction_re, 2), round(circle.nusselt_h1, 3), round(circle.nusselt_t, 3)
    (64.0, 4.364, 3.657)
    """
    from scipy.sparse.linalg import splu

    outline, centre = np.asarray(outline, dtype=np.float64), np.asarray(centre, dtype=np.float64)
    arm, following = outline - centre, np.roll(outline, -1, axis=0) - centre
    if len(outline) % 2 or len(outline) < 6 or (arm[:, 0] * following[:, 1] <= arm[:, 1] * following[:, 0]).any():
        raise ValueError("outline: expected an even number of points, counter-clockwise as seen from the centre")
    nodes, elements, n_free = _mesh(outline, centre, n_rings)
    stiffness, value, measure, area = _assemble(nodes, elements)
    solved = splu(stiffness[:n_free, :n_free].tocsc())

    def response(source: Floats) -> tuple[Floats, Floats]:
        """Returns the solution (n,) for a source (m, q), and its values at the Gauss points."""
        load = np.bincount(elements.ravel(), ((measure * source) @ value.T).ravel(), minlength=len(nodes))
        field = np.zeros(len(nodes))
        field[:n_free] = solved.solve(load[:n_free])
        return field, field[elements] @ value

    _, velocity = response(np.ones_like(measure))
    _, warm = response(velocity)
    flow = float((measure * velocity).sum())
    mixed = float((measure * velocity * warm).sum())
    slow, decay = warm / np.abs(warm).max(), 0.0
    for _ in range(MOST_ITERATIONS):
        _, following = response(velocity * slow)
        before, decay = (
            decay,
            float((measure * velocity * slow**2).sum() / (measure * velocity * slow * following).sum()),
        )
        slow = following / np.abs(following).max()
        if abs(decay - before) < 1e-10 * decay:
            break
    perimeter = _perimeter(outline)
    diameter = 4.0 * area / perimeter
    return DuctFlow(
        area=area,
        perimeter=perimeter,
        hydraulic_diameter=diameter,
        friction_re=2.0 * diameter**2 * area / flow,
        nusselt_h1=flow**2 * diameter / (perimeter * mixed),
        nusselt_t=decay * flow * diameter / perimeter,
    )

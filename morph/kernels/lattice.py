"""Slow viscous flow on a sparse lattice: stream and collide, moments, and flow across cuts.

Nineteen populations per cell (D3Q19), stored as their deviation from rest, collided with two relaxation times and
without the quadratic term, so that what they settle to is Stokes flow (I. Ginzburg, F. Verhaeghe, D. d'Humieres,
"Two-relaxation-time lattice Boltzmann scheme", Communications in Computational Physics 3, 2008, 427-478).

`state (19 n + links,)` holds the populations F after collision, 19 to a cell, then one value per link: the population
that comes back over a link that leaves the fluid. `source (n, 18)` is the place in `state` each population arrives from,
so that the loop over cells has no branch (8 times as fast as asking at each population whether it meets a wall). For
population q of a cell and its opposite q', which went out along the link, `link_place (links, 3)` holds the places of
F(q'), of F(q') one cell behind, and of F(q); `link_factor (links, 3)` s, a and b in

    arriving = s F(q') + a (F(q') behind - F(q)) + b

    a wall at the fraction d of the link: s = 1, a = (1 - 2 d) / (1 + 2 d), b = 0 (central linear interpolation, same
    paper); an opening at pressure p: s = -1, a = 0, b = 6 w p.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from morph.core.arrays import Floats, Ints

DIRECTIONS = np.array(
    [
        [0, 0, 0], [1, 0, 0], [-1, 0, 0], [0, 1, 0], [0, -1, 0], [0, 0, 1], [0, 0, -1],
        [1, 1, 0], [-1, -1, 0], [1, -1, 0], [-1, 1, 0], [1, 0, 1], [-1, 0, -1],
        [1, 0, -1], [-1, 0, 1], [0, 1, 1], [0, -1, -1], [0, 1, -1], [0, -1, 1],
    ],
    np.int64,
)  # fmt: skip
"""(19, 3) velocities c; 2 k - 1 and 2 k are opposite."""

Singles = NDArray[np.float32]
Indices = NDArray[np.int32]

W0, W1, W2 = np.float32(1.0 / 3.0), np.float32(1.0 / 18.0), np.float32(1.0 / 36.0)
D1, D2 = np.float32(1.0 / 6.0), np.float32(1.0 / 12.0)
HALF = np.float32(0.5)


@njit(cache=True, nogil=True, error_model="numpy")
def _relaxed(
    one: np.float32, other: np.float32, rest: np.float32, drift: np.float32, even: np.float32, odd: np.float32
) -> tuple[np.float32, np.float32]:
    """Returns a pair of opposite populations after collision; rest and drift are their even and odd equilibrium."""
    change_even = even * (HALF * (one + other) - rest)
    change_odd = odd * (HALF * (one - other) - drift)
    return one - change_even - change_odd, other - change_even + change_odd


@njit(cache=True, nogil=True, error_model="numpy")
def return_links(
    first: int, last: int, state: Singles, n_cells: int, link_place: Indices, link_factor: Singles
) -> None:
    """Fills what comes back over links first..last - 1 into the end of `state`; once between two steps.

    Interpolated walls give back a little more or less than went out. The rest population of the cell takes the
    difference, so that no wall feeds or drains the flow.
    """
    for k in range(first, last):
        out = state[link_place[k, 0]]
        slope = state[link_place[k, 1]] - state[link_place[k, 2]]
        back = link_factor[k, 0] * out + link_factor[k, 1] * slope + link_factor[k, 2]
        state[19 * n_cells + k] = back
        if link_factor[k, 0] > 0.0:
            state[19 * (link_place[k, 0] // 19)] -= back - out


@njit(cache=True, nogil=True, error_model="numpy")
def lattice_step(
    first: int, last: int, state: Singles, following: Singles, source: Indices, even: np.float32, odd: np.float32
) -> None:
    """Streams and collides cells first..last - 1.

    Args:
        first: first cell.
        last: one past the last cell.
        state: (19 n + links,) populations after the last collision, links returned.
        following: as `state`; filled for these cells.
        source: (n, 18) place in `state` of each arriving population.
        even: relaxation rate of the even part (sets the viscosity).
        odd: relaxation rate of the odd part.
    """
    for i in range(first, last):
        at = 19 * i
        v0 = state[at]
        v1, v2 = state[source[i, 0]], state[source[i, 1]]
        v3, v4 = state[source[i, 2]], state[source[i, 3]]
        v5, v6 = state[source[i, 4]], state[source[i, 5]]
        v7, v8 = state[source[i, 6]], state[source[i, 7]]
        v9, v10 = state[source[i, 8]], state[source[i, 9]]
        v11, v12 = state[source[i, 10]], state[source[i, 11]]
        v13, v14 = state[source[i, 12]], state[source[i, 13]]
        v15, v16 = state[source[i, 14]], state[source[i, 15]]
        v17, v18 = state[source[i, 16]], state[source[i, 17]]
        near = (v1 + v2) + (v3 + v4) + (v5 + v6)
        rho = v0 + near + ((v7 + v8) + (v9 + v10)) + ((v11 + v12) + (v13 + v14)) + ((v15 + v16) + (v17 + v18))
        x = (v1 - v2) + (v7 - v8) + (v9 - v10) + (v11 - v12) + (v13 - v14)
        y = (v3 - v4) + (v7 - v8) - (v9 - v10) + (v15 - v16) + (v17 - v18)
        z = (v5 - v6) + (v11 - v12) - (v13 - v14) + (v15 - v16) - (v17 - v18)
        r1, r2 = W1 * rho, W2 * rho
        following[at] = v0 - even * (v0 - W0 * rho)
        following[at + 1], following[at + 2] = _relaxed(v1, v2, r1, D1 * x, even, odd)
        following[at + 3], following[at + 4] = _relaxed(v3, v4, r1, D1 * y, even, odd)
        following[at + 5], following[at + 6] = _relaxed(v5, v6, r1, D1 * z, even, odd)
        following[at + 7], following[at + 8] = _relaxed(v7, v8, r2, D2 * (x + y), even, odd)
        following[at + 9], following[at + 10] = _relaxed(v9, v10, r2, D2 * (x - y), even, odd)
        following[at + 11], following[at + 12] = _relaxed(v11, v12, r2, D2 * (x + z), even, odd)
        following[at + 13], following[at + 14] = _relaxed(v13, v14, r2, D2 * (x - z), even, odd)
        following[at + 15], following[at + 16] = _relaxed(v15, v16, r2, D2 * (y + z), even, odd)
        following[at + 17], following[at + 18] = _relaxed(v17, v18, r2, D2 * (y - z), even, odd)


@njit(cache=True, nogil=True, error_model="numpy")
def lattice_moments(first: int, last: int, state: Singles, density: Floats, flux: Floats) -> None:
    """Fills deviation of density (n,) and flux (n, 3) of cells first..last - 1.

    Both are kept by a collision, so they are those of the flow although the populations are taken after it.
    """
    for i in range(first, last):
        total = 0.0
        x = 0.0
        y = 0.0
        z = 0.0
        for q in range(19):
            f = np.float64(state[19 * i + q])
            total += f
            x += f * DIRECTIONS[q, 0]
            y += f * DIRECTIONS[q, 1]
            z += f * DIRECTIONS[q, 2]
        density[i] = total
        flux[i, 0] = x
        flux[i, 1] = y
        flux[i, 2] = z


@njit(cache=True, nogil=True, error_model="numpy")
def lattice_shift(first: int, last: int, state: Singles, change: Floats) -> None:
    """Adds `change (n,)` to the density of cells first..last - 1, at rest."""
    for i in range(first, last):
        amount = np.float32(change[i])
        state[19 * i] += W0 * amount
        for q in range(1, 7):
            state[19 * i + q] += W1 * amount
        for q in range(7, 19):
            state[19 * i + q] += W2 * amount


@njit(cache=True, nogil=True, error_model="numpy")
def flow_across(state: Singles, links: Ints) -> float:
    """Returns the flow over links (k, 3) = cell before the cut, cell behind it, direction from one to the other."""
    total = 0.0
    for k in range(links.shape[0]):
        q = links[k, 2]
        back = q + 1 if q % 2 == 1 else q - 1
        total += np.float64(state[19 * links[k, 0] + q]) - np.float64(state[19 * links[k, 1] + back])
    return total

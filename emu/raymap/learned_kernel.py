"""Evaluation of the learned functions: cubic B-splines in (√u, tan ψ/4) of polynomials in the spin's components.

The table is cut into zones of √u, each with its own spacing and degree. A node holds its OUTPUTS functions one after
the other, each a list of coefficients padded to whole vector registers.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from emu.raymap.base import Array, Flags
from emu.raymap.bending import OUTPUTS, ROWS, from_bending, into_bending
from emu.raymap.spin_polynomials import fill_monomials

__all__ = ["evaluate"]

Single = NDArray[np.float32]
_BLOCK = 32  # rays worked out together, so that what is known of them stays in the nearest cache
_EVEN = 5  # of the learned functions
_FAST = {"contract", "arcp", "reassoc", "nsz"}
_U = np.uint64  # indices without a sign need no wrapping, which would keep loops from vector registers


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def _spline(place: float, cells: int, w: Array) -> int:
    """Write the four weights of a uniform cubic B-spline to `w` and return the first of its nodes."""
    cell = min(max(int(place), 0), cells - 1)
    f = place - cell
    g = 1.0 - f
    w[0], w[3] = g * g * g / 6.0, f * f * f / 6.0
    w[1] = 2.0 / 3.0 - f * f * (1.0 - 0.5 * f)
    w[2] = 2.0 / 3.0 - g * g * (1.0 - 0.5 * g)
    return cell


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def _mix_nodes(
    table: Single, first: np.uint64, to_row: np.uint64, to_node: np.uint64, wu: Array, wx: Array, mixed: Single
) -> None:
    """Add the coefficients of 4 × 4 nodes with the weights wu ⊗ wx: `to_node` numbers each, from `first` on."""
    a0, a1, a2, a3 = np.float32(wx[0]), np.float32(wx[1]), np.float32(wx[2]), np.float32(wx[3])
    b0, b1, b2, b3 = np.float32(wu[0]), np.float32(wu[1]), np.float32(wu[2]), np.float32(wu[3])
    p, q = first, first + to_row
    r, s = q + to_row, q + to_row + to_row
    n1 = to_node
    n2, n3 = n1 + to_node, n1 + to_node + to_node
    for m in range(to_node):
        mixed[m] = (
            b0 * (a0 * table[p + m] + a1 * table[p + n1 + m] + a2 * table[p + n2 + m] + a3 * table[p + n3 + m])
            + b1 * (a0 * table[q + m] + a1 * table[q + n1 + m] + a2 * table[q + n2 + m] + a3 * table[q + n3 + m])
            + b2 * (a0 * table[r + m] + a1 * table[r + n1 + m] + a2 * table[r + n2 + m] + a3 * table[r + n3 + m])
            + b3 * (a0 * table[s + m] + a1 * table[s + n1 + m] + a2 * table[s + n2 + m] + a3 * table[s + n3 + m])
        )


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def _apply(mixed: Single, monomials: Single, width: np.uint64, out: Array, k: int) -> None:
    """Write the learned functions of one ray to out[:, k]: coefficients times monomials, even ones then odd ones."""
    for f in range(_U(OUTPUTS)):
        first, start = f * width, _U(0)
        if f >= _U(_EVEN):
            start = width
        total = np.float32(0.0)
        for m in range(width):
            total += mixed[first + m] * monomials[start + m]
        out[f, k] = total


@njit(cache=True)
def _find_zone(zones: Array, root_u: float) -> int:
    """Return the zone that holds √u; beyond both ends the nearest."""
    z = 0
    while z < len(zones) - 1 and root_u >= zones[z + 1, 0]:
        z += 1
    return z


@njit(cache=True)
def _is_trusted(geometry: Array, k: int, spin: float, root_u: float, x: float, trust: Array) -> bool:
    """Tell whether a ray lies within the ranges and clear of the caustic; `trust` as in `Chart`."""
    across = geometry[11, k] ** 2 + geometry[13, k] ** 2
    clear = 2.0 * abs(geometry[0, k]) > trust[4] + trust[5] * root_u * root_u * across
    return bool(clear and trust[0] <= root_u <= trust[1] and abs(spin) <= trust[2] and x <= trust[3])


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def _place(root_u: Array, count: int, geometry: Array, zones: Array, zone: NDArray[np.int64], place: Array) -> None:
    """Write the zones of a block's rays, their places among the nodes and tan ψ/4 to `zone` and `place` (3, B)."""
    for k in range(count):
        z = _find_zone(zones, root_u[k])
        x = geometry[1, k] / (1.0 + geometry[0, k])
        zone[k] = z
        place[0, k] = (root_u[k] - zones[z, 1]) * zones[z, 2]
        place[1, k] = (x - zones[z, 3]) * zones[z, 4]
        place[2, k] = x


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def _learn(
    count: int, zone: NDArray[np.int64], place: Array, layout: NDArray[np.int64], table: Single, work: Single,
    learned: Array,
) -> None:  # fmt: skip
    """Write the learned functions of a block of rays to `learned`; `work` holds their monomials."""
    half = len(work) // 2
    monomials, mixed = np.empty(2 * half, dtype=np.float32), np.empty(OUTPUTS * half, dtype=np.float32)
    wu, wx = np.empty(4), np.empty(4)
    for k in range(count):
        z = zone[k]
        width = layout[z, 3]
        i = _spline(place[0, k], layout[z, 0], wu)
        j = _spline(place[1, k], layout[z, 1], wx)
        to_node = OUTPUTS * width
        to_row = (layout[z, 1] + 3) * to_node
        for m in range(width):
            monomials[m] = work[m, k]
            monomials[width + m] = work[half + m, k]
        begin = layout[z, 4] + i * to_row + j * to_node
        _mix_nodes(table, _U(begin), _U(to_row), _U(to_node), wu, wx, mixed)
        _apply(mixed, monomials, _U(width), learned, k)


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def evaluate(
    spin: Array, cos_i: Array, sin_i: Array, r: Array, n: Array, side: float, drag: Array, zones: Array,
    layout: NDArray[np.int64], table: Single, rows: NDArray[np.int64], counts: NDArray[np.int64],
    trust: Array, out: Array, trusted: Flags,
) -> None:  # fmt: skip
    """Evaluate the learned map.

    Args:
        spin, cos_i, sin_i, r: (N,). n: (N, 3) unit vectors of the sources.
        side: 1 for image order 0, −1 for order 1.
        drag, zones, layout, table, trust: of the `Chart`. rows, counts: of the monomials' `recipe`.
        out: (8, N) receives α, β, delay, p_r, p_θ, p_φ/sin θ, μ and tan ψ/4.
        trusted: (N,) receives whether the ray lies within the trust domain.
    """
    geometry, learned, found = np.empty((ROWS, _BLOCK)), np.empty((OUTPUTS, _BLOCK)), np.empty((7, _BLOCK))
    work = np.zeros((2 * int(np.max(layout[:, 3])), _BLOCK), dtype=np.float32)
    components = np.zeros((3, _BLOCK), dtype=np.float32)
    place, root_u = np.empty((3, _BLOCK)), np.empty(_BLOCK)
    zone = np.zeros(_BLOCK, dtype=np.int64)
    for first in range(0, len(r), _BLOCK):
        last = min(first + _BLOCK, len(r))
        count = last - first
        a, c, s = spin[first:last], cos_i[first:last], sin_i[first:last]
        for k in range(count):
            root_u[k] = 1.0 / np.sqrt(r[first + k])
        into_bending(a, c, s, root_u, n[first:last], side, drag, geometry)
        _place(root_u, count, geometry, zones, zone, place)
        for e in range(3):
            for k in range(count):
                components[e, k] = np.float32(geometry[11 + e, k])
        fill_monomials(components, rows[: counts[np.max(layout[zone[:count], 2])]], work)
        _learn(count, zone, place, layout, table, work, learned)
        from_bending(a, c, s, r[first:last], geometry, learned, found)
        for k in range(count):
            out[7, first + k] = place[2, k]
            trusted[first + k] = _is_trusted(geometry, k, a[k], root_u[k], place[2, k], trust)
        for e in range(7):
            for k in range(count):
                out[e, first + k] = found[e, k]

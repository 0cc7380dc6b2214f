"""The bending geometry: coordinates in which a ray around a spinning hole is nearly one without spin.

With o the observer's and n the source's direction, n is turned about the spin axis by the first-order shift of the
caustic, 2 arctan(a ε(u)(1 − o·n)/4), to n₂. In the plane of o and n₂ (angle ψ, normal N; m in the plane orthogonal
to o, t = N × n₂) the spin has the components s₁ along o + n₂, s₂ along n₂ − o and s_N. What is learned varies
slowly with √u, x = tan(ψ/4) and the spin's components: the delay plus r cos ψ, the screen position along m
less r sin ψ, the photon's direction along r and t for the zero-angular-momentum observer, μ |cos ψ/2|, and the
screen position and the direction along N, both times cos ψ/2, as they grow like the caustic's width over the distance
from it. All formulas are algebraic, so that loops over rays use vector registers.
"""

from __future__ import annotations

import math

from numba import njit

from emu.raymap.base import Array
from emu.spacetime.kerr import frame_at

__all__ = ["OUTPUTS", "ROWS", "from_bending", "into_bending"]

#: Rows of the geometry: cos ψ/2, sin ψ/2, m, N, n₂, s₁, s₂, s_N.
ROWS = 14
#: Learned functions: five that are even under reflection in the plane, then two that are odd.
OUTPUTS = 7
_ASIDE = 1e-9  # puts a source exactly before the hole a little aside, where it has a bending plane
_LEAST = 1e-18
_FAST = {"contract", "arcp", "reassoc", "nsz"}


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def into_bending(
    spin: Array, cos_i: Array, sin_i: Array, root_u: Array, n: Array, side: float, drag: Array, rows: Array
) -> None:
    """Write the bending geometry of rays to `rows` (ROWS, N).

    Args:
        spin, cos_i, sin_i, root_u: (N,) a, the observer's cos i and sin i, and √(1/r). n: (N, 3) unit vectors.
        side: 1 for image order 0; −1 for order 1, whose ray sweeps 2π − ψ the other way, so that m and N change sign.
        drag: (8,) ε(u) = u Σ drag[k] u^{k/2}.
    """
    for k in range(len(spin)):
        a, x, y, z = spin[k], n[k, 0], n[k, 1], n[k, 2]
        ox, oz, s = sin_i[k], cos_i[k], root_u[k]
        shift = drag[7]
        for p in range(6, -1, -1):
            shift = shift * s + drag[p]
        tangent = 0.25 * a * s * s * shift * (1.0 - (ox * x + oz * z))
        scale = 1.0 / (1.0 + tangent * tangent)
        c, d = (1.0 - tangent * tangent) * scale, 2.0 * tangent * scale
        x, y = x * c - y * d, x * d + y * c + _ASIDE
        ax, az, bx, bz = ox + x, oz + z, x - ox, z - oz
        half_c = side * (0.5 * math.sqrt(ax * ax + y * y + az * az) + _LEAST)
        half_s = 0.5 * math.sqrt(bx * bx + y * y + bz * bz) + _LEAST
        inverse = 0.5 / (half_c * half_s)
        nx, ny, nz = -oz * y * inverse, (oz * x - ox * z) * inverse, ox * y * inverse
        rows[0, k], rows[1, k] = half_c, half_s
        rows[2, k], rows[3, k], rows[4, k] = ny * oz, nz * ox - nx * oz, -ny * ox
        rows[5, k], rows[6, k], rows[7, k] = nx, ny, nz
        rows[8, k], rows[9, k], rows[10, k] = x, y, z
        rows[11, k], rows[12, k], rows[13, k] = 0.5 * a * az / half_c, 0.5 * a * bz / half_s, a * nz


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def from_bending(spin: Array, cos_i: Array, sin_i: Array, r: Array, rows: Array, learned: Array, out: Array) -> None:
    """Turn learned functions back into what a ray bundle holds.

    Args:
        spin, cos_i, sin_i, r: (N,). rows: (ROWS, N) of `into_bending`.
        learned: (OUTPUTS, N): delay and position less their leading terms, direction along r and t, μ |cos ψ/2|, then
            position and direction along N times cos ψ/2.
        out: (7, N) receives α, β, delay, p_r, p_θ, p_φ/sin θ, μ.
    """
    for k in range(len(spin)):
        a, radius, half_c, half_s = spin[k], r[k], rows[0, k], rows[1, k]
        mx, my, mz, nx, ny, nz = rows[2, k], rows[3, k], rows[4, k], rows[5, k], rows[6, k], rows[7, k]
        x, y, z = rows[8, k], rows[9, k], rows[10, k]
        along = learned[1, k] + 2.0 * radius * half_s * half_c
        behind = 1.0 / half_c
        across = learned[5, k] * behind
        out[0, k] = along * my + across * ny
        out[1, k] = (along * mz + across * nz) * sin_i[k] - (along * mx + across * nx) * cos_i[k]
        out[2, k] = learned[0, k] - radius * (half_c * half_c - half_s * half_s)
        d_r, d_t, d_n = learned[2, k], learned[3, k], learned[6, k] * behind
        tx, ty, tz = ny * z - nz * y, nz * x - nx * z, nx * y - ny * x
        dx, dy, dz = d_t * tx + d_n * nx, d_t * ty + d_n * ny, d_t * tz + d_n * nz
        length = 1.0 / math.sqrt(d_r * d_r + dx * dx + dy * dy + dz * dz)
        rho = math.sqrt(x * x + y * y)
        off_axis = rho > 1e-12
        safe = rho if off_axis else 1.0
        c, s = x / safe if off_axis else 1.0, y / safe
        around, polar = (dy * c - dx * s) * length, ((dx * c + dy * s) * z - rho * dz) * length
        lapse, omega, root_rr, root_tt, varpi, _delta = frame_at(a, radius, z)
        energy = 1.0 / (lapse + omega * varpi * rho * around)
        out[3, k] = energy * root_rr * d_r * length
        out[4, k], out[5, k] = energy * root_tt * polar, energy * varpi * around
        out[6, k] = learned[4, k] * abs(behind)

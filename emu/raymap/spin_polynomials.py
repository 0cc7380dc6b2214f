"""The monomials of the three spin components, split by their parity under reflection in the bending plane.

Reflection reverses the two components in the plane. Lists are ordered by degree, so that a shorter one is the
beginning of a longer one.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

__all__ = ["LANES", "exponents", "fill_monomials", "padded", "recipe"]

#: float32 numbers in a vector register; lists of monomials are padded to a multiple.
LANES = 16
_FAST = {"contract", "arcp", "reassoc", "nsz"}


def exponents(degree: int, parity: int) -> NDArray[np.int64]:
    """List the exponents of (s₁, s₂, s_N) up to a degree, those of s₁ and s₂ adding to `parity` modulo 2: (K, 3)."""
    found = [
        (i, j, t - i - j)
        for t in range(degree + 1)
        for i in range(t + 1)
        for j in range(t + 1 - i)
        if (i + j) % 2 == parity
    ]
    return np.array(found, dtype=np.int64).reshape(-1, 3)


def padded(degree: int) -> int:
    """Return the number of monomials of one parity up to a degree, filled up to a multiple of LANES."""
    most = max(len(exponents(degree, parity)) for parity in (0, 1))
    return -(-most // LANES) * LANES


def recipe(degree: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Say how each monomial is made from one of a degree less.

    Returns:
        (M, 3) rows: its place, the place of the other, the component that multiplies it; the even list begins at
        place 0 and the odd list at `padded(degree)`. (degree + 1,) number of rows up to each degree.
    """
    lists = [[tuple(map(int, e)) for e in exponents(degree, parity)] for parity in (0, 1)]
    place = {e: parity * padded(degree) + k for parity, found in enumerate(lists) for k, e in enumerate(found)}
    rows: list[tuple[int, int, int]] = []
    counts = np.zeros(degree + 1, dtype=np.int64)
    for e in sorted(place, key=sum):
        if sum(e) > 0:
            c = next(c for c in (2, 1, 0) if e[c] > 0)
            rows.append((place[e], place[(e[0] - (c == 0), e[1] - (c == 1), e[2] - (c == 2))], c))
            counts[sum(e) :] += 1
    return np.array(rows, dtype=np.int64).reshape(-1, 3), counts


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def fill_monomials(components: NDArray[np.float32], rows: NDArray[np.int64], work: NDArray[np.float32]) -> None:
    """Work out the monomials of a block of rays.

    Args:
        components: (3, B) float32. rows: as `recipe` gives them, up to the wanted degree.
        work: (·, B) float32, one row a place; the place 0 is set to 1.
    """
    for k in range(work.shape[1]):
        work[0, k] = np.float32(1.0)
    for m in range(len(rows)):
        made, other, factor = work[rows[m, 0]], work[rows[m, 1]], components[rows[m, 2]]
        for k in range(work.shape[1]):
            made[k] = other[k] * factor[k]

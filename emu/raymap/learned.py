"""The learned ray map: splines and polynomials where they can be trusted, the exact solve elsewhere."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, fields

import numpy as np

from emu.raymap.base import Array, Flags, RayBundle
from emu.raymap.bending import ROWS, into_bending
from emu.raymap.chart import Chart, shipped
from emu.raymap.exact import ExactRays
from emu.raymap.learned_kernel import evaluate

__all__ = ["LearnedRays"]

_LEAST_IMPACT = 1e-12
_TUBE = 0.3


@dataclass(frozen=True)
class LearnedRays:
    """Evaluate what was learned of the rays; ray by ray, the exact solve takes over outside the trust domain.

    Args:
        charts: gives the learned numbers of image orders 0 and 1; called when first needed.
    """

    charts: Callable[[], tuple[Chart, Chart]] = shipped

    def trace(
        self, spin: Array, inclination: Array, r: Array, n: Array, order: int, start: Array | None = None
    ) -> RayBundle:
        """Return the rays of one image order, as `RayMap` says; only exact rays outside the table use a start."""
        columns, trusted = self._learned(spin, inclination, r, n, order)
        swept = 4.0 * np.arctan(columns[7])
        # Mino time of a ray without spin
        tau = swept / np.maximum(np.hypot(columns[0], columns[1]), _LEAST_IMPACT)
        begin = np.stack((columns[0], columns[1], tau), axis=-1)
        alpha, beta, delay, p_r, p_theta, p_phi, mu, _ = columns
        none = np.zeros(len(r), dtype=bool)
        bundle = RayBundle(alpha, beta, delay, p_r, p_theta, p_phi, mu, none, swept, begin, ~trusted)
        if not np.all(trusted):
            (index,) = np.nonzero(bundle.exact)
            near = begin[index]
            lost = ~self._within(spin[index], r[index], columns[7, index], order)
            near[lost] = np.nan if start is None else start[index[lost]]
            exact = ExactRays().trace(spin[index], inclination[index], r[index], n[index], order, near)
            for field in fields(exact):
                getattr(bundle, field.name)[index] = getattr(exact, field.name)
        return bundle

    def in_tube(
        self, start: Array, swept: Array, spin: Array, inclination: Array, r: Array, n: Array, order: int
    ) -> Flags:
        """Tell which traced sources lie within a caustic tube.

        The exact test is dear, so for order 0 only sources are put to it that are closer to the shifted caustic than
        `_TUBE` u (spin across the line of sight)^2, many times the width of the tube; order 1 ends at 360 degrees,
        where every ray is exact.
        """
        suspect = swept > (order + 0.5) * np.pi
        if order == 0 and np.any(suspect):
            (near,) = np.nonzero(suspect)
            rows = np.empty((ROWS, len(near)))
            where = (spin[near], np.cos(inclination[near]), np.sin(inclination[near]), r[near] ** -0.5, n[near])
            into_bending(*where, 1.0, self.charts()[0].drag, rows)
            suspect[near] = 2.0 * rows[0] < _TUBE / r[near] * (rows[11] ** 2 + rows[13] ** 2)
        inside = np.zeros(len(r), dtype=bool)
        (near,) = np.nonzero(suspect)
        if len(near):
            inside[near] = ExactRays().in_tube(
                start[near], swept[near], spin[near], inclination[near], r[near], n[near], order
            )
        return inside

    def _learned(self, spin: Array, inclination: Array, r: Array, n: Array, order: int) -> tuple[Array, Flags]:
        """Return the columns (8, N) of `evaluate` and which are trusted."""
        chart = self.charts()[order]
        columns, trusted = np.empty((8, len(r))), np.empty(len(r), dtype=bool)
        evaluate(
            np.ascontiguousarray(spin), np.cos(inclination), np.sin(inclination), np.ascontiguousarray(r),
            np.ascontiguousarray(n), 1.0 - 2.0 * order, chart.drag, chart.zones, chart.layout, chart.table,
            chart.rows, chart.counts, chart.trust, columns, trusted,
        )  # fmt: skip
        return columns, trusted

    def _within(self, spin: Array, r: Array, x: Array, order: int) -> Flags:
        """Tell which rays are within the table, be they close to the caustic, so that they may start from it."""
        least, most, fastest, furthest = self.charts()[order].trust[:4]
        root_u = r**-0.5
        return np.asarray((root_u >= least) & (root_u <= most) & (np.abs(spin) <= fastest) & (x <= furthest))

"""Make the exact rays from which the learned ray map is fitted."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from safetensors.numpy import save_file

from training.raymap.design import DIRECT, INDIRECT, Zone
from training.raymap.labels import exact_twice, fit_drag, learned_of, place_sources

__all__ = ["simulate", "zone_labels"]

Array = NDArray[np.float64]


def zone_labels(zone: Zone, spins: Array, drag: Array) -> tuple[Array, NDArray[np.bool_]]:
    """Solve for the rays of all nodes of a zone with all spins.

    Args:
        zone: its nodes at x > 1 are seen as image order 1, the functions go on smoothly there.
        spins: (M, 3). drag: (8,).

    Returns:
        Labels (rows, columns, M, 7) and which are good.
    """
    count = len(spins)
    labels = np.zeros((zone.rows, zone.columns, count, 7))
    good = np.zeros(labels.shape[:3], dtype=bool)
    for i, root_u in enumerate(zone.root_u):
        for side in (0, 1):
            (columns,) = np.nonzero((zone.x > 1.0) == bool(side))
            if len(columns) == 0:
                continue
            x = np.repeat(zone.x[columns], count)
            places = place_sources(np.tile(spins, (len(columns), 1)), x, np.full(len(x), root_u**-2), drag)
            bundle = exact_twice(places, side)
            labels[i, columns] = learned_of(bundle, places, side, drag)[0].reshape(len(columns), count, 7)
            good[i, columns] = ~bundle.failed.reshape(len(columns), count)
    return labels, good


def simulate(out: Path, seed: int = 0) -> None:
    """Solve for all exact rays that the fit needs and write them to a file.

    Args:
        out: of the labels, safetensors. seed: of the spins.
    """
    tensors: dict[str, NDArray] = {}
    for order, zones in enumerate((DIRECT, INDIRECT)):
        drag = fit_drag(np.concatenate([zone.root_u for zone in zones]))
        tensors[f"order{order}.drag"] = drag
        for z, zone in enumerate(zones):
            spins = zone.spins(seed)
            labels, good = zone_labels(zone, spins, drag)
            name = f"order{order}.zone{z}"
            tensors |= {f"{name}.spins": spins, f"{name}.labels": labels, f"{name}.good": good}
    out.parent.mkdir(parents=True, exist_ok=True)
    save_file(tensors, out)

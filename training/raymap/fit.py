"""Fit the learned ray map: polynomials in the spin at every node, then splines through the nodes."""

from __future__ import annotations

import hashlib
import json
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from safetensors.numpy import load_file, save
from scipy.interpolate import CubicSpline

from emu.raymap.spin_polynomials import exponents, padded
from training.raymap.design import DIRECT, INDIRECT, TRUST, Trust, Zone
from training.raymap.simulate import simulate

__all__ = ["fit", "fit_zone", "spline_matrix"]

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]
_EVEN, _OUTPUTS = 5, 7
_GHOSTS = 4
_TUBE = 0.9  # half width over u (s1^2 + sN^2), rad: rays from nearer the caustic are left out
_STRAY = 1e-3  # GM/c3
# Components along m, t and N change sign with the side on which psi is counted.
_SIDED = np.array([0, 1, 0, 1, 0, 1, 1])


def _monomials(spins: Array, degree: int, parity: int) -> Array:
    return np.prod(spins[:, None, :] ** exponents(degree, parity)[None], axis=2)


def spline_matrix(count: int) -> Array:
    """Return the matrix from values at `count` nodes to the count + 2 coefficients of a uniform cubic B-spline.

    At both ends the third derivative is continuous across the last node but one (not-a-knot).
    """
    system = np.zeros((count + 2, count + 2))
    for j in range(count):
        system[j + 1, j : j + 3] = (1.0 / 6.0, 4.0 / 6.0, 1.0 / 6.0)
    system[0, :5] = system[-1, -5:] = (1.0, -4.0, 6.0, -4.0, 1.0)
    return np.linalg.inv(system)[:, 1:-1]


def _outside_tube(zone: Zone, spins: Array) -> Flags:
    """Tell which rays keep clear of the caustic: (rows, columns, M)."""
    gap = np.abs(np.pi - 4.0 * np.arctan(zone.x))
    width = _TUBE * zone.root_u[:, None] ** 2 * (spins[:, 0] ** 2 + spins[:, 2] ** 2)
    return gap[None, :, None] > width[:, None, :]


def _strays(zone: Zone, spins: Array, labels: Array) -> Flags:
    """Tell which delays do not fit in with those of other spins: the exact solve found another image."""
    matrix = _monomials(spins, zone.degree, 0)
    delay = labels[..., 0]
    gap = np.abs(delay - delay @ np.linalg.pinv(matrix).T @ matrix.T)
    return np.asarray(gap > _STRAY + 30.0 * np.median(gap, axis=2, keepdims=True))


def _bridge(zone: Zone, labels: Array, good: Flags) -> Array:
    """Replace what is not good by a cubic spline along psi through what is: the functions go on behind the caustic.

    Nothing within the bridges is ever trusted; they keep the splines beside them smooth.
    """
    labels = labels.copy()
    for i, m in np.argwhere(~np.all(good, axis=1)):
        kept = good[i, :, m]
        through = CubicSpline(zone.x[kept], labels[i, kept, m])
        labels[i, ~kept, m] = through(zone.x[~kept])
    return labels


def _node_polynomials(zone: Zone, spins: Array, labels: Array) -> Array:
    """Fit the spin polynomials of every node by least squares: (rows, columns, 7, K), zero where K is padding."""
    found = np.zeros((zone.rows, zone.columns, _OUTPUTS, padded(zone.degree)))
    for parity, outputs in ((0, slice(0, _EVEN)), (1, slice(_EVEN, _OUTPUTS))):
        inverse = np.linalg.pinv(_monomials(spins, zone.degree, parity))
        found[..., outputs, : len(inverse)] = np.einsum("km,ijmf->ijfk", inverse, labels[..., outputs])
    return found


def _mirrored(zone: Zone, found: Array) -> Array:
    """Put nodes at psi < 0 before those from psi = 0 on: there s2, sN, m, t and N are reversed."""
    sign = np.ones(found.shape[2:])
    for f in range(_OUTPUTS):
        powers = exponents(zone.degree, int(f >= _EVEN))
        sign[f, : len(powers)] = (-1.0) ** (powers[:, 1] + powers[:, 2] + _SIDED[f])
    return np.concatenate((found[:, _GHOSTS:0:-1] * sign, found), axis=1)


def fit_zone(zone: Zone, spins: Array, labels: Array, good: Flags) -> Array:
    """Return the spline coefficients of a zone: (rows + 2, columns + 2, 7, K).

    Args:
        spins: (M, 3). labels: (rows, columns, M, 7). good: (rows, columns, M).
    """
    good = good & _outside_tube(zone, spins) & ~_strays(zone, spins, labels)
    found = _node_polynomials(zone, spins, _bridge(zone, labels, good))
    ghosts = _GHOSTS if zone.low == 0.0 else 0
    if ghosts:
        found = _mirrored(zone, found)
    down, across = spline_matrix(zone.rows), spline_matrix(zone.columns + ghosts)
    table = np.einsum("ai,bj,ijfk->abfk", down, across, found, optimize=True)
    return table[:, ghosts:]


def fit(labels: Path, out: Path, seed: int = 0, direct: tuple[Zone, ...] = DIRECT) -> None:
    """Fit the charts of both image orders and write them with their manifest.

    Args:
        labels: written by `simulate`; made with the seed where it is missing.
        out: folder for learned.safetensors and learned.json.
        direct: zones of order 0, with the nodes of the labels but perhaps other degrees.
    """
    if not labels.is_file():
        simulate(labels, seed)
    given = load_file(labels)
    tensors: dict[str, NDArray[Any]] = {}
    for order, zones in enumerate((direct, INDIRECT)):
        tables = []
        for z, zone in enumerate(zones):
            spins, known, good = (given[f"order{order}.zone{z}.{name}"] for name in ("spins", "labels", "good"))
            tables.append(fit_zone(zone, spins, known, good))
        for name, value in _chart_tensors(zones, tables, TRUST[order]).items():
            tensors[f"order{order}.{name}"] = value
        tensors[f"order{order}.drag"] = given[f"order{order}.drag"]
    out.mkdir(parents=True, exist_ok=True)
    content = save(tensors)
    (out / "learned.safetensors").write_bytes(content)
    manifest = {
        "what": "learned ray map, image orders 0 and 1",
        "sha256": hashlib.sha256(content).hexdigest(),
        "bytes": len(content),
        "made_by": "emu-train raymap fit",
        "zones": [[asdict(zone) for zone in zones] for zones in (direct, INDIRECT)],
        "trust": [asdict(trust) for trust in TRUST],
    }
    (out / "learned.json").write_text(json.dumps(manifest, indent=1) + "\n")


def _chart_tensors(zones: tuple[Zone, ...], tables: list[Array], trust: Trust) -> dict[str, NDArray[Any]]:
    """Lay the zones' tables out as `Chart` says."""
    places, layout, start = [], [], 0
    for zone, table in zip(zones, tables, strict=True):
        s, x = zone.root_u, zone.x
        places.append((s[0], s[0], 1.0 / (s[1] - s[0]), x[0], 1.0 / (x[1] - x[0])))
        layout.append((zone.rows - 1, zone.columns - 1, zone.degree, table.shape[-1], start))
        start += table.size
    return {
        "zones": np.array(places),
        "layout": np.array(layout, dtype=np.int64),
        "trust": trust.numbers,
        "table": np.concatenate([table.astype(np.float32).ravel() for table in tables]),
    }

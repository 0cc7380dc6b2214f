"""Networks as rivals of the learned map: the same learned functions, from coordinates or from raw places."""

from __future__ import annotations

import itertools
import time
from dataclasses import dataclass

import numpy as np
import torch
from numpy.typing import NDArray
from torch import nn

from emu.raymap.base import RayBundle
from emu.raymap.bending import from_bending
from training.raymap.labels import Places, exact_twice, learned_of
from training.raymap.points import random_places

__all__ = ["Network", "Teaching", "teach", "teaching_rays"]

Array = NDArray[np.float64]
_BATCH = 4096
_RATE = 3e-3
_CHECK_EVERY = 20


@dataclass(frozen=True)
class Teaching:
    """Hold places, their bending geometry (14, N) and the learned functions there (N, 7)."""

    places: Places
    rows: Array
    learned: Array

    def inputs(self, raw: bool) -> Array:
        """Return (N, ·): sqrt(u), tan(psi/4) and spin components, or spin, cos i, sqrt(u) and n if `raw`."""
        root_u = self.places.r[:, None] ** -0.5
        if raw:
            cos_i = np.cos(self.places.inclination)
            return np.concatenate((self.places.spin[:, None], cos_i[:, None], root_u, self.places.n), axis=1)
        x = self.rows[1] / (1.0 + self.rows[0])
        return np.concatenate((root_u, x[:, None], self.rows[11:14].T), axis=1)


def teaching_rays(count: int, seed: int, drag: Array) -> Teaching:
    """Solve random rays of order 0, of the domain with a little room, 0.1 rad and more from the caustic."""
    places = random_places(count, seed, 0.96, 2.9, 62.0)
    bundle = exact_twice(places, 0)
    learned, rows = learned_of(bundle, places, 0, drag)
    kept = ~bundle.failed & (2.0 * rows[0] > 0.1)
    chosen = Places(places.spin[kept], places.inclination[kept], places.r[kept], places.n[kept])
    return Teaching(chosen, np.ascontiguousarray(rows[:, kept]), learned[kept])


@dataclass
class Network:
    """Evaluate a network as a ray map of order 0; there is no trust domain and no fallback."""

    layers: nn.Module
    raw: bool
    shift: Array
    scale: Array

    def learned(self, rays: Teaching) -> Array:
        """Return the learned functions (N, 7)."""
        with torch.no_grad():
            out = self.layers(torch.from_numpy(rays.inputs(self.raw).astype(np.float32)))
        return out.numpy().astype(np.float64) * self.scale + self.shift

    def trace(self, rays: Teaching) -> RayBundle:
        """Return the rays."""
        at = rays.places
        out = np.empty((7, len(at.r)))
        cos_i, sin_i = np.cos(at.inclination), np.sin(at.inclination)
        from_bending(at.spin, cos_i, sin_i, at.r, rays.rows, np.ascontiguousarray(self.learned(rays).T), out)
        none = np.zeros(len(at.r), dtype=bool)
        return RayBundle(*out, none, np.zeros(len(at.r)), np.zeros((len(at.r), 3)), none)


def teach(rays: Teaching, width: int, raw: bool, seconds: float, seed: int) -> Network:
    """Fit three hidden layers of a width for so many CPU seconds: Adam, rate falling to zero as a cosine."""
    torch.manual_seed(seed)
    torch.set_num_threads(1)
    inputs = torch.from_numpy(rays.inputs(raw).astype(np.float32))
    shift, scale = rays.learned.mean(axis=0), rays.learned.std(axis=0)
    goal = torch.from_numpy(((rays.learned - shift) / scale).astype(np.float32))
    sizes = (inputs.shape[1], width, width, width)
    hidden = [part for a, b in itertools.pairwise(sizes) for part in (nn.Linear(a, b), nn.SiLU())]
    layers = nn.Sequential(*hidden, nn.Linear(width, goal.shape[1]))
    adam = torch.optim.Adam(layers.parameters(), lr=_RATE)
    begin, step, share = time.process_time(), 0, 0.0
    while share < 1.0:
        if step % _CHECK_EVERY == 0:
            share = (time.process_time() - begin) / seconds
            adam.param_groups[0]["lr"] = _RATE * 0.5 * (1.0 + np.cos(np.pi * min(share, 1.0)))
        pick = torch.randint(len(inputs), (_BATCH,))
        loss = torch.mean((layers(inputs[pick]) - goal[pick]) ** 2)
        adam.zero_grad()
        loss.backward()
        adam.step()
        step += 1
    return Network(layers, raw, shift, scale)

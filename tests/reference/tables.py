"""Stored results of the independent calculation, and the command that makes them again.

`python -m tests.reference.tables` rewrites rays.npz, snapshots.npz and curves.npz beside this file; it takes some
minutes.
"""

from pathlib import Path

import numpy as np

from tests.reference.cases import CORNERS, FAMILIES, draw_flare, draw_ray
from tests.reference.independent import NoImage, curves, trace

__all__ = ["flare_at", "make_flares", "make_rays", "stored"]

HERE = Path(__file__).parent
RAYS, SNAPSHOTS, CURVES = 240, 240, 48
NAMES = (
    "spin", "inclination", "axis_angle", "radius", "phase", "rate", "opening", "rise", "height", "tilt",
    "pitch", "index", "polarised_share", "brightness", "peak_time", "rise_time", "decay_time",
    "peak_time_2", "rise_time_2", "decay_time_2", "weight_2", "turn", "roll", "turn_time", "turn_duration",
    "dip", "scatter", "cell_lifetime",
)  # fmt: skip


def make_rays(count: int = RAYS, seed: int = 20) -> dict[str, np.ndarray]:
    """Return cases (N, 5) and results (2, N, 8): alpha, beta, delay, p_r, p_theta, p_phi, mu, found."""
    rng = np.random.default_rng(seed)
    cases = np.array([*CORNERS, *(draw_ray(rng) for _ in range(count))])
    results = np.zeros((2, len(cases), 8))
    for order in (0, 1):
        for i, case in enumerate(cases):
            try:
                alpha, beta, delay, momentum, magnification = trace(*case, order)
            except NoImage:
                continue
            results[order, i] = [alpha, beta, delay, *momentum[1:], magnification, 1.0]
    return {"cases": cases, "results": results}


def make_flares(count: int, rows: int, seed: int) -> dict[str, np.ndarray]:
    """Return flares of all families in turn: family (N,), parameters (N, P), NaN for none, times and curves.

    `light` is (N, 2, rows, 5): I, Q, U, I east, I north of each image; `centre` is (N, rows, 3): emission
    time, redshift and magnification of the direct image; `magnification` (N, 2, rows); `found` (N,).
    """
    rng = np.random.default_rng(seed)
    out = {"family": np.arange(count) % len(FAMILIES), "parameters": np.full((count, len(NAMES)), np.nan),
           "times": np.zeros((count, rows)), "light": np.zeros((count, 2, rows, 5)),
           "centre": np.zeros((count, rows, 3)), "magnification": np.ones((count, 2, rows)),
           "found": np.zeros(count, bool)}  # fmt: skip
    for i in range(count):
        family = FAMILIES[i % len(FAMILIES)]
        values = draw_flare(rng, family, wide=rng.random() < 0.25)
        times = np.sort(rng.uniform(-55.0, 55.0, rows))
        out["parameters"][i] = [values.get(name, np.nan) for name in NAMES]
        out["times"][i] = times
        try:
            found = curves(family, values, times, orders=2)
        except NoImage:
            continue
        out["light"][i], out["magnification"][i] = found["order_light"], found["order_magnification"]
        out["centre"][i] = np.stack([found[k] for k in ("emission_time", "redshift", "magnification")], axis=-1)
        out["found"][i] = True
    return out


def flare_at(table: dict[str, np.ndarray], i: int) -> tuple[str, dict[str, float], np.ndarray]:
    """Return family, parameters and times of a stored flare."""
    row = zip(NAMES, table["parameters"][i], strict=True)
    return (FAMILIES[int(table["family"][i])], {name: float(x) for name, x in row if not np.isnan(x)},
            table["times"][i])  # fmt: skip


def stored(name: str) -> dict[str, np.ndarray]:
    """Return a stored table: rays, snapshots or curves."""
    with np.load(HERE / f"{name}.npz", allow_pickle=False) as file:
        return {key: file[key] for key in file.files}


def make(name: str) -> dict[str, np.ndarray]:
    """Make a table again."""
    if name == "rays":
        return make_rays()
    return make_flares(SNAPSHOTS, 1, 21) if name == "snapshots" else make_flares(CURVES, 11, 22)


if __name__ == "__main__":
    for table in ("rays", "snapshots", "curves"):
        np.savez_compressed(HERE / f"{table}.npz", **make(table))

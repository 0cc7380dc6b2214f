"""What a run must tell so that it can be judged and repeated: versions, seeds, checksums, counts."""

from __future__ import annotations

import os
import platform
from collections.abc import Mapping
from dataclasses import asdict
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from typing import Any

from emu import __version__
from emu.report.inputs import Found, Inputs
from emu.report.summary import Outcome

__all__ = ["run_record"]

_PACKAGES = (
    "arviz",
    "astropy",
    "dynesty",
    "emcee",
    "numba",
    "numpy",
    "safetensors",
    "sbi",
    "scipy",
    "torch",
    "xarray",
    "zarr",
    "zuko",
)


def run_record(
    outcome: Outcome,
    inputs: Inputs,
    options: Mapping[str, Any],
    origin: Mapping[str, Any],
    timings: Mapping[str, float],
) -> dict[str, Any]:
    """Gather the record of a run.

    Args:
        outcome: all answers.
        inputs: what was read.
        options: what was asked for.
        origin: the bundle or the configs that the answers rest on, with checksums.
        timings: wall seconds of each stage.

    Returns:
        A dictionary that `json` can write.
    """
    every = outcome.ordered()
    return {
        "emu": __version__,
        "finished": datetime.now(UTC).isoformat(timespec="seconds"),
        "options": dict(options),
        "families": list(outcome.posteriors),
        "probability_source": outcome.source,
        "origin": dict(origin),
        "inputs": dict(inputs.checksums),
        "flares": {one.name: _of_flare(one) for one in inputs.found},
        "skipped": [asdict(one) for one in outcome.skipped],
        "counts": {
            "files": len(inputs.checksums),
            "flares_answered": len({one.flare for one in every}),
            "skipped": len(outcome.skipped),
            "posteriors": len(every),
            "draws": sum(len(one.flat) for one in every),
            "draws_outside_prior": sum(one.outside for one in every),
            "draws_unsolved": sum(one.unsolved for one in every),
        },
        "seconds": {name: round(value, 3) for name, value in timings.items()},
        "seconds_by_posterior": {
            family: round(sum(one.seconds for one in each), 3) for family, each in outcome.posteriors.items()
        },
        "versions": _versions(),
        "machine": {
            "python": platform.python_version(),
            "system": platform.platform(),
            "cores": os.cpu_count(),
        },
    }


def _of_flare(one: Found) -> dict[str, Any]:
    """Say where a flare came from and what its times and lengths are measured in."""
    return {
        "where": one.flare.where,
        "t_ref": one.flare.t_ref,
        "rows": len(one.rows),
        "target": one.target.to_table(),
    }


def _versions() -> dict[str, str]:
    """Return the versions of the packages that results depend on."""
    found = {}
    for name in _PACKAGES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            found[name] = "not installed"
    return found

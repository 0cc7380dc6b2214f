"""The record beside every fit: what it was made of, what it cost, how good it is."""

import json
import platform
from importlib.metadata import version
from pathlib import Path
from typing import Any

from safetensors.torch import save

from emu import __version__
from training.files import digest, write_atomically
from training.loop import Outcome
from training.recipe import Recipe
from training.store import TrainingSet

__all__ = ["describe_fit", "describe_set", "save_fit"]

_LIBRARIES = ("numpy", "numba", "torch", "zuko", "sbi", "zarr", "safetensors")


def describe_set(folder: Path, stored: TrainingSet) -> dict[str, Any]:
    """Describe the set a fit learnt from."""
    return {
        "sha256": digest(folder / "set.json"),
        "model": stored.layout.model,
        "definition": stored.layout.definition,
        "flares": stored.layout.flares,
        "seed": stored.layout.seed,
        "failures": sum(record["failures"] for record in stored.records),
    }


def describe_fit(outcome: Outcome, recipe: Recipe, steps: int, seed: int) -> dict[str, Any]:
    """Describe how a fit went."""
    return {
        "recipe": recipe.text,
        "seed": seed,
        "steps": steps,
        "steps_done": outcome.step,
        "best_step": outcome.best_step,
        "history": outcome.history,
        "cpu_minutes": outcome.cpu_seconds / 60,
        "versions": {"emu": __version__, "python": platform.python_version()}
        | {name: version(name) for name in _LIBRARIES},
    }


def save_fit(out: Path, name: str, outcome: Outcome, record: dict[str, Any]) -> None:
    """Write the weights, then the record with their checksum.

    Args:
        out: folder.
        name: "estimator" or "classifier".
        outcome: holds the weights.
        record: plain JSON.
    """
    weights = out / f"{name}.safetensors"
    write_atomically(weights, save({key: value.contiguous() for key, value in outcome.weights.items()}))
    text = json.dumps(record | {"kind": name, "sha256": digest(weights)}, indent=1)
    write_atomically(out / "fit.json", (text + "\n").encode())

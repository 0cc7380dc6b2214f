"""Reference draws on disk: one flare is a JSON file and a safetensors file beside it."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from safetensors.numpy import load, save

from emu.errors import UserError
from emu.observe.rows import Rows
from training.files import digest, write_atomically

__all__ = ["Reference", "read_reference", "read_references", "write_reference"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Reference:
    """Hold draws of one flare's posterior by two kinds of sampler, and what is known about them.

    Args:
        name: of the file, as flare-00.
        truth: (P,) parameters that made the flare.
        rows: the flare.
        nested: (N, P) distinct, equally weighted draws of the nested runs.
        ensembles: (M, P) equally weighted draws of the ensembles.
        facts: family, campaign, parameter names, seeds, diagnostics, status, cost: what JSON can hold.
    """

    name: str
    truth: Array
    rows: Rows
    nested: Array
    ensembles: Array
    facts: dict

    @property
    def exact(self) -> bool:
        """Tell whether both kinds of sampler agree well enough to count as exact."""
        return bool(self.facts["status"] == "exact")

    @property
    def log_evidence(self) -> float:
        """Return ln Z of the nested runs."""
        return float(self.facts["log_evidence"])


def write_reference(folder: Path, reference: Reference) -> None:
    """Write a flare: arrays first, then the JSON that names their checksum."""
    arrays = {
        "truth": reference.truth, "nested": reference.nested.astype(np.float32),
        "ensembles": reference.ensembles.astype(np.float32), "time": reference.rows.time,
        "kind": reference.rows.kind, "value": reference.rows.value, "error": reference.rows.error,
    }
    place = folder / f"{reference.name}.safetensors"
    write_atomically(place, save({name: np.ascontiguousarray(array) for name, array in arrays.items()}))
    facts = {**reference.facts, "sha256": digest(place)}
    write_atomically(folder / f"{reference.name}.json", (json.dumps(facts, indent=1) + "\n").encode())


def read_reference(folder: Path, name: str) -> Reference:
    """Read one flare.

    Raises:
        UserError: its arrays are missing or are not those its JSON speaks of.
    """
    facts = json.loads((folder / f"{name}.json").read_text())
    place = folder / f"{name}.safetensors"
    if not place.is_file() or digest(place) != facts["sha256"]:
        raise UserError(f"{place}: missing or altered; delete {name}.json and make the references again")
    arrays = load(place.read_bytes())
    rows = Rows(arrays["time"], arrays["kind"], arrays["value"], arrays["error"])
    return Reference(name, arrays["truth"], rows, arrays["nested"].astype(float),
                     arrays["ensembles"].astype(float), facts)


def read_references(folder: Path) -> tuple[Reference, ...]:
    """Read all finished flares of a folder in order, exact or not."""
    return tuple(read_reference(folder, path.stem) for path in sorted(folder.glob("flare-*.json")))

"""The numbers of the learned ray map, as they are stored."""

from __future__ import annotations

import functools
import hashlib
import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from safetensors.numpy import load

from emu.errors import UserError
from emu.raymap.base import Array
from emu.raymap.spin_polynomials import recipe

__all__ = ["Chart", "chart", "read_charts", "shipped"]

_TENSORS = ("drag", "zones", "layout", "trust", "table")


@dataclass(frozen=True)
class Chart:
    """Hold the learned map of one image order.

    Args:
        drag: (8,) first-order shift of the caustic, see emu.raymap.bending.
        zones: (Z, 5) from which sqrt(u) on a zone is used; its first node in sqrt(u) and 1/spacing; the same in x.
        layout: (Z, 5) cells in sqrt(u) and in x, degree, padded number of monomials, place of the first number.
        trust: (6,) least and largest sqrt(u), largest |spin| and x, and the least distance from the caustic, in
            rad: trust[4] + trust[5] u (s1^2 + sN^2).
        table: float32, all zones.
        rows, counts: how monomials are made, see emu.raymap.spin_polynomials.
    """

    drag: Array
    zones: Array
    layout: NDArray[np.int64]
    trust: Array
    table: NDArray[np.float32]
    rows: NDArray[np.int64]
    counts: NDArray[np.int64]


def chart(tensors: dict[str, NDArray[Any]], order: int) -> Chart:
    """Put together the chart of an image order from named tensors."""
    parts = {name: np.ascontiguousarray(tensors[f"order{order}.{name}"]) for name in _TENSORS}
    rows, counts = recipe(int(parts["layout"][:, 2].max()))
    return Chart(**parts, rows=rows, counts=counts)


def read_charts(folder: Path) -> tuple[Chart, Chart]:
    """Read the charts of both image orders from a folder.

    Raises:
        UserError: a file is missing, or the numbers are not those of the manifest.
    """
    try:
        manifest = json.loads((folder / "learned.json").read_text())
        content = (folder / "learned.safetensors").read_bytes()
    except FileNotFoundError as error:
        raise UserError(f"{error.filename}: no such file; make it with `emu-train raymap`") from None
    if hashlib.sha256(content).hexdigest() != manifest["sha256"]:
        raise UserError(f"{folder / 'learned.safetensors'}: the checksum is not that of learned.json; make both again")
    tensors = load(content)
    return chart(tensors, 0), chart(tensors, 1)


@functools.cache
def shipped() -> tuple[Chart, Chart]:
    """Return the charts that the package ships; read once."""
    return read_charts(Path(__file__).with_name("data"))

"""A training set on disk: parameters and noiseless curves in zarr, with a checksum beside every chunk.

``set.json`` says what the set is; ``set.zarr`` holds the arrays, one file a chunk; ``chunks/<number>.json``
is written after a chunk's files, in one step, with their checksum. A chunk without it, or with other bytes
than it says, is not there: zarr alone would read a missing chunk as zeros.
"""

import hashlib
import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import zarr
from numpy.typing import NDArray

from emu.errors import UserError
from training.files import digest, write_atomically

__all__ = ["Layout", "TrainingSet", "create", "missing_chunks", "write_chunk"]

FORMAT = 1
_ARRAYS = {"theta": "float64", "times": "float32", "curves": "float32"}


@dataclass(frozen=True)
class Layout:
    """Say what a set holds, completely: two sets with equal layouts have equal bytes.

    Args:
        model: name or path by which the model is found.
        definition: the model's parameters, kinds and configuration, as text.
        campaign: TOML of the campaign, whose longest window the curves cover.
        version: version of the package that computes the curves.
        parameters: names of the model's P parameters.
        kinds: K curves that are stored.
        half_span: nodes cover -half_span to half_span, GM/c^3.
        nodes: uniform time nodes of every curve, and further ones where it needs them; T in all.
        scale: the error of each kind that matters, in the unit of its curve; it decides where nodes go.
        flares: number N of flares.
        chunk: flares a chunk.
        seed: seed of the set; each chunk has a stream of its own.
    """

    model: str
    definition: str
    campaign: str
    version: str
    parameters: tuple[str, ...]
    kinds: tuple[str, ...]
    half_span: float
    nodes: tuple[int, int]
    scale: tuple[float, ...]
    flares: int
    chunk: int
    seed: int

    @property
    def chunks(self) -> int:
        """Return the number of chunks."""
        return -(-self.flares // self.chunk)

    @property
    def bytes(self) -> int:
        """Return the size of the arrays on disk."""
        flare = 8 * len(self.parameters) + 4 * sum(self.nodes) * (1 + len(self.kinds))
        return self.chunks * self.chunk * flare

    def size(self, chunk: int) -> int:
        """Return how many flares a chunk holds: the last may be short."""
        return min(self.chunk, self.flares - chunk * self.chunk)

    def text(self) -> str:
        """Return the layout as JSON text."""
        table = {"format": FORMAT} | {key: getattr(self, key) for key in self.__dataclass_fields__}
        return json.dumps(table, indent=1, default=list) + "\n"

    @classmethod
    def read(cls, folder: Path) -> "Layout":
        """Read the layout of a set.

        Raises:
            UserError: the folder holds no set, or one of another format.
        """
        try:
            table = json.loads((folder / "set.json").read_text(encoding="utf-8"))
            found = table.pop("format")
        except (OSError, ValueError, KeyError, AttributeError) as problem:
            raise UserError(f"{folder}: no training set; make one with emu-train simulate") from problem
        if found != FORMAT:
            raise UserError(f"{folder}: a set of format {found}, this program reads {FORMAT}; make anew")
        return cls(**{key: tuple(value) if isinstance(value, list) else value for key, value in table.items()})


@dataclass(frozen=True)
class TrainingSet:
    """Hold a complete set in memory.

    Args:
        layout: what it is.
        theta: (N, P) float64 model parameters; axis_angle 0 and brightness 1 where the model has a
            standard frame.
        times: (N, T) float32 time nodes, GM/c^3.
        curves: (N, T, K) float32 noiseless curves.
        records: what `write_chunk` was given, one a chunk.
    """

    layout: Layout
    theta: NDArray[np.float64]
    times: NDArray[np.float32]
    curves: NDArray[np.float32]
    records: tuple[dict[str, Any], ...]

    @classmethod
    def load(cls, folder: Path) -> "TrainingSet":
        """Load a set and check every byte.

        Raises:
            UserError: it is not complete, or a chunk is not what its checksum says.
        """
        layout = Layout.read(folder)
        absent = missing_chunks(folder, layout)
        if absent:
            raise UserError(
                f"{folder}: {len(absent)} of {layout.chunks} chunks are missing or torn (first: {absent[0]});"
                " run the same emu-train simulate again"
            )
        group = zarr.open_group(folder / "set.zarr", mode="r")
        records = tuple(json.loads(_sidecar(folder, chunk).read_text()) for chunk in range(layout.chunks))
        return cls(layout, *(np.asarray(group[name][:]) for name in _ARRAYS), records)


def create(folder: Path, layout: Layout) -> None:
    """Begin a set, or find that this very set was begun before.

    Raises:
        UserError: the folder holds a set of another configuration.
    """
    described = folder / "set.json"
    if described.exists():
        found = Layout.read(folder)
        if found != layout:
            other = [key for key in layout.__dataclass_fields__ if getattr(found, key) != getattr(layout, key)]
            raise UserError(f"{folder}: holds a set with another {', '.join(other)}; give another --out, or delete it")
    else:
        write_atomically(described, layout.text().encode())
    # Metadata are the same bytes every time, so that it does no harm to write them again after a kill.
    group = zarr.open_group(folder / "set.zarr", mode="a", zarr_format=3)
    per_flare = ((len(layout.parameters),), (sum(layout.nodes),), (sum(layout.nodes), len(layout.kinds)))
    for (name, dtype), shape in zip(_ARRAYS.items(), per_flare, strict=True):
        if name not in group:
            group.create_array(
                name,
                shape=(layout.flares, *shape),
                chunks=(layout.chunk, *shape),
                dtype=dtype,
                compressors=None,
            )


def write_chunk(
    folder: Path,
    layout: Layout,
    chunk: int,
    arrays: tuple[NDArray[np.float64], NDArray[np.float32], NDArray[np.float32]],
    record: dict[str, Any],
) -> None:
    """Write one chunk, then its checksum and record.

    Args:
        folder: of the set.
        layout: of the set.
        chunk: its number.
        arrays: theta (C, P), times (C, T) and curves (C, T, K).
        record: what else is to be known about it; plain JSON.
    """
    _sidecar(folder, chunk).unlink(missing_ok=True)
    group = zarr.open_group(folder / "set.zarr", mode="r+")
    part = slice(chunk * layout.chunk, chunk * layout.chunk + layout.size(chunk))
    for name, array in zip(_ARRAYS, arrays, strict=True):
        group[name][part] = array
    text = json.dumps({"sha256": _checksum(folder, chunk)} | record, sort_keys=True)
    write_atomically(_sidecar(folder, chunk), text.encode())


def missing_chunks(folder: Path, layout: Layout) -> list[int]:
    """Return the numbers of chunks that are absent, torn or altered."""
    return [chunk for chunk in range(layout.chunks) if not _whole(folder, chunk)]


def _whole(folder: Path, chunk: int) -> bool:
    try:
        said = json.loads(_sidecar(folder, chunk).read_text())["sha256"]
        return bool(said == _checksum(folder, chunk))
    except (OSError, ValueError, KeyError, TypeError):
        return False


def _sidecar(folder: Path, chunk: int) -> Path:
    return folder / "chunks" / f"{chunk:06d}.json"


def _checksum(folder: Path, chunk: int) -> str:
    """Return the checksum of a chunk's files, at the places that the zarr v3 specification gives them."""
    places = f"theta/c/{chunk}/0", f"times/c/{chunk}/0", f"curves/c/{chunk}/0/0"
    files = (folder / "set.zarr" / place for place in places)
    return hashlib.sha256("".join(map(digest, files)).encode()).hexdigest()

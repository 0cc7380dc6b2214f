"""Files that are either whole or not there."""

import hashlib
import os
from pathlib import Path

__all__ = ["digest", "write_atomically"]


def write_atomically(path: Path, content: bytes) -> None:
    """Write a file in one step: whoever looks, even after a kill, finds the old file or the new one.

    Args:
        path: where; folders are made.
        content: all of it.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    partial = path.with_name(f".{path.name}.{os.getpid()}.partial")
    with partial.open("wb") as stream:
        stream.write(content)
        stream.flush()
        os.fsync(stream.fileno())
    partial.replace(path)


def digest(path: Path) -> str:
    """Return the SHA-256 of a file in hexadecimal."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()

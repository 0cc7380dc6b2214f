"""The fingerprint of files and folders, so that a record can say exactly what was used."""

from __future__ import annotations

import hashlib
from pathlib import Path

__all__ = ["checksum"]


def checksum(path: Path) -> str:
    """Return the SHA-256 of a file, or of the names and checksums of all files of a folder."""
    if not path.is_dir():
        return hashlib.sha256(path.read_bytes()).hexdigest()
    parts = sorted(inner for inner in path.rglob("*") if inner.is_file())
    lines = "".join(f"{checksum(inner)}  {inner.relative_to(path).as_posix()}\n" for inner in parts)
    return hashlib.sha256(lines.encode()).hexdigest()

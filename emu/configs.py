"""The TOML files of families, campaigns, training and targets: find them, read them, check their keys.

A config is named either by the bare name of a shipped file or by the path of a user's own ``.toml``.
"""

import tomllib
from collections.abc import Collection, Mapping
from pathlib import Path
from typing import Any

from emu.errors import UserError

__all__ = ["config_names", "config_text", "read_toml", "check_keys", "number"]

KINDS = ("families", "campaigns", "training", "targets")
_SINGULAR = {
    "families": "family",
    "campaigns": "campaign",
    "training": "training config",
    "targets": "target",
}
_PACKAGE = Path(__file__).resolve().parent


def _shipped(kind: str) -> Path:
    """Return the folder of the shipped configs of a kind: the wheel's copy, else the checkout's own."""
    if kind not in KINDS:
        raise ValueError(f"unknown kind of config {kind!r}: one of {', '.join(KINDS)}")
    copy = _PACKAGE / "configs"
    return (copy if copy.is_dir() else _PACKAGE.parent / "configs") / kind


def config_names(kind: str) -> tuple[str, ...]:
    """List the shipped configs of a kind.

    Args:
        kind: "families", "campaigns", "training" or "targets".

    Returns:
        Bare names in alphabetical order; empty where nothing of this kind is shipped.
    """
    return tuple(sorted(path.stem for path in _shipped(kind).glob("*.toml")))


def config_text(kind: str, name: str) -> tuple[str, str]:
    """Return the text of a config and the place it came from.

    Args:
        kind: "families", "campaigns", "training" or "targets".
        name: bare name of a shipped config, or the path of a file that ends in ``.toml``.

    Returns:
        The TOML text, and a short name of the file for error messages.

    Raises:
        UserError: no such name, or the file cannot be read.
    """
    if name.endswith(".toml"):
        return _read(Path(name)), name
    if name not in config_names(kind):
        raise UserError(
            f"no {_SINGULAR[kind]} {name!r}: one of {', '.join(config_names(kind)) or 'none shipped'},"
            " or the path of a .toml file"
        )
    return _read(_shipped(kind) / f"{name}.toml"), f"configs/{kind}/{name}.toml"


def _read(path: Path) -> str:
    try:
        return path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as problem:
        reason = problem.strerror if isinstance(problem, OSError) else "it is not UTF-8 text"
        raise UserError(f"{path}: cannot be read: {reason}") from problem


def read_toml(kind: str, name: str) -> dict[str, Any]:
    """Parse a config.

    Args:
        kind: "families", "campaigns", "training" or "targets".
        name: bare name of a shipped config, or the path of a file that ends in ``.toml``.

    Returns:
        The table as tomllib gives it; its keys are checked by whoever uses them.

    Raises:
        UserError: no such name, the file cannot be read, or it is not TOML.
    """
    text, where = config_text(kind, name)
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as problem:
        raise UserError(f"{where}: not valid TOML: {problem}") from problem


def check_keys(
    table: Mapping[str, Any], required: Collection[str], optional: Collection[str], where: str
) -> None:
    """Refuse a table with an unknown or a missing key.

    Args:
        table: a parsed TOML table.
        required: keys that must be there.
        optional: keys that may be there.
        where: file and table, for the message.

    Raises:
        UserError: the first unknown key, else the first missing one.
    """
    allowed = (*required, *(key for key in optional if key not in required))
    for key in table:
        if key not in allowed:
            raise UserError(f"{where}: unknown key {key!r}; allowed: {', '.join(allowed)}")
    for key in required:
        if key not in table:
            raise UserError(f"{where}: key {key!r} is missing")


def number(table: Mapping[str, Any], key: str, where: str) -> float:
    """Return a key of a table as a finite float; text and booleans are never coerced.

    Args:
        table: a parsed TOML table that holds the key.
        key: its name.
        where: file and table, for the message.

    Raises:
        UserError: the value is not a finite number.
    """
    value = table[key]
    if isinstance(value, bool) or not isinstance(value, int | float) or not abs(value) < float("inf"):
        raise UserError(f"{where}: {key} is {value!r}; give a finite number")
    return float(value)

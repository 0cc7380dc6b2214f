"""Ranges in a campaign's TOML: two ordered numbers or counts."""

from collections.abc import Mapping
from typing import Any

from emu.configs import number
from emu.errors import UserError

__all__ = ["number_range", "count_range"]


def number_range(table: Mapping[str, Any], key: str, where: str) -> tuple[float, float]:
    """Return a key of a table as a pair low <= high of finite numbers.

    Args:
        table: a parsed TOML table that holds the key.
        key: its name.
        where: file and table, for the message.

    Raises:
        UserError: not two finite numbers in ascending order.
    """
    pair = table[key]
    if not isinstance(pair, list) or len(pair) != 2:
        raise UserError(f"{where}: {key} is {pair!r}; give a range [low, high]")
    low, high = (number({key: end}, key, where) for end in pair)
    if low > high:
        raise UserError(f"{where}: {key} is [{low}, {high}]; put the lower end first")
    return low, high


def count_range(table: Mapping[str, Any], key: str, where: str) -> tuple[int, int]:
    """Return a key of a table as a pair 0 <= low <= high of whole numbers.

    Args:
        table: a parsed TOML table that holds the key.
        key: its name.
        where: file and table, for the message.

    Raises:
        UserError: not two whole numbers >= 0 in ascending order.
    """
    low, high = number_range(table, key, where)
    if low < 0 or not all(isinstance(end, int) for end in table[key]):
        raise UserError(f"{where}: {key} is {table[key]!r}; give whole numbers from 0")
    return int(low), int(high)

"""The target that a table itself names in its metadata."""

from collections.abc import Mapping
from typing import Any

from emu.configs import config_names, read_toml
from emu.errors import UserError
from emu.observe.sheet import Sheet
from emu.units import Target

__all__ = ["target_of"]


def target_of(sheet: Sheet) -> Target | None:
    """Return the target of a flare.

    Args:
        sheet: rows of one flare; its metadata may hold `target`: a table {name, mass, distance}, the name
            of a shipped target, or any other text, which is a label only.

    Returns:
        The target, or None where the table does not say its mass and distance.

    Raises:
        UserError: the table of the target is wrong.
    """
    stated = sheet.meta.get("target")
    where = f"{sheet.where}: target"
    if stated is None:
        return None
    if isinstance(stated, str):
        shipped = stated in config_names("targets")
        return Target.from_table(read_toml("targets", stated), where) if shipped else None
    if not isinstance(stated, Mapping):
        raise UserError(f"{where} is {stated!r}; give {{name: text, mass: solar masses, distance: kpc}}")
    return Target.from_table({key: _number_of(value) for key, value in stated.items()}, where)


def _number_of(value: Any) -> Any:
    # YAML reads 5.0e6, without a sign in the exponent, as a text; whoever writes it means the number.
    try:
        return float(value) if isinstance(value, str) else value
    except ValueError:
        return value

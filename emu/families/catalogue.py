"""All families by name: a new path, change or density is one file elsewhere and one line here."""

from __future__ import annotations

import json
import tomllib
from collections.abc import Callable, Mapping
from typing import Any

from emu.configs import check_keys, config_names, config_text, number
from emu.errors import UserError
from emu.families.density import Density
from emu.families.family import Family
from emu.families.normal import Normal
from emu.families.parameters import Parameter
from emu.families.priors import CosUniform, LogUniform, SinUniform, TwoSided, Uniform
from emu.families.vocabulary import WORDS, named
from emu.source.change import FieldChange
from emu.source.drift import Drift
from emu.source.frozen import Frozen
from emu.source.helix import Helix
from emu.source.midplane import Midplane
from emu.source.motion import Path
from emu.source.scatter import Scatter
from emu.source.source import Source
from emu.source.turbulent import Turbulent
from emu.source.turning import Turning

__all__ = ["family", "family_names", "family_text", "parse_family"]

# The only place where the words of a TOML become parts.
_PATHS: dict[str, Path] = {"midplane": Midplane(), "helix": Helix(), "drift": Drift()}
_INNER: dict[str, tuple[FieldChange, Scatter | None]] = {
    "frozen": (Frozen(), None),
    "turning": (Turning(), None),
    "turbulent": (Frozen(), Turbulent()),
    "turning+turbulent": (Turning(), Turbulent()),
}
_DENSITIES: dict[str, Callable[[float, float], Density]] = {
    "uniform": Uniform,
    "log_uniform": LogUniform,
    "cos_uniform": CosUniform,
    "sin_uniform": SinUniform,
    "two_sided": TwoSided,
    "normal": Normal,
}
_REQUIRED = ("name", "description", "path", "inner", "valid", "r_min", "parameters")
_OPTIONAL = {"bumps": 1, "spot": False, "orders": 1}


def family_names() -> tuple[str, ...]:
    """Return the names of the shipped families; `installed_names` has those of other packages."""
    return config_names("families")


def family(name: str) -> Family:
    """Return a family of ours; `emu.families.installed.model` finds models of other packages too.

    Args:
        name: a shipped family, or the path of a `.toml` file.

    Raises:
        UserError: it cannot be found or read, or makes no sense.
    """
    return parse_family(*config_text("families", name))


def parse_family(text: str, where: str) -> Family:
    """Build a family from its TOML text.

    Args:
        text: TOML with name, description, path, inner, valid, r_min, [parameters] and optionally bumps,
            spot and orders.
        where: name of the file, for error messages.

    Raises:
        UserError: one line that names file, key and cure.
    """
    try:
        table = tomllib.loads(text)
    except tomllib.TOMLDecodeError as problem:
        raise UserError(f"{where}: not valid TOML: {problem}") from problem
    check_keys(table, _REQUIRED, tuple(_OPTIONAL), where)
    path, inner = _choice(table, "path", tuple(_PATHS), where), _choice(table, "inner", tuple(_INNER), where)
    bumps, spot, orders = (
        _choice({**_OPTIONAL, **table}, key, allowed, where)
        for key, allowed in (("bumps", (1, 2)), ("spot", (False, True)), ("orders", (1, 2)))
    )
    source = Source(_PATHS[path], *_INNER[inner], bumps)
    interval, r_min = _validity(table, where)
    return Family(
        name=_text(table, "name", where),
        description=_text(table, "description", where),
        path=path,
        inner=inner,
        source=source,
        parameters=_parameters(table["parameters"], _names(source, spot), f"{where}: [parameters]"),
        valid_interval=interval,
        r_min=r_min,
        bumps=bumps,
        spot=spot,
        orders=orders,
    )


def family_text(family: Family) -> str:
    """Return the TOML text from which `parse_family` builds the same family again."""
    lines = [
        f"name = {_quoted(family.name)}",
        f"description = {_quoted(family.description)}",
        f"path = {_quoted(family.path)}",
        f"inner = {_quoted(family.inner)}",
        f"valid = {list(family.valid_interval)!r}",
        f"r_min = {family.r_min!r}",
        f"bumps = {family.bumps}",
        f"spot = {str(family.spot).lower()}",
        f"orders = {family.orders}",
        "",
        "[parameters]",
    ]
    words = {density: word for word, density in _DENSITIES.items()}
    for parameter in family.parameters:
        numbers = [float(value) for value in vars(parameter.prior).values()]
        lines.append(f"{parameter.name} = {{ {words[type(parameter.prior)]} = {numbers!r} }}")
    return "\n".join(lines) + "\n"


def _validity(table: Mapping[str, Any], where: str) -> tuple[tuple[float, float], float]:
    """Read where a path must be possible: over which emission times, and down to which radius."""
    interval, r_min = _pair(table, "valid", where), number(table, "r_min", where)
    if not interval[0] < 0.0 < interval[1]:
        raise UserError(f"{where}: valid is {list(interval)}; give an interval that holds time 0")
    if r_min < 1.0:
        raise UserError(f"{where}: r_min is {r_min:g}; give 1 or more, the least radius of any horizon")
    return interval, r_min


def _names(source: Source, spot: bool) -> tuple[str, ...]:
    """List the parameters that a source and its size take, in the order of the vocabulary."""
    taken = {*source.parameter_names, *(("spot_size",) if spot else ())}
    return tuple(sorted(taken, key=list(WORDS).index))


def _parameters(table: Any, names: tuple[str, ...], where: str) -> tuple[Parameter, ...]:
    """Read the prior of every parameter, each written as { density = [first, second] }."""
    if not isinstance(table, dict):
        raise UserError(f"{where}: give a table of priors")
    check_keys(table, names, (), where)
    return tuple(named(name, _density(table[name], f"{where}: {name}"), where) for name in names)


def _density(entry: Any, where: str) -> Density:
    """Build one density from its one-key table."""
    if not isinstance(entry, dict) or len(entry) != 1:
        raise UserError(f"{where}: write {{ density = [first, second] }}, density {' | '.join(_DENSITIES)}")
    check_keys(entry, (), tuple(_DENSITIES), where)
    (word,) = entry
    try:
        return _DENSITIES[word](*_pair(entry, word, where))
    except UserError as problem:
        text = str(problem)
        raise UserError(text if text.startswith(where) else f"{where}: {text}") from problem


def _pair(table: Mapping[str, Any], key: str, where: str) -> tuple[float, float]:
    """Return a key of a table as two finite floats."""
    entry = table[key]
    if not isinstance(entry, list) or len(entry) != 2:
        raise UserError(f"{where}: {key} is {entry!r}; give two numbers")
    first, second = (number({key: value}, key, where) for value in entry)
    return first, second


def _text(table: Mapping[str, Any], key: str, where: str) -> str:
    """Return a key of a table as text."""
    value = table[key]
    if not isinstance(value, str) or not value or not value.isprintable():
        raise UserError(f"{where}: {key} is {value!r}; give one line of text")
    return value


def _choice(table: Mapping[str, Any], key: str, allowed: tuple[Any, ...], where: str) -> Any:
    """Return a key of a table that must be one of a few values of one type."""
    value = table[key]
    if type(value) is not type(allowed[0]) or value not in allowed:
        raise UserError(f"{where}: {key} is {value!r}; one of {', '.join(map(repr, allowed))}")
    return value


def _quoted(text: str) -> str:
    """Write a text as a basic TOML string."""
    return json.dumps(text, ensure_ascii=False)

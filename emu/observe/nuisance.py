"""What the instrument adds to the errors of a flare; a family of models knows nothing of it."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from emu.configs import check_keys
from emu.errors import UserError
from emu.families.parameters import Parameter
from emu.families.priors import LogUniform
from emu.observe.ranges import number_range
from emu.observe.rows import KINDS

__all__ = ["Nuisance", "Jitter", "nuisances"]


class Nuisance(Protocol):
    """Add variance to rows, with parameters of its own that join those of the family."""

    @property
    def parameters(self) -> tuple[Parameter, ...]:
        """The parameters, in the order of the columns of `values`."""
        ...

    def variance(self, values: NDArray[np.float64], kind: NDArray[np.int8]) -> NDArray[np.float64]:
        """Return what is added to the squared error of each row.

        Args:
            values: (N,K) the nuisance's own parameters.
            kind: (N,R), or (1,R) for all alike; int8 index in KINDS.

        Returns:
            (N,R) variance in the squared unit of the row's value.
        """
        ...


@dataclass(frozen=True)
class Jitter:
    """Add an unknown scatter in quadrature to the errors of the q and u rows.

    Its prior is log-uniform: nothing but the order of magnitude is known beforehand.

    Args:
        low, high: range of the scatter, as a fraction of the total flux; 0 < low < high.
    """

    low: float
    high: float

    @property
    def parameters(self) -> tuple[Parameter, ...]:
        """The one parameter `jitter_q_u`."""
        return (Parameter("jitter_q_u", r"\sigma_\mathrm{j}", "", LogUniform(self.low, self.high)),)

    def variance(self, values: NDArray[np.float64], kind: NDArray[np.int8]) -> NDArray[np.float64]:
        """Return jitter² on q and u rows, 0 on all others (Q and U carry a flux, not a fraction)."""
        fraction = (kind == KINDS.index("q")) | (kind == KINDS.index("u"))
        return np.where(fraction, values[:, :1] ** 2, 0.0)


def _jitter(table: Mapping[str, Any], where: str) -> Nuisance:
    check_keys(table, ("range",), (), where)
    low, high = number_range(table, "range", where)
    if not 0.0 < low < high:
        raise UserError(f"{where}: range is [{low}, {high}]; a log-uniform prior needs 0 < low < high")
    return Jitter(low, high)


_MAKERS: dict[str, Callable[[Mapping[str, Any], str], Nuisance]] = {"jitter": _jitter}


def nuisances(table: Mapping[str, Any], where: str) -> tuple[Nuisance, ...]:
    """Build the nuisances of a campaign from its TOML table `[nuisance]`.

    Args:
        table: one sub-table a nuisance, its key the nuisance's name.
        where: file and table, for error messages.

    Returns:
        The nuisances in the order of the file.

    Raises:
        UserError: an unknown nuisance or key, or a bad range.
    """
    check_keys(table, (), tuple(_MAKERS), where)
    return tuple(_MAKERS[name](entry, f"{where}.{name}") for name, entry in table.items())

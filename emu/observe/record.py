"""A flare as it was recorded: rows in measured units, ready to be converted for a target."""

from dataclasses import dataclass

import numpy as np
from astropy import units
from numpy.typing import NDArray

from emu.errors import UserError
from emu.observe.proportion import check_span
from emu.observe.rows import KINDS, Rows
from emu.units import Target

__all__ = ["Flare"]

_FLUXES = tuple(KINDS.index(name) for name in ("flux", "Q", "U"))
_POSITIONS = tuple(KINDS.index(name) for name in ("east", "north"))


@dataclass(frozen=True)
class Flare:
    """Hold the rows of one flare in measured units, in order of time.

    Args:
        name: unique in its table.
        seconds: (R,) float64, after t_ref.
        kind: (R,) int8, index in KINDS.
        value: (R,) float64; flux, Q and U in flux_unit, q and u fractions, east and north microarcseconds.
        error: (R,) float64, 1-sigma, > 0, in the unit of the value.
        flux_unit: as astropy.units reads it; "" without a unit.
        t_ref: the moment that times count from, ISO or a number with its unit.
        where: file, and flare where it holds several; for messages.
        target: what the table itself names as its target, None where it names none.
    """

    name: str
    seconds: NDArray[np.float64]
    kind: NDArray[np.int8]
    value: NDArray[np.float64]
    error: NDArray[np.float64]
    flux_unit: str
    t_ref: str
    where: str
    target: Target | None = None

    def __len__(self) -> int:
        return int(self.seconds.size)

    def rows(self, target: Target, flux_unit: str | None = None) -> Rows:
        """Convert to geometric units.

        Args:
            target: mass and distance, used where the table names no target of its own.
            flux_unit: unit of the campaign, to which flux, Q and U are converted; None leaves them.

        Returns:
            Rows in the same order.

        Raises:
            UserError: the span is out of proportion for the target, or the flux unit does not convert.
        """
        own = self.target or target
        check_span(self.seconds, own, self.where)
        scale = np.ones(len(self))
        scale[np.isin(self.kind, _POSITIONS)] = 1.0 / own.length_unit
        of_flux = np.isin(self.kind, _FLUXES)
        if flux_unit is not None and of_flux.any():
            scale[of_flux] = self._flux_factor(flux_unit)
        return Rows(self.seconds / own.time_unit, self.kind, self.value * scale, self.error * scale)

    def _flux_factor(self, flux_unit: str) -> float:
        try:
            return float(units.Unit(self.flux_unit).to(flux_unit))
        except (units.UnitConversionError, ValueError, TypeError):
            raise UserError(
                f"{self.where}: flux unit {self.flux_unit!r} does not convert to the campaign's "
                f"{flux_unit!r}; give the flux in another unit"
            ) from None

    @classmethod
    def from_rows(cls, rows: Rows, target: Target, name: str, flux_unit: str) -> "Flare":
        """Convert rows in geometric units, for instance simulated ones, to a flare of a target."""
        scale = np.where(np.isin(rows.kind, _POSITIONS), target.length_unit, 1.0)
        return cls(
            name=name,
            seconds=rows.time * target.time_unit,
            kind=rows.kind,
            value=rows.value * scale,
            error=rows.error * scale,
            flux_unit=flux_unit,
            t_ref="0 s",
            where=name,
            target=target,
        )

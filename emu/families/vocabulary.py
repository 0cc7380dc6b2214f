"""The words of all families: what each parameter is called, its label, its unit and where it makes sense."""

from __future__ import annotations

from dataclasses import dataclass

from emu.errors import UserError
from emu.families.density import Density
from emu.families.parameters import Parameter

__all__ = ["WORDS", "named"]


@dataclass(frozen=True)
class Word:
    """Say how a parameter is written and between which values the formulas hold.

    Args:
        symbol: TeX without dollar signs.
        unit: as in `Parameter`.
        low, high: limits of the domain; a prior may not reach beyond.
        circle: True where 0 and 360 degrees mean the same.
    """

    symbol: str
    unit: str
    low: float
    high: float
    circle: bool = False


_ANY = float("inf")

# The order is that of the columns of theta in every family.
WORDS: dict[str, Word] = {
    "spin": Word("a", "", -0.998, 0.998),
    "inclination": Word("i", "deg", 0.0, 180.0),
    "axis_angle": Word(r"\Omega", "deg", 0.0, 360.0, circle=True),
    "radius": Word("R_0", "GM/c2", 0.0, 1000.0),
    "phase": Word(r"\phi_0", "deg", 0.0, 360.0, circle=True),
    "rate": Word(r"\kappa", "", 0.0, _ANY),
    "opening": Word("v_R", "c", -1.0, 1.0),
    "rise": Word("v_z", "c", -1.0, 1.0),
    "height": Word("z_0", "GM/c2", -1000.0, 1000.0),
    "tilt": Word("w", "deg", 0.0, 180.0),
    "pitch": Word("p", "deg", -90.0, 90.0),
    "index": Word("s", "", 0.0, _ANY),
    "polarised_share": Word("h", "", 0.0, 1.0),
    "brightness": Word("A", "flux", 0.0, _ANY),
    "peak_time": Word(r"t_\mathrm{pk}", "GM/c3", -_ANY, _ANY),
    "rise_time": Word(r"w_\mathrm{rise}", "GM/c3", 0.0, _ANY),
    "decay_time": Word(r"w_\mathrm{decay}", "GM/c3", 0.0, _ANY),
    "peak_time_2": Word(r"t_\mathrm{pk,2}", "GM/c3", -_ANY, _ANY),
    "rise_time_2": Word(r"w_\mathrm{rise,2}", "GM/c3", 0.0, _ANY),
    "decay_time_2": Word(r"w_\mathrm{decay,2}", "GM/c3", 0.0, _ANY),
    "weight_2": Word("w_2", "", 0.0, _ANY),
    "spot_size": Word(r"\sigma", "GM/c2", 0.0, 1000.0),
    "turn": Word(r"\Delta\psi", "deg", 0.0, 180.0),
    "roll": Word(r"\rho", "deg", 0.0, 360.0, circle=True),
    "turn_time": Word(r"t_\mathrm{c}", "GM/c3", -_ANY, _ANY),
    "turn_duration": Word(r"\tau", "GM/c3", 0.0, _ANY),
    "dip": Word("d", "", 0.0, 1.0),
    "scatter": Word(r"\sigma_p", "", 0.0, 1.0),
    "cell_lifetime": Word(r"\tau_\mathrm{c}", "GM/c3", 0.0, _ANY),
}


def named(name: str, prior: Density, where: str) -> Parameter:
    """Give a known parameter its prior.

    Args:
        name: a key of WORDS.
        prior: a density within the parameter's domain.
        where: file and table, for the message.

    Raises:
        UserError: the prior reaches beyond the domain.
    """
    word = WORDS[name]
    low, high = prior.bounds
    if low < word.low or high > word.high:
        raise UserError(
            f"{where}: the prior of {name} reaches from {low:g} to {high:g}; stay within {word.low:g} to {word.high:g}"
        )
    # An arc is an ordinary interval; only a prior over the whole circle has no ends.
    circular = word.circle and (low, high) == (0.0, 360.0)
    return Parameter(name, word.symbol, word.unit, prior, circular)

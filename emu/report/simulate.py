"""`emu simulate`: invent flares with known truth, as a campaign would have measured them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from emu import __version__
from emu.errors import UserError
from emu.observe.flare import Flare, write_flares
from emu.problem import Problem, problem

__all__ = ["Invented", "invent", "simulate"]

# A model that fails this often is broken, and waiting for it would be in vain.
_MOST_FAILURES = 20


@dataclass(frozen=True)
class Invented:
    """Hold invented flares.

    Args:
        flares: in the measured units of the campaign's target.
        truth: flare name -> parameter name -> value.
        failed: further draws of the prior that were left out because a point could not be computed.
    """

    flares: tuple[Flare, ...]
    truth: Mapping[str, Mapping[str, float]]
    failed: int


def invent(seen: Problem, count: int, seed: int) -> Invented:
    """Draw parameters from the prior, schedules from the campaign, and measure.

    Args:
        seen: model and campaign.
        count: number of flares.
        seed: of the random generator.

    Raises:
        UserError: the model cannot compute most of its own prior.
    """
    rng = np.random.default_rng(seed)
    flares: list[Flare] = []
    truth: dict[str, dict[str, float]] = {}
    failed = 0
    while len(flares) < count:
        wanted = count - len(flares)
        theta = seen.prior.sample(wanted, rng)
        batch, failures = seen.simulate(theta, seen.campaign.draw(wanted, rng), rng)
        for place in np.flatnonzero(failures == 0):
            name = f"{seen.name}-{seed}-{len(flares) + 1:03}"
            rows = batch.rows(int(place))
            flares.append(Flare.from_rows(rows, seen.campaign.target, name, seen.campaign.flux_unit))
            truth[name] = {key: float(x) for key, x in zip(seen.prior.names, theta[place], strict=True)}
        failed += int(np.count_nonzero(failures))
        if failed > _MOST_FAILURES * count:
            raise UserError(f"{seen.name}: {failed} draws of its prior cannot be computed; correct the model")
    return Invented(tuple(flares), truth, failed)


def simulate(family: str, campaign: str, out: Path, count: int = 1, seed: int = 0) -> int:
    """Write invented flares and their truth.

    Args:
        family: name or path of a family, or an installed model.
        campaign: name or path of a campaign.
        out: an .ecsv file for all flares, or a folder for one file a flare; files are replaced.
        count: number of flares.
        seed: the same flares for the same seed.

    Returns:
        0.

    Raises:
        UserError: a config is wrong, or a file cannot be written.
    """
    seen = problem(family, campaign)
    invented = invent(seen, count, seed)
    origin = (
        f"invented by emu {__version__}: {seen.name} in campaign {seen.campaign.name}, seed {seed}; "
        f"{invented.failed} further draws could not be computed and were left out"
    )
    if out.suffix == ".ecsv":
        out.parent.mkdir(parents=True, exist_ok=True)
        write_flares(out, invented.flares, invented.truth, origin)
    elif out.suffix:
        raise UserError(f"{out}: flares are written as ECSV; give a name in .ecsv, or a folder")
    else:
        out.mkdir(parents=True, exist_ok=True)
        for flare in invented.flares:
            write_flares(out / f"{flare.name}.ecsv", [flare], {flare.name: invented.truth[flare.name]}, origin)
    print(f"{out}: {count} flares {origin}")
    return 0

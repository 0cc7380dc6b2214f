"""Draws of a whole run as one xarray DataTree in the groups and dimensions that ArviZ expects.

A group a family, and within it `posterior`, `sample_stats` and `prior`, with the dimensions (chain,
draw, flare): the flare is an ordinary dimension after chain and draw. One group a flare would mean
thousands of small files; this way a thousand flares are a few hundred and open in an instant.
"""

from __future__ import annotations

import warnings
from collections.abc import Iterable, Iterator, Mapping, Sequence
from pathlib import Path

import numpy as np
import xarray as xr

from emu.families.density import Array
from emu.families.parameters import Parameter
from emu.observe.rows import KINDS, RowBatch, Rows
from emu.report.posterior import Posterior

__all__ = ["draws_groups", "write_groups"]

_BLOCK = 64  # flares in a stored chunk: one flare is read quickly and few files are made

_STATS = {
    "log_prior": "ln of the prior density",
    "log_q": "ln of the density from which the draw was made",
    "log_likelihood": "ln of the exact likelihood; -inf where a ray could not be solved",
    "log_weight": "ln of the importance weight towards the exact posterior, normalised over the draws",
}

_OF_FLARES = ("ess", "khat", "efficiency", "log_evidence", "log_evidence_error", "outside", "unsolved")


def draws_groups(
    flares: Mapping[str, Rows],
    posteriors: Mapping[str, Sequence[Posterior]],
    parameters: Mapping[str, Sequence[Parameter]],
    priors: Mapping[str, Array],
    probabilities: Array,
    attrs: Mapping[str, str | int],
) -> Iterator[tuple[str, xr.Dataset]]:
    """Arrange the results of a run, one group after the other so that few are in memory at once.

    Args:
        flares: F flares by name, rows in geometric units.
        posteriors: family -> posteriors of some or all of these flares; the others become NaN.
        parameters: family -> its P parameters, in the order of theta's columns.
        priors: family -> (M, P) draws of its prior.
        probabilities: (F, number of families) probability of each family given each flare.
        attrs: attributes of the root.

    Yields:
        Path and content of the root, of observed_data, family_probability, and of <family>, and within it
        posterior, sample_stats and prior.
    """
    names = list(flares)
    families = list(posteriors)
    yield "/", xr.Dataset(attrs={**attrs, "families": families})
    yield "/observed_data", _observed(flares)
    yield (
        "/family_probability",
        xr.Dataset(
            {"probability": (("flare", "family"), probabilities)},
            {"flare": _text(names), "family": _text(families)},
        ),
    )
    for family, each in posteriors.items():
        chosen = parameters[family]
        yield f"/{family}", xr.Dataset(attrs={"parameters": [p.name for p in chosen]})
        yield f"/{family}/posterior", _posterior(names, each, chosen)
        yield f"/{family}/sample_stats", _stats(names, each)
        yield f"/{family}/prior", _prior(priors[family], chosen)


def write_groups(groups: Iterable[tuple[str, xr.Dataset]], path: Path) -> None:
    """Write groups as a zarr store (format 3) that `xarray.open_datatree` opens as one tree.

    Args:
        groups: what `draws_groups` yields.
        path: the store, a folder that does not exist yet.
    """
    import zarr

    for group, content in groups:
        content.to_zarr(
            path, group=group, mode="a", encoding=_chunks(content), zarr_format=3, consolidated=False
        )
    with warnings.catch_warnings():
        # The metadata stay node by node as well, so a reader without this extension loses nothing.
        warnings.filterwarnings("ignore", message="Consolidated metadata is currently not part")
        zarr.consolidate_metadata(path)


def _chunks(node: xr.Dataset) -> dict[str, dict[str, tuple[int, ...]]]:
    """Choose chunks: all draws of a block of flares."""
    return {
        str(name): {
            "chunks": tuple(max(1, min(n, _BLOCK) if d == "flare" else n) for d, n in variable.sizes.items())
        }
        for name, variable in node.data_vars.items()
    }


def _text(names: Sequence[str]) -> np.ndarray:
    """Make an array of texts of any length."""
    return np.array(names, dtype=object)


def _draw_coordinates(names: Sequence[str], chains: int, draws: int) -> dict[str, np.ndarray]:
    """Number chains and draws and name the flares."""
    return {"chain": np.arange(chains), "draw": np.arange(draws), "flare": _text(names)}


def _by_flare(names: Sequence[str], each: Mapping[str, Array]) -> Array:
    """Stack arrays (C, D) along a last flare axis, NaN where a flare has none."""
    shape = next(iter(each.values())).shape
    block = np.full((len(names), *shape), np.nan)
    for place, name in enumerate(names):
        if name in each:
            block[place] = each[name]
    return np.ascontiguousarray(np.moveaxis(block, 0, -1))


def _posterior(
    names: Sequence[str], each: Sequence[Posterior], parameters: Sequence[Parameter]
) -> xr.Dataset:
    """Make a variable a parameter with dimensions (chain, draw, flare)."""
    if not each:
        return xr.Dataset(attrs={"answered": 0})
    chains, draws, _ = each[0].theta.shape
    return xr.Dataset(
        {
            parameter.name: (
                ("chain", "draw", "flare"),
                _by_flare(names, {p.flare: p.theta[..., column] for p in each}),
                _labels(parameter),
            )
            for column, parameter in enumerate(parameters)
        },
        _draw_coordinates(names, chains, draws),
        {"method": each[0].method, "sample_dims": ["chain", "draw"]},
    )


def _stats(names: Sequence[str], each: Sequence[Posterior]) -> xr.Dataset:
    """Put densities and weights of every draw, and diagnostics of every flare, beside the draws."""
    if not each:
        return xr.Dataset()
    chains, draws, _ = each[0].theta.shape
    present = [name for name in _STATS if any(name in p.stats for p in each)]
    beside: dict[str, tuple[tuple[str, ...], Array, dict[str, str]]] = {
        name: (
            ("chain", "draw", "flare"),
            _by_flare(names, {p.flare: p.stats[name] for p in each if name in p.stats}),
            {"description": _STATS[name]},
        )
        for name in present
    }
    for number in _OF_FLARES:
        of_flare = {p.flare: float(getattr(p, number)) for p in each}
        beside[number] = (("flare",), np.array([of_flare.get(name, np.nan) for name in names]), {})
    return xr.Dataset(beside, _draw_coordinates(names, chains, draws))


def _prior(draws: Array, parameters: Sequence[Parameter]) -> xr.Dataset:
    """Make the group of prior draws, the same for every flare."""
    return xr.Dataset(
        {p.name: (("chain", "draw"), draws[None, :, k], _labels(p)) for k, p in enumerate(parameters)},
        {"chain": np.arange(1), "draw": np.arange(len(draws))},
    )


def _labels(parameter: Parameter) -> dict[str, str | int]:
    """Say in attributes what a reader needs for an axis label."""
    return {"symbol": parameter.symbol, "units": parameter.unit, "circular": int(parameter.circular)}


def _observed(flares: Mapping[str, Rows]) -> xr.Dataset:
    """Keep the measurements that were used, padded to the longest flare (row >= count is padding)."""
    batch = RowBatch.stack(list(flares.values()))
    two = ("flare", "row")
    return xr.Dataset(
        {
            "time": (two, batch.time, {"units": "GM/c3", "description": "after t_ref"}),
            "kind": (
                two,
                batch.kind,
                {"flag_meanings": " ".join(KINDS), "description": "index in flag_meanings"},
            ),
            "value": (two, batch.value),
            "error": (two, batch.error),
            "count": (("flare",), batch.mask.sum(axis=1)),
        },
        {"flare": _text(list(flares))},
    )

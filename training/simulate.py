"""Fill a training set: prior draws and their noiseless curves, chunk by chunk, in several processes."""

import shutil
from collections.abc import Iterable, Iterator
from functools import partial
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

from emu import __version__
from emu.errors import UserError
from emu.families.catalogue import family_text
from emu.families.family import Family
from emu.families.installed import model
from emu.families.model import Model
from emu.observe.campaign import campaign as read_campaign
from emu.problem import Problem
from emu.processes import in_processes
from training.nodes import Refined, refine
from training.store import Layout, create, missing_chunks, write_chunk

__all__ = ["STANDARD", "layout_of", "model_text", "simulate", "simulate_problem"]

Array = NDArray[np.float64]

CHUNK = 500  # flares; part of the configuration: another chunk size would give other draws
NODES = (96, 64)
STANDARD = {"axis_angle": 0.0, "brightness": 1.0}
_FINE = 0.1  # a curve is coarse where interpolation may err by more than this, in units of the best error
_MOST_REDRAWN = 0.2  # a model that fails more often than this is broken, not unlucky


def simulate(
    family: str, campaign: str, out: Path, flares: int, seed: int, workers: int = 2, show: bool = True
) -> Path:
    """Make a training set of a family for a campaign, or go on with one that was cut short.

    Args:
        family: shipped family, TOML path, or entry-point name of a user's model.
        campaign: shipped campaign or TOML path.
        out: folder of the set.
        flares: number of flares.
        seed: the set is bit-identical for a seed, whatever the number of processes.
        workers: processes.
        show: whether to show progress.

    Returns:
        The folder.

    Raises:
        UserError: another set stands there, or the disk is too small.
    """
    joined = Problem(model(family), read_campaign(campaign))
    layout = layout_of(joined, flares, seed, family)
    simulate_problem(joined, layout, out, workers, show)
    return out


def layout_of(
    problem: Problem, flares: int, seed: int, source: str | None = None, nodes: tuple[int, int] = NODES
) -> Layout:
    """Describe the set that `simulate_problem` will make.

    Args:
        problem: model and campaign.
        flares: number of flares.
        seed: of the set.
        source: name or path by which the model is found again; its own name where None.
        nodes: uniform time nodes, and further ones where a curve needs them.
    """
    model = problem.model
    needed = {kind for stream in problem.campaign.streams for kind in stream.kinds}
    needed |= {"q", "flux"} if "Q" in needed else set()
    needed |= {"u", "flux"} if "U" in needed else set()
    needed |= {"q", "u"} if needed & {"q", "u"} else set()  # they mix when the axis angle turns
    needed |= {"east", "north"} if needed & {"east", "north"} else set()
    kinds = tuple(kind for kind in model.kinds if kind in needed)
    return Layout(
        model=source or model.name,
        definition=model_text(model),
        campaign=problem.campaign.text,
        version=__version__,
        parameters=tuple(parameter.name for parameter in model.parameters),
        kinds=kinds,
        half_span=problem.campaign.half_span,
        nodes=nodes,
        scale=tuple(_best_error(problem, kind) for kind in kinds),
        flares=flares,
        chunk=CHUNK,
        seed=seed,
    )


def model_text(model: Model) -> str:
    """Return what decides a model's curves and prior, as far as text can tell."""
    if isinstance(model, Family):
        return family_text(model)
    lines = [f"kinds {model.kinds}", f"standard_frame {model.standard_frame}"]
    return "\n".join([*lines, *map(repr, model.parameters)])


def simulate_problem(problem: Problem, layout: Layout, out: Path, workers: int, show: bool = False) -> None:
    """Make the chunks of a set that are not there yet.

    Args:
        problem: model and campaign; pickled where more than one process works.
        layout: from `layout_of`.
        out: folder of the set.
        workers: processes.
        show: whether to show progress.
    """
    _check_disk(out, layout)
    create(out, layout)
    for leftover in out.rglob("*.partial"):  # of a run that was killed
        leftover.unlink(missing_ok=True)
    todo = missing_chunks(out, layout)
    work = partial(_make_chunk, problem.model, problem, layout, out)
    done = in_processes(work, todo, workers)
    failures = sum(_shown(done, layout, todo) if show else done)
    if failures and show:
        Console(stderr=True).print(f"{problem.name}: {failures} curves failed and were drawn anew")


def _check_disk(out: Path, layout: Layout) -> None:
    place = next(folder for folder in (out.absolute(), *out.absolute().parents) if folder.exists())
    there = sum(file.stat().st_size for file in (out / "set.zarr").rglob("*") if file.is_file())
    free = shutil.disk_usage(place).free
    need = layout.bytes - there
    if need > 0.95 * free:
        raise UserError(f"{out}: the set needs {need / 1e9:.2f} GB, {free / 1e9:.2f} GB are free")


def _shown(done: Iterable[int], layout: Layout, todo: list[int]) -> Iterator[int]:
    """Pass results on and show progress with rate and remaining time."""
    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TextColumn("{task.fields[rate]}"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=Console(stderr=True)) as progress:
        task = progress.add_task(f"simulate {layout.model}", total=layout.flares, rate="")
        absent = sum(layout.size(chunk) for chunk in todo)
        progress.update(task, completed=layout.flares - absent)
        for finished, failures in enumerate(done, 1):
            elapsed = progress.tasks[task].elapsed or 1.0
            flares = sum(layout.size(chunk) for chunk in todo[:finished])
            progress.update(task, completed=layout.flares - absent + flares, rate=f"{flares / elapsed:.0f} flares/s")
            yield failures


def _make_chunk(model: Model, problem: Problem, layout: Layout, out: Path, chunk: int) -> int:
    """Draw, compute and write one chunk; return how many curves failed."""
    rng = np.random.default_rng(np.random.SeedSequence(layout.seed, spawn_key=(chunk,)))
    parts, failed, have = [], [], 0
    while have < layout.size(chunk):
        drawn = problem.prior.sample(layout.size(chunk) - have, rng)[:, : len(layout.parameters)]
        drawn = _standard(model, drawn)
        made = _refined(model, drawn, layout)
        good = (made.failures == 0) & np.isfinite(made.curves).all(axis=(1, 2))
        parts.append((drawn[good], made.times[good], made.curves[good].astype(np.float32), made.error[good]))
        failed += drawn[~good].tolist()
        have += int(good.sum())
        if len(failed) > max(10.0, _MOST_REDRAWN * layout.size(chunk)):
            raise RuntimeError(f"{layout.model}: too many curves fail in chunk {chunk}: {failed[0]}")
    theta, times, curves, error = (np.concatenate(arrays) for arrays in zip(*parts, strict=True))
    record = {"failures": len(failed), "failed": failed, "coarse": int((error > _FINE).sum())}
    write_chunk(out, layout, chunk, (theta, times, curves), record)
    return len(failed)


def _refined(model: Model, theta: Array, layout: Layout) -> Refined:
    """Compute the curves of theta (N, P) on nodes that follow their shape."""

    def evaluate(times: Array) -> tuple[Array, NDArray[np.int64]]:
        made = model.curves(theta, times)
        failures = made.get("failures", np.zeros(len(theta)))
        return np.stack([made[kind] for kind in layout.kinds], axis=-1), np.asarray(failures, np.int64)

    return refine(evaluate, len(theta), layout.half_span, np.array(layout.scale), layout.nodes)


def _best_error(problem: Problem, kind: str) -> float:
    """Return the smallest error a campaign gives a curve, in the unit of the stored curve."""
    of_flux, brightest = {"flux", "Q", "U"}, 1.0
    if problem.model.standard_frame:  # stored at brightness 1: an error of the curve grows with it
        brightest = max((p.bounds[1] for p in problem.model.parameters if p.name == "brightness"), default=1.0)
    found = []
    for stream in problem.campaign.streams:
        kinds, error = set(stream.kinds), stream.error[0]
        if kind in ("east", "north") and kinds & {"east", "north"}:
            found.append(error / problem.campaign.target.length_unit)
        elif kind == "flux" and kinds & of_flux:
            found.append(error / brightest)
        elif kind in ("q", "u") and kinds & {"q", "u"}:
            found.append(error)
        elif kind in ("q", "u") and kinds & {"Q", "U"}:
            found.append(error / brightest)
    return min(found)


def _standard(model: Model, theta: Array) -> Array:
    """Set axis_angle to 0 and brightness to 1 where the model says that they act exactly as told."""
    theta = theta.copy()
    if model.standard_frame:
        for column, parameter in enumerate(model.parameters):
            if parameter.name in STANDARD:
                theta[:, column] = STANDARD[parameter.name]
    return theta

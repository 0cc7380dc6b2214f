"""Fit the classifier that gives each family a probability at first sight of a flare."""

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import torch
from torch import Tensor, nn

from emu.errors import UserError
from emu.inference.classifier import ClassifierNetwork
from training.files import digest
from training.loop import Outcome, Task, train
from training.material import Material, load_material, stream
from training.recipe import Recipe, recipe
from training.record import describe_fit, describe_set, save_fit

__all__ = ["fit"]

_HELD_OUT, _CALIBRATION, _STEP = 0, 1, 2  # purposes of random numbers


def fit(
    sets: Sequence[Path],
    out: Path,
    config: str = "default",
    *,
    minutes: float | None = None,
    steps: int | None = None,
    seed: int = 0,
    report: Callable[[Outcome], None] | None = None,
) -> dict[str, Any]:
    """Fit a classifier over families, all equally probable beforehand.

    Args:
        sets: complete training sets, one a family, all for one campaign.
        out: folder for the checkpoint, the weights and the record.
        config: shipped recipe, or the path of a TOML; its flow is not used.
        minutes: budget in CPU-minutes, turned into steps by the recipe.
        steps: budget in steps; one of the two must be given.
        seed: the weights are the same for a seed, bit for bit, killed and continued or not.
        report: called after each look at the held-out flares.

    Returns:
        The record, also written to ``out/fit.json``.

    Raises:
        UserError: fewer than two sets, sets of different campaigns, two of one family, or an incomplete one.
    """
    chosen = recipe(config)
    count = chosen.steps(minutes, steps)
    materials = [load_material(path, chosen.held_out, chosen.embedding.nodes) for path in sets]
    network = _network(materials, chosen, sets)
    task = _task(network, materials, chosen, seed, [digest(path / "set.json") for path in sets])
    outcome = train(task, chosen.loop, count, out / "checkpoint.safetensors", report)
    task.module.load_state_dict(outcome.weights)
    record = {
        "campaign": materials[0].stored.layout.campaign,
        "network": network.table(),
        "sets": [describe_set(path, each.stored) for path, each in zip(sets, materials, strict=True)],
        "training": describe_fit(outcome, chosen, count, seed),
        "held_out": {
            "flares": chosen.held_out * len(sets),
            "loss": outcome.best,
            "mean_probability": _confusion(task.module, materials, seed),
        },
    }
    save_fit(out, "classifier", outcome, record)
    return record


def _network(materials: Sequence[Material], recipe: Recipe, sets: Sequence[Path]) -> ClassifierNetwork:
    """Describe the network, after a look whether the sets belong together."""
    names = tuple(material.problem.name for material in materials)
    if len(names) < 2 or len(set(names)) < len(names):
        raise UserError(f"a classifier needs sets of two or more different families, not {', '.join(names)}")
    for path, material in zip(sets, materials, strict=True):
        if material.stored.layout.campaign != materials[0].stored.layout.campaign:
            raise UserError(f"{path}: made for another campaign than {sets[0]}; a classifier has one")
    grid = materials[0].grid
    return ClassifierNetwork(names, grid.kinds, grid.half_span, recipe.embedding)


def _task(
    network: ClassifierNetwork, materials: Sequence[Material], recipe: Recipe, seed: int, digests: list[str]
) -> Task:
    kept = _labelled([m.kept(stream(seed, _HELD_OUT, n))[1] for n, m in enumerate(materials)])
    share = -(-recipe.loop.batch // len(materials))

    def batch(step: int) -> tuple[Tensor, ...]:
        return _labelled([m.train(share, stream(seed, _STEP, step, n))[1] for n, m in enumerate(materials)])

    with torch.random.fork_rng():
        torch.manual_seed(seed)
        module = network.build()
    first = [m.train(500, stream(seed, _CALIBRATION, n))[1] for n, m in enumerate(materials)]
    module.embedding.calibrate(torch.cat(first).numpy())
    return Task(
        module=module,
        batch=batch,
        loss=_loss,
        held_out=lambda averaged: _mean_loss(averaged, kept, recipe.loop.batch),
        identity=f"classifier\nsets {digests}\nseed {seed}\n{recipe.text}",
    )


def _labelled(features: Sequence[Tensor]) -> tuple[Tensor, Tensor]:
    labels = torch.cat([torch.full((len(part),), label) for label, part in enumerate(features)])
    return labels, torch.cat(list(features))


def _loss(module: nn.Module, batch: tuple[Tensor, ...]) -> Tensor:
    labels, features = batch
    return nn.functional.cross_entropy(module(features), labels)


def _mean_loss(module: nn.Module, batch: tuple[Tensor, ...], at_once: int) -> float:
    labels, features = batch
    parts = zip(labels.split(at_once), features.split(at_once), strict=True)
    return sum(float(_loss(module, part)) * len(part[0]) for part in parts) / len(labels)


def _confusion(module: nn.Module, materials: Sequence[Material], seed: int) -> list[list[float]]:
    """Return the mean probability of every family (column) on held-out flares of every family (row)."""
    rows = []
    with torch.no_grad():
        for number, material in enumerate(materials):
            logits = module(material.kept(stream(seed, _HELD_OUT, number))[1])
            rows.append(logits.double().softmax(-1).mean(0).tolist())
    return rows

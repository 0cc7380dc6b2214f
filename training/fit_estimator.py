"""Fit the posterior estimator of one family to its training set."""

import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import torch
from torch import Tensor, nn

from emu.families.catalogue import family_text
from emu.families.family import Family
from emu.inference.network import Network
from training.files import digest
from training.loop import Outcome, Task, train
from training.material import Material, load_material, stream
from training.recipe import Recipe, recipe
from training.record import describe_fit, describe_set, save_fit

__all__ = ["estimator_task", "fit", "network_of", "nats_over_prior"]

_HELD_OUT, _CALIBRATION, _STEP = 0, 1, 2  # purposes of random numbers


def fit(
    set_path: Path,
    out: Path,
    config: str = "default",
    *,
    minutes: float | None = None,
    steps: int | None = None,
    seed: int = 0,
    report: Callable[[Outcome], None] | None = None,
) -> dict[str, Any]:
    """Fit an estimator, or go on with a fit that was cut short.

    Args:
        set_path: a complete training set.
        out: folder for the checkpoint, the weights and the record.
        config: shipped recipe, or the path of a TOML.
        minutes: budget in CPU-minutes, turned into steps by the recipe.
        steps: budget in steps; one of the two must be given.
        seed: the weights are the same for a seed, bit for bit, killed and continued or not.
        report: called after each look at the held-out flares.

    Returns:
        The record, also written to ``out/fit.json``.

    Raises:
        UserError: the set is not complete, or the folder holds another fit.
    """
    chosen = recipe(config)
    count = chosen.steps(minutes, steps)
    material = load_material(set_path, chosen.held_out, chosen.embedding.nodes)
    model = material.problem.model
    task = estimator_task(material, chosen, seed, digest(set_path / "set.json"))
    outcome = train(task, chosen.loop, count, out / "checkpoint.safetensors", report)
    record = {
        "family": material.problem.name,
        "model": material.stored.layout.model,
        "toml": family_text(model) if isinstance(model, Family) else None,
        "campaign": material.stored.layout.campaign,
        "parameters": list(material.problem.prior.names),
        "network": network_of(material, chosen).table(),
        "set": describe_set(set_path, material.stored),
        "training": describe_fit(outcome, chosen, count, seed),
        "held_out": {
            "flares": chosen.held_out,
            "loss": outcome.best,
            "nats_over_prior": nats_over_prior(outcome.best, material, seed),
        },
    }
    save_fit(out, "estimator", outcome, record)
    return record


def network_of(material: Material, recipe: Recipe) -> Network:
    """Return the description of the network that a recipe makes for a problem."""
    return Network(
        kinds=material.grid.kinds,
        half_span=material.grid.half_span,
        features=len(material.problem.parameters),
        embedding=recipe.embedding,
        flow=recipe.flow,
    )


def estimator_task(material: Material, recipe: Recipe, seed: int, set_digest: str) -> Task:
    """Return the training task: the negative log density of true parameters, over fresh flares.

    Args:
        material: noisy flares.
        recipe: sizes.
        seed: of the fit.
        set_digest: checksum that stands for the set in the identity of the checkpoint.
    """
    kept = material.kept(stream(seed, _HELD_OUT))
    with torch.random.fork_rng():
        torch.manual_seed(seed)
        module = network_of(material, recipe).build()
    module.embedding_net.calibrate(material.train(1000, stream(seed, _CALIBRATION))[1].numpy())
    return Task(
        module=module,
        batch=lambda step: material.train(recipe.loop.batch, stream(seed, _STEP, step)),
        loss=_loss,
        held_out=lambda averaged: _mean_loss(averaged, kept, recipe.loop.batch),
        identity=f"estimator\nset {set_digest}\nseed {seed}\n{recipe.text}",
    )


def _loss(module: nn.Module, batch: tuple[Tensor, ...]) -> Tensor:
    z, features = batch
    loss: Tensor = module.loss(z, features).mean()  # type: ignore[operator]  # sbi's container
    return loss


def _mean_loss(module: nn.Module, batch: tuple[Tensor, ...], at_once: int) -> float:
    """Return the mean loss of many flares, a part of them at a time."""
    z, features = batch
    parts = zip(z.split(at_once), features.split(at_once), strict=True)
    return sum(float(_loss(module, part)) * len(part[0]) for part in parts) / len(z)


def nats_over_prior(loss: float, material: Material, seed: int) -> float:
    """Return the mean of ln(q / prior) at the truth that a held-out loss stands for.

    The loss is the mean of -ln q(z); the prior of z is standard normal, divided by the accepted fraction.

    Args:
        loss: mean of -ln q(z) over the held-out flares.
        material: whose held-out flares they are.
        seed: of the fit.
    """
    # The held-out parameters' own mean of ln N(z), not its expectation: it removes their sampling noise.
    z = material.kept(stream(seed, _HELD_OUT))[0].double()
    log_prior = float((-0.5 * z**2 - 0.5 * math.log(2 * math.pi)).sum(-1).mean())
    return -loss - log_prior + math.log(material.problem.prior.accepted_fraction)

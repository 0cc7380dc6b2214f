"""The training loop: any network, batches by step number, checkpoints from which it goes on bit by bit."""

import copy
import json
import math
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import torch
from safetensors import safe_open
from safetensors.torch import save
from torch import Tensor, nn

from emu.configs import check_keys, number
from emu.errors import UserError
from training.files import write_atomically

__all__ = ["LoopOptions", "Outcome", "Task", "train"]

Batch = tuple[Tensor, ...]


@dataclass(frozen=True)
class LoopOptions:
    """Say how to train.

    Args:
        batch: flares a step.
        rate: highest learning rate.
        warmup: steps of linear rise, before a cosine falls to zero at the last step.
        clip: largest norm of the gradient.
        averaging: decay of the exponential average of the weights, a step.
        every: steps between looks at the held-out flares, each followed by a checkpoint.
        patience: looks without improvement after which training stops.
        steps_per_minute: how many steps a CPU-minute is worth; turns a budget into a number of steps.
    """

    batch: int
    rate: float
    warmup: int
    clip: float
    averaging: float
    every: int
    patience: int
    steps_per_minute: int

    @classmethod
    def from_table(cls, table: Mapping[str, Any], where: str) -> "LoopOptions":
        """Read a TOML table whose keys are the fields.

        Raises:
            UserError: a key is unknown or missing, or a value is no positive number.
        """
        names = cls.__annotations__
        check_keys(table, tuple(names), (), where)
        for key, kind in names.items():
            if number(table, key, where) <= 0 or (kind is int and not isinstance(table[key], int)):
                raise UserError(f"{where}: {key} is {table[key]!r}; give a positive {kind.__name__}")
        return cls(**table)

    def learning_rate(self, step: int, steps: int) -> float:
        """Return the learning rate of a step, counted from 0."""
        if step < self.warmup:
            return self.rate * (step + 1) / self.warmup
        progress = (step - self.warmup) / max(steps - self.warmup, 1)
        return self.rate * 0.5 * (1 + math.cos(math.pi * min(progress, 1.0)))


@dataclass(frozen=True)
class Task:
    """Say what to train.

    Args:
        module: network with its starting weights; trained in place.
        batch: batch of a step by its number: a pure function, so that a resumed run sees the same.
        loss: mean loss of a network on a batch.
        held_out: loss of a network on flares kept apart.
        identity: text that must be equal for a checkpoint to be continued.
    """

    module: nn.Module
    batch: Callable[[int], Batch]
    loss: Callable[[nn.Module, Batch], Tensor]
    held_out: Callable[[nn.Module], float]
    identity: str


@dataclass
class Outcome:
    """Hold where a training stands.

    Args:
        step: steps done.
        best: lowest held-out loss so far.
        best_step: when it was reached.
        history: (step, held-out loss) pairs.
        cpu_seconds: spent, over all runs of this training.
        weights: the averaged weights at the best step.
    """

    step: int = 0
    best: float = math.inf
    best_step: int = 0
    history: list[tuple[int, float]] = field(default_factory=list)
    cpu_seconds: float = 0.0
    weights: dict[str, Tensor] = field(default_factory=dict)


def train(
    task: Task,
    options: LoopOptions,
    steps: int,
    checkpoint: Path,
    report: Callable[[Outcome], None] | None = None,
) -> Outcome:
    """Train, or go on where a checkpoint stands.

    Args:
        task: what.
        options: how.
        steps: number of steps; the schedule of the learning rate spans them.
        checkpoint: file.
        report: called after each look at the held-out flares.

    Returns:
        The outcome; the same weights, bit for bit, whether or not the run was killed in between.

    Raises:
        UserError: the checkpoint belongs to another training.
    """
    torch.set_num_threads(1)
    averaged = copy.deepcopy(task.module).requires_grad_(False)
    optimizer = torch.optim.AdamW(task.module.parameters(), lr=options.rate, weight_decay=1e-4)
    identity = f"{task.identity}\nsteps {steps}\n{options}"
    outcome = _resume(checkpoint, identity, task.module, averaged, optimizer)
    started, spent = time.process_time(), outcome.cpu_seconds
    while outcome.step < steps and outcome.step - outcome.best_step < options.patience * options.every:
        _step(task, averaged, optimizer, options, outcome.step, steps)
        outcome.step += 1
        if outcome.step % options.every == 0 or outcome.step == steps:
            _look(task, averaged, outcome)
            outcome.cpu_seconds = spent + time.process_time() - started
            _save(checkpoint, identity, task.module, averaged, optimizer, outcome)
            if report is not None:
                report(outcome)
    return outcome


def _step(
    task: Task,
    averaged: nn.Module,
    optimizer: torch.optim.Optimizer,
    options: LoopOptions,
    step: int,
    steps: int,
) -> None:
    """Take one step of the optimiser and move the average of the weights."""
    for group in optimizer.param_groups:
        group["lr"] = options.learning_rate(step, steps)
    optimizer.zero_grad(set_to_none=True)
    loss = task.loss(task.module, task.batch(step))
    if not torch.isfinite(loss):
        raise RuntimeError(f"the loss is not finite at step {step}: lower the learning rate")
    loss.backward()
    nn.utils.clip_grad_norm_(task.module.parameters(), options.clip)
    optimizer.step()
    decay = min(options.averaging, (1 + step) / (10 + step))  # the start is soon forgotten
    with torch.no_grad():
        for mean, now in zip(averaged.parameters(), task.module.parameters(), strict=True):
            mean.lerp_(now, 1 - decay)


def _look(task: Task, averaged: nn.Module, outcome: Outcome) -> None:
    """Evaluate the averaged weights on the held-out flares, and keep them if they are the best."""
    averaged.eval()
    with torch.no_grad():
        loss = task.held_out(averaged)
    outcome.history.append((outcome.step, loss))
    if loss < outcome.best:
        outcome.best, outcome.best_step = loss, outcome.step
        outcome.weights = {name: value.clone() for name, value in averaged.state_dict().items()}


def _save(
    path: Path,
    identity: str,
    module: nn.Module,
    averaged: nn.Module,
    optimizer: torch.optim.Optimizer,
    outcome: Outcome,
) -> None:
    """Write everything a continuation needs into one file, in one step."""
    tensors = _prefixed("module", module.state_dict()) | _prefixed("averaged", averaged.state_dict())
    tensors |= _prefixed("best", outcome.weights)
    for place, state in optimizer.state_dict()["state"].items():
        tensors |= _prefixed(f"optimizer/{place}", state)
    record = {key: getattr(outcome, key) for key in ("step", "best", "best_step", "history", "cpu_seconds")}
    metadata = {"identity": identity, "outcome": json.dumps(record)}
    write_atomically(path, save({key: value.contiguous() for key, value in tensors.items()}, metadata))


def _prefixed(prefix: str, state: Mapping[str, Tensor]) -> dict[str, Tensor]:
    return {f"{prefix}/{name}": value for name, value in state.items()}


def _resume(
    path: Path, identity: str, module: nn.Module, averaged: nn.Module, optimizer: torch.optim.Optimizer
) -> Outcome:
    """Restore networks and optimiser from a checkpoint, if there is one."""
    if not path.exists():
        return Outcome()
    with safe_open(path, framework="pt") as stored:
        metadata = stored.metadata()
        tensors = {key: stored.get_tensor(key) for key in stored.keys()}  # noqa: SIM118 (not a dict)
    if metadata["identity"] != identity:
        raise UserError(f"{path}: belongs to a training with another configuration; give another --out")
    module.load_state_dict(_under("module", tensors))
    averaged.load_state_dict(_under("averaged", tensors))
    moments: dict[int, dict[str, Tensor]] = {}
    for key, value in _under("optimizer", tensors).items():
        place, name = key.split("/")
        moments.setdefault(int(place), {})[name] = value
    groups = optimizer.state_dict()["param_groups"]
    optimizer.load_state_dict({"state": moments, "param_groups": groups})
    record = json.loads(metadata["outcome"])
    record["history"] = [(step, loss) for step, loss in record["history"]]
    return Outcome(weights=_under("best", tensors), **record)


def _under(prefix: str, tensors: Mapping[str, Tensor]) -> dict[str, Tensor]:
    start = f"{prefix}/"
    return {key.removeprefix(start): value for key, value in tensors.items() if key.startswith(start)}

"""A training that is killed and continued ends with the very same weights."""

import math

import numpy as np
import pytest
import torch

from emu.errors import UserError
from training.loop import LoopOptions, Task, train

OPTIONS = LoopOptions(32, 1e-2, 5, 1.0, 0.9, 10, 3, 100)


def line(seed: int = 0) -> Task:
    """Fit y = 2 x - 1 with noise of 0.1: the best mean squared error is 0.01."""

    def batch(step: int):
        rng = np.random.default_rng([seed, step])
        x = rng.normal(size=(32, 1)).astype(np.float32)
        y = 2 * x - 1 + 0.1 * rng.normal(size=x.shape).astype(np.float32)
        return torch.from_numpy(x), torch.from_numpy(y)

    def loss(module, pair):
        return ((module(pair[0]) - pair[1]) ** 2).mean()

    torch.manual_seed(seed)
    kept = batch(10**6)
    network = torch.nn.Sequential(torch.nn.Linear(1, 8), torch.nn.Tanh(), torch.nn.Linear(8, 1))
    return Task(network, batch, loss, lambda module: loss(module, kept).item(), f"line {seed}")


class Killed(Exception):
    """Stand for a kill between two steps."""


def kill_at(step: int):
    def report(outcome):
        if outcome.step == step:
            raise Killed

    return report


@pytest.mark.parametrize("when", [10, 70, 100])
def test_a_killed_training_continues_to_the_same_weights(tmp_path, when):
    whole = train(line(), OPTIONS, 120, tmp_path / "whole.safetensors")
    with pytest.raises(Killed):
        train(line(), OPTIONS, 120, tmp_path / "killed.safetensors", kill_at(when))
    torch.rand(7)  # the global generator may be anywhere
    continued = train(line(), OPTIONS, 120, tmp_path / "killed.safetensors")
    assert continued.history == whole.history
    for name, weights in whole.weights.items():
        assert torch.equal(weights, continued.weights[name]), name


def test_a_finished_training_is_not_repeated(tmp_path):
    first = train(line(), OPTIONS, 60, tmp_path / "c.safetensors")
    steps = []
    again = train(line(), OPTIONS, 60, tmp_path / "c.safetensors", lambda outcome: steps.append(outcome.step))
    assert not steps
    assert again.best == first.best


def test_it_learns_and_keeps_the_best_weights(tmp_path):
    outcome = train(line(), OPTIONS, 600, tmp_path / "c.safetensors")
    assert outcome.best == min(loss for _, loss in outcome.history)
    assert outcome.best < 0.03  # the noise alone is 0.01
    task = line()
    task.module.load_state_dict(outcome.weights)
    assert task.held_out(task.module) == pytest.approx(outcome.best, rel=1e-6)


def test_it_stops_when_the_held_out_loss_stops_falling(tmp_path):
    task = line()
    worse = Task(task.module, task.batch, task.loss, _rising(), "worse")
    outcome = train(worse, OPTIONS, 1000, tmp_path / "c.safetensors")
    assert outcome.best_step == 10
    assert outcome.step == 40  # three looks without improvement


def _rising():
    losses = iter(range(1, 1000))
    return lambda module: float(next(losses))


def test_a_checkpoint_of_another_training_is_refused(tmp_path):
    train(line(), OPTIONS, 20, tmp_path / "c.safetensors")
    with pytest.raises(UserError, match="another configuration"):
        train(line(seed=1), OPTIONS, 20, tmp_path / "c.safetensors")
    with pytest.raises(UserError, match="another configuration"):
        train(line(), OPTIONS, 30, tmp_path / "c.safetensors")


def test_the_learning_rate_rises_then_falls_as_a_cosine():
    rates = [OPTIONS.learning_rate(step, 105) for step in range(106)]
    assert rates[:5] == pytest.approx([2e-3, 4e-3, 6e-3, 8e-3, 1e-2])
    assert rates[55] == pytest.approx(0.5e-2 * (1 + math.cos(math.pi / 2)))
    assert rates[105] == pytest.approx(0.0)


def test_bad_options_are_named():
    table = {name: getattr(OPTIONS, name) for name in LoopOptions.__annotations__}
    assert LoopOptions.from_table(table, "x.toml") == OPTIONS
    with pytest.raises(UserError, match=r"x\.toml: batch is 0"):
        LoopOptions.from_table(table | {"batch": 0}, "x.toml")
    with pytest.raises(UserError, match="unknown key 'speed'"):
        LoopOptions.from_table(table | {"speed": 1}, "x.toml")

"""Answer one flare under one family: draws, and the exact numbers that judge them."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import cache

import numpy as np

from emu.errors import UserError
from emu.families.density import Array
from emu.families.parameters import Parameter
from emu.inference.likelihood import log_likelihood
from emu.inference.reweight import reweight
from emu.observe.rows import RowBatch, Rows
from emu.problem import Problem
from emu.report.intervals import interval, weighted_quantiles
from emu.report.posterior import Posterior, Unanswered, flare_seed
from emu.report.toolbox import Recipe, Sampler, Toolbox

__all__ = ["Block", "Order", "opened", "prior_draws", "solve_block"]

_PRIOR_DRAWS = 10_000
_PRIOR_SEED = 20_250_301  # fixed: the prior's own quantiles belong to the family, not to a run
_CHAINS = 4  # of the exact ensembles

# What may go wrong with a single flare while the others go on; anything else is a fault of the program.
_OF_A_FLARE = (UserError, ArithmeticError, np.linalg.LinAlgError, RuntimeError)


@dataclass(frozen=True)
class Order:
    """Say what is wanted of every posterior.

    Attributes:
        draws: draws D.
        seed: of the run.
        exact: sample the exact posterior instead of asking the estimator.
        likelihood: evaluate the exact likelihood of the estimator's draws.
    """

    draws: int
    seed: int
    exact: bool
    likelihood: bool


@dataclass(frozen=True)
class Block:
    """Hold a few flares to be answered under one family by one process."""

    recipe: Recipe
    family: str
    flares: tuple[tuple[str, Rows], ...]
    order: Order


@cache
def opened(recipe: Recipe) -> Toolbox:
    """Open a recipe once in a process, for work on one core."""
    import torch

    torch.set_num_threads(1)
    return recipe.open()


@cache
def prior_draws(recipe: Recipe, family: str) -> Array:
    """Draw (M, P) from the prior of a family; the same draws in every process and run."""
    rng = np.random.default_rng(_PRIOR_SEED)
    return opened(recipe).problems[family].prior.sample(_PRIOR_DRAWS, rng)


def solve_block(
    block: Block, progress: Callable[[str], None] | None = None
) -> tuple[Posterior | Unanswered, ...]:
    """Answer the flares of a block; one that fails does not stop the others.

    Args:
        block: flares, family and order.
        progress: called now and then by the exact samplers with a line of text.
    """
    toolbox = opened(block.recipe)
    prior = prior_draws(block.recipe, block.family)
    answers: list[Posterior | Unanswered] = []
    for name, rows in block.flares:
        began = time.perf_counter()
        try:
            posterior = _solve(toolbox, block.family, name, rows, block.order, progress)
        except _OF_A_FLARE as problem:
            reason = f"{block.family}: {type(problem).__name__}: {problem}"
            answers.append(Unanswered(name, "sample", reason))
            continue
        parameters = toolbox.problems[block.family].parameters
        answers.append(replace(_summed(posterior, parameters, prior), seconds=time.perf_counter() - began))
    return tuple(answers)


def _summed(posterior: Posterior, parameters: Sequence[Parameter], prior: Array) -> Posterior:
    """Add the intervals of every parameter."""
    draws = posterior.flat
    intervals = tuple(
        interval(draws[:, k], prior[:, k], parameter, posterior.independent)
        for k, parameter in enumerate(parameters)
    )
    weighted = ((float("nan"),) * 3,) * len(parameters)
    if posterior.usable:
        weight = np.exp(posterior.stats["log_weight"].reshape(-1))
        weighted = tuple(
            weighted_quantiles(draws[:, k], weight, parameter) for k, parameter in enumerate(parameters)
        )
    return replace(posterior, intervals=intervals, weighted=weighted)


def _solve(
    toolbox: Toolbox,
    family: str,
    name: str,
    rows: Rows,
    order: Order,
    progress: Callable[[str], None] | None,
) -> Posterior:
    """Choose how a flare is answered."""
    problem = toolbox.problems[family]
    seed = flare_seed(order.seed, family, rows)
    if order.exact or toolbox.estimator is None:
        return _sampled(problem, name, rows, order.draws, seed, progress)
    return _estimated(problem, toolbox.estimator(family), name, rows, order, seed)


def _estimated(
    problem: Problem, estimator: Sampler, name: str, rows: Rows, order: Order, seed: int
) -> Posterior:
    """Draw from the estimator, and weigh the draws by the exact likelihood where that is wanted."""
    theta, log_q = estimator.sample(RowBatch.stack([rows]), order.draws, seed)
    if not np.isfinite(theta).all():
        raise ArithmeticError("the estimator gave draws that are not finite numbers")
    log_prior = problem.prior.log_prob(theta[0])
    allowed = np.isfinite(log_prior)
    found = Posterior(
        name,
        problem.name,
        "estimator",
        theta,
        {"log_prior": log_prior[None], "log_q": log_q},
        independent=float(order.draws),
        outside=int(np.count_nonzero(~allowed)),
    )
    return _weighed(found, problem, rows) if order.likelihood else found


def _weighed(found: Posterior, problem: Problem, rows: Rows) -> Posterior:
    """Put the exact likelihood, importance weights and what they are worth beside an estimator's draws."""
    log_prior, log_q = found.stats["log_prior"][0], found.stats["log_q"][0]
    weights = reweight(problem, rows, found.theta[0], log_q)
    allowed = np.isfinite(log_prior)
    value = np.full(len(log_q), -np.inf)
    value[allowed] = weights.log_posterior[allowed] - log_prior[allowed]
    with np.errstate(divide="ignore"):  # a draw that the posterior forbids weighs nothing
        log_weight = np.log(weights.weight)
    return replace(
        found,
        stats={**found.stats, "log_likelihood": value[None], "log_weight": log_weight[None]},
        ess=weights.ess,
        khat=weights.khat,
        efficiency=weights.efficiency,
        log_evidence=weights.log_evidence,
        log_evidence_error=_evidence_error(weights.ess, len(log_q)),
        unsolved=int(np.count_nonzero(allowed & np.isneginf(value))),
    )


def _evidence_error(ess: float, count: int) -> float:
    """Return the standard error of ln(mean weight): the delta method, with Kish's effective number.

    The relative variance of N weights is N / ess - 1, that of their mean a factor N less.
    """
    if ess <= 0.0:
        return float("inf")
    return float(np.sqrt(max(1.0 / ess - 1.0 / count, 0.0)))  # rounding may take ess beyond the count


def _sampled(
    problem: Problem, name: str, rows: Rows, draws: int, seed: int, progress: Callable[[str], None] | None
) -> Posterior:
    """Sample the exact posterior: a nested run for the evidence, four ensembles for the draws."""
    from emu.inference.sampling import sample_exactly

    exact = sample_exactly(problem, rows, seed=seed, progress=progress)
    chains = exact.ensembles.theta
    flat = chains.reshape(len(chains), -1, chains.shape[-1])
    each = -(-draws // len(chains))
    if flat.shape[1] < each:
        raise UserError(f"exact sampling kept {flat.shape[0] * flat.shape[1]} states; ask for fewer --draws")
    chosen = np.linspace(0, flat.shape[1] - 1, each).astype(int)
    theta = flat[:, chosen]
    points = theta.reshape(-1, theta.shape[-1])
    shape = theta.shape[:2]
    return Posterior(
        name,
        problem.name,
        "nested, then ensembles",
        theta,
        {
            "log_prior": problem.prior.log_prob(points).reshape(shape),
            "log_likelihood": log_likelihood(problem, points, rows).reshape(shape),
        },
        independent=float(min(len(points), chains.shape[0] * chains.shape[2] * exact.ensembles.length.min())),
        log_evidence=exact.nested.log_evidence,
        log_evidence_error=exact.nested.log_evidence_error,
        converged=exact.converged,
    )

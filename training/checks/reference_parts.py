"""One flare's reference draws, made in parts that survive a kill."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path

import numpy as np
from safetensors import safe_open
from safetensors.numpy import load, save

from emu.inference.counted import CountedPosterior
from emu.inference.draws import Draws, distinct, pooled
from emu.inference.ensembles import EnsemblePlan, Ensembles, gather, plan_ensembles
from emu.inference.nested import nested, nested_about
from emu.inference.walkers import Block
from emu.problem import Problem
from training.checks.held_out import HeldOut
from training.files import write_atomically

__all__ = ["FlareRuns", "ReferencePlan", "draws_to_keep", "run_flare"]

Progress = Callable[[str], None]


@dataclass(frozen=True)
class ReferencePlan:
    """Fix how hard every flare is worked on.

    Args:
        scouts: independent nested runs from the prior, which find the modes.
        scout_live: live points of each.
        scout_walks: steps to a new point in them.
        live: live points of the nested run about the draws of all scouts.
        walks: steps to a new point in it.
        evidence_error: largest error of its ln Z that counts as exact.
        ensembles: independent ensembles.
        walkers: in each.
        most_steps: of each, where they do not agree earlier.
    """

    scouts: int = 2
    scout_live: int = 150
    scout_walks: int = 30
    live: int = 750
    walks: int = 50
    evidence_error: float = 0.2
    ensembles: int = 4
    walkers: int = 40
    most_steps: int = 8000


@dataclass(frozen=True)
class FlareRuns:
    """Hold all runs on one flare.

    Args:
        scouts: independent nested runs from the prior.
        nested: the nested run about their draws.
        ensembles: chains without burn-in.
        steps: that each ensemble made.
        plan: coordinates and proposals of the ensembles.
    """

    scouts: tuple[Draws, ...]
    nested: Draws
    ensembles: Ensembles
    steps: int
    plan: EnsemblePlan


def run_flare(problem: Problem, flare: HeldOut, plan: ReferencePlan, work: Path, seed: int,
              progress: Progress) -> FlareRuns:
    """Make, or take from the folder `work`, all parts of one flare.

    Args:
        problem: family and campaign.
        flare: with its truth, which starts one walker of every ensemble: it is a draw of the posterior,
            too, and leads to a mode that the nested runs may have missed.
        plan: numbers of everything.
        work: folder of the parts.
        seed: of the flare's samplers.
        progress: called with lines of text.
    """
    numbers = [int(n) for n in np.random.SeedSequence([seed, 1]).generate_state(plan.scouts + 1)]
    scouts = tuple(
        _nested_part(work / f"scout-{place}.safetensors", progress, partial(
            nested, problem, flare.rows, live=plan.scout_live, walks=plan.scout_walks, seed=number,
            progress=progress))
        for place, number in enumerate(numbers[:-1]))
    found = _nested_part(work / "nested.safetensors", progress, partial(
        nested_about, problem, flare.rows, pooled(scouts), live=plan.live, walks=plan.walks,
        seed=numbers[-1], progress=progress))
    chains, steps, ensemble_plan = _ensembles(problem, flare, found, plan, work, seed, progress)
    return FlareRuns(scouts, found, chains, steps, ensemble_plan)


def _ensembles(problem: Problem, flare: HeldOut, start: Draws, plan: ReferencePlan, work: Path, seed: int,
               progress: Progress) -> tuple[Ensembles, int, EnsemblePlan]:
    """Run ensembles block by block until they agree; also return their steps and their plan."""
    posterior = CountedPosterior(problem, flare.rows)
    chains = plan_ensembles(posterior, start, count=plan.ensembles, walkers=plan.walkers, seed=seed)
    chains = _with_truth(chains, flare)
    blocks: list[list[Block]] = [[] for _ in range(plan.ensembles)]
    found, steps = None, 0
    while found is None or (not found.converged and steps < plan.most_steps):
        for number, own in enumerate(blocks):
            own.append(_block_part(posterior, chains, number, own, work))
        steps += chains.steps
        found = gather(chains, blocks)
        progress(f"ensembles: {steps} steps, R-hat {found.rhat.max():.4f}, "
                 f"length {found.length.min():.0f}, accepted {found.acceptance.mean():.2f}, "
                 f"{found.seconds:.0f} s")
    return found, steps, chains


def draws_to_keep(runs: FlareRuns, most: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Choose the draws that are stored: distinct ones of the nested runs, and as many of each ensemble.

    Returns:
        (N, P) nested and (M, P) ensembles, N and M at most `most`.
    """
    rng = np.random.default_rng([seed, 9])
    chosen = runs.nested.theta[distinct(runs.nested, rng, most)]
    count = len(runs.ensembles.theta)
    each = [own.reshape(-1, own.shape[-1]) for own in runs.ensembles.theta]
    picked = [own[rng.choice(len(own), min(len(own), most // count), replace=False)] for own in each]
    return chosen, rng.permutation(np.concatenate(picked))


def _with_truth(plan: EnsemblePlan, flare: HeldOut) -> EnsemblePlan:
    """Let one walker of every ensemble start at the truth."""
    start = plan.start.copy()
    start[:, 1] = plan.coordinates.to_straight(flare.truth[None])[0]
    return replace(plan, start=start)


def _nested_part(place: Path, progress: Progress, run: Callable[[], Draws]) -> Draws:
    """Make or read one nested run."""
    if place.is_file():
        arrays, facts = load(place.read_bytes()), _facts(place)
        return Draws(arrays["theta"], arrays["log_weight"], **facts)
    found = run()
    progress(f"{place.stem}: ln Z {found.log_evidence:.2f} +- {found.log_evidence_error:.2f}, "
             f"{found.calls} likelihoods, {found.seconds:.0f} s")
    facts = {name: value for name, value in vars(found).items() if name not in ("theta", "log_weight")}
    _write(place, {"theta": found.theta, "log_weight": found.log_weight}, facts)
    return found


def _block_part(posterior: CountedPosterior, plan: EnsemblePlan, number: int, own: list[Block],
                work: Path) -> Block:
    """Make or read the next block of an ensemble."""
    place = work / f"ensemble-{number}-{len(own):03d}.safetensors"
    if place.is_file():
        arrays, facts = load(place.read_bytes()), _facts(place)
        return Block(arrays["y"], arrays["log_prob"], **facts)
    block = plan.block(posterior, number, own)
    facts = {name: value for name, value in vars(block).items() if name not in ("y", "log_prob")}
    _write(place, {"y": block.y, "log_prob": block.log_prob}, facts)
    return block


def _write(place: Path, arrays: dict[str, np.ndarray], facts: dict) -> None:
    """Write arrays with a few facts in the header, in one step."""
    whole = {name: np.ascontiguousarray(array) for name, array in arrays.items()}
    write_atomically(place, save(whole, {"facts": json.dumps(facts)}))


def _facts(place: Path) -> dict:
    """Read the facts in the header."""
    with safe_open(place, "numpy") as stream:
        return dict(json.loads(stream.metadata()["facts"]))

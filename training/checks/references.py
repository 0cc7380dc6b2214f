"""Make reference draws on held-out flares: the yardstick that every estimator is held against.

    from training.checks.references import make
    make("midplane-frozen", "realistic", "tests/reference/draws", want=4, seed=1)

The same command again goes on where it was stopped, wherever that was.
"""

from __future__ import annotations

import hashlib
import json
import shutil
from dataclasses import asdict
from functools import partial
from pathlib import Path

import numpy as np

from emu.errors import UserError
from emu.inference.coordinates import straight_about
from emu.inference.counted import CountedPosterior
from emu.inference.ensembles import LENGTH_LIMIT, RHAT_LIMIT
from emu.inference.walkers import log_target
from emu.problem import Problem, problem
from emu.processes import in_processes
from training.checks.efficiency import importance_efficiency
from training.checks.held_out import HeldOut, held_out
from training.checks.reference_parts import FlareRuns, ReferencePlan, draws_to_keep, run_flare
from training.checks.reference_store import Reference, read_reference, read_references, write_reference
from training.checks.two_sample import compare_samples
from training.files import write_atomically

__all__ = ["make", "make_references"]

AGREEMENT = 0.55  # the largest C2ST between nested runs and ensembles that counts as exact
_KEPT = 4000
_WEIGHTED = 4000


def make(family: str, campaign: str, out: str | Path, want: int = 4, seed: int = 1, workers: int = 1,
         kinds: tuple[str, ...] = ("east", "north"), most: int = 16) -> int:
    """Make references for a family and campaign by name.

    Args:
        family: name of a family.
        campaign: name of a campaign.
        out: folder; holds finished flares, and unfinished parts under `work`.
        want: stop when this many flares count as exact.
        seed: of flares and samplers.
        workers: flares at a time, one process each.
        kinds: row kinds that every flare must have.
        most: give up after this many flares.

    Returns:
        How many flares count as exact.
    """
    return make_references(problem(family, campaign), Path(out), want=want, seed=seed, workers=workers,
                           kinds=kinds, most=most)


def make_references(what: Problem, out: Path, *, want: int, seed: int, workers: int = 1,
                    kinds: tuple[str, ...] = (), most: int = 16,
                    plan: ReferencePlan = ReferencePlan()) -> int:  # noqa: B008 - frozen
    """Work on flare after flare, none left out, until enough count as exact.

    Raises:
        UserError: the folder holds references of another problem, seed or plan.
    """
    _claim(out, what, seed, kinds, plan)
    work = partial(_one_flare, what, out, seed=seed, kinds=kinds, plan=plan)
    exact, case = 0, 0
    while exact < want and case < most:
        cases = range(case, min(case + workers, most))
        exact += sum(reference.exact for reference in in_processes(work, cases, workers))
        case = cases[-1] + 1
        _summarise(out)
    if (out / "work").is_dir() and not any((out / "work").iterdir()):
        (out / "work").rmdir()
    return exact


def _one_flare(what: Problem, out: Path, case: int, *, seed: int, kinds: tuple[str, ...],
               plan: ReferencePlan) -> Reference:
    """Make or read one finished flare."""
    name = f"flare-{case:02d}"
    if (out / f"{name}.json").is_file():
        return read_reference(out, name)
    flare = held_out(what, case, seed, kinds)
    work = out / "work" / name
    own_seed = int(np.random.SeedSequence([seed, case, 5]).generate_state(1)[0])
    runs = run_flare(what, flare, plan, work, own_seed, lambda text: print(f"{name}: {text}", flush=True))
    reference = _judge(what, name, flare, runs, own_seed, plan)
    write_reference(out, reference)
    shutil.rmtree(work)
    print(f"{name}: {reference.facts['status']} {'; '.join(reference.facts['reasons'])}", flush=True)
    return reference


def _judge(what: Problem, name: str, flare: HeldOut, runs: FlareRuns, seed: int,
           plan: ReferencePlan) -> Reference:
    """Compare the samplers and say whether the flare counts as exact."""
    nested, ensembles = draws_to_keep(runs, _KEPT, seed)
    coordinates = straight_about(what.prior, ensembles)
    test = compare_samples(coordinates.to_straight(nested), coordinates.to_straight(ensembles), seed=0)
    reasons = _reasons(runs, test.accuracy, test.draws, plan)
    chains = runs.ensembles
    facts = {
        "family": what.name, "campaign": what.campaign.name, "parameters": list(what.prior.names),
        "status": "unresolved" if reasons else "exact", "reasons": reasons,
        "log_evidence": runs.nested.log_evidence, "log_evidence_error": runs.nested.log_evidence_error,
        "log_evidence_of_scouts": [[run.log_evidence, run.log_evidence_error] for run in runs.scouts],
        "log_evidence_of_weights": _weighted_evidence(what, flare, runs, seed),
        "c2st": test.accuracy, "c2st_floor": test.floor, "c2st_draws": test.draws,
        "rhat": float(chains.rhat.max()), "length": float(chains.length.min()), "steps": runs.steps,
        "acceptance": float(chains.acceptance.mean()), "redrawn_truths": flare.redrawn, "seed": seed,
        "likelihoods": {"scouts": sum(run.calls for run in runs.scouts), "nested": runs.nested.calls,
                        "ensembles": chains.calls},
        "core_seconds": {"scouts": sum(run.seconds for run in runs.scouts), "nested": runs.nested.seconds,
                         "ensembles": chains.seconds},
        "truth_level": _truth_level(what, flare, runs),
    }
    return Reference(name, flare.truth, flare.rows, nested, ensembles, facts)


def _reasons(runs: FlareRuns, accuracy: float, draws: int, plan: ReferencePlan) -> list[str]:
    """List why a flare does not count as exact."""
    found, chains = [], runs.ensembles
    if not runs.nested.log_evidence_error <= plan.evidence_error:  # not a number fails, too
        found.append(f"error of ln Z {runs.nested.log_evidence_error:.2f} > {plan.evidence_error}")
    if not chains.rhat.max() < RHAT_LIMIT:
        found.append(f"R-hat {chains.rhat.max():.3f} >= {RHAT_LIMIT}")
    if not chains.length.min() >= LENGTH_LIMIT:
        found.append(f"chains of {chains.length.min():.0f} < {LENGTH_LIMIT:.0f} autocorrelation times")
    if not accuracy <= AGREEMENT:
        found.append(f"C2ST between samplers {accuracy:.3f} > {AGREEMENT}")
    if draws < 1000:
        found.append(f"only {draws} distinct draws to compare")
    return found


def _weighted_evidence(what: Problem, flare: HeldOut, runs: FlareRuns, seed: int) -> dict[str, float]:
    """Estimate ln Z a third way: importance weights of the proposals that the ensembles used."""
    y = runs.plan.maps.sample(_WEIGHTED, np.random.RandomState(seed))
    value = log_target(CountedPosterior(what, flare.rows), runs.plan.coordinates, y)
    found = importance_efficiency(value - runs.plan.maps.log_prob(y))
    return {"log_evidence": found.log_evidence, "efficiency": found.full, "draws": _WEIGHTED}


def _truth_level(what: Problem, flare: HeldOut, runs: FlareRuns) -> float:
    """Return the share of ensemble states of lower density than the truth; near 1 a mode may be missing."""
    y = runs.plan.coordinates.to_straight(flare.truth[None])
    value = log_target(CountedPosterior(what, flare.rows), runs.plan.coordinates, y)[0]
    return float(np.mean(runs.ensembles.log_prob < value))


def _claim(out: Path, what: Problem, seed: int, kinds: tuple[str, ...], plan: ReferencePlan) -> None:
    """Write what the folder is for, or refuse where it is for something else."""
    told = {"family": what.name, "campaign": what.campaign.name, "parameters": [
        [p.name, repr(p.prior)] for p in what.parameters], "campaign_sha256": hashlib.sha256(
        what.campaign.text.encode()).hexdigest(), "seed": seed, "kinds": list(kinds), "plan": asdict(plan)}
    place = out / "references.json"
    if place.is_file():
        if json.loads(place.read_text())["made_from"] != told:
            raise UserError(f"{out}: holds references of another family, campaign, seed or plan; "
                            "give another folder")
        return
    write_atomically(place, (json.dumps({"made_from": told}, indent=1) + "\n").encode())


def _summarise(out: Path) -> None:
    """Write the table of all finished flares into references.json."""
    place = out / "references.json"
    told = json.loads(place.read_text())
    flares = read_references(out)
    columns = ("status", "log_evidence", "log_evidence_error", "c2st", "c2st_floor", "rhat", "length")
    table = [{"flare": r.name, **{key: r.facts[key] for key in columns}} for r in flares]
    hours = sum(sum(r.facts["core_seconds"].values()) for r in flares) / 3600.0
    told |= {"flares": table, "exact": sum(r.exact for r in flares), "core_hours": round(hours, 3)}
    write_atomically(place, (json.dumps(told, indent=1) + "\n").encode())

"""Where answers come from: a trained bundle, or the exact likelihood of configs alone.

A worker process receives the small recipe (a path, or names), not networks, and opens it itself.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cache, partial
from pathlib import Path
from typing import Any, Protocol

import numpy as np

from emu.configs import config_text
from emu.errors import UserError
from emu.families.density import Array
from emu.families.parameters import Parameter
from emu.observe.campaign import Campaign
from emu.observe.rows import RowBatch
from emu.problem import Problem
from emu.report.checksum import checksum

__all__ = ["FromBundle", "FromConfigs", "Recipe", "Sampler", "Toolbox"]


class Sampler(Protocol):
    """Draw from an approximate posterior; a neural estimator does."""

    def sample(self, batch: RowBatch, draws: int, seed: int) -> tuple[Array, Array]:
        """Return theta (B, D, P) and log q (B, D)."""
        ...


class _Classifier(Protocol):
    """Give the probability of each family."""

    @property
    def families(self) -> tuple[str, ...]: ...

    def probabilities(self, batch: RowBatch) -> Array: ...


@dataclass(frozen=True)
class Toolbox:
    """Hold what answering needs, opened.

    Attributes:
        campaign: what the flares must lie within.
        problems: family -> problem, for every family that may be asked for.
        estimator: family -> estimator; None where there is no bundle.
        probabilities: batch of B flares -> (B, number of families) in the order of `problems`; None
            where there is no classifier.
    """

    campaign: Campaign
    problems: Mapping[str, Problem]
    estimator: Callable[[str], Sampler] | None = None
    probabilities: Callable[[RowBatch], Array] | None = None

    def parameters(self, family: str) -> tuple[Parameter, ...]:
        """Return the parameters of a family, fluxes in the campaign's unit instead of the word "flux"."""
        unit, every = self.campaign.flux_unit, self.problems[family].parameters
        return tuple(replace(p, unit=unit) if p.unit == "flux" else p for p in every)

    def chosen(self, families: Sequence[str] | None) -> tuple[str, ...]:
        """Return the families asked for, all where none are named.

        Raises:
            UserError: one of them is not at hand, or is named twice.
        """
        if families is None:
            return tuple(self.problems)
        for name in families:
            if name not in self.problems:
                raise UserError(f"no family {name!r} here: one of {', '.join(self.problems)}")
            if list(families).count(name) > 1:
                raise UserError(f"family {name!r} is named twice; name it once")
        return tuple(families)


class Recipe(Protocol):
    """Open a toolbox; hashable and small, so that processes can pass it on."""

    def __hash__(self) -> int: ...

    def open(self) -> Toolbox:
        """Return the opened toolbox."""
        ...

    def origin(self) -> dict[str, Any]:
        """Return what a record needs to name it, with checksums."""
        ...


@dataclass(frozen=True)
class FromBundle:
    """Answer with a trained bundle.

    Args:
        path: its folder.
        raymap: how the exact likelihood finds its rays.
    """

    path: Path
    raymap: str = "exact"

    def open(self) -> Toolbox:
        """Check and open the bundle; each estimator is loaded when it is first asked for."""
        from emu.bundle import open_bundle

        bundle = open_bundle(self.path)
        classifier = bundle.classifier
        problems = {name: _by_raymap(bundle.problem(name), self.raymap) for name in bundle.families}
        ordered = None if classifier is None else partial(_ordered, classifier, tuple(problems))
        return Toolbox(bundle.campaign, problems, cache(bundle.estimator), ordered)

    def origin(self) -> dict[str, Any]:
        """Return the path and the checksum of the bundle."""
        return {"bundle": str(self.path), "sha256": checksum(self.path), "raymap": self.raymap}


@dataclass(frozen=True)
class FromConfigs:
    """Answer without a bundle: only the exact likelihood.

    Args:
        campaign: name or path of a campaign.
        families: names or paths of families.
        raymap: how the exact likelihood finds its rays.
    """

    campaign: str
    families: tuple[str, ...]
    raymap: str = "exact"

    def open(self) -> Toolbox:
        """Read the configs."""
        from emu.families.installed import model
        from emu.observe.campaign import campaign

        season = campaign(self.campaign)
        models = [model(name) for name in self.families]
        names = [each.name for each in models]
        for name in names:
            if names.count(name) > 1:
                raise UserError(f"family {name!r} is named twice; name it once")
        return Toolbox(season, {each.name: _by_raymap(Problem(each, season), self.raymap) for each in models})

    def origin(self) -> dict[str, Any]:
        """Return the names of the configs and the checksums of their texts."""
        return {
            "campaign": {"name": self.campaign, "sha256": _text_sum("campaigns", self.campaign)},
            "families": [{"name": name, "sha256": _family_sum(name)} for name in self.families],
            "raymap": self.raymap,
        }


def _by_raymap(problem: Problem, raymap: str) -> Problem:
    """Return the problem with rays found in another way.

    Raises:
        UserError: the model is not one of ours, and knows of no rays.
    """
    from emu.families.family import Family
    from emu.raymap.catalogue import find_raymap

    if raymap == "exact":
        return problem
    if not isinstance(problem.model, Family):
        raise UserError(f"{problem.name} is a model of its own and traces no rays of ours; leave --raymap out")
    return replace(problem, model=replace(problem.model, raymap=find_raymap(raymap)))


def _ordered(classifier: _Classifier, families: tuple[str, ...], batch: RowBatch) -> Array:
    """Return the probabilities in the order of families; NaN for one the classifier does not know."""
    known = list(classifier.families)
    found = classifier.probabilities(batch)
    columns = [
        found[:, known.index(name)] if name in known else np.full(len(batch), np.nan) for name in families
    ]
    return np.stack(columns, axis=1)


def _family_sum(name: str) -> str | None:
    """Return the SHA-256 of a family's text; None for an installed model, which has none."""
    from emu.families.installed import installed_names

    return None if name in installed_names() else _text_sum("families", name)


def _text_sum(kind: str, name: str) -> str:
    """Return the SHA-256 of the text of a config."""
    return hashlib.sha256(config_text(kind, name)[0].encode()).hexdigest()

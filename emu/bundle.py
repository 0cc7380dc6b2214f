"""A trained bundle on disk: one campaign, an estimator a family, one classifier. It is only ever read here.

``manifest.json`` says all in words; ``SHA256SUMS`` holds the checksum of every other file; weights are
safetensors, which hold numbers and nothing that could run.
"""

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from emu.errors import UserError
from emu.observe.campaign import Campaign, parse_campaign
from emu.observe.flare import Flare
from emu.observe.rows import RowBatch
from emu.problem import Problem

if TYPE_CHECKING:
    from emu.inference.classifier import FamilyClassifier
    from emu.inference.estimator import NeuralEstimator

__all__ = ["FORMAT", "Bundle", "Posterior", "open_bundle"]

FORMAT = 1


@dataclass(frozen=True, eq=False)
class Posterior:
    """Hold the draws of B flares under one family.

    Args:
        problem: family and campaign.
        theta: (B, D, P) draws, in the order of ``problem.parameters``.
        log_q: (B, D) log density of the estimator at the draws.
    """

    problem: Problem
    theta: NDArray[np.float64]
    log_q: NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Bundle:
    """Give the parts of a bundle, each loaded when it is asked for.

    Args:
        path: its folder.
        manifest: what manifest.json says.
    """

    path: Path
    manifest: Mapping[str, Any]

    @cached_property
    def campaign(self) -> Campaign:
        """Return the campaign whose flares the estimators know."""
        return parse_campaign(self.manifest["campaign"], f"{self.path}: its campaign")

    @property
    def families(self) -> tuple[str, ...]:
        """Return the names of the families that have an estimator."""
        return tuple(self.manifest["estimators"])

    def problem(self, family: str) -> Problem:
        """Join a family, as it was when the estimator was trained, with the campaign.

        Raises:
            UserError: the bundle has no such family, or a user's model is not installed.
        """
        from emu.families.catalogue import parse_family
        from emu.families.installed import model

        entry = self._entry(family)
        if entry["toml"] is not None:
            return Problem(parse_family(entry["toml"], f"{self.path}: family {family}"), self.campaign)
        return Problem(model(entry["model"]), self.campaign)

    def estimator(self, family: str) -> "NeuralEstimator":
        """Load the estimator of a family.

        Raises:
            UserError: the bundle has no such family, or the model's parameters are not what they were.
        """
        from emu.inference.estimator import NeuralEstimator
        from emu.inference.network import Network

        entry = self._entry(family)
        prior = self.problem(family).prior
        if list(prior.names) != entry["parameters"]:
            raise UserError(f"{self.path}: {family} now has other parameters than it was trained for")
        network = Network.from_table(entry["network"], f"{self.path}: network of {family}")
        return NeuralEstimator(network, prior, self._weights(entry["file"]))

    @cached_property
    def classifier(self) -> "FamilyClassifier | None":
        """Load the family classifier; None where the bundle has none."""
        from emu.inference.classifier import ClassifierNetwork, FamilyClassifier

        entry = self.manifest["classifier"]
        if entry is None:
            return None
        network = ClassifierNetwork.from_table(entry["network"], f"{self.path}: classifier")
        return FamilyClassifier(network, self._weights(entry["file"]))

    def infer(
        self,
        flares: Sequence[Flare],
        families: Sequence[str] | None = None,
        draws: int = 1000,
        seed: int = 0,
    ) -> dict[str, Posterior]:
        """Draw from the posterior of every flare under every family.

        Args:
            flares: B flares, in any units that convert.
            families: names; all of the bundle's where None.
            draws: draws a flare and family.
            seed: of the draws.

        Returns:
            family -> Posterior.

        Raises:
            UserError: a flare lies outside the campaign, or there is no such family.
        """
        target = self.campaign.target
        rows = [flare.rows(target, self.campaign.flux_unit) for flare in flares]
        for flare, each in zip(flares, rows, strict=True):
            reasons = self.campaign.outside(each)
            if reasons:
                raise UserError(f"{flare.where}: flare {flare.name} is outside the campaign: {reasons[0]}")
        batch = RowBatch.stack(rows)
        answers = {}
        for family in self.families if families is None else families:
            estimator = self.estimator(family)
            answers[family] = Posterior(self.problem(family), *estimator.sample(batch, draws, seed))
        return answers

    def _entry(self, family: str) -> Mapping[str, Any]:
        if family not in self.families:
            raise UserError(f"{self.path}: no estimator of {family!r}; it has {', '.join(self.families)}")
        entry: Mapping[str, Any] = self.manifest["estimators"][family]
        return entry

    def _weights(self, file: str) -> dict[str, Any]:
        from safetensors.torch import load_file

        return load_file(self.path / file)


def open_bundle(path: Path | str) -> Bundle:
    """Open a bundle after a look at every byte of it.

    Args:
        path: its folder.

    Raises:
        UserError: it is no bundle, is cut or altered, or was made by a newer version.
    """
    folder = Path(path)
    sums = _sums(folder)
    for name, said in sums.items():
        try:
            content = (folder / name).read_bytes()
        except OSError as problem:
            raise UserError(f"{folder}: the bundle is cut: {name} is missing; copy it again") from problem
        if hashlib.sha256(content).hexdigest() != said:
            raise UserError(f"{folder}: cut or altered: {name} is not what it was; copy it again")
    manifest = _manifest(folder)
    entries = [*manifest["estimators"].values(), *filter(None, [manifest["classifier"]])]
    for file in (entry["file"] for entry in entries):
        if file not in sums:
            raise UserError(f"{folder}: the bundle is cut: no checksum of {file}; copy it again")
    return Bundle(folder, manifest)


def _sums(folder: Path) -> dict[str, str]:
    """Read the checksums: file name -> SHA-256."""
    try:
        lines = (folder / "SHA256SUMS").read_text(encoding="utf-8").splitlines()
        sums = {name: said for said, name in (line.split("  ", 1) for line in lines)}
    except OSError as problem:
        raise UserError(f"{folder}: no bundle: there is no SHA256SUMS in it") from problem
    except ValueError as problem:
        raise UserError(f"{folder}: altered: SHA256SUMS cannot be read; copy it again") from problem
    if "manifest.json" not in sums or any(Path(name).name != name for name in sums):
        raise UserError(f"{folder}: the bundle is altered: SHA256SUMS lacks the manifest; copy it again")
    return sums


def _manifest(folder: Path) -> Mapping[str, Any]:
    manifest: Mapping[str, Any] = json.loads((folder / "manifest.json").read_text(encoding="utf-8"))
    found = manifest.get("format")
    if not isinstance(found, int) or found > FORMAT:
        raise UserError(f"{folder}: bundle of format {found}, this program reads {FORMAT}; update emu-flares")
    if found < FORMAT:
        raise UserError(f"{folder}: bundle of the old format {found}, this program reads {FORMAT}; publish anew")
    return manifest

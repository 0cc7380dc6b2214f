"""How probable each family is for each flare, and who says so."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from scipy.special import softmax

from emu.families.density import Array
from emu.observe.rows import RowBatch, Rows
from emu.report.posterior import Posterior
from emu.report.toolbox import Toolbox

__all__ = ["family_probabilities"]


def family_probabilities(
    toolbox: Toolbox,
    flares: Mapping[str, Rows],
    posteriors: Mapping[str, Sequence[Posterior]],
    exact: bool,
) -> tuple[Array, str]:
    """Give the probability of each family for each flare.

    After exact sampling they follow from the evidences, every family asked for being equally probable
    beforehand. Else the bundle's classifier gives them, as probabilities among *all* its families: where
    only some were asked for, they need not add up to one.

    Args:
        toolbox: may hold a classifier.
        flares: F flares by name.
        posteriors: family -> posteriors, for the K families asked for.
        exact: whether the posteriors were sampled exactly.

    Returns:
        (F, K), NaN where unknown, and the source: "evidence", "classifier" or "none".
    """
    if exact:
        return _from_evidence(list(flares), posteriors), "evidence"
    if toolbox.probabilities is None:
        return np.full((len(flares), len(posteriors)), np.nan), "none"
    every = toolbox.probabilities(RowBatch.stack(list(flares.values())))
    columns = [list(toolbox.problems).index(family) for family in posteriors]
    return np.asarray(every[:, columns], float), "classifier"


def _from_evidence(flares: Sequence[str], posteriors: Mapping[str, Sequence[Posterior]]) -> Array:
    """Normalise the evidences of the families; NaN for a flare that lacks one of them."""
    log_evidence = np.full((len(flares), len(posteriors)), np.nan)
    for column, each in enumerate(posteriors.values()):
        for posterior in each:
            log_evidence[flares.index(posterior.flare), column] = posterior.log_evidence
    return np.asarray(softmax(log_evidence, axis=1))

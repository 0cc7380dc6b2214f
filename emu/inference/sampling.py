"""Exact sampling of one flare, and the one call that does it honestly.

The samplers work without any trained network, and so they can judge one.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

from emu.inference.draws import Draws
from emu.inference.ensembles import Ensembles, ensembles
from emu.inference.nested import nested, nested_about
from emu.observe.rows import Rows
from emu.problem import Problem

__all__ = ["ExactAnswer", "ensembles", "nested", "nested_about", "sample_exactly"]


@dataclass(frozen=True)
class ExactAnswer:
    """Hold exact draws and whether two different samplers stand behind them.

    Args:
        draws: equally weighted states of the ensembles, with the evidence of the nested run.
        nested: weighted draws of the nested run.
        ensembles: the chains and their diagnostics.
    """

    draws: Draws
    nested: Draws
    ensembles: Ensembles

    @property
    def converged(self) -> bool:
        """Tell whether the ensembles agreed among themselves."""
        return self.ensembles.converged


def sample_exactly(problem: Problem, rows: Rows, *, live: int = 400, steps: int = 4000, seed: int,
                   progress: Callable[[str], None] | None = None) -> ExactAnswer:
    """Sample the posterior of a flare: nested twice, from the prior and about what that found, then ensembles.

    It takes minutes for a flare of a family of fourteen parameters.

    Args:
        problem: what may have happened and what was measured.
        rows: the flare.
        live: live points of the second nested run; the first has half as many.
        steps: of each ensemble at most.
        seed: of all randomness.
        progress: called now and then with a line of text.
    """
    scout = nested(problem, rows, live=live // 2, walks=30, seed=seed, progress=progress)
    second = nested_about(problem, rows, scout, live=live, seed=seed, progress=progress)
    chains = ensembles(problem, rows, start=second, steps=steps, seed=seed, progress=progress)
    draws = replace(
        chains.draws(), log_evidence=second.log_evidence, log_evidence_error=second.log_evidence_error,
        calls=scout.calls + second.calls + chains.calls,
        seconds=scout.seconds + second.seconds + chains.seconds, method="nested, then ensembles",
    )  # fmt: skip
    return ExactAnswer(draws, second, chains)

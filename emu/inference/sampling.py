"""Exact sampling of one flare, and the one call that does it honestly.

The samplers work without any trained network, and so they can judge one.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

from emu.inference.draws import Draws
from emu.inference.ensembles import Ensembles, ensembles
from emu.inference.nested import nested
from emu.observe.rows import Rows
from emu.problem import Problem

__all__ = ["Draws", "ExactAnswer", "ensembles", "nested", "sample_exactly"]


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
    """Sample the posterior of a flare: nested first, then four ensembles from its draws.

    It takes minutes for a flare of a family of fourteen parameters.

    Args:
        problem: what may have happened and what was measured.
        rows: the flare.
        live: live points of the nested run.
        steps: of each ensemble at most.
        seed: of all randomness.
        progress: called now and then with a line of text.
    """
    first = nested(problem, rows, live=live, seed=seed, progress=progress)
    chains = ensembles(problem, rows, start=first, steps=steps, seed=seed, progress=progress)
    draws = replace(chains.draws(), log_evidence=first.log_evidence,
                    log_evidence_error=first.log_evidence_error, calls=first.calls + chains.calls,
                    seconds=first.seconds + chains.seconds, method="nested, then ensembles")
    return ExactAnswer(draws, first, chains)

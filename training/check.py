"""The driver of `emu-train check`: all checks on a bundle, or on a fit that is not published yet."""

import json
import sys
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import asdict
from pathlib import Path
from tempfile import TemporaryDirectory

from emu.bundle import Bundle, open_bundle
from emu.errors import UserError
from emu.problem import Problem
from training.checks.across import Across, check_across
from training.checks.reference_store import read_references
from training.checks.report import exit_code, run_checks, table
from training.files import write_atomically
from training.publish import publish

__all__ = ["across_table", "check"]


def check(
    path: Path,
    out: Path,
    *,
    families: Sequence[str] | None = None,
    cases: int = 500,
    draws: int = 1000,
    weighed: int = 20,
    seed: int = 1,
    references: Path | None = None,
    across: bool = False,
) -> int:
    """Check estimators one by one; print and write what was found.

    Args:
        path: a bundle, or the folder of a finished fit.
        out: folder; of a bundle's families each has a folder of its own within it.
        families: of the bundle; all where None.
        cases: held-out flares of the calibration checks, and of each family with `across`.
        draws: draws of each.
        weighed: flares whose draws are weighed by the exact posterior.
        seed: of everything; another one than that of the training.
        references: folder of reference draws, used for the family that they belong to.
        across: also let every family answer the flares of every other.

    Returns:
        0 where all checks passed, 1 where a calibration failed, 4 where only sharpness did.

    Raises:
        UserError: no bundle or fit stands there, or the options do not fit it.
    """
    with _as_bundle(path) as (bundle, published):
        names = tuple(families or bundle.families)
        problems = {name: bundle.problem(name) for name in names}
        if across and len(names) < 2:
            raise UserError(f"{path}: --across needs at least two families")
        known = None if references is None else _family_of(references, problems)
        codes = []
        for name, problem in problems.items():
            report = run_checks(
                bundle.estimator(name), problem, cases=cases, draws=draws, weighed=weighed, seed=seed,
                references=references if name == known else None,
                out=out / name if published else out, progress=_tell,
            )  # fmt: skip
            print(table(report))
            codes.append(exit_code(report))
        if across:
            estimators = {name: bundle.estimator(name) for name in names}
            _write_across(check_across(estimators, problems, cases=cases, draws=draws, seed=seed), out)
    return 1 if 1 in codes else max(codes)


@contextmanager
def _as_bundle(path: Path) -> Iterator[tuple[Bundle, bool]]:
    """Open a bundle, or make one for the while of a single fit; tell which it was."""
    if not (path / "fit.json").is_file():
        yield open_bundle(path), True
        return
    with TemporaryDirectory() as folder:
        yield open_bundle(publish([path], Path(folder) / "bundle")), False


def _family_of(references: Path, problems: dict[str, Problem]) -> str:
    """Return the family that reference draws belong to, after a look whether they can be compared."""
    found = read_references(references)
    if not found:
        raise UserError(f"{references}: no reference draws; make them with emu-train references")
    facts = found[0].facts
    for name, problem in problems.items():
        same = facts["campaign"] == problem.campaign.name and facts["parameters"] == list(problem.prior.names)
        if facts["family"] == name and same:
            return name
    raise UserError(
        f"{references}: draws of {facts['family']} in campaign {facts['campaign']}, which is not checked here"
    )


def _write_across(found: Across, out: Path) -> None:
    """Print the matrices, and write them as text, JSON and figure."""
    from training.checks.figures import draw_across  # loads matplotlib: only when asked for

    numbers = asdict(found) | {"coverage": found.coverage.tolist(), "contraction": found.contraction.tolist()}
    numbers |= {"coverage_error": found.error, "misled": found.misled()}
    write_atomically(out / "across.json", (json.dumps(numbers, indent=1) + "\n").encode())
    write_atomically(out / "across.txt", across_table(found).encode())
    draw_across(out / "across.png", found)
    print(across_table(found), end="")


def across_table(found: Across) -> str:
    """Write coverage and contraction as text: a line an answering family, a column a making one."""
    lines = [f"68 % coverage / contraction, +- {found.error:.3f}; lines answer flares that columns made"]
    wide = max(27, *map(len, found.families)) + 2
    for s, name in enumerate(found.shared):
        lines += ["", f"{name:<{wide}}" + "".join(f"{family:>{wide}}" for family in found.families)]
        for a, family in enumerate(found.families):
            pairs = zip(found.coverage[a, :, s], found.contraction[a, :, s], strict=True)
            cells = (f"{coverage:.3f} / {contraction:.3f}" for coverage, contraction in pairs)
            lines.append(f"{family:<{wide}}" + "".join(f"{cell:>{wide}}" for cell in cells))
    lines += ["", f"coverage more than three errors too low: {len(found.misled())} of {found.coverage.size}"]
    return "\n".join(lines) + "\n"


def _tell(line: str) -> None:
    """Print a line of progress."""
    print(line, file=sys.stderr, flush=True)

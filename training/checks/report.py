"""The driver of all checks on one estimator: table, JSON, figures and exit code."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import asdict
from pathlib import Path

import numpy as np

from emu.problem import Problem
from training.checks.answers import answer_held_out
from training.checks.calibration import Calibration, check_calibration
from training.checks.efficiency import Efficiency
from training.checks.estimator import Estimator
from training.checks.reference_store import read_references
from training.checks.sharpness import Against, check_efficiency, check_references
from training.files import write_atomically

__all__ = ["exit_code", "run_checks", "table"]

Progress = Callable[[str], None]
_LEAST_EFFICIENCY = 1e-3  # at N = 20,000: twenty draws of effect, below which nothing can be weighed


def run_checks(estimator: Estimator, problem: Problem, *, cases: int = 500, draws: int = 1000,
               seed: int = 0, level: float = 0.99, weighed: int = 20, weights: int = 20_000,
               references: Path | None = None, out: Path | None = None,
               progress: Progress | None = None) -> dict:
    """Check an estimator on held-out flares, on exact weights and on reference draws.

    Args:
        estimator: to be checked.
        problem: which it claims to answer.
        cases: held-out flares of the calibration checks.
        draws: posterior draws of each.
        seed: of everything; another one than training used.
        level: probability that a right posterior passes one check.
        weighed: flares whose draws are weighed by the exact posterior.
        weights: draws of each.
        references: folder of reference draws of the same problem, if there is one.
        out: folder for checks.json, checks.txt and figures, if wanted.
        progress: called with lines of text.

    Returns:
        All results as numbers, strings, lists and dicts. `passed` holds the verdicts.
    """
    answers = answer_held_out(estimator, problem, cases=cases, draws=draws, seed=seed, progress=progress)
    calibration = check_calibration(answers, problem, level=level, seed=seed)
    efficiency = check_efficiency(estimator, problem, answers.batch, flares=weighed, draws=weights,
                                  seed=seed + 1, progress=progress)
    known = read_references(references) if references is not None else ()
    against = check_references(estimator, problem, known, seed=seed)
    report = {
        "family": problem.name, "campaign": problem.campaign.name, "cases": cases, "draws": draws,
        "seed": seed, "level": level, "outside_prior": answers.outside, "redrawn_truths": answers.redrawn,
        "calibration": _calibration(calibration), "efficiency": _efficiency(efficiency),
        "references": [_against(one) for one in against],
        "passed": {**calibration.passed, **_sharp(efficiency, against)},
    }
    if out is not None:
        _write(out, report, calibration, efficiency, against)
    return report


def exit_code(report: dict) -> int:
    """Return 0 where all checks passed, 1 where calibration failed, 4 where only sharpness did."""
    sharp = {"efficiency", "reference draws"}
    failed = {name for name, passed in report["passed"].items() if not passed}
    if failed - sharp:
        return 1
    return 4 if failed else 0


def table(report: dict) -> str:
    """Write a report as text for a terminal."""
    calibration = report["calibration"]
    lines = [f"{report['family']} on {report['campaign']}: {report['cases']} held-out flares, "
             f"{report['draws']} draws each; {100 * report['outside_prior']:.2f} % of draws impossible, "
             f"{report['redrawn_truths']} truths redrawn", ""]
    lines.append(f"{'parameter':<18}{'ranks':>10}{'largest':>9}{'68 %':>8}{'contraction':>13}")
    for row in calibration["parameters"]:
        lines.append(f"{row['name']:<18}{'inside' if row['ranks_inside'] else 'OUTSIDE':>10}"
                     f"{row['rank_distance']:>9.3f}{row['coverage_68']:>8.3f}{row['contraction']:>13.3f}")
    lines += ["", f"highest-density 68 %: {calibration['density_68']:.3f} +- {calibration['error_68']:.3f}",
              f"gain over the prior at the truth: {calibration['gain']:.2f} +- "
              f"{calibration['gain_error']:.2f} nats"]
    if report["efficiency"]["flares"]:
        lines.append("importance efficiency, quartile / median / quartile: "
                     + " / ".join(f"{100 * q:.3f} %" for q in report["efficiency"]["quartiles"]))
    for row in report["references"]:
        lines.append(_reference_line(row))
    lines += ["", *(f"{'passed' if ok else 'FAILED':<8}{name}" for name, ok in report["passed"].items())]
    return "\n".join(lines)


def _reference_line(row: dict) -> str:
    """Write the comparison with one reference flare."""
    kind = "exact" if row["exact"] else "unresolved"
    if "c2st" not in row:
        return f"{row['name']} ({kind}): hardly a possible draw"
    return (f"{row['name']} ({kind}): C2ST {row['c2st']:.3f} (floor {row['c2st_floor']:.3f}), largest "
            f"distance {max(row['wasserstein']):.2f} widths, width ratios {min(row['width_ratio']):.2f} to "
            f"{max(row['width_ratio']):.2f}, {row['shortfall']:.1f} nats short")


def _calibration(found: Calibration) -> dict:
    """Reduce calibration results to plain numbers."""
    middle = np.median(found.contraction, axis=0)
    rows = [{"name": name, "ranks_inside": joint.inside, "ranks_inside_alone": single.inside,
             "rank_distance": joint.distance, "coverage_68": check.coverage_68,
             "central_inside": check.passed, "contraction": float(middle[k])}
            for k, (name, joint, single, check) in enumerate(zip(
                found.ranks.names, found.ranks.joint, found.ranks.single, found.central, strict=True))]
    return {
        "parameters": rows, "density_68": found.density.coverage_68,
        "error_68": found.density.coverage_68_error, "density_distance": found.density.verdict.distance,
        "tarp_distance": found.tarp.distance, "gain": found.gain.mean, "gain_error": found.gain.error,
        "gain_median": found.gain.median, "impossible_truths": found.gain.impossible,
    }


def _efficiency(found: tuple[Efficiency, ...]) -> dict:
    """Reduce efficiencies to plain numbers."""
    values = [one.full for one in found]
    quartiles = np.quantile(values, [0.25, 0.5, 0.75]).tolist() if values else []
    return {"flares": [{**asdict(one), "steady": one.steady} for one in found], "quartiles": quartiles}


def _against(one: Against) -> dict:
    """Reduce the comparison with a reference to plain numbers."""
    row: dict = {"name": one.name, "exact": one.exact, "shortfall": one.shortfall, "outside": one.outside}
    if one.closeness is not None:
        near = one.closeness
        row |= {"c2st": near.test.accuracy, "c2st_floor": near.test.floor, "c2st_draws": near.test.draws,
                "wasserstein": near.wasserstein.tolist(), "width_ratio": near.width_ratio.tolist(),
                "close": near.close}
    return row


def _sharp(efficiency: tuple[Efficiency, ...], against: tuple[Against, ...]) -> dict[str, bool]:
    """Say whether the estimator is close to exact, as far as that was looked at."""
    verdicts = {}
    if efficiency:
        verdicts["efficiency"] = float(np.median([one.full for one in efficiency])) >= _LEAST_EFFICIENCY
    exact = [one for one in against if one.exact]
    if exact:
        verdicts["reference draws"] = all(one.closeness is not None and one.closeness.close for one in exact)
    return verdicts


def _write(out: Path, report: dict, calibration: Calibration, efficiency: tuple[Efficiency, ...],
           against: tuple[Against, ...]) -> None:
    """Write JSON, text and figures."""
    from training.checks.figures import draw_checks  # loads matplotlib: only when asked for

    write_atomically(out / "checks.json", (json.dumps(_finite(report), indent=1) + "\n").encode())
    write_atomically(out / "checks.txt", (table(report) + "\n").encode())
    draw_checks(out, calibration, efficiency, against)


def _finite(value: object) -> object:
    """Replace infinities and NaN, which JSON cannot hold, by their names."""
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    if isinstance(value, float) and not np.isfinite(value):
        return str(value)
    return value

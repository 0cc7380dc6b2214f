"""Check the learned ray map on fresh random points, on flares of the families and for speed."""

from __future__ import annotations

import functools
import json
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np

from emu.raymap.chart import read_charts, shipped
from emu.raymap.learned import LearnedRays
from training.raymap.errors import QUANTITIES, TARGETS, differences, quantiles
from training.raymap.flares import FAMILIES, FlareErrors, compare_flares
from training.raymap.labels import exact_twice
from training.raymap.points import random_emitters, random_places
from training.raymap.speed import measure_speed

__all__ = ["Domain", "Report", "check", "check_domain", "check_families"]

#: Where the targets are meant; then what the map is trusted with, to its edges.
DOMAINS = ((3.0, 0.95), (2.6, 0.998))
_FAR = 60.0
_MOST_EXACT = 0.002
_FRACTION, _FLUX, _SHARE = 1e-3, 3e-3, 0.999
_SCALAR, _LANES = 15.0, 5.0


@dataclass(frozen=True)
class Domain:
    """Hold the errors of one image order over one domain.

    Args:
        exact: share of rays that were solved exactly. failed: number that no map found, left out.
        all_rays, learned_rays: quantity -> (median, 99.9 %), with and without the exact rays.
    """

    order: int
    near: float
    spin: float
    rays: int
    exact: float
    failed: int
    all_rays: dict[str, tuple[float, float]]
    learned_rays: dict[str, tuple[float, float]]


@dataclass(frozen=True)
class Report:
    """Hold what was found: verdicts, errors by domain, flares by family, microseconds a ray and their ratios."""

    verdicts: dict[str, bool]
    domains: list[Domain]
    families: dict[str, dict[str, float]]
    microseconds: dict[str, float]
    times_the_learned: dict[str, float]

    @property
    def passed(self) -> bool:
        """Tell whether every target was reached."""
        return all(self.verdicts.values())

    @property
    def text(self) -> str:
        """Return the report as Markdown tables."""
        head = [f"{name}, {unit}" if unit else name for name, unit in QUANTITIES.items()]
        lines = [_row("rays", "exact, %", *head), _row(*["---"] * (len(head) + 2))]
        for d in self.domains:
            for kind, errors in (("all", d.all_rays), ("learned alone", d.learned_rays)):
                name = f"order {d.order}, r ≥ {d.near:g}, spin ≤ {d.spin:g}: {kind}"
                cells = (f"{middle:.0e} / {tail:.0e}" for middle, tail in errors.values())
                lines.append(_row(name, f"{100 * d.exact:.2f}", *cells))
        lines += ["", _row("flares", *next(iter(self.families.values()))), _row(*["---"] * 7)]
        lines += [_row(name, *(f"{value:.3g}" for value in found.values())) for name, found in self.families.items()]
        lines += ["", "CPU us a ray: " + ", ".join(f"{name} {value:.2f}" for name, value in self.microseconds.items())]
        ratios = (f"{name} {value:.1f}" for name, value in self.times_the_learned.items())
        lines += ["exact ÷ learned: " + ", ".join(ratios)]
        lines += [f"{'reached' if good else 'MISSED'}: {name}" for name, good in self.verdicts.items()]
        return "\n".join(lines)


def _row(*cells: str) -> str:
    return f"| {' | '.join(cells)} |"


def check_domain(rays: LearnedRays, order: int, near: float, spin: float, count: int, seed: int) -> Domain:
    """Compare `count` random rays with rays that were solved twice."""
    places = random_places(count, seed, spin, near, _FAR)
    emitters = random_emitters(places, seed + 1)
    truth = exact_twice(places, order)
    found = rays.trace(places.spin, places.inclination, places.r, places.n, order)
    errors = differences(found, truth, emitters)
    failed = int(np.count_nonzero(truth.failed | found.failed))
    share = float(np.mean(found.exact))
    return Domain(order, near, spin, count, share, failed, quantiles(errors), quantiles(errors, ~found.exact))


def check_families(count: int, seed: int) -> dict[str, dict[str, float]]:
    """Compare `count` flares of each family; flares with rays that were not found are counted and left out."""
    out = {}
    for name in FAMILIES:
        errors: FlareErrors = compare_flares(name, count, seed)
        kept = errors.failures == 0
        out[name] = {
            "flares": count,
            "left_out": int(np.count_nonzero(~kept)),
            "exact_share": errors.exact / errors.rays,
            "fraction_99.9": float(np.quantile(errors.fraction[kept], 0.999)),
            "flux_99.9": float(np.quantile(errors.flux[kept], 0.999)),
            "within": float(np.mean((errors.fraction[kept] < _FRACTION) & (errors.flux[kept] < _FLUX))),
        }
    return out


def _verdicts(
    domains: list[Domain], families: dict[str, dict[str, float]], ratios: dict[str, float]
) -> dict[str, bool]:
    """Hold what must be reached against what was: order 0 over the whole domain, the families, the speed."""
    whole = domains[0]
    verdicts = {
        f"{name}: median {middle:g}, 99.9 % {tail:g}": whole.all_rays[name][0] <= middle
        and whole.all_rays[name][1] <= tail
        for name, (middle, tail) in TARGETS.items()
    }
    for name, found in families.items():
        verdicts[f"{name}: 99.9 % of flares within 1e-3 and 0.3 %"] = found["within"] >= _SHARE
        verdicts[f"{name}: exact rays below 0.2 %"] = found["exact_share"] < _MOST_EXACT
    verdicts[f"{_SCALAR:g} times the scalar solve"] = ratios["scalar"] >= _SCALAR
    verdicts[f"{_LANES:g} times the solve in lanes"] = ratios["lanes"] >= _LANES
    return verdicts


def check(
    charts: Path | None = None, out: Path | None = None, rays: int = 100_000, flares: int = 2000, seed: int = 20_000
) -> Report:
    """Check the learned map and return the report.

    Args:
        charts: folder that `fit` wrote; None for what the package ships.
        out: JSON file for the report, or None.
        rays: random points of order 0 a domain; order 1 gets a fifth. flares: of each family. seed: of all draws.
    """
    learned = LearnedRays(shipped) if charts is None else LearnedRays(functools.cache(lambda: read_charts(charts)))
    domains = [check_domain(learned, 0, near, spin, rays, seed + 10 * k) for k, (near, spin) in enumerate(DOMAINS)]
    domains += [check_domain(learned, 1, *DOMAINS[0], rays // 5, seed + 50)]
    families = check_families(flares, seed + 100)
    speed = measure_speed(learned, random_places(rays, seed, DOMAINS[0][1], DOMAINS[0][0], _FAR), seed)
    times = {"scalar": speed.scalar, "lanes": speed.exact, "lanes, from the solution": speed.warm}
    ratios = {name: value / speed.learned for name, value in times.items()}
    verdicts = _verdicts(domains, families, ratios)
    report = Report(verdicts, domains, families, asdict(speed), ratios)
    if out is not None:
        out.write_text(json.dumps({"passed": report.passed, "units": QUANTITIES, **asdict(report)}, indent=1) + "\n")
    return report

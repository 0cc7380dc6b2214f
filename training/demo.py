"""The main job on an invented season, small enough for a coffee break: every step is a command you can repeat.

An invented target, the demo campaign, ten invented flares: five of an orbit through a steady field, five with a
field that turns or is turbulent. Sets and networks are small; what they know, and what not, is printed.
"""

from __future__ import annotations

import json
import subprocess
import sys
import time
from pathlib import Path
from typing import Annotated

import typer
from astropy.table import Row, Table

__all__ = ["run_demo"]

FAMILIES = ("midplane-frozen", "midplane-turning", "midplane-turbulent")
# family, how many flares, seed
SEASON = (("midplane-frozen", 5, 101), ("midplane-turning", 3, 102), ("midplane-turbulent", 2, 103))
SHOWN = (("radius", " GM/c2"), ("inclination", " deg"), ("spin", ""))
CASES = 100  # held-out flares of the checks
FEW_DRAWS = 100  # effective draws below which weights say that the exact posterior is much narrower


def _command(words: list[str]) -> list[str]:
    """Return the words with the command of this environment."""
    return [str(Path(sys.executable).parent / words[0]), *words[1:]]


def _run(steps: list[list[str]], log: Path, allowed: tuple[int, ...] = (0,)) -> None:
    """Run commands beside each other, say them, and stop where one fails."""
    for words in steps:
        print(f"  $ {' '.join(words)}", flush=True)
    with log.open("a") as lines:
        running = [subprocess.Popen(_command(words), stderr=lines, stdout=lines) for words in steps]
        codes = [process.wait() for process in running]
    for words, code in zip(steps, codes, strict=True):
        if code not in allowed:
            print(f"error: {words[0]} {words[1]} ended with {code}; see {log}", file=sys.stderr)
            raise SystemExit(1)


def _title(begin: float, text: str) -> None:
    print(f"\n[{time.monotonic() - begin:4.0f} s] {text}", flush=True)


def _train(out: Path, flares: int, steps: int, begin: float, log: Path) -> Path:
    """Make sets, estimators and a classifier, and bind them to a bundle."""
    _title(begin, f"Simulate {flares} flares of each of {len(FAMILIES)} families (exact light bending)")
    for name in FAMILIES:
        _run(
            [["emu-train", "simulate", name, "demo", "--out", f"{out}/sets/{name}", "--flares", str(flares),
              "--workers", "2"]], log,
        )  # fmt: skip
    _title(begin, f"Train one estimator a family, and a classifier: {steps} steps each")
    fits = [
        ["emu-train", "fit", f"{out}/sets/{name}", "--out", f"{out}/fits/{name}", "--config", "demo",
         "--steps", str(steps)]
        for name in FAMILIES
    ]  # fmt: skip
    sets = [f"{out}/sets/{name}" for name in FAMILIES]
    classifier = ["emu-train", "fit-classifier", *sets, "--out", f"{out}/fits/classifier", "--config", "demo",
                  "--steps", str(steps)]  # fmt: skip
    fits.append(classifier)
    for first in range(0, len(fits), 2):
        _run(fits[first : first + 2], log)
    runs = [f"{out}/fits/{name}" for name in (*FAMILIES, "classifier")]
    _run([["emu-train", "publish", *runs, "--out", f"{out}/bundle"]], log)
    return out / "bundle"


def _checks(out: Path, bundle: Path, begin: float, log: Path) -> None:
    """Check the estimators on held-out flares and print the verdicts."""
    _title(begin, "Check the estimators on flares they have never seen")
    _run(
        [["emu-train", "check", str(bundle), "--out", f"{out}/checks", "--cases", str(CASES), "--weighed", "1"]],
        log, (0, 1, 4),
    )  # fmt: skip
    for name in FAMILIES:
        report = json.loads((out / "checks" / name / "checks.json").read_text())
        verdicts = ", ".join(f"{check} {'passed' if ok else 'FAILED'}" for check, ok in report["passed"].items())
        print(f"  {name:20s} {verdicts}")


def _season(out: Path, log: Path) -> list[str]:
    """Invent the ten flares and return their files."""
    files = []
    for name, count, seed in SEASON:
        file = f"{out}/flares/{name}.ecsv"
        words = ["emu", "simulate", name, "demo", "--out", file, "--count", str(count), "--seed", str(seed)]
        _run([words], log)
        files.append(file)
    return files


def _interval(summary: Table, flare: str, family: str, parameter: str) -> str:
    """Return median and 68 % interval of one parameter, in brackets where it is not informed."""
    row = summary[(summary["flare"] == flare) & (summary["family"] == family) & (summary["parameter"] == parameter)][0]
    digits = 2 if parameter == "spin" else 0 if parameter == "inclination" else 1
    text = f"{row['median']:.{digits}f} ({row['low68']:.{digits}f}..{row['high68']:.{digits}f})"
    return text if row["informed"] == "informed" else f"[{text}]"


def _print_flare(flare: str, by_family: dict[str, Row], summary: Table) -> None:
    """Print one flare: the families' probabilities, three parameters under the likeliest, effective draws."""
    best = max(by_family, key=lambda name: by_family[name]["probability"])
    chances = "  ".join(f"{name.split('-')[1]} {by_family[name]['probability']:.2f}" for name in FAMILIES)
    cells = ", ".join(f"{name} {_interval(summary, flare, best, name)}{unit}" for name, unit in SHOWN)
    row = by_family[best]
    undecided = "" if by_family[best]["probability"] > 0.5 else "  (cannot tell)"
    print(f"  {flare:32s} {chances}{undecided}")
    print(f"      {best}: {cells}; {row['ess']:.0f} of {row['draws']} draws effective")


def _print_answers(out: Path) -> None:
    """Print for each flare what it allows, and then what not to trust."""
    summary, chances = Table.read(out / "answers" / "summary.ecsv"), Table.read(out / "answers" / "families.ecsv")
    print("\n  Each flare (its name tells the truth), probabilities, and medians with 68 % intervals:")
    for flare in dict.fromkeys(chances["flare"]):
        _print_flare(flare, {row["family"]: row for row in chances if row["flare"] == flare}, summary)
    low = sum(ess < FEW_DRAWS for ess in chances["ess"])
    print(f"""
  Where not to trust this:
  - An interval in brackets hardly differs from the prior: the data do not inform it.
  - {low} of {len(chances)} posteriors (flare and family) have fewer than {FEW_DRAWS} effective draws of 1000: there the
    exact posterior is much narrower than what these small networks say. `emu infer --finish exact` samples it.
  - The probabilities are a small classifier's, for equal shares of {len(FAMILIES)} families, and hold only among them.
  - A check that passed on {CASES} flares is a check on {CASES} flares; the lines above say what failed.""")


def run_demo(out: Path, flares: int, steps: int) -> None:
    """Run the demo.

    Args:
        out: folder for all that it writes; what an earlier run left there is used again.
        flares: of each training set.
        steps: of each fit.
    """
    begin = time.monotonic()
    out.mkdir(parents=True, exist_ok=True)
    (out / "flares").mkdir(exist_ok=True)
    log = out / "log.txt"
    print(f"An invented season of an invented target. Everything goes to {out}/, the commands' words to {log}.")
    bundle = out / "bundle"
    if not bundle.exists():
        _train(out, flares, steps, begin, log)
    _checks(out, bundle, begin, log)
    _title(begin, "Observe ten flares of the season")
    files = _season(out, log)
    _title(begin, "Infer what each allows")
    words = ["emu", "infer", *files, "--bundle", str(bundle), "--out", f"{out}/answers", "--workers", "2",
             "--overwrite"]  # fmt: skip
    _run([words], log, (0, 3))
    _print_answers(out)
    _title(begin, f"Done. Figures: {out}/answers/figures, draws: {out}/answers/draws.zarr")


def _main(
    out: Annotated[Path, typer.Option(help="Folder for all that the demo writes.")] = Path("demo-output"),
    flares: Annotated[int, typer.Option(help="Flares of each training set.")] = 20_000,
    steps: Annotated[int, typer.Option(help="Steps of each fit.")] = 600,
) -> None:
    """Run the main job on an invented season."""
    run_demo(out, flares, steps)


if __name__ == "__main__":
    typer.run(_main)

"""`emu-train`: simulate sets, fit estimators, check and publish them.

Each command only names its options and calls one driver, imported when the command runs, so that
`emu-train --help` is quick.
"""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from emu.console import command_line, finish, run

if TYPE_CHECKING:
    from training.loop import Outcome

__all__ = ["app", "main"]

app = command_line("emu-train", "Build estimators for polarised flares, and prove them.")

Family = Annotated[str, typer.Argument(help="Family name, the path of a TOML, or an installed model.")]
Campaign = Annotated[str, typer.Argument(help="Campaign name, or the path of a TOML.")]
Config = Annotated[str, typer.Option(help="Recipe name, or the path of a TOML.")]
Minutes = Annotated[float | None, typer.Option(help="Budget in CPU-minutes, made steps by the recipe.")]
Steps = Annotated[int | None, typer.Option(help="Budget in steps, instead of minutes.")]
Seed = Annotated[int, typer.Option(help="Every random number follows from it.")]
Workers = Annotated[int, typer.Option(min=1, help="Processes; the result does not depend on them.")]


@app.command()
def campaign_from(
    flares: Annotated[list[Path], typer.Argument(metavar="FLARES...", help="Flare tables, or folders.")],
    out: Annotated[Path, typer.Option(help="TOML to write.")],
    columns: Annotated[Path | None, typer.Option(help="TOML that translates other people's headers.")] = None,
    target: Annotated[str | None, typer.Option(help="Target, if the tables name none: name or TOML.")] = None,
) -> None:
    """Write the campaign that one's own flares could have come from."""
    from training.campaign_from import write_campaign

    finish(write_campaign(flares, out, columns, target))


@app.command()
def simulate(
    family: Family,
    campaign: Campaign,
    out: Annotated[Path, typer.Option(help="Folder of the set.")],
    flares: Annotated[int, typer.Option(min=1, help="How many flares.")] = 100_000,
    seed: Seed = 0,
    workers: Workers = 2,
) -> None:
    """Make a training set, or go on with one that was cut short."""
    from training.simulate import simulate

    simulate(family, campaign, out, flares, seed, workers)


@app.command()
def fit(
    training_set: Annotated[Path, typer.Argument(metavar="SET", help="A complete training set.")],
    out: Annotated[Path, typer.Option(help="Folder of the fit.")],
    config: Config = "default",
    minutes: Minutes = None,
    steps: Steps = None,
    seed: Seed = 0,
) -> None:
    """Fit the posterior estimator of a family, or go on with a fit that was cut short."""
    from training.fit_estimator import fit

    fit(training_set, out, config, minutes=minutes, steps=steps, seed=seed, report=_tell)


@app.command()
def fit_classifier(
    sets: Annotated[list[Path], typer.Argument(metavar="SETS...", help="One complete set a family.")],
    out: Annotated[Path, typer.Option(help="Folder of the fit.")],
    config: Config = "default",
    minutes: Minutes = None,
    steps: Steps = None,
    seed: Seed = 0,
) -> None:
    """Fit a classifier over families, or go on with a fit that was cut short."""
    from training.fit_classifier import fit

    fit(sets, out, config, minutes=minutes, steps=steps, seed=seed, report=_tell)


@app.command()
def publish(
    runs: Annotated[list[Path], typer.Argument(metavar="RUNS...", help="Folders of fits of one campaign.")],
    out: Annotated[Path, typer.Option(help="Folder of the bundle; it must not exist.")],
) -> None:
    """Write fits as one bundle that `emu infer` takes."""
    from training.publish import publish

    publish(runs, out)


@app.command()
def references(
    family: Family,
    campaign: Campaign,
    out: Annotated[Path, typer.Option(help="Folder of the draws, and of unfinished work.")],
    want: Annotated[int, typer.Option(min=1, help="Stop when so many flares count as exact.")] = 4,
    most: Annotated[int, typer.Option(min=1, help="Give up after so many flares.")] = 16,
    seed: Seed = 1,
    workers: Workers = 1,
) -> None:
    """Sample held-out flares exactly in two ways, or go on with that; hours of work."""
    from training.checks.references import make

    exact = make(family, campaign, out, want, seed, workers, most=most)
    typer.echo(f"{exact} of {want} flares count as exact", err=True)
    finish(0 if exact >= want else 1)


def _tell(outcome: "Outcome") -> None:
    """Print where a fit stands."""
    step, loss = outcome.history[-1]
    minutes = outcome.cpu_seconds / 60.0
    typer.echo(f"step {step}: held-out loss {loss:.3f}, best {outcome.best:.3f}, {minutes:.1f} min", err=True)


def main() -> None:
    """Run `emu-train`."""
    run(app)

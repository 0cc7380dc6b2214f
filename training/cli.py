"""`emu-train`: simulate sets, fit estimators, check and publish them.

Each command only names its options and calls one driver, imported when the command runs, so that
`emu-train --help` is quick.
"""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from emu.console import command_line, finish, listed, run

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
def check(
    path: Annotated[Path, typer.Argument(metavar="BUNDLE|RUN", help="A bundle, or the folder of a fit.")],
    out: Annotated[Path, typer.Option(help="Folder for table, JSON and figures.")],
    families: Annotated[str | None, typer.Option(help="Families, joined by commas, else all.")] = None,
    cases: Annotated[int, typer.Option(min=20, help="Held-out flares.")] = 500,
    draws: Annotated[int, typer.Option(min=20, help="Draws of each.")] = 1000,
    weighed: Annotated[int, typer.Option(min=0, help="Flares weighed by the exact posterior.")] = 20,
    seed: Annotated[int, typer.Option(help="Another one than the training's.")] = 1,
    references: Annotated[Path | None, typer.Option(help="Reference draws to compare with.")] = None,
    across: Annotated[bool, typer.Option("--across", help="Also each family on others' flares.")] = False,
) -> None:
    """Check calibration, sharpness and closeness to exact sampling; exit code 0, 1 or 4."""
    from training.check import check

    code = check(
        path, out, families=listed(families), cases=cases, draws=draws, weighed=weighed, seed=seed,
        references=references, across=across,
    )  # fmt: skip
    finish(code)


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


@app.command()
def table(
    out: Annotated[Path, typer.Option(help="Folder of all sets, fits and checks, and of the table.")],
    families: Annotated[str | None, typer.Option(help="Families, joined by commas, else all.")] = None,
    campaign: Annotated[str, typer.Option(help="Campaign name or TOML.")] = "realistic",
    flares: Annotated[int, typer.Option(min=1, help="Size of each set.")] = 60_000,
    minutes: Annotated[float, typer.Option(help="CPU-minutes of each fit.")] = 5.0,
    config: Config = "default",
    cases: Annotated[int, typer.Option(min=20, help="Held-out flares of the checks.")] = 500,
    seed: Seed = 0,
    workers: Workers = 2,
) -> None:
    """Simulate, fit and check every family, or go on with that."""
    from training.table import Plan, table

    plan = Plan(campaign, flares, minutes, config, cases, seed=seed)
    table(out, plan, listed(families), workers, report=lambda line: typer.echo(line.family, err=True))


@app.command()
def choices(
    training_set: Annotated[Path, typer.Argument(metavar="SET", help="A complete training set.")],
    recipes: Annotated[list[str], typer.Argument(metavar="RECIPES...", help="Recipe names, or paths of TOMLs.")],
    out: Annotated[Path, typer.Option(help="Folder of the table.")],
    minutes: Annotated[float, typer.Option(help="CPU-minutes of each recipe, as this machine spends them.")] = 2.0,
    seed: Seed = 0,
) -> None:
    """Compare recipes at equal cost: held-out loss against draws a second."""
    from training.choices import choices

    choices(training_set, recipes, out, minutes=minutes, seed=seed, report=lambda line: typer.echo(line, err=True))


raymap = command_line("emu-train raymap", "Make and check the learned ray map.")
app.add_typer(raymap, name="raymap")
Labels = Annotated[Path, typer.Option(help="File of the exact rays.")]


@raymap.command("simulate")
def raymap_simulate(labels: Labels, seed: Seed = 0) -> None:
    """Solve for the exact rays that the learned map is fitted to; about a CPU-minute."""
    from training.raymap.simulate import simulate

    simulate(labels, seed)


@raymap.command("fit")
def raymap_fit(
    labels: Labels,
    out: Annotated[Path, typer.Option(help="Folder for learned.safetensors and learned.json.")],
    seed: Seed = 0,
) -> None:
    """Fit the learned map in seconds; the exact rays are made first where they are missing."""
    from training.raymap.fit import fit

    fit(labels, out, seed)


@raymap.command("check")
def raymap_check(
    charts: Annotated[Path | None, typer.Option(help="Folder of a fit, instead of the shipped map.")] = None,
    out: Annotated[Path | None, typer.Option(help="JSON file for the report.")] = None,
    rays: Annotated[int, typer.Option(min=1000, help="Random points of each domain.")] = 100_000,
    flares: Annotated[int, typer.Option(min=100, help="Flares of each family.")] = 2000,
    seed: Annotated[int, typer.Option(help="Of the points; take another for other points.")] = 20_000,
) -> None:
    """Measure accuracy and speed against the exact solve; exit code 1 where a target is missed."""
    from training.raymap.check import check

    report = check(charts, out, rays, flares, seed)
    typer.echo(report.text)
    finish(0 if report.passed else 1)


def _tell(outcome: "Outcome") -> None:
    """Print where a fit stands."""
    step, loss = outcome.history[-1]
    minutes = outcome.cpu_seconds / 60.0
    typer.echo(f"step {step}: held-out loss {loss:.3f}, best {outcome.best:.3f}, {minutes:.1f} min", err=True)


def main() -> None:
    """Run `emu-train`."""
    run(app)

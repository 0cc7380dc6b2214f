"""`emu`: read flares, simulate them, and say what they allow.

Each command only names its options and calls one driver, imported when the command runs, so that
`emu --help` is quick.
"""

from pathlib import Path
from typing import Annotated

import typer

from emu.console import command_line, finish, listed, run

__all__ = ["app", "main"]

app = command_line("emu", "Posteriors for polarised flares close to a black hole.")

Flares = Annotated[list[Path], typer.Argument(help="Flare tables, or folders of them.", metavar="FLARES...")]
Columns = Annotated[Path | None, typer.Option(help="TOML that maps other people's column names.")]
Target = Annotated[str | None, typer.Option(help="Target, in place of the stated one: name or TOML.")]
Seed = Annotated[int, typer.Option(help="Every random number follows from it.")]
Workers = Annotated[int, typer.Option(help="Processes.")]


@app.command()
def families() -> None:
    """List the shipped families and the models that other packages brought along."""
    from emu.families.catalogue import family_names
    from emu.families.installed import installed_names, model

    for name in (*family_names(), *installed_names()):
        found = model(name)
        typer.echo(f"{name:27} {len(found.parameters)} parameters  {getattr(found, 'description', '')}")


@app.command()
def inspect(
    flares: Flares,
    columns: Columns = None,
    campaign: Annotated[str | None, typer.Option(help="Campaign to compare with: name or TOML.")] = None,
    target: Target = None,
    out: Annotated[Path | None, typer.Option(help="Figure: a .png, or a folder for one a flare.")] = None,
) -> None:
    """Show what tables hold, and whether it lies within the ranges of a campaign."""
    from emu.report.inspect import inspect

    finish(inspect(flares, columns, campaign, target, out))


@app.command()
def simulate(
    family: Annotated[str, typer.Argument(help="Family name, the path of a TOML, or an installed model.")],
    campaign: Annotated[str, typer.Argument(help="Campaign name, or the path of a TOML.")],
    out: Annotated[Path, typer.Option(help="Flares and their truth: an .ecsv, or a folder for one a flare.")],
    count: Annotated[int, typer.Option(min=1, help="How many flares.")] = 1,
    seed: Seed = 0,
) -> None:
    """Invent flares of a family, as a campaign would have seen them."""
    from emu.report.simulate import simulate

    finish(simulate(family, campaign, out, count, seed))


@app.command()
def infer(
    flares: Flares,
    out: Annotated[Path, typer.Option(help="Folder of the run: draws, summary, figures, run.json.")],
    bundle: Annotated[Path | None, typer.Option(help="Trained bundle.")] = None,
    families: Annotated[str | None, typer.Option(help="Families, joined by commas; all of the bundle.")] = None,
    draws: Annotated[int, typer.Option(help="Draws a flare and family.")] = 1000,
    finish_by: Annotated[
        str, typer.Option("--finish", help="none, or exact: sample the exact likelihood, slowly.")
    ] = "none",
    raymap: Annotated[str, typer.Option(help="How the likelihood finds rays: exact, or learned (faster).")] = "exact",
    columns: Columns = None,
    campaign: Annotated[str | None, typer.Option(help="Without a bundle: campaign name or TOML.")] = None,
    target: Target = None,
    figures: Annotated[bool, typer.Option(help="Draw figures.")] = True,
    likelihood: Annotated[bool, typer.Option(help="Weigh draws by the exact likelihood.")] = True,
    as_json: Annotated[bool, typer.Option("--json", help="Print a summary as JSON on stdout.")] = False,
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace a folder of an earlier run.")] = False,
    seed: Seed = 0,
    workers: Workers = 1,
) -> None:
    """Say what each flare allows under each family, and whether to trust it."""
    from emu.report.answer import answer

    code = answer(
        flares, bundle, out, families=listed(families), draws=draws, finish=finish_by, raymap=raymap,
        columns=columns, campaign=campaign, target=target, figures=figures, likelihood=likelihood,
        as_json=as_json, seed=seed, workers=workers, overwrite=overwrite,
    )  # fmt: skip
    finish(code)


def main() -> None:
    """Run `emu`."""
    run(app)

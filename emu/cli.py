"""`emu`: read flares, simulate them, and say what they allow.

Each command only names its options and calls one driver, imported when the command runs, so that
`emu --help` is quick.
"""

from pathlib import Path
from typing import Annotated, Literal

import typer

from emu.console import command_line, finish, listed, run

__all__ = ["app", "main"]

app = command_line("emu", "Posteriors for polarised flares close to a black hole.")

Flares = Annotated[list[Path], typer.Argument(help="Flare tables, or folders of them.", metavar="FLARES...")]
Columns = Annotated[Path | None, typer.Option(help="TOML that maps other people's column names.")]
Campaign = Annotated[str | None, typer.Option(help="Campaign name, or the path of a campaign's TOML.")]
Seed = Annotated[int, typer.Option(help="Every random number follows from it.")]


@app.command()
def families() -> None:
    """List the families of models, shipped and installed."""
    from emu.report.families import list_families

    finish(list_families())


@app.command()
def inspect(
    flares: Flares,
    columns: Columns = None,
    campaign: Campaign = None,
    out: Annotated[Path | None, typer.Option(help="Draw what was read to this PNG or PDF.")] = None,
) -> None:
    """Show what a table holds, and whether it lies inside the ranges of a campaign."""
    from emu.report.inspect import inspect_flares

    finish(inspect_flares(flares, columns=columns, campaign=campaign, out=out))


@app.command()
def simulate(
    family: Annotated[str, typer.Argument(help="Family name, TOML path, or installed model.")],
    campaign: Annotated[str, typer.Argument(help="Campaign name, or the path of a TOML.")],
    out: Annotated[Path, typer.Option(help="ECSV to write: the flares and their truth.")],
    count: Annotated[int, typer.Option(min=1, help="How many flares.")] = 1,
    seed: Seed = 0,
) -> None:
    """Invent flares of a family, as a campaign would have seen them."""
    from emu.report.invent import invent_flares

    finish(invent_flares(family, campaign, out=out, count=count, seed=seed))


@app.command()
def infer(
    flares: Flares,
    out: Annotated[Path, typer.Option(help="Folder for draws, summary, figures and run.json.")],
    bundle: Annotated[Path | None, typer.Option(help="Trained bundle; not needed to finish exactly.")] = None,
    families: Annotated[str | None, typer.Option(help="Families, joined by commas; else all.")] = None,
    draws: Annotated[int, typer.Option(min=1, help="Draws a flare and family.")] = 1000,
    finish_by: Annotated[Literal["none", "exact"], typer.Option("--finish", help="Sample exactly.")] = "none",
    raymap: Annotated[Literal["exact"], typer.Option(help="How rays are found.")] = "exact",
    columns: Columns = None,
    campaign: Campaign = None,
    target: Annotated[str | None, typer.Option(help="Target name, or the path of a TOML.")] = None,
    figures: Annotated[bool, typer.Option(help="Draw figures.")] = True,
    likelihood: Annotated[bool, typer.Option(help="Weigh draws by the exact likelihood.")] = True,
    as_json: Annotated[bool, typer.Option("--json", help="Print a summary as JSON.")] = False,
    seed: Seed = 0,
    workers: Annotated[int, typer.Option(min=1, help="Processes.")] = 1,
) -> None:
    """Say what each flare allows under each family, and whether to trust the answer."""
    from emu.report.answer import answer

    finish(answer(flares, bundle, out))


def main() -> None:
    """Run `emu`."""
    run(app)

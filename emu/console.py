"""What the two command lines share: an app's frame, and how a person's errors end."""

import sys
from collections.abc import Callable
from typing import Any

import typer

from emu import __version__
from emu.errors import UserError

__all__ = ["command_line", "finish", "listed", "run"]


def command_line(name: str, purpose: str) -> typer.Typer:
    """Make an empty command line with `--version`.

    Args:
        name: the command as it is typed.
        purpose: one sentence for `--help`.

    Returns:
        The app that commands are added to.
    """
    app = typer.Typer(name=name, no_args_is_help=True, pretty_exceptions_enable=False, add_completion=False)

    def show_version(wanted: bool) -> None:
        if wanted:
            typer.echo(f"{name} {__version__}")
            raise typer.Exit

    @app.callback(help=purpose)
    def options(
        version: bool = typer.Option(
            False, "--version", callback=show_version, is_eager=True, help="Print the version and stop."
        ),
    ) -> None:
        """Accept the options that stand before a command."""

    return app


def finish(code: int) -> None:
    """End a command with the exit code that its driver returned."""
    raise typer.Exit(code)


def run(app: Callable[[], Any]) -> None:
    """Run an app: a UserError is one line and exit code 2, an interrupt exit code 130.

    Args:
        app: a command line made by `command_line`.

    Raises:
        SystemExit: always, with the exit code.
    """
    try:
        app()
    except UserError as mistake:
        print(f"error: {mistake}", file=sys.stderr)
        raise SystemExit(2) from None
    except KeyboardInterrupt:
        raise SystemExit(130) from None


def listed(text: str | None) -> tuple[str, ...] | None:
    """Split names that are joined by commas; None, for all, stays None."""
    return None if text is None else tuple(name.strip() for name in text.split(",") if name.strip())

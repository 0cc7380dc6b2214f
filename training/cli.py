"""`emu-train`: simulate sets, fit estimators, check and publish them.

Each command only names its options and calls one driver, imported when the command runs, so that
`emu-train --help` is quick.
"""

from pathlib import Path
from typing import Annotated

import typer

from emu.console import command_line, finish, run

__all__ = ["app", "main"]

app = command_line("emu-train", "Build estimators for polarised flares, and prove them.")


def main() -> None:
    """Run `emu-train`."""
    run(app)

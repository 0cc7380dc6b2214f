"""The frame of the command lines: a user's mistake is one line, and never a traceback."""

import subprocess
import sys

import pytest
import typer

from emu import __version__
from emu.console import command_line, finish, listed, run
from emu.errors import UserError


@pytest.fixture
def app() -> typer.Typer:
    app = command_line("frame", "A frame for tests.")

    @app.command()
    def mistake() -> None:
        raise UserError("flares.csv, row 3: error is 0; give a positive error")

    @app.command()
    def interrupted() -> None:
        raise KeyboardInterrupt

    @app.command()
    def partly() -> None:
        finish(3)

    @app.command()
    def broken() -> None:
        raise RuntimeError("a bug")

    return app


def end(app: typer.Typer, monkeypatch: pytest.MonkeyPatch, *words: str) -> object:
    monkeypatch.setattr(sys, "argv", ["frame", *words])
    with pytest.raises(SystemExit) as caught:
        run(app)
    return caught.value.code


def test_a_users_mistake(
    app: typer.Typer, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    assert end(app, monkeypatch, "mistake") == 2
    printed = capsys.readouterr()
    assert printed.err == "error: flares.csv, row 3: error is 0; give a positive error\n"
    assert printed.out == ""


def test_an_interrupt(app: typer.Typer, monkeypatch: pytest.MonkeyPatch) -> None:
    assert end(app, monkeypatch, "interrupted") == 130


def test_a_drivers_exit_code(app: typer.Typer, monkeypatch: pytest.MonkeyPatch) -> None:
    assert end(app, monkeypatch, "partly") == 3


def test_a_mistake_of_ours_keeps_its_traceback(app: typer.Typer, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "argv", ["frame", "broken"])
    with pytest.raises(RuntimeError, match="a bug"):
        run(app)


def test_lists_joined_by_commas() -> None:
    assert listed(None) is None
    assert listed("a, b,,c ") == ("a", "b", "c")


@pytest.mark.parametrize(("module", "name"), [("emu.cli", "emu"), ("training.cli", "emu-train")])
def test_version(module: str, name: str) -> None:
    script = f"import sys; from {module} import main; sys.argv = ['x', '--version']; main()"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout == f"{name} {__version__}\n"

"""The two command lines: commands are thin, their drivers exist, and a user's mistake is one line."""

import ast
import importlib
import inspect
import sys
from pathlib import Path

import pytest

import emu.cli
import training.cli
from emu.families.catalogue import family_names

MOST_LINES = 15
MODULES = {"emu": emu.cli, "emu-train": training.cli}


def commands() -> list[tuple[str, ast.FunctionDef]]:
    """List the functions of both command lines that are commands."""
    found = []
    for name, module in MODULES.items():
        for node in ast.parse(inspect.getsource(module)).body:
            if isinstance(node, ast.FunctionDef) and node.decorator_list:
                found.append((name, node))
    return found


each_command = pytest.mark.parametrize(
    ("program", "command"), commands(), ids=lambda value: value if isinstance(value, str) else value.name
)


def call(program: str, monkeypatch: pytest.MonkeyPatch, *words: object) -> object:
    """Run a command in this process and return its exit code."""
    monkeypatch.setattr(sys, "argv", [program, *map(str, words)])
    with pytest.raises(SystemExit) as caught:
        MODULES[program].main()
    return caught.value.code


@each_command
def test_commands_are_thin(program: str, command: ast.FunctionDef) -> None:
    lines = (command.end_lineno or 0) - command.body[0].lineno
    assert lines < MOST_LINES, f"{program} {command.name}: {lines} lines"


@each_command
def test_drivers_exist(program: str, command: ast.FunctionDef) -> None:
    imports = [node for node in ast.walk(command) if isinstance(node, ast.ImportFrom)]
    assert imports, f"{program} {command.name} calls no driver"
    for node in imports:
        module = importlib.import_module(str(node.module))
        for alias in node.names:
            assert hasattr(module, alias.name), f"{program} {command.name}: {node.module}.{alias.name}"


@each_command
def test_drivers_take_what_they_are_given(program: str, command: ast.FunctionDef) -> None:
    drivers = {
        alias.asname or alias.name: getattr(importlib.import_module(str(node.module)), alias.name)
        for node in ast.walk(command)
        if isinstance(node, ast.ImportFrom)
        for alias in node.names
    }
    for node in ast.walk(command):
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in drivers:
            words = [word.arg for word in node.keywords if word.arg]
            inspect.signature(drivers[node.func.id]).bind(*node.args, **dict.fromkeys(words))


def test_families_lists_all(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    assert call("emu", monkeypatch, "families") == 0
    listed = [line.split()[0] for line in capsys.readouterr().out.splitlines()]
    assert listed[: len(family_names())] == list(family_names())


def test_invented_flares_can_be_inspected_and_matched(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    flares, campaign = tmp_path / "flares.ecsv", tmp_path / "mine.toml"
    assert call("emu", monkeypatch, "simulate", "midplane-frozen", "demo", "--out", flares, "--count", 2) == 0
    assert call("emu", monkeypatch, "inspect", flares, "--campaign", "demo") == 0
    assert capsys.readouterr().out.count("inside campaign demo") == 2
    assert call("emu-train", monkeypatch, "campaign-from", flares, "--out", campaign) == 0
    assert call("emu", monkeypatch, "inspect", flares, "--campaign", campaign) == 0


MISTAKES = [
    ("emu", ["simulate", "no-such", "demo", "--out", "x.ecsv"], "no family 'no-such'"),
    ("emu", ["simulate", "midplane-frozen", "no-such", "--out", "x.ecsv"], "no campaign 'no-such'"),
    ("emu", ["inspect", "no-such.ecsv"], "none of 1 flares or files could be read"),
    ("emu", ["infer", "no-such.ecsv", "--out", "x"], "give --bundle; or --finish exact"),
    ("emu", ["infer", "no-such.ecsv", "--out", "x", "--finish", "half", "--bundle", "b"], "--finish is 'half'"),
    ("emu", ["infer", "no-such.ecsv", "--out", "x", "--bundle", "b"], "b: no bundle"),
    ("emu-train", ["simulate", "no-such", "demo", "--out", "x"], "no family 'no-such'"),
    ("emu-train", ["fit", "no-such", "--out", "x", "--minutes", "1"], "no-such: no training set"),
    ("emu-train", ["fit", "no-such", "--out", "x"], "give either --minutes or --steps"),
    ("emu-train", ["fit-classifier", "a", "b", "--out", "x", "--minutes", "1"], "a: no training set"),
    ("emu-train", ["publish", "no-such", "--out", "x"], "no-such: no finished fit"),
    ("emu-train", ["campaign-from", "no-such.ecsv", "--out", "x.toml"], "none of 1 flares or files"),
]


@pytest.mark.parametrize(("program", "words", "message"), MISTAKES)
def test_mistakes_are_one_line_and_write_nothing(
    program: str,
    words: list[str],
    message: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    assert call(program, monkeypatch, *words) == 2
    last = capsys.readouterr().err.splitlines()[-1]
    assert last.startswith("error: ")
    assert message in last
    assert not list(tmp_path.iterdir())

"""Configs are found by name or path, and refused with one line that names the cure."""

import tomllib
from pathlib import Path
from typing import Any

import pytest

from emu.configs import check_keys, config_names, config_text, number, read_toml
from emu.errors import UserError

KINDS = ("families", "campaigns", "training", "targets")
CHECKOUT = Path(__file__).resolve().parent.parent / "configs"


@pytest.mark.parametrize("kind", KINDS)
def test_every_shipped_file_is_found_by_its_name(kind: str) -> None:
    files = sorted((CHECKOUT / kind).glob("*.toml"))
    assert config_names(kind) == tuple(sorted(path.stem for path in files))
    for path in files:
        text, where = config_text(kind, path.stem)
        assert text == path.read_text(encoding="utf-8")
        assert where == f"configs/{kind}/{path.name}"
        assert read_toml(kind, path.stem) == tomllib.loads(text)


def test_a_path_is_read_as_it_is(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    path.write_text("mass = 4.5e6\n")
    assert config_text("targets", str(path)) == ("mass = 4.5e6\n", str(path))
    assert read_toml("targets", str(path)) == {"mass": 4.5e6}


def test_unknown_name_lists_what_there_is() -> None:
    with pytest.raises(UserError) as caught:
        config_text("families", "no-such-family")
    message = str(caught.value)
    assert message.startswith("no family 'no-such-family': one of ")
    assert all(name in message for name in config_names("families"))


def test_a_name_cannot_leave_its_folder() -> None:
    with pytest.raises(UserError, match=r"no campaign '\.\./families/midplane-frozen'"):
        config_text("campaigns", "../families/midplane-frozen")


def test_unknown_kind_is_a_mistake_of_the_program() -> None:
    with pytest.raises(ValueError, match="unknown kind of config 'colours'") as caught:
        config_names("colours")
    assert not isinstance(caught.value, UserError)


def test_unreadable_files(tmp_path: Path) -> None:
    missing, binary, broken = (tmp_path / name for name in ("missing.toml", "binary.toml", "broken.toml"))
    binary.write_bytes(b"\xff\xfe\x00")
    broken.write_text("a = 1\nb = \n")
    with pytest.raises(UserError, match=r"missing\.toml: cannot be read: No such file"):
        read_toml("families", str(missing))
    with pytest.raises(UserError, match=r"binary\.toml: cannot be read: it is not UTF-8 text"):
        read_toml("families", str(binary))
    with pytest.raises(UserError, match=r"broken\.toml: not valid TOML: .*line 2"):
        read_toml("families", str(broken))


def test_keys() -> None:
    check_keys({"a": 1, "b": 2}, ("a",), ("b", "c"), "here")
    with pytest.raises(UserError, match=r"^here: unknown key 'd'; allowed: a, b$"):
        check_keys({"a": 1, "d": 2}, ("a",), ("b",), "here")
    with pytest.raises(UserError, match=r"^here: key 'a' is missing$"):
        check_keys({"b": 1}, ("a",), ("b",), "here")


@pytest.mark.parametrize("value", ["1.0", True, None, [1.0], float("inf"), float("nan")])
def test_numbers_are_never_coerced(value: Any) -> None:
    with pytest.raises(UserError, match=r"^here: a is .*; give a finite number$"):
        number({"a": value}, "a", "here")


def test_an_integer_is_a_number() -> None:
    result = number({"a": 3}, "a", "here")
    assert isinstance(result, float)
    assert result == 3.0

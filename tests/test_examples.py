"""Run the examples in docstrings."""

import doctest
import importlib
from pathlib import Path

import pytest

import emu

ROOT = Path(__file__).resolve().parent.parent
WITH_EXAMPLES = sorted(
    ".".join(path.relative_to(ROOT).with_suffix("").parts)
    for top in ("emu", "training")
    for path in (ROOT / top).rglob("*.py")
    if path.name != "__init__.py" and ">>> " in path.read_text(encoding="utf-8")
)


@pytest.mark.parametrize("module", WITH_EXAMPLES)
def test_examples(module: str) -> None:
    failed, tried = doctest.testmod(importlib.import_module(module), optionflags=doctest.ELLIPSIS)
    assert tried
    assert not failed


def test_every_public_name_of_emu_is_there() -> None:
    for name in emu.__all__:
        assert callable(getattr(emu, name)), name
    assert set(emu.__all__) <= set(dir(emu))
    with pytest.raises(AttributeError, match="no attribute 'no_such'"):
        _ = emu.no_such

"""Models of other packages, found beside our own families."""

from types import SimpleNamespace

import pytest

from emu.errors import UserError
from emu.families.catalogue import family
from emu.families.installed import installed_names, model
from tests.reference.toy import ToyModel


class Installed(dict):
    """Stand in for the entry points of this environment."""

    @property
    def names(self):
        return set(self)


def install(monkeypatch, name, load):
    point = SimpleNamespace(name=name, value="somewhere:thing", load=load)
    monkeypatch.setattr("emu.families.installed.entry_points", lambda group: Installed({name: point}))


def test_an_installed_model_is_found_as_object_class_or_factory(monkeypatch):
    for load in (ToyModel, lambda: ToyModel, lambda: lambda: ToyModel()):
        install(monkeypatch, "toy", load)
        assert model("toy") == ToyModel()
        assert installed_names() == ("toy",)
    assert model("midplane-frozen") == family("midplane-frozen")


def test_what_is_installed_but_no_model_is_refused(monkeypatch):
    def broken():
        raise ImportError("no such thing")

    for name, load, message in (
        ("toy", broken, "cannot be loaded: ImportError: no such thing"),
        ("toy", lambda: lambda: 3, "is no model: it lacks name, parameters"),
        ("other", lambda: ToyModel, "calls itself 'toy'"),
        ("midplane-frozen", lambda: ToyModel("midplane-frozen"), "rename its entry point"),
    ):
        install(monkeypatch, name, load)
        with pytest.raises(UserError, match=message):
            model(name)

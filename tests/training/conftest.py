"""Files and installed models that the tests of training share."""

import pytest

from tests.training.small import CAMPAIGN, RECIPE, install_toys


@pytest.fixture
def toys(tmp_path, monkeypatch):
    """Install the closed-form models; give the paths of a campaign and of a recipe."""
    install_toys(tmp_path / "installed")
    monkeypatch.syspath_prepend(str(tmp_path / "installed"))
    campaign, recipe = tmp_path / "small.toml", tmp_path / "recipe.toml"
    campaign.write_text(CAMPAIGN)
    recipe.write_text(RECIPE)
    return str(campaign), str(recipe)

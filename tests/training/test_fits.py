"""Fits by name: what a run leaves behind, that a kill changes nothing, and what is refused."""

import json
from pathlib import Path

import numpy as np
import pytest
from safetensors.torch import load_file

from emu.errors import UserError
from emu.inference.classifier import ClassifierNetwork, FamilyClassifier
from emu.observe.rows import RowBatch
from tests.training.small import RECIPE, SMALL, contents, fast_toy
from training import fit_classifier, fit_estimator
from training.recipe import parse_recipe, recipe
from training.simulate import simulate


class Killed(Exception):
    """Stand for a kill just after a checkpoint."""


def stop_at(step: int):
    def report(outcome):
        if outcome.step >= step:
            raise Killed

    return report


@pytest.fixture
def sets(tmp_path, toys) -> tuple[list[Path], str]:
    """Make the sets of two families; give their folders and a recipe."""
    campaign, chosen = toys
    names = ("toy", "toy-fast")
    return [simulate(name, campaign, tmp_path / name, 1000, 1, workers=1) for name in names], chosen


def test_a_killed_fit_ends_as_an_undisturbed_one(tmp_path, sets):
    folder, chosen = sets[0][0], sets[1]
    whole = fit_estimator.fit(folder, tmp_path / "whole", chosen, steps=60, seed=3)
    with pytest.raises(Killed):
        fit_estimator.fit(folder, tmp_path / "killed", chosen, steps=60, seed=3, report=stop_at(40))
    assert not (tmp_path / "killed" / "fit.json").exists()
    again = fit_estimator.fit(folder, tmp_path / "killed", chosen, steps=60, seed=3)
    both = [(tmp_path / name / "estimator.safetensors").read_bytes() for name in ("whole", "killed")]
    assert both[0] == both[1]
    assert again["held_out"] == whole["held_out"]
    assert again["training"]["history"] == whole["training"]["history"]


def test_the_record_says_what_was_done(tmp_path, sets):
    folder, chosen = sets[0][0], sets[1]
    fit_estimator.fit(folder, tmp_path / "fit", chosen, minutes=0.06, seed=3)
    record = json.loads((tmp_path / "fit" / "fit.json").read_text())
    assert record["training"]["steps"] == 60  # 0.06 minutes at 1,000 steps a minute
    assert record["family"] == "toy"
    assert record["parameters"] == list(SMALL.prior.names)
    assert record["set"]["flares"] == 1000
    assert record["training"]["cpu_minutes"] > 0
    assert record["held_out"]["nats_over_prior"] > 0
    assert set(record["training"]["versions"]) >= {"emu", "torch", "zuko", "sbi"}


def test_another_fit_in_the_folder_is_refused(tmp_path, sets):
    folder, chosen = sets[0][0], sets[1]
    fit_estimator.fit(folder, tmp_path / "fit", chosen, steps=20, seed=3)
    before = contents(tmp_path / "fit")
    with pytest.raises(UserError, match="another configuration"):
        fit_estimator.fit(folder, tmp_path / "fit", chosen, steps=20, seed=4)
    assert contents(tmp_path / "fit") == before


def test_an_incomplete_set_is_refused(tmp_path, sets):
    folder, chosen = sets[0][0], sets[1]
    (folder / "chunks" / "000001.json").unlink()
    with pytest.raises(UserError, match="missing or torn"):
        fit_estimator.fit(folder, tmp_path / "fit", chosen, steps=20)


def test_budgets_that_make_no_sense_are_refused():
    small = parse_recipe(RECIPE, "recipe.toml")
    for minutes, steps in ((None, None), (1.0, 5), (0.0, None), (None, 0)):
        with pytest.raises(UserError):
            small.steps(minutes, steps)
    with pytest.raises(UserError, match="unknown key 'layers'"):
        parse_recipe(RECIPE.replace("blocks = 1", "layers = 1"), "recipe.toml")
    with pytest.raises(UserError, match="bins is 0"):
        parse_recipe(RECIPE.replace("bins = 4", "bins = 0"), "recipe.toml")


def test_the_shipped_recipes_can_be_read():
    assert recipe("default").loop.batch >= 128


def test_the_classifier_learns_which_family(tmp_path, sets):
    folders, chosen = sets
    record = fit_classifier.fit(folders, tmp_path / "fit", chosen, steps=300)
    assert record["held_out"]["loss"] < 0.9 * np.log(2)  # ln 2 is knowing nothing
    network = ClassifierNetwork.from_table(record["network"], "fit.json")
    classifier = FamilyClassifier(network, load_file(tmp_path / "fit" / "classifier.safetensors"))
    rng = np.random.default_rng(8)
    schedule = SMALL.campaign.draw(300, rng)
    for column, model in enumerate((SMALL.model, fast_toy())):
        problem = type(SMALL)(model, SMALL.campaign)
        rows, _ = problem.simulate(problem.prior.sample(300, rng), schedule, rng)
        found = classifier.probabilities(rows)
        assert found.shape == (300, 2)
        assert found.sum(axis=1) == pytest.approx(1)
        assert found[:, column].mean() > 0.6
        # Probabilities that mean something: among flares called 50 to 100 % likely, most are right.
        assert (found[:, column] > 0.5).mean() > 0.65
    assert classifier.families == ("toy", "toy-fast")
    assert classifier.probabilities(RowBatch.stack([])).shape == (0, 2)


def test_sets_that_do_not_belong_together_are_refused(tmp_path, sets, toys):
    folders, chosen = sets
    with pytest.raises(UserError, match="two or more different families"):
        fit_classifier.fit([folders[0], folders[0]], tmp_path / "fit", chosen, steps=20)
    other = tmp_path / "other.toml"
    other.write_text(Path(toys[0]).read_text().replace("50.0]", "51.0]"))
    far = simulate("toy-fast", str(other), tmp_path / "far", 1000, 1, workers=1)
    with pytest.raises(UserError, match="made for another campaign"):
        fit_classifier.fit([folders[0], far], tmp_path / "fit", chosen, steps=20)

"""Reference draws: the same after any interruption, and refused where they are not what they say."""

import json

import numpy as np
import pytest

from emu.errors import UserError
from tests.checks.toys import ESTIMATORS, PROBLEM
from tests.reference.toy import exact_evidence, exact_posterior
from training.checks import reference_parts
from training.checks.held_out import held_out, held_out_batch
from training.checks.reference_parts import ReferencePlan
from training.checks.reference_store import read_references
from training.checks.references import make_references
from training.checks.sharpness import check_references

PLAN = ReferencePlan(scouts=1, scout_live=100, scout_walks=20, live=700, walks=15, walkers=20, most_steps=1000)


class Killed(BaseException):
    """Stand for a kill: nothing catches it."""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    out = tmp_path_factory.mktemp("references")
    assert make_references(PROBLEM, out, want=1, seed=4, most=2, plan=PLAN) == 1
    return out


def test_references_are_draws_of_the_closed_form(folder):
    reference = read_references(folder)[0]
    assert reference.exact
    assert reference.facts["c2st"] <= 0.55
    assert reference.facts["rhat"] < 1.01
    assert reference.facts["length"] >= 50
    mean, covariance = exact_posterior(PROBLEM, reference.rows)
    for draws in (reference.nested, reference.ensembles):
        assert len(draws) >= 1000
        white = np.linalg.solve(np.linalg.cholesky(covariance), (draws - mean).T)
        np.testing.assert_allclose(white.mean(axis=1), 0.0, atol=0.12)
        np.testing.assert_allclose(np.cov(white), np.eye(4), atol=0.17)
    truth = exact_evidence(PROBLEM, reference.rows)
    assert reference.log_evidence == pytest.approx(truth, abs=4.0 * reference.facts["log_evidence_error"])
    assert reference.facts["log_evidence_of_weights"]["log_evidence"] == pytest.approx(truth, abs=0.1)
    told = json.loads((folder / "references.json").read_text())
    assert told["core_hours"] > 0.0
    assert [row["flare"] for row in told["flares"]] == [r.name for r in read_references(folder)]


def test_a_run_that_is_killed_again_and_again_ends_with_the_same_draws(folder, tmp_path, monkeypatch):
    write = reference_parts._write
    for parts in (0, 1, 3):  # before the scout, after it, after the first block of an ensemble
        left = [parts]

        def killing(*arguments, left=left):
            if not left[0]:
                raise Killed
            left[0] -= 1
            write(*arguments)

        monkeypatch.setattr(reference_parts, "_write", killing)
        with pytest.raises(Killed):
            make_references(PROBLEM, tmp_path, want=1, seed=4, most=2, plan=PLAN)
    monkeypatch.undo()
    make_references(PROBLEM, tmp_path, want=1, seed=4, most=2, plan=PLAN)
    one, other = read_references(folder)[0], read_references(tmp_path)[0]
    np.testing.assert_array_equal(one.ensembles, other.ensembles)
    np.testing.assert_array_equal(one.nested, other.nested)
    assert not (tmp_path / "work").exists()


def test_another_seed_or_plan_is_refused(folder):
    with pytest.raises(UserError, match="another family, campaign, seed or plan"):
        make_references(PROBLEM, folder, want=1, seed=5, plan=PLAN)


def test_altered_draws_are_refused(folder, tmp_path):
    for path in folder.glob("flare-00*"):
        (tmp_path / path.name).write_bytes(path.read_bytes())
    place = tmp_path / "flare-00.safetensors"
    place.write_bytes(place.read_bytes()[:-1] + b"\x01")
    with pytest.raises(UserError, match="missing or altered"):
        read_references(tmp_path)


def test_estimators_are_judged_by_references(folder):
    references = read_references(folder)
    found = {kind: check_references(ESTIMATORS[kind], PROBLEM, references, seed=1, draws=1500)[0]
             for kind in ("right", "too wide", "too narrow")}  # fmt: skip
    assert {kind: one.closeness.close for kind, one in found.items()} == {
        "right": True, "too wide": False, "too narrow": False,
    }  # fmt: skip
    error = 4.0 * references[0].facts["log_evidence_error"] + 0.1
    assert found["right"].shortfall == pytest.approx(0.0, abs=error)
    # KL(N(0, 1) || N(0, f^2)) = ln f + (1 / f^2 - 1) / 2 for each of four parameters, closed form.
    for kind, f in (("too wide", 1.4), ("too narrow", 0.7)):
        assert found[kind].shortfall == pytest.approx(4 * (np.log(f) + 0.5 * (f**-2 - 1)), abs=error)


def test_held_out_flares_do_not_depend_on_how_many_are_drawn():
    one, again = held_out(PROBLEM, 3, 7), held_out(PROBLEM, 3, 7)
    np.testing.assert_array_equal(one.rows.value, again.rows.value)
    assert not np.array_equal(one.truth, held_out(PROBLEM, 4, 7).truth)
    assert one.redrawn == 0
    with pytest.raises(UserError, match="no schedule"):
        held_out(PROBLEM, 0, 7, kinds=("east",))


def test_flares_that_cannot_be_computed_are_replaced_and_counted(monkeypatch):
    simulate, calls = type(PROBLEM).simulate, []

    def failing(self, theta, batch, rng):
        found, failures = simulate(self, theta, batch, rng)
        calls.append(len(theta))
        failures[0] = 1 if len(calls) <= 2 else 0
        return found, failures

    monkeypatch.setattr(type(PROBLEM), "simulate", failing)
    assert held_out_batch(PROBLEM, 5, 1).redrawn == 2

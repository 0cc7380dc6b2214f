"""The drivers on the closed-form model: exit codes, files, and the matrix across families."""

import json

import numpy as np
import pytest

from emu.problem import Problem
from tests.checks.toys import ESTIMATORS, PROBLEM
from tests.reference.toy import ExactEstimator, ToyCampaign, ToyModel
from training.checks.across import check_across
from training.checks.figures import draw_across
from training.checks.report import exit_code, run_checks, table

FIGURES = ("ranks.png", "coverage.png", "contraction.png", "efficiency.png")


@pytest.mark.parametrize(("kind", "code"), [("right", 0), ("too wide", 1), ("too narrow", 1), ("shifted", 1)])
def test_exit_code_tells_right_from_wrong(kind, code, tmp_path):
    report = run_checks(ESTIMATORS[kind], PROBLEM, cases=300, draws=200, seed=5, weighed=3, weights=2000, out=tmp_path)
    assert exit_code(report) == code
    assert json.loads((tmp_path / "checks.json").read_text())["passed"] == report["passed"]
    assert (tmp_path / "checks.txt").read_text().strip() == table(report)
    for name in FIGURES:
        assert (tmp_path / name).read_bytes().startswith(b"\x89PNG")


def test_calibrated_but_hopelessly_inefficient_is_a_code_of_its_own():
    passed = {"ranks": True, "efficiency": False}
    assert exit_code({"passed": passed}) == 4
    assert exit_code({"passed": passed | {"ranks": False}}) == 1
    assert exit_code({"passed": dict.fromkeys(passed, True)}) == 0


def test_across_families_the_wrong_one_is_misled(tmp_path):
    problems = {name: Problem(ToyModel(name=name, rate=rate), ToyCampaign())
                for name, rate in (("slow", 0.05), ("fast", 0.4))}
    estimators = {name: ExactEstimator(problem) for name, problem in problems.items()}
    found = check_across(estimators, problems, cases=200, draws=200, seed=1, shared=("level", "swing"))
    own = found.coverage[np.arange(2), np.arange(2)]
    np.testing.assert_allclose(own, 0.68, atol=3.0 * found.error)
    # Flux means the same in both families, the swing of q and u does not.
    np.testing.assert_allclose(found.coverage[..., 0], 0.68, atol=3.0 * found.error)
    assert found.coverage[0, 1, 1] < 0.4
    assert ("slow", "fast", "swing") in found.misled()
    assert not any(a == b for a, b, _ in found.misled())
    draw_across(tmp_path / "across.png", found)
    assert (tmp_path / "across.png").stat().st_size > 1000

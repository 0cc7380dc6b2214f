"""The tables: every family once, nothing twice, numbers that come from the runs themselves."""

import json
from dataclasses import replace

import pytest

from emu.errors import UserError
from tests.training.small import RECIPE
from training.checks import report as checks_report
from training.choices import choices
from training.simulate import simulate
from training.table import Plan, table


@pytest.fixture
def plan(toys) -> Plan:
    campaign, chosen = toys
    return Plan(campaign, flares=1000, minutes=0.15, config=chosen, cases=60, draws=60)


def test_a_family_is_simulated_fitted_and_checked(tmp_path, plan):
    (line,) = table(tmp_path / "out", plan, ["toy"], workers=1)
    record = json.loads((tmp_path / "out" / "toy" / "fit" / "fit.json").read_text())
    checks = json.loads((tmp_path / "out" / "toy" / "fit" / "checks.json").read_text())
    assert line.parameters == 4
    assert line.nats_over_prior == record["held_out"]["nats_over_prior"] > 1
    assert line.fit_minutes == record["training"]["cpu_minutes"] > 0
    assert line.simulate_minutes > 0
    assert line.passed == checks["passed"]
    assert line.passed["ranks"] == (not line.outside)
    assert "| toy | 4 | 1,000 | 0 |" in (tmp_path / "out" / "table.md").read_text()


def test_finished_work_is_not_done_again_and_another_plan_is_refused(tmp_path, plan, monkeypatch):
    first = table(tmp_path / "out", plan, ["toy"], workers=1)
    monkeypatch.setattr(checks_report, "run_checks", lambda *_, **__: pytest.fail("checked twice"))
    again = table(tmp_path / "out", plan, ["toy"], workers=1)
    assert again[0].nats_over_prior == first[0].nats_over_prior
    assert again[0].fit_minutes == first[0].fit_minutes
    assert again[0].passed == first[0].passed
    with pytest.raises(UserError, match="another flares"):
        table(tmp_path / "out", replace(plan, flares=1200), ["toy"], workers=1)


def test_choices_are_compared_at_equal_cost(tmp_path, toys):
    campaign, chosen = toys
    simulate("toy", campaign, tmp_path / "set", 1000, 1, workers=1)
    small = tmp_path / "narrow.toml"
    small.write_text(RECIPE.replace("width = 48", "width = 8").replace("context = 24", "context = 2"))
    lines = choices(tmp_path / "set", [chosen, str(small)], tmp_path / "out", minutes=0.05)
    assert [line.recipe for line in lines] == [chosen, str(small)]
    assert lines[0].nats_over_prior > lines[1].nats_over_prior
    assert lines[0].weights > lines[1].weights
    for line in lines:
        assert 0.01 < line.cpu_minutes < 0.2
        assert line.draws_per_second > 1000
    assert choices(tmp_path / "set", [chosen, str(small)], tmp_path / "out", minutes=0.05) == lines
    assert (tmp_path / "out" / "choices.md").read_text().count("\n") == 4

"""A training set is the same whoever makes it, however often it is killed."""

import os
import shutil
import signal
import subprocess
import sys
import time
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pytest

from emu.errors import UserError
from emu.problem import Problem
from tests.reference.toy import ToyModel
from tests.training.small import SMALL, contents, install_toys, small_set
from training.simulate import layout_of, simulate, simulate_problem
from training.store import Layout, TrainingSet, missing_chunks

ROOT = Path(__file__).resolve().parents[2]


@dataclass(frozen=True)
class Moody(ToyModel):
    """Fail for every flare with a rising trend beyond one standard deviation of its prior."""

    def curves(self, theta, times):
        return super().curves(theta, times) | {"failures": (theta[:, 1] > 0.3).astype(np.int64)}


def test_stored_curves_are_those_of_the_model(tmp_path):
    stored = TrainingSet.load(small_set(tmp_path / "set"))
    expected = SMALL.model.curves(stored.theta, stored.times.astype(float))
    for place, kind in enumerate(stored.layout.kinds):
        np.testing.assert_allclose(stored.curves[:, :, place], expected[kind], rtol=1e-6, atol=1e-7)
    assert stored.theta.shape == (1200, 4)
    assert len(np.unique(stored.theta[:, 0])) == 1200  # every chunk has a stream of its own


def test_the_number_of_processes_changes_no_byte(tmp_path):
    layout = layout_of(SMALL, 1200, seed=1, nodes=(48, 16))
    simulate_problem(SMALL, layout, tmp_path / "two", workers=2)
    assert contents(tmp_path / "two") == contents(small_set(tmp_path / "one"))


def test_another_seed_gives_other_flares(tmp_path):
    one, two = (TrainingSet.load(small_set(tmp_path / str(seed), seed=seed)).theta for seed in (1, 2))
    assert not np.isin(one[:, 0], two[:, 0]).any()


def test_a_killed_run_ends_as_an_undisturbed_one(tmp_path, toys):
    campaign, _ = toys
    install_toys(tmp_path / "for_child")
    code = (
        "import pathlib, sys; from training.simulate import simulate\n"
        "if __name__ == '__main__': simulate('toy', sys.argv[1], pathlib.Path(sys.argv[2]), 12000, 3, 2)"
    )
    script = tmp_path / "run.py"
    script.write_text(code)
    search = os.pathsep.join([str(ROOT), str(tmp_path / "for_child")])
    command = [sys.executable, str(script), campaign, str(tmp_path / "killed")]
    child = subprocess.Popen(
        command, env=os.environ | {"PYTHONPATH": search}, stderr=subprocess.DEVNULL, start_new_session=True
    )
    chunks = tmp_path / "killed" / "chunks"
    deadline = time.monotonic() + 100
    while not (chunks.exists() and len(list(chunks.glob("*.json"))) >= 2) and time.monotonic() < deadline:
        time.sleep(0.005)
    child.send_signal(signal.SIGKILL)
    child.wait()
    layout = Layout.read(tmp_path / "killed")
    left = len(missing_chunks(tmp_path / "killed", layout))
    assert 0 < left <= layout.chunks - 2, "the kill came too early or too late to test anything"
    simulate("toy", campaign, tmp_path / "killed", 12000, 3, workers=1)
    simulate("toy", campaign, tmp_path / "whole", 12000, 3, workers=1)
    assert contents(tmp_path / "killed") == contents(tmp_path / "whole")


@pytest.mark.parametrize("harm", ["remove", "cut", "alter", "unsign"])
@pytest.mark.parametrize("array", ["curves/c/1/0/0", "theta/c/1/0"])
def test_a_harmed_chunk_is_noticed_and_made_again(tmp_path, harm, array):
    folder = small_set(tmp_path / "set")
    before = contents(folder)
    file = folder / "set.zarr" / array
    content = file.read_bytes()
    if harm == "remove":
        file.unlink()
    elif harm == "cut":
        file.write_bytes(content[: len(content) // 2])
    elif harm == "alter":
        file.write_bytes(content[:100] + bytes([content[100] ^ 1]) + content[101:])
    else:
        (folder / "chunks" / "000001.json").unlink()
    with pytest.raises(UserError, match="1 of 3 chunks are missing or torn"):
        TrainingSet.load(folder)
    small_set(folder)
    assert contents(folder) == before


def test_another_configuration_is_refused(tmp_path):
    folder = small_set(tmp_path / "set")
    with pytest.raises(UserError, match="another seed; give another --out"):
        small_set(folder, seed=2)
    with pytest.raises(UserError, match="another flares"):
        small_set(folder, flares=1300)
    other = Problem(ToyModel(rate=0.06, name="other"), SMALL.campaign)
    with pytest.raises(UserError, match="another model"):
        simulate_problem(other, layout_of(other, 1200, 1, nodes=(48, 16)), folder, 1)


def test_failures_are_counted_recorded_and_replaced(tmp_path):
    problem = Problem(Moody(), SMALL.campaign)
    simulate_problem(problem, layout_of(problem, 1000, 1, nodes=(12, 4)), tmp_path / "set", 1)
    stored = TrainingSet.load(tmp_path / "set")
    failed = [theta for record in stored.records for theta in record["failed"]]
    assert len(failed) == sum(record["failures"] for record in stored.records)
    assert all(theta[1] > 0.3 for theta in failed)
    assert (stored.theta[:, 1] <= 0.3).all()
    # 15.9 % of a normal distribution lie beyond one standard deviation: 189 +- 15 failures are expected.
    assert 120 < len(failed) < 260


def test_a_model_that_mostly_fails_is_an_error(tmp_path):
    @dataclass(frozen=True)
    class Broken(ToyModel):
        def curves(self, theta, times):
            return super().curves(theta, times) | {"failures": np.ones(len(theta), np.int64)}

    problem = Problem(Broken(), SMALL.campaign)
    with pytest.raises(RuntimeError, match="too many curves fail"):
        simulate_problem(problem, layout_of(problem, 500, 1, nodes=(12, 4)), tmp_path / "set", 1)


def test_a_full_disk_is_noticed_before_the_work(tmp_path, monkeypatch):
    usage = shutil.disk_usage(tmp_path)._replace(free=10_000)
    monkeypatch.setattr(shutil, "disk_usage", lambda _: usage)
    with pytest.raises(UserError, match="GB are free"):
        small_set(tmp_path / "set")
    assert not (tmp_path / "set").exists()


def test_layouts_survive_their_own_text(tmp_path):
    layout = layout_of(SMALL, 1200, 1)
    (tmp_path / "set.json").write_text(layout.text())
    assert Layout.read(tmp_path) == layout
    (tmp_path / "set.json").write_text(layout.text().replace('"format": 1', '"format": 2'))
    with pytest.raises(UserError, match="a set of format 2"):
        Layout.read(tmp_path)
    assert replace(layout, flares=1201).chunks == 3

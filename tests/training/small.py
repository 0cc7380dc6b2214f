"""The closed-form model under a small campaign and a small recipe: what the tests of training work on."""

from pathlib import Path

import numpy as np

from emu.observe.campaign import parse_campaign
from emu.problem import Problem
from tests.reference.toy import ToyModel
from training.simulate import layout_of, simulate_problem

CAMPAIGN = """
name = "small"
description = "closed-form checks"
flux_unit = "mJy"
window = [40.0, 50.0]
[target]
name = "invented target"
mass = 5.0e6
distance = 9.0
[[stream]]
kinds = ["flux"]
cadence = [2.0, 4.0]
error = [0.02, 0.1]
[[stream]]
kinds = ["q", "u"]
alternate = true
cadence = [2.0, 4.0]
error = [0.02, 0.1]
"""

RECIPE = """
held_out = 200
[embedding]
nodes = 16
width = 48
blocks = 1
context = 24
[flow]
transforms = 2
bins = 4
hidden = 24
[loop]
batch = 128
rate = 3.0e-3
warmup = 10
clip = 5.0
averaging = 0.98
every = 20
patience = 5
steps_per_minute = 1000
"""

SMALL = Problem(ToyModel(), parse_campaign(CAMPAIGN, "small.toml"))


def small_set(folder: Path, flares: int = 1200, seed: int = 1) -> Path:
    """Make a training set of the closed-form model."""
    simulate_problem(SMALL, layout_of(SMALL, flares, seed, nodes=(48, 16)), folder, workers=1)
    return folder


def contents(folder: Path) -> dict[str, bytes]:
    """Read every file of a folder."""
    return {str(p.relative_to(folder)): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


def observed(count: int, seed: int):
    """Invent flares of the closed-form model: theta (count, 4), and their rows."""
    rng = np.random.default_rng(seed)
    theta = SMALL.prior.sample(count, rng)
    rows, failures = SMALL.simulate(theta, SMALL.campaign.draw(count, rng), rng)
    assert not failures.any()
    return theta, rows


def install_toys(folder: Path) -> None:
    """Make the closed-form model an installed one, under the names toy and toy-fast."""
    about = folder / "toy_models-1.0.dist-info"
    about.mkdir(parents=True)
    (about / "METADATA").write_text("Metadata-Version: 2.1\nName: toy-models\nVersion: 1.0\n")
    (about / "entry_points.txt").write_text(
        "[emu.models]\ntoy = tests.reference.toy:ToyModel\ntoy-fast = tests.training.small:fast_toy\n"
    )


def fast_toy() -> ToyModel:
    """Make a second family: the same with a faster swing."""
    return ToyModel(name="toy-fast", rate=0.12)

"""The guide explains every file, column and variable of a run, and its example works."""

import json
import re
import warnings
from pathlib import Path

import pytest
import xarray as xr
from astropy.table import Table

from emu.report.run import Wish, run
from tests.report.fake import ToyRecipe, write_toy_flares

GUIDE = (Path(__file__).resolve().parents[2] / "emu" / "guide" / "answers.md").read_text()


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("guide")
    write_toy_flares(folder / "flares.ecsv", 2)
    run(ToyRecipe(), [folder / "flares.ecsv"], folder / "run", Wish(families=("toy-slow",)))
    return folder / "run"


def test_every_name_of_a_run_is_explained(finished: Path) -> None:
    names = {path.name for path in finished.iterdir()} - {"figures"}
    names |= {path.name for path in finished.glob("figures/*/*/*.png")}
    for table in ("summary", "families"):
        names |= set(Table.read(finished / f"{table}.ecsv").colnames)
    names |= set(json.loads((finished / "run.json").read_text())) - {"made_by", "emu", "finished", "families"}
    tree = xr.open_datatree(finished / "draws.zarr")
    names |= set(tree["toy-slow/sample_stats"].data_vars) | set(tree["observed_data"].data_vars)
    names |= set(tree.children) - {"toy-slow"} | set(tree["toy-slow"].children)
    assert len(names) > 50
    assert not {name for name in names if not re.search(rf"\b{re.escape(name)}\b", GUIDE)}


def test_the_example_works(finished: Path) -> None:
    (code,) = re.findall(r"```python\n(.*?)```", GUIDE, re.DOTALL)
    for word, here in (
        ("RUN", str(finished)),
        ("midplane-frozen", "toy-slow"),
        ("night-3", "f001"),
        ("radius", "swing"),
    ):
        code = code.replace(word, here)
    names: dict = {}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        exec(code, names)
    table = Table.read(finished / "summary.ecsv")
    row = table[(table["flare"] == "f001") & (table["parameter"] == "swing")][0]
    assert float(names["mean"]) == pytest.approx(row["weighted_median"], abs=0.2 * (row["high68"] - row["low68"]))

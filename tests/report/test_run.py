"""A whole run on the closed-form model, against its exact posterior, evidence and family odds."""

import json
import warnings
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from astropy.table import Table

from emu.errors import UserError
from emu.observe.flare import read_flares
from emu.report.run import Wish, run
from emu.report.toolbox import Toolbox
from tests.reference.toy import exact_evidence, exact_posterior
from tests.report.fake import RATES, ToyRecipe, toy_problem, write_toy_flares

WISH = Wish(figures=False)
SLOW = replace(WISH, families=("toy-slow",))


def rows_of(path: Path) -> dict:
    season = toy_problem().campaign
    return {flare.name: flare.rows(season.target, season.flux_unit) for flare in read_flares(path)}


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("run")
    write_toy_flares(folder / "flares.ecsv", 6)
    recipe = ToyRecipe(widen=1.3)
    assert run(recipe, [folder / "flares.ecsv"], folder / "out", replace(WISH, draws=4000)) == 0
    return folder


def test_draws_have_the_exact_posterior(finished: Path) -> None:
    tree = xr.open_datatree(finished / "out" / "draws.zarr")
    for family in RATES:
        problem = toy_problem(family)
        posterior = tree[f"{family}/posterior"].to_dataset()
        assert posterior["swing"].dims == ("chain", "draw", "flare")
        for name, rows in rows_of(finished / "flares.ecsv").items():
            mean, covariance = exact_posterior(problem, rows)
            one = posterior.sel(flare=name)
            draws = np.stack([one[p.name].values[0] for p in problem.parameters], axis=1)
            sigma = np.sqrt(np.diag(covariance))
            np.testing.assert_allclose((draws.mean(axis=0) - mean) / sigma, 0.0, atol=0.1)
            np.testing.assert_allclose(
                np.cov(draws.T) / 1.3**2 / np.outer(sigma, sigma), covariance / np.outer(sigma, sigma), atol=0.1
            )


def test_weights_lead_to_the_exact_posterior_and_evidence(finished: Path) -> None:
    stats = xr.open_datatree(finished / "out" / "draws.zarr")["toy-slow/sample_stats"].to_dataset()
    table = Table.read(finished / "out" / "summary.ecsv")
    problem = toy_problem()
    for name, rows in rows_of(finished / "flares.ecsv").items():
        one = stats.sel(flare=name)
        weight = np.exp(one["log_weight"].values)
        assert weight.sum() == pytest.approx(1.0)
        # The normalised weights are the exact posterior over the estimator, up to one factor.
        ratio = one["log_prior"] + one["log_likelihood"] - one["log_q"] - one["log_weight"]
        assert float(np.ptp(ratio.values)) < 1e-6
        assert one["log_evidence"] == pytest.approx(
            exact_evidence(problem, rows), abs=4 * float(one["log_evidence_error"])
        )
        assert one["ess"] == pytest.approx(4000 * one["efficiency"])
        mean, covariance = exact_posterior(problem, rows)
        mine = table[(table["flare"] == name) & (table["family"] == "toy-slow")]
        sigma = np.sqrt(np.diag(covariance))
        np.testing.assert_allclose((mine["weighted_median"] - mean) / sigma, 0.0, atol=0.12)
        half = 0.5 * (mine["weighted_high68"] - mine["weighted_low68"]) / sigma
        np.testing.assert_allclose(half, 0.99446, atol=0.12)  # Phi(0.99446) = 0.84


def test_tables_say_what_is_known(finished: Path) -> None:
    families = Table.read(finished / "out" / "families.ecsv")
    assert set(families["trust"]) == {"weights usable"}
    for name, rows in rows_of(finished / "flares.ecsv").items():
        mine = families[families["flare"] == name]
        odds = exact_evidence(toy_problem("toy-slow"), rows) - exact_evidence(toy_problem("toy-fast"), rows)
        assert mine["probability"][0] == pytest.approx(1.0 / (1.0 + np.exp(-odds)), abs=1e-6)
        assert mine["probability"].sum() == pytest.approx(1.0)
    summary = Table.read(finished / "out" / "summary.ecsv")
    assert len(summary) == 6 * 2 * 4
    assert set(summary["informed"]) <= {"informed", "not informed"}
    assert np.all(summary["low95"] < summary["low68"])
    assert np.all(summary["high68"] < summary["high95"])


def test_the_record_can_be_checked(finished: Path) -> None:
    record = json.loads((finished / "out" / "run.json").read_text())
    assert record["options"]["seed"] == 0
    assert record["counts"]["draws"] == 6 * 2 * 4000
    assert record["counts"]["draws_outside_prior"] == record["counts"]["draws_unsolved"] == 0
    assert list(record["inputs"]) == [str(finished / "flares.ecsv")]
    assert len(record["inputs"][str(finished / "flares.ecsv")]) == 64
    assert record["versions"]["numpy"] == np.__version__
    assert record["skipped"] == []


def test_arviz_reads_a_family(finished: Path) -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import arviz

        tree = xr.open_datatree(finished / "out" / "draws.zarr")
        data = arviz.from_datatree(tree["toy-slow"].sel(flare="f002"))
        assert {"posterior", "prior", "sample_stats"} <= set(data.groups())
        table = arviz.summary(data, kind="stats")
    mean, _ = exact_posterior(toy_problem(), rows_of(finished / "flares.ecsv")["f002"])
    found = table["mean"][[p.name for p in toy_problem().parameters]]
    np.testing.assert_allclose(found, mean, atol=0.01)


def test_a_wrong_estimator_is_not_trusted(tmp_path: Path) -> None:
    write_toy_flares(tmp_path / "flares.ecsv", 3)
    # A normal draw s times too narrow has weights with Pareto shape 1 - s^2: 0.94, well above 0.7.
    for number, recipe in enumerate((ToyRecipe(shift=4.0), ToyRecipe(widen=0.25))):
        out = tmp_path / str(number)
        assert run(recipe, [tmp_path / "flares.ecsv"], out, SLOW) == 0
        table = Table.read(out / "families.ecsv")
        assert set(table["trust"]) == {"weights unusable"}
        assert np.isnan(Table.read(out / "summary.ecsv")["weighted_median"]).all()


def test_without_likelihood_nothing_is_claimed(tmp_path: Path) -> None:
    write_toy_flares(tmp_path / "flares.ecsv", 2)
    assert run(ToyRecipe(), [tmp_path / "flares.ecsv"], tmp_path / "out", replace(WISH, likelihood=False)) == 0
    assert set(Table.read(tmp_path / "out" / "families.ecsv")["trust"]) == {"not checked"}
    stats = xr.open_datatree(tmp_path / "out" / "draws.zarr")["toy-slow/sample_stats"]
    assert "log_likelihood" not in stats
    assert "log_q" in stats


def test_draws_depend_on_the_flare_and_the_seed_alone(tmp_path: Path) -> None:
    write_toy_flares(tmp_path / "many.ecsv", 11)
    flare = Table.read(tmp_path / "many.ecsv")
    flare[flare["flare"] == "f007"].write(tmp_path / "one.ecsv")
    wishes = {
        "many": (tmp_path / "many.ecsv", WISH),
        "processes": (tmp_path / "many.ecsv", replace(WISH, workers=2)),
        "one": (tmp_path / "one.ecsv", SLOW),
        "seed": (tmp_path / "one.ecsv", replace(SLOW, seed=1)),
    }
    draws = {}
    for name, (path, wish) in wishes.items():
        assert run(ToyRecipe(), [path], tmp_path / name, wish) == 0
        tree = xr.open_datatree(tmp_path / name / "draws.zarr")
        draws[name] = tree["toy-slow/posterior"]["swing"].sel(flare="f007").values
    np.testing.assert_array_equal(draws["many"], draws["processes"])
    np.testing.assert_array_equal(draws["many"], draws["one"])
    assert not np.array_equal(draws["one"], draws["seed"])


BAD = {
    "empty.ecsv": "",
    "binary.csv": "\x00\x01\x02",
    "words.csv": "time,what,value,error\nnoon,q,a,b\n",
    "zero.csv": "time,what,value,error\n" + "".join(f"{60 * t},q,0.1,{int(t != 4)}\n" for t in range(9)),
    "nan.csv": "time,what,value,error\n" + "".join(f"{60 * t},q,nan,0.1\n" for t in range(9)),
}


def test_bad_flares_are_skipped_and_the_others_go_on(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    folder = tmp_path / "flares"
    folder.mkdir()
    write_toy_flares(folder / "good.ecsv", 2)
    for name, text in BAD.items():
        (folder / name).write_text(text)
    late = Table.read(folder / "good.ecsv")
    late = late[late["flare"] == "f000"]
    late["flare"] = "long"
    late["time"] *= 3.0
    late.write(folder / "outside.ecsv")
    wish = replace(SLOW, as_json=True)
    assert run(ToyRecipe(), [folder, tmp_path / "missing.ecsv"], tmp_path / "out", wish) == 3
    printed = capsys.readouterr()
    summary = json.loads(printed.out)
    assert list(summary["flares"]) == ["f000", "f001"]
    said = [line for line in printed.err.splitlines() if line.startswith("skipped: ")]
    assert len(said) == len(summary["skipped"]) == len(BAD) + 2
    for name in (*BAD, "outside.ecsv", "missing.ecsv"):
        assert sum(name in line for line in said) == 1, (name, said)
    record = json.loads((tmp_path / "out" / "run.json").read_text())
    assert [one["stage"] for one in record["skipped"]].count("campaign") == 1
    assert record["counts"]["flares_answered"] == 2


def test_nothing_to_answer_is_exit_code_3_and_no_folder(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "bad.csv").write_text("nonsense")
    assert run(ToyRecipe(), [tmp_path / "bad.csv"], tmp_path / "out", replace(SLOW, as_json=True)) == 3
    assert json.loads(capsys.readouterr().out)["flares"] == {}
    assert not (tmp_path / "out").exists()


@dataclass(frozen=True)
class Fragile(ToyRecipe):
    """Fail for some flares: by an error, a draw that is not finite, a ray that cannot be solved."""

    fault: str = "error"

    def open(self) -> Toolbox:
        """Return a toolbox that fails for every flare of an odd number of rows."""
        whole = ToyRecipe.open(self)
        fault = self.fault

        class Estimator:
            def sample(self, batch, draws, seed):
                theta, log_q = whole.estimator("toy-slow").sample(batch, draws, seed)
                if (batch.time.shape[1] % 2 and fault == "error") or fault == "every":
                    raise RuntimeError("broken network")
                if batch.time.shape[1] % 2 and fault == "interrupt":
                    raise KeyboardInterrupt
                if batch.time.shape[1] % 2 and fault == "nan":
                    theta[0, 3, 1] = np.nan
                return theta, log_q

        class Model(type(whole.problems["toy-slow"].model)):
            def curves(self, theta, times):
                return {**super().curves(theta, times), "failures": (theta[:, 3] > 0.0).astype(int)}

        problems = dict(whole.problems)
        if fault == "rays":
            old = problems["toy-slow"]
            problems["toy-slow"] = replace(old, model=Model(old.model.name, old.model.rate))
        return Toolbox(whole.campaign, problems, lambda name: Estimator(), whole.probabilities)


@pytest.mark.parametrize("fault", ["error", "nan"])
def test_a_flare_that_fails_does_not_stop_the_others(
    tmp_path: Path, fault: str, capsys: pytest.CaptureFixture[str]
) -> None:
    write_toy_flares(tmp_path / "flares.ecsv", 6)
    odd = [name for name, rows in rows_of(tmp_path / "flares.ecsv").items() if len(rows) % 2]
    assert 0 < len(odd) < 6
    assert run(Fragile(fault=fault), [tmp_path / "flares.ecsv"], tmp_path / "out", SLOW) == 3
    record = json.loads((tmp_path / "out" / "run.json").read_text())
    assert sorted(one["flare"] for one in record["skipped"]) == sorted(odd)
    assert all(f"flare {name}" in capsys.readouterr().err for name in odd[:1])
    swing = xr.open_datatree(tmp_path / "out" / "draws.zarr")["toy-slow/posterior"]["swing"]
    lost = np.isnan(swing.values).all(axis=(0, 1))
    assert sorted(swing["flare"].values[lost]) == sorted(odd)
    assert np.isfinite(swing.values[..., ~lost]).all()


def test_a_run_in_which_every_flare_fails_leaves_no_folder(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write_toy_flares(tmp_path / "flares.ecsv", 2)
    wish = replace(SLOW, as_json=True)
    assert run(Fragile(fault="every"), [tmp_path / "flares.ecsv"], tmp_path / "out", wish) == 3
    summary = json.loads(capsys.readouterr().out)
    assert [one["stage"] for one in summary["skipped"]] == ["sample", "sample"]
    assert [path.name for path in tmp_path.iterdir()] == ["flares.ecsv"]


def test_unsolved_rays_are_counted_and_weigh_nothing(tmp_path: Path) -> None:
    write_toy_flares(tmp_path / "flares.ecsv", 3)
    assert run(Fragile(fault="rays"), [tmp_path / "flares.ecsv"], tmp_path / "out", SLOW) == 0
    tree = xr.open_datatree(tmp_path / "out" / "draws.zarr")
    failed = tree["toy-slow/posterior"]["bend"].values > 0.0
    stats = tree["toy-slow/sample_stats"]
    assert failed.any()
    np.testing.assert_array_equal(np.isneginf(stats["log_likelihood"].values), failed)
    np.testing.assert_array_equal(np.exp(stats["log_weight"].values) == 0.0, failed)
    np.testing.assert_array_equal(stats["unsolved"].values, failed.sum(axis=(0, 1)))
    record = json.loads((tmp_path / "out" / "run.json").read_text())
    assert record["counts"]["draws_unsolved"] == failed.sum()


def test_an_interrupt_leaves_nothing(tmp_path: Path) -> None:
    write_toy_flares(tmp_path / "flares.ecsv", 6)
    with pytest.raises(KeyboardInterrupt):
        run(Fragile(fault="interrupt"), [tmp_path / "flares.ecsv"], tmp_path / "out", SLOW)
    assert [path.name for path in tmp_path.iterdir()] == ["flares.ecsv"]


def test_an_unknown_family_is_one_line(tmp_path: Path) -> None:
    write_toy_flares(tmp_path / "flares.ecsv", 1)
    with pytest.raises(UserError, match="no family 'spiral' here: one of toy-slow, toy-fast"):
        run(ToyRecipe(), [tmp_path], tmp_path / "out", replace(WISH, families=("spiral",)))


def test_exact_sampling_needs_no_estimator(tmp_path: Path) -> None:
    write_toy_flares(tmp_path / "flares.ecsv", 1)
    wish = replace(SLOW, exact=True, draws=2000)
    assert run(ToyRecipe(shift=50.0), [tmp_path / "flares.ecsv"], tmp_path / "out", wish) == 0
    (rows,) = rows_of(tmp_path / "flares.ecsv").values()
    mean, covariance = exact_posterior(toy_problem(), rows)
    tree = xr.open_datatree(tmp_path / "out" / "draws.zarr")
    posterior, stats = tree["toy-slow/posterior"], tree["toy-slow/sample_stats"].isel(flare=0)
    assert posterior.sizes["chain"] == 4
    draws = np.stack([posterior[p.name].values.ravel() for p in toy_problem().parameters], axis=1)
    sigma = np.sqrt(np.diag(covariance))
    np.testing.assert_allclose((draws.mean(axis=0) - mean) / sigma, 0.0, atol=0.12)
    np.testing.assert_allclose(draws.std(axis=0) / sigma, 1.0, atol=0.1)
    evidence = exact_evidence(toy_problem(), rows)
    assert stats["log_evidence"] == pytest.approx(evidence, abs=4 * float(stats["log_evidence_error"]))
    families = Table.read(tmp_path / "out" / "families.ecsv")
    assert families["trust"][0] == "exact"
    assert families["probability"][0] == 1.0  # the only family asked for

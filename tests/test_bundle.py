"""A bundle gives back what was trained, and refuses whatever is not whole, by one line."""

import hashlib
import json
import shutil
from pathlib import Path

import numpy as np
import pytest
from safetensors.torch import load_file

from emu.bundle import open_bundle
from emu.errors import UserError
from emu.inference.estimator import NeuralEstimator
from emu.inference.network import Network
from emu.observe.flare import Flare
from tests.training.small import CAMPAIGN, RECIPE, SMALL, install_toys, observed
from training import fit_classifier, fit_estimator
from training.publish import publish
from training.simulate import simulate


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    """Simulate, fit and publish two families: the folder that holds all of it."""
    folder = tmp_path_factory.mktemp("made")
    install_toys(folder / "installed")
    (folder / "small.toml").write_text(CAMPAIGN)
    (folder / "recipe.toml").write_text(RECIPE)
    chosen, campaign = str(folder / "recipe.toml"), str(folder / "small.toml")
    with pytest.MonkeyPatch.context() as patch:
        patch.syspath_prepend(str(folder / "installed"))
        for name in ("toy", "toy-fast"):
            simulate(name, campaign, folder / name, 1000, 1, workers=1)
            fit_estimator.fit(folder / name, folder / f"fit-{name}", chosen, steps=40)
        fit_classifier.fit([folder / "toy", folder / "toy-fast"], folder / "fit-which", chosen, steps=40)
        (folder / "fit-toy" / "checks.json").write_text('{"passed": {"ranks": true}}')
        publish([folder / f"fit-{name}" for name in ("toy", "toy-fast", "which")], folder / "bundle")
        yield folder


@pytest.fixture
def bundle(made, tmp_path) -> Path:
    """Give a copy of the bundle that may be harmed."""
    return shutil.copytree(made / "bundle", tmp_path / "bundle")


def flare(number: int, rows) -> Flare:
    target = SMALL.campaign.target
    return Flare(
        name=f"flare {number}",
        seconds=rows.time * target.time_unit,
        kind=rows.kind,
        value=rows.value,
        error=rows.error,
        flux_unit="mJy",
        t_ref="0",
        where="invented.ecsv",
    )


def resign(folder: Path) -> None:
    """Write the checksums anew, as somebody would who alters a bundle on purpose."""
    files = sorted(p for p in folder.iterdir() if p.name != "SHA256SUMS")
    lines = [f"{hashlib.sha256(p.read_bytes()).hexdigest()}  {p.name}\n" for p in files]
    (folder / "SHA256SUMS").write_text("".join(lines))


def test_it_gives_back_the_estimator_that_was_trained(made):
    bundle = open_bundle(made / "bundle")
    assert bundle.families == ("toy", "toy-fast")
    assert bundle.campaign == SMALL.campaign
    _, rows = observed(5, seed=1)
    record = json.loads((made / "fit-toy" / "fit.json").read_text())
    weights = load_file(made / "fit-toy" / "estimator.safetensors")
    trained = NeuralEstimator(Network.from_table(record["network"], "fit.json"), SMALL.prior, weights)
    found = bundle.estimator("toy").sample(rows, 20, seed=1)
    for one, other in zip(found, trained.sample(rows, 20, seed=1), strict=True):
        np.testing.assert_array_equal(one, other)
    assert bundle.classifier.probabilities(rows).shape == (5, 2)


def test_the_manifest_tells_where_all_came_from(made):
    manifest = open_bundle(made / "bundle").manifest
    entry = manifest["estimators"]["toy"]
    assert manifest["campaign"] == CAMPAIGN
    assert entry["checks"] == {"passed": {"ranks": True}}
    assert manifest["estimators"]["toy-fast"]["checks"] is None
    assert entry["training"]["recipe"] == RECIPE
    assert entry["training"]["seed"] == 0
    assert entry["training"]["cpu_minutes"] > 0
    assert entry["held_out"]["loss"] == pytest.approx(min(loss for _, loss in entry["training"]["history"]))
    assert entry["training"]["versions"]["torch"]


def test_inference_on_flares(made):
    bundle = open_bundle(made / "bundle")
    _, rows = observed(3, seed=2)
    answers = bundle.infer([flare(n, rows.rows(n)) for n in range(3)], families=["toy"], draws=50, seed=4)
    assert list(answers) == ["toy"]
    expected, log_q = bundle.estimator("toy").sample(rows, 50, seed=4)
    np.testing.assert_allclose(answers["toy"].theta, expected, atol=1e-4)
    np.testing.assert_allclose(answers["toy"].log_q, log_q, atol=1e-2)
    with pytest.raises(UserError, match="no estimator of 'helix'; it has toy, toy-fast"):
        bundle.infer([], families=["helix"])


def test_a_flare_out_of_the_campaign_is_refused(made):
    _, rows = observed(1, seed=3)
    early = rows.rows(0)
    with pytest.raises(UserError, match=r"invented\.ecsv: flare flare 0 is outside the campaign"):
        open_bundle(made / "bundle").infer([flare(0, type(early)(early.time * 9, *_rest(early)))])


def _rest(rows):
    return rows.kind, rows.value, rows.error


@pytest.mark.parametrize("name", ["manifest.json", "toy.safetensors", "classifier.safetensors"])
@pytest.mark.parametrize("harm", ["cut", "alter", "remove"])
def test_a_cut_or_altered_bundle_is_refused(bundle, name, harm):
    file = bundle / name
    content = bytearray(file.read_bytes())
    if harm == "cut":
        file.write_bytes(content[:-7])
    elif harm == "alter":
        content[len(content) // 2] ^= 1
        file.write_bytes(content)
    else:
        file.unlink()
    with pytest.raises(UserError, match=f"{name} is (not what it was|missing)") as refused:
        open_bundle(bundle)
    assert "\n" not in str(refused.value)


def test_missing_or_senseless_checksums_are_refused(bundle):
    sums = bundle / "SHA256SUMS"
    sums.write_text("nonsense\n")
    with pytest.raises(UserError, match="SHA256SUMS cannot be read"):
        open_bundle(bundle)
    sums.unlink()
    with pytest.raises(UserError, match="no bundle"):
        open_bundle(bundle)
    with pytest.raises(UserError, match="no bundle"):
        open_bundle(bundle / "nowhere")


def test_a_newer_bundle_is_refused(bundle):
    manifest = json.loads((bundle / "manifest.json").read_text())
    (bundle / "manifest.json").write_text(json.dumps(manifest | {"format": 2}))
    resign(bundle)
    with pytest.raises(UserError, match="format 2, this program reads 1; update emu-flares"):
        open_bundle(bundle)


def test_weights_without_a_checksum_are_refused(bundle):
    lines = (bundle / "SHA256SUMS").read_text().splitlines(keepends=True)
    (bundle / "SHA256SUMS").write_text("".join(line for line in lines if "toy-fast" not in line))
    with pytest.raises(UserError, match=r"no checksum of toy-fast\.safetensors"):
        open_bundle(bundle)


def test_weights_that_are_a_pickle_are_never_run(bundle, tmp_path):
    import pickle

    class Trap:
        def __reduce__(self):
            return Path.touch, (tmp_path / "sprung",)

    (bundle / "toy.safetensors").write_bytes(pickle.dumps(Trap()))
    resign(bundle)
    with pytest.raises(Exception, match=r"(?i)header"):
        open_bundle(bundle).estimator("toy")
    assert not (tmp_path / "sprung").exists()


def test_publish_refuses_what_does_not_belong_together(made, tmp_path):
    runs = [made / "fit-toy", made / "fit-toy-fast"]
    with pytest.raises(UserError, match="exists already"):
        publish(runs, made / "bundle")
    with pytest.raises(UserError, match="toy is there already"):
        publish([runs[0], shutil.copytree(runs[0], tmp_path / "again")], tmp_path / "out")
    with pytest.raises(UserError, match="at least one estimator"):
        publish([made / "fit-which"], tmp_path / "out")
    with pytest.raises(UserError, match="no finished fit"):
        publish([made / "toy"], tmp_path / "out")
    harmed = shutil.copytree(runs[1], tmp_path / "harmed")
    (harmed / "estimator.safetensors").write_bytes(b"")
    with pytest.raises(UserError, match="weights are not those"):
        publish([harmed], tmp_path / "out")
    assert not (tmp_path / "out").exists()

"""Options that do not fit together are one line, before any work; configs alone suffice to sample exactly."""

from pathlib import Path

import pytest

from emu.errors import UserError
from emu.report.answer import answer
from emu.report.progress import Meter
from emu.report.toolbox import FromConfigs

BUNDLE = Path("bundle")


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ({"bundle": None}, "give --bundle; or --finish exact"),
        ({"bundle": None, "finish": "exact"}, "needs --campaign and --families"),
        ({"bundle": None, "finish": "exact", "campaign": "realistic"}, "needs --campaign and --families"),
        ({"bundle": BUNDLE, "campaign": "realistic"}, "a bundle holds its own campaign"),
        ({"bundle": BUNDLE, "finish": "nearly"}, "--finish is 'nearly'; one of none, exact"),
        ({"bundle": BUNDLE, "raymap": "guessed"}, "--raymap is 'guessed'; one of exact"),
        ({"bundle": BUNDLE, "draws": 0}, "--draws is 0"),
        ({"bundle": BUNDLE, "workers": 0}, "--workers is 0"),
        ({"bundle": BUNDLE}, "bundle"),  # there is none
    ],
)
def test_options_that_do_not_fit(tmp_path: Path, options: dict, said: str) -> None:
    with pytest.raises(UserError, match=said):
        answer([tmp_path], out=tmp_path / "out", **options)
    assert not (tmp_path / "out").exists()


def test_configs_open_without_a_bundle() -> None:
    recipe = FromConfigs("realistic", ("midplane-frozen", "midplane-turning"))
    toolbox = recipe.open()
    assert toolbox.chosen(None) == ("midplane-frozen", "midplane-turning")
    assert toolbox.estimator is None
    units = {parameter.name: parameter.unit for parameter in toolbox.parameters("midplane-frozen")}
    assert units["brightness"] == toolbox.campaign.flux_unit
    assert {len(recipe.origin()["campaign"]["sha256"])} == {64}


def test_a_family_named_twice_is_one_line() -> None:
    with pytest.raises(UserError, match="named twice"):
        FromConfigs("realistic", ("midplane-frozen", "midplane-frozen")).open()


def test_progress_goes_to_stderr(capsys: pytest.CaptureFixture[str]) -> None:
    with Meter("posteriors", 3) as meter:
        meter.advance(1)
        meter.advance(2)
    printed = capsys.readouterr()
    assert printed.out == ""
    assert "posteriors: 3 of 3" in printed.err

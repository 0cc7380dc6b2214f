"""What the guide shows can be read as it stands there."""

import re
from pathlib import Path

import numpy as np
import pytest

from emu.observe.campaign import campaign, parse_campaign
from emu.observe.flare import read_flares
from emu.observe.rows import KINDS

GUIDE = Path(__file__).parents[2] / "emu" / "guide"


def blocks(page: str, language: str) -> list[str]:
    return re.findall(rf"```{language}\n(.*?)```", (GUIDE / page).read_text(encoding="utf-8"), re.DOTALL)


def test_the_table_of_the_guide(tmp_path: Path) -> None:
    (example,) = blocks("flare-tables.md", "ecsv")
    (tmp_path / "flares.ecsv").write_text(example)
    first, second = read_flares(tmp_path / "flares.ecsv")
    assert (first.name, second.name) == ("first", "second")
    np.testing.assert_allclose(first.seconds, [-1200.0, -1080.0, -840.0, 600.0])
    np.testing.assert_allclose(second.seconds, [-450.0, 450.0, 450.0])
    assert first.target is not None
    assert first.target.mass == 5.0e6


@pytest.mark.parametrize(
    ("place", "kinds", "values"),
    [
        (0, ["flux", "q", "u", "flux"], [0.91, 0.12, -0.08, 1.34]),
        (
            1,
            ["flux", "flux", "q", "u", "flux", "q", "u"],
            # p cos 2χ and p sin 2χ of (20 %, 35°) and (19 %, 51°)
            [0.91, 1.02, 0.0684040, 0.1879385, 1.34, -0.0395032, 0.1858481],
        ),
    ],
)
def test_the_column_maps_of_the_guide(tmp_path: Path, place: int, kinds: list[str], values: list[float]) -> None:
    (tmp_path / "f.csv").write_text(blocks("flare-tables.md", "csv")[place])
    (tmp_path / "map.toml").write_text(blocks("flare-tables.md", "toml")[place])
    (flare,) = read_flares(tmp_path / "f.csv", tmp_path / "map.toml")
    assert [KINDS[code] for code in flare.kind] == kinds
    np.testing.assert_allclose(flare.value, values, rtol=1e-5)


def test_the_campaign_of_the_guide() -> None:
    (example,) = blocks("campaigns.md", "toml")
    shown, real = parse_campaign(example, "the guide"), campaign("realistic")
    assert shown.window == real.window
    for one, other in zip(shown.streams, real.streams, strict=True):
        assert (one.kinds, one.cadence, one.error, one.share) == (other.kinds, other.cadence, other.error, other.share)

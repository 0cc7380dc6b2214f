"""`emu inspect`, `emu simulate` and `emu-train campaign-from`: what they print, write and return."""

from pathlib import Path

import numpy as np
import pytest
from astropy.table import Table

from emu.errors import UserError
from emu.observe.campaign import campaign
from emu.observe.flare import read_flares
from emu.problem import problem
from emu.report.inspect import flare_figure, inspect
from emu.report.simulate import invent, simulate
from training.campaign_from import write_campaign

FAMILY = "midplane-frozen"


@pytest.fixture(scope="module")
def season(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("season")
    assert simulate(FAMILY, "realistic", folder / "flares.ecsv", count=3, seed=5) == 0
    return folder / "flares.ecsv"


def test_invented_flares_read_back_with_their_truth(season: Path) -> None:
    flares = read_flares(season)
    meta = Table.read(season, format="ascii.ecsv").meta
    assert [flare.name for flare in flares] == [f"{FAMILY}-5-00{n}" for n in (1, 2, 3)]
    assert set(meta["truth"]) == {flare.name for flare in flares}
    assert set(meta["truth"][flares[0].name]) == set(problem(FAMILY, "realistic").prior.names)
    assert "seed 5; 0 further draws could not be computed" in meta["origin"]
    for flare in flares:
        own = campaign("realistic")
        assert flare.target == own.target
        assert own.outside(flare.rows(own.target, own.flux_unit)) == ()


def test_invented_flares_scatter_about_their_truth_as_their_errors_say() -> None:
    seen = problem(FAMILY, "realistic")
    invented = invent(seen, 40, seed=6)
    total, count = 0.0, 0
    for flare in invented.flares:
        theta = np.array([list(invented.truth[flare.name].values())])
        rows = flare.rows(seen.campaign.target, seen.campaign.flux_unit)
        mean, failures = seen.mean(theta, rows)
        assert failures[0] == 0
        total += float(np.sum((rows.value - mean[0]) ** 2 / seen.variance(theta, rows)[0]))
        count += len(rows)
    # χ² of so many Gaussian residuals: within four of its standard deviations sqrt(2 N).
    assert abs(total - count) < 4.0 * np.sqrt(2.0 * count)


def test_the_seed_decides(tmp_path: Path, season: Path) -> None:
    simulate(FAMILY, "realistic", tmp_path / "again.ecsv", count=3, seed=5)
    assert (tmp_path / "again.ecsv").read_text() == season.read_text()
    simulate(FAMILY, "realistic", tmp_path / "folder", count=2, seed=7)
    assert len(list((tmp_path / "folder").glob("*.ecsv"))) == 2
    with pytest.raises(UserError, match=r"give a name in \.ecsv, or a folder"):
        simulate(FAMILY, "realistic", tmp_path / "flares.fits")


def test_inspect_shows_a_table_and_draws(season: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert inspect([season], campaign="realistic", out=tmp_path / "figures") == 0
    text, complaints = capsys.readouterr()
    assert complaints == ""
    assert text.count("inside campaign realistic") == 3
    first = read_flares(season)[0]
    line = next(line.split() for line in text.splitlines() if line.split()[:1] == ["flux"])
    flux = first.value[first.kind == 0]
    assert line[:2] == ["flux", str(flux.size)]
    assert f"{flux.min():.3g} to {flux.max():.3g}" in " ".join(line)
    pictures = sorted((tmp_path / "figures").iterdir())
    assert len(pictures) == 3
    assert all(picture.read_bytes().startswith(b"\x89PNG") for picture in pictures)


def test_the_figure_shows_every_row(season: Path) -> None:
    flare = read_flares(season)[0]
    panels = flare_figure(flare).axes
    shown = [container.lines[0].get_xydata() for panel in panels for container in panel.containers]
    np.testing.assert_allclose(np.sort(np.concatenate(shown)[:, 0]), np.sort(flare.seconds / 60.0), rtol=1e-12)


def test_inspect_goes_on_after_a_bad_file(season: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    bad = tmp_path / "bad.csv"
    bad.write_text("nonsense\nmore\n")
    assert inspect([bad, season], out=tmp_path / "one.png") == 3
    text, complaints = capsys.readouterr()
    assert text.count("GM/c^3 of 'invented target'") == 3
    assert complaints.startswith(f"refused: {bad}: ")
    assert len(list(tmp_path.glob("one-*.png"))) == 3
    with pytest.raises(UserError, match="none of 1 flares or files could be read"):
        inspect([bad])
    with pytest.raises(UserError, match=r"one\.pdf: figures are PNG"):
        inspect([season], out=tmp_path / "one.pdf")


def test_inspect_says_what_lies_outside_a_campaign(season: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert inspect([season], campaign="demo") == 3
    assert f"refused: {season}, flare {FAMILY}-5-001: outside campaign demo (as if " in capsys.readouterr().err


def test_a_target_replaces_what_the_tables_name(
    season: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "heavy.toml").write_text('name = "heavy"\nmass = 1e7\ndistance = 9.0\n')
    assert inspect([season], target=str(tmp_path / "heavy.toml")) == 0
    assert capsys.readouterr().out.count("GM/c^3 of 'heavy'") == 3
    (tmp_path / "light.toml").write_text('name = "light"\nmass = 1e3\ndistance = 9.0\n')
    assert inspect([season], campaign="realistic", target=str(tmp_path / "light.toml")) == 3
    assert capsys.readouterr().err.count("out of proportion for target 'light'") == 3


def test_campaign_from_tables(season: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    made = tmp_path / "mine.toml"
    assert write_campaign([season], made) == 0
    mine = campaign(str(made))
    assert (mine.name, mine.target) == ("mine", campaign("realistic").target)
    assert inspect([season], campaign=str(made)) == 0
    assert capsys.readouterr().out.count("inside campaign mine") == 3
    with pytest.raises(UserError, match="exists already"):
        write_campaign([season], made)
    with pytest.raises(UserError, match="a campaign is TOML"):
        write_campaign([season], tmp_path / "mine.txt")
    plain = tmp_path / "plain.csv"
    plain.write_text("time,what,value,error\n0,flux,1,.1\n2,flux,1,.2\n4,flux,1,.1\n6,flux,1,.1\n8,flux,1,.1\n")
    (tmp_path / "map.toml").write_text('[units]\ntime = "min"\nflux = "Jy"\n')
    with pytest.raises(UserError, match="no target"):
        write_campaign([plain], tmp_path / "other.toml", columns=tmp_path / "map.toml")
    bad = tmp_path / "bad.csv"
    bad.write_text("nonsense\nmore\n")
    assert write_campaign([bad, season], tmp_path / "third.toml") == 3

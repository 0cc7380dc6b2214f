"""A campaign made from flares holds these flares, and finds the season they were drawn from."""

from dataclasses import replace

import numpy as np
import pytest

from emu.configs import config_names
from emu.errors import UserError
from emu.observe.cadence import measure_cadence, outward
from emu.observe.campaign import Campaign, campaign, parse_campaign
from emu.observe.campaign_from import campaign_from
from emu.observe.record import Flare
from emu.observe.rows import KINDS
from emu.units import Target

TARGET = Target("another", 4.0e6, 8.0)


def season(of: Campaign, count: int, seed: int = 3) -> list[Flare]:
    batch = of.draw(count, np.random.default_rng(seed))
    return [Flare.from_rows(batch.rows(n), of.target, f"flare {n}", of.flux_unit) for n in range(count)]


@pytest.mark.parametrize("name", config_names("campaigns"))
@pytest.mark.parametrize("count", [1, 2, 5, 60])
@pytest.mark.parametrize("seed", [3, 4])
def test_every_flare_lies_inside(name: str, count: int, seed: int) -> None:
    flares = season(campaign(name), count, seed)
    for target in (campaign(name).target, TARGET):
        made = parse_campaign(campaign_from(flares, target), "made")
        assert [reason for flare in flares for reason in made.outside(flare.rows(target, "mJy"))] == []
        drawn = made.draw(50, np.random.default_rng(1))
        assert [reason for n in range(50) for reason in made.outside(drawn.rows(n))] == []


def test_the_season_is_found_again() -> None:
    truth = campaign("realistic")
    made = parse_campaign(campaign_from(season(truth, 300), truth.target, "again"), "made")
    assert (made.name, made.flux_unit, made.target) == ("again", "mJy", truth.target)
    assert made.window == pytest.approx(truth.window, abs=3.0)
    for found, true in zip(made.streams, truth.streams, strict=True):
        assert (found.kinds, found.alternate) == (true.kinds, true.alternate)
        assert found.error == pytest.approx(true.error, rel=0.05)
        assert found.cadence[0] == pytest.approx(true.cadence[0], rel=0.1)
        # A gap just after a slow exposure cannot be told from a slower one.
        assert true.cadence[1] * 0.95 < found.cadence[1] < true.cadence[1] * 1.65
        assert found.share == pytest.approx(true.share, abs=0.12)
        assert 0.1 < found.error_scatter < 0.25
    assert made.season.gaps is not None
    assert made.season.gaps.count[1] >= 2


def test_what_comes_together_in_turn_or_on_its_own() -> None:
    time = np.arange(0.0, 3000.0, 120.0) - 1440.0

    def stream(kind: str, seconds: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        return seconds, np.full(seconds.size, KINDS.index(kind), dtype=np.int8)

    def kinds(*streams: tuple[np.ndarray, np.ndarray]) -> list[tuple[tuple[str, ...], bool]]:
        seconds, kind = (np.concatenate(column) for column in zip(*streams, strict=True))
        order = np.argsort(seconds, kind="stable")
        one = np.ones(seconds.size)
        flare = Flare("x", seconds[order], kind[order], one, 0.1 * one, "Jy", "0 s", "x.ecsv")
        made = parse_campaign(campaign_from([flare], TARGET), "made")
        return [(found.kinds, found.alternate) for found in made.streams]

    assert kinds(stream("q", time), stream("u", time)) == [(("q", "u"), False)]
    assert kinds(stream("q", time[::2]), stream("u", time[1::2])) == [(("q", "u"), True)]
    assert kinds(stream("q", time), stream("u", time[:12] + 50.0)) == [(("q",), False), (("u",), False)]
    assert kinds(stream("Q", time)) == [(("Q",), False)]


def test_refusals() -> None:
    with pytest.raises(UserError, match="no flares"):
        campaign_from([], TARGET)
    first, second = season(campaign("demo"), 2)
    only = [replace_kinds(first, ("flux",)), replace_kinds(second, ("q", "u"))]
    with pytest.raises(UserError, match="no kind of row is in every flare"):
        campaign_from(only, TARGET)
    off = replace(first, seconds=first.seconds + 300.0, where="off.ecsv")
    with pytest.raises(UserError, match=r"off.ecsv: fits no campaign with the others \(t_ref is 5.0 min"):
        campaign_from([off, second], campaign("demo").target)


def replace_kinds(flare: Flare, kinds: tuple[str, ...]) -> Flare:
    mine = np.isin(flare.kind, [KINDS.index(kind) for kind in kinds])
    columns = {name: getattr(flare, name)[mine] for name in ("seconds", "kind", "value", "error")}
    return replace(flare, **columns)


def test_cadence() -> None:
    cadence = measure_cadence([np.array([0.0, 2.0, 4.0, 6.0, 16.0, 18.0]), np.arange(0.0, 15.0, 3.0)])
    assert cadence is not None
    assert (cadence.low, cadence.high, cadence.most_gaps, cadence.unsteady) == (2.0, 3.0, 1, 0.0)
    np.testing.assert_array_equal(cadence.gaps, [8.0])  # 10 minutes, of which 2 are as usual
    assert measure_cadence([np.array([1.0])]) is None


@pytest.mark.parametrize("low", [1.0, 0.0123, 7.77e-5, 123.4])
def test_ranges_only_grow(low: float) -> None:
    down, up = outward(low, 3.3 * low)
    assert 0.9 * low < down <= low * (1 + 1e-12)
    assert 3.3 * low * (1 - 1e-12) <= up < 3.7 * low
